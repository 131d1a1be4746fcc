"""Curves of residual correlation by elapsed time, with the band of independent data."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from clingstone.evidence.finding import Curve
from clingstone.evidence.read import degenerate, floats, normal_quantile
from clingstone.maths.once import Array
from clingstone.maths.ratio import Law
from clingstone.structure.serial import Rows

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

CURVE_LAGS = 20
CURVE_BINS = 12


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
    for k in range(1, min(CURVE_LAGS, int(series.part.sizes.max()) // 2) + 1):
        pairs = len(series.pairs(k)[0])
        if pairs < 3:
            continue
        null = law(k)
        slope = (m + 2) * null.variance
        value = float(response.gram(null.form)[1][0] / response.ss[0])
        rows.append((k * series.step, (value - null.mean) / slope, z * np.sqrt(null.variance) / slope, pairs))
    if not rows:
        return None
    x, y, half, pairs_at = np.array(rows).T
    return Curve(
        kind="autocorrelation",
        x=floats(x),
        y=floats(np.clip(y, -1.0, 1.0)),
        low=floats(-half),
        high=floats(half),
        size=floats(pairs_at),
        x_name="time apart",
        y_name="correlation of residuals",
        unit=series.unit,
        note="band: where a single correlation lies in 95 % of data without dependence"
        if fits.run.settings.confidence == 0.95
        else "",
    )


def elapsed_curve(fits: Fits, earlier: Rows, later: Rows, apart: Array) -> Curve | None:
    """The same for irregular times: near pairs of one series in bins of equal number by time apart.

    e_i e_j has null mean −σ²h_ij (h the hat matrix), which is taken off, and is divided by s². The
    band is ±z/√pairs, approximate because near pairs share rows.
    """
    design, response = fits.design, fits.response
    keep = apart > 0
    if bool(degenerate(response)[0]) or keep.sum() < 3 * CURVE_BINS:
        return None
    earlier, later, apart = earlier[keep], later[keep], apart[keep]
    e, Q, s2 = response.residual[:, 0], design.Q, float(response.s2[0])
    product = e[earlier] * e[later] / s2 + np.einsum("ij,ij->i", Q[earlier], Q[later])
    bins = np.array_split(np.argsort(apart, kind="stable"), CURVE_BINS)
    half = normal_quantile(fits) / np.sqrt([len(b) for b in bins])
    assert design.serial is not None
    return Curve(
        kind="autocorrelation",
        x=floats([apart[b].mean() for b in bins]),
        y=floats(np.clip([product[b].mean() for b in bins], -1.0, 1.0)),
        low=floats(-half),
        high=floats(half),
        size=floats([len(b) for b in bins]),
        x_name="time apart",
        y_name="correlation of residuals",
        unit=design.serial.unit,
        note="pairs in bins of equal number; the band is approximate",
    )
