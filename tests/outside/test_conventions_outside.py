"""The convention lines of cluster-robust and mixed rows against the library whose number each is.

The sleep study (lme4) with the last four days of its first five subjects left out. R 4.2.2 with sandwich
3.0.2 and clubSandwich 0.5.8, m <- lm(Reaction ~ Days); Python libraries are run here.
"""

from __future__ import annotations

import re

import numpy as np
import pytest
from scipy import optimize, stats
from tests.outside.test_remedies_outside import columns, data
from tests.remedies.cases import design, fits

from clingstone.covariance import profile
from clingstone.remedies import explain, refit, remedy

CR1 = "CR1, factor G/(G − 1), t with G − 1 df"
CR1S = "CR1 with the further factor (n − 1)/(n − p), t with G − 1 df"
NORMAL = "CR1 with both factors and a normal quantile"


@pytest.fixture(scope="module")
def frame():
    d = data("lme4", "sleepstudy")
    first = sorted(d.Subject.unique())[:5]
    return d[~(d.Subject.isin(first) & (d.Days > 5))]


@pytest.fixture(scope="module")
def run(frame):
    return fits(design(columns(frame.Days), group=frame.Subject.to_numpy()), frame.Reaction.to_numpy(float))


@pytest.fixture(scope="module")
def lines(run):
    """The slope's row under every convention, by its words."""
    return {words: rows[1] for words, rows in explain(remedy("cluster-robust"), "clinic", run)}


@pytest.mark.parametrize(
    ("words", "theirs", "call"),
    [
        ("CR0 with a normal quantile", 1.71318612209, "vcovCL(m, ~Subject, type = 'HC0', cadjust = FALSE)"),
        (CR1, 1.76285397614, "vcovCL(m, ~Subject, type = 'HC0'); vcovCR(m, Subject, 'CR1')"),
        (CR1S, 1.76842382881, "vcovCL(m, ~Subject, type = 'HC1'); vcovCR(m, Subject, 'CR1S')"),
        ("CR2 with G − 1 df", 1.77980413316, "vcovCR(m, Subject, 'CR2')"),
        ("CR3 with G − 1 df", 1.84906766419, "vcovCR(m, Subject, 'CR3')"),
    ],
)
def test_r(lines, words, theirs, call) -> None:
    assert lines[words].se == pytest.approx(theirs, rel=1e-10), call


def test_what_sandwich_calls_hc2_and_hc3_has_the_factor_on_top(lines) -> None:
    # vcovCL(m, ~Subject, type = "HC2" or "HC3") has G/(G − 1) on top of a factor without it: their product
    # is CR2 and CR3. With cadjust = FALSE the root of (G − 1)/G stays.
    root = np.sqrt(17 / 18)
    assert lines["CR2 with G − 1 df"].se * root == pytest.approx(1.72965871378, rel=1e-10)
    assert lines["CR3 with G − 1 df"].se * root == pytest.approx(1.79697076671, rel=1e-10)


def test_statsmodels(frame, lines) -> None:
    import statsmodels.api as sm

    model = sm.OLS(frame.Reaction.to_numpy(float), columns(frame.Days))
    groups = np.unique(frame.Subject, return_inverse=True)[1]
    for t, correct, words in (
        (False, True, NORMAL),
        (True, True, CR1S),
        (False, False, "CR0 with a normal quantile"),
    ):
        theirs = model.fit(
            cov_type="cluster", cov_kwds={"groups": groups, "use_correction": correct}, use_t=t
        )
        mine = lines[words]
        assert mine.se == pytest.approx(theirs.bse[1], rel=1e-9)
        assert (mine.low, mine.high) == pytest.approx(tuple(theirs.conf_int()[1]), rel=1e-9)
        assert mine.p == pytest.approx(theirs.pvalues[1], rel=1e-7)


def test_pyfixest(frame, lines) -> None:
    pyfixest = pytest.importorskip("pyfixest")
    theirs = pyfixest.feols("Reaction ~ Days", frame, vcov={"CRV1": "Subject"})
    mine = lines[CR1S]
    assert mine.se == pytest.approx(float(theirs.se()["Days"]), rel=1e-8)
    assert (mine.low, mine.high) == pytest.approx(tuple(theirs.confint().loc["Days"]), rel=1e-8)


def test_satterthwaite_is_clubsandwichs(run) -> None:
    # coef_test(m, "CR2", Subject, test = "Satterthwaite"): p of the slope 6.720241673e-06.
    row = refit(remedy("cluster-robust"), "clinic", run).intervals[1]
    assert row.p == pytest.approx(6.720241673e-06, rel=1e-8)


def linearmodels_se(frame, **switches) -> float:
    panel = pytest.importorskip("linearmodels.panel")
    rows = frame.assign(constant=1.0).set_index(["Subject", "Days"], drop=False)
    model = panel.PooledOLS(rows["Reaction"].astype(float), rows[["constant", "Days"]].astype(float))
    return float(model.fit(cov_type="clustered", cluster_entity=True, **switches).std_errors["Days"])


@pytest.mark.parametrize(
    ("debiased", "grouped", "factor"),
    [(False, False, 1.0), (False, True, 18 / 17 * 159 / 160), (True, False, 160 / 158)],
)
def test_linearmodels_has_the_two_factors_apart(frame, lines, debiased, grouped, factor) -> None:
    bare = lines["CR0 with a normal quantile"].se
    assert len(frame) == 160
    theirs = linearmodels_se(frame, debiased=debiased, group_debias=grouped)
    assert theirs == pytest.approx(bare * np.sqrt(factor), rel=1e-9)


def test_linearmodels_with_both_switches_is_a_line(frame, lines) -> None:
    theirs = linearmodels_se(frame, debiased=True, group_debias=True)
    assert theirs == pytest.approx(lines[CR1S].se, rel=1e-9)


# ---- the random intercept ----------------------------------------------------------------------------


def test_mixed_lines_are_lme4s_and_pbkrtests(run) -> None:
    # lme4 1.1.31, lmer(Reaction ~ Days + (1 | Subject)): estimate, standard errors by REML and by ML;
    # pbkrtest 0.5.2: vcovAdj, and the ddf of KRmodcomp.
    row = refit(remedy("mixed-intercept"), "clinic", run).intervals[1]
    assert row.estimate == pytest.approx(11.3226193205, rel=1e-6)
    assert row.se == pytest.approx(0.86629319896, rel=1e-6)
    assert row.df == pytest.approx(143.341216037, rel=1e-5)
    found = {words: rows[1] for words, rows in explain(remedy("mixed-intercept"), "clinic", run)}
    assert found["the same fit, normal quantile"].se == pytest.approx(0.865355200335, rel=1e-6)
    ml = found["maximum likelihood in place of REML, normal quantile"]
    assert ml.se == pytest.approx(0.862185397156, rel=1e-5)


def test_profile_interval_of_the_mixed_row_is_where_the_restricted_likelihood_has_risen(frame, run) -> None:
    # The same walk on the likelihood itself equals lme4's: tests/covariance/test_profile.py.
    items = dict(refit(remedy("mixed-intercept"), "clinic", run).account.items)
    words = items["standard deviation of the intercept between clinic"]
    estimate, low, high = (float(v) for v in re.findall(r"[\d.]+(?= \(| to|\))", words))
    X, y = columns(frame.Days), frame.Reaction.to_numpy(float)
    same = np.equal.outer(frame.Subject.to_numpy(), frame.Subject.to_numpy()).astype(float)

    def least(sd: float) -> float:
        """−2ℓ_R at a standard deviation between subjects, at the best row noise."""

        def value(log_s: float) -> float:
            V = sd**2 * same + np.exp(2 * log_s) * np.eye(len(y))
            ViX = np.linalg.solve(V, X)
            e = y - X @ np.linalg.solve(X.T @ ViX, ViX.T @ y)
            return np.linalg.slogdet(V)[1] + np.linalg.slogdet(X.T @ ViX)[1] + e @ np.linalg.solve(V, e)

        return float(optimize.minimize_scalar(value, bracket=(3.3, 3.5)).fun)

    for end in (low, high):
        # Ends are printed to three digits.
        assert least(end) - least(estimate) == pytest.approx(stats.chi2.isf(0.05, 1), abs=0.05)


def test_a_profile_that_is_dear_is_said_to_be_left_out(run, monkeypatch) -> None:
    monkeypatch.setattr(profile, "WORK", 10)
    items = dict(refit(remedy("mixed-intercept"), "clinic", run).account.items)
    assert "all 18 groups" in items["profile intervals of what varies"]
    assert "profile interval" not in items["standard deviation of row noise"]


# clubSandwich 0.5.8, vcovCR(lmer(Reaction ~ Days + (1 | Subject)), type = ...): the slope's standard errors.
CLUB = {"CR0": 1.53282740909, "CR1": 1.57726639156, "CR2": 1.58742681891, "CR3": 1.64313352561}


def test_mixed_robust_lines_are_clubsandwichs(run) -> None:
    found = {words: rows[1] for words, rows in explain(remedy("mixed-robust"), "clinic", run)}
    assert found["CR0 with a normal quantile"].se == pytest.approx(CLUB["CR0"], rel=1e-6)
    assert found["CR1, factor G/(G − 1), t with G − 1 df"].se == pytest.approx(CLUB["CR1"], rel=1e-6)
    assert found["CR3 with its own Satterthwaite df"].se == pytest.approx(CLUB["CR3"], rel=1e-6)


def test_what_clubsandwich_calls_cr2_of_a_mixed_model_takes_another_root(frame, run) -> None:
    # Any root of the correction is unbiased under V̂. Here it is the symmetric one in the whitened rows;
    # there, with V̂_g = D'D, it is D'{D(V̂_g − X_g(X'V̂⁻¹X)⁻¹X_g')D'}^{−½}D in the rows themselves.
    key = frozenset({"group:clinic"})
    theta = run[key].theta[:, 0]
    V = run.algebra(key).dense(theta)
    X, y = columns(frame.Days), frame.Reaction.to_numpy(float)
    A = np.linalg.inv(X.T @ np.linalg.solve(V, X))
    e = y - X @ (A @ X.T @ np.linalg.solve(V, y))
    meat = np.zeros((2, 2))
    for g in frame.Subject.unique():
        own = frame.Subject.to_numpy() == g
        Vg, Xg = V[np.ix_(own, own)], X[own]
        D = np.linalg.cholesky(Vg).T
        size, U = np.linalg.eigh(D @ (Vg - Xg @ A @ Xg.T) @ D.T)
        score = Xg.T @ np.linalg.solve(Vg, D.T @ (U / np.sqrt(size)) @ U.T @ D @ e[own])
        meat += np.outer(score, score)
    assert np.sqrt((A @ meat @ A)[1, 1]) == pytest.approx(CLUB["CR2"], rel=1e-6)
    ours = refit(remedy("mixed-robust"), "clinic", run).intervals[1]
    assert ours.se == pytest.approx(CLUB["CR2"], rel=5e-4)
    # coef_test(m, "CR2", test = "Satterthwaite"): 14.0888587711 df, which hardly know the root.
    assert ours.df == pytest.approx(14.0888587711, rel=1e-4)
