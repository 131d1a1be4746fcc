"""Residuals by elapsed time as a figure draws them."""

from __future__ import annotations

import numpy as np

from clingstone.evidence.serial import DurbinWatson
from clingstone.evidence.traces import PANELS, POINTS, traces
from tests.evidence.factories import design, fits


def test_one_series_is_one_line_of_its_residuals() -> None:
    rng = np.random.default_rng(1)
    made = fits(design(rng.standard_normal(50), time=np.arange(50)), rng.standard_normal(50))
    found = traces(made)
    (time, value) = next(iter(found.lines.values()))
    assert time == tuple(float(t) for t in range(50))
    np.testing.assert_allclose(value, made.response.residual[:, 0])
    assert found.x == found.low == ()
    assert found.note == ""
    assert DurbinWatson().more(made, DurbinWatson().abouts(made.design)[0]) == (found,)


def test_of_many_series_twelve_stand_evenly_by_their_mean_and_all_in_the_band() -> None:
    rng = np.random.default_rng(2)
    who, time = np.repeat(np.arange(30), 6), np.tile(np.arange(6), 30)
    made = fits(
        design(n=180, time=time, who=who), np.repeat(np.arange(30.0), 6) + 0.01 * rng.standard_normal(180)
    )
    found = traces(made)
    assert len(found.lines) == PANELS
    means = [np.mean(value) for _, value in found.lines.values()]
    assert means == sorted(means)
    assert means[0] < -14  # the lowest and the highest series are among them
    assert means[-1] > 14
    e = made.response.residual[:, 0]
    assert found.x == tuple(range(6))
    np.testing.assert_allclose(found.y, [np.median(e[time == t]) for t in range(6)])
    np.testing.assert_allclose(found.low, [np.quantile(e[time == t], 0.1) for t in range(6)])
    np.testing.assert_allclose(found.high, [np.quantile(e[time == t], 0.9) for t in range(6)])
    assert found.note == "12 of 30 series, evenly by rank of their mean residual"


def test_long_series_are_thinned_and_short_ones_left_to_the_band() -> None:
    rng = np.random.default_rng(3)
    who = np.concatenate([np.zeros(2000, int), np.arange(1, 20)])
    time = np.concatenate([np.arange(2000), np.zeros(19)])
    found = traces(fits(design(n=2019, time=time, who=who), rng.standard_normal(2019)))
    assert [len(t) for t, _ in found.lines.values()] == [POINTS]
    assert len(found.x) <= 20


def test_a_perfect_fit_has_no_traces() -> None:
    assert traces(fits(design(np.arange(20.0), time=np.arange(20)), np.arange(20.0))) is None
