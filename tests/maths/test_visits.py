"""A free covariance of few visits against closed forms and dense matrices."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import visits

T, G = 3, 40
SIGMA = np.array([[2.0, 0.8, 0.3], [0.8, 1.5, 0.6], [0.3, 0.6, 1.0]])


def world(drop: float = 0.0, seed: int = 2):
    """Subjects × visits in one table, the mean of every visit in the model, some rows missing."""
    rng = np.random.default_rng(seed)
    y = (rng.normal(size=(G, T)) @ np.linalg.cholesky(SIGMA).T).ravel()
    subject, visit = np.repeat(np.arange(G), T).astype(np.int32), np.tile(np.arange(T), G)
    keep = rng.random(G * T) >= drop
    subject, visit, y = subject[keep], visit[keep], y[keep]
    X = np.column_stack([visit == t for t in range(T)]).astype(float)
    Q, _ = np.linalg.qr(X)
    e = y - Q @ (Q.T @ y)
    table = visits.Visits(visits.patterns(subject, visit, T, Q, e), T, T, len(y) - T)
    return table, subject, visit, Q, e, y


def dense(sigma, subject, visit):
    return sigma[np.ix_(visit, visit)] * (subject[:, None] == subject)


def test_complete_visits_with_their_own_means_give_the_sample_covariance():
    table, *_, y = world()
    found = visits.fit(table, np.eye(T))
    assert found.converged
    # REML of a saturated mean: the unbiased sample covariance, divisor G − 1.
    np.testing.assert_allclose(found.sigma, np.cov(y.reshape(G, T), rowvar=False), rtol=1e-6)
    # ML: divisor G.
    by_ml = visits.fit(table, np.eye(T), restricted=False)
    np.testing.assert_allclose(by_ml.sigma, np.cov(y.reshape(G, T), rowvar=False, ddof=0), rtol=1e-6)


def test_criterion_gradient_and_curvature_equal_dense_ones():
    table, subject, visit, Q, e, _ = world(0.25)
    V = dense(SIGMA, subject, visit)
    inverse = np.linalg.inv(V)
    A = Q.T @ inverse @ Q
    P = inverse - inverse @ Q @ np.linalg.inv(A) @ Q.T @ inverse
    m = len(e) - T
    value = np.linalg.slogdet(V)[1] + np.linalg.slogdet(A)[1] + e @ P @ e + m * np.log(2 * np.pi)
    assert table.criterion(SIGMA) == pytest.approx(value, abs=1e-9)
    gradient, bent, seen = table.scores(SIGMA)
    D = []
    for i, j in table.pairs:
        unit = np.zeros((T, T))
        unit[i, j] = unit[j, i] = 1.0
        D.append(dense(unit, subject, visit))
    np.testing.assert_allclose(gradient, [np.trace(P @ d) - e @ P @ d @ P @ e for d in D], atol=1e-9)
    np.testing.assert_allclose(
        seen.information, [[np.trace(P @ a @ P @ b) / 2 for b in D] for a in D], atol=1e-9
    )
    exact = [[-np.trace(P @ a @ P @ b) + 2 * e @ P @ a @ P @ b @ P @ e for b in D] for a in D]
    np.testing.assert_allclose(bent, exact, atol=1e-9)
    np.testing.assert_allclose(seen.P, [-Q.T @ inverse @ d @ inverse @ Q for d in D], atol=1e-10)
    QQ = [[Q.T @ inverse @ a @ inverse @ b @ inverse @ Q for b in D] for a in D]
    np.testing.assert_allclose(seen.Q, QQ, atol=1e-10)


def test_missing_visits_and_shuffled_rows_settle_at_one_optimum():
    table, subject, visit, Q, e, _ = world(0.25)
    found = visits.fit(table, np.eye(T))
    assert found.converged
    assert len(table.patterns) > 3
    order = np.random.default_rng(0).permutation(len(e))
    again = visits.Visits(
        visits.patterns(subject[order], visit[order], T, Q[order], e[order]), T, T, len(e) - T
    )
    np.testing.assert_allclose(visits.fit(again, 5 * np.eye(T)).sigma, found.sigma, rtol=1e-5)
