"""Tails of ratios of quadratic forms: dense twins, identities, invariances, size."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse, stats
from tests.maths import twins

from clingstone.maths import forms, ratio, routes
from clingstone.maths.basis import Basis
from clingstone.maths.contour import log_pivots
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law, eigen_tails
from clingstone.maths.spectra import Eigen
from clingstone.maths.surrogate import radau, surrogate
from clingstone.maths.tails import both

SPREAD = np.array([-9.0, -4.0, -1.5, -0.3, 0.0, 0.4, 2.0, 5.0, 9.0])


def panel(seed=0, most=30, series=80):
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(series), rng.integers(1, most, series))
    n = len(codes)
    X = np.column_stack([np.ones(n), rng.standard_normal(series)[codes], rng.standard_normal((n, 2))])
    return Partition.of("series", codes), Basis.of(X), np.sqrt(rng.uniform(0.4, 2.5, n))


def laws() -> dict[str, Law]:
    """One law for every route and kind of form; each small enough for its dense twin."""
    out: dict[str, Law] = {}
    for n in (9, 40, 700):
        basis = twins.trend_design(n, 4)
        out[f"durbin-watson {n}"] = Law(forms.differences(*twins.step(n), n, f"dw {n}"), basis)
        out[f"lag 3, {n}"] = Law(forms.lagged(*twins.step(n, 3), n, f"lag {n}"), basis)
    part, basis, root = panel()
    n = part.n
    pairs = twins.within(part.codes)
    coarse = Partition.of("coarse", part.codes // 8)
    out["panel"] = Law(forms.differences(*pairs, n, "panel"), basis)
    out["panel, series means out"] = Law(forms.differences(*pairs, n, "panel fe"), basis, part)
    out["panel, coarse means out"] = Law(forms.differences(*pairs, n, "panel coarse"), basis, coarse)
    out["panel lag"] = Law(forms.lagged(*pairs, n, "panel lag"), basis)
    out["panel lag, series means out"] = Law(forms.lagged(*pairs, n, "panel lag fe"), basis, part)
    out["groups"] = Law(forms.cells(part), basis)
    out["groups, weighted"] = Law(forms.cells(part, root), basis)
    out["groups, coarse means out"] = Law(forms.cells(part), basis, coarse)
    many, wide, many_root = panel(1, 6, 320)
    out["many groups"] = Law(forms.cells(many), wide)
    out["many groups, weighted"] = Law(forms.cells(many, many_root), wide)
    sites, W = twins.nearest(80, 5)
    out["sites with rows"] = Law(forms.cells_graph(part, W, "sites"), basis)
    out["sites with rows, weighted"] = Law(forms.cells_graph(part, W, "sites weighted", root), basis)
    sites, W = twins.nearest(300, 6, 2)
    trend = Basis.of(np.column_stack([np.ones(300), sites]))
    out["graph"] = Law(forms.graph(W, "graph"), trend)
    times = Partition.of("unit", np.arange(300) % 40)
    out["graph, unit means out"] = Law(forms.graph(W, "graph fe"), trend, times)
    return out


LAWS = laws()


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
    part, basis, _ = panel(5, 30, 110)
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


@pytest.mark.parametrize("n", [50, 500, 2100])
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


@pytest.mark.parametrize(("r", "rest"), [(1, 1), (1, 30), (4, 7), (3, 200), (250, 900)])
def test_a_projector_gives_the_f_distribution(r, rest):
    """T = SSB/SST: P(T > t) = P(F(r, rest) > (t/r)/((1 − t)/rest)); scipy's beta law as the twin."""
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


# ---- many values at once, and approximations ---------------------------------------------


@pytest.mark.parametrize(
    "name", ["durbin-watson 40", "durbin-watson 700", "groups", "graph", "panel, series means out"]
)
def test_many_values_by_interpolation(name):
    law = LAWS[name]
    rng = np.random.default_rng(1)
    t = law.mean + np.sqrt(law.variance) * rng.standard_t(4, 60)
    low, high = law.range
    t = np.clip(t, low + 0.01 * (high - low), high - 0.01 * (high - low))
    fast, exact = law.tails(t, "fast"), law.tails(t)
    assert "interpolated" in fast.method
    assert np.allclose(fast.log_lower, exact.log_lower, rtol=1e-5, atol=2e-5)
    assert np.allclose(fast.log_upper, exact.log_upper, rtol=1e-5, atol=2e-5)
    # The same values in other company give the same answer.
    again = law.tails(t[:30], "fast")
    assert np.array_equal(again.lower, fast.lower[:30])


def test_few_values_are_exact_also_where_speed_is_asked():
    law = LAWS["durbin-watson 700"]
    assert law.tails([1.9, 2.1], "fast").method.startswith("exact")
    assert np.array_equal(law.tails([1.9], "fast").lower, law.tails([1.9]).lower)


@pytest.mark.parametrize(("n", "k", "tolerance"), [(100, 5, 0.04), (400, 6, 0.004), (1200, 8, 0.002)])
def test_four_moments_are_near_enough_where_they_are_used(n, k, tolerance):
    """Ratio to the exact tail within two standard deviations; used only for more than 1500 rows."""
    sites, W = twins.nearest(n, k)
    law = Law(forms.graph(W, "g"), Basis.of(np.column_stack([np.ones(n), sites])))
    for z in (-1.5, -0.7, 0.5, 1.0, 2.0):
        t = law.mean + z * np.sqrt(law.variance)
        points = surrogate(law.basis, law.form, None, z > 0)
        approx = both(points, t, law.traces[:2], lambda p=points: (p.low, p.high))
        exact = law.tails(t)
        assert np.exp(approx.log_lower) == pytest.approx(exact.lower[0], rel=tolerance)
        assert np.exp(approx.log_upper) == pytest.approx(exact.upper[0], rel=tolerance)


def test_three_points_have_the_four_power_sums_and_the_end():
    value = np.random.default_rng(0).gamma(2.0, size=50)
    tau = np.array([np.sum(value**r) for r in range(5)])
    for end in (value.max() + 0.1, -1.0):
        points = radau(tau, end)
        assert np.allclose([points.counts @ points.values**r for r in range(5)], tau, rtol=1e-10)
        assert np.min(np.abs(points.values - end)) < 1e-9
        assert np.all(points.counts > 0)
    two = radau(np.array([5.0, 3.0, 3.0, 3.0, 3.0]), 1.0)
    assert np.allclose(np.sort(two.values), [0.0, 1.0], atol=1e-9)
    assert radau(np.array([4.0, 8.0, 16.0, 32.0, 64.0]), 2.0).values.tolist() == [2.0]


def test_a_large_graph_says_that_it_is_approximate():
    n = 21_000
    sites, W = twins.nearest(n, 4)
    law = Law(forms.graph(W, "large"), Basis.of(np.column_stack([np.ones(n), sites])))
    got = law.tails(law.mean + np.sqrt(law.variance) * np.array([-1.96, 0.0, 1.96]))
    assert got.method.startswith("approximate")
    # At this size the law is nearly normal; skewness is a few hundredths.
    assert np.allclose(got.lower, stats.norm.cdf([-1.96, 0.0, 1.96]), atol=0.01)


# ---- several forms ------------------------------------------------------------------------


@pytest.mark.parametrize("swept", [False, True])
def test_cross_traces_match_dense_products(swept):
    part, basis, root = panel(3, 6, 30)
    n = part.n
    cells = Partition.of("coarse", part.codes // 4) if swept else None
    sites = Partition.of("site", np.random.default_rng(0).integers(0, 12, n))
    some = [
        forms.differences(*twins.within(part.codes), n, "d"),
        forms.lagged(*twins.step(n, 2), n, "l"),
        forms.cells(part),
        forms.cells(part, root),
        forms.cells_graph(sites, twins.nearest(12, 3)[1], "s"),
    ]
    N = twins.residual_space(basis, cells)
    dense = [N.T @ f.S.toarray() @ N for f in some]
    expected = np.array([[np.sum(a * b) for b in dense] for a in dense])
    got = ratio.cross_traces(some, basis, cells)
    assert np.allclose(got, expected, rtol=1e-9, atol=1e-9 * np.diag(expected).max())
    assert np.array_equal(got, got.T)
    m = N.shape[1]
    mean = np.array([np.trace(d) / m for d in dense])
    assert np.allclose(ratio.means(some, basis, cells), mean, rtol=1e-9)
    cov = 2 * (expected - m * np.outer(mean, mean)) / (m * (m + 2))
    assert np.allclose(ratio.covariances(some, basis, cells), cov, rtol=1e-6, atol=1e-9 * np.diag(cov).max())
    assert ratio.covariance(some[0], some[1], basis, cells) == pytest.approx(cov[0, 1], rel=1e-6)
    assert Law(some[0], basis, cells).variance == pytest.approx(cov[0, 0], rel=1e-9)


def test_cross_traces_without_room_to_keep_every_product():
    part, basis, _ = panel(3, 6, 30)
    some = [forms.lagged(*twins.step(part.n, k), part.n, f"l{k}") for k in (1, 2, 3)]
    kept = ratio.cross_traces(some, basis)
    assert np.allclose(kept, ratio.cross_traces(some, basis, keep=0), rtol=1e-13)


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


# ---- the parts ----------------------------------------------------------------------------


def test_pivots_keep_the_branch_that_the_determinant_loses():
    """(1 + 3i)I of order 4: the logarithms add to 4·ln(1 + 3i), whose imaginary part is beyond π."""
    S = np.array([np.eye(4) * (1 + 3j)])
    assert log_pivots(S)[0] == pytest.approx(4 * np.log(1 + 3j))
    assert abs(np.log(np.linalg.det(S[0])) - log_pivots(S)[0]) > 6.0


def test_routes_agree_on_one_form():
    """The same path form by eigenvalues, by known eigenvectors and by factorizations."""
    n = 400
    basis = twins.trend_design(n, 5, 9)
    form = forms.differences(*twins.step(n), n, "path")
    law = Law(form, basis)
    sparse_route = routes.factored(basis, form)
    for t in (1.2, 1.95, 2.4):
        a = both(routes.eigen(basis, form, None), t, law.traces[:2], lambda: law.range)
        b = both(routes.spectrum(basis, form, None), t, law.traces[:2], lambda: law.range)
        c = both(sparse_route, t, law.traces[:2], lambda: law.range)
        assert a.log_lower == pytest.approx(b.log_lower, rel=1e-11)
        assert a.log_upper == pytest.approx(c.log_upper, rel=1e-9)


def test_a_law_is_worked_out_once_and_travels_with_its_basis():
    n = 300
    basis = twins.trend_design(n, 3)
    form = forms.differences(*twins.step(n), n, "kept")
    before = Law(form, basis).tails(1.8)
    copy, form_copy = pickle.loads(pickle.dumps((basis, form)))
    assert routes.spectrum(basis, form, None) is routes.spectrum(basis, form, None)
    assert np.array_equal(Law(form_copy, copy).tails(1.8).lower, before.lower)


def test_fractional_multiplicities_are_allowed():
    """Half counts: Beta(r/2, s/2) also for odd halves of degrees of freedom."""
    got = both(Eigen(np.array([0.0, 1.0]), np.array([7.4, 2.6])), 0.6, (2.6, 2.6), lambda: (0.0, 1.0))
    assert np.exp(got.log_upper) == pytest.approx(stats.beta.sf(0.6, 1.3, 3.7), rel=1e-10)
