"""Searches over many places: where they start, and that they end where a search from nothing does."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from clingstone.covariance.fits import Fits
from clingstone.covariance.thin import thin
from clingstone.design.derived import extend
from clingstone.maths.search import minimise
from clingstone.run import Run

from ..evidence.factories import design
from ..evidence.factories import fits as made

S = 340
NODE = frozenset({"spatial"})


def world(reach: float, seed: int = 3) -> Fits:
    """A field of a given range over the unit square, three parts of it to one of noise."""
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(S, 2))
    L = np.linalg.cholesky(np.exp(-cdist(xy, xy) / reach) + 1e-10 * np.eye(S))
    x = rng.standard_normal(S)
    y = x + np.sqrt(0.75) * L @ rng.standard_normal(S) + np.sqrt(0.25) * rng.standard_normal(S)
    return made(design(x, xy=xy), y)


def test_a_part_keeps_what_is_near_and_what_is_far() -> None:
    one = world(0.2)
    part = thin(one.response, 120, np.random.default_rng(0)).design.spatial
    whole = one.design.spatial
    assert part is not None
    assert whole is not None
    near = [np.median(cKDTree(s.points).query(s.points, k=2)[0][:, 1]) for s in (part, whole)]
    # Scattered places alone would lie √(340/120) = 1.7 times as far from each other.
    assert near[0] == pytest.approx(near[1], rel=0.25)
    assert part.extent == pytest.approx(whole.extent, rel=0.15)
    assert 60 <= part.count <= 120


@pytest.mark.parametrize("reach", [0.02, 0.1, 0.4])
def test_a_thinned_start_ends_where_a_search_from_nothing_does(reach: float) -> None:
    one = world(reach)
    algebra = one.algebra(NODE)
    assert algebra.heavy
    field = algebra.field(one.response, one.design.m)
    assert field is not None
    cold = minimise(field, algebra.parameters)
    assert -2 * one[NODE].loglik[0] == pytest.approx(cold.value, abs=1e-5)
    assert one[NODE].theta[:, 0] == pytest.approx(cold.theta, abs=1e-3)


def test_a_wider_mean_starts_from_the_fit_before_and_ends_where_a_fit_of_its_own_does() -> None:
    one = world(0.2)
    sites = one.design.spatial
    assert sites is not None
    wide = extend(one.design, "surface", sites.xy[sites.part.codes])
    one[NODE]
    again = one.onto(wide)
    alone = Fits(again.response, Run(one.run.settings))
    assert again.near is one
    assert alone.near is None
    assert again[NODE].loglik[0] == pytest.approx(alone[NODE].loglik[0], abs=1e-5)
    assert again[NODE].theta[:, 0] == pytest.approx(alone[NODE].theta[:, 0], abs=1e-3)
    few = [int(fit[NODE].history[0].split()[0]) for fit in (again, alone)]
    assert few[0] < 30
