"""Places against published software: spdep, spatialreg, spreg, gstat, glmmTMB, geosphere, direct sums.

R 4.2.2 with spdep 1.2.7, spatialreg 1.2.6, gstat 2.1.0, glmmTMB 1.1.5, geosphere 1.5.18; Python 3.11 with
spreg 1.9.0, libpysal 4.14.1. Data from libpysal's built-in examples.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pytest
from scipy import sparse
from tests.remedies.cases import design as plain_design

from clingstone.covariance.fits import Fits
from clingstone.covariance.smoothness import kernels
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.lagrange import Lagrange
from clingstone.evidence.local import Pairs, contributions, log_tails, pairs
from clingstone.evidence.sites import at_sites
from clingstone.evidence.variogram import Bins
from clingstone.maths import reml, sar
from clingstone.maths.matern import PRACTICAL
from clingstone.maths.once import Array
from clingstone.remedies import refit
from clingstone.remedies.spatial import SpatialError
from clingstone.remedies.spatialhac import SpatialHac
from clingstone.run import Run
from clingstone.structure import spatial
from clingstone.structure.neighbours import Neighbours

pytest.importorskip("geopandas")

DATA = {
    "columbus": ("columbus.shp", "CRIME", ("INC", "HOVAL"), ("X", "Y")),
    "baltim": ("baltim.shp", "PRICE", ("NROOM", "NBATH", "AGE", "LOTSZ", "SQFT"), ("X", "Y")),
    "stl": ("stl_hom.shp", "HR8893", ("RDAC90", "PE87"), None),
}


@cache
def frame(name: str) -> Any:
    import geopandas
    from libpysal.examples import get_path

    return geopandas.read_file(get_path(DATA[name][0]))


@cache
def weights(name: str, kind: str) -> sparse.csr_array:
    """Row-standardised, in the order of the rows."""
    from libpysal import weights as lib

    if kind == "knn4":
        w = lib.KNN.from_array(frame(name)[["X", "Y"]].to_numpy(), k=4)
    else:
        w = getattr(lib, kind.capitalize()).from_dataframe(frame(name), use_index=False)
    w.transform = "r"
    return sparse.csr_array(w.sparse)


def case(name: str, kind: str = "") -> tuple[Design, Array]:
    _, y, x, xy = DATA[name]
    g = frame(name)
    if xy is None:
        at = np.column_stack([g.geometry.centroid.x, g.geometry.centroid.y])
    else:
        at = g[list(xy)].to_numpy(float)
    X = np.column_stack([np.ones(len(g)), g[list(x)].to_numpy(float)])
    made = plain_design(X, ["constant", *x], xy=at)
    if kind:
        place = made.spatial.part.first  # type: ignore[union-attr]
        W = sparse.csr_array(weights(name, kind)[place][:, place])
        made = replace(made, neighbours=(Neighbours(kind, kind, W),))
    return made, g[y].to_numpy(float)


def run(made: Design, y: Array) -> Fits:
    return Fits(Response.of(made, y), Run())


# spdep: lm.LMtests(m, listw, test = "all"); spreg: OLS(spat_diag) agrees to ten digits
SCORES = {
    ("columbus", "queen"): (5.20621392388198, 8.89799859108786, 0.0439059318850378, 3.73569059909091),
    ("columbus", "rook"): (5.81487993448529, 8.75990710727821, 0.127146512964091, 3.07217368575701),
    ("baltim", "knn4"): (22.6129416741676, 47.6292425104576, 0.110715021702443, 25.1270158579925),
    ("stl", "queen"): (10.709570884034, 7.49174942404761, 3.3372964391791, 0.119474979192742),
    ("stl", "rook"): (10.909206734659, 9.35527493013452, 1.62998806288356, 0.0760562583591235),
}


@pytest.mark.parametrize("key", SCORES)
def test_score_statistics_are_spdeps(key: tuple[str, str]) -> None:
    one = run(*case(*key))
    for kind, value in zip(
        ("lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag"), SCORES[key], strict=True
    ):
        found = Lagrange(kind).read(one, About(key[1], key[1]))  # type: ignore[arg-type]
        assert found.statistic[0] == pytest.approx(value, rel=1e-9)


# spatialreg: errorsarlm(method = "eigen", tol.opt = 1e-14): λ, coefficients, standard errors, s², ln L
ERRORS = {
    ("columbus", "queen"): (
        0.546753036783333,
        [60.2794695495948, -0.957305329035275, -0.304559258930199],
        [5.36559384446465, 0.334230754528085, 0.0920473157117333],
        97.674232210291,
        -183.749428062057,
    ),
    ("columbus", "rook"): (
        0.548473965788416,
        [60.3751879567051, -0.961043587810285, -0.303198149493892],
        [5.3250700014914, 0.331145557754776, 0.0926412627659585],
        94.9677431458821,
        -183.313570725545,
    ),
    ("stl", "queen"): (
        0.707658623841691,
        [4.56554460343703, 6.4245291365697, 0.517565656552653],
        [2.0193766448238, 0.763532436501149, 0.341745048405422],
        14.8355227203713,
        -221.042812307693,
    ),
}


@pytest.mark.parametrize("key", ERRORS)
def test_spatial_error_by_maximum_likelihood_is_spatialregs(key: tuple[str, str]) -> None:
    lam, coef, se, s2, _ = ERRORS[key]
    found = refit(SpatialError("ML", "normal"), "", run(*case(*key)))
    words = dict(found.account.items)
    assert float(words["λ"]) == pytest.approx(lam, abs=1e-6)
    assert float(words["variance of the innovations"]) == pytest.approx(s2, rel=1e-5)
    np.testing.assert_allclose(found.estimate, coef, rtol=1e-6)
    np.testing.assert_allclose([row.se for row in found.intervals], se, rtol=1e-6)


def test_asymmetric_weights_as_given_are_spatialregs() -> None:
    # errorsarlm on the four nearest houses, not symmetrised: λ 0.525584198099236, ln L −866.03778416551
    made, y = case("baltim", "knn4")
    e = made.basis.project(y[:, None])
    links = sar.Links(weights("baltim", "knn4"))
    profile = sar.Profile.of(links, made.Q, e)
    lam, edge = profile.search(211, False)
    assert lam[0] == pytest.approx(0.525584198099236, abs=1e-5)
    assert not edge[0]
    assert -profile.criterion(lam, 211, False)[0] / 2 == pytest.approx(-866.03778416551, abs=1e-4)


@pytest.mark.parametrize("key", ERRORS)
def test_log_likelihood_is_spatialregs(key: tuple[str, str]) -> None:
    made, y = case(*key)
    place = made.spatial.part.first  # type: ignore[union-attr]
    links = sar.Links.of(made.neighbours[0].table)
    profile = sar.Profile.of(links, made.Q[place], made.basis.project(y[:, None])[place])
    value = -profile.criterion(np.array([ERRORS[key][0]]), made.n, False)[0] / 2
    assert value == pytest.approx(ERRORS[key][4], abs=1e-8)


@pytest.mark.parametrize(
    ("name", "kind", "lam", "coef"),
    [
        # spatialreg: GMerrorsar; spreg: GM_Error gives 0.3834545505 for the first
        ("columbus", "queen", 0.38345440132587, [62.918810223179, -1.15007476682719, -0.298230691044288]),
        ("columbus", "rook", 0.404121996534374, None),
        ("stl", "queen", 0.465412427090695, [2.93328489794304, 6.0357943952006, 0.898693463622599]),
    ],
)
def test_moments_are_spatialregs(name: str, kind: str, lam: float, coef: list[float] | None) -> None:
    found = refit(SpatialError("moments", "normal"), "", run(*case(name, kind)))
    assert float(dict(found.account.items)["λ"]) == pytest.approx(lam, abs=2e-6)
    if coef is not None:
        np.testing.assert_allclose(found.estimate, coef, rtol=1e-5)


# Direct sums over all pairs (numpy 2.4.6); spreg.OLS(robust="hac") gives the same for the Bartlett kernel
KERNELS = [
    ("columbus", "bartlett", 3.0, [4.8748757426204925, 0.4590218677311181, 0.1571975828495905]),
    ("columbus", "bartlett", 6.0, [5.340922451382196, 0.4549744755211368, 0.15704430881401463]),
    ("columbus", "uniform", 3.0, [5.917297329572474, 0.4665761426973214, 0.1564657751969544]),
    ("columbus", "uniform", 6.0, [5.051192741196386, 0.34312851754478924, 0.14544065668845726]),
    (
        "baltim",
        "bartlett",
        10.0,
        [
            7.92358479943823,
            1.5343448855937913,
            2.9025512061290546,
            0.09985820653624836,
            0.024434899148145076,
            0.22327640273262894,
        ],
    ),
    (
        "baltim",
        "uniform",
        10.0,
        [
            8.612007463675791,
            1.6329887086437809,
            2.8698855898653517,
            0.09973966645925843,
            0.025490902069970976,
            0.2152683143798934,
        ],
    ),
]


@pytest.mark.parametrize(("name", "kernel", "cutoff", "se"), KERNELS)
def test_kernels_over_places_equal_direct_sums(
    name: str, kernel: Any, cutoff: float, se: list[float]
) -> None:
    found = refit(SpatialHac(kernel=kernel, law="normal", cutoff=cutoff), "", run(*case(name)))
    np.testing.assert_allclose([row.se for row in found.intervals], se, rtol=1e-8)


def test_kernel_along_the_great_circle_equals_direct_sums() -> None:
    # Direct sum, haversine distance with radius 6371.0088 km, Bartlett kernel to 100 km
    made, y = case("stl")
    sites = made.spatial
    assert sites is not None
    found = refit(
        SpatialHac(kernel="bartlett", law="normal", cutoff=100.0),
        "",
        run(replace(made, spatial=replace(sites, kind="lonlat", unit="km")), y),
    )
    # The kernel runs along the chord, which at 100 km is shorter than the circle by one part in 100,000.
    expected = [2.0363825295454716, 2.1267360660874877, 0.8046956150929346]
    np.testing.assert_allclose([row.se for row in found.intervals], expected, rtol=1e-4)


def test_variograms_are_gstats() -> None:
    # gstat::variogram(e ~ 1, boundaries = c(2, 4, 6, 8, 10, 12), cressie)
    made, y = case("columbus")
    one = at_sites(Response.of(made, y))
    sites = one.design.spatial
    assert sites is not None
    from scipy.spatial.distance import pdist

    i, j = np.triu_indices(49, 1)
    apart = pdist(sites.points)
    classical = [53.0425976355418, 88.3990203523895, 158.277511099967, 103.456185821877]
    cressie = [60.3080186862306, 83.2821658438949, 151.969648275575, 92.2606643142836]
    edges = np.array([0, 2, 4, 6, 8])
    e = one.residual[:, 0]
    for k in range(4):
        inside = (apart > edges[k]) & (apart <= edges[k + 1])
        a, b = i[inside], j[inside]
        assert np.mean((e[a] - e[b]) ** 2) / 2 == pytest.approx(classical[k], rel=1e-9)
        # Without the allowance for residuals (an expectation of 2 for each pair) the robust form is gstat's.
        bins = Bins(np.ones(1), np.array([len(a)]), (), ((a, b, np.full(len(a), 2.0)),))
        assert bins.robust(one)[0] * one.s2[0] == pytest.approx(cressie[k], rel=1e-9)


def test_matern_three_halves_is_glmmtmbs() -> None:
    # glmmTMB(CRIME ~ INC + HOVAL + mat(pos + 0 | one), smoothness 1.5, REML): log-likelihood
    # −175.366599800458, range 1.74894102296538 in h/range; a direct likelihood (scipy) agrees to 7 digits.
    made, y = case("columbus")
    one = run(made, y)
    rough, middle, smooth = kernels(one, frozenset({"spatial"}))
    exponential = float(one[{"spatial"}].loglik[0]) - np.linalg.slogdet(made.basis.R)[1]
    assert exponential == pytest.approx(-175.812652525569, abs=1e-4)  # nlme: gls(corExp(nugget = TRUE))
    best = exponential + rough.drop
    assert best - middle.drop == pytest.approx(-175.366599800458, abs=2e-4)
    assert middle.reach == pytest.approx(1.74894102296538 * np.sqrt(3) * PRACTICAL[1.5], rel=1e-3)
    beta = made.basis.inverse @ middle.coef
    np.testing.assert_allclose(beta, [50.7260222600611, -0.780462253481513, -0.246766126245866], rtol=2e-4)
    se = np.sqrt(np.diag(made.basis.inverse @ middle.phi @ made.basis.inverse.T))
    # sqrt diag of σ²(X'R⁻¹X)⁻¹, direct likelihood
    np.testing.assert_allclose(se, [6.061032650208397, 0.30883582823667693, 0.08332140602710433], rtol=1e-3)
    assert min(rough.drop, middle.drop, smooth.drop) == 0.0


def test_great_circles_are_geospheres() -> None:
    # geosphere::distm(P, distHaversine, r = 6371.0088); points 8 and 9 lie on either side of 180 degrees
    lon = [0, 90, 0, -180, -0.1278, -74.006, 151.2093, 179.9, -179.9, 13.405]
    lat = [0, 0, 90, 0, 51.5074, 40.7128, -33.8688, -17, -17, 52.52]
    made = spatial.build(np.array(lon), np.array(lat), ("lon", "lat"), True)
    code = made.part.codes
    expected = {
        (0, 1): 10007.557221018,
        (0, 3): 20015.1144420359,
        (0, 4): 5727.38207891827,
        (4, 9): 931.570707207339,
        (7, 8): 21.2672758904362,
        (6, 7): 3418.28955730102,
        (2, 8): 11897.873584988,
    }
    for (a, b), km in expected.items():
        chord = np.linalg.norm(made.points[code[a]] - made.points[code[b]])
        # Where points are antipodal a chord fixes the circle to the square root of rounding only.
        assert float(made.along(np.asarray(chord))) == pytest.approx(
            km, rel=1e-7 if (a, b) == (0, 3) else 1e-9
        )


def test_restricted_likelihood_equals_its_dense_twin() -> None:
    # Restricted likelihood has no outside value; at its estimate the dense twin agrees.
    made, y = case("columbus", "queen")
    place = made.spatial.part.first  # type: ignore[union-attr]
    links = sar.Links.of(made.neighbours[0].table)
    profile = sar.Profile.of(links, made.Q[place], made.basis.project(y[:, None])[place])
    lam, _ = profile.search(made.m, True)
    A = np.eye(49) - lam[0] * links.W.toarray()
    V = np.linalg.inv(A.T @ A)
    Q, yy = made.Q[place], y[place]
    Vi = np.linalg.inv(V)
    G = Q.T @ Vi @ Q
    r = yy - Q @ np.linalg.solve(G, Q.T @ Vi @ yy)
    c = float(r @ Vi @ r)
    twin = np.linalg.slogdet(V)[1] + np.linalg.slogdet(G)[1] + reml.profiled(np.array([c]), 46)[0]
    assert profile.criterion(lam, 46, True)[0] == pytest.approx(twin, rel=1e-10)


# spdep: localmoran.exact(lm(CRIME ~ INC + HOVAL), nb = queen, style = "W"): n·contribution, exact
# two-sided p, expectation and variance under independence, of places 1, 2, 3, 21, 34 and 49
LOCAL = {
    1: (-0.0126787461838462, 0.9484156409026965, -0.00792109050553204, 0.435650559232062),
    2: (0.2500902412035614, 0.4442507421344125, -0.01252598606165255, 0.313520385171467),
    3: (0.1818370600346382, 0.4922534278084262, -0.01214586977987153, 0.235318410337804),
    21: (-0.3725894970191609, 0.3647849834802870, -0.02576296811905721, 0.325474321381162),
    34: (0.9068891007167126, 0.0560433668205662, -0.03386207412583546, 0.223074808606134),
    49: (0.5355452179480452, 0.2127439604176105, -0.02914693430888889, 0.320347517866838),
}


def local_of(name: str, kind: str) -> tuple[Array, Array, Pairs, Design]:
    """n·contribution and two-sided p of every place in the order of the rows, with their law."""
    made, y = case(name, kind)
    one = at_sites(Response.of(made, y))
    law, t = pairs(one.design, kind), contributions(one, kind)
    lower, upper = log_tails(law.low[:, None], law.high[:, None], one.design.m, t)
    place = made.spatial.part.codes  # type: ignore[union-attr]
    p = 2 * np.exp(np.minimum(lower, upper))
    return made.n * t[place, 0], p[place, 0], Pairs(law.low[place], law.high[place]), one.design


def test_local_contributions_have_the_exact_law_of_spdep() -> None:
    value, p, law, made = local_of("columbus", "queen")
    n, m = made.n, made.m
    # T = z'Sz/z'z with two eigenvalues a, b: E T = (a + b)/m, E T² = (3a² + 3b² + 2ab)/(m(m + 2))
    mean = (law.low + law.high) / m
    square = (2 * (law.low**2 + law.high**2) + (law.low + law.high) ** 2) / (m * (m + 2))
    for place, (found, tail, expected, variance) in LOCAL.items():
        assert value[place - 1] == pytest.approx(found, rel=1e-10)
        assert p[place - 1] == pytest.approx(tail, rel=1e-8)
        assert n * mean[place - 1] == pytest.approx(expected, rel=1e-10)
        assert n**2 * (square - mean**2)[place - 1] == pytest.approx(variance, rel=1e-10)


def test_local_contributions_are_esdas_but_their_law_is_not() -> None:
    """esda.Moran_Local(residuals) and spdep::localmoran(residuals) know nothing of the fitted mean.

    Their statistic is ours; their moments are those of exchangeable values (for spdep, E and variance of
    place 34: −0.0285719804632, 0.318303839814), where least squares leaves other ones.
    """
    esda = pytest.importorskip("esda")
    from libpysal import weights as lib

    g, (_, y, x, _) = frame("columbus"), DATA["columbus"]
    X = np.column_stack([np.ones(49), g[list(x)].to_numpy(float)])
    e = g[y].to_numpy() - X @ np.linalg.lstsq(X, g[y].to_numpy(), rcond=None)[0]
    w = lib.Queen.from_dataframe(g, use_index=False)
    theirs = esda.Moran_Local(e, w, transformation="r", permutations=0)
    value, _, law, made = local_of("columbus", "queen")
    np.testing.assert_allclose(value * 48 / 49, theirs.Is, rtol=1e-9)  # esda divides by n − 1
    ours = 49 * (law.low + law.high) / made.m
    assert abs(ours[33] + 0.0285719804632) > 0.005


# The 116 neighbours of Anselin (1988, Spatial Econometrics, ch. 12), by the areas' numbers NEIG: 1 borders on
# 2, 5 and 6, and so on; each pair once.
ANSELIN = """
    1:2,5,6 2:3,6,7 3:4,7,37,38,39 4:37,39,40 5:6 6:7 7:8,9,18,36,38 8:18 9:18,20,32,36,38
    10:11,17,18,19 11:12,17 12:13,17 13:14,16,17 14:15,16 15:16 16:17,23 17:18,19,21,22,23 18:19,20
    19:20,21,31 20:31,32 21:22,31 22:23,31 23:24,25,29,31 24:25,29,30,31,33 25:26,27,29 26:27,28
    27:28,29 28:29,30 29:30 30:31,33,34 31:32,33 32:33,34,35,36 33:34,35 34:35,43 35:36,41,42,43
    36:37,38,40,42 37:38,39,40,42 39:40 40:41,42 41:42 43:44 44:45,46,49 45:46 46:47,48,49 47:48
"""


def anselin() -> tuple[Design, Array]:
    """Columbus with the neighbours of the book, which differ from those of the polygons."""
    made, y = case("columbus")
    row = {int(number): i for i, number in enumerate(frame("columbus")["NEIG"])}
    table = np.zeros((49, 49))
    for word in ANSELIN.split():
        one, others = word.split(":")
        for other in others.split(","):
            table[row[int(one)], row[int(other)]] = table[row[int(other)], row[int(one)]] = 1.0
    assert table.sum() == 232
    place = made.spatial.part.first  # type: ignore[union-attr]
    W = sparse.csr_array((table / table.sum(axis=1, keepdims=True))[place][:, place])
    return replace(made, neighbours=(Neighbours("book", "the book's", W),)), y


def test_published_values_of_columbus() -> None:
    # Anselin (1988) prints 5.72 and 9.36 for the two scores and 0.562 for λ; the further digits are those of
    # spdep lm.LMtests and spatialreg errorsarlm on his neighbours.
    one = run(*anselin())
    expected = (5.72313094604128, 9.36368356560473, 0.0794949291325358, 3.72004754869598)
    for kind, value in zip(("lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag"), expected, strict=True):
        found = Lagrange(kind).read(one, About("book", "book"))  # type: ignore[arg-type]
        assert found.statistic[0] == pytest.approx(value, rel=1e-9)
    fit = refit(SpatialError("ML", "normal"), "", one)
    assert float(dict(fit.account.items)["λ"]) == pytest.approx(0.5617902567195, abs=1e-6)
    np.testing.assert_allclose(
        fit.estimate, [59.8932193875026, -0.941311974099548, -0.302250212369492], rtol=1e-6
    )
    np.testing.assert_allclose(
        [r.se for r in fit.intervals], [5.36616248647578, 0.33056856667406, 0.0904760507369312], rtol=1e-6
    )
