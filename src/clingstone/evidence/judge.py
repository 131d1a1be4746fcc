"""From p and the interval of the effect to a verdict, for B columns at once."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from clingstone.evidence.finding import About, Reading, Test, Verdict
from clingstone.evidence.matter import factor_at, group_factors, serial_factors, spatial_factors
from clingstone.maths.once import Array, kept

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

# Below this adjusted p a test speaks; convention.
ALPHA = 0.05
# A curve or trend that may explain a tenth of what is left over can by itself give neighbouring rows
# a correlation of 0.1, where a first-order process begins to widen intervals by a tenth
# (√((1 + ρ)/(1 − ρ)) = 1.10 at ρ = 0.095).
MATTERS_MEAN = 0.10
# Standard deviations that differ by half between the ends of a variable: ordinary intervals begin to
# mislead visibly for a coefficient tied to it; convention.
MATTERS_SPREAD = 1.5

# In this order a verdict is a small integer: larger speaks louder.
VERDICTS: tuple[Verdict, ...] = ("not applicable", "not detected", "unclear", "present")


def could_matter(fits: Fits, test: Test, about: About, reading: Reading) -> npt.NDArray[np.bool_]:
    """(B,) could an effect at the upper end of its interval matter?

    For a structure: would it move the standard error of a coefficient in focus by more than the upper
    end of ``material``, in the model of that structure alone. A share of groups without an interval
    counts with its estimate; anything else without an interval is taken not to matter.
    """
    B = fits.response.B
    groups = test.family == "group" or test.id == "site-f"
    top = reading.estimate if reading.high is None and groups else reading.high
    if top is None:
        return np.zeros(B, dtype=bool)
    high = np.broadcast_to(top, B)
    low = high if reading.low is None else np.broadcast_to(reading.low, B)
    if test.family == "mean":
        return np.asarray(high >= MATTERS_MEAN)
    if test.family == "lookalike":
        return np.asarray((high > MATTERS_SPREAD) | (low < 1 / MATTERS_SPREAD))
    factors = _factors(fits, test, about)
    if factors is None:
        return np.zeros(B, dtype=bool)
    return np.asarray(factor_at(factors, np.nan_to_num(high)) > fits.run.settings.material[1])


def _factors(fits: Fits, test: Test, about: About) -> Array | None:
    if test.family == "group" or test.id == "site-f":  # the same analysis of variance
        if about.key not in fits.design.partitions:
            return None  # of a predictor at a level: its size is no likeness of rows
        return np.asarray(group_factors(fits.design, about.key))
    if not test.primary:
        return None  # their sizes are not correlations of one step
    if test.family == "serial":
        return np.asarray(serial_factors(fits.design))
    child = fits.run.child("site factors")
    place = ("site factors", about.key, fits.run.settings.seed)
    return kept(fits.design, place, lambda: spatial_factors(fits.design, about.key, child))


def verdicts(fits: Fits, test: Test, about: About, reading: Reading, p: Array) -> npt.NDArray[np.int8]:
    """(B,) places in VERDICTS. p : adjusted where the test is adjusted.

    present : p below 0.05. unclear : p is not, but the effect could matter. not detected : neither.
    Fewer sites than a verdict needs: unclear at best. NaN p: not applicable.
    """
    if reading.flag is not None:
        return np.where(reading.flag, 3, 1).astype(np.int8)
    doubt = could_matter(fits, test, about, reading)
    out = np.where(p < ALPHA, 3, np.where(doubt, 2, 1))
    design, limits = fits.design, fits.run.limits
    if test.family == "spatial" and test.id != "site-f" and design.spatial is not None:
        few = design.spatial.count < limits.sites_verdict
        out = np.full_like(out, 2) if few else out
    return np.where(np.isnan(p), 0, out).astype(np.int8)
