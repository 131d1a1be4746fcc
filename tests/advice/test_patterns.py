"""Seasons and steps come before the dependence that they look like."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter

from clingstone.advice.mean import missing_part
from clingstone.covariance.fits import Fits
from clingstone.design.derived import onto
from clingstone.evidence import TESTS, gather
from clingstone.evidence.breaks import steps, with_step
from clingstone.evidence.season import with_season
from clingstone.ledger.ledger import weigh
from clingstone.run import one_thread
from tests.advice.test_repair import walk
from tests.ledger import factories as make

MONTHS = 108


def monthly(seed: int, rho: float, season: float = 0.0, step: float = 0.0, n: int = MONTHS) -> Fits:
    """A covariate without order, first-order errors of unit variance, a wave over the year, a step."""
    rng = np.random.default_rng([606, seed])
    t, x = np.arange(n), rng.standard_normal(n)
    u = lfilter([1.0], [1.0, -rho], np.sqrt(1 - rho**2) * rng.standard_normal(n + 200))[200:]
    y = 2.0 + 0.3 * x + u + season * np.cos(2 * np.pi * (t - 2) / 12) + step * (t >= 60)
    made = make.design({"x": x}, tick=t)
    made = replace(made, serial=replace(made.serial, unit="month"))
    return make.fits(made, y)


def test_a_strong_season_comes_first_and_the_order_in_time_stays_corrected():
    fits = monthly(1, 0.5, season=2.0)
    found, _short, refits, advice = walk(fits)
    assert found.missing.what == "season of the year"
    assert advice.state == "mean first"
    assert advice.because[0].rule in ("season-first", "mean-then-dependence")
    assert (advice.remedy, advice.at) == ("repaired-mean", "year")
    assert advice.repair.stays == ("day",)  # the name of the time column in these designs
    assert advice.repair.remedy in ("ar1", "hac")
    assert {"ar1", "repaired-mean", "ordinary"} <= {r.remedy for r in refits}
    assert "mean-as-well" not in [c.rule for c in advice.cautions]
    rho = {q.name: q.estimate for q in advice.repair.parameters if q.key == "serial"}["ρ"]
    assert 0.3 < rho < 0.7  # the simulated 0.5, not what the season makes of it


def test_a_season_over_independent_errors_leaves_nothing_to_correct():
    _found, _short, _refits, advice = walk(monthly(2, 0.0, season=1.5))
    assert advice.state == "mean first"
    assert advice.repair.goes == ("day",)
    assert advice.structures == frozenset()


def test_a_step_that_takes_the_dependence_with_it_comes_first():
    fits = monthly(3, 0.0, step=2.5)
    found, _short, _refits, advice = walk(fits)
    assert found.missing.what.startswith("step in the level, 60 months after the first time")
    assert advice.state == "mean first"
    assert {"step-chosen"} <= {c.rule for c in advice.cautions}
    assert "break-in-time" not in [c.rule for c in advice.cautions]


def test_first_order_errors_are_seldom_taken_for_a_season_or_a_step():
    """At most 1 of 12 at 1 %, divided among the patterns: two or more have a chance below 0.7 %."""
    tests = tuple(t for t in TESTS if t.primary or t.id in ("season", "break"))
    seen = 0
    for seed in range(12):
        fits = monthly(seed, (0.3, 0.6, 0.9)[seed % 3])
        with one_thread():
            evidence = gather(fits, tests)
            found = missing_part(fits, evidence, weigh(fits, evidence, ()))
        seen += found is not None and found.shows
    assert seen <= 1


def test_the_step_is_the_best_of_a_loop_over_times():
    fits = monthly(4, 0.0, step=1.0)
    times = steps(fits.design).times
    left = [onto(fits.response, with_at(fits, at)).ss[0] for at in times]
    assert onto(fits.response, with_step(fits)).ss[0] == pytest.approx(min(left), rel=1e-10)


def with_at(fits: Fits, at: float):
    from clingstone.design.derived import extend

    return extend(fits.design, "step", (fits.design.serial.elapsed >= at).astype(float))


def test_a_pattern_leaves_the_constant_what_it_was():
    """The added columns sum to zero: the constant is still the mean at x = 0, not that of one month."""
    fits = monthly(5, 0.0, season=2.0, step=1.0)
    design = fits.design
    for wide in (with_season(design, "year"), with_step(fits)):
        extra = (wide.Q @ wide.basis.R)[:, design.p :]
        assert np.allclose(extra.sum(axis=0), 0.0, atol=1e-9)


def curved(seed: int, season: float) -> Fits:
    """Nine years of months: a curve in x, with a season besides or without, over independent errors."""
    rng = np.random.default_rng([5, seed])
    t, x = np.arange(MONTHS), rng.standard_normal(MONTHS)
    y = 2.0 + 0.3 * x + 0.8 * x**2 + season * np.cos(2 * np.pi * (t - 2) / 12) + rng.standard_normal(MONTHS)
    made = make.design({"x": x}, tick=t)
    return make.fits(replace(made, serial=replace(made.serial, unit="month")), y)


def test_a_second_part_that_shows_with_the_first_in_is_repaired_as_well():
    found, _short, refits, advice = walk(curved(0, season=1.5))
    assert found.missing.what == "curve in x, and beside it a season of the year,"
    assert "the second part, once the first is in" in found.missing.sign
    assert (advice.state, advice.remedy, advice.at) == ("mean first", "repaired-mean", "x + year")
    assert advice.repair.goes == ("day",)
    assert advice.structures == frozenset()
    assert advice.headline.startswith("A curve in x, and beside it a season of the year, seems to be missing")
    repaired = next(r for r in refits if r.remedy == "repaired-mean")
    assert "curve in x, and beside it a season of the year" in repaired.name
    assert not repaired.name.endswith(",")


def test_one_part_is_not_told_as_two():
    found, _short, _refits, _advice = walk(curved(1, season=0.0))
    assert found.missing.what == "curve in x"


def test_a_predictor_that_follows_the_season_is_adjusted_for_it():
    """The repaired row is generalised least squares on [1, x, months], at the AR(1) it fitted."""
    fits = monthly(7, 0.5, season=2.0)
    t = np.arange(MONTHS)
    x = np.cos(2 * np.pi * (t - 2) / 12) + 0.5 * np.random.default_rng(9).standard_normal(MONTHS)
    made = make.design({"x": x}, tick=t)
    fits = make.fits(replace(made, serial=replace(made.serial, unit="month")), fits.response.residual[:, 0])
    _found, _short, refits, advice = walk(fits)
    assert (advice.remedy, advice.at) == ("repaired-mean", "year")
    months = (t[:, None] % 12 == np.arange(1, 12)).astype(float)
    X = np.column_stack([np.ones(MONTHS), x, months])
    rho = 0.0
    if advice.repair.remedy == "ar1":
        rho = {q.name: q.estimate for q in advice.repair.parameters if q.key == "serial"}["ρ"]
    W = np.linalg.inv(rho ** np.abs(np.subtract.outer(t, t)))
    y = fits.response.residual[:, 0] + fits.design.Q @ fits.response.coef[:, 0]
    slope = np.linalg.solve(X.T @ W @ X, X.T @ W @ y)[1]
    row = next(r for r in refits if r.remedy == "repaired-mean").intervals
    told = next(i for i in row if i.term == "x").estimate
    assert told == pytest.approx(slope, rel=1e-6)
