"""Smooth maps of the places, and the worst law of t over correlations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.spatial.distance import pdist, squareform

from clingstone.maths import scpc
from clingstone.maths.scpc import Components


def test_strongest_rate_on_a_line_by_hand() -> None:
    # Five places one apart: distances/4 are ¼ (4 pairs), ½ (3), ¾ (2), 1 (1); x = e^{−c/4} solves
    # (4x + 3x² + 2x³ + x⁴)/10 = 0.05.
    found = Components.of(np.arange(5.0)[:, None], 0.05, np.random.default_rng(0))
    x = np.exp(-found.rates[0] / 4)
    assert (4 * x + 3 * x**2 + 2 * x**3 + x**4) / 10 == pytest.approx(0.05, rel=1e-9)
    assert found.scale == 4.0


def test_maps_are_the_eigenvectors_of_the_demeaned_correlation() -> None:
    P = np.random.default_rng(1).uniform(size=(80, 2))
    found = Components.of(P, 0.03, np.random.default_rng(0))
    D = squareform(pdist(P))
    J = np.eye(80) - 1 / 80
    K = J @ np.exp(-found.rates[0] * D / D.max()) @ J
    top = np.linalg.eigvalsh(K)[::-1][:10]
    np.testing.assert_allclose(np.einsum("ij,ik,kj->j", found.R, K, found.R), top, rtol=1e-9)
    np.testing.assert_allclose(found.R.T @ found.R, np.eye(10), atol=1e-10)
    np.testing.assert_allclose(found.R.sum(axis=0), 0, atol=1e-10)


def test_independence_gives_students_t_and_the_batch_equals_each_law() -> None:
    law = scpc.mean_law(np.eye(6))
    for t in (0.3, 2.0, 7.0):
        assert law.tail(np.array([t]))[0] == pytest.approx(2 * stats.t.sf(t, 5), rel=1e-9)
    maps = Components.of(np.random.default_rng(2).uniform(size=(60, 2)), 0.03, np.random.default_rng(0))
    for t in (0.4, 2.5, 30.0):
        each = [one.tail(np.array([t]))[0] for one in maps.laws[6]]
        np.testing.assert_allclose(scpc.tails(maps.laws[6], t), each, rtol=1e-9)


def test_critical_value_and_tail_invert_each_other() -> None:
    maps = Components.of(np.random.default_rng(3).uniform(size=(60, 2)), 0.05, np.random.default_rng(0))
    c = maps.critical(5, 0.05)
    assert scpc.tail(maps.laws[4], np.array([c]))[0] == pytest.approx(0.05, rel=1e-4)
    many = np.linspace(0, 6, 100)
    direct = [scpc.tails(maps.laws[4], float(t)).max() for t in many]
    np.testing.assert_allclose(scpc.tail(maps.laws[4], many), direct, rtol=0.02)
    assert np.isnan(scpc.tail(maps.laws[4], np.array([np.nan]))[0])


def test_size_of_the_test_of_a_mean() -> None:
    # At the strongest correlation, at twice its rate, and under independence: never above 5 %.
    rng = np.random.default_rng(4)
    P, B = rng.uniform(size=(100, 2)), 20_000
    maps = Components.of(P, 0.03, rng)
    q, c = maps.best(0.05)
    assert 4 <= q <= 10
    D = squareform(pdist(P)) / maps.scale
    rates = {}
    for name, rate in {"strongest": maps.rates[0], "twice": 2 * maps.rates[0], "none": 1e9}.items():
        y = np.linalg.cholesky(np.exp(-rate * D) + 1e-10 * np.eye(100)) @ rng.standard_normal((100, B))
        v = np.mean((maps.R[:, :q].T @ y) ** 2, axis=0) / 100
        rates[name] = float(np.mean(np.abs(y.mean(axis=0)) > c * np.sqrt(v)))
    slack = 3 * np.sqrt(0.05 * 0.95 / B)
    assert max(rates.values()) < 0.05 + slack
    assert rates["strongest"] == pytest.approx(0.05, abs=0.015)
    assert rates["none"] > 0.01


def test_many_places_from_some_of_them() -> None:
    P = np.random.default_rng(5).uniform(size=(1500, 2))
    found = Components.of(P, 0.03, np.random.default_rng(0))
    assert len(found.chosen) == scpc.SAMPLE
    assert found.R.shape == (1500, scpc.MORE_MAPS)
    np.testing.assert_allclose(found.R.T @ found.R, np.eye(scpc.MORE_MAPS), atol=1e-8)
    # The first maps from 1,000 places lie close to those from all.
    D = squareform(pdist(P)) / found.scale
    K = scpc._maps(np.exp(-found.rates[0] * D), 4)
    assert np.linalg.svd(K.T @ found.R[:, :6], compute_uv=False).min() > 0.9


def test_units_do_not_matter() -> None:
    P = np.random.default_rng(6).uniform(size=(40, 2))
    one = Components.of(P, 0.03, np.random.default_rng(0))
    two = Components.of(1000 * P + 7, 0.03, np.random.default_rng(0))
    np.testing.assert_allclose(one.rates, two.rates, rtol=1e-8)
    np.testing.assert_allclose(np.abs(one.R), np.abs(two.R), atol=1e-6)


def test_clusters_that_are_tiny_on_their_map_still_have_a_strongest_decay() -> None:
    rng = np.random.default_rng(9)
    P = rng.uniform(size=(40, 2))
    P[:3] += 1e6
    made = Components.of(P, 0.03, np.random.default_rng(0))
    apart = pdist(P) / made.scale
    assert np.mean(np.exp(-made.rates[0] * apart)) == pytest.approx(0.03, rel=1e-6)
