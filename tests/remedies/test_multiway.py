"""Clusters that cross: the dense meat, repairs, refusals, coverage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.design import Term
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from clingstone.structure.group import Groups
from tests.remedies.cases import design, fits

MULTI = remedy("multiway-cluster")
PLAIN = replace(MULTI, factor="none", repair="none", normal=True)


def crossed(X, *codes, terms=None):
    levels = tuple(Partition.of(k, c) for k, c in zip(("firm", "year", "shop"), codes, strict=False))
    return replace(design(X, terms=terms), group=Groups(levels, "crossed"))


def table(firms=9, years=7, p=3, seed=2):
    rng = np.random.default_rng(seed)
    firm, year = np.repeat(np.arange(firms), years), np.tile(np.arange(years), firms)
    keep = rng.random(len(firm)) < 0.9
    firm, year = firm[keep], year[keep]
    n = len(firm)
    X = np.column_stack([np.ones(n), rng.normal(size=(n, p - 1)) + rng.normal(size=(years, p - 1))[year]])
    y = rng.normal(size=firms)[firm] + rng.normal(size=years)[year] + rng.normal(size=n)
    return X, firm, year, y


def dense(X, y, *codes):
    """(X'X)⁻¹X'(ee' ∘ S)X(X'X)⁻¹, S true where two rows share any cluster."""
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    S = np.any([c[:, None] == c[None] for c in codes], axis=0)
    inv = np.linalg.inv(X.T @ X)
    return inv @ X.T @ (np.outer(e, e) * S) @ X @ inv


def test_without_factors_it_is_the_products_of_rows_that_share_any_cluster():
    X, firm, year, y = table()
    result = refit(PLAIN, "firm + year", fits(crossed(X, firm, year), y))
    assert np.allclose(np.array(result.covariance), dense(X, y, firm, year), rtol=1e-8)


def test_three_ways_too():
    X, firm, year, y = table()
    shop = np.random.default_rng(3).integers(0, 6, len(y))
    run = fits(crossed(X, firm, year, shop), y)
    assert MULTI.abouts(run.design) == (
        "firm + year + shop",
        "firm + year",
        "firm + shop",
        "year + shop",
    )
    result = refit(PLAIN, "", run)
    assert result.at == "firm + year + shop"
    assert np.allclose(np.array(result.covariance), dense(X, y, firm, year, shop), rtol=1e-8)


def test_factor_and_df_are_those_of_the_smaller_grouping():
    X, firm, year, y = table()
    of, n = crossed(X, firm, year), len(y)
    raw = refit(PLAIN, "", fits(of, y))
    found = refit(replace(MULTI, repair="none"), "", fits(of, y))
    factor = 7 / 6 * (n - 1) / (n - 3)
    for a, b in zip(raw.intervals, found.intervals, strict=True):
        assert b.se == pytest.approx(a.se * np.sqrt(factor))
        assert b.df == 6
    assert "with G = 7" in found.account.factor
    assert any("year has 7 clusters" in note for note in found.notes)


def negative():
    """A table whose signed sum is no covariance: the errors cancel inside firms and inside years."""
    for seed in range(200):
        rng = np.random.default_rng(seed)
        firm, year = np.repeat(np.arange(4), 3), np.tile(np.arange(3), 4)
        X = np.column_stack([np.ones(12), rng.normal(size=(12, 2))])
        y = rng.normal(size=12)
        if np.linalg.eigvalsh(dense(X, y, firm, year))[0] < 0:
            return X, firm, year, y
    raise AssertionError("no such table among 200")


def test_negative_eigenvalues_are_set_to_zero_and_told():
    X, firm, year, y = negative()
    run = fits(crossed(X, firm, year), y)
    plain = refit(replace(PLAIN, repair="none"), "", run)
    mended = refit(replace(PLAIN, repair="clip"), "", run)
    V = np.array(mended.covariance)
    assert np.linalg.eigvalsh(V)[0] > -1e-12 * np.linalg.eigvalsh(V)[-1]
    raw = dense(X, y, firm, year)
    assert np.linalg.eigvalsh(V - raw)[0] > -1e-10 * np.abs(raw).max()  # no interval became narrower
    assert dict(mended.account.items)["repair"] == "negative eigenvalues set to zero"
    assert any("negative, set to zero" in note for note in mended.notes)
    assert any("negative, left as they are" in note for note in plain.notes)


def test_the_repair_does_not_depend_on_units_or_coding():
    X, firm, year, y = negative()
    A = np.array([[1.0, 5.0, -2.0], [0.0, 1000.0, 3.0], [0.0, 0.0, 0.01]])
    plain = np.array(refit(MULTI, "", fits(crossed(X, firm, year), y)).covariance)
    coded = np.array(refit(MULTI, "", fits(crossed(X @ A, firm, year), y)).covariance)
    assert np.allclose(A @ coded @ A.T, plain, rtol=1e-8, atol=1e-12)


def test_leaving_out_the_subtraction_is_never_narrower():
    X, firm, year, y = table()
    run = fits(crossed(X, firm, year), y)
    both = refit(replace(MULTI, repair="sum"), "", run)
    assert all(b.se >= a.se for a, b in zip(refit(MULTI, "", run).intervals, both.intervals, strict=True))
    assert dict(both.account.items)["pieces"] == "+ firm + year"


def test_row_order_and_scale_of_y_change_nothing_and_many_columns_are_one_by_one():
    X, firm, year, y = table()
    order = np.random.default_rng(0).permutation(len(y))
    plain = refit(MULTI, "", fits(crossed(X, firm, year), y))
    moved = refit(MULTI, "", fits(crossed(X[order], firm[order], year[order]), 1e3 * y[order]))
    for a, b in zip(plain.intervals, moved.intervals, strict=True):
        assert [1e3 * a.se, 1e3 * a.low, a.p] == pytest.approx([b.se, b.low, b.p], rel=1e-7)
    Y = np.column_stack([np.roll(y, 5), y])
    of = crossed(X, firm, year)
    found = replace(MULTI, at="firm + year").prepare(of, None).fit(fits(of, Y))
    assert found.se[:, 1] == pytest.approx([r.se for r in plain.intervals])
    assert found.p[:, 1] == pytest.approx([r.p for r in plain.intervals])


def test_joint_tests_stop_at_the_smaller_number_of_clusters():
    X, firm, year, y = table(p=4)
    terms = (Term("constant", (0,), "constant"), Term("all", (1, 2, 3), "factor"))
    assert refit(MULTI, "", fits(crossed(X, firm, year, terms=terms), y)).terms[0].df2 == 6
    few = crossed(X, firm, year % 3, terms=terms)
    result = refit(MULTI, "", fits(few, y))
    assert result.terms == ()
    assert any("cannot carry the covariance of 4 coefficients" in note for note in result.notes)


def test_nested_groups_have_no_second_way():
    X, firm, year, y = table()
    run = fits(design(X, group=firm * 10 + year, outer=firm), y)
    assert MULTI.abouts(run.design) == ()
    with pytest.raises(NotSupported, match="cross each other are needed; district does not"):
        refit(MULTI, "", run)
    with pytest.raises(NotSupported, match="one way of clustering"):
        refit(MULTI, "firm", fits(crossed(X, firm, year), y))


def test_what_one_cluster_decides_or_two_carry_is_not_given():
    X, firm, year, y = table(p=4)
    X[:, 2], X[:, 3] = firm == 2, year < 2
    result = refit(MULTI, "", fits(crossed(X, firm, year), y))
    assert "firm" in result.get("x2").status
    assert "only 2 of 7 clusters of year" in result.get("x3").status
    assert result.get("x1").status == "ok"


def test_explain_gives_the_other_conventions():
    X, firm, year, y = table()
    found = dict(explain(MULTI, "", fits(crossed(X, firm, year), y)))
    assert len(found) == 4
    assert found["no small-sample factor, a normal quantile"][1].df == np.inf


def test_coverage_under_two_way_dependence():
    # 20 firms × 25 years, a regressor and errors with both common parts; 1,500 columns, so the Monte-Carlo
    # standard error of a coverage of 0.95 is 0.0056. It covers a little less than 95 %, as the note says of
    # fewer than 25 clusters, and one-way clusters less still.
    rng = np.random.default_rng(4)
    firm, year = np.repeat(np.arange(20), 25), np.tile(np.arange(25), 20)
    n, B = 500, 1500
    X = np.column_stack(
        [np.ones(n), rng.normal(size=20)[firm] + rng.normal(size=25)[year] + rng.normal(size=n)]
    )
    Y = rng.normal(size=(20, B))[firm] + rng.normal(size=(25, B))[year] + rng.normal(size=(n, B))
    of = crossed(X, firm, year)
    found = replace(MULTI, at="firm + year").prepare(of, None).fit(fits(of, Y))
    one = replace(remedy("cluster-robust"), at="firm").prepare(of, None).fit(fits(of, Y))
    covered = np.mean((found.low <= 0) & (found.high >= 0), axis=1)
    assert 0.90 < covered[1] < 0.98, covered
    assert np.mean((one.low <= 0) & (one.high >= 0), axis=1)[1] < covered[1] - 0.02
