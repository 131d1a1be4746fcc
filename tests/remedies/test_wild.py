"""The wild cluster bootstrap: against refits one by one, inversion, refusals, invariances, size."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.design import Contrast, Term
from clingstone.maths import resample
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from tests.remedies.cases import clustered, design, fits

WILD = remedy("wild-cluster-bootstrap")
SIGNS = replace(WILD, kind="signs")


def t_of(X, y, group, c, value):
    """|t| of c'β = value with CR0."""
    inv = np.linalg.inv(X.T @ X)
    b = inv @ X.T @ y
    e = y - X @ b
    s = np.array([X[group == g].T @ e[group == g] for g in np.unique(group)])
    return abs(c @ b - value) / np.sqrt(np.sum((s @ inv @ c) ** 2))


def by_refits(X, y, group, c, value, V):
    """(d,) |t*| of the restricted wild bootstrap, a refit for every row of weights V."""
    inv = np.linalg.inv(X.T @ X)
    b = inv @ X.T @ y
    held = b - inv @ c * (c @ b - value) / (c @ inv @ c)
    e = y - X @ held
    return np.array([t_of(X, X @ held + v[group] * e, group, c, value) for v in V])


def p_by_refits(X, y, group, c, value):
    V = [np.array((1.0, *v)) for v in itertools.product((1.0, -1.0), repeat=len(np.unique(group)) - 1)]
    found = by_refits(X, y, group, c, value, V)
    return np.mean(found >= t_of(X, y, group, c, value) * (1 - 1e-10))


@pytest.mark.parametrize("j", [0, 1, 2])
def test_p_is_that_of_every_sign_pattern_refitted(j):
    X, group, y = clustered(G=8, seed=5)
    result = refit(WILD, "clinic", fits(design(X, group=group), y))
    assert result.intervals[j].p == p_by_refits(X, y, group, np.eye(3)[j], 0.0)
    assert dict(result.account.items)["resamples"] == "all 128 distinct sign patterns"


def test_the_interval_holds_what_is_not_rejected():
    X, group, y = clustered(G=8, seed=5)
    result = refit(WILD, "clinic", fits(design(X, group=group), y))
    for j in (1, 2):
        row, c = result.intervals[j], np.eye(3)[j]
        edge = 1e-4 * row.se
        for end, out in ((row.low, -1), (row.high, 1)):
            assert p_by_refits(X, y, group, c, end + out * edge) <= 0.05
            assert p_by_refits(X, y, group, c, end - out * edge) > 0.05


def test_statistics_under_six_point_weights_are_those_of_refits():
    X, group, y = clustered(G=5, seed=6)
    of = fits(design(X, group=group), y)
    part = of.design.partitions["clinic"]
    V = resample.random_webb(np.random.default_rng(0), 50, 5)
    assert {round(abs(v), 6) for v in V.ravel()} == {round(abs(v), 6) for v in resample.WEBB}
    w, theta = of.design.basis.contrast(np.eye(3)[1]), None
    S = of.response.scores(part)
    curves = resample.wild(V, V**2, of.design.scores(part), S, w, resample.wild_sums(V, S), False)
    theta = float(w @ of.response.coef[:, 0])
    for value in (0.0, 0.7, -3.0):
        D = theta - value
        mine = np.abs(curves.n0[:, 0] + curves.n1[:, 0] * D)
        mine /= np.sqrt(curves.q0[:, 0] + D * (curves.q1[:, 0] + D * curves.q2[:, 0]))
        assert mine == pytest.approx(by_refits(X, y, group, np.eye(3)[1], value, V), rel=1e-7)


def test_the_joint_test_is_that_of_every_pattern_refitted():
    X, group, y = clustered(G=8, seed=7)
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    result = refit(SIGNS, "clinic", fits(design(X, group=group, terms=terms), y))
    inv = np.linalg.inv(X.T @ X)

    def wald(y):
        b = inv @ X.T @ y
        e = y - X @ b
        s = np.array([X[group == g].T @ e[group == g] for g in range(8)])
        z = s @ inv[:, 1:]
        return b[1:] @ np.linalg.solve(z.T @ z, b[1:])

    held = np.full_like(y, y.mean())  # the fit with both coefficients at zero
    each = [
        wald(held + np.array((1.0, *v))[group] * (y - held)) for v in itertools.product((1.0, -1.0), repeat=7)
    ]
    assert result.terms[0].p == np.mean(np.array(each) >= wald(y) * (1 - 1e-9))
    factor = 8 / 7 * (len(y) - 1) / (len(y) - 3)
    assert pytest.approx(wald(y) / 2 / factor) == result.terms[0].F


def test_contrasts_are_served_like_coefficients():
    X, group, y = clustered(G=8, seed=5)
    c = np.array([0.0, 1.0, -2.0])
    of = design(X, group=group, contrasts=[Contrast("gap", tuple(c))])
    assert refit(WILD, "clinic", fits(of, y)).get("gap").p == p_by_refits(X, y, group, c, 0.0)


def test_draws_are_seeded_and_near_the_count_of_all():
    X, group, y = clustered(G=14, seed=8)
    y = y - X[:, 1]
    run = fits(design(X, group=group), y)
    once, again = refit(WILD, "", run), refit(WILD, "", fits(design(X, group=group), y))
    assert [(r.low, r.high, r.p) for r in once.intervals] == [(r.low, r.high, r.p) for r in again.intervals]
    V = resample.every_sign(14)
    part = run.design.partitions["clinic"]
    M, S = run.design.scores(part), run.response.scores(part)
    w = run.design.basis.contrast(np.eye(3)[1])
    exact = resample.wild(V, None, M, S, w, resample.wild_sums(V, S), True)
    p = float(exact.p(np.array([w @ run.response.coef[:, 0]]))[0])
    assert abs(once.get("x1").p - p) < 4 * np.sqrt(p * (1 - p) / 9999)
    low, high = exact.ends(0.05)
    assert once.get("x1").high - once.get("x1").estimate == pytest.approx(float(high[0]), rel=0.05)
    assert once.get("x1").estimate - once.get("x1").low == pytest.approx(float(low[0]), rel=0.05)


def test_blocks_of_draws_add_up(monkeypatch):
    X, group, y = clustered(G=14, seed=8)
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    few = replace(WILD, draws=999)
    monkeypatch.setattr("clingstone.remedies.resampled.BLOCK", 14 * 100)
    result = refit(few, "", fits(design(X, group=group, terms=terms), y))
    assert dict(result.account.items)["resamples"] == "999 draws"
    assert result.get("x1").p * 1000 == pytest.approx(round(result.get("x1").p * 1000))
    assert 0 < result.terms[0].p <= 1


def test_row_order_and_scale_of_y_change_nothing():
    X, group, y = clustered(G=8, seed=5)
    plain = refit(WILD, "", fits(design(X, group=group), y))
    order = np.random.default_rng(0).permutation(len(y))
    moved = refit(WILD, "", fits(design(X[order], group=group[order]), 1e3 * y[order]))
    for a, b in zip(plain.intervals, moved.intervals, strict=True):
        assert [1e3 * a.low, 1e3 * a.high] == pytest.approx([b.low, b.high], abs=5e-3 * a.se)
        assert a.p == b.p


def test_many_columns_are_read_as_one_by_one():
    X, group, y = clustered(G=8, seed=5)
    Y = np.column_stack([y, np.random.default_rng(1).normal(size=(len(y), 2))])
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    of = design(X, group=group, terms=terms)
    found = replace(WILD, at="clinic").prepare(of, None).fit(fits(of, Y))
    for b in range(3):
        one = refit(WILD, "clinic", fits(of, Y[:, b]))
        assert list(found.p[:, b]) == [r.p for r in one.intervals]
        assert found.low[:, b] == pytest.approx([r.low for r in one.intervals], abs=1e-5)
        assert found.joint["both"][3][b] == one.terms[0].p


# ---- what cannot be served -----------------------------------------------------------------


def test_too_few_clusters_are_refused_with_what_is_possible():
    X, group, y = clustered(G=4)
    with pytest.raises(NotSupported, match="4 clusters of clinic") as stop:
        refit(WILD, "clinic", fits(design(X, group=group), y))
    assert "factor" in stop.value.hint


def test_few_treated_clusters_lose_their_coefficient_or_are_told():
    X, group, y = clustered(G=14)
    X[:, 2] = group < 2
    result = refit(WILD, "clinic", fits(design(X, group=group), y))
    assert "only 2 of 14 clusters" in result.get("x2").status
    assert np.isnan(result.get("x2").low)
    assert result.get("x1").status == "ok"
    X[:, 2] = group < 4
    result = refit(WILD, "clinic", fits(design(X, group=group), y))
    assert result.get("x2").status == "ok"
    assert any("Only 4 of 14 clusters" in note for note in result.notes)


def test_thresholds_of_treated_clusters_are_limits_and_levels_are_named_with_the_one_around_them():
    # Wards 0, 1, 2 in every district: their labels recur, so a sentence says in what.
    X, group, y = clustered(G=12)
    X[:, 2] = group < 4
    run = fits(design(X, group=group % 3, outer=group // 3), y)
    result = refit(WILD, "district/ward", run)
    assert any("Only 4 of 12 clusters of ward within district hold" in note for note in result.notes)
    strict = replace(WILD, at="district/ward", limits=replace(WILD.limits, treated_least=5))
    status = str(strict.prepare(run.design, None).unusable["x2"].reason)
    assert "only 4 of 12 clusters of ward within district" in status


def test_an_interval_without_end_says_so():
    # Five clusters have 16 sign patterns, so p is never below 1/16 and no value can be rejected at 5 %.
    X, group, y = clustered(G=5)
    result = refit(SIGNS, "clinic", fits(design(X, group=group), y))
    assert result.get("x1").low == -np.inf
    assert result.get("x1").high == np.inf
    assert "has no end" in result.notes[0]
    assert float(dict(result.account.items)["smallest p that can come out"]) == pytest.approx(0.062)
    six_point = refit(WILD, "clinic", fits(design(X, group=group), y))
    assert np.isfinite(six_point.get("x1").low)
    assert dict(six_point.account.items)["weights"] == "six-point (Webb)"


def test_explain_gives_the_other_weights():
    X, group, y = clustered(G=8)
    found = dict(explain(WILD, "clinic", fits(design(X, group=group), y)))
    assert set(found) == {
        "signs ±1, all patterns where 12 clusters or fewer",
        "six-point weights (Webb)",
        "999 resamples",
    }


# ---- what it promises ------------------------------------------------------------------------


@pytest.mark.parametrize("G", [8, pytest.param(15, marks=pytest.mark.slow)])
def test_size_with_few_unequal_clusters(G):
    # Intraclass correlation 0.3, clusters of 3 to 20 rows, an arm by cluster; 3,000 columns of y: the
    # Monte-Carlo standard error of a size of 0.05 is 0.004. With eight such clusters the restricted bootstrap
    # rejects a little too often for the arm, and CR1 against t with G − 1 df more often still.
    rng = np.random.default_rng(G)
    group = np.repeat(np.arange(G), np.linspace(3, 20, G).astype(int))
    n, B = len(group), 3000
    X = np.column_stack([np.ones(n), rng.normal(size=n) + rng.normal(size=G)[group], group % 2])
    Y = np.sqrt(0.3) * rng.normal(size=(G, B))[group] + np.sqrt(0.7) * rng.normal(size=(n, B))
    of = design(X, group=group)
    found = replace(WILD, at="clinic").prepare(of, None).fit(fits(of, Y))
    size = np.mean(found.p <= 0.05, axis=1)
    assert np.all(size[1:] < (0.09 if G == 8 else 0.075)), size
    cr1 = replace(remedy("cluster-robust"), kind="CR1S", df="clusters", at="clinic")
    plain = np.mean(cr1.prepare(of, None).fit(fits(of, Y)).p <= 0.05, axis=1)
    assert np.all(size[1:] < plain[1:]), (size, plain)
    assert np.all(size[1:] > 0.025), size
    outside = np.mean((found.low > 0) | (found.high < 0), axis=1)
    assert outside == pytest.approx(size, abs=0.004)  # p and the interval are one test


@pytest.mark.parametrize(("G", "said"), [(5, False), (6, True), (7, True), (8, False)])
def test_six_and_seven_clusters_are_told_what_the_intervals_are_worth(G, said):
    rng = np.random.default_rng(1)
    group = np.repeat(np.arange(G), 6)
    X = np.column_stack([np.ones(6 * G), rng.normal(size=6 * G)])
    found = refit(WILD, "clinic", fits(design(X, group=group), rng.normal(size=6 * G)))
    assert any("too sure of itself" in note and f"With {G} clusters" in note for note in found.notes) == said


def test_a_df_that_prints_as_the_floor_is_not_below_it():
    # Three clinics in each arm: 4 degrees of freedom but for rounding in the last digits.
    rng = np.random.default_rng(2)
    group = np.repeat(np.arange(6), 8)
    X = np.column_stack([np.ones(48), (group >= 3).astype(float)])
    y = rng.normal(size=6)[group] + rng.normal(size=48)
    row = refit(remedy("mixed-intercept"), "clinic", fits(design(X, group=group), y)).intervals[1]
    assert row.df == pytest.approx(4, abs=0.01)
    assert row.status == "ok"
