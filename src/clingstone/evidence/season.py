"""Seasons: a pattern that the calendar repeats, fixed or moving, or a cycle of unknown period."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from clingstone.design.derived import extend, onto
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import (
    amount,
    bounds,
    count,
    freedom,
    number,
    p_value,
    percent,
    percent_bounds,
    significant,
)
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.mean import added
from clingstone.evidence.read import (
    Plain,
    arcsine,
    degenerate,
    direction,
    exceedance,
    floats,
    normal_quantile,
    ratio,
    simulated,
    tail_p,
)
from clingstone.evidence.serial import form_of, law_of, one_step, series_of
from clingstone.maths.once import Array, once
from clingstone.needs import Family, Needs, NotSupported
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

# Cycles of the calendar: unit of the step → (name, length in that unit), the longest first.
CYCLES: dict[str, tuple[tuple[str, float], ...]] = {
    "quarter": (("year", 4.0),),
    "month": (("year", 12.0),),
    "week": (("year", 365.25 / 7),),
    "day": (("year", 365.25), ("week", 7.0)),
    "hour": (("week", 168.0), ("day", 24.0)),
    "minute": (("day", 1440.0), ("hour", 60.0)),
    "second": (("hour", 3600.0), ("minute", 60.0)),
}
CYCLES_SEEN = 1.98  # cycles that the times must cover: two, or two calendar years of 730 days and a week less
EACH_STEP = 12  # steps in a cycle up to which each has its own level; beyond, waves
WAVES = 3
DRAWS = 999
DRAWN_ROWS = 2_000
UNKNOWN, MOVING = "unknown", "moving"


def cycles(series: Series) -> tuple[tuple[str, float], ...]:
    """(name, period in base steps) of the cycles of the calendar that the times cover twice."""
    if series.tick is None:
        return ()
    steps = float(series.tick.max() - series.tick.min() + 1)
    found = ((name, length / series.step) for name, length in CYCLES.get(series.unit, ()))
    return tuple((name, period) for name, period in found if 2 <= period <= steps / CYCLES_SEEN)


@once
def with_season(design: Design, name: str) -> Design:
    """The design with a fixed pattern over one cycle: a level for each step of it, or up to three waves."""
    series = series_of(design)
    period = dict(cycles(series))[name]
    assert series.tick is not None
    title = f"season of the {name}"
    if abs(period - round(period)) < 1e-9 and period <= EACH_STEP:
        at = series.tick % round(period)
        levels = (at[:, None] == np.arange(1, round(period))).astype(float)
        return extend(design, title, levels)
    angle = 2 * np.pi * series.tick / period
    waves = range(1, min(WAVES, int((period - 1e-9) // 2)) + 1)
    columns = np.column_stack([f(j * angle) for j in waves for f in (np.cos, np.sin)])
    return extend(design, title, columns)


@dataclass(frozen=True)
class Season(Plain):
    """A seasonal pattern: fixed (F of its columns, plainly and given the dependence), or moving.

    A period comes from the calendar of the time column. For short cycles the correlation one period
    apart is read with the fixed pattern in the mean, by its exact law: what is left is a season that moves.
    For one regular series without a calendar, the largest ordinate of the periodogram over their sum
    (Fisher 1929), its p by draws of Mz up to 2,000 rows.
    """

    id: str = "season"
    family: Family = "mean"
    null: str = "The mean follows no cycle of time beyond the model."
    alternative: str = "The mean, or what follows it, repeats with a cycle of time."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"residual df": 12}, known_design=True))
    source: str = "fisher-1929"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        found = cycles(series)
        out = [About(name, f"a fixed pattern over the {name}", primary=False) for name, _ in found]
        out += [
            About(f"{name}:{MOVING}", f"one {name} apart, a fixed pattern in the mean", primary=False)
            for name, period in found
            if abs(period - round(period)) < 1e-9 and len(series.pairs(round(period))[0]) >= 8
        ]
        if not found and series.part.count == 1 and series.spacing == "regular" and not series.ties:
            out.append(About(UNKNOWN, "a cycle of unknown period", primary=False))
        return tuple(out)

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        node = fits.full_node
        return (node,) if node and about.key != UNKNOWN and MOVING not in about.key else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        if about.key == UNKNOWN:
            return _hidden(fits)
        name, _, kind = about.key.partition(":")
        return _moving(fits, name) if kind == MOVING else _fixed(fits, name, given)

    def curve(self, fits: Fits, about: About) -> Curve | None:
        if about.key == UNKNOWN or MOVING in about.key:
            return None
        return _pattern(fits, about.key)

    def sentence(self, reading: Reading, about: About) -> str:
        if MOVING in about.key:
            return (
                f"Residuals {about.words}, correlate {number(column(reading.estimate), 2)}"
                f"{bounds(column(reading.low), column(reading.high))} over {count(reading.n_used, 'pair')} "
                f"({p_value(column(reading.p))})."
            )
        share = percent(column(reading.estimate))
        share += percent_bounds(column(reading.low), column(reading.high))
        if about.key == UNKNOWN:
            return (
                f"The strongest cycle, {reading.estimate_name.partition(', ')[2]}, holds {share} of what "
                f"the model leaves over ({p_value(column(reading.p))})."
            )
        words = about.words[:1].upper() + about.words[1:]
        return (
            f"{words} would explain {share} of what the model leaves over "
            f"(F = {significant(column(reading.statistic))} on {freedom(reading.df, reading.df2)}, "
            f"{p_value(column(reading.p))})."
        )


def _fixed(fits: Fits, name: str, given: frozenset[str]) -> Reading:
    caveat = "It takes the rows as independent, so dependence alone can make it reject."
    return added(fits, with_season(fits.design, name), given, () if given else (caveat,))


def _moving(fits: Fits, name: str) -> Reading:
    series = series_of(fits.design)
    lag = round(dict(cycles(series))[name])
    try:
        wide = with_season(fits.design, name)
    except NotSupported:
        wide = fits.design  # the model has the pattern already
    response = onto(fits.response, wide)
    form = form_of(fits.design, f"lag:{lag}")
    law = law_of(wide, form)
    value = ratio(response, form)
    alternative = fits.run.settings.alternative
    tails = law.tails(value, fits.tails)
    p, log_p = tail_p(tails, alternative, "upper")
    rho, sd = one_step(response, form, law)
    low, high = arcsine(rho, sd, normal_quantile(fits))
    return Reading(
        statistic=value,
        statistic_name=f"lag {lag} ratio",
        p=p,
        log_p=log_p,
        p_method=f"{tails.method}, {direction(alternative)}",
        estimate=np.clip(rho, -0.999, 0.999),
        estimate_name=f"correlation one {name} apart, a fixed pattern in the mean",
        low=low,
        high=high,
        n_used=len(series.pairs(lag)[0]),
        caveats=("Dependence that reaches over a whole cycle looks the same.",),
    )


# ---- a cycle of unknown period ------------------------------------------------------------------


def ordinates(e: Array) -> Array:
    """(q, B) periodogram at j/n, j = 1 … ⌊(n − 1)/2⌋, over its sum."""
    n = len(e)
    power = np.abs(np.fft.rfft(e, axis=0)[1 : (n - 1) // 2 + 1]) ** 2
    total = power.sum(axis=0)
    return np.asarray(power / np.where(total > 0, total, np.nan))


def fisher_tail(g: float, q: int) -> float:
    """P(g* > g) for the largest of q equal shares of white noise (Fisher 1929).

    Σ_j (−1)^{j−1} C(q, j)(1 − jg)^{q−1}; the alternating sum loses its digits for many ordinates, where
    the largest of q independent exponentials stands for it.
    """
    if q > 60:
        return float(-np.expm1(q * np.log1p(-np.exp((q - 1) * np.log1p(-min(g, 1 - 1e-16))))))
    j = np.arange(1, int(np.floor(1 / g)) + 1)
    terms = special.comb(q, j) * (1 - j * g) ** (q - 1) * np.where(j % 2 == 1, 1.0, -1.0)
    return float(np.clip(terms.sum(), 0.0, 1.0))


def _hidden(fits: Fits) -> Reading:
    response, series = fits.response, series_of(fits.design)
    n = fits.design.n
    shares = ordinates(response.residual)
    q, lost = len(shares), degenerate(response)
    if q < 5:
        raise NotSupported(f"{count(q, 'frequency', 'frequencies')} in so short a series")
    g = np.where(lost, np.nan, np.max(shares, axis=0))
    best = int(np.argmax(shares[:, 0])) + 1
    if n <= DRAWN_ROWS and fits.depth == "exact":
        drawn = np.max(ordinates(simulated(response, fits, "season", DRAWS).residual), axis=0)
        p, method = exceedance(g, drawn), f"exact by {DRAWS} draws"
    else:
        p = np.array([np.nan if np.isnan(v) else fisher_tail(float(v), q) for v in g])
        method = "Fisher's law of white noise"
    length = _length(series, n / best)
    return Reading(
        statistic=g,
        statistic_name="g",
        p=p,
        p_method=method,
        estimate=g,
        estimate_name=f"share of the strongest cycle, of {length}",
        n_used=n,
        caveats=("Slow dependence shows as a long cycle.",) if best <= 2 else (),
    )


def _length(series: Series, steps: float) -> str:
    """ "11 years", "12 rows (1 in decimal_year)": a cycle in the unit of its times, where they have one."""
    span = steps * series.step
    if series.unit:
        return f"{amount(span)} {series.unit}{'' if amount(span) == '1' else 's'}"
    rows = f"{amount(steps)} rows"
    return rows if abs(series.step - 1) < 1e-9 else f"{rows} ({amount(span)} in {series.name})"


def _pattern(fits: Fits, name: str) -> Curve | None:
    """Mean residual at each step of the cycle (in at most 24 parts), and the fixed pattern."""
    response: Response = fits.response
    if bool(degenerate(response)[0]):
        return None
    series = series_of(fits.design)
    assert series.tick is not None
    period = dict(cycles(series))[name]
    parts = int(min(24, np.ceil(period - 1e-9)))
    phase = np.mod(series.tick, period)
    codes = np.minimum((phase * parts / period).astype(int), parts - 1)
    size = np.bincount(codes, minlength=parts).astype(float)
    filled = np.flatnonzero(size)
    wide = onto(response, with_season(fits.design, name))
    added = response.residual[:, 0] - wide.residual[:, 0]

    def mean(v: Array) -> Array:
        return np.asarray(np.bincount(codes, weights=v, minlength=parts)[filled] / size[filled])

    quantile = float(special.stdtrit(wide.design.m, 0.5 + fits.run.settings.confidence / 2))
    half = quantile * np.sqrt(float(wide.s2[0]) / size[filled])
    y, at = mean(response.residual[:, 0]), mean(phase * series.step)
    return Curve(
        kind="function",
        x=floats(at),
        y=floats(y),
        low=floats(y - half),
        high=floats(y + half),
        size=floats(size[filled]),
        x_name=f"time within the {name}, from the start of the table",
        y_name="mean residual",
        unit=series.unit,
        lines={"repaired": (floats(at), floats(mean(added)))},
    )
