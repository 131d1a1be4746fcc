"""Blocks of random intercepts and slopes against dense matrices."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import expected, reml, slopes
from clingstone.maths.basis import Gram
from clingstone.maths.partition import Partition

RNG = np.random.default_rng(1)
N = 60
CODES = np.sort(RNG.integers(0, 9, N))
X = np.column_stack([np.ones(N), RNG.normal(size=N), RNG.normal(size=N)])
Q, _ = np.linalg.qr(X)
E = RNG.normal(size=(N, 2))
E = E - Q @ (Q.T @ E)
U = np.column_stack([np.ones(N), X[:, 1], RNG.normal(size=N)])
PART = Partition.of("g", CODES)
OUTER = Partition.of("o", CODES // 3)
L2 = np.array([[0.8, 0.0], [0.3, 0.5]])
L3 = np.array([[0.7, 0.0, 0.0], [-0.4, 0.6, 0.0], [0.2, 0.1, 0.3]])


def sums(part, a, b):
    return np.stack([[part.sums(a[:, i] * b[:, j]) for j in range(b.shape[1])] for i in range(a.shape[1])])


def block(functions, response=E):
    return slopes.Block(
        sums(PART, functions, functions), sums(PART, functions, Q), sums(PART, functions, response)
    )


def dense(part, functions, L):
    W = functions @ L
    return (W @ W.T) * (part.codes[:, None] == part.codes)


def base(response=E):
    return reml.independent(3, np.sum(response**2, axis=0))


def check_agrees(gram: Gram, V, response=E):
    inverse = np.linalg.inv(V)
    np.testing.assert_allclose(gram.QQ, Q.T @ inverse @ Q, atol=1e-12)
    np.testing.assert_allclose(gram.QE, Q.T @ inverse @ response, atol=1e-12)
    np.testing.assert_allclose(gram.EE, np.diag(response.T @ inverse @ response), rtol=1e-12)
    assert gram.logdet == pytest.approx(np.linalg.slogdet(V)[1], abs=1e-10)


@pytest.mark.parametrize(("L", "q"), [(L2, 2), (L3, 3), (np.array([[1.3]]), 1), (np.zeros((2, 2)), 2)])
def test_one_level_equals_the_dense_covariance(L, q):
    V = np.eye(N) + dense(PART, U[:, :q], L)
    check_agrees(slopes.lower(base(), block(U[:, :q]), L, range(q)), V)


def test_levels_stack():
    # Slopes at the finer level, an intercept and another slope at the outer one.
    outer = np.array([[0.5, 0.0], [0.2, 0.4]])
    first = block(U)
    gram = slopes.lower(base(), first, L2, (0, 1))
    up = Partition("up", PART.parent(OUTER), OUTER.labels)
    gram = slopes.lower(gram, first.shrunk(L2, (0, 1)).lifted(up), outer, (0, 2))
    check_agrees(gram, np.eye(N) + dense(PART, U[:, :2], L2) + dense(OUTER, U[:, [0, 2]], outer))


@pytest.mark.parametrize(("L", "q"), [(L2, 2), (L3, 3)])
def test_criterion_and_its_gradient(L, q):
    one = E[:, :1]
    held, start = block(U[:, :q], one), base(one)
    value, gradient = slopes.criterion(start, held, L, N - 3)
    assert value == pytest.approx(
        float(reml.criterion(slopes.lower(start, held, L, range(q)), N - 3)[0]), abs=1e-9
    )
    for i, j in zip(*np.tril_indices(q), strict=True):
        step = np.zeros_like(L)
        step[i, j] = 1e-6
        ends = [slopes.criterion(start, held, L + s * step, N - 3)[0] for s in (1, -1)]
        assert gradient[i, j] == pytest.approx((ends[0] - ends[1]) / 2e-6, rel=1e-5, abs=1e-5)


def test_expected_information_equals_dense_traces():
    sigma2, gamma = 1.7, 1.7 * L2 @ L2.T
    C = np.moveaxis(sums(PART, U[:, :2], U[:, :2]), -1, 0)
    H = np.moveaxis(sums(PART, U[:, :2], Q), -1, 0)
    directions = np.array([[[1, 0], [0, 0]], [[0, 0], [0, 1]], [[0, 1], [1, 0]]], float)
    found = expected.block(N, C, H, sigma2, gamma, directions)
    V = sigma2 * (np.eye(N) + dense(PART, U[:, :2], L2))
    same = PART.codes[:, None] == PART.codes
    D = [np.eye(N), *(same * (U[:, :2] @ d @ U[:, :2].T) for d in directions)]
    inverse = np.linalg.inv(V)
    P = inverse - inverse @ Q @ np.linalg.inv(Q.T @ inverse @ Q) @ Q.T @ inverse
    np.testing.assert_allclose(
        found.information, [[np.trace(P @ a @ P @ b) / 2 for b in D] for a in D], rtol=1e-9
    )
    np.testing.assert_allclose(found.P, [-Q.T @ inverse @ a @ inverse @ Q for a in D], atol=1e-12)
    QQ = [[Q.T @ inverse @ a @ inverse @ b @ inverse @ Q for b in D] for a in D]
    np.testing.assert_allclose(found.Q, QQ, atol=1e-12)
    np.testing.assert_allclose(found.Phi, np.linalg.inv(Q.T @ inverse @ Q), rtol=1e-10)


def test_whitening_is_a_square_root_of_the_inverse():
    W = slopes.whiten(PART, U @ L3, np.eye(N))
    np.testing.assert_allclose(W.T @ W, np.linalg.inv(np.eye(N) + dense(PART, U, L3)), atol=1e-12)


def test_working_parameters_and_factors_are_inverse():
    free = np.tril(np.ones((3, 3)), -1) > 0
    z = np.array([[0, 0, 0], [0.4, 0, 0], [-0.3, 0.9, 0]])
    log = np.array([0.1, -0.5, 0.7])
    L = slopes.factor(log, z)
    back_log, back = slopes.parameters(L @ L.T, free, 7.6)
    np.testing.assert_allclose(back_log, log, atol=1e-12)
    np.testing.assert_allclose(back, z, atol=1e-12)
    assert np.tanh(z[1, 0]) == pytest.approx(L[0, 0] * L[1, 0] / np.sqrt((L @ L.T)[0, 0] * (L @ L.T)[1, 1]))


def test_a_variance_that_is_nearly_nothing_starts_at_a_number():
    """Squares of 1e-300 round to zero: the search once started at NaN there."""
    free = np.tril(np.ones((2, 2)), -1) > 0
    log, z = slopes.parameters(np.zeros((2, 2)), free, 7.6)
    assert np.isfinite(log).all()
    assert z[1, 0] == 0
    log, z = slopes.parameters(np.array([[1e-310, 0.0], [0.0, 1.0]]), free, 7.6)
    assert np.isfinite(log).all()
    assert z[1, 0] == 0


def test_a_tie_between_two_functions_is_a_correlation_at_its_end():
    free = np.tril(np.ones((2, 2)), -1) > 0
    gamma = np.array([[4.0, -2.0], [-2.0, 1.0]])  # correlation −1
    _, z = slopes.parameters(gamma, free, 7.6)
    assert z[1, 0] == pytest.approx(-7.6)
