"""Rows of less than two degrees of freedom, and the df of a variance estimated at zero."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.remedies import remedy
from clingstone.remedies.refit import refit
from clingstone.run import one_thread
from tests.ledger import factories as make


def test_a_row_below_two_degrees_of_freedom_is_refused_with_the_reason():
    """Three groups and a term of groups: one degree of freedom between them."""
    rng = np.random.default_rng(1)
    group = np.repeat(np.arange(5), 6)
    z = np.repeat([0.0, 1, 0, 1, 0.5], 6)
    w = np.repeat([1.0, 0, 3, 0, 5.0], 6)
    v = np.repeat([0.0, 2, 0, 1, 9.0], 6)
    d = make.design({"z": z, "w": w, "v": v}, groups={"g": group})
    f = make.fits(d, 2 * rng.standard_normal(5)[group] + rng.standard_normal(30))
    with one_thread():
        row = refit(remedy("mixed-intercept"), "g", f).get("z")
    assert row.df < 2
    assert row.status.startswith("unusable: with 1.0 degrees of freedom")


def test_at_a_variance_of_zero_a_term_of_groups_keeps_the_df_of_groups():
    """12 equal groups, two columns of groups: 10; a term inside groups has n less groups and itself."""
    rng = np.random.default_rng(3)
    group = np.repeat(np.arange(12), 5)
    arm, x = (group % 2).astype(float), rng.standard_normal(60)
    x = x - np.bincount(group, x)[group] / 5
    y = rng.standard_normal(60)
    y = y - (np.bincount(group, y) / 5)[group]  # less alike than chance: the variance is zero
    f = make.fits(make.design({"arm": arm, "x": x}, groups={"g": group}), y)
    with one_thread():
        fit = refit(remedy("mixed-intercept"), "g", f)
    assert fit.boundary
    assert fit.get("arm").df == pytest.approx(10)
    assert fit.get("x").df == pytest.approx(60 - 12 - 1)
