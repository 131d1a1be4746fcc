"""Parts of an ordinary variance, total factors, tipping points."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from clingstone.covariance.fits import Fits
from clingstone.ledger.consequence import inflation, parts, tipping
from clingstone.ledger.region import region
from clingstone.structure.serial import Series
from tests.ledger import factories as make


def panel(seed: int = 3):
    rng = np.random.default_rng(seed)
    G, n = 20, 6
    subject, day = np.repeat(np.arange(G), n), np.tile(np.arange(n), G)
    columns = {"day": day, "x": rng.standard_normal(G * n)}
    y = 0.8 * rng.standard_normal(G)[subject] + make.ar1(rng, G, n, 0.5)
    return make.fits(make.design(columns, groups={"subject": subject}, series=subject, tick=day), y)


def wells(seed: int = 5):
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(50, 2))
    D = np.linalg.norm(xy[:, None] - xy, axis=2)
    y = np.linalg.cholesky(0.7 * np.exp(-D / 0.15) + 0.3 * np.eye(50)) @ rng.standard_normal(50)
    return make.fits(make.design({"east": xy[:, 0]}, xy=xy), y)


@pytest.mark.parametrize("case", [panel, wells])
def test_factors_equal_the_dense_sandwich(case):
    """The slow twin at the estimate: (X'X)⁻¹X'VX(X'X)⁻¹ over E s²(X'X)⁻¹ with V written out."""
    f = case()
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    d = f.design
    V = f.algebra(f.full_node).dense(f.full.theta[:, 0]) * float(f.full.sigma2[0])
    X = d.Q @ d.basis.R
    bread = np.linalg.inv(X.T @ X)
    true = np.diag(bread @ X.T @ V @ X @ bread)
    M = np.eye(d.n) - d.Q @ d.Q.T
    believed = np.trace(M @ V) / d.m * np.diag(bread)
    # A series is read off a spline through the grid of its parameter.
    near = 1e-6 if "serial" in f.full_node else 1e-8
    np.testing.assert_allclose(p.factor()[:, 0], np.sqrt(true / believed), rtol=near)


@pytest.mark.parametrize("case", [panel, wells])
def test_parts_add_up_to_the_square_of_the_factor(case):
    f = case()
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    total = sum(p.part(key) for key in p.variance)
    np.testing.assert_allclose(total, p.factor() ** 2, rtol=1e-10)
    for row in inflation(p, found):
        assert row.low <= row.estimate <= row.high


def test_interpolated_spreads_agree_with_direct_ones():
    f = panel()
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    algebra, d = f.algebra(f.full_node), f.design
    w = d.basis.contrast(np.eye(d.p))
    size = np.einsum("pk,pk->k", w, w)
    for b in range(0, found.model.theta.shape[1], 7):
        K = algebra.spread("serial", found.model.theta[:, b])
        direct = np.einsum("pk,pq,qk->k", w, K, w) / size
        np.testing.assert_allclose(p.plain["serial"][:, b], direct, rtol=0.02, atol=0.01)


def test_balanced_groups_give_the_design_effect():
    """Kish 1965: with equal groups of m and a group-level predictor, (1 + (m − 1)ρ)/(E s²/σ²)."""
    f = make.trial(np.random.default_rng(2), G=12, n=20, icc=0.2)
    d = f.design
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    rho = found.model.shares()["group:clinic"][0]
    trace = d.n - np.trace(d.sums(d.group.levels[0]).T @ d.sums(d.group.levels[0]))
    expected = (1 - rho) + rho * trace / d.m
    k = p.terms.index("arm")
    # x is not exactly orthogonal to the arm, so the textbook value holds to a few per mille.
    assert p.factor()[k, 0] ** 2 == pytest.approx((1 + 19 * rho) / expected, rel=5e-3)


def test_due_to_a_structure_is_the_factor_over_the_factor_without_it():
    f = make.trial(np.random.default_rng(2), G=12, n=20, icc=0.2)
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    # With one structure the model without it is independence, where the factor is 1.
    np.testing.assert_allclose(p.due_to("group:clinic"), p.factor(), rtol=1e-12)


def test_tipping_point_of_a_group_is_where_the_interval_meets_zero():
    rng = np.random.default_rng(9)
    f = make.trial(rng, G=12, n=20, icc=0.05, effect=1.2)
    (tip,) = tipping(f, ("group:clinic",), ("arm",))
    assert tip.value is not None
    d = f.design
    X, Z = d.Q @ d.basis.R, np.eye(12)[d.group.levels[0].codes]
    y = f.response.residual[:, 0] + d.Q @ f.response.coef[:, 0]
    V = (1 - tip.value) * np.eye(d.n) + tip.value * Z @ Z.T
    bread = np.linalg.inv(X.T @ X)
    M = np.eye(d.n) - d.Q @ d.Q.T
    scale = float(y @ M @ y) / np.trace(M @ V)
    se = np.sqrt(scale * (bread @ X.T @ V @ X @ bread)[1, 1])
    beta = float((bread @ X.T @ y)[1])
    # Satterthwaite's df from the parts of the coefficient between and within clinics, written out:
    # 12 clinics and two columns of clinics (constant, arm), 240 rows less 12 clinics and x
    a = X @ bread[:, 1]
    between = float(np.sum((Z @ np.linalg.pinv(Z) @ a) ** 2) / np.sum(a**2))
    n0 = np.trace(Z.T @ M @ Z) / 10
    parts_of_variance = between * (1 + tip.value * (n0 - 1)), (1 - between) * (1 - tip.value)
    df = sum(parts_of_variance) ** 2 / (parts_of_variance[0] ** 2 / 10 + parts_of_variance[1] ** 2 / 227)
    assert 9.9 < df < 12
    # linear between values 0.01 apart
    assert abs(beta) == pytest.approx(stats.t.isf(0.025, df) * se, rel=2e-3)
    assert f"{tip.value:.2g}" in tip.sentence


def test_tipping_point_of_a_series_is_where_the_interval_meets_zero():
    rng = np.random.default_rng(12)
    t = np.arange(80)
    f = make.fits(make.design({"day": t}, tick=t), 0.03 * t + make.ar1(rng, 1, 80, 0.2))
    (tip,) = tipping(f, ("serial",), ("day",))
    assert tip.value is not None
    d = f.design
    V = tip.value ** np.abs(t[:, None] - t)
    w = d.basis.contrast(np.array([0.0, 1.0]))
    M = np.eye(80) - d.Q @ d.Q.T
    scale = float(f.response.ss[0]) / np.trace(M @ V)
    se = np.sqrt(scale * w @ d.Q.T @ V @ d.Q @ w)
    assert abs(w @ f.response.coef[:, 0]) == pytest.approx(stats.t.isf(0.025, d.m) * se, rel=5e-3)


def test_tipping_point_at_irregular_times_where_a_rate_is_searched():
    """The working parameter falls as ρ rises; the same table in whole steps gives nearly the same point."""
    rng = np.random.default_rng(12)
    t = np.arange(80)
    f = make.fits(make.design({"day": t}, tick=t), 0.03 * t + make.ar1(rng, 1, 80, 0.2))
    (whole,) = tipping(f, ("serial",), ("day",))
    known = f.design.serial
    free = Series(known.name, known.part, known.elapsed, known.unit, 1.0, None, "irregular")
    irregular = replace(f.design, serial=free)
    g = Fits(replace(f.response, design=irregular), f.run)
    (found,) = tipping(g, ("serial",), ("day",))
    assert found.value == pytest.approx(whole.value, abs=0.01)


def test_no_tipping_point_is_said_in_words():
    rng = np.random.default_rng(3)
    f = make.trial(rng, effect=0.0)
    arm, x = tipping(f, ("group:clinic",), ("arm", "x"))
    assert arm.value is None
    assert "without any dependence" in arm.sentence
    assert x.value is None
    assert "Not even an intraclass correlation of 0.95" in x.sentence


def test_weights_scale_the_row_noise_alone():
    """Weighted parts against V = σ²ₖZZ' + σ²Ω⁻¹ written out on the user's scale."""
    rng = np.random.default_rng(7)
    clinic = np.repeat(np.arange(10), 6)
    x, omega = rng.standard_normal(60), rng.uniform(0.5, 3.0, 60)
    y = x + 0.7 * rng.standard_normal(10)[clinic] + rng.standard_normal(60) / np.sqrt(omega)
    f = make.fits(make.design({"x": x}, groups={"clinic": clinic}, root=np.sqrt(omega)), y)
    found = region(f, f.full_node, 0.95)
    p = parts(f, found)
    X, Z = np.column_stack([np.ones(60), x]), np.eye(10)[clinic]
    v = {k: float(a[0]) for k, a in f.full.variances.items()}
    V = v["group:clinic"] * Z @ Z.T + v["row"] * np.diag(1 / omega)
    W = np.diag(omega)
    bread = np.linalg.inv(X.T @ W @ X)
    true = np.diag(bread @ X.T @ W @ V @ W @ X @ bread)
    M = W - W @ X @ bread @ X.T @ W
    believed = np.trace(M @ V) / 58 * np.diag(bread)
    np.testing.assert_allclose(p.factor()[:, 0], np.sqrt(true / believed), rtol=1e-8)


@pytest.mark.parametrize(("series", "length"), [(1, 80), (10, 40), (40, 8)])
def test_spline_over_the_correlation_is_the_form_worked_out_at_each(series, length, monkeypatch):
    """Slow twin: Q'KQ at all 60 values instead of 17 and a spline between them."""
    from clingstone.ledger import consequence

    rng = np.random.default_rng(series)
    who, t = np.repeat(np.arange(series), length), np.tile(np.arange(length), series)
    x = np.cumsum(rng.standard_normal(series * length))
    f = make.fits(make.design({"x": x}, series=who, tick=t), rng.standard_normal(series * length))
    _, fast, mean = consequence._scan(f, "serial")
    monkeypatch.setattr(consequence, "NODES", 60)
    _, slow, exact = consequence._scan(f, "serial")
    assert np.max(np.abs(fast - slow)) < 2e-3 * np.max(np.abs(slow))
    assert np.max(np.abs(mean / exact - 1)) < 1e-4
