"""The lattice of fits: what is carried, what is refused, and whether the estimates can be trusted."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from clingstone.covariance.fits import Fits
from clingstone.design.derived import absorb, extend, sweep
from clingstone.design.response import Response
from clingstone.needs import NotSupported
from clingstone.run import Run, Settings
from tests.covariance.worlds import fits, printed


def ar(rng: np.random.Generator, series: int, length: int, rho: float, B: int = 1) -> np.ndarray:
    """(series·length, B) stationary AR(1) of unit variance."""
    e = np.empty((series, length, B))
    e[:, 0] = rng.standard_normal((series, B))
    for t in range(1, length):
        e[:, t] = rho * e[:, t - 1] + np.sqrt(1 - rho**2) * rng.standard_normal((series, B))
    return e.reshape(-1, B)


def panel(seed: int = 0, tau: float = 0.8, rho: float = 0.5) -> Fits:
    """20 clinics of 3 patients with 8 visits: groups, order, a trend and a group-level predictor."""
    rng = np.random.default_rng(seed)
    patient = np.repeat(np.arange(60), 8)
    clinic, visit = patient // 3, np.tile(np.arange(8.0), 60)
    y = 10 + 0.1 * visit + tau * rng.standard_normal(20)[clinic] + ar(rng, 60, 8, rho)[:, 0]
    dose = rng.standard_normal(20)[clinic]
    return fits(y, dose, visit, groups={"clinic": clinic}, series=patient, time=visit)


# ---- what is carried --------------------------------------------------------------------------


def test_components_in_building_order() -> None:
    f = panel()
    assert list(f.components) == ["group:clinic", "serial"]
    assert f.components["serial"].label == "t within series"
    assert f.full_node == {"group:clinic", "serial"}
    assert f.full.node == ("group:clinic", "serial")
    assert f.without("serial") is f[{"group:clinic"}]
    assert not f.refused
    assert f.depth == "exact"


def test_a_node_is_fitted_once() -> None:
    f = panel()
    assert f[{"serial"}] is f[("serial",)]
    assert f.algebra({"serial"}) is f.algebra({"serial"})


def test_independence() -> None:
    f = panel()
    model = f[()]
    assert model.node == ()
    assert model.sigma2[0] == pytest.approx(float(f.response.ss[0]) / f.design.m)
    assert dict(model.shares()) == {"row": pytest.approx(np.ones(1))}


Y = np.random.default_rng(1).standard_normal(60)
TENS = np.arange(60) // 6
SITE = np.random.default_rng(2).uniform(size=(60, 2))


@pytest.mark.parametrize(
    ("key", "case", "reason"),
    [
        ("group:g", {"groups": {"g": np.arange(60) // 15}}, "4 groups; a variance between groups needs 5"),
        ("group:g", {"groups": {"g": np.arange(60)}}, "every group has a single row"),
        (
            "group:h",
            {"groups": {"g": TENS, "h": 9 - TENS}},
            "divide the rows alike",
        ),
        (
            "serial",
            {"time": np.arange(60) % 10, "series": np.arange(60) // 10},
            "longest series has 10 times",
        ),
        ("serial", {"time": np.arange(60) // 6}, "longest series has 10 times; series of 5 times or more: 1"),
        ("spatial", {"xy": SITE[np.arange(60) % 12]}, "12 distinct places"),
    ],
)
def test_refusals_say_what_was_found(key: str, case: dict[str, object], reason: str) -> None:
    f = fits(Y, **case)  # type: ignore[arg-type]
    assert key in f.refused
    assert reason in f.refused[key].reason
    assert f.refused[key].hint
    with pytest.raises(NotSupported, match=f.refused[key].reason[:20]):
        f[{key}]
    assert key not in f.full_node


def test_an_undeclared_structure() -> None:
    with pytest.raises(NotSupported, match="'spatial' was declared") as stop:
        fits(Y)[{"spatial"}]
    assert "coords=" in stop.value.hint


def test_groups_already_in_the_model() -> None:
    g = np.arange(60) // 10
    dummies = (g[:, None] == np.arange(1, 6)).astype(float)
    f = fits(Y, *dummies.T, groups={"g": g})
    assert "already has its own level for every g" in f.refused["group:g"].reason


def test_swept_groups() -> None:
    f = panel()
    part = f.design.partitions["clinic"]
    within, _ = absorb(f.design, part)
    swept = Fits(sweep(f.response, within, part), Run())
    assert "swept out" in swept.refused["group:clinic"].reason
    assert swept[()].sigma2[0] > 0


def test_a_perfect_fit_is_refused() -> None:
    f = fits(3 + 2 * Y, Y, groups={"g": np.arange(60) // 6})
    with pytest.raises(NotSupported, match="fits every row exactly"):
        f[{"group:g"}]


def test_places_that_repeat_get_a_part_of_their_own() -> None:
    site = np.arange(60) % 25
    assert list(fits(Y, xy=SITE[site]).components) == ["group:site", "spatial"]
    # … unless they are a declared level already.
    f = fits(Y, groups={"well": site}, xy=SITE[site])
    assert list(f.components) == ["group:well", "spatial"]
    assert f.full.node == ("group:well", "spatial")


# ---- estimates --------------------------------------------------------------------------------


def test_no_dependence_is_a_boundary_not_an_error() -> None:
    # Groups of alternating signs: between groups there is less than chance would give.
    y = np.tile([1.0, -1.0], 30) + 1e-3 * np.sin(np.arange(60))
    f = fits(y, groups={"g": np.arange(60) // 10})
    model = f[{"group:g"}]
    assert model.at_bound[0, 0]
    assert model.converged[0]
    assert model.variances["group:g"][0] == 0.0
    assert model.loglik[0] == pytest.approx(f[()].loglik[0], abs=1e-6)


def test_a_spatial_variance_of_zero_has_no_range() -> None:
    # Checkerboard signs: neighbours differ, so the variance of a smooth field is estimated at zero.
    grid = np.stack(np.meshgrid(np.arange(8.0), np.arange(8.0)), axis=-1).reshape(-1, 2)
    y = (-1.0) ** grid.sum(axis=1) + 0.01 * np.random.default_rng(0).standard_normal(64)
    model = fits(y, xy=grid)[{"spatial"}]
    assert model.variances["spatial"][0] == 0.0
    assert model.at_bound[:, 0].all()
    assert np.isnan(model.shape["spatial.range"][0])


def test_recovery_of_intercept_and_order() -> None:
    """200 panels drawn from known parameters: mean estimates within 4 Monte-Carlo standard errors of
    the truth for σ² parameters that REML estimates without bias to first order."""
    f = panel()
    algebra = f.algebra({"group:clinic", "serial"})
    lam, rho, sigma2 = 0.6, 0.4, 2.0
    theta = np.array([np.log(lam), np.arctanh(rho)])
    Y = algebra.draw(theta, sigma2, np.random.default_rng(7), 200)
    model = Fits(Response.of(f.design, Y), Run())[{"group:clinic", "serial"}]
    for found, truth in (
        (model.variances["group:clinic"], lam * sigma2),
        (model.sigma2, sigma2),
        (model.shape["serial.rho"], rho),
    ):
        error = np.std(found) / np.sqrt(200)
        # ρ̂ has a bias of order 1/n (n = 480): allowed for by 0.01.
        assert np.mean(found) == pytest.approx(truth, abs=4 * error + 0.01)


def test_recovery_of_a_spatial_share() -> None:
    rng = np.random.default_rng(3)
    f = fits(rng.standard_normal(120), rng.standard_normal(120), xy=rng.uniform(size=(120, 2)))
    algebra = f.algebra({"spatial"})
    theta = np.array([np.log(0.15), np.log(3.0)])
    Y = algebra.draw(theta, 1.0, np.random.default_rng(8), 100)
    share = Fits(Response.of(f.design, Y), Run())[{"spatial"}].shares()["spatial"]
    assert np.median(share) == pytest.approx(0.75, abs=4 * 1.25 * np.std(share) / 10)


@pytest.mark.parametrize("node", [{"group:clinic"}, {"serial"}, {"group:clinic", "serial"}])
def test_fast_equals_exact(node: set[str]) -> None:
    again = panel(1).redraw(node, 12, "check")
    assert again.depth == "fast"
    fast = again[node]
    for b in range(12):
        exact = Fits(again.response.column(b), again.run)[node]
        assert fast.loglik[b] == pytest.approx(exact.loglik[0], abs=1e-4)
        for key, share in exact.shares().items():
            assert fast.shares()[key][b] == pytest.approx(share[0], abs=2e-4)
        assert fast.sigma2[b] == pytest.approx(exact.sigma2[0], rel=1e-3)


def test_three_parameters_are_searched_column_by_column() -> None:
    rng = np.random.default_rng(4)
    ward = np.repeat(np.arange(24), 6)
    y = rng.standard_normal(8)[ward // 3] + rng.standard_normal(24)[ward] + ar(rng, 24, 6, 0.3)[:, 0]
    f = fits(y, groups={"h": ward // 3, "h/w": ward}, series=ward, time=np.tile(np.arange(6), 24))
    node = f.full_node
    assert len(f.algebra(node).parameters) == 3
    again = f.redraw(node, 1000, "check")
    assert again.response.B == 200  # said in the docstring
    few = Fits(Response.of(f.design, again.response.residual[:, :4]), f.run)
    model = few[node]
    assert model.converged.all()
    for b in range(4):
        alone = Fits(few.response.column(b), f.run)[node]
        assert model.loglik[b] == pytest.approx(alone.loglik[0], abs=1e-6)


# ---- invariances ------------------------------------------------------------------------------


@settings(max_examples=10)
@given(seed=st.integers(0, 10**6))
def test_row_order_changes_nothing(seed: int) -> None:
    rng = np.random.default_rng(5)
    g, x = rng.integers(0, 9, 80), rng.standard_normal(80)
    xy = rng.uniform(size=(30, 2))[rng.integers(0, 30, 80)]
    y = rng.standard_normal(9)[g] + x + rng.standard_normal(80)
    order = np.random.default_rng(seed).permutation(80)
    one = fits(y, x, groups={"g": g}, xy=xy)
    other = fits(y[order], x[order], groups={"g": g[order]}, xy=xy[order])
    for node in ({"group:g"}, {"spatial"}):
        assert other[node].loglik[0] == pytest.approx(one[node].loglik[0], abs=1e-6)
        assert other[node].sigma2[0] == pytest.approx(one[node].sigma2[0], rel=1e-4)


@settings(max_examples=10)
@given(scale=st.sampled_from([1e-6, 0.1, 30.0, 1e7]), shift=st.sampled_from([0.0, -1e3, 1e5]))
def test_scale_and_shift_of_y(scale: float, shift: float) -> None:
    f = panel(2)
    y = f.design.Q @ f.response.coef + f.response.residual
    moved = Fits(Response.of(f.design, scale * (y + shift)), f.run)
    for node in ({"group:clinic"}, {"serial"}, {"group:clinic", "serial"}):
        a, b = f[node], moved[node]
        # Density on the new scale: ln scale per residual degree of freedom.
        assert b.loglik[0] == pytest.approx(a.loglik[0] - f.design.m * np.log(scale), rel=1e-8)
        assert b.sigma2[0] == pytest.approx(scale**2 * a.sigma2[0], rel=1e-4)
        for key, share in a.shares().items():
            assert b.shares()[key][0] == pytest.approx(share[0], abs=1e-5)


def test_unit_of_distance() -> None:
    rng = np.random.default_rng(6)
    xy = rng.uniform(size=(60, 2))
    D = np.linalg.norm(xy[:, None] - xy, axis=2)
    y = np.linalg.cholesky(np.exp(-D / 0.3) + 0.2 * np.eye(60)) @ rng.standard_normal(60)
    metres, km = fits(y, xy=1000 * xy)[{"spatial"}], fits(y, xy=xy)[{"spatial"}]
    assert metres.shape["spatial.range"][0] == pytest.approx(1000 * km.shape["spatial.range"][0], rel=1e-5)
    assert metres.loglik[0] == pytest.approx(km.loglik[0], abs=1e-7)


def test_longitude_origin_changes_nothing() -> None:
    rng = np.random.default_rng(9)
    lonlat = np.column_stack([rng.uniform(170, 190, 40), rng.uniform(-20, 20, 40)])
    y = lonlat[:, 1] / 10 + rng.standard_normal(40)
    wrapped = lonlat.copy()
    wrapped[:, 0] = (wrapped[:, 0] + 180) % 360 - 180
    one, other = (fits(y, xy=c, lonlat=True)[{"spatial"}] for c in (lonlat, wrapped))
    assert one.loglik[0] == pytest.approx(other.loglik[0], abs=1e-7)
    assert one.shape["spatial.range"][0] == pytest.approx(other.shape["spatial.range"][0], rel=1e-4)


@pytest.mark.parametrize("weight", [1e-7, 4.0, 1e7])
def test_equal_weights_only_rescale_the_row_noise(weight: float) -> None:
    rng = np.random.default_rng(10)
    g, xy = np.arange(60) // 6, rng.uniform(size=(60, 2))
    y = rng.standard_normal(10)[g] + rng.standard_normal(60) + np.sin(6 * xy[:, 0])
    plain = fits(y, groups={"g": g}, xy=xy)
    heavy = fits(y, groups={"g": g}, xy=xy, weights=np.full(60, weight))
    # V = τ²ZZ' + σ²Ω⁻¹: with one weight ω throughout, τ² stays and σ² is ω times as large.
    for key in ("group:g", "spatial"):
        one, other = plain[{key}], heavy[{key}]
        assert other.variances[key][0] == pytest.approx(one.variances[key][0], rel=1e-4)
        assert other.variances["row"][0] == pytest.approx(weight * one.variances["row"][0], rel=1e-4)


def test_weights_as_repeated_rows() -> None:
    """A row of weight k stands for the mean of k rows of equal x in one group: τ² and the within-group
    information agree with fitting those rows when their spread about the mean is put back."""
    rng = np.random.default_rng(11)
    g, k = np.repeat(np.arange(12), 5), rng.integers(1, 5, 60)
    x = rng.standard_normal(60)
    mean = rng.standard_normal(12)[g] + rng.standard_normal(60) / np.sqrt(k)
    f = fits(mean, x, groups={"g": g}, weights=k)
    theta = np.array([np.log(0.7)])
    weighted = f.algebra({"group:g"}).gram(theta, f.response)
    rows = np.repeat(np.arange(60), k)
    long = fits(mean[rows], x[rows], groups={"g": g[rows]})
    repeated = long.algebra({"group:g"}).gram(theta, long.response)
    # Up to the basis' sign convention: compare R'QQR, the precision of β.
    a = f.design.basis.R.T @ weighted.QQ @ f.design.basis.R
    b = long.design.basis.R.T @ repeated.QQ @ long.design.basis.R
    assert np.allclose(a, b, rtol=1e-10)
    assert weighted.EE[0] == pytest.approx(repeated.EE[0], rel=1e-10)


# ---- derived fits -----------------------------------------------------------------------------


def test_redraw_is_seeded_by_purpose() -> None:
    f = panel()
    node = {"group:clinic"}
    one, same = f.redraw(node, 5, "a").response, f.redraw(node, 5, "a").response
    other = f.redraw(node, 5, "b").response
    assert np.array_equal(one.residual, same.residual)
    assert not np.allclose(one.residual, other.residual)
    moved = Fits(f.response, replace(f.run, settings=Settings(seed=1))).redraw(node, 5, "a").response
    assert not np.allclose(one.residual, moved.residual)


def test_onto_an_extended_design_is_a_fit_of_the_larger_model() -> None:
    f = panel()
    visit = np.arange(f.design.n) % 8
    larger = extend(f.design, "visit²", visit.astype(float) ** 2)
    there = f.onto(larger)
    y = f.design.Q @ f.response.coef + f.response.residual
    direct = Fits(Response.of(larger, y), f.run)
    assert there.full.loglik[0] == pytest.approx(direct.full.loglik[0], abs=1e-7)
    assert there.design.p == f.design.p + 1


def test_likelihood_rises_with_the_model() -> None:
    f = panel()
    none, group, order, both = (
        printed(f, set(node)) for node in ((), {"group:clinic"}, {"serial"}, f.full_node)
    )
    assert none < group < both
    assert none < order < both


def test_many_places_start_from_some_of_them(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(12)
    xy = rng.uniform(size=(300, 2))
    D = np.linalg.norm(xy[:, None] - xy, axis=2)
    y = np.linalg.cholesky(np.exp(-D / 0.1) + 0.3 * np.eye(300)) @ rng.standard_normal(300)
    level = (np.arange(300) == 7).astype(float)  # a column that most subsets of places do not know
    plain = fits(y, level, xy=xy)[{"spatial"}]
    monkeypatch.setattr("clingstone.covariance.layered.HEAVY_SITES", 100)
    monkeypatch.setattr("clingstone.covariance.fits.START_SITES", 80)
    started = fits(y, level, xy=xy)[{"spatial"}]
    assert "of 1 starts" in started.history[0]
    assert started.converged[0]
    assert started.loglik[0] == pytest.approx(plain.loglik[0], abs=1e-6)
    assert started.theta[:, 0] == pytest.approx(plain.theta[:, 0], abs=1e-3)
