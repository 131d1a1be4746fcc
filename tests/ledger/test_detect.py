"""The smallest detectable size against closed-form power."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from clingstone.evidence import TESTS, gather
from clingstone.ledger.detect import _groups, _series, _sites, detectable, power, primary_test, smallest
from clingstone.ledger.ledger import weigh
from clingstone.run import one_thread
from tests.ledger import factories as make


def silent_groups(G: int = 15, m: int = 8):
    rng = np.random.default_rng(1)
    clinic = np.repeat(np.arange(G), m)
    f = make.fits(make.design({}, groups={"clinic": clinic}), rng.standard_normal(G * m))
    return f


def test_group_size_agrees_with_the_power_of_the_f_test():
    """Balanced one-way: F/(1 + mλ) is F(G−1, n−G), so power has a closed form (Scheffé 1959)."""
    G, m = 15, 8
    f = silent_groups(G, m)
    with one_thread():
        ledger = weigh(f, gather(f))
    standing = ledger.of("group:clinic")
    assert standing.p_alone > 0.05
    (found,) = ledger.detectable
    cut = stats.f.isf(0.05, G - 1, G * (m - 1))

    def lacking(icc: float) -> float:
        return float(stats.f.sf(cut / (1 + m * icc / (1 - icc)), G - 1, G * (m - 1))) - 0.8

    exact = optimize.brentq(lacking, 0.001, 0.9)
    # power from 200 draws: ± 0.028 at 80 %, about ± 0.02 in the ICC here
    assert found.value == pytest.approx(exact, abs=0.03)
    assert f"{found.value:.2g}" in found.sentence
    assert found.parameter == "intraclass correlation"


def test_draws_have_the_correlation_that_they_claim():
    rng = np.random.default_rng(2)
    f = silent_groups()
    e = _groups(f.design.group.levels[0])(0.3, rng, 4000)
    assert np.mean(e[0] * e[1]) == pytest.approx(0.3, abs=0.05)
    assert np.mean(e[0] * e[8]) == pytest.approx(0.0, abs=0.05)
    assert np.mean(e[0] ** 2) == pytest.approx(1.0, abs=0.07)
    tick = np.array([0, 1, 3, 0, 1])
    series = make.design({}, series=np.array([0, 0, 0, 1, 1]), tick=tick).serial
    e = _series(series)(0.6, rng, 6000)
    assert np.mean(e[0] * e[1]) == pytest.approx(0.6, abs=0.05)
    assert np.mean(e[1] * e[2]) == pytest.approx(0.36, abs=0.05)
    assert np.mean(e[2] * e[3]) == pytest.approx(0.0, abs=0.05)


def test_rows_of_one_time_are_repeats_not_copies():
    """Half of the variance runs along time: rows of a time correlate ½, rows of the next ρ/2."""
    day = np.repeat(np.arange(20), 2)
    f = make.fits(make.design({}, tick=day), np.zeros(40))
    assert f.design.serial.repeats
    Y = _series(f.design.serial)(0.6, np.random.default_rng(3), 40_000)
    found = np.corrcoef(Y)
    assert found[0, 1] == pytest.approx(0.5, abs=0.02)  # 4 standard errors of 0.005
    assert found[0, 2] == pytest.approx(0.3, abs=0.02)
    assert np.var(Y) == pytest.approx(1.0, abs=0.02)


def test_power_rises_with_the_size_and_starts_at_the_level():
    f = silent_groups()
    with one_thread():
        standing = weigh(f, gather(f)).standing[0]
        test, about = primary_test(f, standing, TESTS)
        draw = _groups(f.design.group.levels[0])
        at = [power(f, test, about, draw, v, "here") for v in (0.0, 0.1, 0.3, 0.6)]
    assert at == sorted(at)
    assert at[0] == pytest.approx(0.05, abs=0.05)
    assert at[-1] > 0.95


def test_a_design_that_can_show_nothing_says_so():
    rng = np.random.default_rng(3)
    clinic = np.repeat(np.arange(2), 4)
    f = make.fits(make.design({}, groups={"clinic": clinic}), rng.standard_normal(8))
    with one_thread():
        test, about = primary_test(f, weigh(f, gather(f)).standing[0], TESTS)
        value = smallest(f, test, about, _groups(f.design.group.levels[0]), "here")
    assert np.isnan(value)


def test_large_data_show_small_correlations():
    """The search is on a log scale: 200 groups of 20 see an ICC near 0.01 (closed form 0.0142)."""
    f = silent_groups(200, 20)
    with one_thread():
        test, about = primary_test(f, weigh(f, gather(f)).standing[0], TESTS)
        value = smallest(f, test, about, _groups(f.design.group.levels[0]), "here")
    cut = stats.f.isf(0.05, 199, 200 * 19)
    ratio = cut / stats.f.isf(0.8, 199, 200 * 19)  # 1 + mλ at 80 %
    exact = (ratio - 1) / 20 / (1 + (ratio - 1) / 20)
    assert value == pytest.approx(exact, rel=0.15)


def test_same_seed_same_number():
    with one_thread():
        first, second = (weigh(f, gather(f)).detectable for f in (silent_groups(), silent_groups()))
    assert first == second


def test_power_is_counted_at_the_level_that_a_verdict_needs():
    """Among three primary tests the smallest p has to be below 0.05/3: the F power at that level."""
    G, m = 15, 8
    f = silent_groups(G, m)
    with one_thread():
        evidence = gather(f)
        standing = weigh(f, evidence).standing
        (one,) = detectable(f, standing, TESTS, primary=1)
        (three,) = detectable(f, standing, TESTS, primary=3)
    cut = stats.f.isf(0.05 / 3, G - 1, G * (m - 1))

    def lacking(icc: float) -> float:
        return float(stats.f.sf(cut / (1 + m * icc / (1 - icc)), G - 1, G * (m - 1))) - 0.8

    assert three.value == pytest.approx(optimize.brentq(lacking, 0.001, 0.9), abs=0.03)
    assert three.value > one.value


def test_a_field_that_is_looked_for_fades_over_a_third_of_the_map():
    rng = np.random.default_rng(4)
    xy = rng.uniform(0, 10, (40, 2))
    f = make.fits(make.design({"x": xy[:, 0]}, xy=xy), rng.standard_normal(40))
    draw = _sites(f)
    e = draw(1.0, rng, 4000)
    far = np.linalg.norm(xy[0] - xy[1:], axis=1)
    seen = e[1:] @ e[0] / 4000
    reach = f.design.spatial.extent / 3
    np.testing.assert_allclose(seen, np.exp(-3 * far / reach), atol=0.07)
