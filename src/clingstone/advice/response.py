"""What kind of number the response is: two values and counts spread as their mean does."""

from __future__ import annotations

import numpy as np

from clingstone.advice.named import Fact, yes
from clingstone.covariance.fits import Fits
from clingstone.design.design import rows_of
from clingstone.display import significant
from clingstone.maths.once import Array

SMALL = 10.0  # mean below which whole numbers that reach zero are taken for counts


def response_facts(fits: Fits) -> list[Fact]:
    """Whether the first column of y takes two values only, or looks like counts; nothing without a model."""
    design, response = fits.design, fits.response
    if not design.known or response.residual is None:
        return []
    y = rows_of(design, design.Q @ response.coef[:, :1] + response.residual[:, :1])[:, 0]
    values, counts = _levels(y), _counts(y)
    two = len(values) == 2
    said = " and ".join(significant(float(v)) for v in values[:2])
    return [
        yes("response of two values", two, f"values of the response: {said if two else 'more than two'}"),
        yes("response of counts", counts and not two, "the response is of small whole numbers from zero"),
    ]


def _levels(y: Array) -> Array:
    """The distinct values, up to three of them, to the precision that a fit keeps: 1e-9 of their spread."""
    low, high = float(y.min()), float(y.max())
    lost = max(1e-9 * (high - low), 64 * np.finfo(float).eps * float(np.max(np.abs(y))))
    near = np.minimum(np.abs(y - low), np.abs(y - high)) <= lost
    return np.array([low, high]) if near.all() and high > low else np.array([low, (low + high) / 2, high])


def _counts(y: Array) -> bool:
    whole = np.abs(y - np.round(y)) <= 1e-7 * max(1.0, float(np.max(np.abs(y))))
    return bool(whole.all() and np.round(y.min()) == 0 and y.mean() < SMALL)
