"""Random slopes as error models: dense twin, draws, boundaries, refusals, invariances."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from clingstone.case import Case
from clingstone.covariance import slopedeach
from clingstone.covariance.algebras import Dense
from clingstone.covariance.components import slope_key
from clingstone.covariance.fits import Fits
from clingstone.covariance.sloped import Sloped
from clingstone.covariance.slopedeach import SlopedEach
from clingstone.design.response import Response
from clingstone.ledger.region import loglik, region
from clingstone.needs import Limits, NotSupported
from clingstone.run import Run
from tests.evidence import factories as make

G, EACH = 15, 7
NODE = {"group:g", "slope:g:x1"}


def table(seed=5, slope=0.6, tie=0.3):
    rng = np.random.default_rng(seed)
    g = np.repeat(np.arange(G), rng.integers(3, EACH + 4, G))
    x = rng.normal(size=len(g)) + 4
    z = rng.normal(size=len(g))
    b0 = rng.normal(size=G)
    b1 = slope * (tie * b0 + np.sqrt(1 - tie**2) * rng.normal(size=G))
    y = 1 + 0.5 * x + b0[g] + b1[g] * (x - 4) + rng.normal(size=len(g))
    return g, x, z, y


def fitted(weights=None, groups=None, **world):
    g, x, z, y = table(**world)
    design = make.design(x, z, groups=groups or {"g": g}, weights=weights)
    return make.fits(design, y)


NODES = [
    {"group:g", "slope:g:x1"},
    {"group:g", "slope-apart:g:x1"},
    {"group:g", "slope:g:x1", "slope:g:x2"},
    {"group:g", "slope:g:x1", "slope-apart:g:x2"},
    {"group:o", "group:g", "slope:g:x1"},
    {"group:o", "group:g", "slope:o:x1"},
    {"group:o", "group:g", "slope:o:x2", "slope:g:x1"},
]


def nested():
    g, *_ = table()
    return {"o": g // 3, "g": g}


@pytest.mark.parametrize("node", NODES, ids=lambda n: "+".join(sorted(n)))
@pytest.mark.parametrize("weighted", [False, True])
def test_every_set_equals_the_dense_covariance(node, weighted):
    n = len(table()[0])
    weights = np.random.default_rng(0).uniform(0.5, 2, n) if weighted else None
    f = fitted(weights, nested(), seed=5)
    algebra = f.algebra(node)
    assert isinstance(algebra, Sloped)
    theta = np.array([0.3 * (i % 3) - 0.2 for i in range(len(algebra.parameters))])
    twin = Dense(f.design, algebra.pieces)
    ours, plain = algebra.gram(theta, f.response), twin.gram(theta, f.response)
    np.testing.assert_allclose(ours.QQ, plain.QQ, atol=1e-11)
    np.testing.assert_allclose(ours.QE, plain.QE, atol=1e-10)
    np.testing.assert_allclose(ours.EE, plain.EE, rtol=1e-11)
    assert ours.logdet == pytest.approx(plain.logdet, abs=1e-10)
    W = algebra.whiten(theta, np.eye(n))
    np.testing.assert_allclose(W.T @ W, np.linalg.inv(algebra.dense(theta)), atol=1e-10)
    parts = algebra.variances(theta[:, None], np.ones(1))
    total = sum(parts[key][0] * algebra.spread(key, theta) for key in parts)
    np.testing.assert_allclose(total, f.design.Q.T @ algebra.dense(theta) @ f.design.Q, atol=1e-10)


@pytest.mark.parametrize("node", NODES, ids=lambda n: "+".join(sorted(n)))
def test_the_optimum_is_one(node):
    f = fitted(groups=nested(), seed=5)
    model, algebra = f[node], f.algebra(node)
    assert model.converged.all()
    best = float(model.loglik[0])
    for i in np.flatnonzero(~model.at_bound[:, 0]):
        for step in (0.05, -0.05):
            theta = model.theta[:, 0].copy()
            theta[i] += step
            assert loglik(algebra, theta, f.response)[0] < best + 1e-9


@pytest.mark.parametrize("node", NODES, ids=lambda n: "+".join(sorted(n)))
def test_a_gram_of_a_column_is_that_of_its_algebra(node):
    f = fitted(groups=nested())
    algebra = f.algebra(node)
    rng = np.random.default_rng(6)
    Y = rng.normal(size=(f.design.n, 3))
    many = SlopedEach(algebra, Response.of(f.design, Y))
    theta = np.stack([[rng.uniform(p.scan[0], p.scan[-1]) for p in algebra.parameters] for _ in range(3)], 1)
    found = many.grams(theta, np.arange(3))
    for b in range(3):
        one = algebra.gram(theta[:, b], many.response.column(b))
        assert found.QQ[b] == pytest.approx(one.QQ, rel=1e-9, abs=1e-10)
        assert found.QE[b] == pytest.approx(one.QE[:, 0], rel=1e-9, abs=1e-8)
        assert (found.EE[b], found.logdet[b]) == pytest.approx((one.EE[0], one.logdet), rel=1e-10)


def test_every_column_has_the_estimate_of_its_own_search(monkeypatch):
    f = fitted()
    algebra = f.algebra(NODE)
    part = f.design.group.finest
    rng, B = np.random.default_rng(7), 12
    between = np.linspace(0, 1.5, B) * rng.normal(size=(G, B))[part.codes]
    apart = np.linspace(1.2, 0, B) * rng.normal(size=(G, B))[part.codes] * table()[1][:, None]
    Y = rng.normal(size=(f.design.n, B)) + between + apart
    many = Fits(Response.of(f.design, Y), Run())
    found = SlopedEach(algebra, many.response).minima()
    inner = 0
    for b in range(B):
        one = Fits(many.response.column(b), Run())[NODE]
        assert found.value[b] <= -2 * one.loglik[0] + 1e-6
        if not (found.at_bound[:, b].any() or one.at_bound.any()):
            assert found.theta[:, b] == pytest.approx(one.theta[:, 0], abs=1e-6)
            inner += 1
    assert inner >= 6
    monkeypatch.setattr(slopedeach, "BLOCK", 100)  # a column or two at a time
    again = SlopedEach(algebra, many.response).minima()
    assert again.theta == pytest.approx(found.theta, rel=1e-10, abs=1e-10)


def test_draws_have_the_model_covariance():
    f = fitted()
    algebra, model = f.algebra(NODE), f[NODE]
    theta, s2 = model.theta[:, 0], float(model.sigma2[0])
    Y = algebra.draw(theta, s2, np.random.default_rng(1), 20_000)
    V = s2 * algebra.dense(theta)
    # Largest standard error of a covariance of 20,000 draws: √(2/20,000) of the largest variance.
    np.testing.assert_allclose(Y @ Y.T / 20_000, V, atol=5 * V.max() * 0.01)


def test_recovery_of_what_was_put_in():
    f = fitted(seed=5)
    truth = f.algebra(NODE)
    bundle = truth.bundle("g")
    L = np.array([[1.0, 0.0], [0.4, 0.6]])
    theta = bundle.theta(L)
    Y = truth.draw(theta, 2.0, np.random.default_rng(3), 60)
    e = f.design.basis.project(Y)
    many = Fits(Response(f.design, f.design.Q.T @ Y, e, np.sum(e**2, axis=0)), Run())[NODE]
    want = 2.0 * L @ L.T
    spread = np.std(many.variances["slope:g:x1"]) / np.sqrt(60)
    assert np.mean(many.variances["slope:g:x1"]) == pytest.approx(want[1, 1], abs=4 * spread)
    spread = np.std(many.variances["group:g"]) / np.sqrt(60)
    assert np.mean(many.variances["group:g"]) == pytest.approx(want[0, 0], abs=4 * spread)


# ---- boundaries -------------------------------------------------------------------------------------


def test_no_variation_of_slopes_is_named_and_equals_the_fit_without():
    rng = np.random.default_rng(11)
    g = np.repeat(np.arange(12), 6)
    x = rng.normal(size=72)
    # Residual slopes within groups are taken out, so that they vary less than noise would make them.
    noise = rng.normal(size=72)
    for k in range(12):
        own = g == k
        u = x[own] - x[own].mean()
        noise[own] -= u * (u @ noise[own]) / (u @ u)
    y = rng.normal(size=12)[g] + x + noise
    f = make.fits(make.design(x, groups={"g": g}), y)
    apart, without = f[{"group:g", "slope-apart:g:x1"}], f[{"group:g"}]
    assert apart.variances["slope-apart:g:x1"][0] == 0
    assert apart.at_bound[:, 0].tolist() == [False, True]
    assert apart.loglik[0] == pytest.approx(without.loglik[0], abs=1e-6)
    # What is free to go with the intercept may still gain a little by doing so, and then lies at ±1.
    tied = f[NODE]
    assert tied.at_bound[1:, 0].any()
    assert 0 <= tied.loglik[0] - without.loglik[0] < 3


def test_slopes_tied_to_intercepts_lie_at_the_end_of_the_correlation():
    rng = np.random.default_rng(2)
    g = np.repeat(np.arange(14), 6)
    x = np.tile(np.arange(6.0), 14)
    b = rng.normal(size=14)
    y = 3 * b[g] + 1.5 * b[g] * (x - 2.5) + 0.3 * rng.normal(size=84)
    model = make.fits(make.design(x, groups={"g": g}), y)[NODE]
    assert model.at_bound[:, 0].tolist() == [False, False, True]
    assert model.shape["slope:g:x1.correlation"][0] == pytest.approx(1.0, abs=1e-5)


# ---- invariances ------------------------------------------------------------------------------------


def test_units_and_origins_change_only_what_they_must():
    g, x, _, y = table()
    here = make.fits(make.design(x, groups={"g": g}), y)
    there = make.fits(make.design(-100 * x + 7, groups={"g": g}), 3 * y + 2)
    one, other = here[NODE], there[NODE]
    for key in one.variances:
        assert other.variances[key][0] == pytest.approx(9 * one.variances[key][0], rel=1e-4)
    own = here.algebra(NODE).bundle("g").covariance(one.theta[:, 0], float(one.sigma2[0]))
    new = there.algebra(NODE).bundle("g").covariance(other.theta[:, 0], float(other.sigma2[0]))
    T = np.array([[1.0, 0.07], [0.0, -0.01]])  # a + bx of the old x in the new one
    np.testing.assert_allclose(new, 9 * T @ own @ T.T, rtol=2e-4)


def test_shuffled_rows_change_nothing():
    g, x, z, y = table()
    order = np.random.default_rng(0).permutation(len(y))
    one = make.fits(make.design(x, z, groups={"g": g}), y)[NODE]
    other = make.fits(make.design(x[order], z[order], groups={"g": g[order]}), y[order])[NODE]
    np.testing.assert_allclose(other.theta, one.theta, atol=1e-4)
    assert other.loglik[0] == pytest.approx(one.loglik[0], abs=1e-7)


def test_likelihood_region_of_the_variance_of_slopes():
    f = fitted()
    found = region(f, frozenset(NODE), 0.95)
    low, estimate, high = found.interval(found.model.variances["slope:g:x1"])
    assert 0 <= low < estimate < high
    assert estimate == pytest.approx(float(f[NODE].variances["slope:g:x1"][0]))


# ---- what is asked for, what is refused --------------------------------------------------------------


def test_slopes_are_no_part_of_the_joint_model():
    f = fitted()
    assert f.full_node == {"group:g"}
    assert f[NODE].node == ("group:g", "slope:g:x1")


def refusal(f, key, node=()):
    with pytest.raises(NotSupported) as stop:
        f[{key, *node}]
    return str(stop.value)


def test_refusals_say_what_was_found():
    g, x, _, y = table()
    f = make.fits(make.design(x, g.astype(float), groups={"g": g}), y)
    assert "need an intercept" in refusal(f, "slope:g:x1")
    assert "does not vary within any g" in refusal(f, "slope:g:x2", {"group:g"})
    assert "no component 'slope:g:weight'" in refusal(f, "slope:g:weight")
    pairs = make.fits(make.design(x[:40], groups={"g": np.repeat(np.arange(20), 2)}), y[:40])
    assert "0 of 20 groups of g have three rows" in refusal(pairs, "slope:g:x1", {"group:g"})


def test_slopes_beside_crossed_levels_are_dense_when_small_and_refused_when_large():
    g, x, _, y = table()
    h = np.random.default_rng(1).integers(0, 6, len(y))
    f = make.fits(make.design(x, groups={"g": g, "h": h}), y)
    node = {"group:g", "group:h", slope_key("g", "x1")}
    assert isinstance(f.algebra(node), Dense)
    small = Fits(f.response, replace(f.run, limits=Limits(dense_rows=50)))
    with pytest.raises(NotSupported, match="cut across one another"):
        small[node]


def test_slopes_beside_order_in_time_are_dense_when_small_and_the_refusal_names_what_allows_for_both():
    g, x, _, y = table()
    step = np.array([np.sum(g[:i] == g[i]) for i in range(len(g))])
    frame = {"y": y, "x1": x, "g": g.astype(str), "t": step}
    case = Case.from_formula(pd.DataFrame(frame), "y ~ x1", group="g", time="t", series="g")
    f = Fits(case.response, Run(case.settings))
    node = {"group:g", "serial", slope_key("g", "x1")}
    assert isinstance(f.algebra(node), Dense)
    small = Fits(f.response, replace(f.run, limits=Limits(dense_rows=50)))
    with pytest.raises(NotSupported, match="only up to 50 rows") as stop:
        small[node]
    assert "cluster-robust or mixed-robust" in stop.value.hint
