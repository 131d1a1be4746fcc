"""Refits for dependence between places: autoregressive errors, kernels, smooth maps, regions."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from scipy.spatial.distance import cdist, pdist, squareform

import clingstone
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import sandwich
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from clingstone.remedies.components import SpatialComponents
from clingstone.remedies.places import Spread, smoothness
from clingstone.remedies.regions import RegionCluster
from clingstone.remedies.spatial import SpatialError, links_of
from clingstone.remedies.spatialhac import SpatialHac
from clingstone.structure import neighbours
from tests.remedies.cases import design, fits


def mapped(X: Any, xy: Any, **more: Any) -> Design:
    made = design(X, xy=xy, **more)
    assert made.spatial is not None
    return replace(made, neighbours=neighbours.build(made.spatial))


def smooth_world(n: int, seed: int) -> tuple[Array, Array]:
    """Places, and a constant with a predictor that is smooth over them."""
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(n, 2))
    x = np.sin(3 * xy[:, 0]) + xy[:, 1]
    return xy, np.column_stack([np.ones(n), x])


def field(xy: Array, reach: float, B: int, rng: np.random.Generator) -> Array:
    """0.8 of an exponential field, 0.2 of noise."""
    K = 0.8 * np.exp(-squareform(pdist(xy)) / reach) + 0.2 * np.eye(len(xy))
    return np.asarray(np.linalg.cholesky(K) @ rng.standard_normal((len(xy), B)))


# ---- spatial-error -------------------------------------------------------------------------


def test_autoregressive_errors_equal_the_dense_gls() -> None:
    xy, X = smooth_world(60, 1)
    made = mapped(X, xy)
    rng = np.random.default_rng(2)
    links = links_of(made, made.neighbours[0])
    place = np.asarray(made.spatial.part.first)  # type: ignore[union-attr]
    y = np.empty(60)
    y[place] = links.draw(0.6, rng, 1)[:, 0]
    y += X @ [1.0, 2.0]
    run = fits(made, y)
    found = refit(remedy("spatial-error"), "", run)
    lam = float(dict(found.account.items)["λ"])
    A = (np.eye(60) - lam * links.W.toarray())[:, np.argsort(place)]  # rows in the order of the table
    G = X.T @ A.T @ A @ X
    beta = np.linalg.solve(G, X.T @ A.T @ A @ y)
    np.testing.assert_allclose(found.estimate, beta, rtol=1e-5)
    r = A @ (y - X @ beta)
    cov = r @ r / 58 * np.linalg.inv(G)
    assert found.covariance is not None
    np.testing.assert_allclose(np.array(found.covariance), cov, rtol=1e-5)
    assert 1 < found.get("x1").df < 58
    words = dict(found.account.items)
    assert words["neighbours"] == "6 nearest sites"
    assert any(k.startswith("λ over sites within") for k in words)
    said = [each.words for each in explain(remedy("spatial-error"), "", run)]
    assert "maximum likelihood, normal quantile" in said


def test_many_columns_equal_one_at_a_time() -> None:
    xy, X = smooth_world(50, 3)
    made = mapped(X, xy)
    Y = field(xy, 0.2, 4, np.random.default_rng(4))
    whole = SpatialError().prepare(made).fit(fits(made, Y))
    for b in range(4):
        one = SpatialError().prepare(made).fit(fits(made, Y[:, b]))
        np.testing.assert_allclose(whole.estimate[:, b], one.estimate[:, 0], rtol=1e-6)
        np.testing.assert_allclose(whole.df[:, b], one.df[:, 0], rtol=1e-3)
        np.testing.assert_allclose(whole.low[:, b], one.low[:, 0], rtol=1e-5)


def test_rows_that_share_places() -> None:
    xy, X = smooth_world(40, 5)
    site = np.repeat(np.arange(40), 3)
    rng = np.random.default_rng(6)
    made = mapped(np.column_stack([X[site], rng.standard_normal(120)]), xy[site])
    y = field(xy, 0.3, 1, rng)[site, 0] + rng.standard_normal(120)
    found = refit(remedy("spatial-error"), "", fits(made, y))
    words = dict(found.account.items)
    lam = float(words["λ"])
    W = links_of(made, made.neighbours[0]).W.toarray()
    A = np.eye(40) - lam * W
    Z = made.spatial.part.indicator.T.toarray()  # type: ignore[union-attr]
    K = np.linalg.inv(A.T @ A)
    V = float(words["variance of the innovations"]) * Z @ K @ Z.T
    V += float(words["variance of single rows"]) * np.eye(120)
    XX = made.Q @ made.basis.R
    G = XX.T @ np.linalg.solve(V, XX)
    np.testing.assert_allclose(found.estimate, np.linalg.solve(G, XX.T @ np.linalg.solve(V, y)), rtol=1e-3)
    assert found.covariance is not None
    np.testing.assert_allclose(np.array(found.covariance), np.linalg.inv(G), rtol=1e-3)


def test_scale_and_order_do_not_matter() -> None:
    xy, X = smooth_world(45, 7)
    y = field(xy, 0.2, 1, np.random.default_rng(8))[:, 0]
    one = refit(remedy("spatial-error"), "", fits(mapped(X, xy), y)).get("x1")
    turn = np.random.default_rng(9).permutation(45)
    two = refit(remedy("spatial-error"), "", fits(mapped(X[turn], xy[turn]), 10 * y[turn])).get("x1")
    assert two.estimate == pytest.approx(10 * one.estimate, rel=1e-5)
    assert two.se == pytest.approx(10 * one.se, rel=1e-5)
    assert two.df == pytest.approx(one.df, rel=1e-3)


def test_coverage_of_autoregressive_errors() -> None:
    xy, X = smooth_world(100, 10)
    made = mapped(X, xy)
    B = 600
    place = made.spatial.part.first  # type: ignore[union-attr]
    y = np.empty((100, B))
    y[place] = links_of(made, made.neighbours[0]).draw(0.7, np.random.default_rng(11), B)
    found = SpatialError().prepare(made).fit(fits(made, y))
    inside = np.mean((found.low[1] < 0) & (found.high[1] > 0))
    assert inside == pytest.approx(0.95, abs=3 * np.sqrt(0.95 * 0.05 / B))
    plain = np.mean(np.abs(y_slope(X, y)) < stats.t.isf(0.025, 98))
    assert plain < 0.85  # what the ordinary interval does with it


def y_slope(X: Array, Y: Array) -> Array:
    """Ordinary t of the second column."""
    inverse = np.linalg.inv(X.T @ X)
    beta = inverse @ X.T @ Y
    s2 = np.sum((Y - X @ beta) ** 2, axis=0) / (len(X) - 2)
    return np.asarray(beta[1] / np.sqrt(s2 * inverse[1, 1]))


def test_few_places_and_lone_places_are_refused() -> None:
    xy, X = smooth_world(15, 12)
    y = np.random.default_rng(13).standard_normal(15)
    for name in ("spatial-error", "spatial-hac", "spatial-components", "region-cluster"):
        with pytest.raises(NotSupported, match="15 distinct places"):
            refit(remedy(name), "", fits(mapped(X, xy), y))


# ---- spatial-hac ---------------------------------------------------------------------------


def test_a_kernel_that_reaches_nobody_is_hc0() -> None:
    xy, X = smooth_world(60, 14)
    made = mapped(X, xy)
    y = np.random.default_rng(15).standard_normal(60)
    near = float(pdist(xy).min())
    found = refit(SpatialHac(law="normal", cutoff=near / 2), "", fits(made, y))
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    inverse = np.linalg.inv(X.T @ X)
    expected = inverse @ (X.T @ np.diag(e**2) @ X) @ inverse
    assert found.covariance is not None
    np.testing.assert_allclose(np.array(found.covariance), expected, rtol=1e-9)
    site = np.repeat(np.arange(30), 2)
    pair = mapped(X, xy[:30][site])
    again = refit(SpatialHac(law="normal", cutoff=near / 2), "", fits(pair, y))
    scores = np.stack([X[site == s].T @ e[site == s] for s in range(30)])
    np.testing.assert_allclose(np.array(again.covariance), inverse @ scores.T @ scores @ inverse, rtol=1e-9)


def test_bias_factor_makes_the_variance_unbiased_under_the_working_covariance() -> None:
    xy, X = smooth_world(80, 16)
    made = mapped(X, xy)
    rng = np.random.default_rng(17)
    run = fits(made, field(xy, 0.3, 1, rng)[:, 0])
    working = run[{"spatial"}]
    ready = SpatialHac().prepare(made, working)
    many = Fits(Response.of(made, run.redraw({"spatial"}, 4000, "test").response.residual), run.run)
    v = ready.variance(many.response)
    drawn = run.redraw({"spatial"}, 4000, "test").response
    truth = (ready.W.T @ drawn.coef).var(axis=1)
    np.testing.assert_allclose(v.mean(axis=1), truth, rtol=0.08)
    t = ready.W.T @ drawn.coef / np.sqrt(v)
    reject = np.mean(np.abs(t) > stats.t.isf(0.025, ready.df), axis=1)
    np.testing.assert_allclose(reject, 0.05, atol=0.03)


def test_plain_kernel_intervals_are_far_too_short_where_the_corrected_are_not() -> None:
    # The trap: 40 maps, a predictor as smooth as the errors.
    xy, X = smooth_world(70, 18)
    made = mapped(X, xy)
    Y = field(xy, 0.25, 60, np.random.default_rng(19))
    plain = corrected = 0
    for b in range(60):
        run = fits(made, Y[:, b])
        one = refit(SpatialHac(law="normal"), "", run).get("x1")
        plain += one.low < 0 < one.high
        try:
            two = refit(SpatialHac(), "", run).get("x1")
            corrected += two.low < 0 < two.high
        except NotSupported:
            corrected += 1  # refused: no interval was given that could mislead
    assert plain / 60 < 0.85
    assert corrected / 60 > 0.88


def test_positive_kernels_stay_positive_and_others_are_clipped() -> None:
    xy, X = smooth_world(60, 20)
    made = mapped(np.column_stack([X, xy[:, 1] ** 2]), xy)
    run = fits(made, field(xy, 0.3, 1, np.random.default_rng(21))[:, 0])
    for kernel in ("spherical", "uniform"):
        found = refit(SpatialHac(kernel=kernel, law="normal", cutoff=0.8), "", run)  # type: ignore[arg-type]
        assert np.linalg.eigvalsh(np.array(found.covariance))[0] >= -1e-12
    told = refit(SpatialHac(law="independent"), "", run).account.bandwidths
    (x1,) = (one for one in told if one.term == "x1")
    assert x1.what == "cutoff"
    assert len(x1.at) == len(x1.se) == len(x1.df) >= 4


# ---- spatial-components --------------------------------------------------------------------


def test_components_by_hand_and_coverage() -> None:
    xy, X = smooth_world(60, 22)
    made = mapped(X, xy)
    B = 2000
    Y = field(xy, 0.08, B, np.random.default_rng(23))
    ready = SpatialComponents().prepare(made, None)
    found = ready.fit(fits(made, Y))
    a = X @ np.linalg.inv(X.T @ X)[:, 1]
    e = Y - X @ np.linalg.lstsq(X, Y, rcond=None)[0]
    place = made.spatial.part.first  # type: ignore[union-attr]
    mu = 60 * (a[:, None] * e)[place]
    v = np.mean((ready.maps.R[:, : ready.q].T @ mu) ** 2, axis=0) / 60
    np.testing.assert_allclose(found.se[1], np.sqrt(v), rtol=1e-8)
    inside = np.mean((found.low[1] < 0) & (found.high[1] > 0))
    assert inside > 0.92
    # The p-value and the interval are one statement.
    clear = np.abs(found.p[1] - 0.05) > 1e-3
    assert np.array_equal((found.p[1] < 0.05)[clear], ((found.low[1] > 0) | (found.high[1] < 0))[clear])


def test_dependence_over_the_whole_map_is_refused() -> None:
    xy, X = smooth_world(60, 24)
    made = mapped(X, xy)
    run = fits(made, X[:, 1] + 3 * field(xy, 5.0, 1, np.random.default_rng(25))[:, 0])
    working = run[{"spatial"}]
    strong = replace(working, variances={"spatial": np.array([9.0]), "row": np.array([0.1])})
    strong = replace(strong, shape={"spatial.range": np.array([5.0])})
    with pytest.raises(NotSupported, match=r"this way holds up to 0\.15"):
        SpatialComponents().prepare(made, strong)


# ---- region-cluster ------------------------------------------------------------------------


def test_regions_are_compact_even_and_give_the_cluster_sandwich() -> None:
    xy, X = smooth_world(240, 26)
    made = mapped(X, xy)
    y = np.random.default_rng(27).standard_normal(240)
    run = fits(made, y)
    ready = RegionCluster(count=6).prepare(made, None)
    codes = ready.part.codes
    assert np.bincount(codes).min() >= 240 / 18
    centre = np.stack([xy[codes == g].mean(axis=0) for g in range(6)])
    nearest = np.linalg.norm(xy[:, None] - centre, axis=2).argmin(axis=1)
    assert np.mean(nearest == codes) > 0.97
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    inverse = np.linalg.inv(X.T @ X)
    scores = np.stack([X[codes == g].T @ e[codes == g] for g in range(6)])
    expected = sandwich.cluster_factor("CR1", 6, 240, 2) * inverse @ scores.T @ scores @ inverse
    found = refit(RegionCluster(count=6), "", run)
    np.testing.assert_allclose(np.array(found.covariance), expected, rtol=1e-9)
    assert found.get("x1").df == 5


def test_region_count_follows_the_range() -> None:
    xy, X = smooth_world(200, 28)
    made = mapped(X, xy)
    run = fits(made, field(xy, 0.1, 1, np.random.default_rng(29))[:, 0])
    working = run[{"spatial"}]

    def at(reach: float) -> int:
        given = replace(working, shape={"spatial.range": np.array([reach])})
        return RegionCluster().prepare(made, given).regions.count

    assert at(0.01) == 12
    assert at(0.1) < 12
    with pytest.raises(NotSupported, match="they would not be independent"):
        at(0.6)
    nothing = replace(working, shape={"spatial.range": np.array([np.nan])})
    assert RegionCluster().prepare(made, nothing).regions.count == 12


# ---- what is said of places -----------------------------------------------------------------


def test_effective_numbers_equal_the_dense_formulas() -> None:
    xy, X = smooth_world(50, 30)
    made = mapped(X, xy)
    V = 2.0 * (0.8 * np.exp(-squareform(pdist(xy)) / 0.3) + 0.2 * np.eye(50))
    Q = made.Q
    items = dict(Spread(made, Q.T @ V @ Q, Q.T @ np.linalg.solve(V, Q), 2.0).items())
    one = np.ones(50)
    plain, best = 50**2 * 2 / (one @ V @ one), 2 * one @ np.linalg.solve(V, one)
    assert f"{plain:.4g}" in items["rows, for the mean"]
    assert items["the same for the best estimate of the mean"] == f"{best:.4g}"
    a = X @ np.linalg.inv(X.T @ X)[:, 1]
    assert items["rows, for x1 by least squares"] == f"{50 * 2 * a @ a / (a @ V @ a):.4g}"


def test_confounding_is_told_where_place_and_predictor_share_a_pattern() -> None:
    xy, X = smooth_world(120, 31)
    rough = np.column_stack([X, np.random.default_rng(32).standard_normal(120)])
    made = mapped(rough, xy)
    assert smoothness(made, 1) > 0.9
    assert smoothness(made, 2) < 0.35
    V = 0.8 * np.exp(-squareform(pdist(xy)) / 0.3) + 0.2 * np.eye(120)
    Q = made.Q
    spread = Spread(made, Q.T @ V @ Q, Q.T @ np.linalg.solve(V, Q), 1.0)
    same = np.array([1.0, 1.0, 1.0])
    assert spread.confounded(same, same) == ()
    far = made.basis.R @ np.array([0.0, 10.0, 0.0])
    said = spread.confounded(same, same + far)
    assert len(said) == 1
    assert "Place and x1 carry the same pattern" in said[0]


def test_a_predictor_smoother_than_the_residuals_is_told_by_the_whole_examination() -> None:
    # x carries a smooth surface that moves y as well, unseen; z does not, and nothing is said of it.
    rng = np.random.default_rng(3)
    n = 150
    P = rng.uniform(size=(n, 2)) * 1000
    D = cdist(P, P)
    smooth = np.linalg.cholesky(np.exp(-((D / 400) ** 2)) + 1e-6 * np.eye(n)) @ rng.standard_normal(n)
    rough = np.linalg.cholesky(np.exp(-D / 200) + 1e-9 * np.eye(n)) @ rng.standard_normal(n)
    x, z = smooth + 0.1 * rng.standard_normal(n), rng.standard_normal(n)
    y = 1 + 1.5 * smooth + rough + 0.3 * rng.standard_normal(n) + z
    table = pd.DataFrame({"x": x, "z": z, "y": y, "east": P[:, 0], "north": P[:, 1]})
    found = clingstone.examine(table, model="y ~ x + z", coords=("east", "north"), rehearsal="none")
    said = [note for note in found.refit("spatial-gls").notes if "carry the same pattern" in note]
    assert len(said) == 1
    assert said[0].startswith("Place and x ")
