"""What every test shares: quadratic forms read once, tails to p, degenerate columns, Holm."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from clingstone.design.response import Response
from clingstone.evidence.finding import About, Curve, Reading
from clingstone.maths.forms import Form
from clingstone.maths.once import Array
from clingstone.maths.ratio import Tails
from clingstone.run import Alternative

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

# Squared norm of the residuals, relative to y'y, below which the model is said to fit perfectly: the
# projection leaves a few units of rounding of y per row, and a factor of 64 keeps well clear of it.
PERFECT = (64 * np.finfo(float).eps) ** 2


def degenerate(response: Response) -> npt.NDArray[np.bool_]:
    """(B,) columns in which the model leaves nothing over."""
    total = np.einsum("ij,ij->j", response.coef, response.coef) + response.ss
    return np.asarray(response.ss <= PERFECT * np.maximum(total, np.finfo(float).tiny))


def ratio(response: Response, form: Form) -> Array:
    """T = e'Se / e'e, (B,); NaN where nothing is left over."""
    ss = np.where(degenerate(response), np.nan, response.ss)
    return np.asarray(response.gram(form)[1] / ss)


def tail_p(tails: Tails, alternative: Alternative, positive: str) -> tuple[Array, Array]:
    """p and log p in the wanted direction, each (B,).

    positive : "upper" or "lower", the tail into which positive dependence moves the statistic.
    """
    lower, upper = (tails.lower, tails.log_lower), (tails.upper, tails.log_upper)
    toward = upper if positive == "upper" else lower
    away = lower if positive == "upper" else upper
    if alternative == "greater":
        return toward
    if alternative == "less":
        return away
    log = np.minimum(np.minimum(tails.log_lower, tails.log_upper) + np.log(2.0), 0.0)
    return np.minimum(2.0 * np.minimum(tails.lower, tails.upper), 1.0), log


def direction(alternative: Alternative) -> str:
    """How a p_method names its sides."""
    return {
        "two-sided": "two-sided",
        "greater": "one-sided, positive dependence",
        "less": "one-sided, negative dependence",
    }[alternative]


def normal_quantile(fits: Fits) -> float:
    """z at the run's confidence."""
    return float(special.ndtri(0.5 + fits.run.settings.confidence / 2))


def arcsine(estimate: Array, sd: float, quantile: float) -> tuple[Array, Array]:
    """Interval of a serial correlation: sin(arcsin r ± z·sd), sd that at 0.

    Var r ≈ (1 − ρ²)/n for a first-order process (not (1 − ρ²)²/n as for pairs), so the arcsine, not
    Fisher's z, makes it even.
    """
    z = np.arcsin(np.clip(estimate, -1.0, 1.0))
    bound = np.pi / 2
    return np.sin(np.clip(z - quantile * sd, -bound, bound)), np.sin(
        np.clip(z + quantile * sd, -bound, bound)
    )


def around(
    estimate: Array, low: Array, high: Array, lost: npt.NDArray[np.bool_]
) -> tuple[Array, Array, Array]:
    """Estimate, low and high, NaN where nothing is left over, the ends widened to take in the estimate.

    An exact interval can leave out the usual estimate when the statistic is far below its expectation.
    """
    parts = estimate, np.minimum(low, estimate), np.maximum(high, estimate)
    inner, below, above = (np.where(lost, np.nan, part) for part in parts)
    return inner, below, above


def simulated(response: Response, fits: Fits, purpose: str, draws: int, index: int = 0) -> Response:
    """Residuals e* = Mz of normal draws: the exact null of anything that depends on e/‖e‖ alone."""
    design = response.design
    z = fits.run.child(purpose, index).standard_normal((design.n, draws))
    e = design.basis.project(z)
    return Response(design, np.zeros((design.p, draws)), e, np.einsum("ij,ij->j", e, e))


def exceedance(observed: Array, drawn: Array) -> Array:
    """(1 + #{T* ≥ T}) / (draws + 1), (B,): exact when T* are draws from the null (Barnard, Dwass)."""
    ordered = np.sort(drawn)
    above = len(ordered) - np.searchsorted(ordered, observed * (1 - 1e-12), side="left")
    p = (1.0 + above) / (len(ordered) + 1.0)
    return np.where(np.isnan(observed), np.nan, p)


def holm(p: Array) -> Array:
    """Holm's step-down adjustment along axis 0, (K,) or (K, B); NaN stay and are not counted."""
    table: Array = p.reshape(len(p), -1)
    known = np.sum(~np.isnan(table), axis=0)
    order = np.argsort(table, axis=0)  # NaN sort last
    ranked = np.take_along_axis(table, order, axis=0)
    factor = np.maximum(known[None, :] - np.arange(len(table))[:, None], 1)
    stepped = np.minimum(np.maximum.accumulate(ranked * factor, axis=0), 1.0)
    out = np.empty_like(table)
    np.put_along_axis(out, order, stepped, axis=0)
    return np.where(np.isnan(table), np.nan, out).reshape(p.shape)


def by_f(F: Array, df1: float, df2: float, method: str) -> Reading:
    """A reading by F, without its size."""
    return Reading(
        statistic=F,
        statistic_name="F",
        df=float(df1),
        df2=float(df2),
        p=np.asarray(special.fdtrc(df1, df2, F)),
        log_p=np.asarray(stats.f.logsf(F, df1, df2)),
        p_method=method,
    )


def floats(values: Any) -> tuple[float, ...]:
    """Plain numbers for a Curve."""
    return tuple(float(v) for v in np.asarray(values, dtype=float).ravel())


class Plain:
    """Defaults of a test: nothing fitted first, no curves."""

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        return ()

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return None

    def more(self, fits: Fits, about: About) -> tuple[Curve, ...]:
        return ()
