"""Curves of residual correlation by elapsed time, with the band of independent data."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.finding import Curve
from clingstone.evidence.read import degenerate, floats, normal_quantile
from clingstone.maths.forms import lagged
from clingstone.maths.once import Array
from clingstone.maths.ratio import Law
from clingstone.structure.serial import Rows

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

CURVE_LAGS = 20
CURVE_BINS = 12
# Exact moments of an autocorrelation cost O(n p²) each; beyond this many rows they hardly differ from
# their large-sample values.
EXACT_MOMENTS = 5000
Lines = dict[str, tuple[tuple[float, ...], tuple[float, ...]]]
GRID_MOST = 4  # times the rows: the longest grid of steps that is laid out


def lag_products(response: Response, top: int) -> tuple[Array, Array]:
    """(top, B) Σ e_t e_{t−k} within series for k = 1 … top, and the numbers of pairs (top,).

    On a grid of steps with room between the series, so that a lag is a shift; where the steps are too spread
    out for that, pair by pair.
    """
    series = response.design.serial
    assert series is not None
    assert series.tick is not None
    first = series.part.first
    last = np.append(first[1:], series.part.n) - 1
    lengths = series.tick[last] - series.tick[first] + 1 + top
    N = int(lengths.sum())
    if series.ties or GRID_MOST * response.design.n + 1000 < N:
        pairs = [series.pairs(k) for k in range(1, top + 1)]
        e = response.residual
        sums = [np.einsum("ij,ij->j", e[earlier], e[later]) for earlier, later in pairs]
        return np.stack(sums), np.array([len(later) for _, later in pairs], dtype=float)
    begin = np.append(0, np.cumsum(lengths)[:-1]) - series.tick[first]
    place = begin[series.part.codes] + series.tick
    U, held = np.zeros((response.B, N)), np.zeros(N, dtype=bool)
    U[:, place], held[place] = response.residual.T, True
    sums = [np.einsum("bt,bt->b", U[:, :-k], U[:, k:]) for k in range(1, top + 1)]
    counts = [float(np.count_nonzero(held[:-k] & held[k:])) for k in range(1, top + 1)]
    return np.stack(sums), np.array(counts)


def lag_curve(fits: Fits, law: Callable[[int], Law]) -> Curve | None:
    """Correlation at lags 1, 2, …, one score step each, with its pointwise band without dependence.

    law : the null law of e'S_k e/e'e at lag k; its exact mean and variance centre and scale.
    """
    series, response, m = fits.design.serial, fits.response, fits.design.m
    assert series is not None
    if bool(degenerate(response)[0]):
        return None
    z = normal_quantile(fits)
    rows: list[tuple[float, float, float, float]] = []
    top = min(CURVE_LAGS, int(series.part.sizes.max()) // 2)
    if top < 1:
        return None
    sums, counts = lag_products(response, top)
    for k, pairs in enumerate(counts, start=1):
        if pairs < 3:
            continue
        if fits.design.n > EXACT_MOMENTS:
            # n r_k/N_k with the large-sample deviation 1/√N_k: the design hardly moves them any more.
            value = float(sums[k - 1, 0] / response.ss[0]) * fits.design.n / pairs
            rows.append((k * series.step, value, z / np.sqrt(pairs), pairs))
            continue
        null = law(k)
        slope = (m + 2) * null.variance
        value = float(sums[k - 1, 0] / response.ss[0])
        rows.append((k * series.step, (value - null.mean) / slope, z * np.sqrt(null.variance) / slope, pairs))
    if not rows:
        return None
    x, y, half, pairs_at = np.array(rows).T
    whole_run = len(rows) == round(float(x[-1] / series.step))  # every lag from 1 on is there
    lines = {"partial correlation": (floats(x), floats(partial(y)))} if whole_run else {}
    note = ""
    if fits.run.settings.confidence == 0.95:
        note = "band: where a single correlation lies in 95 % of data without dependence"
    return _curve(x, y, half, pairs_at, series.unit, note, lines)


def partial(r: Array) -> Array:
    """Partial correlations of lags 1 … K from correlations (Durbin–Levinson), kept within −1 … 1."""
    phi, out = np.zeros(0), np.empty(len(r))
    for k in range(len(r)):
        rest = 1.0 - phi @ r[:k]
        out[k] = np.clip((r[k] - phi @ r[:k][::-1]) / rest, -1.0, 1.0) if rest > 1e-8 else 0.0
        phi = np.append(phi - out[k] * phi[::-1], out[k])
    return out


def elapsed_curve(fits: Fits, earlier: Rows, later: Rows, apart: Array) -> Curve | None:
    """The same for irregular times: near pairs of one series in bins of equal number by time apart.

    Each bin is a form of its own, with the exact mean and variance that its ratio has without dependence;
    the line is the semivariance, each squared difference over its expectation: 1 without dependence.
    """
    design, response = fits.design, fits.response
    keep = apart > 0
    if bool(degenerate(response)[0]) or keep.sum() < 3 * CURVE_BINS:
        return None
    earlier, later, apart = earlier[keep], later[keep], apart[keep]
    bins = np.array_split(np.argsort(apart, kind="stable"), CURVE_BINS)
    z, e = normal_quantile(fits), response.residual[:, 0]
    rows = []
    for k, b in enumerate(bins):
        null = Law(lagged(earlier[b], later[b], design.n, f"elapsed bin {k}"), design.basis)
        slope = (design.m + 2) * null.variance
        if not slope > 0:
            return None
        value = float(response.gram(null.form)[1][0] / response.ss[0])
        half = z * np.sqrt(null.variance) / slope
        rows.append((apart[b].mean(), (value - null.mean) / slope, half, len(b)))
    x, y, half, size = np.array(rows).T
    gamma = _semivariance(design, e, earlier, later) / float(response.s2[0])
    assert design.serial is not None
    note = "pairs in bins of equal number; band: where a single bin lies without dependence"
    line = {"semivariance": (floats(x), floats([np.nanmean(gamma[b]) for b in bins]))}
    return _curve(x, y, half, size, design.serial.unit, note, line)


def _curve(x: Array, y: Array, half: Array, size: Array, unit: str, note: str, lines: Lines) -> Curve:
    return Curve(
        kind="autocorrelation",
        x=floats(x),
        y=floats(np.clip(y, -1.0, 1.0)),
        low=floats(-half),
        high=floats(half),
        size=floats(size),
        x_name="time apart",
        y_name="correlation of residuals",
        unit=unit,
        note=note,
        lines=lines,
    )


def _semivariance(design: Design, e: Array, earlier: Rows, later: Rows) -> Array:
    """(pairs,) (e_i − e_j)²/(2 − h_ii − h_jj + 2h_ij), NaN where the model leaves a pair no room."""
    h, Q = design.basis.leverage, design.Q
    room = 2 - h[earlier] - h[later] + 2 * np.einsum("ij,ij->i", Q[earlier], Q[later])
    return np.asarray((e[earlier] - e[later]) ** 2 / np.where(room > 1e-8, room, np.nan))
