"""Kernels over places and the law of what they estimate, against the obvious loops."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.spatial.distance import pdist, squareform

from clingstone.maths import spatialhac
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.maths.spatialhac import Kernel, Law


@pytest.mark.parametrize(
    ("kernel", "half"), [("spherical", 0.3125), ("wendland", 0.1875), ("bartlett", 0.5), ("uniform", 1.0)]
)
def test_weights_by_hand(kernel: Kernel, half: float) -> None:
    # spherical 1 − 1.5/2 + 0.5/8; Wendland (1/2)⁴(4/2 + 1)
    np.testing.assert_allclose(spatialhac.weight(np.array([0.0, 0.5, 1.001]), kernel), [1, half, 0])


@pytest.mark.parametrize("kernel", ["spherical", "wendland", "bartlett", "uniform"])
def test_table_equals_the_dense_one_and_only_some_kernels_are_positive(kernel: Kernel) -> None:
    P = np.random.default_rng(1).uniform(size=(400, 2))
    K = spatialhac.table(cKDTree(P), P, 0.3, kernel).toarray()
    np.testing.assert_allclose(K, spatialhac.weight(squareform(pdist(P)) / 0.3, kernel), atol=1e-9)
    smallest = float(np.linalg.eigvalsh(K)[0])
    assert (smallest > -1e-9) == (kernel in spatialhac.POSITIVE)


def world(seed: int) -> tuple[Partition, Array, Array, Array]:
    rng = np.random.default_rng(seed)
    site = np.r_[np.arange(15), rng.integers(0, 15, 10)]
    Q = np.linalg.qr(rng.standard_normal((25, 3)))[0]
    L = rng.standard_normal((25, 25))
    V = L @ L.T
    M = np.eye(25) - Q @ Q.T
    return Partition.of("site", site), Q[:, :2], M @ V @ M, rng.uniform(size=(15, 2))


def test_moments_equal_traces_of_the_whole_form() -> None:
    part, a, MVM, P = world(2)
    K = spatialhac.table(cKDTree(P), P, 0.5, "spherical")
    found = Law.of(part, a, MVM).moments(K)
    Z = part.indicator.T.toarray()
    for j in range(2):
        B = np.diag(a[:, j]) @ Z @ K.toarray() @ Z.T @ np.diag(a[:, j])
        assert found.mean[j] == pytest.approx(np.trace(B @ MVM))
        assert found.variance[j] == pytest.approx(2 * np.trace(B @ MVM @ B @ MVM))
        assert found.df[j] == pytest.approx(np.trace(B @ MVM) ** 2 / np.trace(B @ MVM @ B @ MVM))


def test_drawn_moments_come_near_the_exact_ones() -> None:
    part, a, MVM, P = world(3)
    K = spatialhac.table(cKDTree(P), P, 0.5, "spherical")
    exact = Law.of(part, a, MVM).moments(K)
    values, vectors = np.linalg.eigh(MVM)
    root = vectors * np.sqrt(np.maximum(values, 0))
    e = root @ np.random.default_rng(4).standard_normal((25, 20_000))
    drawn = Law.by_draws(part, a, e).moments(K)
    np.testing.assert_allclose(drawn.mean, exact.mean, rtol=0.05)
    np.testing.assert_allclose(drawn.variance, exact.variance, rtol=0.15)


def test_meat_equals_the_double_sum() -> None:
    rng = np.random.default_rng(5)
    P, scores = rng.uniform(size=(12, 2)), rng.standard_normal((12, 2, 3))
    K = spatialhac.table(cKDTree(P), P, 0.4, "bartlett")
    D = squareform(pdist(P))
    expected = np.zeros((2, 2, 3))
    for s in range(12):
        for t in range(12):
            expected += max(1 - D[s, t] / 0.4, 0) * np.einsum("ib,jb->ijb", scores[s], scores[t])
    np.testing.assert_allclose(spatialhac.meat(K, scores), expected, atol=1e-9)


def test_negative_variances_are_clipped_and_told() -> None:
    bad = np.diag([1.0, -0.5])[:, :, None]
    fixed, told = spatialhac.clipped(bad)
    np.testing.assert_allclose(fixed[:, :, 0], np.diag([1.0, 0.0]), atol=1e-12)
    assert told
    assert not spatialhac.clipped(np.eye(2)[:, :, None])[1]
