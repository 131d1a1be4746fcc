"""Ordinary, row-robust and cluster-robust refits: rows, refusals, invariances, coverage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.design import Contrast, Term
from clingstone.needs import InputError, NotSupported
from clingstone.remedies import REMEDIES, explain, refit, remedy
from clingstone.remedies.refit import at as set_at
from tests.remedies.cases import clustered, design, fits


def _prepare(run, at):
    return replace(remedy("cluster-robust"), at=at).prepare(run.design, None)


def frame(result):
    return {row.term: (row.estimate, row.se, row.df, row.low, row.high, row.p) for row in result.intervals}


def test_ordinary_is_the_textbook_fit():
    X, group, y = clustered()
    result = refit(remedy("ordinary"), "", fits(design(X, group=group), y))
    beta, rss, *_ = np.linalg.lstsq(X, y, rcond=None)
    se = np.sqrt(rss[0] / (len(y) - 3) * np.diag(np.linalg.inv(X.T @ X)))
    assert np.allclose([r.estimate for r in result.intervals], beta)
    assert np.allclose([r.se for r in result.intervals], se)
    assert all(r.se_ratio == pytest.approx(1.0) and r.status == "ok" for r in result.intervals)
    assert result.estimate == pytest.approx(beta)
    assert np.allclose(np.sqrt(np.diag(result.covariance)), se)


@pytest.mark.parametrize("id", ["ordinary", "heteroscedasticity-robust", "cluster-robust"])
def test_p_and_interval_agree(id):
    # At confidence 1 − p the interval ends exactly at zero.
    X, group, y = clustered()
    at = "clinic" if id == "cluster-robust" else ""
    of = design(X, group=group)
    y = y - 0.7 * X[:, 1]
    rows = [r for r in refit(remedy(id), at, fits(of, y)).intervals if 1e-9 < r.p < 0.5]
    assert rows
    for row in rows:
        again = refit(remedy(id), at, fits(of, y, confidence=1 - row.p)).get(row.term)
        assert min(abs(again.low), abs(again.high)) < 1e-6 * again.se


@pytest.mark.parametrize("id", ["ordinary", "heteroscedasticity-robust", "cluster-robust"])
def test_row_order_and_scale_of_y_change_nothing(id):
    X, group, y = clustered()
    at = "clinic" if id == "cluster-robust" else ""
    plain = frame(refit(remedy(id), at, fits(design(X, group=group), y)))
    order = np.random.default_rng(0).permutation(len(y))
    shuffled = frame(refit(remedy(id), at, fits(design(X[order], group=group[order]), y[order])))
    scaled = frame(refit(remedy(id), at, fits(design(X, group=group), 1e4 * y)))
    for term, row in plain.items():
        assert shuffled[term] == pytest.approx(row, rel=1e-7)
        wanted = (*(1e4 * v for v in row[:2]), row[2], 1e4 * row[3], 1e4 * row[4], row[5])
        assert scaled[term] == pytest.approx(wanted, rel=1e-7)


@pytest.mark.parametrize("id", ["ordinary", "heteroscedasticity-robust", "cluster-robust"])
def test_many_columns_are_read_as_one_by_one(id):
    X, group, y = clustered()
    rng = np.random.default_rng(1)
    Y = np.column_stack([y, rng.normal(size=(len(y), 3))])
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    of = design(X, group=group, terms=terms)
    many = fits(of, Y)
    chosen = set_at(remedy(id), "", many)
    found = chosen.prepare(of, None).fit(many)
    assert found.df.shape == (3, 1)
    for b in range(4):
        one = refit(remedy(id), "", fits(of, Y[:, b]))
        for j, row in enumerate(one.intervals):
            got = [found.estimate[j, b], found.se[j, b], found.low[j, b], found.high[j, b], found.p[j, b]]
            assert got == pytest.approx([row.estimate, row.se, row.low, row.high, row.p], rel=1e-9)
        F, df1, df2, p = found.joint["both"]
        test = one.terms[0]
        assert (F[b], df1, df2, p[b]) == pytest.approx((test.F, test.df1, test.df2, test.p), rel=1e-8)


def test_contrasts_are_served_as_the_same_combination_of_coefficients():
    X, group, y = clustered()
    of = design(X, group=group, contrasts=[Contrast("gap", (0.0, 1.0, -2.0))])
    for id in ("ordinary", "heteroscedasticity-robust", "cluster-robust"):
        result = refit(remedy(id), "", fits(of, y))
        c, V = np.array([0.0, 1.0, -2.0]), np.array(result.covariance)
        assert result.get("gap").estimate == pytest.approx(c @ np.array(result.estimate))
        assert result.get("gap").se == pytest.approx(np.sqrt(c @ V @ c))


def test_precision_weights_are_the_usual_scaling():
    X, group, y = clustered()
    weight = np.random.default_rng(2).uniform(0.5, 3, len(y))
    root = np.sqrt(weight)
    result = refit(remedy("ordinary"), "", fits(design(X, group=group, root=root), y))
    beta, rss, *_ = np.linalg.lstsq(X * root[:, None], y * root, rcond=None)
    assert result.estimate == pytest.approx(beta)
    wanted = np.sqrt(rss[0] / (len(y) - 3) * np.diag(np.linalg.inv((X * weight[:, None]).T @ X)))
    assert [r.se for r in result.intervals] == pytest.approx(wanted)


# ---- what cannot be served -----------------------------------------------------------------


def test_one_group_is_refused():
    X, _, y = clustered(p=2)
    run = fits(design(X, group=np.zeros(len(y), dtype=int)), y)
    with pytest.raises(NotSupported, match="there is one clinic"):
        refit(remedy("cluster-robust"), "", run)
    with pytest.raises(NotSupported, match="there is one clinic") as stop:
        _prepare(run, "clinic")
    assert stop.value.hint


def test_a_group_per_row_is_refused_with_what_to_use_instead():
    X, _, y = clustered(p=2)
    run = fits(design(X, group=np.arange(len(y))), y)
    with pytest.raises(NotSupported, match="every row is a clinic") as stop:
        _prepare(run, "clinic")
    assert "heteroscedasticity-robust" in stop.value.hint


def test_an_unknown_level_names_those_that_work():
    X, group, y = clustered()
    with pytest.raises(NotSupported, match="'county'") as stop:
        refit(remedy("cluster-robust"), "county", fits(design(X, group=group), y))
    assert "clinic" in stop.value.hint
    with pytest.raises(InputError, match="no remedy named 'magic'"):
        remedy("magic")


def test_a_single_treated_cluster_makes_only_its_coefficient_unusable():
    X, group, y = clustered()
    X[:, 2] = group == 4
    result = refit(remedy("cluster-robust"), "clinic", fits(design(X, group=group), y))
    row = result.get("x2")
    assert row.status.startswith("unusable: clinic 4 alone decides it")
    assert np.isnan([row.se, row.low, row.high, row.p, row.df]).all()
    assert result.get("x1").status == "ok"
    V = np.array(result.covariance)
    assert np.isnan(V[2]).all()
    assert np.isfinite(V[:2, :2]).all()


def test_two_treated_clusters_leave_few_df_and_a_caveat():
    X, group, y = clustered(G=10)
    X[:, 2] = np.isin(group, (1, 6))
    row = refit(remedy("cluster-robust"), "clinic", fits(design(X, group=group), y)).get("x2")
    assert 1 <= row.df < 4
    assert row.status == f"caveat: {row.df:.1f} degrees of freedom, below 4"


def test_a_row_of_leverage_one_is_unusable_for_hc():
    rng = np.random.default_rng(0)
    X = np.column_stack([np.ones(20), rng.normal(size=20), np.arange(20) == 3])
    result = refit(remedy("heteroscedasticity-robust"), "", fits(design(X), rng.normal(size=20)))
    assert result.get("x2").status.startswith("unusable: one row alone decides it")
    assert result.get("x1").status == "ok"


def test_a_joint_test_without_df_is_left_out_and_told():
    # Three clusters cannot carry a joint test of three coefficients.
    rng = np.random.default_rng(0)
    group = np.repeat(np.arange(3), 12)
    X = np.column_stack([np.ones(36), rng.normal(size=(36, 3))])
    terms = (Term("constant", (0,), "constant"), Term("blend", (1, 2, 3), "interaction"))
    result = refit(
        remedy("cluster-robust"), "clinic", fits(design(X, group=group, terms=terms), rng.normal(size=36))
    )
    assert result.terms == ()
    assert any("no joint test of blend" in note for note in result.notes)


def test_a_perfect_fit_and_unknown_columns_are_refused():
    X, group, _ = clustered()
    of = design(X, group=group)
    with pytest.raises(NotSupported, match="fits every row exactly"):
        refit(remedy("ordinary"), "", fits(of, X @ [1.0, 2.0, 3.0]))
    bare = replace(design(np.ones((20, 1))), known=False)
    with pytest.raises(NotSupported, match="only residuals were given"):
        refit(remedy("ordinary"), "", fits(bare, np.random.default_rng(0).normal(size=20)))


# ---- levels, accounts, conventions -----------------------------------------------------------


def test_levels_are_groups_series_and_sites_each_once():
    X, group, y = clustered()
    tick = np.concatenate([np.arange(k) for k in np.bincount(group)])
    site = np.column_stack([group // 2, np.zeros(len(y))])
    of = design(X, group=group, tick=tick, series=group, xy=site)
    # Series and clinics divide the rows alike: one of them is enough.
    assert remedy("cluster-robust").abouts(of) == ("clinic", "site")
    other = design(X, group=group, tick=np.arange(len(y)), series=np.arange(len(y)) % 5)
    assert remedy("cluster-robust").abouts(other) == ("clinic", "series")
    assert refit(remedy("cluster-robust"), "site", fits(of, y)).covers == ("group", "serial")
    assert refit(remedy("cluster-robust"), "clinic", fits(other, y)).covers == ("group",)
    assert refit(remedy("cluster-robust"), "series", fits(other, y)).covers == ("serial",)


def test_accounts_hold_every_ingredient():
    X, group, y = clustered()
    account = refit(remedy("cluster-robust"), "clinic", fits(design(X, group=group), y)).account
    items = dict(account.items)
    assert items["clusters"] == "12"
    assert items["rows per cluster"] == f"{np.bincount(group).min()} to {np.bincount(group).max()}"
    assert "CR2" in account.covariance
    assert account.df_rule == "Satterthwaite"
    assert account.source.startswith("bell-mccaffrey-2002")


def test_explain_gives_the_other_conventions():
    X, group, y = clustered()
    run = fits(design(X, group=group), y)
    shown = dict(explain(remedy("cluster-robust"), "clinic", run))
    cr0 = next(v for k, v in shown.items() if k.startswith("CR0"))
    cr1 = next(v for k, v in shown.items() if k.startswith("CR1, factor G/(G − 1)"))
    assert cr1[1].se == pytest.approx(cr0[1].se * np.sqrt(12 / 11))
    assert (cr0[1].df, cr1[1].df) == (np.inf, 11)
    assert cr0[1].df_rule == "normal quantile"
    rows = dict(explain(remedy("heteroscedasticity-robust"), "", run))
    assert len(rows) == 5


def test_every_registered_id_is_unique_and_explains_itself():
    ids = [r.id for r in REMEDIES]
    assert len(set(ids)) == len(ids) >= 8
    for r in REMEDIES:
        assert r.name
        assert all(words and other.id == r.id for words, other in r.conventions())


# ---- coverage ------------------------------------------------------------------------------


def coverage(found):
    return np.mean((found.low <= 0) & (found.high >= 0), axis=1)


def test_ten_clusters_ordinary_undercovers_and_cr2_does_not():
    # A regressor that varies only between 10 unequal clusters, ICC 0.2, 4,000 columns: MCSE 0.0035.
    rng = np.random.default_rng(11)
    group = np.repeat(np.arange(10), [6, 8, 9, 10, 12, 12, 14, 15, 16, 18])
    x = rng.normal(size=10)[group]
    of = design(np.column_stack([np.ones(120), x]), group=group)
    Y = 0.5 * rng.normal(size=(10, 4000))[group] + rng.normal(size=(120, 4000))
    run = fits(of, Y)
    assert coverage(remedy("ordinary").prepare(of, None).fit(run))[1] < 0.85
    assert coverage(_prepare(run, "clinic").fit(run))[1] == pytest.approx(0.95, abs=0.02)


def test_hc2_covers_under_unequal_spread():
    # n = 40, a skew covariate that drives the spread, 4,000 columns.
    rng = np.random.default_rng(12)
    x = rng.exponential(size=40)
    of = design(np.column_stack([np.ones(40), x]))
    run = fits(of, (0.3 + x)[:, None] * rng.normal(size=(40, 4000)))
    assert coverage(remedy("ordinary").prepare(of, None).fit(run))[1] < 0.85
    assert coverage(remedy("heteroscedasticity-robust").prepare(of, None).fit(run))[1] > 0.915


def test_the_joint_cr2_test_holds_its_size():
    rng = np.random.default_rng(13)
    group = np.repeat(np.arange(14), 6)
    X = np.column_stack([np.ones(84), rng.normal(size=(84, 2)) + rng.normal(size=(14, 2))[group]])
    terms = (Term("constant", (0,), "constant"), Term("pair", (1, 2), "factor"))
    of = design(X, group=group, terms=terms)
    run = fits(of, 0.5 * rng.normal(size=(14, 4000))[group] + rng.normal(size=(84, 4000)))
    robust = np.mean(_prepare(run, "clinic").fit(run).joint["pair"][3] < 0.05)
    plain = np.mean(remedy("ordinary").prepare(of, None).fit(run).joint["pair"][3] < 0.05)
    assert plain > 0.09
    assert 0.02 < robust < 0.07
