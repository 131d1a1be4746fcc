"""Sandwich covariances and their df against n × n twins."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import sandwich
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition

POWER = {"CR0": 0.0, "CR2": -0.5, "CR3": -1.0}


def problem(seed=1, sizes=(1, 2, 3, 5, 8, 13), p=3):
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(len(sizes)), sizes)
    X = np.column_stack([np.ones(len(group)), rng.normal(size=(len(group), p - 1)) + 0.4 * group[:, None]])
    basis = Basis.of(X)
    order = rng.permutation(len(group))  # clusters need not be contiguous
    basis = Basis.of(X[order])
    part = Partition.of("g", group[order])
    M = np.stack([basis.Q[part.codes == g].T @ basis.Q[part.codes == g] for g in range(part.count)])
    return basis, part, M, rng.normal(size=(len(group), 2))


def dense_weights(basis, part, w, power):
    """(n, G): column g holds (I − H_gg)^k a_g in the rows of cluster g; a = Qw."""
    H = basis.Q @ basis.Q.T
    out = np.zeros((basis.n, part.count))
    for g in range(part.count):
        rows = np.flatnonzero(part.codes == g)
        values, vectors = np.linalg.eigh(np.eye(len(rows)) - H[np.ix_(rows, rows)])
        root = (vectors * np.where(values > 1e-10, np.maximum(values, 1e-300), np.inf) ** power) @ vectors.T
        if power == 0:
            root = np.eye(len(rows))
        out[rows, g] = root @ (basis.Q[rows] @ w)
    return out


@pytest.mark.parametrize("power", ["CR0", "CR2", "CR3"])
def test_covariance_and_df_equal_the_brute_force(power):
    basis, part, M, Y = problem()
    W = basis.contrast(np.eye(3))
    adjusted = sandwich.adjust(M, W, power)
    E = basis.project(Y)
    S = np.stack([basis.Q[part.codes == g].T @ E[part.codes == g] for g in range(part.count)])
    got = sandwich.cluster_covariance(adjusted.a, S)
    df = sandwich.cluster_df(adjusted.a, adjusted.b)
    A = [dense_weights(basis, part, w, POWER[power]) for w in W.T]
    Mhat = np.eye(basis.n) - basis.Q @ basis.Q.T
    for s in range(3):
        for t in range(3):
            wanted = np.sum((A[s].T @ E) * (A[t].T @ E), axis=0)
            assert np.allclose(got[s, t], wanted, rtol=1e-10)
        N = A[s].T @ Mhat @ A[s]
        assert df[s] == pytest.approx(np.trace(N) ** 2 / np.sum(N**2), rel=1e-10)
    assert np.allclose(sandwich.cluster_variance(adjusted.a, S), np.einsum("ssb->sb", got))


@pytest.mark.parametrize("power", ["CR0", "CR2", "CR3"])
def test_joint_df_equals_the_brute_force(power):
    basis, part, M, _ = problem(seed=4)
    W = basis.contrast(np.eye(3))[:, 1:]
    adjusted = sandwich.adjust(M, W, power)
    Mhat = np.eye(basis.n) - basis.Q @ basis.Q.T
    A = [dense_weights(basis, part, w, POWER[power]) for w in W.T]
    omega = np.array([[np.trace(a.T @ Mhat @ b) for b in A] for a in A])
    values, vectors = np.linalg.eigh(omega)
    T = (vectors / np.sqrt(values)) @ vectors.T
    A = [sum(T[u, s] * A[u] for u in range(2)) for s in range(2)]
    N = [[a.T @ Mhat @ b for b in A] for a in A]
    total = sum(np.sum(N[s][s] * N[t][t]) + np.sum(N[s][t] * N[t][s]) for s in range(2) for t in range(2))
    assert sandwich.cluster_joint_df(adjusted.a, adjusted.b) == pytest.approx(2 * 3 / total, rel=1e-10)
    one = sandwich.cluster_joint_df(adjusted.a[:1], adjusted.b[:1])
    assert one == pytest.approx(sandwich.cluster_df(adjusted.a, adjusted.b)[0], rel=1e-10)


@pytest.mark.parametrize(("delta", "power"), [(0, "CR0"), (1, "CR2"), (2, "CR3")])
def test_rows_are_clusters_of_one(delta, power):
    basis, _, _, _ = problem()
    W = basis.contrast(np.eye(3))
    T, lost, _ = sandwich.row_weights(basis.Q, W, delta)
    M = basis.Q[:, :, None] * basis.Q[:, None, :]
    adjusted = sandwich.adjust(M, W, power)
    assert np.allclose(T.T, np.einsum("kgp,gp->kg", adjusted.a, basis.Q), rtol=1e-10)
    assert np.allclose(sandwich.row_df(basis.Q, T), sandwich.cluster_df(adjusted.a, adjusted.b), rtol=1e-10)
    joint = sandwich.cluster_joint_df(adjusted.a[1:], adjusted.b[1:])
    assert sandwich.row_joint_df(basis.Q, T[:, 1:]) == pytest.approx(joint, rel=1e-10)
    assert np.all(lost == 0)


def test_equal_groups_and_a_mean_have_the_textbook_answer():
    # Intercept only, G equal clusters: CR2 is the variance of the cluster means over G, with G − 1 df.
    rng = np.random.default_rng(2)
    y = rng.normal(size=(6, 4)) + rng.normal(size=(6, 1))
    basis, part = Basis.of(np.ones((24, 1))), Partition.of("g", np.repeat(np.arange(6), 4))
    M = np.full((6, 1, 1), 1 / 6)
    W = basis.contrast(np.eye(1))
    adjusted = sandwich.adjust(M, W, "CR2")
    e = basis.project(y.reshape(-1, 1))
    S = part.sums(basis.Q * e)[:, :, None]
    means = y.mean(axis=1)
    assert sandwich.cluster_variance(adjusted.a, S)[0, 0] == pytest.approx(means.var(ddof=1) / 6)
    assert sandwich.cluster_df(adjusted.a, adjusted.b)[0] == pytest.approx(5.0)


def test_a_direction_that_one_cluster_decides_is_told_and_leaves_the_rest_alone():
    rng = np.random.default_rng(5)
    group = np.repeat(np.arange(6), 4)
    x = rng.normal(size=24)
    X = np.column_stack([np.ones(24), x, group == 2])
    basis = Basis.of(X)
    M = np.stack([basis.Q[group == g].T @ basis.Q[group == g] for g in range(6)])
    W = basis.contrast(np.eye(3))
    adjusted = sandwich.adjust(M, W, "CR2")
    assert adjusted.lost[2] > 0.1
    assert adjusted.at[2] == 2
    assert np.all(adjusted.lost[:2] < 1e-10)
    # The rest is as if that cluster had only its within part: unbiased under the working model.
    Mhat = np.eye(24) - basis.Q @ basis.Q.T
    A = dense_weights(basis, Partition.of("g", group), W[:, 1], -0.5)
    assert np.trace(A.T @ Mhat @ A) == pytest.approx(W[:, 1] @ W[:, 1], rel=1e-10)
    assert np.allclose(np.einsum("gp,gp->g", adjusted.a[1], adjusted.b[1]), np.sum(A**2, axis=0))


def test_cr2_is_unbiased_under_the_working_model():
    basis, _, M, _ = problem(seed=8)
    W = basis.contrast(np.eye(3))
    adjusted = sandwich.adjust(M, W, "CR2")
    D = np.einsum("sgp,tgp->stg", adjusted.a, adjusted.b).sum(axis=2)
    K = np.einsum("sgp,tgp->stg", adjusted.b, adjusted.b).sum(axis=2)
    B = np.einsum("sgi,tgi->st", adjusted.b, adjusted.b)
    assert np.allclose(K, B)
    assert np.allclose(D - K, W.T @ W, rtol=1e-10)


@pytest.mark.parametrize("power", ["CR0", "CR2", "CR3"])
def test_a_series_stands_in_for_eigenvectors_where_no_cluster_holds_much(power, monkeypatch):
    rng = np.random.default_rng(4)
    M = sandwich.grams(np.linalg.qr(rng.normal(size=(2000, 4)))[0], Partition.of("g", np.arange(2000) % 100))
    W = rng.normal(size=(4, 3))
    assert 0.01 < np.einsum("gii->g", M).max() < sandwich.SLIGHT
    short = sandwich.adjust(M, W, power)
    monkeypatch.setattr(sandwich, "SLIGHT", 0.0)
    long = sandwich.adjust(M, W, power)
    assert short.a == pytest.approx(long.a, abs=1e-13)
    assert short.b == pytest.approx(long.b, abs=1e-14)
    assert short.lost == pytest.approx(long.lost)


@pytest.mark.parametrize("delta", [0, 1, 2])
def test_rows_in_blocks_are_rows_at_once(delta, monkeypatch):
    rng = np.random.default_rng(8)
    X = np.column_stack(
        [np.ones(50), rng.normal(size=(50, 2)), np.arange(50) == 31]
    )  # row 31 has leverage one
    Q, W, E = np.linalg.qr(X)[0], rng.normal(size=(4, 3)), rng.normal(size=(50, 2))

    def read():
        T, lost, at = sandwich.row_weights(Q, W, delta)
        return T, lost, at, sandwich.row_df(Q, T), sandwich.row_variance(T, E), sandwich.row_meat(T, E)

    whole = read()
    assert whole[2].tolist() == [31, 31, 31]
    np.testing.assert_allclose(whole[5], np.einsum("ib,is,it->stb", E**2, whole[0], whole[0]), rtol=1e-12)
    np.testing.assert_allclose(np.einsum("ssb->sb", whole[5]), whole[4], rtol=1e-12)
    monkeypatch.setattr(sandwich, "ROWS", 7)
    for block, one in zip(read(), whole, strict=True):
        np.testing.assert_allclose(block, one, rtol=1e-12)


def test_factors():
    assert sandwich.cluster_factor("CR1", 5, 40, 3) == pytest.approx(5 / 4)
    assert sandwich.cluster_factor("CR1S", 5, 40, 3) == pytest.approx(5 / 4 * 39 / 37)
    assert sandwich.cluster_factor("CR2", 5, 40, 3) == 1.0
