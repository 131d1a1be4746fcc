"""t and F tails, quantiles and degrees of freedom."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from clingstone.maths import reference


@pytest.mark.parametrize("df", [1.0, 2.7, 9.5, 40.0, 1e5, 1e9])
def test_t_tail_agrees_with_scipy_far_out(df):
    t = np.array([0.0, 1e-6, 0.7, 2.0, 9.0, 40.0, 300.0])
    wanted = 2 * stats.t.sf(t, df)
    kept = wanted > 1e-290
    assert np.allclose(reference.t_two_sided(t, df)[kept], wanted[kept], rtol=1e-8, atol=0)
    assert np.array_equal(reference.t_two_sided(-t, df), reference.t_two_sided(t, df))


def test_normal_tail_and_undefined_df():
    assert reference.t_two_sided(1.959963984540054, np.inf) == pytest.approx(0.05, rel=1e-12)
    assert reference.t_two_sided(30.0, np.inf) == pytest.approx(2 * stats.norm.sf(30), rel=1e-12)
    assert np.isnan(reference.t_two_sided(1.0, np.nan))
    assert np.isnan(reference.t_two_sided(1.0, 0.0))
    assert np.isnan(reference.t_two_sided(np.nan, 5.0))
    assert np.isnan(reference.t_quantile(0.05, np.nan))


@pytest.mark.parametrize("df", [1.0, 1.3, 4.0, 17.8, 300.0, 1e7, np.inf])
@pytest.mark.parametrize("alpha", [0.5, 0.1, 0.05, 0.001, 1e-6])
def test_t_quantile_inverts_the_tail(df, alpha):
    c = reference.t_quantile(alpha, df)
    assert reference.t_two_sided(c, df) == pytest.approx(alpha, rel=1e-8)
    # Student's table, from memory: t(0.975, 1) = 12.706, t(0.975, 10) = 2.228.
    assert reference.t_quantile(0.05, 1.0) == pytest.approx(12.706, abs=5e-4)
    assert reference.t_quantile(0.05, 10.0) == pytest.approx(2.228, abs=5e-4)


@pytest.mark.parametrize(("q", "df"), [(1, 3.3), (2, 1.39), (3, 18.05), (4, 1e4)])
def test_f_tail_agrees_with_scipy(q, df):
    F = np.array([1e-3, 1.0, 4.0, 60.0, 900.0])
    assert np.allclose(reference.f_tail(F, q, df), stats.f.sf(F, q, df), rtol=1e-10, atol=0)
    assert np.allclose(reference.f_tail(F, q, np.inf), stats.chi2.sf(q * F, q), rtol=1e-10, atol=0)
    assert np.isnan(reference.f_tail(2.0, q, -1.0))


def test_rows_invert_one_distribution():
    estimate, se, df = (
        np.array([[2.0], [2.0], [1.0]]),
        np.array([[1.0], [0.0], [np.nan]]),
        np.full((3, 1), 7.3),
    )
    low, high, p = reference.t_rows(estimate, se, df, 1 - float(reference.t_two_sided(2.0, 7.3)))
    assert low[0, 0] == pytest.approx(0.0, abs=1e-12)
    assert high[0, 0] == pytest.approx(4.0)
    assert np.isnan([low[1:], high[1:], p[1:]]).all()


def test_satterthwaite_is_welch_for_two_samples():
    # Var = s₁²/n₁ + s₂²/n₂ and Var(s²) = 2σ⁴/(n−1): the df of Welch (1947), by his own formula.
    v, n = np.array([4.0, 1.0]), np.array([6, 15])
    part = v / n
    gradient = (1 / n) / part.sum()
    information = np.diag((n - 1) / (2 * v**2))
    welch = part.sum() ** 2 / np.sum(part**2 / (n - 1))
    assert reference.satterthwaite(gradient, information, 1e9) == pytest.approx(welch, rel=1e-12)
    assert reference.satterthwaite(gradient, information, 5.0) == 5.0
    assert reference.satterthwaite(np.zeros(2), information, 19.0) == 19.0


def test_fai_cornelius():
    assert reference.fai_cornelius(np.array([8.0, 8.0])) == 8.0
    # E = 10/8 + 6/4 = 2.75, df = 2E/(E − 2) = 22/3: by hand.
    assert reference.fai_cornelius(np.array([10.0, 6.0])) == pytest.approx(22 / 3)
    assert reference.fai_cornelius(np.array([10.0, 1.5])) == 1.5


def test_wald_is_the_quadratic_form_and_refuses_a_deficient_covariance():
    rng = np.random.default_rng(0)
    A = rng.normal(size=(3, 3)) * np.array([1.0, 1e4, 1e-3])[:, None]
    V, b = A @ A.T, rng.normal(size=3) * np.array([1.0, 1e4, 1e-3])
    got = reference.wald(b[:, None], V[:, :, None])
    assert got[0] == pytest.approx(b @ np.linalg.solve(V, b), rel=1e-6)
    a = A[:, 0]
    assert np.isnan(reference.wald(b[:, None], np.outer(a, a)[:, :, None])[0])
    assert np.isnan(reference.wald(b[:, None], np.zeros((3, 3, 1)))[0])


def test_hotelling_reduces_to_t_squared():
    F, df2 = reference.hotelling(np.array([5.0]), 1, 8.0)
    assert (F[0], df2) == (5.0, 8.0)
