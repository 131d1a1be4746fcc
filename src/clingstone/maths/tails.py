"""From a spectrum to both tails of a ratio at one value, and to many values by interpolation."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy import special

from clingstone.maths.contour import Complex, integrate, saddle
from clingstone.maths.once import Array
from clingstone.maths.spectra import Factored, Spectrum, edge

# A spread of eigenvalues below this, relative to their size, is rounding: T then cannot vary.
CONSTANT = 1e-13
POINTS = 8  # of the local interpolation polynomial
FAR = 38.0  # normal score whose tail is 1e-315


@dataclass(frozen=True, eq=False)
class Tails:
    """P(T < t) and P(T > t) for (B,) values t, each with relative accuracy, and how they were got.

    accuracy : (B,) estimated relative error of the smaller tail (of the numerical work, not of an
        approximation that ``method`` names); 1 where only its order is known, which happens only where the
        tail is below 1e-280: its logarithm is then an upper bound, or extrapolated.

    Where T cannot vary and equals t, both tails are 1. A value that is not a number gives tails that are
    not a number.
    """

    lower: Array
    upper: Array
    log_lower: Array
    log_upper: Array
    method: str
    accuracy: Array = field(default_factory=lambda: np.zeros(0))

    @property
    def two_sided(self) -> Array:
        """Twice the smaller tail, at most 1."""
        return np.asarray(np.minimum(1.0, 2.0 * np.minimum(self.lower, self.upper)))

    @property
    def log_two_sided(self) -> Array:
        return np.asarray(np.minimum(0.0, np.log(2.0) + np.minimum(self.log_lower, self.log_upper)))


@dataclass(frozen=True)
class Both:
    """Logarithms of both tails at one value."""

    log_lower: float
    log_upper: float
    accuracy: float = 0.0

    @property
    def score(self) -> float:
        """Φ⁻¹ of the lower tail, accurate in both."""
        if self.log_lower <= self.log_upper:
            return float(special.ndtri_exp(self.log_lower))
        return -float(special.ndtri_exp(self.log_upper))


NOTHING_BELOW = Both(-np.inf, 0.0)
NOTHING_ABOVE = Both(0.0, -np.inf)
ALWAYS = Both(0.0, 0.0)
UNKNOWN = Both(np.nan, np.nan, np.nan)


def collect(each: Sequence[Both], method: str) -> Tails:
    lower = np.array([b.log_lower for b in each])
    upper = np.array([b.log_upper for b in each])
    accuracy = np.array([b.accuracy for b in each])
    return Tails(np.exp(lower), np.exp(upper), lower, upper, method, accuracy)


def both(
    spectrum: Spectrum,
    t: float,
    moments: tuple[float, float],
    attainable: Callable[[], tuple[float, float]],
    start: float = 0.0,
) -> Both:
    """Both tails at one value.

    moments : τ₁ and τ₂ of the spectrum. attainable : asked for the extreme eigenvalues of MSM only where
    the bounds at hand leave doubt. start : a guess of the saddle point, taken if it lies further out.
    """
    upper = t >= moments[0] / spectrum.m
    if (t >= spectrum.high) if upper else (t <= spectrum.low):
        return NOTHING_ABOVE if upper else NOTHING_BELOW

    def log_det(z: Complex) -> Complex:
        return spectrum.log_det(z, t)

    slow = isinstance(spectrum, Factored)
    at = saddle(
        log_det,
        max(_guess(spectrum.m, t, moments), abs(start)),
        edge(spectrum, t, upper),
        tolerance=0.3 if slow else 0.02,
        most=10 if slow else 60,
    )
    if not at.found and _beyond(t, attainable(), upper):
        return NOTHING_ABOVE if upper else NOTHING_BELOW
    tail = integrate(log_det, at, tolerance=1e-9 if slow else 1e-13, deep=1e-6 if slow else None)
    if tail.accuracy > 1e-6 and at.found and _beyond(t, attainable(), upper):
        return NOTHING_ABOVE if upper else NOTHING_BELOW
    # Where c had to stay far from the saddle, nothing may be left of the integral; e^K(c) still bounds it.
    small = min(tail.log_tail if tail.accuracy < 1e-2 else tail.log_bound, 0.0)
    large = float(np.log1p(-np.exp(small))) if small > -700.0 else 0.0
    return Both(large, small, tail.accuracy) if upper else Both(small, large, tail.accuracy)


def nearly(spectrum: Spectrum, t: float, moments: tuple[float, float]) -> float:
    """The saddle point of a small spectrum, where the search of a larger one with the same traces starts."""
    upper = t >= moments[0] / spectrum.m
    guess = _guess(spectrum.m, t, moments)
    return abs(saddle(lambda z: spectrum.log_det(z, t), guess, edge(spectrum, t, upper)).c)


def _guess(m: float, t: float, moments: tuple[float, float]) -> float:
    """The saddle point by the first two cumulants of Q_t."""
    kappa1 = moments[0] - m * t
    kappa2 = 2.0 * max(moments[1] - 2.0 * t * moments[0] + m * t**2, 1e-300)
    return float((abs(kappa1) + np.sqrt(kappa1**2 + 4.0 * kappa2)) / (2.0 * kappa2))


def _beyond(t: float, ends: tuple[float, float], upper: bool) -> bool:
    return t >= ends[1] if upper else t <= ends[0]


@dataclass(frozen=True, eq=False)
class Lattice:
    """Many values by interpolation of the normal score of T between exact values.

    The score Φ⁻¹(P(T < t)) is a smooth, nearly straight function of u = ln((t − low)/(high − t)).
    Exact values stand one standard deviation apart in u; each asked value is read from a polynomial
    through the 8 around it.

    exact : the exact tails at node k and its t (kept by the caller). mean, sd, low, high : of T.
    """

    mean: float
    sd: float
    low: float
    high: float
    exact: Callable[[int, float], Both]

    @property
    def step(self) -> float:
        spread = (self.mean - self.low) * (self.high - self.mean) / (self.high - self.low)
        return min(self.sd / spread, 0.25)

    def node(self, k: int) -> float:
        """t of node k."""
        u = np.log((self.mean - self.low) / (self.high - self.mean)) + k * self.step
        return float(self.low + (self.high - self.low) * special.expit(u))

    def _scores(self, nodes: npt.NDArray[np.int64]) -> Array:
        """Scores at nodes of one side, from the middle outwards; a straight line in u beyond FAR."""
        out = np.empty(len(nodes))
        for i, k in enumerate(nodes):
            if i > 1 and min(abs(out[i - 1]), abs(out[i - 2])) > FAR:
                slope = (out[i - 1] - out[i - 2]) / (nodes[i - 1] - nodes[i - 2])
                out[i:] = out[i - 1] + slope * (nodes[i:] - nodes[i - 1])
                break
            score = self.exact(int(k), self.node(int(k))).score
            out[i] = score if np.isfinite(score) else np.sign(score) * 1e3
        return out

    def tails(self, values: Array, method: str) -> Tails:
        inside = (values > self.low) & (values < self.high)
        t = np.where(inside, values, self.mean)
        u = np.log((t - self.low) / (self.high - t)) - np.log(
            (self.mean - self.low) / (self.high - self.mean)
        )
        place = u / self.step
        first = np.floor(place).astype(int) - POINTS // 2 + 1
        needed = np.unique((first[:, None] + np.arange(POINTS)).ravel())
        base = int(needed.min())
        table = np.full(int(needed.max()) - base + 1, np.nan)
        for side in (needed[needed >= 0], needed[needed < 0][::-1]):
            table[side - base] = self._scores(side)
        scores = table[first[:, None] - base + np.arange(POINTS)]
        score = np.einsum("ij,ij->i", _lagrange(place - first), scores)
        score = np.where(values >= self.high, np.inf, np.where(values <= self.low, -np.inf, score))
        score = np.where(np.isnan(values), np.nan, score)
        return Tails(
            special.ndtr(score),
            special.ndtr(-score),
            special.log_ndtr(score),
            special.log_ndtr(-score),
            method,
            np.where(np.abs(score) < FAR, 1e-5, 1.0),
        )


def _lagrange(x: Array) -> Array:
    """(B, POINTS) weights of the values at 0, 1, …, for interpolation at x."""
    nodes = np.arange(POINTS, dtype=float)
    out = np.empty((len(x), POINTS))
    for j in range(POINTS):
        others = np.delete(nodes, j)
        out[:, j] = np.prod((x[:, None] - others) / (j - others), axis=1)
    return out
