"""A step in the level at an unknown time: the largest F over the times at which it may have come."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import SerialPiece
from clingstone.design.derived import extend
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import amount, number, p_value, percent, significant
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, degenerate, exceedance, floats
from clingstone.evidence.serial import series_of
from clingstone.maths.markov import Links
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

Places = npt.NDArray[np.intp]

TRIM = 0.15  # share of the rows kept on either side of a step (Andrews 1993, Econometrica 61:821)
TIMES = 60  # times looked at, at even numbers of rows
DRAWS = 999
HELD = 1e-6  # part of a step's length below which the model holds its level already
BLOCK = 500_000  # numbers of a block of rows


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
        times = steps(fits.design).times
        F, size, at, drawn = _largest(fits, _moments(fits, given), "given" if given else "alone")
        lost = degenerate(fits.response)
        F = np.where(lost, np.nan, F)
        p = np.array([exceedance(F, drawn)]).ravel()
        # No interval: the one for a step at a known time would not know that this time was chosen.
        share = F / (F + fits.design.m - 1)
        scale = float(size[0] / np.sqrt(fits.response.s2[0])) if fits.response.s2[0] > 0 else np.nan
        when = _when(series_of(fits.design), float(times[at[0]]))
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
        times = steps(fits.design).times
        F = _f(_moments(fits))[0][:, 0]
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


def _when(series: Series, time: float) -> str:
    """ "from 1899 on", as the user wrote the time, or "28 years after the first time" """
    distinct = series.times[0]
    if len(series.written) == len(distinct):
        return f"from {series.written[int(np.searchsorted(distinct, time))]} on"
    return f"{amount(time)} {series.unit or 'time unit'}s after the first time"


@dataclass(frozen=True, eq=False)
class Steps:
    """Columns √ω 1(t ≥ τ_k), k = 1 … K, that are never all written out.

    times (K,) : τ. passed (n,) : how many of the τ a row has reached. cross (p, K) : Q'D.
    """

    design: Design
    times: Array
    passed: npt.NDArray[np.int16]
    cross: Array

    @property
    def count(self) -> int:
        return len(self.times)

    def sums(self, values: Array) -> Array:
        """D'values : (n,) → (K,), (n, k) → (K, k)."""
        return _reached(self.design, self.passed, self.count, values)

    def rest(self, rows: slice) -> Array:
        """Some rows of MD."""
        D = (self.passed[rows, None] > np.arange(self.count)).astype(float)
        if self.design.root is not None:
            D *= self.design.root[rows, None]
        D -= self.design.Q[rows] @ self.cross
        return D


def _reached(design: Design, passed: npt.NDArray[np.int16], K: int, values: Array) -> Array:
    """D'values: sums over the rows that have reached each time."""
    part = Partition("times passed", passed.astype(np.int32), tuple(str(k) for k in range(K + 1)))
    root = 1.0 if design.root is None else design.root
    scaled = values * (root if values.ndim == 1 else np.reshape(root, (-1, 1)))
    return np.asarray(np.cumsum(part.sums(scaled)[:0:-1], axis=0)[::-1])


@once
def steps(design: Design) -> Steps:
    """The times at which a step is looked for, those left out whose level the model holds already."""
    distinct, codes = series_of(design).times
    rows = np.bincount(codes)
    share = (np.cumsum(rows) - rows) / design.n
    inner = distinct[(share >= TRIM) & (share <= 1 - TRIM)]
    if len(inner) < 3:
        raise NotSupported("too few times on which a step could have come", "5 or more would be needed.")
    if len(inner) > TIMES:
        inner = inner[np.unique(np.linspace(0, len(inner) - 1, TIMES).round().astype(int))]
    passed = np.searchsorted(inner, distinct, side="right").astype(np.int16)[codes]
    size = _reached(design, passed, len(inner), np.ones(design.n) if design.root is None else design.root)
    cross = _reached(design, passed, len(inner), design.Q).T
    kept = np.sqrt(np.maximum(size - np.sum(cross**2, axis=0), 0.0)) > HELD * np.sqrt(size)
    if not kept.any():
        raise NotSupported("the model already holds a level for every time")
    passed = np.append(0, np.cumsum(kept)).astype(np.int16)[passed]
    return Steps(design, inner[kept], frozen(passed), cross[:, kept])


def with_step(fits: Fits, given: frozenset[str] = frozenset()) -> Design:
    """The design with a step at the time that fits the first column of y best, given a dependence or not."""
    F = _f(_moments(fits, given))[0][:, 0]
    at = steps(fits.design).times[int(np.argmax(np.nan_to_num(F)))]
    series = series_of(fits.design)
    return extend(fits.design, f"step in {series.name}", (series.elapsed >= at).astype(float))


class _Moments(NamedTuple):
    """C'C (K, K), C'E (K, B) and e'e (B,) of what the model leaves of the steps and of y; m its dimension."""

    CC: Array
    CE: Array
    EE: Array
    m: int


def _moments(fits: Fits, given: frozenset[str] = frozenset()) -> _Moments:
    """As the rows are, or after a square root of V̂⁻¹."""
    return _freed(fits, given) if given else _plain(fits.response)


@once
def _plain(response: Response) -> _Moments:
    design, D = response.design, steps(response.design)
    # A row that has reached the later of two times has reached both.
    size = D.sums(np.ones(design.n) if design.root is None else design.root)
    later = np.maximum.outer(np.arange(D.count), np.arange(D.count))
    return _Moments(
        size[later] - D.cross.T @ D.cross, D.sums(response.residual), response.ss, design.n - design.p
    )


def _freed(fits: Fits, given: frozenset[str]) -> _Moments:
    """From [Q, MD, e]'V̂⁻¹[Q, MD, e], by blocks of rows where a row is freed of the row before it alone."""
    if fits.response.B > 1:
        raise NotSupported("each column of y has dependence of its own")
    design, algebra, theta = fits.design, fits.algebra(given), fits[given].theta[:, 0]
    D, p, n = steps(design), design.p, design.n

    def block(rows: slice) -> Array:
        return np.hstack([design.Q[rows], D.rest(rows), fits.response.residual[rows]])

    G = np.zeros((p + D.count + 1,) * 2)
    piece = algebra.serial if isinstance(algebra, Layered) else None
    if isinstance(piece, SerialPiece) and given == {"serial"}:
        rho, size = float(piece.rho(theta)), max(1, BLOCK // len(G))
        for start in range(0, n, size):
            halo = int(start > 0)  # the row before comes along; what is made of it is left out again
            links = Links(piece.links.steps[start - halo : start + size])
            white = links.whiten(rho, block(slice(start - halo, start + size)))[halo:]
            G += white.T @ white
    else:
        white = algebra.whiten(theta, block(slice(None)))
        G += white.T @ white
    G = G[p:, p:] - G[p:, :p] @ np.linalg.solve(G[:p, :p], G[:p, p:])
    return _Moments(G[:-1, :-1], G[:-1, -1:], G[-1, -1:], n - p)


def _f(moments: _Moments) -> tuple[Array, Array]:
    """F of a step at each time (K, B), and the step (K, B)."""
    size = np.diag(moments.CC)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        gain = moments.CE**2 / size
        return np.asarray(gain / ((moments.EE - gain) / (moments.m - 1))), moments.CE / size


def _largest(fits: Fits, found: _Moments, purpose: str) -> tuple[Array, Array, Places, Array]:
    """Largest F (B,), the step there (B,), which time it is (B,), and the largest F of draws."""
    F, step = _f(found)
    at, columns = np.argmax(np.nan_to_num(F), axis=0), np.arange(F.shape[1])
    values, vectors = np.linalg.eigh(found.CC)
    ok = values > 1e-10 * values[-1]
    rng = fits.run.child(f"break:{purpose}")
    m = found.m
    z = rng.standard_normal((int(ok.sum()), DRAWS))
    # C'z has covariance C'C; what else of z'Mz there is, is an independent χ² of the other dimensions.
    u = (vectors[:, ok] * np.sqrt(values[ok])) @ z
    other = rng.chisquare(m - int(ok.sum()), DRAWS) if m > ok.sum() else np.zeros(DRAWS)
    drawn = _f(_Moments(found.CC, u, np.sum(z**2, axis=0) + other, m))[0].max(axis=0)
    return F[at, columns], step[at, columns], at, drawn
