"""Sizes of the tests of places and coverages of the refits, on three kinds of map, near and far dependence.

Places on a lattice, in clusters, and at random in a square of side 1; a predictor that is smooth over the map
beside one that is not. The sets marked slow repeat the fast ones on every map with more columns of y.
"""

from __future__ import annotations

from functools import cache
from typing import Literal

import numpy as np
import pytest

from clingstone.design.design import Design
from clingstone.evidence.finding import About
from clingstone.evidence.lagrange import Lagrange
from clingstone.evidence.spatial import Moran
from clingstone.maths.once import Array
from clingstone.remedies import refit, remedy
from tests.remedies.cases import fits
from tests.remedies.test_places import field, mapped, y_slope

Layout = Literal["lattice", "clusters", "random"]
LAYOUTS: tuple[Layout, ...] = ("lattice", "clusters", "random")
NEAR, FAR = 0.04, 0.15  # ranges φ: practical ranges of 0.12 and 0.45
REMEDIES = ("spatial-gls", "spatial-error", "spatial-hac", "spatial-components")


def places(layout: Layout) -> Array:
    rng = np.random.default_rng(3)
    if layout == "lattice":
        side = (np.arange(9) + 0.5) / 9
        return np.stack(np.meshgrid(side, side), axis=-1).reshape(-1, 2)
    if layout == "clusters":
        centre = np.repeat(rng.uniform(0.1, 0.9, (16, 2)), 5, axis=0)
        return centre + 0.03 * rng.standard_normal((80, 2))
    return rng.uniform(size=(80, 2))


@cache
def world(layout: Layout) -> tuple[Array, Array, Design]:
    xy = places(layout)
    smooth = np.sin(3 * xy[:, 0]) + xy[:, 1]
    X = np.column_stack([np.ones(len(xy)), smooth, np.random.default_rng(4).standard_normal(len(xy))])
    return xy, X, mapped(X, xy)


def covered(layout: Layout, reach: float, B: int, id: str) -> tuple[Array, float]:
    """Share of B intervals with the truth inside: of both predictors, and the smooth one's ordinary ones."""
    xy, X, made = world(layout)
    Y = field(xy, reach, B, np.random.default_rng(5))
    one = fits(made, Y)
    chosen = remedy(id)
    # Smooth maps look out for more dependence than one response shows, which may show too much for them.
    working = None if id == "spatial-components" else chosen.working(fits(made, Y[:, 0]))
    found = chosen.prepare(made, working).fit(one)
    inside = np.mean((found.low <= 0) & (found.high >= 0), axis=1)
    return inside[1:], float(np.mean(np.abs(y_slope(X, Y)) < 1.99))


def error(B: int) -> float:
    return float(3 * np.sqrt(0.95 * 0.05 / B))


# What a method may fall short by beside Monte-Carlo error. An exponential field is no autoregression.
SHORT = {"spatial-gls": 0.02, "spatial-error": 0.05, "spatial-hac": 0.02, "spatial-components": 0.03}


def least(id: str, B: int) -> float:
    return 0.95 - SHORT[id] - error(B)


@pytest.mark.parametrize("id", REMEDIES)
def test_refits_cover_at_random_places(id: str) -> None:
    covers, plain = covered("random", FAR, 200, id)
    assert min(covers) > least(id, 200)
    assert covers[0] > plain


@pytest.mark.slow
@pytest.mark.parametrize("reach", [NEAR, FAR])
@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("id", REMEDIES)
def test_refits_cover_on_every_map(id: str, layout: Layout, reach: float) -> None:
    covers, plain = covered(layout, reach, 300, id)
    assert min(covers) > least(id, 300)
    assert covers[0] > plain


@pytest.mark.parametrize("layout", LAYOUTS)
def test_tests_keep_their_size_on_every_map(layout: Layout) -> None:
    _, X, made = world(layout)
    B = 3000
    one = fits(made, X[:, 1:2] + np.random.default_rng(6).standard_normal((len(X), B)))
    for near in made.neighbours:
        about = About(near.key, near.about)
        for level in (0.05, 0.01):
            size = np.mean(Moran().read(one, about).p <= level)
            assert size == pytest.approx(level, abs=3.3 * np.sqrt(level * (1 - level) / B))
    about = About(made.neighbours[0].key, "")
    for kind in ("lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag"):
        # χ² with 1 df is a large-sample law: at 80 places it may be off by a point and a half.
        size = np.mean(Lagrange(kind).read(one, about).p <= 0.05)  # type: ignore[arg-type]
        assert size == pytest.approx(0.05, abs=0.015 + 3.3 * np.sqrt(0.05 * 0.95 / B))


@pytest.mark.parametrize("id", REMEDIES)
def test_turning_the_map_its_unit_and_the_order_of_rows_change_nothing(id: str) -> None:
    xy, X, made = world("random")
    y = field(xy, FAR, 1, np.random.default_rng(7))[:, 0]
    turn = np.radians(33.0)
    moved = 1000 * xy @ np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]) + 5e4
    order = np.random.default_rng(8).permutation(len(y))
    plain = refit(remedy(id), "", fits(made, y))
    other = refit(remedy(id), "", fits(mapped(X[order], moved[order]), y[order]))
    for one, two in zip(plain.intervals, other.intervals, strict=True):
        assert (two.estimate, two.se) == pytest.approx((one.estimate, one.se), rel=1e-3)
        assert two.df == pytest.approx(one.df, rel=1e-2)
