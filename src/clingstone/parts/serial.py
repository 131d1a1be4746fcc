"""Order in time from sums over neighbours: Durbin–Watson, Ljung–Box, AR(1) errors by REML."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy import special

from clingstone.covariance.components import Parameter
from clingstone.covariance.fits import Fits
from clingstone.covariance.pieces import RHO_HIGH
from clingstone.covariance.stacked import Forms
from clingstone.design.parted import SAMPLE, PartedDesign, Sums
from clingstone.display import significant
from clingstone.maths import curvature, reml
from clingstone.maths.basis import Gram
from clingstone.maths.markov import Links
from clingstone.maths.once import Array
from clingstone.maths.search import minimise
from clingstone.needs import Family, NotSupported
from clingstone.parts.found import Sized
from clingstone.remedies.columns import Column, FittedReady
from clingstone.remedies.gls import Gls
from clingstone.remedies.linear import reported
from clingstone.remedies.refit import read
from clingstone.remedies.remedy import Account, Estimates, Refit


def durbin_watson(fits: Fits, design: PartedDesign, time: str) -> Sized:
    """Σ(e_t − e_{t−1})²/e'e over neighbours one step apart, pooled over series (Bhargava et al. 1982).

    p, two-sided, from the normal with the exact mean and variance that Σe_t e_{t−1}/e'e has under
    independent normal errors: with m residual df, tr MS/m and 2(m tr(MS)² − (tr MS)²)/(m²(m + 2)).
    """
    held, m = design.whole, design.m
    one = held.links.get(1.0)
    if one is None:
        raise NotSupported("no two rows of a series are one step apart", SAMPLE)
    ee = float(fits.response.ss[0])
    QSQ = one.pairs[:-1, :-1] / 2
    first = -float(np.trace(QSQ))  # tr S = 0
    second = one.count / 2 - 2 * float(np.trace(held.twice)) + float(np.sum(QSQ**2))
    mean, variance = first / m, 2 * (m * second - first**2) / (m**2 * (m + 2))
    r = float(one.pairs[-1, -1]) / 2 / ee
    z = (r - mean) / np.sqrt(variance)
    return Sized(
        "durbin-watson",
        f"neighbours in {time}",
        float(one.ends[-1, -1] - one.pairs[-1, -1]) / ee,
        None,
        None,
        float(2 * special.ndtr(-abs(z))),
        "normal, exact mean and variance",
        r - mean,
        float("nan"),
        float("nan"),
        "correlation of neighbouring residuals beyond its mean",
    )


def ljung_box(fits: Fits, design: PartedDesign, time: str) -> Sized:
    """(1 + 2/n) n² Σ r_k²/N_k over the lags that have pairs, chi-squared."""
    held, n = design.whole, design.n
    have = held.counts > 2
    r = held.products[have] / float(fits.response.ss[0])
    if not have.any():
        raise NotSupported("no series is long enough for a lag", SAMPLE)
    value, K = (1 + 2 / n) * n**2 * float(np.sum(r**2 / held.counts[have])), int(have.sum())
    scaled = r * n / held.counts[have]
    largest = float(np.clip(scaled[np.argmax(np.abs(scaled))], -1, 1))
    name = "largest correlation over the lags"
    nan = float("nan")
    p = float(special.chdtrc(K, value))
    return Sized(
        "ljung-box", f"{K} lags of {time}", value, float(K), None, p, "chi-squared", largest, nan, nan, name
    )


class _Lengths(Links):
    """Links of which only the lengths and how often each occurs are known."""

    def __init__(self, held: Sums) -> None:
        super().__init__(np.zeros(0))
        lengths = np.array(list(held.links)), np.array([one.count for one in held.links.values()])
        object.__setattr__(self, "_lengths", lengths)

    @property
    def lengths(self) -> Any:
        return self._lengths  # type: ignore[attr-defined]


@dataclass(frozen=True)
class AlongTime(Gls):
    """The remedy ``ar1`` where the design holds sums over neighbours and no series."""

    def covering(self, fits: Fits) -> frozenset[Family]:
        return frozenset({"serial"})


@dataclass(frozen=True, eq=False)
class Ar1(FittedReady):
    """AR(1) errors: R⁻¹ is a weighted sum of forms, and the partitions added up the Gram of each."""

    @classmethod
    def of(cls, design: PartedDesign) -> Ar1:
        """Raises NotSupported where the steps between neighbours have too many lengths."""
        if not _Lengths(design.whole).few:
            count = len(design.whole.links)
            raise NotSupported(f"neighbours of a series lie {count} different numbers of steps apart", SAMPLE)
        return cls(design, *reported(design), "Satterthwaite")

    def gram(self, fits: Fits, theta: Array) -> Gram:
        """[Q, e]'R⁻¹[Q, e] at atanh ρ."""
        assert isinstance(self.design, PartedDesign)
        held, p = self.design.whole, self.design.p
        both = [S for one in held.links.values() for S in (one.ends, one.pairs)]
        forms = Forms(
            np.stack([np.eye(p).ravel(), *(S[:p, :p].ravel() for S in both)]),
            np.stack([np.zeros(p), *(S[:p, p] for S in both)])[None],
            np.array([[float(fits.response.ss[0]), *(float(S[p, p]) for S in both)]]),
        )
        w, logdet = _Lengths(held).weights(np.tanh(theta[:1]))
        return forms.gram(w[0], float(logdet[0]))

    def rho(self, fits: Fits) -> tuple[float, bool, bool]:
        """ρ per step, whether it is at its bound, whether the search settled."""
        m = self.design.m
        axis = Parameter(
            "serial.atanh_rho", -RHO_HIGH, RHO_HIGH, (-0.3, 0.3, 1.1), tuple(np.linspace(-3.6, 5.2, 45))
        )
        best = minimise(lambda theta: float(reml.criterion(self.gram(fits, theta), m)[0]), [axis])
        return float(np.tanh(best.theta[0])), bool(best.at_bound[0]), bool(best.converged)

    def fit(self, fits: Fits) -> Estimates:
        rho, bound, converged = self.rho(fits)
        theta = np.array([np.arctanh(rho)])
        delta, _, _ = reml.reduced(self.gram(fits, theta))
        coef = fits.response.coef[:, 0] + delta[:, 0]
        bent = curvature.slopes(lambda at: self.gram(fits, at), theta, [0], self.design.m)
        confidence = fits.run.settings.confidence
        column = Column.bent(coef, bent)
        return self.estimates([column], confidence, np.array([bound]), np.array([converged]))

    def account(self, fits: Fits) -> Account:
        return Account(
            estimator="generalised least squares, REML",
            covariance="AR(1) errors within series",
            factor="none",
            df_rule=self.rule,
            reference="t",
            items=(("correlation per step", significant(self.rho(fits)[0], 4)),),
            source="harville-1977",
        )


def ar1(fits: Fits, design: PartedDesign) -> tuple[Refit, float]:
    """The refit and ρ. Raises NotSupported."""
    ready = Ar1.of(design)
    found = read(AlongTime("ar1"), ready, ready.fit(fits), fits)
    return replace(found, account=ready.account(fits)), ready.rho(fits)[0]
