"""Many values at once, approximations, several forms together, and the parts of the engine."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from scipy import stats
from tests.maths import twins

from clingstone.maths import forms, ratio, routes
from clingstone.maths.basis import Basis
from clingstone.maths.contour import log_pivots
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.maths.spectra import Eigen
from clingstone.maths.surrogate import radau, surrogate
from clingstone.maths.tails import both

LAWS = twins.laws()

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
    part, basis, root = twins.panel(3, 6, 30)
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
    part, basis, _ = twins.panel(3, 6, 30)
    some = [forms.lagged(*twins.step(part.n, k), part.n, f"l{k}") for k in (1, 2, 3)]
    kept = ratio.cross_traces(some, basis)
    assert np.allclose(kept, ratio.cross_traces(some, basis, keep=0), rtol=1e-13)


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
