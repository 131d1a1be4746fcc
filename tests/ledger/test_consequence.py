"""Parts of an ordinary variance, total factors, tipping points."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.ledger.consequence import inflation, parts
from clingstone.ledger.region import region
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
