"""Satterthwaite df from Grams: dense twins in other parameters, exact cases, flat likelihoods."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import curvature, reml
from clingstone.maths.basis import Gram


def ar_problem(n=25, seed=0):
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), np.arange(n), rng.normal(size=n)])
    Q, _ = np.linalg.qr(X)
    e = np.zeros(n)
    for t in range(1, n):
        e[t] = 0.5 * e[t - 1] + rng.normal()
    e -= Q @ (Q.T @ e)
    return Q, e[:, None]


def correlation(rho, n):
    t = np.arange(n)
    return rho ** np.abs(t[:, None] - t)


def gram_of(Q, e):
    def gram(theta):
        V = correlation(np.tanh(theta[0]), len(Q))
        Vi = np.linalg.inv(V)
        ee = np.einsum("ib,ij,jb->b", e, Vi, e)
        return Gram(Q.T @ Vi @ Q, Q.T @ Vi @ e, ee, float(np.linalg.slogdet(V)[1]))

    return gram


def best(gram, m):
    grid = np.linspace(-2, 2, 4001)
    return np.array([grid[np.argmin([reml.criterion(gram(np.array([z])), m)[0] for z in grid])]])


def test_df_do_not_depend_on_the_parameters():
    # The twin works in (σ², ρ) with dense matrices and its own differences.
    Q, e = ar_problem()
    n, m = len(Q), len(Q) - 3
    gram = gram_of(Q, e)
    theta = best(gram, m)
    # A finer optimum than the grid, so that the gradient is zero in both parameterisations.
    for _ in range(30):
        g = reml.gradient(lambda t: float(reml.criterion(gram(t), m)[0]), theta)
        h = reml.hessian(lambda t: float(reml.criterion(gram(t), m)[0]), theta)
        theta = theta - g / h[0, 0]
    found = curvature.slopes(gram, theta, [0], m)
    assert found.sound
    rho, s2 = float(np.tanh(theta[0])), float(reml.scale(gram(theta), m)[0])

    def minus_two(eta):
        V = eta[0] * correlation(eta[1], n)
        Vi = np.linalg.inv(V)
        QVQ = Q.T @ Vi @ Q
        r = e[:, 0] - Q @ np.linalg.solve(QVQ, Q.T @ Vi @ e[:, 0])
        return np.linalg.slogdet(V)[1] + np.linalg.slogdet(QVQ)[1] + r @ Vi @ r

    def variance(eta, w):
        return w @ np.linalg.inv(Q.T @ np.linalg.inv(eta[0] * correlation(eta[1], n)) @ Q) @ w

    at, step = np.array([s2, rho]), np.array([1e-3 * s2, 1e-3])
    H = np.empty((2, 2))
    for i in range(2):
        for j in range(2):
            a, b = np.eye(2)[i] * step, np.eye(2)[j] * step
            corners = (
                minus_two(at + a + b) - minus_two(at + a - b) - minus_two(at - a + b) + minus_two(at - a - b)
            )
            H[i, j] = corners / (8 * step[i] * step[j])
    for w in np.eye(3):
        g = np.array(
            [
                (variance(at + u, w) - variance(at - u, w)) / (2 * u.max())
                for u in (np.array([step[0], 0]), np.array([0, step[1]]))
            ]
        )
        wanted = 2 * variance(at, w) ** 2 / (g @ np.linalg.solve(H, g))
        assert found.df(w) == pytest.approx(np.clip(wanted, 1, m), rel=2e-4)
    joint = found.joint(np.eye(3)[:, 1:])
    each = [found.df(v) for v in np.eye(3)[1:]]
    assert 1.0 <= joint <= max(each) + 1e-9


def test_with_nothing_free_the_df_are_those_of_the_residuals():
    Q, e = ar_problem()
    found = curvature.slopes(gram_of(Q, e), np.zeros(1), [], 22)
    assert found.df(np.array([1.0, 0.0, 0.0])) == pytest.approx(22.0)
    assert found.joint(np.eye(3)[:, :2]) == pytest.approx(22.0)


def test_expected_information_is_that_of_the_formula():
    # ½tr(PV_iPV_j) by dense matrices, against the mean curvature of 4,000 simulated columns: the Monte-Carlo
    # error of a curvature of order m/2 is about 2 %.
    Q, e = ar_problem()
    n, m, theta, s2 = 25, 22, np.array([0.55]), 1.7
    rho = float(np.tanh(theta[0]))
    V = s2 * correlation(rho, n)
    L = np.linalg.cholesky(V)
    drawn = L @ np.random.default_rng(1).normal(size=(n, 4000))
    drawn -= Q @ (Q.T @ drawn)
    found = curvature.slopes(gram_of(Q, e), theta, [0], m, grams=gram_of(Q, drawn), sigma2=s2)
    Vi = np.linalg.inv(V)
    P = Vi - Vi @ Q @ np.linalg.solve(Q.T @ Vi @ Q, Q.T @ Vi)
    t = np.arange(n)
    lag = np.abs(t[:, None] - t)
    D = [V, s2 * lag * rho ** np.maximum(lag - 1, 0) * (1 - rho**2)]  # in ln σ² and atanh ρ
    wanted = np.array([[np.trace(P @ a @ P @ b) / 2 for b in D] for a in D])
    assert np.allclose(found.information, wanted, rtol=0.08, atol=0.15)


def test_an_information_without_an_inverse_is_told():
    H = np.array([[10.0, 3.0], [3.0, -1.0]])
    unsound = curvature.Slopes(np.eye(1), np.zeros((1, 1, 1)), H, 20.0)
    assert not unsound.sound
    assert not curvature.Slopes(
        np.eye(1), np.zeros((1, 1, 1)), np.array([[4.0, 2.0], [2.0, 1.0]]), 20.0
    ).sound
