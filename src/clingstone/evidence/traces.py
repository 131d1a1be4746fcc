"""What a figure of the residuals by elapsed time draws: some series one by one, the rest as a band."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from clingstone.display import count
from clingstone.evidence.finding import Curve
from clingstone.evidence.read import degenerate, floats
from clingstone.maths.once import Array, Codes

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

Rows = npt.NDArray[np.int64]

PANELS = 12
POINTS = 400  # of one series; more are taken evenly by place
BINS = 20


def traces(fits: Fits) -> Curve | None:
    """Residuals by elapsed time, a named line for each of at most 12 series.

    Of more series those are taken that lie evenly by rank of their mean residual, so that no figure
    is picked for its look; x, y, low and high are then the median and the 10 % and 90 % quantiles of
    all rows, in at most 20 bins of time.
    """
    series, response = fits.design.serial, fits.response
    if series is None or bool(degenerate(response)[0]):
        return None
    part, e = series.part, response.residual[:, 0]
    chosen = _evenly(part.sums(e) / part.sizes, part.sizes)
    lines = {part.labels[g]: _line(series.elapsed[rows], e[rows]) for g, rows in _rows(part.codes, chosen)}
    note, band = "", (np.zeros(0),) * 4
    if part.count > len(chosen):
        note = f"{len(chosen)} of {count(part.count, 'series')}, evenly by rank of their mean residual"
        band = _band(series.elapsed, e)
    longest = int(max((part.codes == g).sum() for g in chosen))
    if longest > POINTS:
        note += f"{'; ' if note else ''}of longer series {POINTS} rows each, evenly in time"
    at, middle, low, high = band
    return Curve(
        kind="traces",
        x=floats(at),
        y=floats(middle),
        low=floats(low),
        high=floats(high),
        x_name=series.name,
        y_name="residual",
        unit=series.unit,
        note=note,
        lines=lines,
    )


def _evenly(means: Array, sizes: Rows) -> list[int]:
    """Places of at most 12 series of three rows or more (else of any), evenly by rank of their mean."""
    order = np.argsort(means, kind="stable")
    long = order[sizes[order] >= 3]
    order = long if len(long) else order
    places = np.unique(np.linspace(0, len(order) - 1, min(PANELS, len(order))).round().astype(int))
    return [int(g) for g in order[places]]


def _rows(codes: Codes, chosen: list[int]) -> list[tuple[int, Rows]]:
    """Rows of each chosen series in time order, thinned evenly where there are many."""
    out = []
    for g in chosen:
        rows = np.flatnonzero(codes == g).astype(np.int64)
        if len(rows) > POINTS:
            rows = rows[np.unique(np.linspace(0, len(rows) - 1, POINTS).round().astype(int))]
        out.append((g, rows))
    return out


def _line(time: Array, value: Array) -> tuple[tuple[float, ...], tuple[float, ...]]:
    return floats(time), floats(value)


def _band(time: Array, value: Array) -> tuple[Array, Array, Array, Array]:
    """Mean time, median and 10 % and 90 % quantiles of the values in bins of time."""
    distinct = np.unique(time)
    edges = distinct if len(distinct) <= BINS else np.quantile(time, np.linspace(0, 1, BINS + 1)[:-1])
    codes = np.searchsorted(np.unique(edges), time, side="right") - 1
    bins = [np.flatnonzero(codes == c) for c in np.unique(codes)]
    quantiles = np.array([np.quantile(value[b], [0.5, 0.1, 0.9]) for b in bins])
    return np.array([time[b].mean() for b in bins]), *quantiles.T
