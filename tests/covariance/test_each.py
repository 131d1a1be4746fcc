"""Many columns at once, each at its own θ̂, against the search column by column and dense formulas."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.each import each
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.maths.curvature import slopes
from clingstone.maths.eachdf import KenwardEach, SlopesEach, fai_cornelius_each, slopes_each
from clingstone.maths.expected import intercepts
from clingstone.maths.groups import expected_information
from clingstone.maths.kenward import Kenward
from clingstone.maths.markov import correlation
from clingstone.maths.reference import fai_cornelius
from remedies.cases import ar1, design, fits

NODES = {
    "intercept": {"group:district/ward"},
    "nested": {"group:district", "group:district/ward"},
    "serial": {"serial"},
    "intercept and serial": {"group:district/ward", "serial"},
    "all": {"group:district", "group:district/ward", "serial"},
}


def world(B: int = 24, gaps: bool = False, weights: bool = False):
    """Wards of unequal size in districts, a series per ward; columns from none to strong dependence."""
    rng = np.random.default_rng(4)
    sizes = rng.integers(4, 10, 24)
    ward = np.repeat(np.arange(24), sizes)
    district = ward // 3
    n = len(ward)
    step = rng.integers(1, 3, n) if gaps else np.ones(n, dtype=int)
    tick = np.concatenate([np.cumsum(step[ward == w]) for w in range(24)])
    X = np.column_stack([np.ones(n), rng.normal(size=n), (ward % 2).astype(float)])
    root = np.sqrt(rng.uniform(0.5, 2, n)) if weights else None
    of = design(X, group=ward, outer=district, tick=tick, series=ward, root=root)
    rho = np.linspace(-0.3, 0.8, B)
    e = np.concatenate([np.column_stack([ar1(s, r, 1, rng)[:, 0] for r in rho]) for s in sizes])
    u = np.linspace(0, 1, B) * rng.normal(size=(24, B))[ward]
    v = np.linspace(1, 0, B) * rng.normal(size=(8, B))[district]
    return of, e + u + v


@pytest.mark.parametrize("name", NODES)
@pytest.mark.parametrize("shape", ["plain", "gaps", "weights"])
def test_every_column_has_the_estimate_of_its_own_search(name, shape):
    of, Y = world(B=10, gaps=shape == "gaps", weights=shape == "weights")
    many = fits(of, Y)
    node = NODES[name]
    found = each(many.algebra(node), many.response).minima()
    assert found.converged.all()
    flat = 0
    for b in range(Y.shape[1]):
        one = Fits(many.response.column(b), many.run)[node]
        # Where the two stop at different places, they do at one value of the criterion.
        assert found.value[b] == pytest.approx(-2 * one.loglik[0], abs=2e-6)
        if np.array_equal(found.at_bound[:, b], one.at_bound[:, 0]):
            free = ~found.at_bound[:, b]
            assert found.theta[free, b] == pytest.approx(one.theta[free, 0], abs=3e-4)
        else:
            flat += 1
    assert flat <= 1


def test_a_gram_of_a_column_is_that_of_its_algebra():
    of, Y = world(B=5, gaps=True)
    many = fits(of, Y)
    for node in NODES.values():
        algebra = many.algebra(node)
        theta = np.array(
            [[p.starts[b % len(p.starts)] + 0.1 * b for b in range(5)] for p in algebra.parameters]
        )
        got = each(algebra, many.response).grams(theta, np.arange(5))
        delta, c, logdet = got.reduced()
        for b in range(5):
            want = algebra.gram(theta[:, b], many.response.column(b))
            assert got.QQ[b] == pytest.approx(want.QQ, rel=1e-10, abs=1e-10)
            assert got.QE[b] == pytest.approx(want.QE[:, 0], rel=1e-9, abs=1e-10)
            assert (got.EE[b], got.logdet[b]) == pytest.approx((want.EE[0], want.logdet), rel=1e-10)
            assert delta[b] == pytest.approx(np.linalg.solve(want.QQ, want.QE[:, 0]), abs=1e-9)
            assert logdet[b] == pytest.approx(np.linalg.slogdet(want.QQ)[1])
            assert c[b] == pytest.approx(want.EE[0] - want.QE[:, 0] @ delta[b])


def test_blocks_of_columns_change_nothing(monkeypatch):
    of, Y = world(B=9)
    many = fits(of, Y)
    reader = each(many.algebra(NODES["all"]), many.response)
    theta = np.array([[-1.0], [-0.5], [0.3]]) + 0.05 * np.arange(9)
    whole = reader.grams(theta, np.arange(9))
    monkeypatch.setattr("clingstone.covariance.each.BLOCK", 1000)
    cut = reader.grams(theta, np.arange(9))
    for name in ("QQ", "QE", "EE", "logdet"):
        assert getattr(cut, name) == pytest.approx(getattr(whole, name), rel=1e-12, abs=1e-12)


def test_places_beside_an_order_in_time_are_left_to_the_search_column_by_column():
    rng = np.random.default_rng(0)
    site, tick = np.repeat(np.arange(30), 8), np.tile(np.arange(8), 30)
    of = design(np.ones((240, 1)), xy=rng.uniform(size=(30, 2))[site], series=site, tick=tick)
    many = fits(of, rng.normal(size=(240, 3)))
    assert each(many.algebra({"spatial"}), many.response) is not None
    assert {"spatial", "serial"} <= many.full_node
    assert each(many.algebra(many.full_node), many.response) is None


def test_correlations_of_every_column_are_those_of_one():
    rho, length = np.array([-0.7, 0.0, 1e-9, 0.4, 0.999999]), np.array([1.0, 2.0, 3.0])
    phi, rest = correlation(rho, length)
    for k, r in enumerate(rho):
        one = correlation(float(r), length)
        assert phi[k] == pytest.approx(one[0], rel=1e-12)
        assert rest[k] == pytest.approx(one[1], rel=1e-12)


def test_slopes_are_those_of_one_column():
    of, Y = world(B=3)
    many = fits(of, Y)
    algebra = many.algebra(NODES["all"])
    reader = each(algebra, many.response)
    theta = np.array([[-1.0, -0.5, -2.0], [-0.2, 0.1, -1.0], [0.3, 0.1, 0.6]])
    got = slopes_each(lambda at: reader.grams(at, np.arange(3)), theta, [0, 1, 2], of.m)
    L = np.eye(3)[:, 1:]
    for b in range(3):
        column = many.response.column(b)
        one = slopes(lambda at, y=column: algebra.gram(at, y), theta[:, b], [0, 1, 2], of.m)
        assert got.phi[b] == pytest.approx(one.phi, rel=1e-9, abs=1e-12)
        assert got.information[b] == pytest.approx(one.information, rel=1e-5, abs=1e-5)
        assert bool(got.sound[b]) == one.sound
        if one.sound:
            assert got.df(np.eye(3))[b] == pytest.approx([one.df(w) for w in np.eye(3)], rel=1e-5)
            assert got.joint(L)[1][b] == pytest.approx(one.joint(L), rel=1e-5)


def test_an_information_without_an_inverse_is_named():
    flat = np.array([[[5.0, 0.0], [0.0, 0.0]], [[5.0, 0.1], [0.1, 2.0]]])
    found = SlopesEach(np.repeat(np.eye(1)[None], 2, axis=0), np.zeros((2, 1, 1, 1)), flat, 10.0)
    assert found.sound.tolist() == [False, True]


def test_kenward_and_roger_of_every_column_is_that_of_one():
    rng = np.random.default_rng(7)
    c = np.array([3.0, 3.0, 4.0, 7.0, 7.0, 2.0])
    sums = 0.1 * rng.normal(size=(6, 3)) * c[:, None]
    size, code, count = np.unique(c, return_inverse=True, return_counts=True)
    products = np.stack([sums[code == d].T @ sums[code == d] for d in range(len(size))])
    s2, tau2 = np.array([1.0, 2.0, 0.7]), np.array([0.0, 0.3, 4.0])
    got = KenwardEach.of(intercepts(26, size, count.astype(float), products, s2, tau2))
    L = np.eye(3)[:, :2]
    for b in range(3):
        seen = expected_information(26, c, sums, float(s2[b]), float(tau2[b]))
        one = Kenward.of(seen.Phi, seen.P, seen.Q, seen.information)
        assert got.adjusted[b] == pytest.approx(one.adjusted, rel=1e-10)
        assert got.df(np.eye(3))[b] == pytest.approx([one.df(w) for w in np.eye(3)], rel=1e-9)
        scale, df2 = got.joint(L)
        assert (scale[b], df2[b]) == pytest.approx(one.joint(L), rel=1e-8)


def test_df_of_joint_tests_are_combined_column_by_column():
    df = np.array([[5.0, 5.0], [4.0, 9.0], [1.5, 30.0]])
    assert fai_cornelius_each(df) == pytest.approx([fai_cornelius(row) for row in df])


def test_the_unit_of_y_changes_no_estimate():
    of, Y = world(B=6)
    one, other = fits(of, Y), fits(of, 1e3 * Y)
    for node in NODES.values():
        a = each(one.algebra(node), one.response).minima()
        b = each(other.algebra(node), other.response).minima()
        assert b.theta == pytest.approx(a.theta, abs=1e-5)
        assert np.array_equal(a.at_bound, b.at_bound)


def test_a_response_of_one_column_is_served_too():
    of, Y = world(B=4)
    whole, alone = fits(of, Y), fits(of, Y[:, 2])
    a = each(whole.algebra(NODES["serial"]), whole.response).minima()
    b = each(alone.algebra(NODES["serial"]), alone.response).minima()
    assert isinstance(alone.response, Response)
    assert b.theta[0, 0] == pytest.approx(a.theta[0, 2], abs=1e-6)
