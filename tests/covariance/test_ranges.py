"""Places of many columns at once, between shared ranges, against one Cholesky factor per θ."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance import ranges as room
from clingstone.covariance.each import each
from clingstone.covariance.fits import Fits
from clingstone.covariance.ranges import Ranges
from clingstone.design.response import Response
from clingstone.remedies import remedy
from clingstone.remedies.remedy import Estimates
from remedies.cases import design, fits


def world(kind: str = "single", B: int = 12, S: int = 60, seed: int = 3) -> Fits:
    """Places with one row each or several, weights or none; columns from no field to a strong one."""
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(S, 2))
    site = np.arange(S) if kind == "single" else np.repeat(np.arange(S), rng.integers(1, 5, S))
    n = len(site)
    X = np.column_stack([np.ones(n), xy[site, 0], rng.normal(size=n)])
    root = np.sqrt(rng.uniform(0.5, 2.0, n)) if kind == "weights" else None
    D = np.sqrt(((xy[:, None] - xy[None]) ** 2).sum(axis=2))
    L = np.linalg.cholesky(np.exp(-D / 0.15) + 1e-10 * np.eye(S))
    size = np.linspace(0.0, 2.0, B)
    Y = (L @ rng.normal(size=(S, B)))[site] * size + rng.normal(size=(n, B))
    of = design(X, xy=xy[site], root=root)
    return Fits(Response.of(of, Y if root is None else Y * root[:, None]), fits(of, Y[:, :1]).run)


def reader(f: Fits) -> Ranges:
    found = each(f.algebra({"spatial"}), f.response)
    assert isinstance(found, Ranges)
    return found


@pytest.mark.parametrize("kind", ["single", "repeats", "weights"])
def test_grams_between_shared_ranges_are_those_of_a_factor(kind):
    f = world(kind)
    many, algebra = reader(f), f.algebra({"spatial"})
    rng = np.random.default_rng(1)
    reach, ratio = algebra.parameters
    K = 60
    theta = np.stack([rng.uniform(reach.low, reach.high, K), rng.uniform(-5, 9, K)])
    theta[0, :2] = reach.low - 1e-3, reach.high + 1e-3  # where differences at the ends look
    theta[1, 2] = ratio.low
    owner = rng.integers(0, f.response.B, K)
    found = many.grams(theta, owner)
    for k in range(K):
        one = algebra.gram(theta[:, k], f.response.column(int(owner[k])))
        size = np.sqrt(np.diag(one.QQ))
        assert np.abs(found.QQ[k] - one.QQ).max() < 1e-8 * (size**2).max()
        assert np.all(np.abs(found.QE[k] - one.QE[:, 0]) < 1e-8 * size * np.sqrt(one.EE[0]))
        assert found.EE[k] == pytest.approx(one.EE[0], rel=1e-8)
        assert found.logdet[k] == pytest.approx(one.logdet, abs=1e-7)


def test_at_a_shared_range_nothing_is_read_between():
    f = world("repeats")
    many, algebra = reader(f), f.algebra({"spatial"})
    theta = np.array([many.nodes[[0, 5, 30, -1]], [-3.0, 0.0, 2.0, 12.0]])
    found = many.grams(theta, np.arange(4))
    for k in range(4):
        one = algebra.gram(theta[:, k], f.response.column(k))
        assert found.QQ[k] == pytest.approx(one.QQ, rel=1e-9, abs=1e-12)
        assert found.EE[k] == pytest.approx(one.EE[0], rel=1e-9)


@pytest.mark.parametrize("kind", ["single", "repeats", "weights"])
def test_estimates_of_a_batch_are_those_of_its_columns_alone(kind):
    f = world(kind)
    found = reader(f).minima()
    inner = 0
    for b in range(f.response.B):
        alone = Fits(f.response.column(b), f.run)[{"spatial"}]
        # Its grid of starts is the finer one: it may find a deeper valley, never a shallower one.
        assert found.value[b] < -2 * alone.loglik[0] + 1e-6
        if found.value[b] < -2 * alone.loglik[0] - 1e-6:
            continue
        assert found.at_bound[1, b] == alone.at_bound[1, 0]
        if not alone.at_bound[:, 0].any():
            assert found.theta[:, b] == pytest.approx(alone.theta[:, 0], abs=2e-5)
            inner += 1
    assert found.converged.all()
    assert inner >= 6


def test_a_field_that_is_not_there_is_put_at_zero():
    rng = np.random.default_rng(8)
    f = fits(design(np.ones((40, 1)), xy=rng.uniform(size=(40, 2))), rng.normal(size=(40, 30)))
    found = reader(f).minima()
    low = f.algebra({"spatial"}).parameters[1].low
    gone = found.at_bound[1] & (found.theta[1] == low)
    assert 3 <= gone.sum() <= 27
    for b in np.flatnonzero(gone):
        alone = Fits(f.response.column(int(b)), f.run)[{"spatial"}]
        assert found.value[b] == pytest.approx(-2 * alone.loglik[0], abs=1e-7)


def test_the_refit_of_a_batch_is_that_of_its_columns():
    f = world()
    ready = remedy("spatial-gls").prepare(f.design, None)
    found: Estimates = ready.fit(f)
    inner = 0
    for b in range(f.response.B):
        one = Fits(f.response.column(b), f.run)
        if one[{"spatial"}].at_bound.any():
            continue
        alone, inner = ready.fit(one), inner + 1
        scale = alone.se[:, 0]
        assert np.all(np.abs(found.estimate[:, b] - alone.estimate[:, 0]) < 1e-5 * scale)
        assert found.se[:, b] == pytest.approx(scale, rel=1e-5)
        assert found.df[:, b] == pytest.approx(alone.df[:, 0], rel=1e-3)
    assert inner >= 5


def test_a_first_column_without_a_field_hides_it_from_no_other():
    f = world("repeats", B=4)  # three parameters, searched column by column; the first column is noise
    node = {"group:site", "spatial"}
    found = f[node]
    assert found.at_bound[:, 0].any()
    for b in range(1, 4):
        alone = Fits(f.response.column(b), f.run)[node]
        assert found.loglik[b] == pytest.approx(alone.loglik[0], abs=1e-4)


def test_blocks_do_not_change_the_grams(monkeypatch):
    f = world("repeats")
    many = reader(f)
    theta = np.array([np.linspace(many.nodes[0], many.nodes[-1], 12), np.linspace(-4, 4, 12)])
    whole = many.grams(theta, np.arange(12))
    monkeypatch.setattr(room, "BLOCK", 1)
    cut = many.grams(theta, np.arange(12))
    for name in ("QQ", "QE", "EE", "logdet"):
        assert getattr(cut, name) == pytest.approx(getattr(whole, name), rel=1e-12, abs=1e-12)


def test_a_map_of_too_many_places_is_left_to_the_search(monkeypatch):
    f = world()
    monkeypatch.setattr(room, "MOST_SITES", 59)
    assert each(f.algebra({"spatial"}), f.response) is None
