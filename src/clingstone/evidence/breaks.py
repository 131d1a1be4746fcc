"""A step in the level at an unknown time: the largest F over the times at which it may have come."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from clingstone.design.derived import balanced, extend
from clingstone.design.design import Design
from clingstone.display import amount, number, p_value, percent, significant
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, degenerate, exceedance, floats
from clingstone.evidence.serial import series_of
from clingstone.maths.once import Array, once
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

Places = npt.NDArray[np.intp]

TRIM = 0.15  # share of the rows kept on either side of a step (Andrews 1993, Econometrica 61:821)
TIMES = 60  # times looked at, at even numbers of rows
DRAWS = 999


@dataclass(frozen=True)
class Break(Plain):
    """Largest F of a step in the level over unknown times (Quandt 1960), its law by draws given X.

    The F statistics of the K times depend on y through K normal products and a residual sum alone, so p
    is exact for normal independent errors however many rows there are. Given the order in time, rows are
    freed of the fitted dependence first, which is held. Steps only: slopes are taken as they are.
    """

    id: str = "break"
    family: Family = "mean"
    null: str = "The level does not step at any time beyond the model."
    alternative: str = "The level steps at some time."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"residual df": 15}, known_design=True))
    source: str = "quandt-1960"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "a step in the level at some time", primary=False),)

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        return (frozenset({"serial"}),) if "serial" in fits.components else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        D, times = steps(fits.design)
        Q, E = fits.design.Q, fits.response.residual
        if given:
            if fits.response.B > 1:
                raise NotSupported("each column of y has dependence of its own")
            Q, D, E = _freed(fits, given, D)
        F, size, at, drawn = _largest(fits, Q, D, E, "given" if given else "alone")
        lost = degenerate(fits.response)
        F = np.where(lost, np.nan, F)
        p = np.array([exceedance(F, drawn)]).ravel()
        # No interval: the one for a step at a known time would not know that this time was chosen.
        share = F / (F + fits.design.m - 1)
        scale = float(size[0] / np.sqrt(fits.response.s2[0])) if fits.response.s2[0] > 0 else np.nan
        unit = series_of(fits.design).unit or "time unit"
        when = f"{amount(float(times[at[0]]))} {unit}s after the first time"
        caveats = ["The time was chosen as the one that fits best, so the size is on the large side."]
        if not given:
            caveats.append("It takes the rows as independent, so dependence alone can make it reject.")
        return Reading(
            statistic=F,
            statistic_name="largest F",
            p=p,
            p_method=f"exact by {DRAWS} draws" + (", dependence held" if given else ""),
            estimate=share,
            estimate_name="share of the residual variance that a step explains: "
            f"{number(scale, 2)} residual standard deviations, {when}",
            n_used=fits.design.n,
            caveats=tuple(caveats),
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        if bool(degenerate(fits.response)[0]):
            return None
        D, times = steps(fits.design)
        F = _statistics(fits.design.Q, D, fits.response.residual)[0][:, 0]
        series = series_of(fits.design)
        return Curve(
            kind="function",
            x=floats(times),
            y=floats(F),
            x_name="time of the step",
            y_name="F of a step",
            unit=series.unit,
        )

    def sentence(self, reading: Reading, about: About) -> str:
        share, size = percent(column(reading.estimate)), reading.estimate_name.partition(": ")[2]
        return (
            f"A step in the level of {size}, would explain {share} of what the model leaves over (largest "
            f"F = {significant(column(reading.statistic), 3)}, {p_value(column(reading.p))})."
        )


@once
def steps(design: Design) -> tuple[Array, Array]:
    """(n, K) columns 1(t ≥ τ) on the scale of the basis, less those the model spans, and τ (K,)."""
    time = series_of(design).elapsed
    distinct = np.unique(time)
    share = np.searchsorted(np.sort(time), distinct) / design.n
    inner = distinct[(share >= TRIM) & (share <= 1 - TRIM)]
    if len(inner) < 3:
        raise NotSupported("too few times on which a step could have come", "5 or more would be needed.")
    if len(inner) > TIMES:
        inner = inner[np.unique(np.linspace(0, len(inner) - 1, TIMES).round().astype(int))]
    D = (time[:, None] >= inner).astype(float)
    if design.root is not None:
        D = D * design.root[:, None]
    rest = design.basis.project(D)
    kept = np.linalg.norm(rest, axis=0) > 1e-6 * np.linalg.norm(D, axis=0)
    if not kept.any():
        raise NotSupported("the model already holds a level for every time")
    return D[:, kept], inner[kept]


def with_step(fits: Fits, given: frozenset[str] = frozenset()) -> Design:
    """The design with a step at the time that fits the first column of y best, given a dependence or not."""
    D, times = steps(fits.design)
    Q, E = fits.design.Q, fits.response.residual
    if given:
        Q, D, E = _freed(fits, given, D)
    at = times[int(np.argmax(np.nan_to_num(_statistics(Q, D, E)[0][:, 0])))]
    series = series_of(fits.design)
    step = balanced(fits.design, (series.elapsed >= at).astype(float))
    return extend(fits.design, f"step in {series.name}", step)


def _freed(fits: Fits, given: frozenset[str], D: Array) -> tuple[Array, Array, Array]:
    """Q (orthonormal again), D and e after a square root of V̂⁻¹."""
    algebra, theta = fits.algebra(given), fits[given].theta[:, 0]
    p = fits.design.p
    white = algebra.whiten(theta, np.hstack([fits.design.Q, D, fits.response.residual]))
    Q: Array = np.linalg.qr(white[:, :p])[0]
    E = white[:, p + D.shape[1] :]
    return Q, white[:, p : p + D.shape[1]], E - Q @ (Q.T @ E)


def _statistics(Q: Array, D: Array, E: Array) -> tuple[Array, Array, Array]:
    """F (K, B), the step (K, B), and C'C of the projected columns C (K, K)."""
    C = D - Q @ (Q.T @ D)
    return _f(C.T @ E, np.einsum("ij,ij->j", E, E), C.T @ C, len(Q) - Q.shape[1])


def _f(u: Array, ss: Array, CC: Array, m: int) -> tuple[Array, Array, Array]:
    size = np.diag(CC)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        gain = u**2 / size
        return np.asarray(gain / ((ss - gain) / (m - 1))), u / size, CC


def _largest(fits: Fits, Q: Array, D: Array, E: Array, purpose: str) -> tuple[Array, Array, Places, Array]:
    """Largest F (B,), the step there (B,), which time it is (B,), and the largest F of draws."""
    F, step, CC = _statistics(Q, D, E)
    at, columns = np.argmax(np.nan_to_num(F), axis=0), np.arange(F.shape[1])
    values, vectors = np.linalg.eigh(CC)
    ok = values > 1e-10 * values[-1]
    rng = fits.run.child(f"break:{purpose}")
    m = len(Q) - Q.shape[1]
    z = rng.standard_normal((int(ok.sum()), DRAWS))
    # C'z has covariance C'C; what else of z'Mz there is, is an independent χ² of the other dimensions.
    u = (vectors[:, ok] * np.sqrt(values[ok])) @ z
    other = rng.chisquare(m - int(ok.sum()), DRAWS) if m > ok.sum() else np.zeros(DRAWS)
    drawn = _f(u, np.sum(z**2, axis=0) + other, CC, m)[0].max(axis=0)
    return F[at, columns], step[at, columns], at, drawn
