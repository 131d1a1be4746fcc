"""Shocks that several series share: do their residuals move together at the same times?"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import special

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import count, number, p_value, significant
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.read import Plain, degenerate, direction
from clingstone.evidence.serial import series_of
from clingstone.maths.markov import Links
from clingstone.maths.once import Array, Codes
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

TIMES = 8  # times that two series or more share
STRIP = 128  # series whose correlations with all others are held at once
OVERLAP = 4  # times that a pair of series must share
MOST_SERIES = 1_500  # a product of two tables of series × times; beyond, this many at random


@dataclass(frozen=True)
class CommonShocks(Plain):
    """Mean correlation of residuals between series at the same times (Pesaran's CD).

    CD = √(2/(N(N − 1))) Σ_{i<j} √T_ij r_ij over pairs of series that share T_ij ≥ 4 times, demeaned there;
    standard normal without dependence. Given the order in time, residuals are first freed of the AR(1)
    fitted to them, because correlations of two smooth series scatter more.
    """

    id: str = "common-shocks"
    family: Family = "serial"
    null: str = "Residuals of different series at the same time are not correlated."
    alternative: str = "Residuals of different series move together from time to time."
    needs: Needs = field(default=Needs(frozenset({"serial"}), unweighted=True))
    source: str = "pesaran-2015"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        if series.part.count < 2 or series.tick is None:
            return ()
        return (About("", "of different series at the same times", primary=False),)

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        able = "serial" in fits.components and shared_times(fits.design) >= TIMES
        return (frozenset({"serial"}),) if able else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        series = series_of(fits.design)
        if series.ties:
            raise NotSupported("rows share their series and time, so residuals do not pair up")
        table = _table(fits.design, fits.run.child("shared times"))
        e = _whitened(fits) if given else fits.response.residual
        found = [pairs(table.laid(e[:, b])) for b in range(fits.response.B)]
        cd, mean, size, number_of = (np.array(v, dtype=float) for v in zip(*found, strict=True))
        if number_of[0] < 1:
            raise NotSupported(f"no two series share {OVERLAP} times")
        lost = degenerate(fits.response)
        cd = np.where(lost, np.nan, cd)
        alternative = fits.run.settings.alternative
        log_p = special.log_ndtr(-np.abs(cd)) + np.log(2.0)
        if alternative != "two-sided":
            log_p = special.log_ndtr(-cd if alternative == "greater" else cd)
        return Reading(
            statistic=cd,
            statistic_name="CD",
            p=np.exp(log_p),
            log_p=log_p,
            p_method=f"normal, {direction(alternative)}",
            estimate=np.where(lost, np.nan, mean),
            estimate_name=f"mean correlation between series (their mean size is {number(float(size[0]), 2)})",
            n_used=int(number_of[0]),
            caveats=self._caveats(fits, table, bool(given)),
        )

    def _caveats(self, fits: Fits, table: Table, given: bool) -> tuple[str, ...]:
        out = ["Shocks that move some series up and others down cancel in the mean correlation."]
        if table.left_out:
            out.append(f"{MOST_SERIES:,} series drawn at random stand for all.")
        if not given:
            out.append("Dependence along time makes these correlations scatter more than the test supposes.")
        return tuple(out)

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"Residuals {about.words} correlate {number(column(reading.estimate), 2)} on average over "
            f"{count(reading.n_used, 'pair')} of series (CD = {significant(column(reading.statistic), 3)}, "
            f"{p_value(column(reading.p))})."
        )


@dataclass(frozen=True, eq=False)
class Table:
    """Series × times. rows (K,) of the design, and where each stands."""

    rows: npt.NDArray[np.int64]
    series: npt.NDArray[np.int64]
    time: Codes
    shape: tuple[int, int]
    left_out: int

    def laid(self, e: Array) -> Array:
        """(N, T) residuals, NaN where there is none."""
        out = np.full(self.shape, np.nan)
        out[self.series, self.time] = e[self.rows]
        return out


def shared_times(design: Design) -> int:
    """Times at which two series or more have a row."""
    return int(np.sum(np.bincount(series_of(design).times[1]) >= 2))


def _table(design: Design, rng: np.random.Generator) -> Table:
    series = series_of(design)
    times, time = series.times
    shared = shared_times(design)
    if shared < TIMES:
        raise NotSupported(
            f"{count(shared, 'time')} shared by two series or more", f"{TIMES} would be needed."
        )
    codes = series.part.codes
    usable = np.flatnonzero(series.part.sizes >= OVERLAP)
    chosen = usable
    if len(usable) > MOST_SERIES:
        chosen = np.sort(rng.choice(usable, MOST_SERIES, replace=False))
    if len(chosen) < 2:
        raise NotSupported(f"no two series hold {OVERLAP} times", "Longer series would be needed.")
    place = np.full(series.part.count, -1)
    place[chosen] = np.arange(len(chosen))
    rows = np.flatnonzero(place[codes] >= 0)
    return Table(rows, place[codes[rows]], time[rows], (len(chosen), len(times)), len(usable) - len(chosen))


def pairs(E: Array) -> tuple[float, float, float, int]:
    """CD, mean r, mean |r| and the number of pairs, from residuals (N, T) with NaN for the missing.

    Correlations of a pair are over the times both hold, with the means they have there.
    """
    held = ~np.isnan(E)
    X, H = np.where(held, E, 0.0), held.astype(float)
    sums, number_of = np.zeros(3), 0
    for start in range(0, len(E), STRIP):
        r, T = _correlations(X[start:], H[start:])
        number_of += len(r)
        sums += np.sum(np.sqrt(T) * r), np.sum(r), np.sum(np.abs(r))
    if not number_of:
        return np.nan, np.nan, np.nan, 0
    cd, mean, size = sums / (np.sqrt(number_of), number_of, number_of)
    return float(cd), float(mean), float(size), number_of


def _correlations(X: Array, H: Array) -> tuple[Array, Array]:
    """Correlations of the first series with all after them, and at how many times each.

    X, H (N, T) : values, zero where missing, and whether they are there.
    """
    x, h = X[:STRIP], H[:STRIP]
    T = h @ H.T
    mine, theirs = x @ H.T, h @ X.T  # sums of i, and of j, over the times of both
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = ((x * x) @ H.T - mine**2 / T) * (h @ (X * X).T - theirs**2 / T)
        r = (x @ X.T - mine * theirs / T) / np.sqrt(variance)
    ok = (T >= OVERLAP) & np.isfinite(r) & np.triu(np.ones(r.shape, dtype=bool), 1)
    return r[ok], T[ok]


def _whitened(fits: Fits) -> Array:
    """Residuals freed of the AR(1) fitted to them, each column with its own ρ."""
    rho = fits[{"serial"}].shape["serial.rho"]
    links = Links(series_of(fits.design).steps)
    response: Response = fits.response
    return np.stack([links.whiten(float(rho[b]), response.residual[:, b]) for b in range(response.B)], axis=1)
