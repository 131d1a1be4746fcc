"""Tails of ratios of quadratic forms: dense twins, identities, invariances, size."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse, stats
from tests.maths import twins

from clingstone.maths import forms, routes
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law, eigen_tails
from clingstone.maths.tails import both

SPREAD = np.array([-9.0, -4.0, -1.5, -0.3, 0.0, 0.4, 2.0, 5.0, 9.0])


LAWS = twins.laws()


@pytest.mark.parametrize("name", LAWS)
def test_moments_range_and_both_tails_match_the_dense_twin(name):
    law = LAWS[name]
    value = twins.eigenvalues(law.form, law.basis, law.swept)
    assert law.m == len(value)
    sums = [np.sum(value**r) for r in range(1, 5)]
    assert np.allclose(law.traces, sums, rtol=1e-9, atol=1e-9 * sums[1])
    assert law.mean == pytest.approx(value.mean(), abs=1e-12 * max(1, abs(value).max()))
    assert law.variance == pytest.approx(2 * value.var() / (law.m + 2), rel=1e-9)
    assert np.allclose(law.range, [value[0], value[-1]], atol=1e-9 * abs(value).max())
    t = law.mean + np.sqrt(law.variance) * SPREAD
    t = t[(t > value[0]) & (t < value[-1])]
    got = law.tails(t)
    twin = eigen_tails(value, t)
    # Relative accuracy in both tails, to the deepest (1e-20 and beyond).
    assert np.allclose(got.log_lower, twin.log_lower, rtol=1e-11, atol=1e-10)
    assert np.allclose(got.log_upper, twin.log_upper, rtol=1e-11, atol=1e-10)
    assert np.all(got.accuracy < 1e-9)
    assert np.allclose(got.lower + got.upper, 1.0, atol=1e-12)
    assert got.method.startswith("exact")


def test_both_routes_without_factorization_are_among_the_laws():
    assert {routes.name(law.form, law.swept) for law in LAWS.values()} == {"eigen", "modes"}


@pytest.mark.parametrize("name", ["durbin-watson 9", "durbin-watson 40", "groups", "graph", "panel lag"])
def test_imhof_integral_agrees(name):
    law = LAWS[name]
    value = twins.eigenvalues(law.form, law.basis, law.swept)
    for z in (-2.0, 0.2, 1.7):
        t = law.mean + z * np.sqrt(law.variance)
        assert law.tails(t).upper[0] == pytest.approx(twins.imhof(value, t), abs=1e-8)


@pytest.mark.parametrize("kind", ["differences", "lagged"])
@pytest.mark.parametrize("lag", [1, 4])
def test_long_paths_match_all_eigenvectors(kind, lag):
    n = 6000
    basis = twins.trend_design(n, 4, 5)
    form = getattr(forms, kind)(*twins.step(n, lag), n, f"{kind} {lag}")
    law = Law(form, basis)
    modes = routes.spectrum(basis, form, None)
    for z in (-25.0, -2.0, 0.1, 3.0, 12.0):
        t = law.mean + z * np.sqrt(law.variance)
        assert routes.polynomials(basis, form, None, t) is not None
        got = law.tails(t)
        twin = both(modes, t, law.traces[:2], lambda: (form.low, form.high))
        assert got.log_lower[0] == pytest.approx(twin.log_lower, rel=1e-10, abs=1e-10)
        assert got.log_upper[0] == pytest.approx(twin.log_upper, rel=1e-10, abs=1e-10)


def test_sparse_factorizations_match_eigenvalues():
    n = 1600
    sites, W = twins.nearest(n, 5, 4)
    law = Law(forms.graph(W, "sparse"), Basis.of(np.column_stack([np.ones(n), sites, sites**2])))
    assert routes.name(law.form, None) == "factored"
    known = routes.eigen(law.basis, law.form, None)
    t = law.mean + np.sqrt(law.variance) * np.array([-5.0, 0.01, 2.0, 8.0])
    got, twin = law.tails(t), eigen_tails(known.values, t)
    assert np.allclose(got.log_upper, twin.log_upper, rtol=1e-9)
    assert np.allclose(got.log_lower, twin.log_lower, rtol=1e-9)
    assert np.allclose(law.range, [known.low, known.high], atol=1e-7)


def test_sparse_factorizations_with_cell_means_out():
    part, basis, _ = twins.panel(5, 30, 110)
    n = part.n
    assert n > routes.DENSE
    earlier, later = twins.within(part.codes)
    kernel = sparse.coo_array((np.linspace(0.2, 1.0, len(earlier)), (earlier, later)), shape=(n, n))
    for form in (forms.lagged(earlier, later, n, "lag"), forms.graph(kernel.tocsr(), "kernel")):
        law = Law(form, basis, part)
        assert routes.name(form, part) == "factored"
        known = routes.eigen(basis, form, part)
        t = law.mean + np.sqrt(law.variance) * np.array([-6.0, -1.0, 0.5, 4.0])
        got, twin = law.tails(t), eigen_tails(known.values, t)
        assert np.allclose(got.log_upper, twin.log_upper, rtol=1e-9)
        assert np.allclose(got.log_lower, twin.log_lower, rtol=1e-9)
    # A link between two cells is beyond this route.
    assert routes.name(forms.lagged(*twins.step(n), n, "across"), part) == "traces"


@pytest.mark.parametrize("n", [50, 500, pytest.param(2100, marks=pytest.mark.slow)])
def test_a_model_without_columns(n):
    """Every column may be absorbed by the cells; the law then has the form's own spectrum."""
    bare = Basis(np.zeros((n, 0)), np.zeros((0, 0)))
    part = Partition.of("g", np.arange(n) // 7)
    W = twins.nearest(n, 4)[1]
    for form in (
        forms.differences(*twins.step(n), n, "d"),
        forms.lagged(*twins.within(part.codes), n, "l"),
        forms.cells(part),
        forms.graph(W, "g"),
    ):
        law = Law(form, bare)
        value = np.linalg.eigvalsh(form.S.toarray())
        t = law.mean + np.sqrt(law.variance) * np.array([-1.0, 2.0])
        twin = eigen_tails(value, t)
        assert np.allclose(law.tails(t).log_lower, twin.log_lower, rtol=1e-9)
        assert np.allclose(law.tails(t).log_upper, twin.log_upper, rtol=1e-9)
    swept = Law(forms.differences(*twins.within(part.codes), n, "fe"), bare, part)
    whole = Basis.of(np.eye(part.count)[part.codes])
    direct = Law(forms.differences(*twins.within(part.codes), n, "dummies"), whole)
    assert swept.tails(1.9).log_lower[0] == pytest.approx(direct.tails(1.9).log_lower[0], rel=1e-9)


# ---- identities ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("r", "rest"), [(1, 1), (1, 30), (4, 7), (3, 200), (250, 900), (1, 10**6), (11, 10**5)]
)
def test_a_projector_gives_the_f_distribution(r, rest):
    """T = SSB/SST: P(T > t) = P(F(r, rest) > (t/r)/((1 − t)/rest)); scipy's beta law as the twin.

    One eigenvalue against a million is the case that a straight contour cannot do.
    """
    t = stats.beta.ppf([1e-12, 0.01, 0.5, 0.99, 1 - 1e-10], r / 2, rest / 2)
    t = t[(t > 1e-14) & (t < 1 - 1e-10)]
    got = eigen_tails(np.array([1.0, 0.0]), t, np.array([r, rest]))
    assert np.allclose(got.upper, stats.beta.sf(t, r / 2, rest / 2), rtol=2e-10)
    assert np.allclose(got.lower, stats.beta.cdf(t, r / 2, rest / 2), rtol=2e-10)


def test_group_form_with_only_a_constant_is_the_anova_f_test():
    """Equal groups, constant only: e'ZZ'e/e'e = size · SSB/SST; scipy.stats.f_oneway is the outside value."""
    rng = np.random.default_rng(8)
    y = rng.standard_normal((6, 5)) + rng.standard_normal((6, 1))
    part = Partition.of("g", np.repeat(np.arange(6), 5))
    law = Law(forms.cells(part), Basis.of(np.ones((30, 1))))
    e = law.basis.project(y.ravel())
    t = e @ law.form.apply(e) / (e @ e)
    assert law.tails(t).upper[0] == pytest.approx(stats.f_oneway(*y).pvalue, rel=1e-10)


def test_two_eigenvalues_by_hand():
    """T = z₁²/(z₁² + z₂²) has the arcsine law: P(T < t) = (2/π) arcsin √t."""
    t = np.array([1e-12, 0.1, 0.5, 0.8])
    got = eigen_tails(np.array([1.0, 0.0]), t)
    assert np.allclose(got.lower, 2 / np.pi * np.arcsin(np.sqrt(t)), rtol=1e-11)
    assert np.allclose(got.upper, 2 / np.pi * np.arcsin(np.sqrt(1 - t)), rtol=1e-11)


def test_far_tails_keep_their_logarithm():
    got = eigen_tails(np.array([1.0, 0.0]), [1 - 1e-9], np.array([3, 5000]))
    assert got.upper[0] == 0.0
    # P(Beta(1.5, 2500) > 1 − ε) ≈ ε^2500/(2500 B(1.5, 2500))
    from scipy.special import betaln

    expected = 2500 * np.log(1e-9) - np.log(2500) - betaln(1.5, 2500)
    assert got.log_upper[0] == pytest.approx(expected, rel=1e-7)
    assert got.log_two_sided[0] == pytest.approx(expected + np.log(2.0), rel=1e-7)


# ---- edges --------------------------------------------------------------------------------


def test_values_that_cannot_occur_have_tails_of_exactly_zero_and_one():
    for name in ("durbin-watson 40", "durbin-watson 700", "many groups", "graph"):
        law = LAWS[name]
        low, high = law.range
        got = law.tails([low - 1e-9, high + 1e-9, low - 5.0, high + 5.0])
        assert got.lower.tolist() == [0.0, 1.0, 0.0, 1.0]
        assert got.upper.tolist() == [1.0, 0.0, 1.0, 0.0]
        assert got.two_sided.tolist() == [0.0, 0.0, 0.0, 0.0]
        assert not np.any(np.signbit(got.lower) | np.signbit(got.upper))


@pytest.mark.parametrize("name", ["durbin-watson 40", "durbin-watson 700", "graph"])
def test_tails_are_exact_up_to_the_ends_of_the_range(name):
    law = LAWS[name]
    low, high = law.range
    value = twins.eigenvalues(law.form, law.basis)
    t = low + (high - low) * np.array([1e-6, 1e-3, 0.02, 0.98, 0.999])
    got, twin = law.tails(t), eigen_tails(value, t)
    assert np.allclose(got.log_lower, twin.log_lower, rtol=1e-6)
    assert np.allclose(got.log_upper, twin.log_upper, rtol=1e-6)
    assert np.all(np.diff(got.log_lower) >= 0)


def test_a_statistic_that_cannot_vary():
    part = Partition.of("g", np.repeat(np.arange(4), 3))
    law = Law(forms.cells(part), Basis.of(np.ones((12, 1))), part)
    assert law.constant
    assert law.variance == pytest.approx(0.0, abs=1e-15)
    got = law.tails([0.0, 0.5, -0.5])
    assert got.two_sided.tolist() == [1.0, 0.0, 0.0]
    assert "cannot vary" in law.method
    assert law.quantile(0.3) == law.mean
    assert eigen_tails(np.array([2.0, 2.0]), [2.0, 1.0]).two_sided.tolist() == [1.0, 0.0]


def test_one_huge_group_does_not_hide_a_small_one():
    """Ten rows against a million: T varies, though tr S² is 10¹² times larger than its spread."""
    n = 1_000_010
    part = Partition.of("g", np.repeat([0, 1], [n - 10, 10]))
    law = Law(forms.cells(part), Basis.of(np.ones((n, 1))))
    assert not law.constant
    # One eigenvalue, 2·n₁n₂/n, on m dimensions: T/that ~ Beta(1/2, (m − 1)/2).
    size = 2.0 * (n - 10) * 10 / n
    t = 4.0 * size / law.m
    assert law.tails(t).upper[0] == pytest.approx(stats.beta.sf(t / size, 0.5, (law.m - 1) / 2), rel=1e-6)


def test_what_is_not_a_number_stays_so_and_nothing_else_becomes_it():
    law = LAWS["durbin-watson 40"]
    for depth in ("exact", "fast"):
        t = np.concatenate([[np.nan], np.linspace(-1.0, 5.0, 40)])
        got = law.tails(t, depth)
        for part in (got.lower, got.upper, got.log_lower, got.log_upper, got.two_sided):
            assert np.isnan(part[0])
            assert not np.any(np.isnan(part[1:]))


def test_no_degrees_of_freedom():
    with pytest.raises(ValueError, match="no residual degrees of freedom"):
        Law(forms.lagged(*twins.step(4), 4, "l"), Basis.of(np.eye(4)))


def test_two_sided_is_capped():
    assert LAWS["graph"].tails(LAWS["graph"].mean).two_sided[0] <= 1.0
    middle = eigen_tails(np.array([0.0, 1.0]), [0.5]).two_sided[0]
    assert middle == pytest.approx(1.0, abs=1e-14)
    assert middle <= 1.0


def test_a_probability_must_lie_inside():
    with pytest.raises(ValueError, match="strictly between"):
        LAWS["graph"].quantile(0.0)


@pytest.mark.parametrize("name", ["durbin-watson 9", "durbin-watson 700", "many groups", "graph"])
def test_quantiles_invert_the_tails(name):
    law = LAWS[name]
    for q in (1e-7, 0.025, 0.5, 0.975):
        assert law.tails(law.quantile(q)).lower[0] == pytest.approx(q, rel=1e-8)


# ---- invariances --------------------------------------------------------------------------

ALL_ROWS = st.integers(5, 18)


def random_law(n, seed):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n)) * (rng.uniform(size=(n, n)) < 0.4) + np.diag(rng.standard_normal(n))
    return sparse.csr_array(0.5 * (A + A.T)), Basis.of(rng.standard_normal((n, 2))), rng


@given(ALL_ROWS, st.integers(0, 5000), st.floats(0.01, 100.0), st.floats(-50.0, 50.0))
def test_scale_and_shift_of_the_form(n, seed, scale, shift):
    S, basis, rng = random_law(n, seed)
    moved = sparse.csr_array(scale * S + shift * sparse.eye_array(n))
    one, two = Law(forms.graph(S, "one"), basis), Law(forms.graph(moved, "two"), basis)
    t = one.mean + np.sqrt(one.variance) * rng.uniform(-2, 2, 3)
    a, b = one.tails(t), two.tails(scale * t + shift)
    assert np.allclose(a.lower, b.lower, atol=1e-9)
    assert np.allclose(a.upper, b.upper, atol=1e-9)
    assert two.variance == pytest.approx(scale**2 * one.variance, rel=1e-6)


@given(ALL_ROWS, st.integers(0, 5000))
def test_a_form_turned_round_swaps_the_tails(n, seed):
    S, basis, rng = random_law(n, seed)
    one, two = Law(forms.graph(S, "one"), basis), Law(forms.graph(-S, "two"), basis)
    t = one.mean + np.sqrt(one.variance) * rng.uniform(-2, 2, 3)
    a, b = one.tails(t), two.tails(-t)
    assert np.allclose(a.lower, b.upper, rtol=1e-9)
    assert np.allclose(a.log_upper, b.log_lower, rtol=1e-9)


@given(ALL_ROWS, st.integers(0, 5000))
def test_row_order_and_the_choice_of_columns_do_not_matter(n, seed):
    S, basis, rng = random_law(n, seed)
    order = rng.permutation(n)
    mixed = Basis.of((basis.Q @ rng.standard_normal((2, 2)))[order])
    one = Law(forms.graph(S, "one"), basis)
    two = Law(forms.graph(sparse.csr_array(S.toarray()[np.ix_(order, order)]), "two"), mixed)
    t = one.mean + np.sqrt(one.variance) * rng.uniform(-2, 2, 3)
    assert np.allclose(one.tails(t).lower, two.tails(t).lower, rtol=1e-7)


@given(st.integers(0, 5000))
def test_the_statistic_does_not_know_the_scale_of_y(seed):
    rng = np.random.default_rng(seed)
    law = LAWS["durbin-watson 40"]
    e = law.basis.project(rng.standard_normal(40))
    t = [(k * e) @ law.form.apply(k * e) / ((k * e) @ (k * e)) for k in (1.0, 1e-6, 1e6)]
    assert np.allclose(law.tails(t).lower, law.tails(t[0]).lower[0], rtol=1e-9)


# ---- inference ----------------------------------------------------------------------------


def test_sizes_under_the_null_and_scale_mixtures():
    """Exact for spherical errors, normal or not: uniform p-values. 4000 draws, s.e. 0.34 points at 5 %."""
    law = LAWS["durbin-watson 40"]
    rng = np.random.default_rng(11)
    y = rng.standard_normal((40, 4000)) / np.sqrt(rng.chisquare(3, 4000))
    e = law.basis.project(y)
    t = np.einsum("ij,ij->j", e, law.form.apply(e)) / np.einsum("ij,ij->j", e, e)
    p = law.tails(t, "fast")
    for alpha, room in ((0.01, 0.005), (0.05, 0.011), (0.5, 0.025)):
        assert np.mean(p.lower < alpha) == pytest.approx(alpha, abs=room)
        assert np.mean(p.upper < alpha) == pytest.approx(alpha, abs=room)
        assert np.mean(p.two_sided < alpha) == pytest.approx(alpha, abs=room)
