"""Cosines, the Bartlett kernel and the exact law of a t statistic with a cosine variance."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from clingstone.maths.longrun import Grid, RatioLaw, joint_law


def gappy():
    """Two series: 0 1 2 4 5 … with holes, and a shorter full one."""
    codes = np.repeat([0, 1], [9, 6]).astype(np.int32)
    tick = np.array([3, 4, 5, 7, 8, 9, 12, 13, 14, 0, 1, 2, 3, 4, 5])
    return Grid.of(codes, tick), codes, tick


def test_rows_sit_on_the_ticks_of_their_series():
    grid, _, _ = gappy()
    assert grid.lengths.tolist() == [12, 6]
    assert grid.place.tolist() == [0, 1, 2, 4, 5, 6, 9, 10, 11, 12, 13, 14, 15, 16, 17]
    assert grid.N == 18
    # ν = ⌊0.4 N^⅔⌋: 0.4·12^⅔ = 2.09, 0.4·6^⅔ = 1.32.
    assert grid.counts.tolist() == [2, 1]


def test_cosine_sums_are_the_written_out_sums():
    grid, codes, tick = gappy()
    u = np.random.default_rng(0).normal(size=(15, 2))
    rows = []
    for s, (first, N, nu) in enumerate([(3, 12, 2), (0, 6, 1)]):
        for j in range(1, nu + 1):
            angle = np.pi * j * (tick[codes == s] - first + 0.5) / N
            rows.append(np.sqrt(N / nu) * np.sqrt(2 / N) * np.cos(angle) @ u[codes == s])
    assert np.allclose(grid.cosine_sums(u), rows, rtol=1e-12)
    one = np.concatenate([grid.cosines()[codes == s].T @ u[codes == s] for s in np.unique(codes)])
    assert np.allclose(one[one.any(axis=1)], rows, rtol=1e-12)


def test_one_long_full_series_has_an_unbiased_variance_of_white_noise():
    grid = Grid.of(np.zeros(60, dtype=np.int32), np.arange(60))
    C = grid.cosines()
    assert C.shape == (60, 6)
    assert np.allclose(C.T @ C, 60 / 6 * np.eye(6), atol=1e-10)
    assert np.allclose(C.sum(axis=0), 0, atol=1e-10)


@pytest.mark.parametrize("rho", [0.0, 0.6, -0.4, 0.95])
def test_correlate_is_the_dense_product(rho):
    grid, codes, tick = gappy()
    H = np.random.default_rng(1).normal(size=(15, 3))
    same = codes[:, None] == codes
    omega = same * rho ** np.abs(tick[:, None] - tick) if rho else np.eye(15)
    assert np.allclose(grid.correlate(H, rho), omega @ H, rtol=1e-10, atol=1e-12)


def test_law_of_many_series_is_the_dense_one():
    """Against F = M(a∘C) with C written out, one block of columns per series."""
    rng = np.random.default_rng(5)
    codes = np.repeat(np.arange(5, dtype=np.int32), [9, 4, 12, 1, 7])
    tick = np.concatenate([np.sort(rng.choice(14, k, replace=False)) for k in (9, 4, 12, 1, 7)])
    grid, n = Grid.of(codes, tick), len(codes)
    Q, a = np.linalg.qr(rng.normal(size=(n, 3)))[0], rng.normal(size=(n, 2))
    omega = (codes[:, None] == codes) * 0.6 ** np.abs(tick[:, None] - tick)
    local, r = grid.cosines(), int(grid.counts.sum())
    C = np.concatenate([(codes == s)[:, None] * local[:, :nu] for s, nu in enumerate(grid.counts)], axis=1)
    F = (a[:, :, None] * C[:, None]).reshape(n, -1)
    F -= Q @ (Q.T @ F)
    aa, aF, FF = grid.law(Q, a, lambda H: omega @ H)
    assert r == C.shape[1]
    assert np.allclose(aa, a.T @ omega @ a)
    assert np.allclose(aF.reshape(2, -1), a.T @ omega @ F)
    assert np.allclose(FF.reshape(2 * r, 2 * r), F.T @ omega @ F)


@pytest.mark.parametrize("lags", [0, 1, 4, 30])
def test_bartlett_is_the_sum_over_lags(lags):
    grid, codes, tick = gappy()
    u = np.random.default_rng(2).normal(size=(15, 2))
    weight = np.maximum(0, 1 - np.abs(tick[:, None] - tick) / (lags + 1)) * (codes[:, None] == codes)
    assert np.allclose(grid.bartlett(u, lags), u.T @ weight @ u, rtol=1e-11, atol=1e-12)


@pytest.mark.parametrize("q", [1, 2, 5, 13, 60, 185, 900])
def test_independent_parts_give_student_t(q):
    G = np.eye(q + 1)
    G[1:, 1:] /= q
    law = RatioLaw.of(G)
    t = np.array([0.3, 1.0, 2.5, 8.0, 40.0])
    assert np.allclose(law.tail(t), 2 * stats.t.sf(t, q), rtol=1e-9, atol=0)
    assert law.df == pytest.approx(q)
    assert law.quantile(0.05) == pytest.approx(stats.t.isf(0.025, q), rel=1e-9)


def test_two_scales_by_a_hand_integral():
    # q = 2: P(Z₀² > c²(λ₁Z₁² + λ₂Z₂²)) = (2/π)∫₀^{π/2} cos²θ/√((cos²θ+c²λ₁)(cos²θ+c²λ₂)) dθ with a'ε
    # independent of F'ε: then ηⱼ = c²λⱼ. A plain midpoint rule is the twin.
    lam, c = np.array([0.2, 1.7]), 1.3
    G = np.diag([1.0, *lam])
    theta = (np.arange(200_000) + 0.5) * (np.pi / 2) / 200_000
    x = np.cos(theta) ** 2
    wanted = np.mean(x / np.sqrt((x + c**2 * lam[0]) * (x + c**2 * lam[1])))
    assert RatioLaw.of(G).tail([c])[0] == pytest.approx(wanted, rel=1e-8)


def test_correlated_parts_agree_with_draws():
    rng = np.random.default_rng(3)
    A = rng.normal(size=(7, 7))
    G = A @ A.T / 7
    law = RatioLaw.of(G)
    z = np.linalg.cholesky(G) @ rng.normal(size=(7, 400_000))
    t = np.abs(z[0]) / np.sqrt(np.sum(z[1:] ** 2, axis=0))
    for c in (0.1, 0.3, 0.8):
        wanted = np.mean(t > c)
        error = 5 * np.sqrt(wanted * (1 - wanted) / 400_000)
        assert law.tail([c])[0] == pytest.approx(wanted, abs=error)


def test_correlated_parts_agree_with_the_eigenvalues():
    # The same integral with the other eigenvalues found one by one (Bakirov & Székely's own form).
    rng = np.random.default_rng(4)
    A = rng.normal(size=(6, 6))
    G, c = A @ A.T, 1.1
    L = np.linalg.cholesky(G)
    omega = np.linalg.eigvalsh(L.T @ np.diag([1.0, *(-(c**2) * np.ones(5))]) @ L)
    eta = -omega[:-1] / omega[-1]
    theta = (np.arange(200_000) + 0.5) * (np.pi / 2) / 200_000
    x = np.cos(theta)[:, None] ** 2
    wanted = np.mean(np.cos(theta) ** 5 / np.sqrt(np.prod(x + eta, axis=1)))
    assert RatioLaw.of(G).tail([c])[0] == pytest.approx(wanted, rel=1e-8)


def test_a_rank_deficient_variance_loses_its_empty_directions():
    G = np.diag([1.0, 0.5, 0.5, 0.0])
    assert np.allclose(RatioLaw.of(G).tail([1.0, 2.0]), RatioLaw.of(G[:3, :3]).tail([1.0, 2.0]))


def test_ends_of_the_law():
    law = RatioLaw.of(np.eye(4))
    assert law.tail([0.0, np.inf, -np.inf]).tolist() == [1.0, 0.0, 0.0]
    assert np.isnan(law.tail([np.nan])[0])
    assert law.tail([-0.7])[0] == law.tail([0.7])[0]
    for alpha in (0.3, 0.05, 1e-8):
        assert law.tail([law.quantile(alpha)])[0] == pytest.approx(alpha, rel=1e-8)


def test_joint_law_of_independent_scores_is_hotelling_with_r_df():
    r, q = 9, 3
    G = np.einsum("st,jl->stjl", np.eye(q), np.eye(r)) / r
    eta, scale = joint_law(G, np.eye(q))
    assert eta == pytest.approx(r)
    assert scale == pytest.approx(1.0)
    # A change of basis of the contrasts changes nothing.
    T = np.random.default_rng(0).normal(size=(q, q))
    G2 = np.einsum("su,uvjl,tv->stjl", T, G, T)
    assert joint_law(G2, T @ T.T) == pytest.approx((eta, scale))
    assert np.isnan(joint_law(np.zeros((2, 2, 3, 3)), np.eye(2))).all()


def test_joint_law_of_one_contrast_is_satterthwaite():
    rng = np.random.default_rng(6)
    A = rng.normal(size=(5, 5))
    K = A @ A.T
    eta, scale = joint_law(K[None, None], np.array([[2.0]]))
    assert eta == pytest.approx(np.trace(K) ** 2 / np.sum(K**2))
    assert scale == pytest.approx(np.trace(K) / 2.0)
