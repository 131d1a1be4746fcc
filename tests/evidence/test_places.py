"""Errors or outcomes, single sites, bands of distance and directions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.spatial.distance import pdist, squareform

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence import gather
from clingstone.evidence.direction import Correlogram, Direction, bands_of
from clingstone.evidence.finding import About
from clingstone.evidence.lagrange import Lagrange, Scores
from clingstone.evidence.local import Local, adjusted, benjamini_yekutieli, contributions, log_tails, pairs
from clingstone.evidence.sites import at_sites, site_design
from clingstone.evidence.variogram import Variogram, pairs_of
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.run import Run

from .factories import design, fits, imhof, knn, residual_space

NEAR = About("knn:4", "4 nearest sites")
KINDS = ("lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag")


def field(xy: Array, reach: float, rng: np.random.Generator, B: int) -> Array:
    V = np.exp(-squareform(pdist(xy)) / reach)
    return np.asarray(np.linalg.cholesky(V) @ rng.standard_normal((len(xy), B)))


# ---- errors or outcomes --------------------------------------------------------------------


def test_scores_equal_the_dense_formulas() -> None:
    rng = np.random.default_rng(1)
    xy, x, y = rng.uniform(size=(40, 2)), rng.standard_normal(40), rng.standard_normal(40)
    one = fits(design(x, xy=xy), y)
    W = one.design.neighbours[0].W.toarray()
    X = np.column_stack([np.ones(40), x])
    b = np.linalg.lstsq(X, y, rcond=None)[0]
    e = y - X @ b
    M = np.eye(40) - X @ np.linalg.inv(X.T @ X) @ X.T
    s2 = e @ e / 40
    T = np.trace(W @ W + W.T @ W)
    J = T + (W @ X @ b) @ M @ (W @ X @ b) / s2
    A, L = e @ W @ e / s2, e @ W @ y / s2
    expected = {
        "lm-error": A**2 / T,
        "lm-lag": L**2 / J,
        "robust-lm-error": (A - T / J * L) ** 2 / (T * (1 - T / J)),
        "robust-lm-lag": (L - A) ** 2 / (J - T),
    }
    for kind in KINDS:
        reading = Lagrange(kind).read(one, NEAR)  # type: ignore[arg-type]
        assert reading.statistic[0] == pytest.approx(expected[kind])
        assert reading.p[0] == pytest.approx(stats.chi2.sf(expected[kind], 1))
    # The pair of robust and plain adds up either way (Anselin et al. 1996).
    assert expected["lm-error"] + expected["robust-lm-lag"] == pytest.approx(
        expected["lm-lag"] + expected["robust-lm-error"]
    )


@pytest.mark.parametrize(("angle", "scale"), [(0.4, 1000.0), (2.0, 0.01), (5.1, 1.0)])
def test_motions_units_and_order_of_rows_change_no_score_and_no_site(angle: float, scale: float) -> None:
    rng = np.random.default_rng(11)
    xy, x = rng.uniform(size=(60, 2)), rng.standard_normal(60)
    y = x + 2 * field(xy, 0.2, rng, 1)[:, 0] + 0.3 * rng.standard_normal(60)
    turn = rng.permutation(60)
    R = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    moved = scale * (xy @ R.T) + 5
    one = fits(design(x, xy=xy), y)
    two = fits(design(x[turn], xy=moved, site=turn, neighbours=(knn(moved, 4),)), 7 * y[turn] - 3)
    for kind in KINDS:
        test = Lagrange(kind)  # type: ignore[arg-type]
        assert test.read(two, NEAR).statistic[0] == pytest.approx(test.read(one, NEAR).statistic[0], rel=1e-8)
    assert adjusted(at_sites(two.response), NEAR.key) == pytest.approx(
        adjusted(at_sites(one.response), NEAR.key), rel=1e-6
    )
    first, second = Local().read(one, NEAR), Local().read(two, NEAR)
    assert second.statistic[0] == first.statistic[0]
    assert sorted(int(turn[r]) for r in second.rows) == sorted(first.rows)


def test_sizes_and_what_each_score_answers() -> None:
    rng = np.random.default_rng(2)
    xy, B, S = rng.uniform(size=(144, 2)), 2000, 144
    x = rng.standard_normal(S)
    made = design(x, xy=xy)
    W = made.neighbours[0].W.toarray()
    z = rng.standard_normal((S, B))
    part = np.linalg.inv(np.eye(S) - 0.5 * W)
    worlds = {"none": z, "errors": part @ z, "outcomes": part @ (2 * x[:, None] + z)}
    worlds["none"] = worlds["none"] + 2 * x[:, None]
    worlds["errors"] = worlds["errors"] + 2 * x[:, None]
    found = {
        name: {
            k: float(np.mean(Lagrange(k).read(Fits(Response.of(made, Y), Run()), NEAR).p < 0.05))  # type: ignore[arg-type]
            for k in KINDS
        }
        for name, Y in worlds.items()
    }
    for kind in KINDS:
        assert found["none"][kind] == pytest.approx(0.05, abs=0.02)
    assert found["errors"]["lm-error"] > 0.8
    assert found["errors"]["robust-lm-lag"] < 0.25
    assert found["outcomes"]["robust-lm-lag"] > 0.8
    assert found["errors"]["robust-lm-error"] > found["outcomes"]["robust-lm-error"]


def test_a_constant_mean_cannot_tell_errors_from_outcomes() -> None:
    rng = np.random.default_rng(3)
    xy = rng.uniform(size=(30, 2))
    one = fits(design(n=30, xy=xy), rng.standard_normal(30))
    with pytest.raises(NotSupported, match="cannot be told apart"):
        Lagrange("robust-lm-lag").read(one, NEAR)
    assert np.isfinite(Lagrange("lm-error").read(one, NEAR).p[0])
    score = Scores.of(at_sites(one.response), NEAR.key)
    assert score.J[0] == pytest.approx(score.T)


def test_lag_says_that_it_is_no_remedy() -> None:
    rng = np.random.default_rng(4)
    one = fits(design(rng.standard_normal(30), xy=rng.uniform(size=(30, 2))), rng.standard_normal(30))
    (finding,) = gather(one, (Lagrange("lm-lag"),))
    assert "no remedy" in finding.caveats[-1]
    assert "Outcomes of neighbouring sites (4 nearest sites) enter with a weight of about" in finding.sentence


# ---- single sites --------------------------------------------------------------------------


def test_local_tails_equal_imhof_and_contributions_add_to_moran() -> None:
    rng = np.random.default_rng(5)
    xy = rng.uniform(size=(30, 2))
    one = fits(design(xy[:, 0], xy=xy), rng.standard_normal(30))
    small, response = site_design(one.design), at_sites(one.response)
    found, t = pairs(small, NEAR.key), contributions(response, NEAR.key)
    lower, upper = log_tails(found.low[:, None], found.high[:, None], small.m, t)
    W, K = small.neighbours[0].W.toarray(), residual_space(small.Q)
    for i in range(30):
        S = np.zeros((30, 30))
        S[i] += W[i] / 2
        S[:, i] += W[i] / 2
        ends = np.linalg.eigvalsh(K.T @ S @ K)
        assert found.low[i] == pytest.approx(ends[0], abs=1e-12)
        assert found.high[i] == pytest.approx(ends[-1], abs=1e-12)
        exact = imhof(K.T @ S @ K, float(t[i, 0]))
        assert np.exp(upper[i, 0]) == pytest.approx(exact, rel=1e-4, abs=1e-7)
        assert np.exp(lower[i, 0]) + np.exp(upper[i, 0]) == pytest.approx(1.0)
    e = response.residual[:, 0]
    assert t.sum() == pytest.approx(e @ W @ e / (e @ e))


def test_local_p_are_uniform_where_nothing_is_and_the_normal_law_would_not_do() -> None:
    rng = np.random.default_rng(6)
    xy, B = rng.uniform(size=(80, 2)), 2000
    made = design(xy[:, 0], xy=xy)
    small = site_design(made)
    t = contributions(Response.of(small, rng.standard_normal((80, B))), NEAR.key)
    found = pairs(small, NEAR.key)
    lower, upper = log_tails(found.low[:, None], found.high[:, None], small.m, t)
    p = np.minimum(2 * np.exp(np.minimum(lower, upper)), 1)
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=0.005)
    assert np.mean(p < 0.001) == pytest.approx(0.001, abs=0.0007)
    z = (t - t.mean(axis=1, keepdims=True)) / t.std(axis=1, keepdims=True)
    assert np.mean(np.abs(z) > 3.29) > 0.005  # five times too many beyond a normal 0.1 % bound


def test_benjamini_yekutieli_by_hand() -> None:
    # m = 3, c = 1 + 1/2 + 1/3 = 11/6: 0.01·3·c/1, 0.02·3·c/2, 0.9·3·c/3
    found = benjamini_yekutieli(np.array([0.9, 0.01, 0.02]))
    np.testing.assert_allclose(found, [1.0, 0.055, 0.055])


def test_false_discoveries_are_controlled_and_a_hot_spot_is_found() -> None:
    rng = np.random.default_rng(7)
    xy, B = rng.uniform(size=(100, 2)), 500
    made = design(n=100, xy=xy, neighbours=(knn(xy, 4),))
    quiet = Local().read(Fits(Response.of(made, rng.standard_normal((100, B))), Run()), NEAR)
    assert np.mean(quiet.p < 0.05) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / B)
    centre = np.linalg.norm(xy - xy[0], axis=1)
    y = rng.standard_normal(100)
    y[np.argsort(centre)[:6]] += 8.0
    one = fits(made, y)
    reading = Local().read(one, NEAR)
    assert set(reading.rows) <= set(np.argsort(centre)[:12].tolist())
    assert 0 in reading.rows
    curve = Local().curve(one, NEAR)
    assert curve is not None
    assert curve.labels[0] == "above the fit, as its neighbours are"
    assert sum(bool(label) for label in curve.labels) == len(reading.rows)
    assert Local().curve(fits(made, rng.standard_normal(100)), NEAR) is None


def test_islands_never_stand_out() -> None:
    from scipy import sparse

    from clingstone.structure.neighbours import Neighbours

    rng = np.random.default_rng(8)
    xy = rng.uniform(size=(25, 2))
    W = knn(xy, 3).W.toarray()
    W[4] = 0.0
    near = Neighbours("knn:4", "some", sparse.csr_array(W), 1)
    p = adjusted(
        at_sites(fits(design(n=25, xy=xy, neighbours=(near,)), rng.standard_normal(25)).response), "knn:4"
    )
    assert p[4, 0] == 1.0
    assert np.isfinite(p).all()


# ---- bands of distance, directions, robust variogram ---------------------------------------


def test_bands_equal_the_obvious_loop() -> None:
    rng = np.random.default_rng(9)
    xy = rng.uniform(size=(40, 2))
    one = fits(design(xy[:, 0], xy=xy), rng.standard_normal(40))
    bands = bands_of(one.design, rng)
    e, D = at_sites(one.response).residual[:, 0], squareform(pdist(xy))
    products = sorted((D[i, j], e[i] * e[j]) for i in range(40) for j in range(i) if D[i, j] <= D.max() / 2)
    raw = [np.mean([p for _, p in part]) / (e @ e / 40) for part in _split(products, len(bands.pairs))]
    z = bands.standardised(at_sites(one.response))[:, 0]
    np.testing.assert_allclose(z * bands.sd + bands.mean, raw, rtol=1e-9)
    drawn = at_sites(Response.of(one.design, rng.standard_normal((40, 20_000))))
    many = bands.standardised(drawn)
    np.testing.assert_allclose(many.mean(axis=1), 0, atol=0.03)
    np.testing.assert_allclose(np.corrcoef(many), bands.covariance / np.outer(bands.sd, bands.sd), atol=0.03)


def _split(values: list[tuple[float, float]], count: int) -> list[list[tuple[float, float]]]:
    places = np.array_split(np.arange(len(values)), count)
    return [[values[i] for i in part] for part in places]


def test_correlogram_has_its_size_and_finds_a_field() -> None:
    rng = np.random.default_rng(10)
    xy, B = rng.uniform(size=(60, 2)), 2000
    made = design(xy[:, 0], xy=xy)
    flat = Correlogram().read(Fits(Response.of(made, rng.standard_normal((60, B))), Run()), About())
    # 999 draws fix one threshold: √(0.05·0.95/999) = 0.007
    assert np.mean(flat.p <= 0.05) == pytest.approx(0.05, abs=0.03)
    there = Correlogram().read(Fits(Response.of(made, field(xy, 0.2, rng, 200)), Run()), About())
    assert np.mean(there.p <= 0.05) > 0.6
    curve = Correlogram().curve(fits(made, field(xy, 0.2, rng, 1)[:, 0]), About())
    assert curve is not None
    assert curve.y[0] > curve.high[0]
    assert list(curve.x) == sorted(curve.x)


def test_direction_has_its_size_and_finds_the_axis() -> None:
    rng = np.random.default_rng(11)
    xy, B = rng.uniform(size=(120, 2)), 2000
    made = design(n=120, xy=xy)
    flat = Direction().read(Fits(Response.of(made, rng.standard_normal((120, B))), Run()), NEAR)
    assert np.mean(flat.p <= 0.05) == pytest.approx(0.05, abs=0.03)
    turn = np.radians(30.0)
    along = xy @ [np.cos(turn), np.sin(turn)]
    across = xy @ [-np.sin(turn), np.cos(turn)]
    stretched = np.column_stack([along / 8, across])
    Y = field(stretched, 0.08, rng, 100)
    found = Direction().read(Fits(Response.of(made, Y), Run()), NEAR)
    assert np.mean(found.p <= 0.05) > 0.7
    axes = []
    for b in range(20):
        name = Direction().read(fits(made, Y[:, b]), NEAR).estimate_name
        axes.append(float(name.split(" at ")[1].split(" degrees")[0]))
    assert abs(np.degrees(0.5 * np.angle(np.mean(np.exp(2j * np.radians(axes))))) - 30) < 12
    curve = Direction().curve(fits(made, Y[:, 0]), NEAR)
    assert curve is not None
    assert curve.x == (0.0, 45.0, 90.0, 135.0)


def test_isotropic_dependence_is_no_direction_once_place_is_fitted() -> None:
    rng = np.random.default_rng(12)
    xy = rng.uniform(size=(70, 2))
    made = design(n=70, xy=xy)
    alone = given = 0
    for b in range(40):
        one = fits(made, field(xy, 0.3, np.random.default_rng(100 + b), 1)[:, 0])
        alone += Direction().read(one, NEAR).p[0] < 0.05
        given += Direction().read(one, NEAR, frozenset({"spatial"})).p[0] < 0.05
    assert given / 40 < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 40)
    assert alone > given


def test_robust_and_fitted_variograms() -> None:
    rng = np.random.default_rng(13)
    xy = rng.uniform(size=(100, 2))
    made = design(n=100, xy=xy)
    y = rng.standard_normal(100)
    one = fits(made, y)
    bins = pairs_of(made, Run().child("test"))
    i, j, expected = bins.ends[0]
    e, s2 = one.response.residual[:, 0], float(one.response.s2[0])
    root = np.mean(np.abs(e[i] - e[j]) ** 0.5 * (2 / expected) ** 0.25)
    assert bins.robust(one.response)[0] == pytest.approx(
        0.5 * root**4 / (0.457 + 0.494 / len(i)) / s2, rel=1e-9
    )
    plain, robust = bins.read(one.response)[:, 0], bins.robust(one.response)
    np.testing.assert_allclose(robust, plain, rtol=0.35)
    y[0] = 40.0  # one wild site lifts the classical form, hardly the robust one
    wild = fits(made, y)
    lifted = bins.read(wild.response)[:, 0] * wild.response.s2[0]
    held = bins.robust(wild.response) * wild.response.s2[0]
    assert np.mean(lifted) > 5 * np.mean(held)
    curve = Variogram().curve(fits(made, field(xy, 0.2, rng, 1)[:, 0]), About())
    assert curve is not None
    assert set(curve.lines) == {"robust", "fitted"}
    fitted = curve.lines["fitted"][1]
    assert fitted[0] < fitted[-1]
