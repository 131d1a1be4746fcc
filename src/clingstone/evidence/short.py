"""What short series leave open: how high a correlation may be, and whether it is one at all."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.covariance.unbiased import unbiased
from clingstone.display import bounds, count, number, significant
from clingstone.evidence.nested import level_name
from clingstone.maths.curvature import slopes
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

TOLD_APART = 0.95  # correlation of two estimates beyond which one cannot be told from the other


def half_life(rho: float, series: Series) -> str:
    """ ", half of which is left after 2.4 days" for errors that fade evenly; "" where nothing fades."""
    if not 0.02 < rho < 0.999:
        return ""
    time = np.log(0.5) / np.log(rho) * series.step
    return f", half of which is left after {significant(float(time))} {series.unit or 'time unit'}s"


def short_series(fits: Fits) -> tuple[str, ...]:
    """What a short series does to the correlation, with its median-unbiased value and exact interval."""
    longest = int(_series(fits).part.sizes.max())
    if fits.response.B != 1 or longest >= fits.run.limits.serial_easy_rows:
        return ()
    found = unbiased(fits.response, fits.run.settings.confidence)
    if found is None:
        return ()
    out = (
        "In so short a series the correlation is known roughly: by the exact law of the ratio at each "
        f"correlation, its median-unbiased value is {number(found.rho, 2)}{bounds(found.low, found.high)}"
    )
    return (out + (", which takes in a random walk." if found.high >= 0.995 else "."),)


def told_apart(fits: Fits, given: frozenset[str]) -> tuple[str, ...]:
    """A caveat where a lasting difference between groups and slow fading can hardly be told apart."""
    node = given | {"serial"}
    if fits.response.B != 1 or node != fits.full_node:
        return ()
    model, algebra = fits[node], fits.algebra(node)
    if bool(model.at_bound.any()):
        return ()
    d = len(model.names)
    found = slopes(
        lambda theta: algebra.gram(theta, fits.response), model.theta[:, 0], range(d), fits.design.m
    )
    if found.sound:
        spread = np.linalg.inv(found.information)[1:, 1:]
        scale = np.sqrt(np.diag(spread))
        off = np.abs(spread / np.outer(scale, scale) - np.eye(d)).max()
        if off < TOLD_APART:
            return ()
    (key,) = given
    longest = int(_series(fits).part.sizes.max())
    return (
        f"With at most {count(longest, 'row')} in a series, a lasting difference between "
        f"{level_name(key.removeprefix('group:'))} and errors that fade slowly can hardly be told apart.",
    )


def _series(fits: Fits) -> Series:
    assert fits.design.serial is not None
    return fits.design.serial
