"""Generalised least squares refits: dense twins, boundaries, refusals, many columns, coverage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import optimize

from clingstone.covariance import information
from clingstone.design.design import Contrast, Term
from clingstone.maths import reml
from clingstone.needs import Limits, NotSupported
from clingstone.remedies import explain, refit, remedy
from clingstone.remedies.gls import TOGETHER, _most_likely
from tests.covariance.worlds import fits as world
from tests.remedies.cases import ar1, clustered, design, fits

MIXED, AR1, SPATIAL, JOINT = (remedy(i) for i in ("mixed-intercept", "ar1", "spatial-gls", "joint"))


def panel(units=14, times=9, seed=1, sd=0.8, rho=0.5):
    rng = np.random.default_rng(seed)
    series = np.repeat(np.arange(units), times)
    tick = np.tile(np.arange(times), units)
    X = np.column_stack([np.ones(len(tick)), rng.normal(size=len(tick)), series % 2]).astype(float)
    y = X[:, 1] + sd * rng.normal(size=units)[series] + ar1(times, rho, units, rng).T.ravel()
    return X, series, tick, y


def field(sites=45, seed=2, repeats=1):
    rng = np.random.default_rng(seed)
    xy = rng.uniform(0, 10, (sites, 2))
    d = np.linalg.norm(xy[:, None] - xy[None], axis=2)
    z = np.linalg.cholesky(np.exp(-d / 2) + 1e-9 * np.eye(sites)) @ rng.normal(size=sites)
    code = np.repeat(np.arange(sites), repeats)
    X = np.column_stack([np.ones(len(code)), xy[code, 0], rng.normal(size=len(code))])
    return X, xy[code], X[:, 2] + z[code] + 0.5 * rng.normal(size=len(code))


def gls_twin(X, y, V):
    """β̂ and covariance under σ²V by n × n arrays."""
    Vi = np.linalg.inv(V)
    phi = np.linalg.inv(X.T @ Vi @ X)
    beta = phi @ X.T @ Vi @ y
    r = y - X @ beta
    return beta, phi * (r @ Vi @ r) / (len(y) - X.shape[1])


def fitted_V(run, remedy_id):
    node = remedy(remedy_id).node(run) if remedy_id != "mixed-intercept" else {"group:clinic"}
    return run.algebra(node).dense(run[node].theta[:, 0])


@pytest.mark.parametrize("id", ["ar1", "spatial-gls", "joint"])
def test_estimates_and_standard_errors_are_those_of_the_dense_formula(id):
    if id == "spatial-gls":
        X, xy, y = field()
        of = design(X, xy=xy)
    else:
        X, series, tick, y = panel()
        of = design(X, group=series, tick=tick, series=series)
    run = fits(of, y)
    result = refit(remedy(id), "", run)
    beta, covariance = gls_twin(X, y, fitted_V(run, id))
    assert result.estimate == pytest.approx(beta, rel=1e-7, abs=1e-9)
    assert [r.se for r in result.intervals] == pytest.approx(np.sqrt(np.diag(covariance)), rel=1e-7)
    assert np.allclose(np.array(result.covariance), covariance, rtol=1e-6, atol=1e-12)
    assert all(r.df_rule == "Satterthwaite" and 1 <= r.df <= of.m for r in result.intervals)


def test_satterthwaite_df_of_the_random_intercept_are_those_of_dense_differences():
    X, group, y = clustered(seed=4)
    run = fits(design(X, group=group), y)
    result = refit(replace(MIXED, df="satterthwaite"), "clinic", run)
    model = run[{"group:clinic"}]
    n, Z = len(y), (group[:, None] == group).astype(float)
    at = np.array([float(model.variances["row"][0]), float(model.variances["group:clinic"][0])])

    def pieces(v):
        V = v[0] * np.eye(n) + v[1] * Z
        Vi = np.linalg.inv(V)
        XVX = X.T @ Vi @ X
        r = y - X @ np.linalg.solve(XVX, X.T @ Vi @ y)
        return np.linalg.slogdet(V)[1] + np.linalg.slogdet(XVX)[1] + r @ Vi @ r, np.linalg.inv(XVX)

    h = 1e-3 * at
    E = np.diag(h)
    H = np.empty((2, 2))
    for i in range(2):
        for j in range(2):
            f = [pieces(at + s * E[i] + t * E[j])[0] for s, t in ((1, 1), (1, -1), (-1, 1), (-1, -1))]
            H[i, j] = (f[0] - f[1] - f[2] + f[3]) / (8 * h[i] * h[j])
    for k, row in enumerate(result.intervals):
        g = [(pieces(at + E[i])[1][k, k] - pieces(at - E[i])[1][k, k]) / (2 * h[i]) for i in range(2)]
        wanted = 2 * pieces(at)[1][k, k] ** 2 / (g @ np.linalg.solve(H, g))
        assert row.df == pytest.approx(min(wanted, n - 3), rel=2e-3)


def test_a_balanced_mixed_fit_is_the_exact_analysis_of_group_means():
    # 10 clinics of 6, an arm by clinic: estimate and interval are the two-sample t of clinic means, 8 df.
    rng = np.random.default_rng(5)
    group = np.repeat(np.arange(10), 6)
    arm = (group % 2).astype(float)
    y = 0.4 * arm + rng.normal(size=10)[group] + rng.normal(size=60)
    row = refit(MIXED, "", fits(design(np.column_stack([np.ones(60), arm]), group=group), y)).get("x1")
    means = y.reshape(10, 6).mean(axis=1)
    a, b = means[1::2], means[::2]
    se = np.sqrt((a.var(ddof=1) + b.var(ddof=1)) / 2 * (2 / 5))
    assert row.estimate == pytest.approx(a.mean() - b.mean(), rel=1e-6)
    assert row.se == pytest.approx(se, rel=1e-6)
    assert row.df == pytest.approx(8.0, rel=1e-6)


def test_a_variance_at_zero_is_a_boundary_with_few_df_and_no_error():
    # Clinic means made equal: REML puts the variance at zero; the arm keeps the df of the clinics.
    rng = np.random.default_rng(6)
    group = np.repeat(np.arange(10), 6)
    y = rng.normal(size=60)
    y -= np.repeat(y.reshape(10, 6).mean(axis=1), 6)
    X = np.column_stack([np.ones(60), (group % 2).astype(float), rng.normal(size=60)])
    run = fits(design(X, group=group), y)
    result = refit(MIXED, "", run)
    assert result.boundary
    assert all(r.status.startswith("boundary") for r in result.intervals)
    ordinary = refit(remedy("ordinary"), "", run)
    assert [r.se for r in result.intervals] == pytest.approx([r.se for r in ordinary.intervals])
    assert result.get("x1").df < 12 < result.get("x2").df
    assert result.notes == (
        "The variance of clinic was estimated at zero, so the fit is the one without it.",
    )
    # Without Kenward-Roger the df at the boundary are those of the residuals.
    plain = refit(replace(MIXED, df="satterthwaite"), "", run)
    assert plain.get("x1").df == pytest.approx(57.0)


def test_nested_levels_are_fitted_together_by_default():
    rng = np.random.default_rng(7)
    ward = np.repeat(np.arange(24), 5)
    district = ward // 3
    X = np.column_stack([np.ones(120), rng.normal(size=120)])
    y = rng.normal(size=8)[district] + rng.normal(size=24)[ward] + rng.normal(size=120)
    of = design(X, group=ward % 3, outer=district)
    assert MIXED.abouts(of) == (f"district{TOGETHER}district/ward", "district", "district/ward")
    run = fits(of, y)
    result = refit(MIXED, "", run)
    assert result.name == "random intercept of district and district/ward"
    assert result.get("x1").df_rule == "Kenward–Roger"
    plain = refit(replace(MIXED, df="satterthwaite"), "", run)
    node = {"group:district", "group:district/ward"}
    beta, covariance = gls_twin(X, y, run.algebra(node).dense(run[node].theta[:, 0]))
    assert [r.se for r in plain.intervals] == pytest.approx(np.sqrt(np.diag(covariance)), rel=1e-7)
    assert result.estimate == pytest.approx(beta)
    assert refit(MIXED, "district", run).get("x1").df_rule == "Kenward–Roger"


def several(seed=8):
    """Unequal wards in unequal districts, a covariate by ward and one by row."""
    rng = np.random.default_rng(seed)
    ward = np.repeat(np.arange(13), rng.integers(2, 6, 13))
    district = np.repeat(np.arange(5), [1, 2, 4, 3, 3])[ward]
    X = np.column_stack([np.ones(len(ward)), rng.normal(size=len(ward)), rng.normal(size=13)[ward]])
    return X, ward, district, rng


def test_kenward_roger_of_nested_levels_follows_the_paper_with_dense_arrays():
    X, ward, district, rng = several()
    y = rng.normal(size=5)[district] + rng.normal(size=13)[ward] + rng.normal(size=len(ward))
    run = fits(design(X, group=ward, outer=district), y)
    found = refit(MIXED, "", run)
    model = run[("group:district", "group:district/ward")]
    parts = [np.eye(len(y)), *((g[:, None] == g).astype(float) for g in (district, ward))]
    sizes = [model.variances[k][0] for k in ("row", "group:district", "group:district/ward")]
    Vi = np.linalg.inv(sum(v * D for v, D in zip(sizes, parts, strict=True)))
    phi = np.linalg.inv(X.T @ Vi @ X)
    M = Vi - Vi @ X @ phi @ X.T @ Vi
    W = np.linalg.inv([[np.trace(M @ a @ M @ b) / 2 for b in parts] for a in parts])
    P = [-X.T @ Vi @ a @ Vi @ X for a in parts]
    inner = sum(
        W[i, j] * (X.T @ Vi @ a @ Vi @ b @ Vi @ X - P[i] @ phi @ P[j])
        for i, a in enumerate(parts)
        for j, b in enumerate(parts)
    )
    adjusted = phi + 2 * phi @ inner @ phi
    assert found.covariance == pytest.approx(adjusted, rel=1e-6)
    for k, row in enumerate(found.intervals):
        g = np.array([(phi @ p @ phi)[k, k] for p in P]) / phi[k, k]
        assert row.df == pytest.approx(2 / (g @ W @ g), rel=1e-6)


def test_many_columns_of_nested_levels_are_read_as_one_by_one():
    X, ward, district, rng = several(9)
    n, share = len(ward), np.linspace(0, 1, 6)
    Y = rng.normal(size=(n, 6)) + share * rng.normal(size=(13, 6))[ward]
    Y += share[::-1] * rng.normal(size=(5, 6))[district]
    terms = (Term("constant", (0,), "constant"), Term("pair", (1, 2), "factor"))
    of = design(X, group=ward, outer=district, terms=terms)
    chosen = replace(MIXED, at=f"district{TOGETHER}district/ward")
    found = chosen.prepare(of, None).fit(fits(of, Y))
    assert 0 < np.count_nonzero(found.boundary) < 6
    for b in range(6):
        one = refit(MIXED, "", fits(of, Y[:, b]))
        assert bool(found.boundary[b]) == one.boundary
        for j, row in enumerate(one.intervals):
            got = [found.estimate[j, b], found.se[j, b], found.df[j, b]]
            assert got == pytest.approx([row.estimate, row.se, row.df], rel=1e-4, abs=1e-6)
        F, _, df2, _ = found.joint["pair"]
        assert (F[b], df2[b]) == pytest.approx((one.terms[0].F, one.terms[0].df2), rel=1e-4)


def test_too_many_cells_in_one_block_take_satterthwaite_and_say_so(monkeypatch):
    monkeypatch.setattr(information, "WORK", 100)
    X, ward, district, rng = several()
    run = fits(design(X, group=ward, outer=district), X[:, 1] + rng.normal(size=len(ward)))
    found = refit(MIXED, "", run)
    assert {row.df_rule for row in found.intervals} == {"Satterthwaite"}
    assert "too many groups together" in found.notes[0]


def test_maximum_likelihood_of_places_is_where_a_simplex_ends():
    X, xy, y = field(sites=60, repeats=1)
    run = fits(design(X, xy=xy), y)
    algebra, model = run.algebra({"spatial"}), run[{"spatial"}]

    def minus_two(theta):
        gram = algebra.gram(theta, run.response)
        return gram.logdet + reml.profiled(reml.rss(gram), run.design.n)[0]

    start = model.theta[:, 0]
    box = [(axis.low, axis.high) for axis in algebra.parameters]
    tight = {"xatol": 1e-7, "fatol": 1e-9}
    simplex = optimize.minimize(minus_two, start, method="Nelder-Mead", bounds=box, options=tight)
    found = _most_likely(run.response, start, model.at_bound[:, 0], algebra)
    assert minus_two(found) == pytest.approx(simplex.fun, abs=1e-6)
    assert minus_two(found) < minus_two(start) - 1e-3


def test_sites_with_repeats_take_their_own_intercept_along():
    X, xy, y = field(sites=30, repeats=3)
    run = fits(design(X, xy=xy), y)
    assert SPATIAL.node(run) == {"group:site", "spatial"}
    account = refit(SPATIAL, "", run).account
    assert "variance of place, unstructured" in dict(account.items)
    assert run.design.spatial is not None
    said = dict(account.items)["practical range (correlation 0.05)"]
    assert said.split(" ", 1)[1] == run.design.spatial.unit
    named = fits(design(X, xy=xy, group=np.unique(xy, axis=0, return_inverse=True)[1].ravel()), y)
    assert SPATIAL.node(named) == {"group:clinic", "spatial"}
    assert refit(SPATIAL, "", named).get("x2").se == pytest.approx(
        refit(SPATIAL, "", run).get("x2").se, rel=1e-4
    )


def test_a_level_with_too_few_groups_is_left_out_of_the_default():
    rng = np.random.default_rng(8)
    ward = np.repeat(np.arange(12), 6)
    X = np.column_stack([np.ones(72), rng.normal(size=72)])
    of = design(X, group=ward % 4, outer=ward // 4)
    assert MIXED.abouts(of) == ("district/ward",)
    y = rng.normal(size=12)[ward] + rng.normal(size=72)
    assert refit(MIXED, "", fits(of, y)).at == "district/ward"


def test_all_together_without_what_cuts_across_names_it_and_accounts_for_the_rest():
    rng = np.random.default_rng(31)
    judge, site = rng.integers(0, 12, 180), rng.integers(0, 30, 180)
    xy = rng.uniform(size=(30, 2))[site]
    y = rng.normal(size=12)[judge] + rng.normal(size=30)[site] + rng.normal(size=180)
    made = world(y, rng.normal(size=180), groups={"judge": judge}, xy=xy, limits=Limits(dense_rows=100))
    assert set(made.left_out) == {"spatial"}
    found = refit(remedy("joint"), "", made)
    assert any("Not in this fit" in note and "cut across" in note for note in found.notes)
    assert {"variance of judge", "variance of row noise"} <= {label for label, _ in found.account.items}


# ---- refusals -----------------------------------------------------------------------------


def test_refusals_come_from_the_covariance_room_with_their_reason():
    X, group, y = clustered(G=4)
    with pytest.raises(NotSupported, match="4 groups"):
        refit(MIXED, "", fits(design(X, group=group), y))
    with pytest.raises(NotSupported, match="the longest series has 12 times"):
        refit(AR1, "", fits(design(X[:12], tick=np.arange(12)), y[:12]))
    with pytest.raises(NotSupported, match="distinct places"):
        refit(SPATIAL, "", fits(design(X, xy=np.column_stack([group, group])), y))
    with pytest.raises(NotSupported, match="no group structure"):
        refit(MIXED, "", fits(design(X), y))


def test_joint_needs_two_structures():
    X, group, y = clustered()
    with pytest.raises(
        NotSupported, match="needs two structures that can be estimated; here: clinic"
    ) as stop:
        refit(
            JOINT, "", fits(design(X, group=group, tick=np.arange(len(y)), series=np.arange(len(y)) // 3), y)
        )
    assert "serial" in stop.value.hint


# ---- many columns, contrasts, invariances, conventions ---------------------------------------


@pytest.mark.parametrize("id", ["mixed-intercept", "ar1"])
def test_many_columns_are_read_as_one_by_one(id):
    X, series, tick, y = panel(units=9, times=12)
    terms = (Term("constant", (0,), "constant"), Term("pair", (1, 2), "factor"))
    of = design(X, group=series, tick=tick, series=series, terms=terms)
    rng = np.random.default_rng(0)
    Y = np.column_stack([y, *(panel(units=9, times=12, seed=s)[3] for s in (5, 6)), rng.normal(size=len(y))])
    many = fits(of, Y)
    chosen = replace(remedy(id), at="clinic" if id == "mixed-intercept" else "")
    found = chosen.prepare(of, None).fit(many)
    assert found.df.shape == (3, 4)
    for b in range(4):
        one = refit(remedy(id), "", fits(of, Y[:, b]))
        assert bool(found.boundary[b]) == one.boundary
        for j, row in enumerate(one.intervals):
            got = [found.estimate[j, b], found.se[j, b], found.df[j, b], found.low[j, b]]
            # Brent's method leaves about 3e-7 in θ̂, the square root of what rounding leaves in −2ℓ_R.
            assert got == pytest.approx([row.estimate, row.se, row.df, row.low], rel=1e-5, abs=1e-6)
        F, _, df2, _ = found.joint["pair"]
        assert (F[b], df2[b]) == pytest.approx((one.terms[0].F, one.terms[0].df2), rel=1e-5)


@pytest.mark.parametrize("id", ["mixed-intercept", "ar1", "joint"])
def test_scale_of_y_and_units_of_x_change_nothing(id):
    X, series, tick, y = panel()
    plain = refit(remedy(id), "", fits(design(X, group=series, tick=tick, series=series), y))
    scale = np.array([1.0, 1e3, 1.0])
    other = refit(remedy(id), "", fits(design(X * scale, group=series, tick=tick, series=series), 50 * y))
    for a, b, c in zip(plain.intervals, other.intervals, scale, strict=True):
        assert (b.estimate * c / 50, b.se * c / 50) == pytest.approx((a.estimate, a.se), rel=1e-4)
        assert (b.df, b.p) == pytest.approx((a.df, a.p), rel=2e-3)


def test_order_of_groups_changes_nothing():
    X, group, y = clustered()
    order = np.random.default_rng(0).permutation(len(y))
    plain = refit(MIXED, "", fits(design(X, group=group), y))
    mixed_up = refit(MIXED, "", fits(design(X[order], group=group[order]), y[order]))
    for a, b in zip(plain.intervals, mixed_up.intervals, strict=True):
        assert (b.estimate, b.se, b.df, b.p) == pytest.approx((a.estimate, a.se, a.df, a.p), rel=1e-5)


def test_contrasts_use_the_whole_covariance():
    X, group, y = clustered()
    of = design(X, group=group, contrasts=[Contrast("gap", (0.0, 1.0, -1.0))])
    result = refit(MIXED, "", fits(of, y))
    V = np.array(result.covariance)
    assert result.get("gap").se == pytest.approx(np.sqrt(V[1, 1] + V[2, 2] - 2 * V[1, 2]))
    assert 1 < result.get("gap").df <= of.m


def test_precision_weights_scale_the_row_noise_only():
    # V = τ²ZZ' + σ²Ω⁻¹, by dense arrays on the scale of y.
    X, group, y = clustered(seed=9)
    weight = np.random.default_rng(1).uniform(0.5, 3, len(y))
    run = fits(design(X, group=group, root=np.sqrt(weight)), y)
    result = refit(replace(MIXED, df="satterthwaite"), "", run)
    model = run[{"group:clinic"}]
    tau2, s2 = float(model.variances["group:clinic"][0]), float(model.variances["row"][0])
    V = tau2 / s2 * (group[:, None] == group) + np.diag(1 / weight)
    beta, covariance = gls_twin(X, y, V)
    assert result.estimate == pytest.approx(beta, rel=1e-6)
    assert [r.se for r in result.intervals] == pytest.approx(np.sqrt(np.diag(covariance)), rel=1e-6)


def test_conventions_share_the_fit_and_name_themselves():
    X, group, y = clustered()
    run = fits(design(X, group=group), y)
    shown = dict(explain(MIXED, "", run))
    assert len(shown) == 4
    normal = next(v for k, v in shown.items() if k == "the same fit, normal quantile")
    residual = next(v for k, v in shown.items() if k == "the same fit, n − p df")
    assert all(a.se == b.se and a.p < b.p for a, b in zip(normal, residual, strict=True))
    likely = next(v for k, v in shown.items() if k.startswith("maximum likelihood"))
    assert likely[0].se < normal[0].se


# ---- coverage ------------------------------------------------------------------------------


def coverage(found):
    return np.mean((found.low <= 0) & (found.high >= 0), axis=1)


def test_kenward_roger_covers_with_eight_unequal_clinics():
    # Regressor by clinic, ICC 1/3, 1,000 columns: MCSE 0.007. Ordinary covers far less.
    rng = np.random.default_rng(20)
    group = np.repeat(np.arange(8), [3, 4, 5, 6, 8, 9, 12, 16])
    X = np.column_stack([np.ones(63), rng.normal(size=8)[group], rng.normal(size=63)])
    of = design(X, group=group)
    run = fits(of, np.sqrt(0.5) * rng.normal(size=(8, 1000))[group] + rng.normal(size=(63, 1000)))
    assert coverage(remedy("ordinary").prepare(of, None).fit(run))[1] < 0.85
    found = coverage(replace(MIXED, at="clinic").prepare(of, None).fit(run))
    assert found[1] == pytest.approx(0.95, abs=0.03)
    assert found[2] == pytest.approx(0.95, abs=0.025)


def test_satterthwaite_covers_a_trend_in_a_short_series():
    # n = 20, ρ = 0.7: the size of t with n − p df is about 0.13, Satterthwaite's about 0.07.
    n = 20
    X = np.column_stack([np.ones(n), np.arange(n)])
    of = design(X, tick=np.arange(n))
    run = fits(of, ar1(n, 0.7, 1000, np.random.default_rng(21)))
    plain = coverage(replace(AR1, df="residual").prepare(of, None).fit(run))[1]
    found = coverage(AR1.prepare(of, None).fit(run))[1]
    assert plain < 0.91
    assert 0.90 < found < 0.97
    assert coverage(remedy("ordinary").prepare(of, None).fit(run))[1] < 0.75


def test_spatial_satterthwaite_covers_a_smooth_covariate():
    # 40 sites, exponential of range 2 on a square of 10, nugget 0.2, 150 columns: MCSE 0.018.
    rng = np.random.default_rng(22)
    xy = rng.uniform(0, 10, (40, 2))
    d = np.linalg.norm(xy[:, None] - xy[None], axis=2)
    L = np.linalg.cholesky(0.8 * np.exp(-d / 2) + 0.2 * np.eye(40))
    of = design(np.column_stack([np.ones(40), xy[:, 0]]), xy=xy)
    run = fits(of, L @ rng.normal(size=(40, 150)))
    found = coverage(SPATIAL.prepare(of, None).fit(run))[1]
    assert found > 0.87
    assert coverage(remedy("ordinary").prepare(of, None).fit(run))[1] < found
