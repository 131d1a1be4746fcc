"""Group means, estimates per group, absorbed groups, within and between: against the obvious loops."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from clingstone.design.design import Contrast, Term
from clingstone.maths.absorb import TwoWay
from clingstone.maths.estimable import reduced
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from clingstone.structure.group import Groups
from tests.remedies.cases import clustered, design, fits

MEANS, GROUP_T = remedy("group-means"), remedy("group-t")
FIXED, SPLIT = remedy("fixed-effects"), remedy("within-between")
ALL = [MEANS, GROUP_T, FIXED, SPLIT]


def lstsq(X, y):
    return np.linalg.lstsq(X, y, rcond=None)[0]


def averages(values, group):
    return np.array([values[group == g].mean(axis=0) for g in np.unique(group)])


def cr2(X, y, group, c):
    """CR2 variance and Satterthwaite df of c'β, by n × n matrices; X may hold a column for each group."""
    inv = np.linalg.pinv(X.T @ X)
    H = X @ inv @ X.T
    M = np.eye(len(y)) - H
    e = M @ y
    B = np.zeros_like(H)
    for g in np.unique(group):
        i = np.flatnonzero(group == g)
        values, vectors = np.linalg.eigh(M[np.ix_(i, i)])
        half = np.where(values > 1e-9, 1 / np.sqrt(np.maximum(values, 1e-12)), 0.0)
        a = (vectors * half) @ vectors.T @ X[i] @ inv @ c
        B[np.ix_(i, i)] = np.outer(a, a)
    N = M @ B @ M
    return e @ B @ e, np.trace(N) ** 2 / np.trace(N @ N)


def crossed(X, firm, year, **more):
    levels = (Partition.of("firm", firm), Partition.of("year", year))
    return replace(design(X, **more), group=Groups(levels, "crossed"))


def panel(firms=8, years=6, p=3, seed=2):
    rng = np.random.default_rng(seed)
    firm, year = np.repeat(np.arange(firms), years), np.tile(np.arange(years), firms)
    keep = rng.random(len(firm)) < 0.85
    firm, year = firm[keep], year[keep]
    n = len(firm)
    X = np.column_stack([np.ones(n), rng.normal(size=(n, p - 1)) + rng.normal(size=(firms, p - 1))[firm]])
    return X, firm, year, X[:, 1] + rng.normal(size=firms)[firm] + rng.normal(size=n)


# ---- group-means ---------------------------------------------------------------------------


def test_group_means_are_least_squares_of_the_means():
    X, group, y = clustered()
    result = refit(MEANS, "clinic", fits(design(X, group=group), y))
    Z, v = averages(X, group), averages(y, group)
    b = lstsq(Z, v)
    e = v - Z @ b
    se = np.sqrt(e @ e / 9 * np.diag(np.linalg.inv(Z.T @ Z)))
    assert [r.term for r in result.intervals] == ["constant", "x1 [between]", "x2"]
    assert [r.estimate for r in result.intervals] == pytest.approx(b)
    assert [r.se for r in result.intervals] == pytest.approx(se)
    assert {r.df for r in result.intervals} == {9.0}
    assert result.coefficients == ("constant", "x1 [between]", "x2")


def test_two_arms_of_equal_groups_are_the_t_test_of_their_means():
    group = np.repeat(np.arange(10), 4)
    arm = (group % 2).astype(float)
    y = np.random.default_rng(0).normal(size=40) + 0.5 * group
    of = design(np.column_stack([np.ones(40), arm]), group=group)
    row = refit(MEANS, "", fits(of, y)).get("x1")
    v = averages(y, group)
    assert row.p == pytest.approx(stats.ttest_ind(v[1::2], v[::2]).pvalue)
    welch = refit(
        replace(MEANS, kind="HC2"), "", fits(design(np.column_stack([np.ones(40), arm]), group=group), y)
    )
    other = stats.ttest_ind(v[1::2], v[::2], equal_var=False)
    assert welch.get("x1").estimate / welch.get("x1").se == pytest.approx(other.statistic)


def test_weighted_means_are_weighted_least_squares():
    X, group, y = clustered()
    result = refit(replace(MEANS, kind="weighted"), "clinic", fits(design(X, group=group), y))
    root = np.sqrt(np.bincount(group))
    b = lstsq(averages(X, group) * root[:, None], averages(y, group) * root)
    assert [r.estimate for r in result.intervals] == pytest.approx(b)


def test_precision_weights_weight_the_rows_of_a_mean():
    X, group, y = clustered()
    w = np.random.default_rng(1).uniform(0.5, 2, len(y))
    result = refit(MEANS, "clinic", fits(design(X, group=group, root=np.sqrt(w)), y))
    Z = np.array([np.average(X[group == g], axis=0, weights=w[group == g]) for g in range(12)])
    v = np.array([np.average(y[group == g], weights=w[group == g]) for g in range(12)])
    assert [r.estimate for r in result.intervals] == pytest.approx(lstsq(Z, v))


def test_means_that_do_not_differ_leave_their_column_and_what_leans_on_it():
    # Every group is seen at days 0 to 3: means cannot tell the slope, nor the constant at day 0.
    group = np.repeat(np.arange(8), 4)
    X = np.column_stack([np.ones(32), np.tile(np.arange(4.0), 8), group % 2])
    y = np.random.default_rng(0).normal(size=32)
    result = refit(MEANS, "", fits(design(X, group=group), y))
    assert result.get("x2").status == "ok"
    assert "do not tell it" in result.get("x1 [between]").status
    assert "do not tell it" in result.get("constant").status
    assert np.isnan(result.get("constant").estimate)


def test_uneven_groups_are_told_and_few_groups_refused():
    X, group, y = clustered()
    keep = (group != 3) | (np.cumsum(group == 3) <= 1)
    result = refit(MEANS, "", fits(design(X[keep], group=group[keep]), y[keep]))
    assert "not equally exact" in result.notes[0]
    some = group < 3
    with pytest.raises(NotSupported, match="3 groups of clinic leave no degrees of freedom"):
        refit(MEANS, "", fits(design(X[some], group=group[some]), y[some]))


def test_means_hold_their_level_at_six_groups():
    # Equal groups, normal: t is exact. 4,000 columns, Monte-Carlo standard error 0.0034.
    rng = np.random.default_rng(3)
    group = np.repeat(np.arange(6), 5)
    X = np.column_stack([np.ones(30), group % 2])
    Y = rng.normal(size=(6, 4000))[group] + rng.normal(size=(30, 4000))
    of = design(X, group=group)
    found = replace(MEANS, at="clinic").prepare(of, None).fit(fits(of, Y))
    assert np.mean(found.p[1] <= 0.05) == pytest.approx(0.05, abs=0.0105)


# ---- group-t -------------------------------------------------------------------------------


def test_group_t_is_the_t_of_separate_fits():
    X, group, y = clustered(sizes=(5, 9), p=2)
    result = refit(GROUP_T, "clinic", fits(design(X, group=group), y))
    each = np.array([lstsq(X[group == g], y[group == g]) for g in range(12)])
    for j, row in enumerate(result.intervals):
        other = stats.ttest_1samp(each[:, j], 0.0)
        ends = other.confidence_interval()
        assert [row.estimate, row.p, row.low, row.high] == pytest.approx(
            [each[:, j].mean(), other.pvalue, ends.low, ends.high]
        )


def test_what_is_constant_within_groups_is_left_out_and_the_rest_served():
    X, group, y = clustered(sizes=(5, 9))  # x2 is an arm by group
    result = refit(GROUP_T, "clinic", fits(design(X, group=group), y))
    each = [lstsq(X[group == g][:, :2], y[group == g])[1] for g in range(12)]
    assert result.get("x1").estimate == pytest.approx(np.mean(each))
    assert "does not vary there" in result.get("x2").status
    assert result.get("x1").df == 11
    assert result.get("constant").df == 5  # the arms at 1 have constant + arm
    assert "6 for constant" in result.notes[0]


def test_groups_too_small_to_fit_are_left_out():
    X, group, y = clustered(sizes=(5, 9), p=2)
    keep = (group != 3) | (np.cumsum(group == 3) <= 1)
    result = refit(GROUP_T, "", fits(design(X[keep], group=group[keep]), y[keep]))
    assert result.get("x1").df == 10
    assert dict(result.account.items)["groups that tell x1"] == "11"


def test_sign_changes_are_counted_out():
    X, group, y = clustered(G=7, sizes=(5, 9), p=2)
    result = refit(replace(GROUP_T, signs=True), "", fits(design(X, group=group), y))
    each = np.array([lstsq(X[group == g], y[group == g])[1] for g in range(7)])

    def p(value):
        off = each - value
        sums = [abs(np.dot(v, off)) for v in itertools.product((1, -1), repeat=7)]
        return np.mean(np.array(sums) >= abs(off.sum()) * (1 - 1e-9))

    row = result.get("x1")
    assert row.p == p(0.0)
    edge = 1e-4 * row.se
    assert p(row.low - edge) <= 0.05 < p(row.low + edge)
    assert p(row.high + edge) <= 0.05 < p(row.high - edge)


def test_the_joint_test_is_hotellings():
    X, group, y = clustered(sizes=(6, 9), p=2)
    X = np.column_stack([X, np.random.default_rng(4).normal(size=len(y))])
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    result = refit(GROUP_T, "", fits(design(X, group=group, terms=terms), y))
    each = np.array([lstsq(X[group == g], y[group == g])[1:] for g in range(12)])
    m, S = each.mean(axis=0), np.cov(each.T)
    F = 12 * m @ np.linalg.solve(S, m) * (12 - 2) / (2 * 11)
    assert (result.terms[0].F, result.terms[0].df2) == pytest.approx((F, 10))
    assert result.terms[0].p == pytest.approx(stats.f.sf(F, 2, 10))


def test_group_t_is_on_the_safe_side_under_very_unequal_spread():
    rng = np.random.default_rng(5)
    group = np.repeat(np.arange(8), 6)
    X = np.column_stack([np.ones(48), rng.normal(size=48)])
    Y = rng.normal(size=(48, 3000)) * np.exp(rng.normal(size=8))[group][:, None]
    of = design(X, group=group)
    found = replace(GROUP_T, at="clinic").prepare(of, None).fit(fits(of, Y))
    assert np.mean(found.p[1] <= 0.05) < 0.05 + 3 * 0.004


# ---- fixed-effects ---------------------------------------------------------------------------


def test_absorbed_groups_are_a_column_for_each():
    X, group, y = clustered()
    result = refit(FIXED, "clinic", fits(design(X, group=group), y))
    dummies = np.column_stack([X[:, 1], np.eye(12)[group]])
    row = result.get("x1")
    V, df = cr2(dummies, y, group, np.eye(13)[0])
    assert (row.estimate, row.se, row.df) == pytest.approx((lstsq(dummies, y)[0], np.sqrt(V), df), rel=1e-7)
    for name in ("constant", "x2"):
        assert "does not vary within clinic" in result.get(name).status
        assert np.isnan(result.get(name).estimate)


@pytest.mark.parametrize("weighted", [False, True])
def test_two_absorbed_groupings_are_columns_for_each(weighted):
    X, firm, year, y = panel()
    root = np.sqrt(np.random.default_rng(1).uniform(0.5, 2, len(y))) if weighted else np.ones(len(y))
    of = crossed(X, firm, year, root=root if weighted else None)
    result = refit(FIXED, "firm + year", fits(of, y))
    full = np.column_stack([X[:, 1:], np.eye(8)[firm], np.eye(6)[year]]) * root[:, None]
    for j, name in enumerate(("x1", "x2")):
        V, df = cr2(full, y * root, firm, np.eye(full.shape[1])[j])
        row = result.get(name)
        wanted = (lstsq(full, y * root)[j], np.sqrt(V), df)
        assert (row.estimate, row.se, row.df) == pytest.approx(wanted, rel=1e-7)
    assert "dependence between rows of one year is not covered" in result.notes[0]


def test_where_columns_would_cost_too_much_both_are_swept(monkeypatch):
    X, firm, year, y = panel()
    of = crossed(X, firm, year)
    one = refit(replace(FIXED, kind="CR1S"), "firm + year", fits(of, y))
    monkeypatch.setattr("clingstone.remedies.within.WORK", 1.0)
    other = refit(FIXED, "firm + year", fits(crossed(X, firm, year), y))
    for a, b in zip(one.intervals[1:], other.intervals[1:], strict=True):
        assert (b.estimate, b.se, b.df) == pytest.approx((a.estimate, a.se, a.df), rel=1e-8)
    assert any("would cost too much" in note for note in other.notes)
    assert dict(other.account.items)["cells of year, absorbed too"] == "6"


def test_a_pair_of_groupings_is_swept_as_by_projection():
    rng = np.random.default_rng(6)
    first, second = rng.integers(0, 7, 60), rng.integers(0, 5, 60)
    second[first < 3] = rng.integers(5, 7, int(np.sum(first < 3)))  # two pieces that share no cell
    root, Y = rng.uniform(0.5, 2, 60), rng.normal(size=(60, 3))
    for r in (None, root):
        both = TwoWay(Partition.of("a", first), Partition.of("b", second), r)
        scale = np.ones(60) if r is None else r
        D = np.column_stack([np.eye(7)[first], np.eye(7)[second]]) * scale[:, None]
        assert np.allclose(both.sweep(Y), Y - D @ np.linalg.pinv(D) @ Y)
        assert both.rank == np.linalg.matrix_rank(D) == 12


def test_a_group_level_combination_is_told_only_where_it_can_be():
    X, group, y = clustered()
    contrasts = [Contrast("within part", (0.0, 2.0, 0.0)), Contrast("mixture", (0.0, 1.0, 1.0))]
    result = refit(FIXED, "clinic", fits(design(X, group=group, contrasts=contrasts), y))
    assert result.get("within part").estimate == pytest.approx(2 * result.get("x1").estimate)
    assert result.get("mixture").status.startswith("unusable")


def test_too_many_absorbed_means_are_refused():
    rng = np.random.default_rng(7)
    group = np.repeat(np.arange(6), 2)
    X = np.column_stack([np.ones(12), rng.normal(size=(12, 6))])
    with pytest.raises(NotSupported, match="no residual degrees of freedom"):
        refit(FIXED, "", fits(design(X, group=group), rng.normal(size=12)))
    level = np.column_stack([np.ones(12), group % 2])
    with pytest.raises(NotSupported, match="does not vary within clinic"):
        refit(FIXED, "", fits(design(level, group=group), rng.normal(size=12)))


# ---- within-between ---------------------------------------------------------------------------


def test_the_split_is_a_fit_on_deviations_and_means():
    X, group, y = clustered()
    result = refit(SPLIT, "clinic", fits(design(X, group=group), y))
    mean = averages(X[:, 1], group)[group]
    Z = np.column_stack([np.ones(len(y)), X[:, 1] - mean, mean, X[:, 2]])
    assert [r.term for r in result.intervals] == ["constant", "x1 [within]", "x1 [between]", "x2"]
    for j, row in enumerate(result.intervals):
        V, df = cr2(Z, y, group, np.eye(4)[j])
        assert (row.estimate, row.se, row.df) == pytest.approx((lstsq(Z, y)[j], np.sqrt(V), df), rel=1e-7)
    within = refit(FIXED, "clinic", fits(design(X, group=group), y)).get("x1")
    assert result.get("x1 [within]").estimate == pytest.approx(within.estimate)
    assert result.get("x1 [within]").se_ratio == pytest.approx(
        result.get("x1 [within]").se
        / refit(remedy("ordinary"), "", fits(design(X, group=group), y)).get("x1").se
    )


def test_within_against_between_is_the_test_of_the_added_means():
    # Mundlak's regression: y on x and its group means; with one predictor F is the squared t of the mean.
    X, group, y = clustered()
    result = refit(SPLIT, "clinic", fits(design(X, group=group), y))
    mean = averages(X[:, 1], group)[group]
    Z = np.column_stack([X, mean])
    V, df = cr2(Z, y, group, np.eye(4)[3])
    test = next(t for t in result.terms if t.term == "within against between")
    assert (test.F, test.df1, test.df2) == pytest.approx((lstsq(Z, y)[3] ** 2 / V, 1, df), rel=1e-6)


def test_terms_contrasts_and_weights_are_split_too():
    X, group, y = clustered(sizes=(5, 9))
    rng = np.random.default_rng(9)
    X = np.column_stack([X, rng.normal(size=len(y)) + rng.normal(size=12)[group]])
    terms = (
        Term("constant", (0,), "constant"),
        Term("kind", (1, 3), "factor"),
        Term("arm", (2,), "numeric"),
    )
    gap = Contrast("gap", (0.0, 1.0, 0.0, -1.0))
    root = np.sqrt(rng.uniform(0.5, 2, len(y)))
    result = refit(SPLIT, "", fits(design(X, group=group, terms=terms, contrasts=[gap], root=root), y))
    w = root**2
    mean = np.array([np.average(X[group == g], axis=0, weights=w[group == g]) for g in range(12)])[group]
    Z = np.column_stack([np.ones(len(y)), X[:, [1, 3]] - mean[:, [1, 3]], mean[:, [1, 3]], X[:, 2]])
    b = lstsq(Z * root[:, None], y * root)
    assert result.get("gap [within]").estimate == pytest.approx(b[1] - b[2])
    assert result.get("gap [between]").estimate == pytest.approx(b[3] - b[4])
    assert {t.term for t in result.terms} == {"kind [within]", "kind [between]", "within against between"}
    assert len(result.covariance) == len(result.coefficients) == 6


def test_means_that_do_not_differ_have_no_between_part():
    group = np.repeat(np.arange(8), 4)
    X = np.column_stack([np.ones(32), np.tile(np.arange(4.0), 8)])
    y = np.random.default_rng(0).normal(size=32)
    result = refit(SPLIT, "", fits(design(X, group=group), y))
    assert result.get("x1 [within]").status == "ok"
    assert "between clinic cannot be told" in result.get("x1 [between]").status
    assert result.get("constant").status == "ok"
    assert result.terms == ()


def test_nothing_that_varies_within_is_nothing_to_split():
    group = np.repeat(np.arange(8), 4)
    X = np.column_stack([np.ones(32), group % 2])
    with pytest.raises(NotSupported, match="nothing to split"):
        refit(SPLIT, "", fits(design(X, group=group), np.random.default_rng(0).normal(size=32)))


def test_the_hausman_test_holds_its_level_under_dependence_inside_groups():
    # 12 unequal groups with a random slope, so that rows of a group hang together; within = between holds.
    # 3,000 columns: Monte-Carlo standard error 0.004.
    rng = np.random.default_rng(10)
    group = np.repeat(np.arange(16), np.linspace(3, 12, 16).astype(int))
    n = len(group)
    x = rng.normal(size=n) + rng.normal(size=16)[group]
    of = design(np.column_stack([np.ones(n), x]), group=group)
    Y = x[:, None] * 0.5 * rng.normal(size=(16, 3000))[group] + rng.normal(size=(16, 3000))[group]
    Y += rng.normal(size=(n, 3000))
    found = replace(SPLIT, at="clinic").prepare(of, None).fit(fits(of, Y))
    p = found.joint["within against between"][3]
    assert 0.02 < np.mean(p <= 0.05) < 0.075


# ---- all ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("one", ALL, ids=lambda r: r.id)
def test_row_order_and_scale_of_y_change_nothing(one):
    X, group, y = clustered(sizes=(5, 9))
    plain = refit(one, "", fits(design(X, group=group), y))
    order = np.random.default_rng(0).permutation(len(y))
    moved = refit(one, "", fits(design(X[order], group=group[order]), 1e3 * y[order]))
    for a, b in zip(plain.intervals, moved.intervals, strict=True):
        assert a.status == b.status
        wanted = [1e3 * a.estimate, 1e3 * a.se, a.df, 1e3 * a.low, 1e3 * a.high, a.p]
        found = [b.estimate, b.se, b.df, b.low, b.high, b.p]
        assert found == pytest.approx(wanted, rel=1e-6, nan_ok=True)


@pytest.mark.parametrize("one", ALL, ids=lambda r: r.id)
def test_many_columns_are_read_as_one_by_one(one):
    X, group, y = clustered(sizes=(5, 9))
    Y = np.column_stack([np.roll(y, 3), y])
    of = design(X, group=group)
    found = replace(one, at="clinic").prepare(of, None).fit(fits(of, Y))
    for b in range(2):
        alone = refit(one, "", fits(of, Y[:, b]))
        for j, row in enumerate(alone.intervals):
            got = [found.estimate[j, b], found.se[j, b], found.low[j, b], found.p[j, b]]
            assert got == pytest.approx([row.estimate, row.se, row.low, row.p], rel=1e-8, nan_ok=True)


@pytest.mark.parametrize("one", ALL, ids=lambda r: r.id)
def test_each_explains_itself_and_its_conventions(one):
    X, group, y = clustered(sizes=(5, 9))
    run = fits(design(X, group=group), y)
    result = refit(one, "", run)
    assert result.account.estimator
    assert result.account.items
    assert "group" in result.covers
    found = explain(one, "", run)
    assert len(found) == len(one.conventions())
    assert all(len(c.intervals) == len(result.intervals) for c in found)


def test_combinations_are_judged_by_what_a_poor_design_tells():
    X = np.array([[1.0, 1, 0], [1, 1, 0], [1, 0, 1], [1, 0, 1.0]])  # constant = sum of the others
    C = np.array([[0.0, 1, -1], [0, 1, 0], [1, 1, 0], [0, 0, 0]])
    found = reduced(X, np.linalg.norm(X, axis=0), C)
    assert list(found.told) == [True, False, True, False]
    y = np.array([1.0, 3.0, 5.0, 9.0])
    assert (found.W.T @ found.basis.Q.T @ y)[[0, 2]] == pytest.approx([2 - 7, 2])
