"""Places: Moran's I and Geary's C at the level of sites, and the variogram."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import eigvalsh
from scipy.spatial.distance import pdist, squareform

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.read import ratio
from clingstone.evidence.serial import law_of
from clingstone.evidence.sites import unequal_spread, weighted_sites
from clingstone.evidence.spatial import Geary, Moran, at_sites, moran_form, residual_map, site_design
from clingstone.evidence.variogram import Variogram, pairs_of
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.run import Run

from .factories import design, fits, imhof, knn, residual_space

NEAR = About("knn:4", "4 nearest sites")


def field(xy: Array, reach: float, rng: np.random.Generator, B: int) -> Array:
    V = np.exp(-squareform(pdist(xy)) / reach)
    return np.asarray(np.linalg.cholesky(V) @ rng.standard_normal((len(xy), B)))


def test_hand_worked_chain() -> None:
    # Four sites in a line, weight 1 between next ones: I = (4/6)·2Σe_ie_{i+1}/Σe². y = 0, 0, 1, 1.
    from scipy import sparse

    from clingstone.structure.neighbours import Neighbours

    W = sparse.csr_array(np.array([[0, 1, 0, 0], [1, 0, 1, 0], [0, 1, 0, 1], [0, 0, 1, 0]], dtype=float))
    near = Neighbours("chain", "next sites", W)
    made = design(n=4, xy=[[0, 0], [1, 0], [2, 0], [3, 0]], neighbours=(near,))
    response = Response.of(made, np.array([0.0, 0, 1, 1]))
    from clingstone.evidence.read import ratio
    from clingstone.evidence.spatial import geary_form, moran_form

    small = site_design(made)
    e = at_sites(response)
    # e = −½, −½, ½, ½: Σ over links of products ¼ − ¼ + ¼ = ¼, twice ½; e'e = 1
    assert ratio(e, moran_form(small, "chain"))[0] == pytest.approx(0.5)
    # ½ Σ w (e_i − e_j)² = one link of difference 1, in both directions: 1
    assert ratio(e, geary_form(small, "chain"))[0] == pytest.approx(1.0)


def test_moran_and_geary_equal_imhof() -> None:
    rng = np.random.default_rng(1)
    xy = rng.uniform(size=(25, 2))
    made = design(xy[:, 0], xy=xy)
    one = fits(made, rng.standard_normal(25), alternative="greater")
    W = made.neighbours[0].W.toarray()
    K, e = residual_space(made.Q), one.response.residual[:, 0]
    reading = Moran().read(one, NEAR)
    S = (W + W.T) / 2
    assert reading.statistic[0] == pytest.approx(e @ W @ e / (e @ e) * 25 / W.sum())
    assert reading.p[0] == pytest.approx(imhof(K.T @ S @ K, e @ S @ e / (e @ e)), abs=1e-6)
    law = eigvalsh(K.T @ S @ K)
    assert reading.estimate is not None
    size = (e @ S @ e / (e @ e) - law.mean()) / (law[-1] - law.mean())
    assert reading.estimate[0] == pytest.approx(size, rel=1e-6)
    reading = Geary().read(one, NEAR)
    G = np.diag((W.sum(0) + W.sum(1)) / 2) - S
    expected = 24 * np.sum(W * np.subtract.outer(e, e) ** 2) / (2 * W.sum() * e @ e)
    assert reading.statistic[0] == pytest.approx(expected)
    assert reading.p[0] == pytest.approx(1 - imhof(K.T @ G @ K, e @ G @ e / (e @ e)), abs=1e-6)


def test_rows_of_one_site_become_its_mean() -> None:
    rng = np.random.default_rng(2)
    xy, site = rng.uniform(size=(20, 2)), np.repeat(np.arange(20), 5)
    rng.shuffle(site)
    x, y = rng.standard_normal(20), rng.standard_normal(100)
    rows = fits(design(x[site], rng.standard_normal(100), xy=xy, site=site), y)
    means = np.array([y[site == s].mean() for s in range(20)])
    inner = np.array([np.asarray(rows.design.covariates["x2"])[site == s].mean() for s in range(20)])
    alone = fits(design(x, inner, xy=xy), means)
    one, two = Moran().read(rows, NEAR), Moran().read(alone, NEAR)
    assert one.statistic[0] == pytest.approx(two.statistic[0])
    assert one.p[0] == pytest.approx(two.p[0], rel=1e-6)
    assert "site means" in one.caveats[0]


def test_size_under_site_effects_and_trends() -> None:
    # Independent site intercepts and regressors that drift over the map: neither may be taken for
    # dependence between sites.
    rng = np.random.default_rng(3)
    S, N, B = 40, 4, 3000
    xy, site = rng.uniform(size=(S, 2)), np.repeat(np.arange(S), N)
    made = design(*(xy[site] ** 2).T, *xy[site].T, xy=xy, site=site)
    y = rng.standard_normal((S, B))[site] + rng.standard_normal((S * N, B))
    reading = Moran().read(Fits(Response.of(made, y), Run()), NEAR)
    assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B))


def test_region_means_swept_equal_dummies() -> None:
    rng = np.random.default_rng(4)
    xy = rng.uniform(size=(30, 2))
    region = (xy[:, 0] * 3).astype(int)
    y = 10 * np.cos(region) + rng.standard_normal(30)
    made = fits(design(xy[:, 1], xy=xy, groups={"region": region}), y, alternative="greater")
    (others,) = Moran().givens(made, NEAR)
    assert others == frozenset({"group:region"})
    reading = Moran().read(made, NEAR, others)
    X = np.column_stack([xy[:, 1], np.eye(3)[region]])
    K, S = residual_space(X), made.design.neighbours[0].W.toarray()
    S, e = (S + S.T) / 2, y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    assert reading.p[0] == pytest.approx(imhof(K.T @ S @ K, e @ S @ e / (e @ e)), abs=1e-6)


@given(st.integers(0, 500), st.floats(0.0, 6.28), st.floats(1e-2, 1e4))
def test_order_of_rows_and_motions_of_the_map_do_not_matter(seed: int, angle: float, scale: float) -> None:
    rng = np.random.default_rng(seed)
    xy, x, y = rng.uniform(size=(18, 2)), rng.standard_normal(18), rng.standard_normal(18)
    one = Moran().read(fits(design(x, xy=xy), y), NEAR)
    turn = rng.permutation(18)
    R = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    moved = scale * (xy @ R.T) + 5
    again = design(x[turn], xy=moved, site=turn, neighbours=(knn(moved, 4),))
    two = Moran().read(fits(again, 7 * y[turn] - 3), NEAR)
    assert two.statistic[0] == pytest.approx(one.statistic[0], rel=1e-8)
    assert two.p[0] == pytest.approx(one.p[0], rel=1e-5)


def test_unequal_spread_is_not_read_as_dependence() -> None:
    # The trap: spread that grows a hundredfold over the map makes the exact test reject far too often.
    rng = np.random.default_rng(5)
    xy, B = rng.uniform(size=(200, 2)), 2000
    made = design(n=200, xy=xy)
    run = Fits(Response.of(made, np.exp(4.6 * xy[:, :1]) * rng.standard_normal((200, B))), Run())
    law = law_of(site_design(made), moran_form(site_design(made), NEAR.key))
    exact = law.tails(ratio(at_sites(run.response), law.form), "fast").two_sided
    assert np.mean(exact < 0.05) > 0.15
    robust = Moran().read(run, NEAR)
    assert np.mean(robust.p < 0.05) == pytest.approx(0.05, abs=0.02)
    assert "unequal spread" in robust.p_method
    assert any("With equal variances it would be" in c for c in robust.caveats)
    there = field(xy, 0.2, rng, 300) * np.exp(2.3 * xy[:, :1])
    assert np.mean(Moran().read(Fits(Response.of(made, there), Run()), NEAR).p < 0.05) > 0.8


def test_equal_spread_keeps_the_exact_law_and_its_size() -> None:
    rng = np.random.default_rng(15)
    xy, B = rng.uniform(size=(60, 2)), 4000
    made = design(xy[:, 0], xy=xy)
    reading = Moran().read(Fits(Response.of(made, rng.standard_normal((60, B))), Run()), NEAR)
    assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=0.012)
    spread = unequal_spread(at_sites(Response.of(made, rng.standard_normal((60, B)))))
    assert np.mean(spread < 0.1) == pytest.approx(0.1, abs=0.02)


def test_koenker_equals_statsmodels() -> None:
    # statsmodels.stats.diagnostic.het_breuschpagan (robust=True) on the same columns
    from statsmodels.stats.diagnostic import het_breuschpagan

    rng = np.random.default_rng(16)
    xy = rng.uniform(size=(80, 2))
    made = design(rng.standard_normal(80), xy=xy)
    response = Response.of(made, (1 + xy[:, 0]) * rng.standard_normal(80))
    small = at_sites(response)
    fitted = (small.design.Q @ small.coef)[:, 0]
    Z = np.column_stack([np.ones(80), xy, fitted])
    expected = het_breuschpagan(small.residual[:, 0], Z, robust=True)[1]
    assert unequal_spread(small)[0] == pytest.approx(expected, rel=1e-8)


def test_unequal_rows_per_site_are_weighted_and_hold_their_size() -> None:
    # One site in four has 20 rows, the others one or two; strong independent site effects.
    rng = np.random.default_rng(17)
    S, B = 48, 3000
    xy = rng.uniform(size=(S, 2))
    N = np.where(np.arange(S) % 4 == 0, 20, 1 + np.arange(S) % 2)
    site = np.repeat(np.arange(S), N)
    made = design(xy[site, 0], xy=xy, site=site)
    for sd in (0.0, 1.0):
        y = sd * rng.standard_normal((S, B))[site] + rng.standard_normal((len(site), B))
        reading = Moran().read(Fits(Response.of(made, y), Run()), NEAR)
        assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B) + 0.005)
        assert any("weighted by the precision of their means" in c for c in reading.caveats)


def test_weighted_form_equals_the_dense_score() -> None:
    rng = np.random.default_rng(18)
    S = 30
    xy = rng.uniform(size=(S, 2))
    site = np.r_[np.arange(S), rng.integers(0, 10, 40)]
    made = fits(design(xy[site, 0], xy=xy, site=site), rng.standard_normal(S)[site] + rng.standard_normal(70))
    found = weighted_sites(made, NEAR.key)
    assert found is not None
    response, form = found
    model = made[{"group:site"}]
    theta = float(model.variances["group:site"][0] / model.variances["row"][0])
    part = made.design.spatial.part  # type: ignore[union-attr]
    D = np.diag(1 / np.sqrt(theta + 1 / made.design.sizes(part)))
    X = D @ np.column_stack([np.ones(S), xy[:, 0]])
    means = part.means(made.response.design.Q @ made.response.coef + made.response.residual)
    y = D @ means[:, 0]
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    W = made.design.neighbours[0].W.toarray()
    expected = e @ D @ W @ D @ e / (e @ e)
    scale = np.mean(np.diag(D) ** 2)
    # The ratio of variances is held to a hundredth of ln(1 + ratio).
    assert ratio(response, form)[0] == pytest.approx(expected / scale, rel=0.02)


def test_other_neighbourhoods_are_read_together() -> None:
    rng = np.random.default_rng(11)
    xy = rng.uniform(size=(40, 2))
    near = (knn(xy, 4), knn(xy, 8), knn(xy, 12))
    made = design(n=40, xy=xy, neighbours=near)
    smooth = Moran().read(fits(made, field(xy, 0.3, rng, 1)[:, 0]), NEAR)
    assert any(c.startswith("Of 3 neighbourhoods, 3 show") for c in smooth.caveats)
    joint = []
    for _ in range(200):
        caveats = Moran().read(fits(made, rng.standard_normal(40)), NEAR).caveats
        said = next(c for c in caveats if c.startswith("Of 3"))
        joint.append(float(said.split("p\u00a0")[1].lstrip("=>\u00a0").rstrip(".")))
    assert np.mean(np.array(joint) <= 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 200))
    assert not any(
        c.startswith("Of 3")
        for c in Moran().read(fits(made, field(xy, 0.3, rng, 1)), About("knn:8", "", False)).caveats
    )


def test_few_degrees_of_freedom_are_refused() -> None:
    rng = np.random.default_rng(6)
    xy = rng.uniform(size=(9, 2))
    made = design(*rng.standard_normal((5, 9)), xy=xy)
    with pytest.raises(NotSupported, match="9 sites and 6 coefficients leave 3 degrees"):
        Moran().read(fits(made, rng.standard_normal(9)), NEAR)


def test_map_shows_mean_residuals_at_their_places() -> None:
    xy, site = np.array([[0.0, 5.0], [1.0, 7.0], [2.0, 9.0]]), [0, 0, 1, 2]
    made = fits(design(n=4, xy=xy, site=site, neighbours=(knn(xy, 1),)), [1.0, 3.0, 4.0, 8.0])
    found = residual_map(made, made.design.neighbours[0].key)
    assert found is not None
    assert found.x == (0.0, 1.0, 2.0)
    assert found.y == (5.0, 7.0, 9.0)
    assert found.size == pytest.approx((-2.0, 0.0, 4.0))
    assert found.links == ((0, 1), (1, 2))  # the nearest of the middle one is either; both joined once


# ---- variogram --------------------------------------------------------------------------


def test_bins_equal_the_obvious_loop() -> None:
    rng = np.random.default_rng(7)
    xy = rng.uniform(size=(30, 2))
    made = fits(design(xy[:, 0], xy=xy), rng.standard_normal(30))
    bins = pairs_of(made.design, Run().child("test"))
    e, H = made.response.residual[:, 0], made.design.Q @ made.design.Q.T
    D, s2 = squareform(pdist(xy)), float(made.response.s2[0])
    pairs = sorted((D[i, j], i, j) for i in range(30) for j in range(i) if D[i, j] <= D.max() / 2)
    values = [(e[i] - e[j]) ** 2 / (2 - H[i, i] - H[j, j] + 2 * H[i, j]) / s2 for _, i, j in pairs]
    expected = [np.mean(part) for part in np.array_split(values, len(bins.pairs))]
    np.testing.assert_allclose(bins.read(made.response)[:, 0], expected, rtol=1e-9)
    assert bins.pairs.sum() == len(pairs)


def test_envelope_has_its_size_and_finds_a_field() -> None:
    rng = np.random.default_rng(8)
    xy, B = rng.uniform(size=(60, 2)), 1000
    made = design(xy[:, 0], xy=xy)
    flat = Variogram().read(Fits(Response.of(made, rng.standard_normal((60, B))), Run()), About())
    # 199 draws fix one threshold for all columns: its own error is about √(0.05·0.95/199) = 0.015
    assert np.mean(flat.p <= 0.05) == pytest.approx(0.05, abs=0.045)
    there = Variogram().read(Fits(Response.of(made, field(xy, 0.2, rng, 200)), Run()), About())
    assert np.mean(there.p <= 0.05) > 0.6
    assert there.estimate is not None
    assert np.mean(there.estimate) > 0.3


def test_many_sites_use_near_and_random_pairs() -> None:
    rng = np.random.default_rng(9)
    xy = rng.uniform(size=(3200, 2))
    made = fits(design(n=3200, xy=xy), rng.standard_normal(3200))
    bins = pairs_of(made.design, Run().child("test"))
    assert bins.pairs.sum() < 400_000
    np.testing.assert_allclose(bins.read(made.response)[:, 0], 1.0, atol=0.1)


def test_variogram_curve_holds_what_it_says() -> None:
    rng = np.random.default_rng(10)
    xy = rng.uniform(size=(60, 2)) * 30
    made = fits(design(n=60, xy=xy), field(xy, 8.0, rng, 1)[:, 0])
    found = Variogram().curve(made, About())
    assert found is not None
    assert found.unit == "km"
    assert found.y[0] < found.low[0]  # the closest sites are more alike than independent ones
    assert all(low < 1 < high for low, high in zip(found.low, found.high, strict=True))
    assert list(found.x) == sorted(found.x)
