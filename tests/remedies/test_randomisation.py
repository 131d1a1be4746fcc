"""Randomisation inference: every assignment refitted, strata, several arms, exactness, refusals."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.design import Assignment, Term
from clingstone.maths import assignments
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from tests.remedies.cases import design, fits

LOT = remedy("randomisation")


def trial(G=8, seed=1, arms=2, effect=0.8):
    """X (constant, a row covariate, arm columns), clinics of unequal size, y."""
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(G), rng.integers(3, 8, G))
    n = len(group)
    arm = rng.permutation(np.arange(G) % arms)
    X = np.column_stack(
        [np.ones(n), rng.normal(size=n), *[(arm == k)[group].astype(float) for k in range(1, arms)]]
    )
    y = X[:, 1] + effect * X[:, 2] + 0.6 * rng.normal(size=G)[group] + rng.normal(size=n)
    return X, group, arm, y


def assigned(X, group, *, columns=(2,), outer=None, extra=(), root=None):
    terms = (
        Term("constant", (0,), "constant"),
        Term("x1", (1,), "numeric", ("x1",)),
        Term("arm", columns, "factor" if len(columns) > 1 else "numeric", ("arm",), True),
        *extra,
    )
    of = design(X, group=group, outer=outer, terms=terms, root=root)
    unit = "clinic" if outer is None else "district/ward"
    within = {} if outer is None else {"arm": "district"}
    return replace(of, assignment=Assignment({"arm": unit}, within))


def t2(X, y, group, j, value=0.0, root=None):
    root = np.ones(len(y)) if root is None else root
    X, y = X * root[:, None], y * root
    inv = np.linalg.inv(X.T @ X)
    b = inv @ X.T @ y
    e = y - X @ b
    s = np.array([X[group == g].T @ e[group == g] for g in np.unique(group)])
    return (b[j] - value) ** 2 / np.sum((s @ inv[j]) ** 2)


def p_by_refits(X, y, group, arm, value=0.0, allowed=None, root=None):
    """Every two-arm assignment of the clinics, each refitted to y less the tested effect."""
    y0 = y - value * X[:, 2]
    found = []
    for chosen in itertools.combinations(range(len(arm)), int(arm.sum())):
        new = np.isin(np.arange(len(arm)), chosen).astype(float)
        if allowed is not None and not allowed(new):
            continue
        Z = X.copy()
        Z[:, 2] = new[group]
        found.append(t2(Z, y0, group, 2, root=root))
    return np.mean(np.array(found) >= t2(X, y0, group, 2, root=root) * (1 - 1e-9))


def test_p_is_that_of_every_assignment_refitted():
    X, group, arm, y = trial()
    result = refit(LOT, "clinic", fits(assigned(X, group), y))
    row = result.get("x2")
    assert row.p == p_by_refits(X, y, group, arm)
    assert "70; used: all of them" in dict(result.account.items)["possible assignments of x2"]
    for end, out in ((row.low, -1), (row.high, 1)):
        edge = 1e-4 * row.se
        assert p_by_refits(X, y, group, arm, end + out * edge) <= 0.05
        assert p_by_refits(X, y, group, arm, end - out * edge) > 0.05


def test_precision_weights_are_carried():
    X, group, arm, y = trial()
    root = np.sqrt(np.random.default_rng(2).uniform(0.5, 2, len(y)))
    result = refit(LOT, "clinic", fits(assigned(X, group, root=root), y))
    assert result.get("x2").p == p_by_refits(X, y, group, arm, root=root)


def test_units_change_places_only_within_strata():
    X, group, _, y = trial()
    arm = np.array([0, 1, 1, 0, 0, 1, 0, 1])
    X[:, 2] = arm[group]
    district = np.repeat([0, 1], [4, 4])
    of = assigned(X, group, outer=district[group])
    result = refit(LOT, "district/ward", fits(of, y))
    items = dict(result.account.items)
    assert "36; used: all of them" in items["possible assignments of x2"]
    assert items["strata within which units of x2 change places"] == "2"

    def allowed(new):
        return new[:4].sum() == 2

    assert result.get("x2").p == p_by_refits(X, y, group, arm, allowed=allowed)


def test_the_coefficient_itself_can_be_compared():
    X, group, _, y = trial()
    found = refit(replace(LOT, statistic="coefficient"), "clinic", fits(assigned(X, group), y))
    each = []
    for chosen in itertools.combinations(range(8), 4):
        Z = X.copy()
        Z[:, 2] = np.isin(group, chosen)
        each.append(abs(np.linalg.lstsq(Z, y, rcond=None)[0][2]))
    observed = abs(np.linalg.lstsq(X, y, rcond=None)[0][2])
    assert found.get("x2").p == np.mean(np.array(each) >= observed * (1 - 1e-9))


def test_arms_change_places_with_the_reference_and_the_whole_term_at_once():
    X, group, _, y = trial(G=9, arms=3, seed=4)
    with pytest.raises(NotSupported, match="20 ways only"):  # six clinics in two arms
        refit(LOT, "clinic", fits(assigned(X, group, columns=(2, 3)), y))
    X, group, arm, y = trial(G=12, arms=3, seed=4)
    result = refit(LOT, "clinic", fits(assigned(X, group, columns=(2, 3)), y))
    each = []
    for chosen in itertools.combinations(np.flatnonzero(arm != 2), 4):
        Z = X.copy()
        Z[:, 2] = np.isin(group, chosen)
        each.append(t2(Z, y, group, 2))
    assert result.get("x2").p == np.mean(np.array(each) >= t2(X, y, group, 2) * (1 - 1e-9))
    assert 0 < result.terms[0].p < 1
    assert result.terms[0].term == "arm"


def test_the_whole_term_is_permuted_together():
    X, group, arm, y = trial(G=7, arms=3, seed=4, effect=2.0)
    of = fits(assigned(X, group, columns=(2, 3)), y)
    part = of.design.partitions["clinic"]

    def explained(Z):
        full = y - Z @ np.linalg.lstsq(Z, y, rcond=None)[0]
        less = y - Z[:, :2] @ np.linalg.lstsq(Z[:, :2], y, rcond=None)[0]
        return less @ less - full @ full

    each = []
    for order in set(itertools.permutations(arm.tolist())):
        Z = X.copy()
        Z[:, 2], Z[:, 3] = (np.array(order) == 1)[group], (np.array(order) == 2)[group]
        each.append(explained(Z))
    units = assignments.Units(of.design.sizes(part), of.design.sums(part), of.design.scores(part))
    W = of.design.basis.contrast(np.eye(4)[2:])
    xi = X[part.first][:, 2:]
    taken = assignments.every(assignments.levels_of(xi), np.zeros(7, dtype=int))
    assert len(taken) == assignments.count(assignments.levels_of(xi), np.zeros(7, dtype=int)) == len(each)
    e, theta = of.response.sums(part)[:, 0], W.T @ of.response.coef[:, 0]
    found = assignments.joint_squares(units, W, xi, taken, e, theta)
    assert found[0] == pytest.approx(explained(X))
    assert np.sort(found[1:]) == pytest.approx(np.sort(each))
    p = np.mean(np.array(each) >= explained(X) * (1 - 1e-9))
    assert assignments.tail(found, True) == pytest.approx(p)


def test_draws_are_seeded_and_near_the_count_of_all(monkeypatch):
    X, group, _, y = trial(G=12, seed=3)
    exact = refit(LOT, "clinic", fits(assigned(X, group), y)).get("x2")
    few = replace(LOT, draws=900)  # fewer than the 924 assignments, so that they are drawn
    monkeypatch.setattr("clingstone.remedies.randomisation.BLOCK", 12 * 100)
    once = refit(few, "clinic", fits(assigned(X, group), y)).get("x2")
    again = refit(few, "clinic", fits(assigned(X, group), y)).get("x2")
    assert (once.low, once.high, once.p) == (again.low, again.high, again.p)
    assert abs(once.p - exact.p) < 4 * np.sqrt(exact.p * (1 - exact.p) / 900)
    assert once.p * 901 == pytest.approx(round(once.p * 901))


def test_many_columns_are_read_as_one_by_one_and_scale_does_not_matter():
    X, group, _, y = trial()
    of = assigned(X, group)
    Y = np.column_stack([y, 1e3 * y])
    found = replace(LOT, at="clinic").prepare(of, None).fit(fits(of, Y))
    one = refit(LOT, "clinic", fits(of, y)).get("x2")
    assert list(found.p[2]) == [one.p, one.p]
    assert found.low[2] == pytest.approx([one.low, 1e3 * one.low], rel=1e-4)


def test_assignments_are_counted():
    assert assignments.count(np.array([0, 0, 1, 1]), np.zeros(4, dtype=int)) == 6
    assert assignments.count(np.array([0, 1, 2, 0]), np.zeros(4, dtype=int)) == 12
    assert assignments.count(np.array([0, 1, 0, 1]), np.array([0, 0, 1, 1])) == 4
    every = assignments.every(np.array([0, 1, 2, 0]), np.zeros(4, dtype=int))
    assert len({tuple(np.array([0, 1, 2, 0])[row]) for row in every}) == 12
    assert assignments.count(np.arange(20) % 2, np.zeros(20, dtype=int)) == 184756
    assert assignments.count(np.arange(4000) % 2, np.zeros(4000, dtype=int)) == np.inf


def test_it_is_exact_over_all_assignments():
    # The sharp null holds: y is fixed, the arm is any of the 70 assignments. p ≤ α in no more than α of them.
    X, group, _, y = trial(effect=0.0)
    ps = []
    for chosen in itertools.combinations(range(8), 4):
        Z = X.copy()
        Z[:, 2] = np.isin(group, chosen)
        ps.append(refit(LOT, "clinic", fits(assigned(Z, group), y)).get("x2").p)
    ps = np.array(ps)
    for alpha in (1 / 70, 0.05, 0.1, 0.25, 0.5):
        assert np.mean(ps <= alpha + 1e-12) <= alpha + 1e-12
    assert np.mean(ps <= 0.5) > 0.4  # and it is not idle


# ---- what cannot be served -----------------------------------------------------------------


def test_nothing_assigned_is_nothing_to_permute():
    X, group, _, _ = trial()
    of = design(X, group=group)
    assert LOT.abouts(of) == ()
    with pytest.raises(NotSupported, match="nothing is known to have been assigned") as stop:
        replace(LOT, at="clinic").prepare(of, None)
    assert "assigned=" in stop.value.hint


def test_other_coefficients_are_not_given():
    X, group, _, y = trial()
    result = refit(LOT, "clinic", fits(assigned(X, group), y))
    assert "it was not assigned" in result.get("x1").status
    assert np.isnan(result.get("x1").low)
    assert result.get("x1").estimate == pytest.approx(np.linalg.lstsq(X, y, rcond=None)[0][1])


def test_too_few_assignments_are_refused():
    X, group, _, y = trial()
    X[:, 2] = group == 3
    with pytest.raises(NotSupported, match="8 ways only"):
        refit(LOT, "clinic", fits(assigned(X, group), y))


def test_a_product_with_the_assigned_term_is_refused():
    X, group, _, y = trial()
    X = np.column_stack([X, X[:, 1] * X[:, 2]])
    extra = (Term("x1 × arm", (3,), "interaction", ("x1", "arm")),)
    with pytest.raises(NotSupported, match="also holds x1 × arm"):
        refit(LOT, "clinic", fits(assigned(X, group, extra=extra), y))


def test_explain_gives_the_other_statistic():
    X, group, _, y = trial()
    found = dict(explain(LOT, "clinic", fits(assigned(X, group), y)))
    assert "permuting the coefficient itself, not its t" in found
