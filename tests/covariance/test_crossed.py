"""Crossed intercepts as error models: the fast search, boundaries, limits."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance import crossed as room
from clingstone.covariance.algebras import Dense
from clingstone.covariance.crossed import Crossed
from clingstone.maths import reml
from clingstone.maths.search import minimise
from clingstone.needs import NotSupported
from tests.evidence import factories as make

NODE = {"group:a", "group:b"}


def world(n=3000, a=60, b=25, sa=0.8, sb=0.5, seed=4):
    rng = np.random.default_rng(seed)
    A, B = rng.integers(0, a, n), rng.integers(0, b, n)
    x = rng.normal(size=n)
    y = sa * rng.normal(size=a)[A] + sb * rng.normal(size=b)[B] + rng.normal(size=n)
    return make.fits(make.design(x, groups={"a": A, "b": B}), y)


def test_it_equals_the_dense_algebra():
    f = world(n=200)
    algebra = f.algebra(NODE)
    assert isinstance(algebra, Crossed)
    theta = np.array([-0.4, 0.3])
    ours, plain = algebra.gram(theta, f.response), Dense(f.design, algebra.pieces).gram(theta, f.response)
    np.testing.assert_allclose(ours.QQ, plain.QQ, atol=1e-11)
    np.testing.assert_allclose(ours.EE, plain.EE, rtol=1e-11)
    assert ours.logdet == pytest.approx(plain.logdet, abs=1e-9)


def test_the_fast_search_finds_the_optimum_of_the_plain_one(monkeypatch):
    f = world()
    monkeypatch.setattr(room, "SMALL", 0)
    algebra = f.algebra(NODE)
    fast = algebra.minimum(f.response, f.design.m, None)

    slow = minimise(
        lambda theta: float(reml.criterion(algebra.gram(theta, f.response), f.design.m)[0]),
        algebra.parameters,
    )
    assert fast is not None
    assert fast.converged
    assert fast.value == pytest.approx(slow.value, abs=1e-6)
    np.testing.assert_allclose(fast.theta, slow.theta, atol=1e-4)


def test_a_level_without_variance_is_put_at_zero(monkeypatch):
    monkeypatch.setattr(room, "SMALL", 0)
    hits = 0
    for seed in range(8):
        f = world(n=800, sb=0.0, seed=seed)
        model = f[NODE]
        alone = f[{"group:a"}]
        assert model.loglik[0] >= alone.loglik[0] - 1e-6
        if model.variances["group:b"][0] == 0:
            hits += 1
            assert model.at_bound[:, 0].tolist() == [False, True]
            assert model.loglik[0] == pytest.approx(alone.loglik[0], abs=1e-5)
        assert model.converged.all()
    # Without a variance its estimate is zero in about half of all data.
    assert 1 <= hits <= 7


def test_levels_in_any_order_give_one_fit(monkeypatch):
    monkeypatch.setattr(room, "SMALL", 0)
    f = world()
    d = f.design
    A, B = (d.partitions[k].codes for k in "ab")
    y = d.Q @ f.response.coef[:, 0] + f.response.residual[:, 0]
    swapped = make.fits(make.design(d.covariates["x1"], groups={"b": B, "a": A}), y)
    for key in ("group:a", "group:b"):
        assert swapped[NODE].variances[key][0] == pytest.approx(f[NODE].variances[key][0], rel=1e-5)


def test_many_columns_share_a_grid():
    f = world(n=300)
    drawn = f.redraw(NODE, 30, "test")
    many = drawn[NODE]
    one = make.fits(f.design, drawn.design.Q @ drawn.response.coef[:, 3] + drawn.response.residual[:, 3])[
        NODE
    ]
    assert many.loglik[3] == pytest.approx(one.loglik[0], abs=1e-3)


def test_too_many_cells_are_refused(monkeypatch):
    monkeypatch.setattr(room, "CELLS", 20)
    with pytest.raises(NotSupported, match="25 cells"):
        world(n=300)[NODE]
