"""How the times of series are spaced: on a regular grid, on one with gaps, or freely."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

Spacing = Literal["regular", "regular with gaps", "irregular"]

FILLED = 0.5  # share of a grid's places that must hold a row when its step is not the usual one
OFF_GRID = 0.01  # largest departure from a grid, in steps, that counts as clock error
FLOAT_STEP = 1e-6  # agreement asked of decimal times with whole multiples of a step


@dataclass(frozen=True, eq=False)
class Grid:
    """What the steps between neighbouring times of a series show.

    step : in counts. tick : (n,) whole steps since the first time of all, or None. gaps : missing
    steps. near : largest departure from the grid, in steps; 0 where the grid is exact.
    """

    spacing: Spacing
    step: float
    tick: npt.NDArray[np.int64] | None
    gaps: int
    near: float = 0.0


def judge(counts: npt.NDArray[Any], codes: npt.NDArray[np.int32]) -> Grid:
    """Judge rows that are already in (series, time) order.

    The step is the largest that divides all steps (whole counts: their greatest common divisor).
    It makes a regular grid if it is also the single most common step, or if at least half of the grid's
    places hold a row. Else times within a hundredth of a step of some grid count as lying on it.
    Otherwise they are irregular, and the step is the median one.
    """
    same = codes[1:] == codes[:-1]
    steps = np.diff(counts)[same]
    steps = steps[steps > 0]
    if not len(steps):
        return Grid("irregular", 1.0, None, 0)
    divisor = _divisor(steps)
    if divisor is not None:
        whole = np.round(steps / divisor).astype(np.int64)
        starts = int(np.sum(~same)) + 1
        missing = int(np.sum(whole - 1))
        usual = _most_common(whole) == 1
        if usual or (len(whole) + starts) >= FILLED * (len(whole) + starts + missing):
            spacing: Spacing = "regular with gaps" if missing else "regular"
            return Grid(spacing, divisor, _ticks(counts, codes, divisor), missing)
    median = float(np.median(steps))
    step = _fitted_step(counts, codes, median)
    tick = _ticks(counts, codes, step)
    near = _off(counts, codes, tick, step)
    moved = np.diff(tick)[same]
    if near <= OFF_GRID and np.all(moved[np.diff(counts)[same] > 0] >= 1):
        missing = int(np.sum(np.maximum(moved - 1, 0)))
        return Grid("regular with gaps" if missing else "regular", step, tick, missing, near)
    return Grid("irregular", median, None, 0)


def _most_common(whole: npt.NDArray[np.int64]) -> int | None:
    """The step that occurs most often, if there is one such."""
    values, times = np.unique(whole, return_counts=True)
    top = values[times == times.max()]
    return int(top[0]) if len(top) == 1 else None


def _divisor(steps: npt.NDArray[Any]) -> float | None:
    """The largest step of which all steps are whole multiples."""
    if np.issubdtype(steps.dtype, np.integer):
        return float(np.gcd.reduce(steps))
    least = float(steps.min())
    for part in range(1, 13):
        ratio = steps * (part / least)
        if np.all(np.abs(ratio - np.round(ratio)) <= FLOAT_STEP * np.maximum(ratio, 1.0)):
            return least / part
    return None


def _starts(codes: npt.NDArray[np.int32]) -> npt.NDArray[np.int64]:
    """(n,) the first row of each row's series."""
    first = np.flatnonzero(np.r_[True, codes[1:] != codes[:-1]])
    out: npt.NDArray[np.int64] = np.repeat(first, np.diff(np.r_[first, len(codes)]))
    return out


def _ticks(counts: npt.NDArray[Any], codes: npt.NDArray[np.int32], step: float) -> npt.NDArray[np.int64]:
    """Whole steps within each series, laid on the grid of the whole table to the nearest step.

    Series may start between two places of the table's grid; steps inside a series stay exact.
    """
    begin = counts[_starts(codes)]
    inside = np.round((counts - begin) / step)
    before = np.round((begin - counts.min()) / step)
    tick: npt.NDArray[np.int64] = (inside + before).astype(np.int64)
    return tick


def _fitted_step(counts: npt.NDArray[Any], codes: npt.NDArray[np.int32], step: float) -> float:
    """The step that fits best, by least squares of elapsed time on whole steps within series."""
    inside = np.asarray(counts - counts[_starts(codes)], dtype=float)
    whole = np.round(inside / step)
    return float(np.sum(whole * inside) / np.sum(whole**2)) if np.any(whole) else step


def _off(
    counts: npt.NDArray[Any], codes: npt.NDArray[np.int32], tick: npt.NDArray[np.int64], step: float
) -> float:
    start = _starts(codes)
    return float(np.max(np.abs((counts - counts[start]) / step - (tick - tick[start]))))
