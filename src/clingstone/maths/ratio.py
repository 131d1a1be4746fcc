"""Tails of ratios of quadratic forms T = e'Se / e'e under spherical errors: one engine.

P(T > t) = P(z'(MSM − tM)z > 0), z ~ N(0, I): everything depends on the spectrum of MSM, never on y
(Durbin and Watson 1950, 1951; Imhof 1961; Cliff and Ord 1981; Tiefelsdorf 2000). Exact for normal
errors, and for any error law that is spherical.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from clingstone.maths import routes
from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.maths.positive import one_positive, t_tail
from clingstone.maths.spectra import Eigen, Modes
from clingstone.maths.surrogate import surrogate
from clingstone.maths.tails import (
    ALWAYS,
    CONSTANT,
    NOTHING_ABOVE,
    NOTHING_BELOW,
    UNKNOWN,
    Both,
    Lattice,
    Tails,
    both,
    collect,
    nearly,
)
from clingstone.maths.traces import covariance, covariances, cross_traces, means, projected, residual_df

__all__ = [
    "Law",
    "Tails",
    "covariance",
    "covariances",
    "cross_traces",
    "eigen_tails",
    "means",
    "one_positive",
    "t_tail",
]

FEW = 24  # values up to which each is integrated on its own, also where speed is asked


@dataclass(frozen=True, eq=False)
class Law:
    """The null law of T = e'Se / e'e, e = My, y spherical.

    swept : cells whose means are taken out of y and X as well (M then projects off the cell
        indicators too), or None. The basis need not be free of what the cells span.

    Everything that takes time is kept with the basis, so a new Law of the same form costs nothing.
    Raises ValueError where the design leaves no residual degrees of freedom.
    """

    form: Form
    basis: Basis
    swept: Partition | None = None

    def __post_init__(self) -> None:
        if self.m < 1:
            raise ValueError("the design leaves no residual degrees of freedom")

    @property
    def m(self) -> int:
        """Dimension of what is left over."""
        return residual_df(self.basis, self.swept)

    @property
    def traces(self) -> tuple[float, ...]:
        """τ₁ … τ₄ = tr (MSM)ʳ."""
        return projected(self.basis, self.form, self.swept, 4)

    @property
    def mean(self) -> float:
        """τ₁/m."""
        return projected(self.basis, self.form, self.swept, 2)[0] / self.m

    @property
    def variance(self) -> float:
        """2(τ₂ − τ₁²/m)/(m(m + 2))."""
        first, second = projected(self.basis, self.form, self.swept, 2)
        return max(0.0, 2.0 * (second - first**2 / self.m) / (self.m * (self.m + 2.0)))

    @property
    def constant(self) -> bool:
        """True where T cannot vary under this design."""
        first, second = projected(self.basis, self.form, self.swept, 2)
        # tr S² is what the projected traces are differences of, and so the scale of their rounding.
        return second - first**2 / self.m <= CONSTANT * max(abs(second), self.form.trace(2))

    @property
    def method(self) -> str:
        """How tails of this law are got."""
        return routes.WORDS["constant" if self.constant else routes.name(self.form, self.swept)]

    @property
    def range(self) -> tuple[float, float]:
        """The smallest and the largest value that T can take: the extreme eigenvalues of MSM.

        For large sparse forms by Lanczos, each end moved outwards by what its convergence leaves open.
        """
        return (self.mean, self.mean) if self.constant else _range(self.basis, self.form, self.swept)

    def tails(self, values: npt.ArrayLike, depth: str = "exact") -> Tails:
        """Both tails at (B,) values.

        depth : "exact" integrates at each value; "between" interpolates many values between exact ones
            where the spectrum is known; "fast" does so always, and for sparse forms beyond the reach of
            eigenvalues uses the first four moments.
        """
        t = np.atleast_1d(np.asarray(values, dtype=float))
        way = routes.name(self.form, self.swept)
        fast = depth == "fast"
        method = routes.WORDS["traces"] if fast and way == "factored" else self.method
        each = depth == "exact" or (not fast and way in ("factored", "traces"))
        if each or len(t) <= FEW or self.constant:
            return collect([self._both(float(v), fast) for v in t], method)
        if way not in ("factored", "traces"):
            method = routes.WORDS["interpolated"]
        return self._lattice().tails(t, method)

    def quantile(self, probability: float) -> float:
        """t with P(T < t) = probability."""
        if not 0.0 < probability < 1.0:
            raise ValueError("a probability lies strictly between 0 and 1")
        if self.constant:
            return self.mean
        low, high = self.range
        inset = 1e-9 * (high - low)
        goal = float(special.ndtri(probability))

        def gap(t: float) -> float:
            return float(np.clip(self._both(t, False).score, -1e3, 1e3)) - goal

        return float(optimize.brentq(gap, low + inset, high - inset, xtol=1e-12 * (high - low), rtol=1e-14))

    def _both(self, t: float, fast: bool) -> Both:
        if np.isnan(t):
            return UNKNOWN
        if self.constant:
            near = abs(t - self.mean) <= 1e-6 * max(abs(self.form.low), abs(self.form.high))
            return ALWAYS if near else NOTHING_ABOVE if t > self.mean else NOTHING_BELOW
        if t >= self.form.high:
            return NOTHING_ABOVE
        if t <= self.form.low:
            return NOTHING_BELOW
        way = routes.name(self.form, self.swept)
        first, second = projected(self.basis, self.form, self.swept, 2)
        if way == "traces" or (fast and way == "factored"):
            summary = surrogate(self.basis, self.form, self.swept, t >= self.mean)
            return both(summary, t, (first, second), lambda: (summary.low, summary.high))
        long = routes.polynomials(self.basis, self.form, self.swept, t)
        spectrum = long or routes.spectrum(self.basis, self.form, self.swept)
        start = 0.0 if self.form.chains is None else routes.saddle(self.form.chains, t)
        if way == "factored":
            start = nearly(surrogate(self.basis, self.form, self.swept, t >= self.mean), t, (first, second))
        found = both(spectrum, t, (first, second), lambda: self.range, start)
        if found.accuracy > 1e-8 and way == "modes" and self.form.order <= routes.DENSE:
            # Near an end of the attainable range the spectrum of S leaves the contour too little room.
            sharp = routes.eigen(self.basis, self.form, self.swept)
            return both(sharp, t, (first, second), lambda: (sharp.low, sharp.high))
        return found

    def _lattice(self) -> Lattice:
        low, high = self.form.low, self.form.high
        if routes.name(self.form, self.swept) in ("eigen", "modes"):
            low, high = self.range
        mean, sd = self.mean, float(np.sqrt(self.variance))

        def exact(k: int, t: float) -> Both:
            return _at_node(self.basis, self.form, self.swept, k, t)

        return Lattice(mean, sd, low, high, exact)


@once
def _at_node(basis: Basis, form: Form, swept: Partition | None, k: int, t: float) -> Both:
    return Law(form, basis, swept)._both(t, True)


@once
def _range(basis: Basis, form: Form, swept: Partition | None) -> tuple[float, float]:
    way = routes.name(form, swept)
    if way in ("eigen", "modes"):
        spectrum = routes.spectrum(basis, form, swept)
        if isinstance(spectrum, Modes):
            return _ends(spectrum)
        return spectrum.low, spectrum.high
    return routes.extremes(basis, form, swept)


def _ends(modes: Modes) -> tuple[float, float]:
    """Extreme eigenvalues of MSM by bisection on the number of eigenvalues below a value."""
    out = []
    for want in (1, round(modes.m)):
        low, high = modes.low, modes.high
        for _ in range(60):
            middle = 0.5 * (low + high)
            if not low < middle < high:
                break
            low, high = (low, middle) if modes.below(middle) >= want else (middle, high)
        out.append(low if want == 1 else high)
    return out[0], out[1]


def eigen_tails(
    eigenvalues: Array,
    values: npt.ArrayLike,
    counts: Array | None = None,
    method: str = routes.WORDS["eigen"],
) -> Tails:
    """Tails of T = Σ λ_i z_i² / Σ z_i² for known λ with multiplicities.

    eigenvalues (U,), counts (U,) or None for ones; values (B,). Used by group score tests and wherever
    the spectrum is at hand. F identity: λ = 1 (r times), 0 (m − r times) is the law of SSB/SST.
    """
    spectrum = Eigen(
        np.asarray(eigenvalues, dtype=float),
        np.ones(len(eigenvalues)) if counts is None else np.asarray(counts, dtype=float),
    )
    first, second = float(spectrum.values @ spectrum.counts), float(spectrum.values**2 @ spectrum.counts)
    scale = max(abs(spectrum.low), abs(spectrum.high))
    ends = (spectrum.low, spectrum.high)

    def one(t: float) -> Both:
        if np.isnan(t):
            return UNKNOWN
        if ends[1] - ends[0] <= CONSTANT * scale:
            near = abs(t - ends[0]) <= 1e-6 * scale
            return ALWAYS if near else NOTHING_ABOVE if t > ends[0] else NOTHING_BELOW
        return both(spectrum, t, (first, second), lambda: ends)

    return collect([one(float(t)) for t in np.atleast_1d(np.asarray(values, dtype=float))], method)
