"""Many series: serial dependence whatever the variances, common shocks, earlier responses in the model."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import stats

from clingstone.evidence import gather
from clingstone.evidence.lagged import lagged_response, one_lag
from clingstone.evidence.panel import ROBUST, WITHIN, PanelSerial, windows, within_series
from clingstone.evidence.portmanteau import BreuschGodfrey, LjungBox
from clingstone.evidence.serial import DurbinWatson, PanelDurbinWatson
from clingstone.evidence.shocks import CommonShocks, pairs
from clingstone.evidence.short import half_life
from clingstone.needs import NotSupported
from tests.evidence.factories import ar1, design, fits

SERIAL, SHOCKS = PanelSerial(), CommonShocks()


def panel(N: int, T: int, rng: np.random.Generator, **more: Any) -> Any:
    x = rng.normal(size=N * T)
    return design(x, time=np.tile(np.arange(T), N), who=np.repeat(np.arange(N), T), **more)


def about(test: Any, made: Any, key: str = "") -> Any:
    return next(a for a in test.abouts(made) if a.key == key)


# ---- panel-serial ---------------------------------------------------------------------------------


def test_windows_equal_an_obvious_loop() -> None:
    rng = np.random.default_rng(0)
    who, time = (
        np.repeat([0, 1, 2], [6, 4, 7]),
        np.concatenate([np.r_[0:4, 6, 7], np.arange(4), np.arange(7)]),
    )
    made = design(rng.normal(size=17), time=time, who=who)
    run = fits(made, rng.normal(size=17))
    forward, backward, rows = windows(run.response)
    wanted = []
    for s in range(3):
        e, t, at = (v[who == s] for v in (run.response.residual[:, 0], time, np.arange(17)))
        near = [k for k in range(2, len(e) - 1) if t[k] - t[k - 1] == 1]
        wanted += [(e[k] - e[k:].mean(), e[k - 1] - e[:k].mean(), at[k]) for k in near]
    assert np.column_stack([forward, backward, rows]) == pytest.approx(np.array(wanted))


def test_the_two_windows_share_no_error_whatever_the_variances() -> None:
    rng = np.random.default_rng(1)
    made = panel(400, 6, rng)
    spread = np.tile([0.2, 3.0, 0.2, 3.0, 0.2, 3.0], 400)[:, None]
    run = fits(made, spread * rng.normal(size=(2400, 200)))
    forward, backward, _ = windows(run.response)
    mean = (forward * backward).sum(axis=0)
    assert float(mean.mean()) == pytest.approx(0.0, abs=3 * float(mean.std()) / np.sqrt(200))


@pytest.mark.parametrize("key", [ROBUST, WITHIN])
def test_size_without_dependence(key: str) -> None:
    """1,000 columns of 60 series of 6 times, variances that change over time for the robust form."""
    rng = np.random.default_rng(2)
    made = panel(60, 6, rng)
    spread = np.tile([0.3, 2.0, 0.5, 2.0, 0.3, 1.0], 60)[:, None] if key == ROBUST else 1.0
    levels = np.repeat(rng.normal(size=(60, 1000)), 6, axis=0)
    found = SERIAL.read(fits(made, levels + spread * rng.normal(size=(360, 1000))), about(SERIAL, made, key))
    assert float(np.mean(found.p < 0.05)) == pytest.approx(0.05, abs=0.02)


def test_sums_of_the_series_are_read_by_the_t_of_one_sample() -> None:
    """Outside: scipy's ttest_1samp of the sums; with 10 series the size is then that of the level."""
    rng = np.random.default_rng(7)
    made = panel(10, 12, rng)
    run = fits(made, rng.normal(size=(120, 4000)))
    found = SERIAL.read(run, about(SERIAL, made, ROBUST))
    forward, backward, rows = windows(within_series(run.response))
    sums = np.stack([(forward * backward)[rows // 12 == s].sum(axis=0) for s in range(10)])
    outside = stats.ttest_1samp(sums, 0.0)
    assert found.statistic == pytest.approx(outside.statistic)
    assert found.p == pytest.approx(outside.pvalue)
    assert float(np.mean(found.p <= 0.05)) == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / 4000))


def test_around_series_means_the_scores_are_taken_at_the_value_without_dependence() -> None:
    """Outside: scipy's ttest_1samp of them; 10 series of 5, where a variance at the slope rejects in .13."""
    rng = np.random.default_rng(8)
    made = panel(10, 5, rng)
    run = fits(made, rng.normal(size=(50, 4000)))
    found = SERIAL.read(run, about(SERIAL, made, WITHIN))
    e = within_series(run.response).residual.reshape(10, 5, 4000)
    x, y = e[:, :-1], e[:, 1:]
    x, y = x - x.mean(axis=(0, 1)), y - y.mean(axis=(0, 1))
    outside = stats.ttest_1samp((x * (y + x / 4)).sum(axis=1), 0.0)
    assert found.statistic == pytest.approx(outside.statistic)
    assert found.p == pytest.approx(outside.pvalue)
    assert float(np.mean(found.p <= 0.05)) == pytest.approx(0.045, abs=0.013)
    # The interval is the test turned round.
    ends = np.isfinite(found.low)
    holds = (found.low < -0.25) & (found.high > -0.25)
    assert ends.mean() > 0.99
    assert np.array_equal(holds[ends], found.p[ends] > 0.05)


def test_power_and_the_blindness_it_owns_up_to() -> None:
    rng = np.random.default_rng(3)
    made = panel(80, 8, rng)

    def rejections(make: Any) -> float:
        found = SERIAL.read(fits(made, make), about(SERIAL, made, ROBUST))
        return float(np.mean(found.p < 0.05))

    process = ar1(0.4, (8, 80 * 200), rng).reshape(8, 80, 200).transpose(1, 0, 2).reshape(640, 200)
    assert rejections(process) > 0.6
    walk = rng.normal(size=(80, 8, 200)).cumsum(axis=1).reshape(640, 200)
    assert rejections(walk) < 0.15
    noise = SERIAL.read(fits(made, rng.normal(size=640)), about(SERIAL, made, ROBUST))
    assert float(noise.p[0]) > 0.05
    assert any("random walks" in c for c in noise.caveats)


def test_shift_that_series_means_bring_is_the_null() -> None:
    """Around means of T rows the slope is −1/(T − 1) without dependence, not zero."""
    rng = np.random.default_rng(4)
    made = panel(300, 5, rng)
    found = SERIAL.read(fits(made, rng.normal(size=(1500, 50))), about(SERIAL, made, WITHIN))
    assert float(np.mean(found.estimate)) == pytest.approx(-0.25, abs=0.01)
    assert "−0.25" in found.estimate_name


def test_refusals_and_invariance() -> None:
    rng = np.random.default_rng(5)
    assert SERIAL.abouts(design(rng.normal(size=30), time=np.arange(30))) == ()
    few = panel(12, 3, rng)
    with pytest.raises(NotSupported, match="of 4 consecutive times"):
        SERIAL.read(fits(few, rng.normal(size=36)), about(SERIAL, few, ROBUST))
    made, y = panel(30, 6, rng), rng.normal(size=180)
    one, other = (SERIAL.read(fits(made, v), about(SERIAL, made, ROBUST)) for v in (y, 3 - 8 * y))
    assert one.p == pytest.approx(other.p)
    assert within_series(fits(made, y).response).residual.sum() == pytest.approx(0, abs=1e-9)


# ---- common shocks --------------------------------------------------------------------------------


def test_pairs_equal_a_loop_over_unbalanced_series() -> None:
    rng = np.random.default_rng(6)
    E = rng.normal(size=(6, 12))
    E[rng.random((6, 12)) < 0.3] = np.nan
    each = []
    for i in range(6):
        for j in range(i):
            both = ~np.isnan(E[i]) & ~np.isnan(E[j])
            if both.sum() >= 4:
                r = np.corrcoef(E[i][both], E[j][both])[0, 1]
                each.append((np.sqrt(both.sum()) * r, r))
    table = np.array(each)
    cd, mean, size, count = pairs(E)
    assert count == len(table)
    assert cd == pytest.approx(table[:, 0].sum() / np.sqrt(len(table)))
    assert (mean, size) == pytest.approx((table[:, 1].mean(), np.abs(table[:, 1]).mean()))


def test_size_alone_and_given_the_order_in_time() -> None:
    rng = np.random.default_rng(7)
    made = panel(12, 30, rng)
    where = about(SHOCKS, made)
    free = SHOCKS.read(fits(made, rng.normal(size=(360, 1000))), where)
    assert float(np.mean(free.p < 0.05)) == pytest.approx(0.05, abs=0.02)
    smooth = ar1(0.7, (30, 12 * 400), rng).reshape(30, 12, 400).transpose(1, 0, 2).reshape(360, 400)
    run = fits(made, smooth)
    alone, given = SHOCKS.read(run, where), SHOCKS.read(run, where, frozenset({"serial"}))
    assert float(np.mean(alone.p < 0.05)) > 0.09  # what the caveat is about
    assert float(np.mean(given.p < 0.05)) == pytest.approx(0.05, abs=0.035)


def test_shared_shocks_are_seen_and_opposite_ones_are_not() -> None:
    rng = np.random.default_rng(8)
    made = panel(10, 40, rng)
    shock, own = rng.normal(size=40), rng.normal(size=400)
    seen = SHOCKS.read(fits(made, 0.8 * np.tile(shock, 10) + own), about(SHOCKS, made))
    assert seen.p[0] < 1e-6
    sign = np.repeat([1.0, -1.0] * 5, 40)
    hidden = SHOCKS.read(fits(made, 0.8 * sign * np.tile(shock, 10) + own), about(SHOCKS, made))
    assert hidden.p[0] > 0.01
    assert any("cancel" in c for c in hidden.caveats)
    assert "45 pairs of series" in SHOCKS.sentence(seen, about(SHOCKS, made))


def test_too_few_shared_times() -> None:
    rng = np.random.default_rng(9)
    made = panel(20, 5, rng)
    with pytest.raises(NotSupported, match="shared by two series"):
        SHOCKS.read(fits(made, rng.normal(size=100)), about(SHOCKS, made))


# ---- an earlier response in the model -------------------------------------------------------------


def dynamic(n: int, rho: float, rng: np.random.Generator, B: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """y_t = 0.6 y_{t−1} + u_t with u of correlation ρ, and y_{t−1}."""
    u = ar1(rho, (n + 51, B), rng)
    y = np.zeros((n + 51, B))
    for t in range(1, n + 51):
        y[t] = 0.6 * y[t - 1] + u[t]
    return y[51:], y[50:-1]


def test_an_earlier_response_is_recognised_and_named() -> None:
    rng = np.random.default_rng(10)
    y, before = dynamic(80, 0.0, rng)
    run = fits(design(before[:, 0], rng.normal(size=80), time=np.arange(80)), y[:, 0])
    assert lagged_response(run) == "x1"
    first = before[:, 0].copy()
    first[0] = 0.0  # filled with something else
    assert lagged_response(fits(design(first, time=np.arange(80)), y[:, 0])) == "x1"
    assert lagged_response(fits(design(rng.normal(size=80), time=np.arange(80)), y[:, 0])) == ""
    found = gather(run)
    assert found.get("ljung-box").verdict == "not applicable"
    assert "x1 is the response of an earlier row" in found.get("durbin-watson").caveats[0]
    assert found.get("durbin-watson").statistic_name == "Breusch–Godfrey t"
    assert "F approximation" in found.get("breusch-godfrey").p_method
    assert found.get("breusch-godfrey").sentence.startswith("Earlier residuals")


def test_the_residual_beside_it_keeps_its_size_where_durbin_watson_loses_power() -> None:
    rng = np.random.default_rng(11)
    p: dict[float, list[float]] = {0.0: [], 0.5: []}
    durbin: dict[float, list[float]] = {0.0: [], 0.5: []}
    for rho in p:
        for _ in range(400):
            y, before = dynamic(80, rho, rng)
            run = fits(design(before[:, 0], time=np.arange(80)), y[:, 0])
            b, se, _ = one_lag(run.response)
            p[rho].append(abs(float(b[0] / se[0])) > 1.99)
            e = run.response.residual[:, 0]
            durbin[rho].append(abs(float(np.sum(np.diff(e) ** 2) / (e @ e)) - 2) > 0.44)
    assert float(np.mean(p[0.0])) == pytest.approx(0.05, abs=0.035)
    assert float(np.mean(p[0.5])) > float(np.mean(durbin[0.5])) + 0.03


def test_one_lag_equals_the_regression_with_the_residual_in_it() -> None:
    rng = np.random.default_rng(12)
    x, y = rng.normal(size=40), rng.normal(size=40)
    run = fits(design(x, time=np.arange(40)), y)
    e = run.response.residual[:, 0]
    X = np.column_stack([np.ones(40), x, np.r_[0, e[:-1]]])
    b, rest = np.linalg.lstsq(X, e, rcond=None)[:2]
    se = np.sqrt(rest[0] / 37 * np.linalg.inv(X.T @ X)[2, 2])
    found, error, df = one_lag(run.response)
    assert (found[0], error[0], df) == pytest.approx((b[2], se, 37))


# ---- what short series leave open -----------------------------------------------------------------


def test_short_series_get_the_exact_interval_and_long_ones_do_not() -> None:
    rng = np.random.default_rng(13)
    short = fits(design(np.arange(25.0), time=np.arange(25)), ar1(0.8, (25,), rng))
    test = DurbinWatson()
    reading = test.read(short, test.abouts(short.design)[0])
    assert any("median-unbiased" in c for c in reading.caveats)
    long = fits(design(np.arange(80.0), time=np.arange(80)), ar1(0.5, (80,), rng))
    assert test.read(long, test.abouts(long.design)[0]).caveats == ()


def test_lasting_differences_and_slow_fading_are_told_apart_only_where_they_can_be() -> None:
    rng = np.random.default_rng(14)

    def caveats(T: int, rho: float) -> str:
        who = np.repeat(np.arange(30), T)
        made = design(rng.normal(size=30 * T), time=np.tile(np.arange(T), 30), who=who, groups={"lamb": who})
        y = np.repeat(rng.normal(size=30), T) + ar1(rho, (T, 30), rng).T.ravel()
        run = fits(made, y)
        test = PanelDurbinWatson()
        return " ".join(test.read(run, test.abouts(made)[0], frozenset({"group:lamb"})).caveats)

    assert "can hardly be told apart" in caveats(5, 0.9)
    assert "told apart" not in caveats(25, 0.4)


def test_half_life_in_words() -> None:
    series = design(np.zeros(10) + np.arange(10), time=np.arange(10)).serial
    assert series is not None
    assert half_life(0.5, series) == ", half of which is left after 1.0 days"
    assert half_life(-0.3, series) == ""
    run = fits(design(np.arange(60.0), time=np.arange(60)), ar1(0.7, (60,), np.random.default_rng(15)))
    for test in (DurbinWatson(), BreuschGodfrey(), LjungBox()):
        where = test.abouts(run.design)[0]
        sentence = test.sentence(test.read(run, where), where)
        assert ("half of which is left after" in sentence) == (test.id == "durbin-watson")
