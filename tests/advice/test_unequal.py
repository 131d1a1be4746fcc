"""Unequal spread, differing slopes, other orders in time and smooth covariates, from data to advice."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from clingstone.advice import order, smooth
from clingstone.advice.choose import settle, shortlist_for
from clingstone.advice.facts import facts
from clingstone.evidence import gather
from clingstone.evidence.whitened import whitened
from clingstone.ledger.ledger import weigh
from clingstone.run import one_thread
from tests.advice import synthetic
from tests.ledger import factories as make

PLAIN = (("ordinary", ""), ("cluster-robust", "clinic"), ("mixed-intercept", "clinic"))


def advise(fits):
    with one_thread():
        evidence = gather(fits)
        found = facts(fits, evidence, weigh(fits, evidence))
        short = shortlist_for(found, fits)
        return settle(short, found, short.refit(fits))


def test_unequal_spread_alone_is_carried_by_the_rows():
    """Spread grows to both ends of x: no structure, and yet not the ordinary interval."""
    rng = np.random.default_rng(4)
    x = rng.uniform(-2, 2, 200)
    y = x + (0.3 + np.abs(x)) * rng.standard_normal(200)
    advice = advise(make.fits(make.design({"x": x}, groups={"g": np.repeat(np.arange(100), 2)}), y))
    assert (advice.state, advice.remedy) == ("supported", "heteroscedasticity-robust")
    assert not advice.structures
    assert advice.because[-1].rule == "spread-alone"
    assert "the residuals spread unequally with" in advice.headline


def test_slopes_that_differ_are_covered_where_nothing_else_is():
    rng = np.random.default_rng(2)
    g = np.repeat(np.arange(14), 8)
    x = rng.standard_normal(112)
    x -= (np.bincount(g, x) / 8)[g]
    y = (0.3 + 0.8 * rng.standard_normal(14)[g]) * x + rng.standard_normal(112)
    y -= (np.bincount(g, y) / 8)[g]  # no group is higher than another
    advice = advise(make.fits(make.design({"x": x}, groups={"g": g}), y))
    assert advice.remedy == "cluster-robust"
    assert advice.because[-1].rule == "slopes-alone"
    assert "slopes of x differ between groups" in advice.headline


def test_a_coefficient_that_mixes_two_effects_lowers_the_state_and_the_split_leads():
    rng = np.random.default_rng(3)
    g = np.repeat(np.arange(24), 6)
    a = rng.standard_normal(24)[g]
    x = a + rng.standard_normal(144)
    y = 0.5 * x + 1.2 * a + rng.standard_normal(144)
    advice = advise(make.fits(make.design({"x": x}, groups={"g": g}), y))
    assert advice.state == "supported with caveat"
    assert "between-differs" in {c.rule for c in advice.cautions}
    assert "mixes two effects" in advice.headline
    first = next(c.remedy for c in advice.alternatives if c.remedy != "repaired-mean")
    assert first == "within-between"


def noisy(rng, n: int, B: int):
    e = signal.lfilter([1.0], [1.0, -0.9], rng.standard_normal((n + 100, B)), axis=0)[100:]
    return e / e.std() + rng.standard_normal((n, B))


def test_what_a_first_order_leaves_over_is_seen_at_its_level_and_under_noise():
    """At 5 %: 150 series of AR(1) (Monte-Carlo error 1.8 points), and of AR(1) under noise."""
    rng = np.random.default_rng(7)
    design = make.design({"x": rng.standard_normal(200)}, tick=np.arange(200))
    with one_thread():
        null = [order.left_over(make.fits(design, make.ar1(rng, 1, 200, 0.6))) for _ in range(150)]
        other = [order.left_over(make.fits(design, e)) for e in noisy(rng, 200, 40).T]
    assert np.mean(np.array(null) < 0.05) < 0.11
    assert np.mean(np.array(other) < 0.05) > 0.5


def test_whitened_residuals_are_those_of_the_process_written_out():
    rng = np.random.default_rng(8)
    fits = make.fits(
        make.design({"x": rng.standard_normal(60)}, tick=np.arange(60)), make.ar1(rng, 1, 60, 0.6)
    )
    white = whitened(fits, frozenset({"serial"})).residual[:, 0]
    rho = float(fits[{"serial"}].shape["serial.rho"][0])
    V = rho ** np.abs(np.subtract.outer(np.arange(60), np.arange(60)))
    Q, y = fits.design.Q, fits.design.Q @ fits.response.coef[:, 0] + fits.response.residual[:, 0]
    e = y - Q @ np.linalg.solve(Q.T @ np.linalg.solve(V, Q), Q.T @ np.linalg.solve(V, y))
    slow = np.linalg.solve(np.linalg.cholesky(V), e)
    assert abs(np.corrcoef(white, slow)[0, 1]) == pytest.approx(1.0, abs=1e-8)


def test_a_first_order_that_does_not_fit_gives_way_to_the_long_run_variance():
    rng = np.random.default_rng(9)
    e = noisy(rng, 300, 1)[:, 0]
    advice = advise(make.fits(make.design({"x": make.ar1(rng, 1, 300, 0.5)}, tick=np.arange(300)), e))
    assert advice.remedy == "hac"
    assert advice.because[-1].rule == "another-order-in-time"


def test_a_spread_that_dependence_feigns_steers_nothing():
    """Squares of AR(1) errors move as slowly as the predictor: seen alone, gone given the order in time."""
    rng = np.random.default_rng(0)
    n, x = 400, np.cos(2 * np.pi * np.arange(400) / 400)
    feigned = 0
    for _ in range(12):
        fits = make.fits(make.design({"x": x}, tick=np.arange(n)), make.ar1(rng, 1, n, 0.7))
        with one_thread():
            evidence = gather(fits)
            found = facts(fits, evidence, weigh(fits, evidence))
        alone = [f for f in evidence if f.test == "heteroscedasticity" and not f.given]
        if min(f.p for f in alone) * len(alone) < 0.05:
            feigned += 1
            assert not found.says("unequal variances")
    assert feigned >= 2


def test_a_spread_that_is_there_shows_given_the_dependence_too():
    rng = np.random.default_rng(5)
    n, x = 400, np.cos(2 * np.pi * np.arange(400) / 400)
    y = np.exp(0.4 * x) * make.ar1(rng, 1, n, 0.7)
    advice = advise(make.fits(make.design({"x": x}, tick=np.arange(n)), y))
    assert advice.remedy == "hac"
    assert advice.because[-1].rule == "another-order-in-time"


def test_a_cycle_in_the_errors_is_not_called_corrected():
    rng = np.random.default_rng(37)
    e = rng.standard_normal(132)
    for t in range(12, 132):
        e[t] = 0.8 * e[t - 12] + 0.6 * e[t]
    fits = make.fits(make.design({"x": rng.standard_normal(132)}, tick=np.arange(132)), e)
    assert order.returning(fits.response)[0] == 12
    advice = advise(fits)
    assert advice.state == "not correctable"
    assert "comes back after 12 steps" in advice.because[0].sentence


def test_covariates_that_bend_like_time_place_or_groups():
    rng = np.random.default_rng(11)
    t, g = np.arange(60), np.repeat(np.arange(10), 6)
    xy = rng.uniform(0, 10, (60, 2))
    rough = rng.standard_normal(60)
    month = rng.standard_normal(12)[t % 12] + 0.3 * rough
    along = make.design({"slow": np.sin(t / 12), "month": month, "rough": rough}, tick=t)
    over = make.design({"east": xy[:, 0], "rough": rough}, xy=xy)
    of = make.design({"z": rng.standard_normal(10)[g], "rough": rough}, groups={"g": g})
    found = [
        smooth.smooth_in(d, k) for d, k in ((along, "slow"), (along, "month"), (over, "east"), (of, "z"))
    ]
    assert found == ["serial", "serial", "spatial", "group"]
    assert [smooth.smooth_in(d, "rough") for d in (along, over, of)] == [None, None, None]


def test_the_robust_pooled_interval_is_not_led_to_where_it_mixes_two_effects():
    """A random intercept leans on what differs within groups; pooled rows lean on both."""
    values = {"groups": 20, "effective_clusters": 8.0, "focus_at_group_level": False}
    refits = tuple(synthetic.refit(k, a, 9.0) for k, a in PLAIN)
    for differs, remedy in ((False, "cluster-robust"), (True, "mixed-intercept")):
        found = synthetic.facts(
            synthetic.ledger(group="present"),
            group_level="clinic",
            mixed_level="clinic",
            between_differs_from_within=differs,
            **values,
        )
        assert settle(synthetic.shortlist(found, refits), found, refits).remedy == remedy


def test_a_season_of_two_calendar_years_comes_first_though_dependence_takes_most_of_it():
    """730 days are two years of the calendar, and not quite twice 365.25 days."""
    rng = np.random.default_rng(12)
    n = 730
    e = make.ar1(rng, 1, n, 0.7)
    y = e + 1.5 * e.std() * np.cos(2 * np.pi * np.arange(n) / 365.25)
    advice = advise(make.fits(make.design({"x": (np.arange(n) >= 365) * 1.0}, tick=np.arange(n)), y))
    assert advice.state == "mean first"
    assert advice.because[0].rule == "season-first"
    assert "season of the year" in advice.headline
