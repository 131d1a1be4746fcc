"""Refits with slopes that vary, mixed means with clusters on top, a free covariance of visits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.covariance.fits import Fits
from clingstone.design.design import Term
from clingstone.design.response import Response
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from clingstone.remedies.mixed import MixedSlope
from clingstone.remedies.mixedrobust import MixedRobust
from clingstone.remedies.unstructured import Unstructured
from clingstone.run import Run
from tests.remedies.cases import design, fits

G, VISITS = 16, 5


def panel(seed=3, G=G, slope=0.7, drop=0.0, B=0):
    """Patients over visits, an arm by patient; b₀ + b₁·visit vary between patients."""
    rng = np.random.default_rng(seed)
    group, visit = np.repeat(np.arange(G), VISITS), np.tile(np.arange(VISITS), G)
    keep = rng.random(G * VISITS) >= drop
    group, visit = group[keep], visit[keep]
    arm = (group % 2).astype(float)
    X = np.column_stack([np.ones(len(group)), visit, arm])
    shape = (G, max(B, 1))
    b0, b1 = rng.normal(size=shape), slope * rng.normal(size=shape)
    y = b0[group] + b1[group] * visit[:, None] + rng.normal(size=(len(group), shape[1]))
    return X, group, visit, y if B else y[:, 0]


def case(X, group, visit=None, **more):
    made = design(
        X,
        ["constant", "day", "arm"][: X.shape[1]],
        group=group,
        tick=visit,
        series=group if visit is not None else None,
        **more,
    )
    terms = tuple(replace(t, variables=(t.name,)) if t.kind == "numeric" else t for t in made.terms)
    return replace(
        made, terms=terms, covariates={"day": X[:, 1], **({"arm": X[:, 2]} if X.shape[1] > 2 else {})}
    )


# ---- mixed-slope ---------------------------------------------------------------------------------------


def test_slopes_are_offered_for_predictors_in_focus_that_vary_within_groups():
    X, group, _, y = panel()
    made = case(X, group)
    assert MixedSlope().abouts(made) == ("day by clinic",)
    quiet = replace(made, terms=tuple(replace(t, focus=t.name == "arm") for t in made.terms))
    assert MixedSlope().abouts(quiet) == ()
    with pytest.raises(NotSupported, match="no level to work at"):
        refit(remedy("mixed-slope"), "", fits(quiet, y))


def test_generalised_least_squares_by_hand():
    X, group, _, y = panel()
    f = fits(case(X, group), y)
    found = refit(MixedSlope(df="normal"), "", f)
    node = {"group:clinic", "slope:clinic:day"}
    V = f.algebra(node).dense(f[node].theta[:, 0])
    inverse = np.linalg.inv(V)
    A = np.linalg.inv(X.T @ inverse @ X)
    np.testing.assert_allclose(found.estimate, A @ X.T @ inverse @ y, rtol=1e-8)
    np.testing.assert_allclose(
        np.array(found.covariance), float(f[node].sigma2[0]) * A, rtol=1e-8, atol=1e-12
    )


def test_balanced_slopes_have_as_many_df_as_groups_allow():
    # With every group alike the slope's variance is that of the groups' own slopes: G − 1 df for the
    # mean slope, G − 2 for what varies between two arms.
    X, group, _, y = panel()
    rows = refit(MixedSlope(), "", fits(case(X, group), y))
    assert rows.get("day").df == pytest.approx(G - 1, rel=1e-6)
    assert rows.get("arm").df == pytest.approx(G - 2, rel=1e-2)
    own = [np.polyfit(np.arange(VISITS), y[group == g], 1)[0] for g in range(G)]
    assert rows.get("day").estimate == pytest.approx(np.mean(own), rel=1e-8)
    assert rows.get("day").se == pytest.approx(np.std(own, ddof=1) / np.sqrt(G), rel=1e-4)


def test_account_in_the_users_units_whatever_the_origin():
    X, group, _, y = panel()
    one = dict(refit(MixedSlope(), "", fits(case(X, group), y)).account.items)
    moved = X.copy()
    moved[:, 1] = 1000 * (X[:, 1] + 50)
    other = dict(refit(MixedSlope(), "", fits(case(moved, group), y)).account.items)
    sd = "standard deviation of the slope of day between clinic"
    assert " % profile interval " in one[sd]
    assert float(other[sd].split()[0]) * 1000 == pytest.approx(float(one[sd].split()[0]), rel=1e-3)
    assert other["standard deviation of row noise"] == one["standard deviation of row noise"]


def test_conventions_and_many_columns():
    X, group, _, y = panel()
    f = fits(case(X, group), y)
    words = dict(explain(MixedSlope(), "", f))
    assert "slopes uncorrelated with intercepts" in words
    assert len(words) == 4
    _, _, _, Y = panel(B=4)
    many = fits(case(X, group), Y)
    chosen = replace(MixedSlope(), at="day by clinic")
    read = chosen.prepare(many.design).fit(many)
    for b in range(4):
        alone = refit(MixedSlope(), "", fits(case(X, group), Y[:, b]))
        assert read.estimate[1, b] == pytest.approx(alone.get("day").estimate, abs=1e-4)
        assert read.se[1, b] == pytest.approx(alone.get("day").se, rel=1e-3)


def test_boundary_is_a_status_and_a_sentence():
    X, group, _, _ = panel()
    rng = np.random.default_rng(1)
    b = rng.normal(size=G)
    y = 3 * b[group] + 1.2 * b[group] * (X[:, 1] - 2) + 0.2 * rng.normal(size=len(group))
    found = refit(MixedSlope(), "", fits(case(X, group), y))
    assert found.boundary
    assert found.get("day").status.startswith("boundary")
    assert any("tied" in note for note in found.notes)


def test_refusals():
    X, group, _, y = panel()
    pairs = X[:, 1] < 2
    with pytest.raises(NotSupported, match="three rows or more"):
        refit(MixedSlope(), "day by clinic", fits(case(X[pairs], group[pairs]), y[pairs]))
    with pytest.raises(NotSupported, match="cannot be run at 'nothing'"):
        refit(MixedSlope(), "nothing", fits(case(X, group), y))


@pytest.mark.slow
def test_coverage_with_few_unequal_groups():
    X, group, _, _ = panel(G=8, drop=0.25)
    made = case(X, group)
    rng = np.random.default_rng(5)
    hit = {"mixed-slope": 0, "mixed-intercept": 0}
    reps = 100
    for _ in range(reps):
        b0, b1 = rng.normal(size=8), rng.normal(size=8)
        y = b0[group] + b1[group] * X[:, 1] + rng.normal(size=len(group))
        f = fits(made, y)
        for name in hit:
            row = refit(remedy(name), "", f).get("day")
            hit[name] += row.low <= 0 <= row.high
    # 0.95 − 3 · √(0.95 · 0.05/100); a random intercept alone leaves the slopes out.
    assert hit["mixed-slope"] / reps > 0.95 - 0.066
    assert hit["mixed-intercept"] / reps < 0.9


# ---- mixed-robust --------------------------------------------------------------------------------------


def twin(kind, X, group, y, V):
    """The slow way: V^{−½} by eigenvectors, each cluster's block by hand."""
    size, U = np.linalg.eigh(V)
    half = U @ np.diag(size**-0.5) @ U.T
    Xs = half @ X
    A = np.linalg.inv(Xs.T @ Xs)
    e = half @ y - Xs @ (A @ Xs.T @ half @ y)
    meat = np.zeros((X.shape[1],) * 2)
    for g in np.unique(group):
        own = group == g
        H = Xs[own] @ A @ Xs[own].T
        s, T = np.linalg.eigh(np.eye(own.sum()) - H)
        power = {"CR0": 0.0, "CR2": -0.5, "CR3": -1.0}[kind]
        score = Xs[own].T @ (T @ np.diag(s**power) @ T.T) @ e[own]
        meat += np.outer(score, score)
    return A @ meat @ A


@pytest.mark.parametrize("kind", ["CR0", "CR2", "CR3"])
def test_sandwich_of_whitened_rows_by_hand(kind):
    X, group, _, y = panel(drop=0.3)
    f = fits(case(X, group), y)
    found = refit(MixedRobust(kind=kind), "", f)
    V = f.algebra({"group:clinic"}).dense(f[{"group:clinic"}].theta[:, 0])
    np.testing.assert_allclose(np.array(found.covariance), twin(kind, X, group, y, V), rtol=1e-7)
    mixed = refit(remedy("mixed-intercept"), "", f)
    np.testing.assert_allclose(found.estimate, mixed.estimate, rtol=1e-8)


def test_without_group_variance_it_is_the_cluster_robust_fit():
    X, group, _, y = panel(slope=0.0)
    y = y - np.array([y[group == g].mean() for g in range(G)])[group]  # no variance between groups is left
    f = fits(case(X, group), y)
    robust, plain = refit(MixedRobust(), "", f), refit(remedy("cluster-robust"), "", f)
    assert robust.boundary
    for one, other in zip(robust.intervals, plain.intervals, strict=True):
        assert one.se == pytest.approx(other.se, rel=1e-6)
        assert one.df == pytest.approx(other.df, rel=1e-6)


def test_nested_levels_cluster_at_the_outer_one_with_both_intercepts():
    rng = np.random.default_rng(2)
    ward = np.repeat(np.arange(30), 4)
    X = np.column_stack([np.ones(120), rng.normal(size=120)])
    y = rng.normal(size=30)[ward] + rng.normal(size=120) + rng.normal(size=10)[ward // 3]
    f = fits(design(X, group=ward, outer=ward // 3), y)
    assert MixedRobust().abouts(f.design) == ("district", "district/ward")
    assert set(replace(MixedRobust(), at="district").node(f)) == {"group:district", "group:district/ward"}
    assert set(replace(MixedRobust(), at="district/ward").node(f)) == {"group:district/ward"}
    assert refit(MixedRobust(), "", f).at == "district"


def test_more_coefficients_than_clusters_are_refused():
    rng = np.random.default_rng(0)
    group = np.repeat(np.arange(5), 8)
    X = np.column_stack([np.ones(40), rng.normal(size=(40, 5))])
    with pytest.raises(NotSupported, match="5 clusters of clinic and 6 coefficients"):
        refit(MixedRobust(), "", fits(design(X, group=group), rng.normal(size=40)))


def test_robust_coverage_when_the_error_model_is_wrong():
    X, group, _, Y = panel(G=20, slope=0.6, B=300)
    f = fits(case(X, group), Y)
    chosen = replace(MixedRobust(), at="clinic")
    read = chosen.prepare(f.design).fit(f)
    covered = np.mean((read.low[1] <= 0) & (read.high[1] >= 0))
    assert covered == pytest.approx(0.95, abs=3 * np.sqrt(0.05 * 0.95 / 300))


# ---- unstructured --------------------------------------------------------------------------------------


def arms(seed=4, per=14, drop=0.0):
    """Two arms over three visits, a mean for every arm and visit."""
    rng = np.random.default_rng(seed)
    group, visit = np.repeat(np.arange(2 * per), 3), np.tile(np.arange(3), 2 * per)
    arm = (group % 2).astype(float)
    X = np.column_stack(
        [np.ones(len(group)), visit == 1, visit == 2, arm, arm * (visit == 1), arm * (visit == 2)]
    )
    L = np.linalg.cholesky(np.array([[4.0, 1.0, 0.2], [1.0, 1.0, 0.5], [0.2, 0.5, 2.0]]))
    y = (rng.normal(size=(2 * per, 3)) @ L.T).ravel()
    keep = rng.random(len(y)) >= drop
    return X[keep].astype(float), group[keep], visit[keep], y[keep]


def free(X, group, visit):
    names = ["constant", "v2", "v3", "arm", "arm v2", "arm v3"]
    terms = [Term("constant", (0,), "constant"), Term("visit", (1, 2), "factor", focus=True)]
    terms += [
        Term("arm", (3,), "numeric", focus=True),
        Term("arm × visit", (4, 5), "interaction", focus=True),
    ]
    return design(X, names, group=group, tick=visit, series=group, terms=terms)


def test_every_arm_and_visit_its_own_mean_gives_t_tests_of_the_visit():
    X, group, visit, y = arms()
    found = refit(Unstructured(), "", fits(free(X, group, visit), y))
    # At the first visit: the two-sample t test with pooled variance.
    first, arm = y[visit == 0], group[visit == 0] % 2
    gap = first[arm == 1].mean() - first[arm == 0].mean()
    pooled = (np.var(first[arm == 0], ddof=1) + np.var(first[arm == 1], ddof=1)) / 2
    row = found.get("arm")
    assert row.estimate == pytest.approx(gap, rel=1e-6)
    assert row.se == pytest.approx(np.sqrt(pooled * 2 / 14), rel=1e-4)
    assert row.df == pytest.approx(26, rel=1e-4)
    # All visits at once: Hotelling's T² of the changes, F(2, 25).
    changes = np.column_stack([y[visit == t] - first for t in (1, 2)])
    d = changes[arm == 1].mean(axis=0) - changes[arm == 0].mean(axis=0)
    S = sum(np.cov(changes[arm == a], rowvar=False) for a in (0, 1)) / 2
    T2 = d @ np.linalg.solve(S * 2 / 14, d)
    test = next(t for t in found.terms if t.term == "arm × visit")
    assert pytest.approx(T2 * 25 / (26 * 2), rel=1e-3) == test.F
    assert test.df2 == pytest.approx(25, rel=1e-3)


def test_shuffled_rows_scaled_y_and_missing_visits():
    X, group, visit, y = arms(drop=0.15)
    one = refit(Unstructured(), "", fits(free(X, group, visit), y))
    order = np.lexsort((np.random.default_rng(0).random(len(y)), group))
    other = refit(Unstructured(), "", fits(free(X[order], group[order], visit[order]), 10 * y[order]))
    for a, b in zip(one.intervals, other.intervals, strict=True):
        assert b.se == pytest.approx(10 * a.se, rel=1e-4)
        assert b.p == pytest.approx(a.p, abs=1e-4)


def test_many_columns_and_conventions():
    X, group, visit, y = arms()
    made = free(X, group, visit)
    Y = np.column_stack([y, y[::-1]])
    read = replace(Unstructured(), at="clinic").prepare(made).fit(Fits(Response.of(made, Y), Run()))
    alone = refit(Unstructured(), "", fits(made, y))
    assert read.se[3, 0] == pytest.approx(alone.get("arm").se, rel=1e-6)
    assert len(explain(Unstructured(), "", fits(made, y))) == 4


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda X, g, v, y: (X, g, v + 20 * (g % 7), y), "distinct values of day"),
        (lambda X, g, v, y: (X, g, np.where(v == 2, 1, v), y), "two rows of the same day"),
        (lambda X, g, v, y: (X[g < 5], g[g < 5], v[g < 5], y[g < 5]), "only 5 of 5 groups"),
        (lambda X, g, v, y: (X, np.arange(len(g)), v, y), "single row"),
    ],
    ids=["many visits", "recurring visits", "few subjects", "one row each"],
)
def test_what_a_free_covariance_cannot_carry(change, reason):
    X, group, visit, y = arms()
    X, group, visit, y = change(X, group, visit, y)
    X = X[:, [0, 3]]
    made = design(X, ["constant", "arm"], group=group, tick=visit, series=group)
    with pytest.raises(NotSupported, match=reason):
        refit(Unstructured(), "", fits(made, y))


def test_free_covariance_keeps_its_size():
    X, group, visit, _ = arms(per=8)
    made = free(X, group, visit)
    rng = np.random.default_rng(8)
    L = np.linalg.cholesky(np.array([[4.0, 1.0, 0.2], [1.0, 1.0, 0.5], [0.2, 0.5, 2.0]]))
    Y = np.stack([(rng.normal(size=(16, 3)) @ L.T).ravel() for _ in range(200)], axis=1)
    read = replace(Unstructured(), at="clinic").prepare(made).fit(Fits(Response.of(made, Y), Run()))
    assert np.mean(read.p[3] < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 200))
    F, _, _, p = read.joint["arm × visit"]
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 200))
    assert np.all(F > 0)


# ---- many columns of y with random slopes --------------------------------------------------------------


@pytest.mark.parametrize("df", ["kenward-roger", pytest.param("satterthwaite", marks=pytest.mark.slow)])
def test_many_columns_with_slopes_are_read_as_one_by_one(df):
    X, group, _, Y = panel(seed=12, G=20, slope=0.9, drop=0.2, B=8)
    of = case(X, group)
    chosen = replace(MixedSlope(df=df), at="day by clinic")
    found = chosen.prepare(of).fit(fits(of, Y))
    assert found.converged.all()
    for b in range(8):
        one = refit(MixedSlope(df=df), "", fits(of, Y[:, b]))
        assert bool(found.boundary[b]) == one.boundary
        got = np.stack([found.estimate[:, b], found.se[:, b], found.df[:, b]])
        want = [[getattr(row, what) for row in one.intervals] for what in ("estimate", "se", "df")]
        # Differences of the likelihood for the observed information leave about 1e-6.
        tolerance = 1e-8 if df == "kenward-roger" and not one.boundary else 1e-5
        np.testing.assert_allclose(got, want, rtol=tolerance, atol=tolerance)
