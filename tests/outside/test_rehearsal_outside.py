"""What a rehearsal reads on a batch, against statsmodels column by column; a coverage known in closed form.

Libraries: statsmodels (MixedLM, OLS with cluster covariance), scipy (F and t laws). Nothing is downloaded.
"""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pytest
from scipy import integrate, stats
from statsmodels.regression.linear_model import OLS
from statsmodels.regression.mixed_linear_model import MixedLM

from clingstone.covariance.fits import Fits
from clingstone.rehearsal.study import FIELDS, Contender, read, study
from clingstone.rehearsal.truths import Truth, draw
from clingstone.remedies.sandwich import ClusterRobust
from remedies.cases import design, fits

G, M = 12, 9


def world(icc: float):
    rng = np.random.default_rng(1)
    clinic = np.repeat(np.arange(G), M)
    X = np.column_stack([np.ones(G * M), (clinic % 2).astype(float), rng.normal(size=G * M)])
    f = fits(design(X, ["constant", "arm", "age"], group=clinic), rng.normal(size=G * M))
    truth = Truth("known", "", ("group:clinic",), (float(np.log(icc / (1 - icc))),), 1 - icc)
    return f, X, clinic, truth


def test_mixed_estimates_of_a_batch_are_those_of_mixedlm():
    """statsmodels MixedLM(reml=True) on each column: fixed effects to 1e-4 of their standard errors.

    Columns whose variance between clinics is estimated at zero are left out: MixedLM stops beside zero.
    """
    f, X, clinic, truth = world(0.5)
    found, _ = study(f, [truth], [("mixed-intercept", "clinic")])
    many = Fits(draw(truth, f, np.random.default_rng(2), 6), f.run)
    batch = read(found.contenders[0], many)
    Y = f.design.Q @ many.response.coef + many.response.residual
    inner = np.flatnonzero(~batch.boundary)
    assert len(inner) >= 4
    for b in inner:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            one = MixedLM(Y[:, b], X, groups=clinic).fit(reml=True)
        error = np.asarray(one.bse_fe)[1:]
        assert np.abs(batch.estimate[:, b] - np.asarray(one.fe_params)[1:]).max() < 1e-4 * error.max()


def test_cluster_robust_intervals_of_a_batch_are_those_of_statsmodels():
    """statsmodels OLS(cov_type="cluster"), its own factor G/(G−1)·(n−1)/(n−p) and G − 1 df (CR1S)."""
    f, X, clinic, truth = world(0.3)
    chosen = replace(ClusterRobust(kind="CR1S", df="clusters"), at="clinic")
    contender = Contender(chosen, chosen.prepare(f.design), (1, 2))
    many = Fits(draw(truth, f, np.random.default_rng(3), 5), f.run)
    batch = read(contender, many)
    Y = f.design.Q @ many.response.coef + many.response.residual
    for b in range(5):
        one = OLS(Y[:, b], X).fit(cov_type="cluster", cov_kwds={"groups": clinic}, use_t=True)
        want = one.conf_int(0.05)[1:]
        assert np.stack([batch.low[:, b], batch.high[:, b]], axis=1) == pytest.approx(want, rel=1e-8)


@pytest.mark.parametrize("icc", [0.05, 0.23])
def test_the_coverage_of_the_ordinary_interval_is_that_of_its_law(icc):
    """Balanced two arms by clinic, no covariate: with S_b ~ (1 + (m−1)ρ)χ² on G − 2 df and
    S_w ~ (1 − ρ)χ² on G(m−1), both independent of the estimate, coverage is
    E[2Φ(t √((S_b + S_w)/((n − 2)(1 + (m − 1)ρ)))) − 1]."""
    rng = np.random.default_rng(1)
    clinic = np.repeat(np.arange(G), M)
    X = np.column_stack([np.ones(G * M), (clinic % 2).astype(float)])
    f = fits(design(X, ["constant", "arm"], group=clinic), rng.normal(size=G * M))
    truth = Truth("known", "", ("group:clinic",), (float(np.log(icc / (1 - icc))),), 1 - icc)
    found, _ = study(f, [truth], [("ordinary", "")])
    B, covered = 20_000, 0.0
    for job in found.jobs(B):
        covered += found.run(job).sums[0, 0, FIELDS.index("covered")]
    n, between = G * M, 1 + (M - 1) * icc
    t = stats.t.ppf(0.975, n - 2)

    def inside(b: float, w: float) -> float:
        s2 = (between * b + (1 - icc) * w) / (n - 2)
        return (2 * stats.norm.cdf(t * np.sqrt(s2 / between)) - 1) * (
            stats.chi2.pdf(b, G - 2) * stats.chi2.pdf(w, G * (M - 1))
        )

    low, high = stats.chi2.ppf([1e-6, 1 - 1e-6], G * (M - 1))
    want = integrate.dblquad(inside, low, high, 0, stats.chi2.isf(1e-7, G - 2), epsabs=1e-5)[0]
    assert covered / B == pytest.approx(want, abs=4 * np.sqrt(want * (1 - want) / B))
    assert want < 0.95
