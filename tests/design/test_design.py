"""Designs, responses and what is derived from them, each against an obvious twin."""

from dataclasses import replace

import numpy as np
import pytest

from clingstone.design.derived import absorb, collapse, extend, only, onto, sweep, whole
from clingstone.design.design import Contrast, Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.needs import Needs, NotSupported
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series


def small(weighted=False, seed=3):
    """Thirty rows in six groups: constant, a row-level x, a group-level z."""
    rng = np.random.default_rng(seed)
    part = Partition.of("farm", np.repeat(list("abcdef"), [3, 4, 5, 6, 7, 5]))
    x = rng.normal(size=30)
    z = rng.normal(size=6)[part.codes]
    X = np.column_stack([np.ones(30), x, z])
    root = np.sqrt(rng.uniform(0.5, 2, 30)) if weighted else None
    design = Design(
        basis=Basis.of(X if root is None else X * root[:, None]),
        names=("constant", "x", "z"),
        terms=(
            Term("constant", (0,), "constant"),
            Term("x", (1,), "numeric", ("x",), focus=True),
            Term("z", (2,), "numeric", ("z",), focus=True),
        ),
        group=Groups((part,), "one level"),
        covariates={"x": x, "z": z},
        contrasts=(Contrast("x − z", (0.0, 1.0, -1.0)),),
        root=root,
    )
    y = 1e6 + x - z + rng.normal(size=(30, 2)).T
    return design, X, y.T, part, root


def test_basis_recovers_the_columns_and_least_squares():
    design, X, y, *_ = small()
    response = Response.of(design, y)
    beta = np.linalg.lstsq(X, y, rcond=None)[0]
    np.testing.assert_allclose(design.Q @ design.basis.R, X, atol=1e-12)
    np.testing.assert_allclose(design.basis.coefficients(response.coef), beta, rtol=1e-9)
    np.testing.assert_allclose(response.residual, y - X @ beta, atol=1e-8)
    assert np.abs(design.Q.T @ response.residual).max() < 1e-10  # although y has mean 1e6


def test_weighted_least_squares_matches_the_normal_equations():
    design, X, y, _, root = small(weighted=True)
    W = np.diag(root**2)
    beta = np.linalg.solve(X.T @ W @ X, X.T @ W @ y)
    np.testing.assert_allclose(design.basis.coefficients(Response.of(design, y).coef), beta, rtol=1e-9)


@pytest.mark.parametrize("weighted", [False, True])
def test_views_equal_loops(weighted):
    design, _, y, part, root = small(weighted)
    response = Response.of(design, y)
    w = np.ones(30) if root is None else root
    for g in range(part.count):
        rows = part.codes == g
        Qg, eg = design.Q[rows], response.residual[rows]
        np.testing.assert_allclose(design.sums(part)[g], w[rows] @ Qg, atol=1e-12)
        np.testing.assert_allclose(response.sums(part)[g], w[rows] @ eg, atol=1e-8)
        np.testing.assert_allclose(design.scores(part)[g], Qg.T @ Qg, atol=1e-12)
        np.testing.assert_allclose(response.scores(part)[g], Qg.T @ eg, atol=1e-8)
        assert design.sizes(part)[g] == pytest.approx(np.sum(w[rows] ** 2))


@pytest.mark.parametrize("weighted", [False, True])
def test_level_at_which_a_term_varies(weighted):
    design, *_ = small(weighted)
    assert design.level_of("z") == "farm"
    assert design.level_of("x") == "row"


def test_extend_keeps_old_columns_and_leaves_out_spanned_ones():
    design, X, y, *_ = small()
    wide = extend(design, "x²", np.column_stack([X[:, 1] ** 2, 2 * X[:, 1] - X[:, 2]]))
    assert wide.names == ("constant", "x", "z", "x²")
    both = np.column_stack([X, X[:, 1] ** 2])
    np.testing.assert_allclose(
        onto(Response.of(design, y), wide).ss,
        np.sum((y - both @ np.linalg.lstsq(both, y, rcond=None)[0]) ** 2, axis=0),
        rtol=1e-9,
    )
    assert wide.contrasts[0].weights == (0.0, 1.0, -1.0, 0.0)
    with pytest.raises(NotSupported, match="already spans"):
        extend(design, "twice x", 2 * X[:, 1])


@pytest.mark.parametrize("weighted", [False, True])
def test_other_coefficients_are_adjusted_for_added_columns(weighted):
    """As least squares on all columns gives them; x beside a curve in x is the line through the curve."""
    design, X, y, _, root = small(weighted)
    root = np.ones(len(X)) if root is None else root
    y = y[:, 0] - 1e6
    x, z = X[:, 1], X[:, 2]
    S = np.column_stack([np.sin(3 * x) + 0.5 * z, x**3])
    wide = extend(design, "curve", S, ("x",))
    b = wide.basis.coefficients(onto(Response.of(design, y), wide).coef)[:, 0]
    full = np.column_stack([X, S]) * root[:, None]
    plain = np.linalg.lstsq(full, y * root, rcond=None)[0]
    line = np.column_stack([np.ones(len(x)), x]) * root[:, None]
    curve = (plain[0] + plain[1] * x + S @ plain[3:]) * root
    np.testing.assert_allclose(b[2:], plain[2:], rtol=1e-9)
    np.testing.assert_allclose(b[:2], np.linalg.lstsq(line, curve, rcond=None)[0], rtol=1e-9)


def test_units_of_a_variable_do_not_hide_it_from_its_curve():
    design, X, *_ = small()
    S = np.column_stack([np.sin(3 * X[:, 1])])
    wide = extend(design, "curve", S, ("x",))
    extra = (wide.Q @ wide.basis.R)[:, design.p :]
    np.testing.assert_allclose(np.column_stack([np.ones(len(X)), X[:, 1]]).T @ extra, 0.0, atol=1e-9)
    tiny = replace(design, basis=type(design.basis).of(X * np.array([1.0, 1e-12, 1e9])))
    again = extend(tiny, "curve", S, ("x",))
    np.testing.assert_allclose((again.Q @ again.basis.R)[:, design.p :], extra, atol=1e-9)


@pytest.mark.parametrize("weighted", [False, True])
def test_absorbing_groups_equals_dummies(weighted):
    design, X, y, part, root = small(weighted)
    w = np.ones(30) if root is None else root
    derived, lost = absorb(design, part)
    assert lost == ("constant", "z")
    assert derived.m == 30 - 1 - 6
    D = np.eye(6)[part.codes]
    full = np.column_stack([X[:, 1], D]) * w[:, None]
    fit = np.linalg.lstsq(full, y * w[:, None], rcond=None)
    swept = sweep(Response.of(design, y), derived, part)
    np.testing.assert_allclose(derived.basis.coefficients(swept.coef)[0], fit[0][0], rtol=1e-8)
    np.testing.assert_allclose(swept.ss, fit[1], rtol=1e-8)


def test_collapse_is_the_regression_of_cell_means():
    design, X, y, part, _ = small()
    means = collapse(Response.of(design, y), part)
    Xm = np.stack([X[part.codes == g].mean(axis=0) for g in range(6)])
    ym = np.stack([y[part.codes == g].mean(axis=0) for g in range(6)])
    beta = np.linalg.lstsq(Xm, ym, rcond=None)[0]
    np.testing.assert_allclose(means.design.basis.coefficients(means.coef), beta, rtol=1e-8)
    assert means.design.n == 6


def test_only_is_the_unadjusted_regression():
    design, X, y, *_ = small()
    alone = only(design, design.terms[2])
    beta = np.linalg.lstsq(X[:, [0, 2]], y, rcond=None)[0]
    coef = alone.basis.coefficients(onto(Response.of(design, y), alone).coef)
    np.testing.assert_allclose(coef, beta, rtol=1e-8)


def test_whole_gives_y_back():
    design, _, y, _, root = small(weighted=True)
    np.testing.assert_allclose(whole(Response.of(design, y)) / root[:, None], y, rtol=1e-12)


def test_needs_name_what_is_missing():
    design, *_ = small()
    refusal = Needs(parts=frozenset({"serial"})).check(design)
    assert refusal is not None
    assert "time=" in refusal.hint
    refusal = Needs(counts={"groups": 20}).check(design)
    assert refusal is not None
    assert refusal.reason == "6 groups found; this needs at least 20"
    assert Needs(parts=frozenset({"group"}), counts={"groups": 6}).check(design) is None


def test_pairs_skip_gaps_and_series_ends():
    part = Partition.of("gauge", ["a"] * 4 + ["b"] * 3)
    tick = np.array([0, 1, 3, 4, 0, 1, 2])
    series = Series("day", part, tick.astype(float), "day", 1.0, tick, "regular with gaps")
    earlier, later = series.pairs(1)
    assert list(zip(earlier, later, strict=True)) == [(0, 1), (2, 3), (4, 5), (5, 6)]
    earlier, later = series.pairs(2)
    assert list(zip(earlier, later, strict=True)) == [(1, 2), (4, 6)]
    assert series.runs.sizes.tolist() == [2, 2, 3]


@pytest.mark.parametrize("weighted", [False, True])
def test_y_carried_onto_added_columns_is_that_of_a_fit_from_nothing(weighted):
    design, _, y, *_ = small(weighted)
    response = Response.of(design, y)
    rng = np.random.default_rng(8)
    once = extend(design, "more", rng.normal(size=(30, 2)))
    twice = extend(once, "still more", rng.normal(size=30))
    for derived in (once, twice):
        there, afresh = onto(response, derived), Response.of(derived, y)
        np.testing.assert_allclose(there.residual, afresh.residual, atol=1e-8)
        np.testing.assert_allclose(there.coef, afresh.coef, rtol=1e-9, atol=1e-8)
        assert np.abs(derived.Q.T @ there.residual).max() < 1e-12
