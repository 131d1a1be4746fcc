"""Crossed intercepts against dense matrices: dense rest, sparse factor, weights, gradient, square root."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import crossed, reml
from clingstone.maths.crossed import Cells
from clingstone.maths.partition import Partition

N = 70
RATIOS = np.array([0.7, 0.3, 1.4])


@pytest.fixture(params=[False, True], ids=["plain", "weighted"])
def world(request):
    rng = np.random.default_rng(3)
    root = np.sqrt(rng.uniform(0.5, 2.0, N)) if request.param else None
    one = np.ones(N) if root is None else root
    X = np.column_stack([np.ones(N), rng.normal(size=(N, 2))]) * one[:, None]
    Q, _ = np.linalg.qr(X)
    e = rng.normal(size=(N, 1))
    e = e - Q @ (Q.T @ e)
    parts = tuple(Partition.of(k, rng.integers(0, G, N)) for k, G in (("a", 14), ("b", 7), ("c", 4)))
    V = np.eye(N)
    for ratio, part in zip(RATIOS, parts, strict=True):
        V = V + ratio * (part.codes[:, None] == part.codes) * np.outer(one, one)
    return Cells(parts, root, Q), Q, e, V


@pytest.mark.parametrize("route", ["dense", "sparse", "no classes"])
def test_gram_equals_the_dense_covariance(world, route, monkeypatch):
    cells, Q, e, V = world
    monkeypatch.setattr(crossed, "DENSE", 0 if route == "sparse" else 4000)
    monkeypatch.setattr(crossed, "CLASSES", 0 if route == "no classes" else 25_000_000)
    base = reml.independent(3, np.sum(e**2, axis=0))
    gram = cells.gram(RATIOS, base, cells.sums(e))
    inverse = np.linalg.inv(V)
    np.testing.assert_allclose(gram.QQ, Q.T @ inverse @ Q, atol=1e-12)
    np.testing.assert_allclose(gram.QE, Q.T @ inverse @ e, atol=1e-12)
    np.testing.assert_allclose(gram.EE, e[:, 0] @ inverse @ e[:, 0], rtol=1e-12)
    assert gram.logdet == pytest.approx(np.linalg.slogdet(V)[1], abs=1e-10)


def test_gradient_in_the_logarithms(world):
    cells, _, e, _ = world
    base, TE = reml.independent(3, np.sum(e**2, axis=0)), cells.sums(e)
    value, gradient = cells.criterion(RATIOS, base, TE, N - 3)
    assert value == pytest.approx(float(reml.criterion(cells.gram(RATIOS, base, TE), N - 3)[0]), abs=1e-9)
    for k in range(3):
        ends = [cells.criterion(RATIOS * np.exp(h * np.eye(3)[k]), base, TE, N - 3)[0] for h in (1e-5, -1e-5)]
        assert gradient[k] == pytest.approx((ends[0] - ends[1]) / 2e-5, rel=1e-6, abs=1e-6)


def test_a_ratio_of_zero_leaves_the_level_out(world):
    cells, Q, e, _ = world
    base = reml.independent(3, np.sum(e**2, axis=0))
    one = np.ones(N) if cells.root is None else cells.root
    part = cells.parts[1]
    V = np.eye(N) + 0.9 * (part.codes[:, None] == part.codes) * np.outer(one, one)
    gram = cells.gram(np.array([0.0, 0.9, 0.0]), base, cells.sums(e))
    np.testing.assert_allclose(gram.QQ, Q.T @ np.linalg.inv(V) @ Q, atol=1e-12)


def test_whitening_is_a_square_root_of_the_inverse(world):
    cells, _, _, V = world
    W = cells.whiten(RATIOS, np.eye(N))
    np.testing.assert_allclose(W.T @ W, np.linalg.inv(V), atol=1e-11)
