"""Errors or outcomes of neighbours: score tests for an autoregression of either, plain and robust."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy import special

from clingstone.design.derived import whole
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import bounds, number, p_value, significant
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.read import Plain, degenerate, normal_quantile
from clingstone.evidence.sites import at_sites, neighbours_of, stand_by, unusable
from clingstone.maths.once import Array
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

Kind = Literal["lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag"]

_NULL: dict[Kind, str] = {
    "lm-error": "Errors of neighbouring sites do not follow one another.",
    "lm-lag": "Outcomes of neighbouring sites have no part in the mean.",
    "robust-lm-error": "Errors of neighbouring sites do not follow one another, whatever their outcomes do.",
    "robust-lm-lag": "Outcomes of neighbouring sites have no part in the mean, whatever their errors do.",
}
_ALTERNATIVE: dict[Kind, str] = {
    "lm-error": "Errors of neighbouring sites follow one another.",
    "lm-lag": "Outcomes of neighbouring sites have a part in the mean.",
    "robust-lm-error": "Errors of neighbouring sites follow one another, beside what their outcomes do.",
    "robust-lm-lag": "Outcomes of neighbouring sites have a part in the mean, beside what their errors do.",
}
_LAG = "A part of the neighbours' outcomes in the mean changes what every coefficient means: it is no remedy."


@dataclass(frozen=True, eq=False)
class Scores:
    """The two scores and what they share (Anselin, Bera, Florax & Yoon 1996).

    error (B,) : e'We/σ̃², σ̃² = e'e/n. lag (B,) : e'Wy/σ̃². T : tr(W² + W'W), the information on λ.
    J (B,) : T + (WXβ̂)'M(WXβ̂)/σ̃², that on ρ.
    """

    error: Array
    lag: Array
    T: float
    J: Array

    @classmethod
    def of(cls, response: Response, key: str) -> Scores:
        design = response.design
        W = neighbours_of(design, key).W
        ss = np.where(degenerate(response), np.nan, response.ss)
        s2 = ss / design.n
        e = response.residual
        fitted = W @ (design.Q @ response.coef)
        beyond = design.basis.project(np.asarray(fitted))
        trace = float(W.multiply(W).sum() + W.multiply(W.T).sum())
        return cls(
            np.einsum("ij,ij->j", e, W @ e) / s2,
            np.einsum("ij,ij->j", e, W @ whole(response)) / s2,
            trace,
            trace + np.einsum("ij,ij->j", beyond, beyond) / s2,
        )

    def read(self, kind: Kind) -> tuple[Array, Array]:
        """Score and its variance, each (B,): the statistic is score²/variance, the size score/variance."""
        T, J = self.T, self.J
        if kind == "lm-error":
            return self.error, np.full_like(J, T)
        if kind == "lm-lag":
            return self.lag, J
        # Without a mean that differs between neighbours the two scores are one.
        apart = np.where(J - T > 1e-10 * T, J - T, np.nan)
        if kind == "robust-lm-error":
            return self.error - T / J * self.lag, T * apart / J
        return self.lag - self.error, apart


@dataclass(frozen=True)
class Lagrange(Plain):
    """A score test of λ (errors) or ρ (outcomes) over the primary neighbourhood; χ² with 1 df.

    Large-sample tests, shown to tell the two apart: whether there is dependence at all is for Moran's I,
    whose moments are exact. The estimate is the step from zero that the score asks for.
    """

    id: Kind = "lm-error"
    family: Family = "spatial"
    source: str = "anselin-1996"
    primary: bool = False

    @property
    def null(self) -> str:
        return _NULL[self.id]

    @property
    def alternative(self) -> str:
        return _ALTERNATIVE[self.id]

    @property
    def needs(self) -> Needs:
        return Needs(frozenset({"spatial"}), {"sites": 8}, known_design=True, unweighted=True)

    @property
    def _what(self) -> str:
        return "errors" if "error" in self.id else "outcomes"

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(About(nb.key, nb.about) for nb in design.neighbours[:1])

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        unusable(fits.design, about.key)
        response = at_sites(fits.response)
        score, variance = Scores.of(response, about.key).read(self.id)
        if bool(np.all(np.isnan(variance))):
            raise NotSupported(
                "the fitted mean is the same for a site and its neighbours, so effects of errors and of "
                "outcomes cannot be told apart",
                "A predictor that differs between neighbours would be needed.",
            )
        z = score / np.sqrt(variance)
        size, half = score / variance, normal_quantile(fits) / np.sqrt(variance)
        caveats = stand_by(fits, neighbours_of(fits.design, about.key))
        if "lag" in self.id:
            caveats = (*caveats, _LAG)
        return Reading(
            statistic=z**2,
            statistic_name="score statistic",
            df=1.0,
            p=special.erfc(np.abs(z) / np.sqrt(2)),
            log_p=np.minimum(special.log_ndtr(-np.abs(z)) + np.log(2), 0.0),
            p_method="χ² with 1 df, large samples",
            estimate=np.clip(size, -1.0, 1.0),
            estimate_name=f"weight of the neighbours' {self._what}, in one step from zero",
            low=np.clip(size - half, -1.0, 1.0),
            high=np.clip(size + half, -1.0, 1.0),
            n_used=response.design.n,
            caveats=caveats,
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = number(column(reading.estimate), 2) + bounds(column(reading.low), column(reading.high))
        beside = ", allowing for the other of the two," if "robust" in self.id else ""
        return (
            f"{self._what.capitalize()} of neighbouring sites ({about.words}) enter with a weight of about "
            f"{size}{beside} in one step from zero (score statistic "
            f"{significant(column(reading.statistic))}, {p_value(column(reading.p))})."
        )
