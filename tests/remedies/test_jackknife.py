"""The jackknife over clusters: against leaving clusters out, its df, refusals, invariances, coverage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.design import Term
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from tests.remedies.cases import clustered, design, fits

JACK = remedy("cluster-jackknife")


def beta(X, y):
    return np.linalg.lstsq(X, y, rcond=None)[0]


def left_out(X, group, y):
    return np.array([beta(X[group != g], y[group != g]) for g in np.unique(group)])


@pytest.mark.parametrize(("centre", "around"), [("full", "full"), ("mean", "mean"), ("CR3", "full")])
def test_it_is_the_estimates_with_one_cluster_left_out(centre, around):
    X, group, y = clustered()
    each, G = left_out(X, group, y), 12
    middle = beta(X, y) if around == "full" else each.mean(axis=0)
    V = (each - middle).T @ (each - middle) * (1.0 if centre == "CR3" else (G - 1) / G)
    result = refit(replace(JACK, centre=centre), "clinic", fits(design(X, group=group), y))
    assert np.allclose(np.array(result.covariance), V, rtol=1e-8)
    assert [r.se for r in result.intervals] == pytest.approx(np.sqrt(np.diag(V)), rel=1e-8)


def test_the_df_are_the_moments_of_the_quadratic_form_in_full():
    X, group, y = clustered(G=6)
    n = len(y)
    H = X @ np.linalg.inv(X.T @ X) @ X.T
    M = np.eye(n) - H
    for j in range(3):
        w = np.linalg.inv(X.T @ X)[j]
        B = np.zeros((n, n))
        for g in range(6):
            i = np.flatnonzero(group == g)
            a = np.linalg.inv(np.eye(len(i)) - H[np.ix_(i, i)]) @ X[i] @ w
            B[np.ix_(i, i)] = np.outer(a, a)
        N = M @ B @ M
        wanted = np.trace(N) ** 2 / np.trace(N @ N)
        assert refit(JACK, "clinic", fits(design(X, group=group), y)).intervals[j].df == pytest.approx(wanted)


def test_the_account_names_the_cluster_that_moves_a_coefficient_most():
    X, group, y = clustered()
    y = y + 6.0 * (group == 3)
    result = refit(JACK, "clinic", fits(design(X, group=group), y))
    moves = np.abs(left_out(X, group, y) - beta(X, y)) / [r.se for r in result.intervals]
    g, j = np.unravel_index(moves.argmax(), moves.shape)
    said = dict(result.account.items)["largest move when one cluster is left out"]
    assert said.startswith(f"{result.coefficients[j]} by ")
    assert f"({g} left out)" in said
    assert "(G − 1)/G" in result.account.factor


def test_row_order_and_scale_of_y_change_nothing():
    X, group, y = clustered()
    plain = refit(JACK, "", fits(design(X, group=group), y))
    order = np.random.default_rng(0).permutation(len(y))
    moved = refit(JACK, "", fits(design(X[order], group=group[order]), 1e3 * y[order]))
    for a, b in zip(plain.intervals, moved.intervals, strict=True):
        assert [1e3 * a.se, a.df, 1e3 * a.low, a.p] == pytest.approx([b.se, b.df, b.low, b.p], rel=1e-7)


def test_many_columns_are_read_as_one_by_one():
    X, group, y = clustered()
    Y = np.column_stack([y, np.random.default_rng(1).normal(size=(len(y), 2))])
    terms = (Term("constant", (0,), "constant"), Term("both", (1, 2), "factor"))
    of = design(X, group=group, terms=terms)
    for setting in (JACK, replace(JACK, centre="mean", df="clusters")):
        ready = replace(setting, at="clinic").prepare(of, None)
        found = ready.fit(fits(of, Y))
        for b in range(3):
            one = refit(setting, "clinic", fits(of, Y[:, b]))
            assert found.se[:, b] == pytest.approx([r.se for r in one.intervals])
            assert found.joint["both"][3][b] == pytest.approx(one.terms[0].p)


def test_a_coefficient_of_one_cluster_is_not_given_and_the_others_are():
    X, group, y = clustered()
    X[:, 2] = group == 4
    result = refit(JACK, "clinic", fits(design(X, group=group), y))
    assert "clinic 4 alone decides it" in result.get("x2").status
    assert result.get("x1").status == "ok"


def test_fewer_clusters_than_coefficients_is_told():
    rng = np.random.default_rng(5)
    group = np.repeat(np.arange(4), 12)
    X = np.column_stack([np.ones(48), rng.normal(size=(48, 4))])
    result = refit(JACK, "clinic", fits(design(X, group=group), rng.normal(size=48)))
    assert "deficient rank" in result.notes[0]
    assert np.linalg.matrix_rank(np.array(result.covariance)) <= 4
    assert all(np.isfinite(r.low) for r in result.intervals[1:])


def test_one_row_per_cluster_is_refused():
    X, _, y = clustered()
    with pytest.raises(NotSupported, match="every row is a clinic of its own"):
        refit(JACK, "", fits(design(X, group=np.arange(len(y))), y))


def test_conventions_are_ordered_as_their_factors():
    X, group, y = clustered()
    found = dict(explain(JACK, "clinic", fits(design(X, group=group), y)))
    plain = refit(JACK, "clinic", fits(design(X, group=group), y)).get("x1").se
    assert found["CR3, without the factor (G − 1)/G"][1].se == pytest.approx(plain * np.sqrt(12 / 11))
    assert found["t with G − 1 df"][1].df == 11
    assert found["about the mean of the leave-out estimates, G − 1 df"][1].se <= plain


def test_coverage_with_few_lopsided_clusters():
    # 10 clusters of 2 to 40 rows, intraclass correlation 0.3, 4,000 columns of y; the Monte-Carlo
    # standard error of a coverage of 0.95 is 0.0034. The jackknife with its own df is on the wide side when
    # clusters are so unequal: 0.97 to 0.99 here, against which the bounds stand.
    rng = np.random.default_rng(11)
    group = np.repeat(np.arange(10), [2, 3, 4, 5, 6, 8, 10, 15, 25, 40])
    n, B = len(group), 4000
    X = np.column_stack([np.ones(n), rng.normal(size=n), group % 2])
    Y = np.sqrt(0.3) * rng.normal(size=(10, B))[group] + np.sqrt(0.7) * rng.normal(size=(n, B))
    of = design(X, group=group)
    found = replace(JACK, at="clinic").prepare(of, None).fit(fits(of, Y))
    covered = np.mean((found.low <= 0) & (found.high >= 0), axis=1)
    assert np.all(covered > 0.94), covered
    assert np.all(covered < 0.998), covered
