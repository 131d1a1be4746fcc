"""Error models of more places than the dense limit, against the dense ones with the limit lifted."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.distance import pdist, squareform

from clingstone.covariance.vecchia import Nearest
from clingstone.maths import reml
from clingstone.maths.once import Array
from clingstone.maths.search import minimise
from clingstone.needs import Limits, NotSupported

from .worlds import coefficients, fits

FEW = Limits(dense_sites=100)  # the nearest-neighbour likelihood from 101 places on


def field(P: Array, rng: np.random.Generator, reach: float = 0.15) -> Array:
    V = 0.8 * np.exp(-squareform(pdist(P)) / reach)
    return np.asarray(np.linalg.cholesky(V + 1e-10 * np.eye(len(P))) @ rng.standard_normal(len(P)))


def test_fit_comes_near_the_dense_one() -> None:
    rng = np.random.default_rng(1)
    P = rng.uniform(size=(500, 2))
    x = P[:, 0] + 0.3 * rng.standard_normal(500)
    y = 0.5 * x + field(P, rng) + np.sqrt(0.2) * rng.standard_normal(500)
    dense, near = fits(y, x, xy=P), fits(y, x, xy=P, limits=FEW)
    node = {"spatial"}
    assert isinstance(near.algebra(node), Nearest)
    assert not isinstance(dense.algebra(node), Nearest)
    assert near[node].converged.all()
    assert near[node].loglik[0] == pytest.approx(dense[node].loglik[0], abs=2.0)
    assert near[node].shape["spatial.range"][0] == pytest.approx(
        dense[node].shape["spatial.range"][0], rel=0.1
    )
    one, two = coefficients(dense, node), coefficients(near, node)
    assert two[0][1] == pytest.approx(one[0][1], abs=0.1 * one[1][1])
    assert two[1][1] == pytest.approx(one[1][1], rel=0.02)


def test_algebra_of_rows_within_places_agrees_with_itself() -> None:
    rng = np.random.default_rng(2)
    P = rng.uniform(size=(150, 2))
    site = np.r_[np.arange(150), rng.integers(0, 150, 150)]
    x = rng.standard_normal(300)
    weights = rng.uniform(0.5, 2, 300)
    y = field(P, rng)[site] + rng.standard_normal(300)
    near = fits(y, x, xy=P[site], limits=FEW, weights=weights)
    node = frozenset(near.components)
    assert node == {"group:site", "spatial"}
    algebra = near.algebra(node)
    assert isinstance(algebra, Nearest)
    theta = np.array([p.starts[1] for p in algebra.parameters])
    gram = algebra.gram(theta, near.response)
    white = algebra.whiten(theta, np.hstack([near.design.Q, near.response.residual]))
    np.testing.assert_allclose(white[:, :2].T @ white[:, :2], gram.QQ, rtol=1e-8, atol=1e-12)
    assert white[:, 2] @ white[:, 2] == pytest.approx(gram.EE[0], rel=1e-8)
    drawn = algebra.draw(theta, 2.0, rng, 4000)
    own = near.design.Q.T @ drawn
    total = sum(
        float(v[0]) * algebra.spread(key, theta)
        for key, v in algebra.variances(theta[:, None], np.array([2.0])).items()
    )
    np.testing.assert_allclose(own @ own.T / 4000, total, rtol=0.12, atol=0.3)
    dense = fits(y, x, xy=P[site], weights=weights).algebra(node)
    np.testing.assert_allclose(
        algebra.spread("spatial", theta), dense.spread("spatial", theta), rtol=0.02, atol=0.1
    )
    assert gram.logdet == pytest.approx(dense.gram(theta, near.response).logdet, abs=1.0)


def test_many_columns_share_the_grid() -> None:
    rng = np.random.default_rng(3)
    P = rng.uniform(size=(130, 2))
    near = fits(field(P, rng) + 0.4 * rng.standard_normal(130), xy=P, limits=FEW)
    again = near.redraw({"spatial"}, 20, "test")
    ranges = again[{"spatial"}].shape["spatial.range"]
    assert ranges.shape == (20,)
    assert np.nanmedian(ranges) == pytest.approx(near[{"spatial"}].shape["spatial.range"][0], rel=0.5)


def test_regions_above_places_are_refused_with_the_reason() -> None:
    rng = np.random.default_rng(4)
    P = rng.uniform(size=(140, 2))
    region = (P[:, 0] * 6).astype(int)
    near = fits(rng.standard_normal(140), xy=P, groups={"region": region}, limits=FEW)
    with pytest.raises(NotSupported, match="140 places"):
        near.algebra({"group:region", "spatial"})
    assert near.full_node in ({"group:region"}, {"spatial"})
    assert near.left_out


@pytest.mark.parametrize(("seed", "reach", "share"), [(0, 0.02, 0.6), (6, 0.02, 0.6), (16, 0.15, 0.1)])
def test_what_a_part_of_the_places_does_not_show_is_found(seed: int, reach: float, share: float) -> None:
    """A third of the places gives the search its start; a range shorter than their distances hides there."""
    rng = np.random.default_rng(seed)
    P = rng.uniform(size=(360, 2))
    x = rng.standard_normal(360)
    V = share * np.exp(-squareform(pdist(P)) / reach) + (1 - share) * np.eye(360)
    one = fits(np.linalg.cholesky(V) @ rng.standard_normal(360), P[:, 0], x, xy=P)
    algebra, m = one.algebra({"spatial"}), one.design.m
    assert algebra.heavy

    def value(theta: Array) -> float:
        return float(reml.criterion(algebra.gram(theta, one.response), m)[0])

    everywhere = minimise(value, algebra.parameters)
    assert -2 * one[{"spatial"}].loglik[0] == pytest.approx(everywhere.value, abs=1e-5)
