"""Kenward-Roger against the n × n formulas and against exact F tests of balanced designs."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths.groups import expected_information
from clingstone.maths.kenward import Kenward


def closed_form(Q, group, sigma2, tau2) -> Kenward:
    Z = (group[:, None] == np.arange(group.max() + 1)).astype(float)
    seen = expected_information(len(Q), Z.sum(axis=0), Z.T @ Q, sigma2, tau2)
    return Kenward.of(seen.Phi, seen.P, seen.Q, seen.information)


def dense(Q, group, sigma2, tau2):
    """Φ, Φ_A, P and W by their definitions; parameters (σ², τ²)."""
    n = len(Q)
    ZZ = (group[:, None] == group).astype(float)
    Vi = np.linalg.inv(sigma2 * np.eye(n) + tau2 * ZZ)
    D = [np.eye(n), ZZ]
    phi = np.linalg.inv(Q.T @ Vi @ Q)
    proj = Vi - Vi @ Q @ phi @ Q.T @ Vi
    info = np.array([[np.trace(proj @ a @ proj @ b) / 2 for b in D] for a in D])
    W = np.linalg.inv(info)
    P = [-Q.T @ Vi @ a @ Vi @ Q for a in D]
    inner = sum(
        W[i, j] * (Q.T @ Vi @ D[i] @ Vi @ D[j] @ Vi @ Q - P[i] @ phi @ P[j])
        for i in range(2)
        for j in range(2)
    )
    return phi, phi + 2 * phi @ inner @ phi, P, W


def unbalanced(seed=0):
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(7), [1, 2, 3, 4, 6, 6, 9])
    X = np.column_stack([np.ones(31), rng.normal(size=31), rng.normal(size=7)[group]])
    return np.linalg.qr(X)[0], group


@pytest.mark.parametrize("tau2", [0.0, 0.3, 5.0])
def test_closed_form_is_the_dense_formula(tau2):
    Q, group = unbalanced()
    kr = closed_form(Q, group, 1.4, tau2)
    phi, adjusted, P, W = dense(Q, group, 1.4, tau2)
    assert np.allclose(kr.phi, phi, rtol=1e-10)
    assert np.allclose(kr.adjusted, adjusted, rtol=1e-9)
    w = np.array([0.2, -1.0, 0.5])
    g = np.array([w @ phi @ p @ phi @ w for p in P]) / (w @ phi @ w)
    assert kr.df(w) == pytest.approx(2 / (g @ W @ g), rel=1e-9)


def test_joint_scale_and_df_follow_the_paper_step_by_step():
    Q, group = unbalanced(1)
    kr = closed_form(Q, group, 1.0, 0.8)
    L = np.eye(3)[:, 1:]
    scale, df2 = kr.joint(L)
    phi, _, P, W = dense(Q, group, 1.0, 0.8)
    q = 2
    theta = L @ np.linalg.inv(L.T @ phi @ L) @ L.T
    t = [theta @ phi @ p @ phi for p in P]
    A1 = sum(W[i, j] * np.trace(t[i]) * np.trace(t[j]) for i in range(2) for j in range(2))
    A2 = sum(W[i, j] * np.trace(t[i] @ t[j]) for i in range(2) for j in range(2))
    B = (A1 + 6 * A2) / (2 * q)
    g = ((q + 1) * A1 - (q + 4) * A2) / ((q + 2) * A2)
    d = 3 * q + 2 * (1 - g)
    E = 1 / (1 - A2 / q)
    V = 2 / q * (1 + g / d * B) / ((1 - (q - g) / d * B) ** 2 * (1 - (q + 2 - g) / d * B))
    rho = V / (2 * E**2)
    m = 4 + (q + 2) / (q * rho - 1)
    assert (scale, df2) == pytest.approx((m / (E * (m - 2)), m), rel=1e-10)


def test_where_the_moments_of_f_do_not_exist_the_df_of_the_contrasts_are_combined():
    # Four groups and two regressors between them leave one df: A₂ is not below q.
    group = np.repeat(np.arange(4), [3, 4, 5, 6])
    x = np.array([[0.0, 1.0], [1.0, 0.0], [2.0, 2.0], [3.0, -1.0]])[group]
    Q, _ = np.linalg.qr(np.column_stack([np.ones(18), x]))
    kr = closed_form(Q, group, 1.0, 1.0)
    scale, df2 = kr.joint(np.eye(3)[:, 1:])
    assert scale == 1.0
    assert 0 < df2 < 4


@pytest.mark.parametrize("tau2", [0.0, 0.5, 20.0])
def test_balanced_between_and_within_terms_have_their_exact_df(tau2):
    # 9 groups of 4 in 3 arms, a within-group factor of 4 levels: the exact tests have F(2, 6) and F(3, 24)
    # whatever τ², and no adjustment of the covariance (Kenward & Roger 1997, section 4).
    group = np.repeat(np.arange(9), 4)
    arm, visit = group % 3, np.tile(np.arange(4), 9)
    X = np.column_stack([np.ones(36), arm == 1, arm == 2, visit == 1, visit == 2, visit == 3]).astype(float)
    Q, R = np.linalg.qr(X)
    kr = closed_form(Q, group, 1.0, tau2)
    W = np.linalg.inv(R).T
    assert np.allclose(kr.adjusted, kr.phi, rtol=1e-9)
    assert kr.joint(W[:, 1:3]) == pytest.approx((1.0, 6.0), rel=1e-8)
    assert kr.joint(W[:, 3:]) == pytest.approx((1.0, 24.0), rel=1e-8)
    assert kr.df(W[:, 1]) == pytest.approx(6.0, rel=1e-8)
    assert kr.df(W[:, 4]) == pytest.approx(24.0, rel=1e-8)
