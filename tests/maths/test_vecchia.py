"""The nearest-neighbour likelihood: orders, neighbours, factors, and its distance from the dense one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.distance import pdist, squareform

from clingstone.maths import matern, reml, vecchia
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array
from clingstone.maths.vecchia import Order


def correlation(reach: float) -> vecchia.Correlation:
    return lambda distance: matern.kernel(distance, reach)


def world(S: int, seed: int, B: int = 1) -> tuple[Array, Load, Gram]:
    rng = np.random.default_rng(seed)
    P = rng.uniform(size=(S, 2))
    Q = np.linalg.qr(np.column_stack([np.ones(S), P[:, 0] + 0.3 * rng.standard_normal(S)]))[0]
    y = np.linalg.cholesky(4 * np.exp(-squareform(pdist(P)) / 0.15) + np.eye(S)) @ rng.standard_normal((S, B))
    e = y - Q @ (Q.T @ y)
    return P, Load(np.ones(S), Q, e), reml.independent(2, np.sum(e**2, axis=0))


def test_every_beginning_of_the_order_covers_the_map() -> None:
    P = np.random.default_rng(1).uniform(size=(1000, 2))
    order = vecchia.spread_out(P, np.random.default_rng(0))
    assert np.array_equal(np.sort(order), np.arange(1000))
    corner = 4 * (P[order[:40], 0] * 4).astype(int) + (P[order[:40], 1] * 4).astype(int)
    assert len(np.unique(corner)) == 16

    def nearest(some: Array) -> float:
        D = squareform(pdist(some)) + 9 * np.eye(len(some))
        return float(D.min(axis=0).mean())

    assert nearest(P[order[:64]]) > 1.2 * nearest(P[:64])


def test_neighbours_are_the_nearest_earlier_ones() -> None:
    P = np.random.default_rng(2).uniform(size=(300, 3))
    near = vecchia.earlier(P, 6)
    D = squareform(pdist(P))
    for i in range(300):
        want = set(np.argsort(D[i, :i])[:6].tolist())
        got = near[i][near[i] >= 0]
        assert set(got.tolist()) == want
        assert len(got) == min(i, 6)


def test_all_neighbours_are_the_dense_likelihood() -> None:
    P, load, base = world(60, 3, B=3)
    load = Load(np.random.default_rng(4).uniform(0.5, 4, 60), load.TQ, load.TE)
    order = Order.of(P, 59, np.random.default_rng(0))
    found = vecchia.top(base, load, order, correlation(0.15), 4.0)
    exact = matern.top(base, load, 4.0 * np.exp(-squareform(pdist(P)) / 0.15))
    np.testing.assert_allclose(found.QQ, exact.QQ, rtol=1e-8)
    np.testing.assert_allclose(found.QE, exact.QE, rtol=1e-7, atol=1e-9)
    np.testing.assert_allclose(found.EE, exact.EE, rtol=1e-8)
    assert found.logdet == pytest.approx(exact.logdet, rel=1e-10)


def test_error_falls_with_the_number_of_neighbours() -> None:
    P, load, base = world(1200, 5)
    exact = matern.top(base, load, 4.0 * np.exp(-squareform(pdist(P)) / 0.15))
    goal = -0.5 * float(reml.criterion(exact, 1198)[0])
    slope = reml.reduced(exact)[0][1, 0]
    se = float(np.sqrt(np.linalg.inv(exact.QQ)[1, 1] * reml.scale(exact, 1198)[0]))
    gaps, slopes = [], []
    for m in (5, 10, 20, 30):
        order = Order.of(P, m, np.random.default_rng(0))
        found = vecchia.top(base, load, order, correlation(0.15), 4.0)
        gaps.append(abs(-0.5 * float(reml.criterion(found, 1198)[0]) - goal))
        slopes.append(abs(reml.reduced(found)[0][1, 0] - slope) / se)
    assert gaps[0] > gaps[2]
    assert gaps[2] < 4.0
    assert gaps[3] < 2.0
    assert slopes[2] < 0.05


def test_root_whiten_draw_and_across_agree_with_one_another() -> None:
    P, load, _ = world(200, 6)
    order = Order.of(P, 15, np.random.default_rng(0))
    noise = np.random.default_rng(7).uniform(0.5, 2, 200)
    weights, logdet = order.rows(correlation(0.2), 3.0, noise[order.order])
    U = order.root(weights).toarray()
    assert np.allclose(np.triu(U, 1), 0)
    np.testing.assert_allclose(order.whiten(weights, load.TQ), U @ load.TQ[order.order], rtol=1e-10)
    assert logdet.sum() == pytest.approx(-2 * np.log(np.diag(U)).sum())
    V = np.linalg.inv(U.T @ U)
    exact = 3 * np.exp(-squareform(pdist(P)) / 0.2) + np.diag(noise)
    exact = exact[np.ix_(order.order, order.order)]
    assert np.abs(V - exact).max() < 0.3  # of a variance of 3 to 5
    assert np.abs(V - exact).mean() < 0.02
    np.testing.assert_allclose(np.diag(V), np.diag(exact), rtol=0.02)
    z = np.random.default_rng(8).standard_normal((200, 2))
    np.testing.assert_allclose(U @ order.draw(weights, z)[order.order], z, atol=1e-10)
    half = order.across(weights, load.TQ)
    T = load.TQ[order.order]
    np.testing.assert_allclose(half.T @ half, T.T @ V @ T, rtol=1e-8)


def test_a_covariance_that_is_none_stops() -> None:
    P, load, base = world(50, 9)
    order = Order.of(P, 5, np.random.default_rng(0))
    with pytest.raises(np.linalg.LinAlgError):
        vecchia.top(base, load, order, lambda d: np.cos(40 * d) * 2 + 1, 50.0)
