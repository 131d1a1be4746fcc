"""Kernel variances along time and over periods: refusals, accounts, sizes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.needs import NotSupported
from clingstone.remedies import refit, remedy
from tests.remedies.cases import ar1, design, fits

HAC, PANEL = remedy("hac"), remedy("panel-hac")


def panel(N: int = 8, T: int = 40, seed: int = 0):
    """N series of T periods: a predictor that all share in a period, and one that each has alone."""
    rng = np.random.default_rng(seed)
    series, tick = np.repeat(np.arange(N), T), np.tile(np.arange(T), N)
    shared, own = ar1(T, 0.3, 1, rng)[:, 0], rng.normal(size=N * T)
    return np.column_stack([np.ones(N * T), shared[tick], own]), series, tick, rng


def test_periods_equal_the_sum_over_all_pairs_of_rows():
    X, series, tick, rng = panel(3, 24)
    y = rng.normal(size=72)
    ready = PANEL.prepare(design(X, series=series, tick=tick), None)
    found = ready.variance_at(fits(design(X, series=series, tick=tick), y).response, 2)[:, 0]
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    u, inverse = X * e[:, None], np.linalg.inv(X.T @ X)
    weight = np.maximum(0, 1 - np.abs(tick[:, None] - tick) / 3)
    V = 72 / 69 * inverse @ (u.T @ weight @ u) @ inverse
    assert found == pytest.approx(np.diag(V), rel=1e-9)


def test_period_remedy_says_what_it_did():
    X, series, tick, rng = panel()
    found = refit(PANEL, "", fits(design(X, series=series, tick=tick), rng.normal(size=320)))
    items = dict(found.account.items)
    assert items["periods"] == "40"
    assert items["lags"] == "8"  # ⌈1.3√40⌉ − 1
    assert found.account.reference == "fixed-b law of t"
    assert all(row.df_rule == "fixed-b" and 2 < row.df < 20 for row in found.intervals)
    assert any("keeps throughout" in note for note in found.notes)
    assert [one.term for one in found.account.bandwidths] == ["x1", "x2"]
    assert found.account.bandwidths[0].at == (0, 1, 2, 4, 8)
    assert "standard error of x1 by lags" in dict(found.account.pairs())


@pytest.mark.parametrize(
    ("N", "T", "match"), [(8, 12, "12 periods"), (1, 40, "no level"), (8, None, "irregularly spaced")]
)
def test_period_remedy_is_refused(N, T, match):
    X, series, tick, rng = panel(N, T or 40)
    made = (
        design(X, series=series, tick=tick)
        if T
        else design(X, series=series, elapsed=tick + 0.1 * rng.random(len(tick)))
    )
    with pytest.raises(NotSupported, match=match):
        refit(PANEL, "", fits(made, rng.normal(size=len(X))))


def test_a_period_without_rows_is_a_zero_score():
    X, series, tick, rng = panel(3, 26)
    keep = tick != 11
    y = rng.normal(size=78)[keep]
    found = refit(PANEL, "", fits(design(X[keep], series=series[keep], tick=tick[keep]), y))
    assert dict(found.account.items)["missing steps, entered as zero scores"] == "1"


def test_size_under_shocks_that_all_series_share():
    """A predictor of the period alone: ordinary intervals miss, those over periods keep near 95 %."""
    X, series, tick, rng = panel(10, 60, seed=2)
    B = 1500
    Y = ar1(60, 0.3, B, rng)[tick] + rng.normal(size=(600, B))
    run = fits(design(X, series=series, tick=tick), Y)
    shown = PANEL.prepare(run.design, None).fit(run)
    naive = remedy("ordinary").prepare(run.design, None).fit(run)
    covered = float(np.mean((shown.low[1] < 0) & (shown.high[1] > 0)))
    assert float(np.mean((naive.low[1] < 0) & (naive.high[1] > 0))) < 0.6
    assert covered == pytest.approx(0.94, abs=0.03)  # MCSE 0.006; T = 60 is finite


@pytest.mark.parametrize("rho", [0.0, 0.5])
def test_fixed_b_covers_better_than_the_normal_quantile(rho):
    rng = np.random.default_rng(7)
    n, B = 100, 1500
    x = ar1(n, 0.5, 1, rng)[:, 0]
    run = fits(design(np.column_stack([np.ones(n), x]), tick=np.arange(n)), ar1(n, rho, B, rng))
    shown = dict(HAC.conventions())
    wide = next(v for k, v in shown.items() if "fixed-b" in k)
    normal = replace(wide, law="normal")

    def covers(one):
        out = one.prepare(run.design, None).fit(run)
        return float(np.mean((out.low[1] < 0) & (out.high[1] > 0)))

    assert covers(wide) > covers(normal) + 0.02
    assert covers(wide) == pytest.approx(0.95 if rho == 0 else 0.92, abs=0.025)


def test_automatic_lags_differ_by_column_and_rows_keep_their_order():
    rng = np.random.default_rng(1)
    n = 120
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    Y = np.hstack([rng.normal(size=(n, 1)), ar1(n, 0.9, 1, rng)])
    run = fits(design(X, tick=np.arange(n)), Y)
    ready = next(v for k, v in HAC.conventions() if "Newey" in k).prepare(run.design, None)
    lags = ready.chosen(run.response)
    assert lags[0] != lags[1]
    each = [ready.variance_at(run.response.column(b), int(lags[b]))[:, 0] for b in (0, 1)]
    assert ready.variance(run.response) == pytest.approx(np.stack(each, axis=1))


def test_intervals_follow_the_scale_of_y():
    rng = np.random.default_rng(2)
    n = 90
    made = design(np.column_stack([np.ones(n), rng.normal(size=n)]), tick=np.arange(n))
    y = ar1(n, 0.4, 1, rng)[:, 0]
    for _, convention in HAC.conventions():
        one, ten = (refit(convention, "", fits(made, k * y)).intervals[1] for k in (1, 10))
        assert ten.se == pytest.approx(10 * one.se)
        assert ten.p == pytest.approx(one.p, rel=1e-6)
