"""Seasons, hidden cycles, steps in the level, and the curves of residual correlation."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest

from clingstone.evidence import breaks
from clingstone.evidence.autocorrelation import lag_products, partial
from clingstone.evidence.breaks import Break, steps
from clingstone.evidence.season import Season, cycles, fisher_tail, ordinates, with_season
from clingstone.evidence.serial import DurbinWatson, IrregularSerial
from clingstone.needs import NotSupported
from clingstone.structure.serial import build
from tests.evidence.factories import ar1, design, fits

SEASON, STEP = Season(), Break()


def dated(n: int, unit: str, *columns: Any, step: float = 1.0) -> Any:
    made = design(*(columns or (np.random.default_rng(99).normal(size=n),)), time=np.arange(n))
    return replace(made, serial=replace(made.serial, unit=unit, step=step))


def about(test: Any, made: Any, key: str = "") -> Any:
    return next(a for a in test.abouts(made) if a.key == key)


# ---- season ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("unit", "step", "n", "wanted"),
    [
        ("month", 1, 60, {"year": 12}),
        ("month", 3, 60, {"year": 4}),
        ("quarter", 1, 40, {"year": 4}),
        ("day", 1, 60, {"week": 7}),
        ("day", 1, 800, {"year": 365.25, "week": 7}),
        ("hour", 1, 100, {"day": 24}),
        ("minute", 30, 200, {"day": 48, "hour": 2}),
        ("year", 1, 60, {}),
        ("", 1, 60, {}),
        ("month", 1, 20, {}),
    ],
)
def test_cycles_come_from_the_calendar(unit: str, step: float, n: int, wanted: dict[str, float]) -> None:
    assert dict(cycles(dated(n, unit, step=step).serial)) == wanted


def test_fixed_pattern_is_the_usual_f_of_its_dummies() -> None:
    rng = np.random.default_rng(0)
    t = np.arange(120)
    x, y = rng.normal(size=120), np.cos(2 * np.pi * t / 12) + rng.normal(size=120)
    made = dated(120, "month", x)
    found = SEASON.read(fits(made, y), about(SEASON, made, "year"))
    small = np.column_stack([np.ones(120), x])
    large = np.column_stack([small, (t % 12)[:, None] == np.arange(1, 12)])
    rss = [float(np.linalg.lstsq(X.astype(float), y, rcond=None)[1][0]) for X in (small, large)]
    assert found.statistic[0] == pytest.approx((rss[0] - rss[1]) / 11 / (rss[1] / 107))
    assert (found.df, found.df2) == (11, 107)
    assert "over the year would explain" in SEASON.sentence(found, about(SEASON, made, "year"))


def test_long_cycles_are_waves_and_a_model_that_has_them_is_left_alone() -> None:
    made = dated(800, "day")
    assert with_season(made, "year").p == made.p + 6
    t = np.arange(120)
    dummies = [(t % 12 == k).astype(float) for k in range(1, 12)]
    with pytest.raises(NotSupported, match="already spans"):
        with_season(dated(120, "month", *dummies), "year")


def test_a_moving_season_is_told_from_a_fixed_one() -> None:
    rng = np.random.default_rng(1)
    n = 240
    made = dated(n, "month", rng.normal(size=n))
    where = about(SEASON, made, "year:moving")
    fixed = 2 * np.cos(2 * np.pi * np.arange(n) / 12) + rng.normal(size=n)
    moving = rng.normal(size=n)
    for t in range(12, n):
        moving[t] += 0.6 * moving[t - 12]
    assert SEASON.read(fits(made, fixed), where).p[0] > 0.05
    seen = SEASON.read(fits(made, moving), where)
    assert seen.p[0] < 1e-4
    assert seen.estimate[0] == pytest.approx(0.6, abs=0.15)
    drawn = SEASON.read(fits(made, rng.normal(size=(n, 1000))), where)
    assert float(np.mean(drawn.p < 0.05)) == pytest.approx(0.05, abs=0.02)


def test_fixed_pattern_given_the_dependence_keeps_its_size() -> None:
    rng = np.random.default_rng(2)
    made = dated(120, "month", rng.normal(size=120))
    run = fits(made, ar1(0.6, (120, 200), rng))
    where = about(SEASON, made, "year")
    given = SEASON.read(run, where, frozenset({"serial"}))
    assert float(np.mean(given.p < 0.05)) < 0.1  # MCSE 0.015


def test_fishers_law_by_hand_and_against_simulation() -> None:
    # Two ordinates: the larger share is uniform on (½, 1), so P(g > 0.8) = 2(1 − 0.8).
    assert fisher_tail(0.8, 2) == pytest.approx(0.4)
    # Three: 3(1 − g)² − 3(1 − 2g)²₊.
    assert fisher_tail(0.45, 3) == pytest.approx(3 * 0.55**2 - 3 * 0.1**2)
    # Fisher (1929) tabulates 0.13135 at 5 % for q = 50 (from memory).
    assert fisher_tail(0.13135, 50) == pytest.approx(0.05, abs=0.0003)
    rng = np.random.default_rng(3)
    g = ordinates(rng.normal(size=(301, 4000))).max(axis=0)
    assert float(np.mean(g > np.quantile(g, 0.95))) == pytest.approx(0.05, abs=0.001)
    assert fisher_tail(float(np.quantile(g, 0.95)), 150) == pytest.approx(0.05, abs=0.012)


def test_hidden_cycle_and_its_size() -> None:
    rng = np.random.default_rng(4)
    made = dated(100, "", rng.normal(size=100))
    where = about(SEASON, made, "unknown")
    found = SEASON.read(fits(made, np.cos(2 * np.pi * np.arange(100) / 10) + rng.normal(size=100)), where)
    assert found.p[0] == pytest.approx(0.001)
    assert "of 10 rows, holds" in SEASON.sentence(found, where)
    p = [SEASON.read(fits(made, rng.normal(size=100)), where).p[0] for _ in range(300)]
    assert float(np.mean(np.array(p) < 0.05)) == pytest.approx(0.05, abs=0.035)


@pytest.mark.parametrize(
    ("unit", "step", "words"),
    [("", 1 / 12, "of 12 rows (1 in "), ("year", 1.0, "of 12 years"), ("", 1.0, "of 12 rows,")],
)
def test_a_hidden_cycle_is_told_in_the_unit_of_the_times(unit: str, step: float, words: str) -> None:
    made = dated(96, unit, step=step)
    noise = 0.1 * np.random.default_rng(9).normal(size=96)
    found = SEASON.read(
        fits(made, np.cos(2 * np.pi * np.arange(96) / 12) + noise), about(SEASON, made, "unknown")
    )
    assert words in SEASON.sentence(found, about(SEASON, made, "unknown"))


def test_curve_of_the_pattern() -> None:
    rng = np.random.default_rng(5)
    made = dated(120, "month")
    run = fits(made, np.cos(2 * np.pi * np.arange(120) / 12) + 0.1 * rng.normal(size=120))
    curve = SEASON.curve(run, about(SEASON, made, "year"))
    assert curve is not None
    assert curve.x == tuple(float(k) for k in range(12))
    assert curve.y[0] == pytest.approx(1.0, abs=0.15)
    assert np.allclose(curve.lines["repaired"][1], curve.y, atol=0.05)


# ---- break ----------------------------------------------------------------------------------------


def test_largest_f_equals_a_loop_over_times() -> None:
    rng = np.random.default_rng(6)
    x, y = rng.normal(size=50), rng.normal(size=50)
    made = design(x, time=np.arange(50))
    found = STEP.read(fits(made, y), STEP.abouts(made)[0])
    small = np.column_stack([np.ones(50), x])
    rss = float(np.linalg.lstsq(small, y, rcond=None)[1][0])
    F = []
    for tau in range(8, 43):  # 15 % on either side
        big = np.column_stack([small, np.arange(50) >= tau])
        rest = float(np.linalg.lstsq(big, y, rcond=None)[1][0])
        F.append((rss - rest) / (rest / 47))
    assert steps(made).times == pytest.approx(np.arange(8, 43))
    assert found.statistic[0] == pytest.approx(max(F))


def test_size_alone_and_given_dependence() -> None:
    rng = np.random.default_rng(7)
    made = design(rng.normal(size=60), time=np.arange(60))
    where = STEP.abouts(made)[0]
    free = STEP.read(fits(made, rng.normal(size=(60, 2000))), where)
    assert float(np.mean(free.p < 0.05)) == pytest.approx(0.05, abs=0.02)
    alone, given = [], []
    for _ in range(150):
        run = fits(made, ar1(0.6, (60,), rng))
        alone.append(STEP.read(run, where).p[0])
        given.append(STEP.read(run, where, frozenset({"serial"})).p[0])
    assert float(np.mean(np.array(alone) < 0.05)) > 0.4
    assert float(np.mean(np.array(given) < 0.05)) < 0.13


def test_a_step_is_found_where_it_is() -> None:
    rng = np.random.default_rng(8)
    made = design(rng.normal(size=100), time=np.arange(100))
    y = 1.5 * (np.arange(100) >= 60) + rng.normal(size=100)
    found = STEP.read(fits(made, y), STEP.abouts(made)[0])
    assert found.p[0] == pytest.approx(0.001)
    assert "60 days after the first time" in STEP.sentence(found, STEP.abouts(made)[0])
    curve = STEP.curve(fits(made, y), STEP.abouts(made)[0])
    assert curve is not None
    assert curve.x[int(np.argmax(curve.y))] == 60
    same = STEP.read(fits(made, 4 - 3 * y), STEP.abouts(made)[0])
    assert same.statistic == pytest.approx(found.statistic)
    assert same.p == pytest.approx(found.p)


def test_steps_given_the_order_are_least_squares_of_freed_rows(monkeypatch: pytest.MonkeyPatch) -> None:
    """Against dense V̂⁻¹ with the column of each step written out; block by block as at once."""
    rng = np.random.default_rng(17)
    who, time = np.repeat(np.arange(6), 20), np.tile(np.arange(20), 6)
    made = design(rng.normal(size=120), time=time, who=who)
    run = fits(made, ar1(0.5, (120,), rng))
    where, given = STEP.abouts(made)[0], frozenset({"serial"})
    found = STEP.read(run, where, given)
    V = run.algebra(given).dense(run[given].theta[:, 0])
    assert made.serial is not None
    y = run.response.residual[:, 0]

    def left(X: np.ndarray) -> float:
        W = np.linalg.inv(V)
        r = y - X @ np.linalg.solve(X.T @ W @ X, X.T @ W @ y)
        return float(r @ W @ r)

    rss = left(made.Q)
    rest = [
        left(np.column_stack([made.Q, made.serial.elapsed >= tau]))
        for tau in range(3, 18)  # 15 % on either side
    ]
    assert steps(made).times == pytest.approx(np.arange(3, 18))
    assert found.statistic[0] == pytest.approx(max((rss - r) / (r / 117) for r in rest), rel=1e-9)
    monkeypatch.setattr(breaks, "BLOCK", 160)
    again = STEP.read(run, where, given)
    assert again.statistic == pytest.approx(found.statistic, rel=1e-10)
    assert again.p == found.p


def test_too_few_times_for_a_step() -> None:
    made = design(np.arange(24.0), time=np.tile(np.arange(3), 8), who=np.repeat(np.arange(8), 3))
    with pytest.raises(NotSupported, match="too few times"):
        STEP.read(fits(made, np.random.default_rng(9).normal(size=24)), STEP.abouts(made)[0])


# ---- curves ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("spread", [1, 40])
def test_lag_products_equal_their_pairs(spread: int) -> None:
    """On a grid of steps, and pair by pair where the steps are too spread out for one."""
    rng = np.random.default_rng(12)
    who = np.repeat([0, 1, 2], [30, 7, 13])
    time = np.concatenate([np.cumsum(rng.integers(1, 3, k)) * spread + 5 * k for k in (30, 7, 13)])
    made = design(rng.normal(size=50), time=time, who=who)
    response = fits(made, rng.normal(size=(50, 3))).response
    sums, counts = lag_products(response, 2 * spread)
    series, e = made.serial, response.residual
    assert series is not None
    for k in (spread, 2 * spread):
        earlier, later = series.pairs(k)
        assert counts[k - 1] == len(later) > 0
        assert sums[k - 1] == pytest.approx(np.sum(e[earlier] * e[later], axis=0))


def test_partial_correlations_by_hand() -> None:
    # A first-order process: all but the first are zero. Lag two: (r₂ − r₁²)/(1 − r₁²).
    assert partial(0.6 ** np.arange(1, 6)) == pytest.approx([0.6, 0, 0, 0, 0], abs=1e-12)
    assert partial(np.array([0.5, 0.4]))[1] == pytest.approx((0.4 - 0.25) / 0.75)


def test_curves_carry_partial_correlations_and_the_semivariance() -> None:
    rng = np.random.default_rng(10)
    run = fits(design(rng.normal(size=300), time=np.arange(300)), ar1(0.7, (300,), rng))
    test = DurbinWatson()
    curve = test.curve(run, test.abouts(run.design)[0])
    assert curve is not None
    values = curve.lines["partial correlation"][1]
    assert values[0] == pytest.approx(curve.y[0])
    assert max(abs(v) for v in values[1:]) < 0.2
    t = np.cumsum(rng.exponential(size=300))
    irregular = fits(design(rng.normal(size=300), time=t, whole=False), rng.normal(size=300))
    other = IrregularSerial()
    curve = other.curve(irregular, other.abouts(irregular.design)[0])
    assert curve is not None
    assert float(np.mean(curve.lines["semivariance"][1])) == pytest.approx(1.0, abs=0.1)


@pytest.mark.slow
def test_bands_of_irregular_times_hold_what_they_say() -> None:
    """Single bins lie in their band in 95 % of data without dependence, though near pairs share rows."""
    rng = np.random.default_rng(11)
    t = np.cumsum(rng.exponential(size=120))
    made = design(np.arange(120.0), time=t, whole=False)
    test, inside = IrregularSerial(), []
    for _ in range(120):
        curve = test.curve(fits(made, rng.normal(size=120)), test.abouts(made)[0])
        assert curve is not None
        inside.append([low <= y <= high for low, y, high in zip(curve.low, curve.y, curve.high, strict=True)])
    assert float(np.mean(inside)) == pytest.approx(0.95, abs=0.02)  # 1,440 bins


def test_a_step_is_told_by_the_time_that_the_user_wrote() -> None:
    rng = np.random.default_rng(8)
    years = pd.Series(np.repeat(np.arange(1871, 1971), 2)[::-1])  # backwards, each year twice
    series, order = build("year", years, ties="replicate")
    y = 5.0 * (years.to_numpy()[order] >= 1899) + rng.normal(size=200)
    plain = design(rng.normal(size=200), time=np.arange(200))
    made = replace(plain, serial=series)
    found = STEP.read(fits(made, y), STEP.abouts(made)[0])
    assert ", from 1899 on, would explain" in STEP.sentence(found, STEP.abouts(made)[0])
    part = series.take(np.arange(40))  # other times than those written down
    assert part.written == ()
