"""A field with levels above the rows of a place, many columns at once, against one Cholesky factor per θ."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.each import each
from clingstone.covariance.fieldeach import FieldEach
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.maths import curvature, matern
from clingstone.remedies import remedy
from clingstone.remedies.remedy import Estimates
from remedies.cases import design, fits

WIDER = ["rows", "weights", "valleys"]


def world(kind: str = "rows", B: int = 10, S: int = 60, seed: int = 3) -> Fits:
    """Three or four rows of each place; weights, or valleys that hold whole places in place of what repeats.

    From no field to a strong one, over effects of the places themselves.
    """
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(S, 2))
    site = np.repeat(np.arange(S), rng.integers(3, 5, S))
    n = len(site)
    X = np.column_stack([np.ones(n), xy[site, 0], rng.normal(size=n)])
    root = np.sqrt(rng.uniform(0.5, 2.0, n)) if kind == "weights" else None
    group = (site if kind != "valleys" else rng.integers(0, 9, S)[site]) + 100
    D = np.sqrt(((xy[:, None] - xy[None]) ** 2).sum(axis=2))
    L = np.linalg.cholesky(np.exp(-D / 0.15) + 1e-10 * np.eye(S))
    Y = (L @ rng.normal(size=(S, B)) * np.linspace(0.0, 2.0, B) + 0.5 * rng.normal(size=(S, B)))[site]
    Y += rng.normal(size=(n, B))
    of = design(X, group=group, xy=xy[site], root=root)
    return Fits(Response.of(of, Y if root is None else Y * root[:, None]), fits(of, Y[:, :1]).run)


def reader(f: Fits) -> FieldEach:
    found = each(f.algebra(f.full_node), f.response)
    assert isinstance(found, FieldEach)
    return found


def some(f: Fits, K: int, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """θ (d, K) and columns (K,), with a variance of zero among them."""
    rng = np.random.default_rng(seed)
    axes = f.algebra(f.full_node).parameters
    theta = np.stack([rng.uniform(-4, 3, K) if a.vanishes else rng.uniform(a.low, a.high, K) for a in axes])
    theta[0, 0] = axes[0].low
    return theta, rng.integers(0, f.response.B, K)


@pytest.mark.parametrize("kind", WIDER)
def test_grams_are_those_of_a_factor(kind):
    f = world(kind)
    many, algebra = reader(f), f.algebra(f.full_node)
    theta, owner = some(f, 20)
    found = many.grams(theta, owner)
    for k in range(20):
        one = algebra.gram(theta[:, k], f.response.column(int(owner[k])))
        assert found.QQ[k] == pytest.approx(one.QQ, abs=1e-12)
        assert found.QE[k] == pytest.approx(one.QE[:, 0], abs=1e-10)
        assert found.EE[k] == pytest.approx(one.EE[0], rel=1e-11)
        assert found.logdet[k] == pytest.approx(one.logdet, abs=1e-9)


@pytest.mark.parametrize("kind", WIDER)
def test_derivatives_are_those_of_differences(kind):
    f = world(kind)
    many = reader(f)
    theta, owner = some(f, 8)
    eta, h = many.eta(theta), 1e-5
    here = many.fields.bent(eta, owner)
    assert here.value == pytest.approx(many.grams(theta, owner).criterion(f.design.m), abs=1e-9)
    for i in range(eta.shape[1]):
        move = np.zeros(eta.shape[1])
        move[i] = h
        up, down = many.fields.bent(eta + move, owner), many.fields.bent(eta - move, owner)
        assert (up.value - down.value) / (2 * h) == pytest.approx(here.slope[:, i], rel=1e-5, abs=1e-4)
        assert (up.slope - down.slope) / (2 * h) == pytest.approx(here.bend[:, i], rel=1e-5, abs=1e-4)
        assert (up.QQ - down.QQ) / (2 * h) == pytest.approx(here.moved[:, i], rel=1e-5, abs=1e-6)


@pytest.mark.parametrize("smoothness", [0.5, 1.5, 2.5])
def test_kernels_with_their_derivatives(smoothness):
    d, h = np.linspace(0, 3, 13), 1e-5
    R, first, second = matern.kernel_bends(d, 0.7, smoothness)
    assert pytest.approx(matern.kernel(d, 0.7, smoothness), abs=1e-15) == R
    assert first == pytest.approx(matern.kernel_slope(d, 0.7, smoothness), abs=1e-15)
    up, down = (matern.kernel_slope(d, 0.7 * np.exp(s * h), smoothness) for s in (1, -1))
    assert second == pytest.approx((up - down) / (2 * h), abs=1e-8)


@pytest.mark.parametrize("kind", ["rows", "valleys", pytest.param("weights", marks=pytest.mark.slow)])
def test_estimates_of_a_batch_are_those_of_its_columns_alone(kind):
    f = world(kind)
    found, inner = reader(f).minima(), 0
    for b in range(f.response.B):
        alone = Fits(f.response.column(b), f.run)[f.full_node]
        # Its grid of starts is the finer one: it may find a deeper valley, never a shallower one.
        assert found.value[b] < -2 * alone.loglik[0] + 1e-6
        if found.value[b] < -2 * alone.loglik[0] - 1e-6 or alone.at_bound[:, 0].any():
            continue
        assert found.theta[:, b] == pytest.approx(alone.theta[:, 0], abs=2e-4)
        inner += 1
    assert found.converged.all()
    assert inner >= 2


def test_a_variance_that_is_not_there_is_put_at_zero():
    f = world()
    many = reader(f)
    found = many.minima()
    bottom = np.array([axis.low for axis in many.algebra.parameters])
    gone = found.theta == bottom[:, None]
    assert 3 <= gone[0].sum() < f.response.B
    assert np.array_equal(found.at_bound[0], gone[0])
    assert np.all(found.at_bound[1, gone[2]])  # no field, no range


def test_the_refit_of_a_batch_is_that_of_its_columns():
    f = world()
    ready = remedy("joint").prepare(f.design, None)
    found: Estimates = ready.fit(f)
    inner = 0
    for b in range(f.response.B):
        alone = Fits(f.response.column(b), f.run)
        one = ready.fit(alone)
        model = alone[f.full_node]
        if abs(model.loglik[0] - f[f.full_node].loglik[b]) > 1e-6 or model.at_bound[:, 0].any():
            continue
        assert found.estimate[:, b] == pytest.approx(one.estimate[:, 0], abs=1e-5 * one.se.max())
        assert found.se[:, b] == pytest.approx(one.se[:, 0], rel=1e-4)
        assert found.df[:, b] == pytest.approx(one.df[:, 0], rel=1e-2)
        inner += 1
    assert inner >= 2


def test_slopes_for_the_df_are_those_of_differences():
    f = world()
    many = reader(f)
    theta, owner = some(f, 3, seed=5)
    theta[0, 0] = -1.0
    found = many.slopes(theta, owner, [0, 1, 2])
    for k in range(3):
        y = f.response.column(int(owner[k]))
        one = curvature.slopes(lambda at, y=y: many.algebra.gram(at, y), theta[:, k], [0, 1, 2], f.design.m)
        assert found.phi[k] == pytest.approx(one.phi, rel=1e-9, abs=1e-14)
        assert found.information[k] == pytest.approx(one.information, rel=1e-4, abs=1e-4)
        for i in range(3):
            assert found.slopes[k, i] == pytest.approx(one.slopes[i], rel=1e-5, abs=1e-9)


def test_order_of_places_and_of_columns_changes_nothing():
    f = world()
    back = Fits(Response.of(f.design, (f.design.Q @ f.response.coef + f.response.residual)[:, ::-1]), f.run)
    one, other = reader(f).minima(), reader(back).minima()
    assert other.value[::-1] == pytest.approx(one.value, abs=1e-8)
