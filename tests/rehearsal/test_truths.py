"""The plausible set, and what is drawn from it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.evidence.gather import gather
from clingstone.ledger.ledger import weigh
from clingstone.ledger.region import loglik
from clingstone.maths import matern
from clingstone.needs import Limits
from clingstone.rehearsal.truths import INNER, draw, errors, truths
from clingstone.run import Run, Settings
from rehearsal.worlds import stream, trial, truth_of, wells


def found(f):
    return truths(f, weigh(f, gather(f)))


def test_the_estimate_both_ends_and_one_that_nobody_fitted():
    f = trial(icc=0.4, G=14)
    have = found(f)
    assert [t.name for t in have] == [
        "estimate",
        "share of clinic low",
        "share of clinic high",
        "unequal spread",
    ]
    assert "share of clinic" in have[0].words
    middle, low, high = (t.theta[0] for t in have[:3])
    assert low < middle < high
    # The ends lie where the likelihood ratio reaches the 80 % point of χ²₁.
    algebra = f.algebra(have[0].node)
    top = loglik(algebra, np.array([middle]), f.response)[0]
    for end in (low, high):
        drop = 2 * (top - loglik(algebra, np.array([end]), f.response)[0])
        assert drop == pytest.approx(stats.chi2.ppf(INNER, 1), rel=0.02)


def test_serial_and_spatial_truths_have_their_own_rival():
    assert found(stream())[-1].different == "noisy series"
    have = found(wells())
    assert have[-1].different == "smooth field"
    assert len(have) == 6
    assert have[0].words.endswith(" map units")


def sloped(sd: float, seed: int = 6) -> Fits:
    """Clinics whose slopes of a covariate by row differ by so much."""
    rng = np.random.default_rng(seed)
    clinic = np.repeat(np.arange(20), 12)
    x = rng.normal(size=240)
    y = rng.normal(size=240) + 0.5 * rng.normal(size=20)[clinic] + sd * rng.normal(size=20)[clinic] * x
    table = pd.DataFrame({"y": y, "x": x, "clinic": [f"c{v:02d}" for v in clinic]})
    settings = Settings(model="y ~ x", group="clinic", focus="x")
    return Fits(Case.of(table, settings).response, Run(settings))


def test_slopes_that_differ_are_simulated_where_they_are_seen():
    """Drawn slopes have the fitted spread: by ordinary lines per clinic, less what row noise gives them."""
    f = sloped(0.6)
    truth = next(t for t in found(f) if t.name == "differing slopes")
    assert "slopes of x differ between clinic with a standard deviation of" in truth.words
    said = float(truth.words.rsplit(" ", 1)[1])
    assert said == pytest.approx(0.6, abs=0.25)
    E = errors(truth, f, np.random.default_rng(1), 400)
    codes = f.design.partitions["clinic"].codes
    x = f.design.covariates["x"]
    seen, noise = [], []
    for c in range(20):
        own = x[codes == c] - x[codes == c].mean()
        seen.append(own @ E[codes == c] / (own @ own))
        noise.append(truth.sigma2 / (own @ own))
    spread = np.mean(np.square(seen)) - np.mean(noise)
    assert np.sqrt(spread) == pytest.approx(said, rel=0.05)
    assert not any(t.name == "differing slopes" for t in found(sloped(0.0)))


def test_an_estimate_at_zero_has_an_upper_end_only():
    f = trial(icc=0.0, seed=8)
    have = found(f)
    assert f[frozenset({"group:clinic"})].at_bound[0, 0]
    assert [t.name for t in have] == ["estimate", "share of clinic high", "unequal spread"]


def test_the_noisy_series_keeps_variance_and_neighbours():
    f = stream(n=40)
    truth = truth_of(f, ["serial"], "noisy series", theta=[np.arctanh(0.6)])
    B = 20_000
    Y = errors(truth, f, np.random.default_rng(0), B) / np.sqrt(truth.sigma2)
    assert np.mean(Y**2) == pytest.approx(1, abs=0.02)
    assert np.mean(Y[1:] * Y[:-1]) == pytest.approx(0.6, abs=0.02)
    # AR(1) would give 0.36 two steps apart; 0.8 of the variance with ρ = 0.75 gives 0.45.
    assert np.mean(Y[2:] * Y[:-2]) == pytest.approx(0.45, abs=0.02)


def test_the_smooth_field_keeps_variance_and_practical_range():
    f = wells(S=30)
    truth = truth_of(f, ["spatial"], "smooth field", theta=[np.log(0.2), np.log(2.0)])
    Y = errors(truth, f, np.random.default_rng(1), 30_000) / np.sqrt(truth.sigma2)
    got = np.cov(Y)
    reach = 0.2 * matern.PRACTICAL[0.5] / matern.PRACTICAL[1.5]
    piece = f.algebra(["spatial"]).pieces[0]
    place = piece.sites.part.codes
    want = np.eye(30) + 2.0 * matern.kernel(piece.distance, reach, 1.5)[np.ix_(place, place)]
    assert np.abs(got - want).max() < 0.15
    far = matern.kernel(np.array([[0.2 * matern.PRACTICAL[0.5]]]), reach, 1.5)
    assert far[0, 0] == pytest.approx(0.05, abs=1e-3)


def test_the_smooth_field_is_drawn_beyond_the_dense_limit_too():
    f = wells(S=60)
    few = Fits(f.response, replace(f.run, limits=Limits(dense_sites=50)))
    truth = truth_of(few, ["spatial"], "smooth field", theta=[np.log(0.2), np.log(2.0)])
    Y = errors(truth, few, np.random.default_rng(1), 30_000) / np.sqrt(truth.sigma2)
    reach = 0.2 * matern.PRACTICAL[0.5] / matern.PRACTICAL[1.5]
    dense = f.algebra(["spatial"]).pieces[0]
    place = dense.sites.part.codes
    want = np.eye(60) + 2.0 * matern.kernel(dense.distance, reach, 1.5)[np.ix_(place, place)]
    # Monte Carlo leaves 3·√(2/30,000) ≈ 0.02 of a variance; 20 earlier places of up to 59 add to it.
    assert np.abs(np.cov(Y) - want).max() < 0.2


def test_spread_follows_the_fitted_values():
    f = trial()
    truth = truth_of(f, ["group:clinic"], "unequal spread", theta=[-30.0])
    Y = errors(truth, f, np.random.default_rng(2), 4000)
    variance = Y.var(axis=1) / truth.sigma2
    assert variance.mean() == pytest.approx(1, abs=0.02)
    fitted = f.design.Q @ f.response.coef[:, 0]
    z = (fitted - fitted.mean()) / fitted.std()
    slope = np.polyfit(z[np.abs(z) < 2], np.log2(variance[np.abs(z) < 2]), 1)[0]
    assert slope == pytest.approx(1.0, abs=0.05)  # two-fold for each standard deviation


def test_draws_are_those_of_the_model_and_of_the_generator():
    f = trial(G=6, m=5)
    truth = truth_of(f, ["group:clinic"], theta=[0.0])
    one, same = (draw(truth, f, np.random.default_rng(5), 3000) for _ in range(2))
    assert np.array_equal(one.residual, same.residual)
    V = f.algebra(truth.node).dense(np.array(truth.theta)) * truth.sigma2
    got = one.coef @ one.coef.T / 3000
    want = f.design.Q.T @ V @ f.design.Q
    assert np.abs(got - want).max() < 5 * np.abs(want).max() / np.sqrt(3000)
