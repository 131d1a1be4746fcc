"""Profile-likelihood intervals read from one sampled region."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.ledger.region import loglik, region, regions
from clingstone.ledger.sizes import icc, variance
from clingstone.run import Run, one_thread
from tests.ledger import factories as make

CUT = float(stats.chi2.isf(0.05, 1)) / 2


def dense_reml(X: np.ndarray, y: np.ndarray, V: np.ndarray) -> float:
    """The textbook restricted log-likelihood, σ² profiled, by plain linear algebra."""
    n, p = X.shape
    W = np.linalg.inv(V)
    XWX = X.T @ W @ X
    P = W - W @ X @ np.linalg.solve(XWX, X.T @ W)
    s2 = y @ P @ y / (n - p)
    return float(
        -0.5 * (np.linalg.slogdet(V)[1] + np.linalg.slogdet(XWX)[1] + (n - p) * (np.log(2 * np.pi * s2) + 1))
    )


def test_one_parameter_interval_is_where_the_dense_likelihood_has_fallen_by_the_cut():
    f = make.trial(np.random.default_rng(1), G=8, n=7, icc=0.3)
    found = region(f, frozenset({"group:clinic"}), 0.95)
    low, estimate, high = found.interval(icc(f, found, "group:clinic"))
    d = f.design
    X, Z = d.Q, np.eye(8)[d.group.levels[0].codes]
    y = f.response.residual[:, 0]

    def ell(rho: float) -> float:
        return dense_reml(X, y, Z @ Z.T * rho / (1 - rho) + np.eye(d.n))

    best = optimize.minimize_scalar(lambda r: -ell(r), bounds=(1e-6, 0.99), method="bounded")
    assert estimate == pytest.approx(best.x, abs=1e-4)
    top = -best.fun
    # bisection halves a step of 1/64 of the axis nine times: about 1e-3 of ln λ
    assert ell(low) == pytest.approx(top - CUT, abs=0.01)
    assert ell(high) == pytest.approx(top - CUT, abs=0.01)


def test_boundary_estimate_keeps_a_low_end_of_zero_and_a_true_upper_end():
    rng = np.random.default_rng(4)
    f = make.trial(rng, G=10, n=6, icc=0.0)
    while float(f.full.variances["group:clinic"][0]) > 0:
        f = make.trial(rng, G=10, n=6, icc=0.0)
    found = region(f, f.full_node, 0.95)
    low, estimate, high = found.interval(icc(f, found, "group:clinic"))
    assert low == estimate == 0.0
    assert 0.05 < high < 0.5
    algebra = f.algebra(f.full_node)
    ends = [
        loglik(algebra, found.model.theta[:, i], f.response)[0] for i in range(found.model.theta.shape[1])
    ]
    assert min(ends) >= ends[0] - CUT - 1e-9


def test_two_parameters_reach_the_slow_profile_ends():
    """The slow twin: each share held on a grid, the other parameter maximised."""
    rng = np.random.default_rng(2)
    G, n = 25, 8
    subject, day = np.repeat(np.arange(G), n), np.tile(np.arange(n), G)
    y = 0.7 * rng.standard_normal(G)[subject] + make.ar1(rng, G, n, 0.4)
    x = rng.standard_normal(G * n)
    f = make.fits(make.design({"x": x}, groups={"subject": subject}, series=subject, tick=day), y)
    node = f.full_node
    found = region(f, node, 0.95)
    rho = np.asarray(found.model.shape["serial.rho"])
    algebra, names = f.algebra(node), f.full.names
    j = next(i for i, name in enumerate(names) if name.startswith("serial"))
    k = 1 - j
    top = float(f.full.loglik[0])

    def profile(at: float) -> float:
        def other(t: float) -> float:
            theta = np.empty(2)
            theta[j], theta[k] = at, t
            return -loglik(algebra, theta, f.response)[0]

        bounds = (algebra.parameters[k].low, algebra.parameters[k].high)
        grid = np.linspace(*bounds, 60)
        start = grid[int(np.argmin([other(t) for t in grid]))]
        step = grid[1] - grid[0]
        return -float(
            optimize.minimize_scalar(other, bounds=(start - step, start + step), method="bounded").fun
        )

    grid = np.linspace(-0.2, 1.2, 85)
    held = [g for g in grid if profile(g) >= top - CUT]
    low, _, high = found.interval(np.arctanh(rho))
    width = held[-1] - held[0]
    assert low == pytest.approx(held[0], abs=0.06 * width)
    assert high == pytest.approx(held[-1], abs=0.06 * width)


def test_scale_of_y_and_order_of_rows_change_nothing():
    rng = np.random.default_rng(6)
    clinic = np.repeat(np.arange(9), 5)
    x = rng.standard_normal(45)
    y = x + rng.standard_normal(9)[clinic] + rng.standard_normal(45)
    mix = rng.permutation(45)

    def ends(x, clinic, y):
        f = make.fits(make.design({"x": x}, groups={"clinic": clinic}), y)
        found = region(f, f.full_node, 0.95)
        return found.interval(found.model.shares()["group:clinic"])

    base = ends(x, clinic, y)
    assert ends(x, clinic, 1000 * y) == pytest.approx(base, abs=2e-3)
    assert ends(x[mix], clinic[mix], y[mix]) == pytest.approx(base, abs=2e-3)


@pytest.mark.parametrize("truth", [0.0, 0.3])
def test_interval_of_the_icc_covers(truth):
    """10 groups of 6: 120 data sets, nominal 95 %; the Monte-Carlo error of 120 is 2 points."""
    rng = np.random.default_rng(8)
    design = make.trial(rng, G=10, n=6).design
    clinic = design.group.levels[0].codes
    hits, draws = 0, 120
    with one_thread():
        for _ in range(draws):
            y = np.sqrt(truth) * rng.standard_normal(10)[clinic]
            y = y + np.sqrt(1 - truth) * rng.standard_normal(60)
            f = Fits(Response.of(design, y), Run())
            found = region(f, f.full_node, 0.95)
            low, _, high = found.interval(found.model.shares()["group:clinic"])
            hits += low - 1e-9 <= truth <= high
    assert hits / draws >= 0.95 - 3 * np.sqrt(0.95 * 0.05 / draws)
    if truth:
        assert hits / draws <= 0.95 + 3.5 * np.sqrt(0.95 * 0.05 / draws)


def test_the_ellipsoid_of_large_problems_is_near_the_region():
    """Forced on a problem where both can be had: shares within a quarter of the interval's width."""
    from clingstone.ledger import region as module

    rng = np.random.default_rng(9)
    G, n = 80, 8
    subject, day = np.repeat(np.arange(G), n), np.tile(np.arange(n), G)
    y = rng.standard_normal(G)[subject] + make.ar1(rng, G, n, 0.4)
    f = make.fits(
        make.design({"x": rng.standard_normal(G * n)}, groups={"s": subject}, series=subject, tick=day), y
    )
    full = region(f, f.full_node, 0.95)
    walk = module._Walk(f.algebra(f.full_node), f.response, f.full.theta, 2 * CUT)
    (model,) = module._models(f, f.full_node, walk, walk.ellipsoids())
    rough = module.Region(model, 0.95, "")
    for key in ("group:s", "serial"):
        exact, near = full.interval(full.model.shares()[key]), rough.interval(rough.model.shares()[key])
        width = exact[2] - exact[0]
        assert near[0] == pytest.approx(exact[0], abs=0.25 * width)
        assert near[2] == pytest.approx(exact[2], abs=0.25 * width)


def test_standard_deviation_of_rows_in_balanced_groups_has_the_limits_of_its_chi_square():
    """The sum of squares within groups over σ² is χ² with G(n − 1) df, whatever the groups do."""
    G, n = 15, 6
    rng = np.random.default_rng(21)
    clinic = np.repeat(np.arange(G), n)
    y = 1.2 * rng.standard_normal(G)[clinic] + 2.0 * rng.standard_normal(G * n)
    f = make.fits(make.design({}, groups={"clinic": clinic}), y)
    low, estimate, high = variance(region(f, f.full_node, 0.95), "row", f.design.m)
    table = y.reshape(G, n)
    within, df = float(np.sum((table - table.mean(axis=1, keepdims=True)) ** 2)), G * (n - 1)
    assert estimate == pytest.approx(within / df, rel=1e-3)
    assert np.sqrt(low) == pytest.approx(np.sqrt(within / stats.chi2.isf(0.025, df)), rel=0.02)
    assert np.sqrt(high) == pytest.approx(np.sqrt(within / stats.chi2.ppf(0.025, df)), rel=0.02)


def test_standard_deviation_without_dependence_is_the_exact_interval():
    f = make.trial(np.random.default_rng(22), G=8, n=7, icc=0.0)
    low, estimate, high = variance(region(f, frozenset(), 0.95), "row", f.design.m)
    ss, m = float(f.response.ss[0]), f.design.m
    assert estimate == pytest.approx(ss / m)
    assert low == pytest.approx(ss / stats.chi2.isf(0.025, m), rel=1e-6)
    assert high == pytest.approx(ss / stats.chi2.ppf(0.025, m), rel=1e-6)


def test_variance_follows_the_scale_of_the_response():
    rng = np.random.default_rng(23)
    f = make.trial(rng, G=10, n=5, icc=0.3)
    again = make.fits(f.design, 100 * f.response.residual[:, 0])
    for key in ("row", "group:clinic"):
        a = variance(region(f, f.full_node, 0.95), key, f.design.m)
        b = variance(region(again, again.full_node, 0.95), key, f.design.m)
        assert np.array(b) == pytest.approx(1e4 * np.array(a), rel=1e-3, abs=1e-9)


def test_limits_of_the_row_variance_hold_the_truth_as_often_as_they_say():
    """200 draws at 95 %: between 91 and 98.5 % up to Monte-Carlo error."""
    G, n, rng = 10, 5, np.random.default_rng(24)
    clinic = np.repeat(np.arange(G), n)
    d, held = make.design({}, groups={"clinic": clinic}), 0
    for _ in range(200):
        y = 0.7 * rng.standard_normal(G)[clinic] + rng.standard_normal(G * n)
        f = make.fits(d, y)
        low, _, high = variance(region(f, f.full_node, 0.95), "row", f.design.m)
        held += low <= 1.0 <= high
    assert 182 <= held <= 197


@pytest.mark.parametrize("serial", [False, True])
def test_the_regions_of_many_columns_are_those_of_each_alone(serial):
    rng = np.random.default_rng(31)
    G, n, B = 20, 6, 4
    subject, day = np.repeat(np.arange(G), n), np.tile(np.arange(n), G)
    where = {"series": subject, "tick": day} if serial else {}
    design = make.design({"x": rng.standard_normal(G * n)}, groups={"s": subject}, **where)
    Y = np.stack([0.5 * k * rng.standard_normal(G)[subject] for k in range(B)], axis=1)
    Y += rng.standard_normal(Y.shape)
    run = make.fits(design, Y[:, 0]).run
    many = Fits(Response.of(design, Y), run, depth="exact")
    for b, found in enumerate(regions(many, many.full_node, 0.95)):
        alone = region(make.fits(design, Y[:, b]), many.full_node, 0.95)
        assert region(many.column(b), many.full_node, 0.95) is found
        for key, value in found.model.shares().items():
            told = found.interval(value)
            assert told == pytest.approx(alone.interval(alone.model.shares()[key]), abs=2e-4)
