"""Order: Durbin–Watson in its three forms, and the correlation that goes with it."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.autocorrelation import elapsed_curve
from clingstone.evidence.calibrate import FINE, curve
from clingstone.evidence.finding import About
from clingstone.evidence.read import ratio
from clingstone.evidence.serial import (
    DurbinWatson,
    IrregularSerial,
    PanelDurbinWatson,
    form_of,
    kernel_form,
    law_of,
    near_pairs,
    over_groups,
    series_of,
)
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.run import Run, Settings

from .factories import ar1, design, fits, hat, imhof, residual_space

STEP = About("1", "one day apart")
FIRM = frozenset({"group:firm"})


def gappy(rng: np.random.Generator, G: int = 6) -> tuple[Array, Array]:
    """Series of unequal length with missing steps: who, time."""
    times = [np.sort(rng.choice(14, size=int(rng.integers(4, 11)), replace=False)) for _ in range(G)]
    return np.repeat(np.arange(G), [len(t) for t in times]), np.concatenate(times)


def numerator(e: Array, who: Array, time: Array) -> float:
    """Σ(e_t − e_{t−1})² by the obvious loop."""
    total = 0.0
    for i in range(1, len(e)):
        if who[i] == who[i - 1] and time[i] - time[i - 1] == 1:
            total += (e[i] - e[i - 1]) ** 2
    return total


def test_hand_worked_statistic() -> None:
    # Residuals about the mean of 1, 2, 4, 1, 2: −1, 0, 2, −1, 0; Σdiff² = 1 + 4 + 9 + 1 = 15, e'e = 6.
    made = fits(design(n=5, time=np.arange(5)), [1.0, 2, 4, 1, 2])
    assert ratio(made.response, form_of(made.design, "differences"))[0] == pytest.approx(15 / 6)
    assert ratio(made.response, form_of(made.design, "lag:1"))[0] == pytest.approx(-2 / 6)


def test_gaps_and_series_equal_the_loop_and_imhof() -> None:
    rng = np.random.default_rng(1)
    who, time = gappy(rng)
    x, y = rng.standard_normal(len(who)), rng.standard_normal(len(who))
    made = fits(design(x, time=time, who=who), y, alternative="greater")
    e = made.response.residual[:, 0]
    reading = PanelDurbinWatson().read(made, STEP)
    assert reading.statistic[0] == pytest.approx(numerator(e, who, time) / (e @ e))
    K = residual_space(made.design.Q)
    A = form_of(made.design, "differences").S.toarray()
    assert reading.p[0] == pytest.approx(1 - imhof(K.T @ A @ K, reading.statistic[0]), abs=1e-6)


def test_group_means_swept_equal_dummies() -> None:
    rng = np.random.default_rng(2)
    who, time = gappy(rng)
    x, y = rng.standard_normal(len(who)), rng.standard_normal(len(who)) + who
    made = fits(design(x, time=time, who=who, groups={"firm": who}), y, alternative="greater")
    reading = PanelDurbinWatson().read(made, STEP, FIRM)
    Z = np.eye(6)[who]
    e = y - (B := np.column_stack([x, Z])) @ np.linalg.lstsq(B, y, rcond=None)[0]
    assert reading.statistic[0] == pytest.approx(numerator(e, who, time) / (e @ e))
    K = residual_space(x, Z)
    A = form_of(made.design, "differences").S.toarray()
    assert reading.p[0] == pytest.approx(1 - imhof(K.T @ A @ K, reading.statistic[0]), abs=1e-6)
    # Whatever the firms' own levels are, nothing changes.
    other = fits(made.design, y + 50 * np.sin(who), alternative="greater")
    again = PanelDurbinWatson().read(other, STEP, FIRM)
    assert again.p[0] == pytest.approx(reading.p[0], rel=1e-8)


def test_kernel_of_irregular_times_equals_the_loop() -> None:
    rng = np.random.default_rng(3)
    who = np.repeat([0, 1], [9, 12])
    time = np.concatenate([np.cumsum(rng.exponential(1, 9)), np.cumsum(rng.exponential(1, 12))])
    y = rng.standard_normal(21)
    made = fits(design(time, time=time, who=who, whole=False), y, alternative="greater")
    gaps = np.diff(time)[who[1:] == who[:-1]]
    h = np.median(gaps)
    K = np.zeros((21, 21))
    for i in range(21):
        for j in range(21):
            near = who[i] == who[j] and 0 < abs(i - j) <= 8 and abs(time[i] - time[j]) <= 4 * h
            K[i, j] = np.exp(-abs(time[i] - time[j]) / h) if near else 0.0
    np.testing.assert_allclose(kernel_form(made.design).S.toarray(), K, atol=1e-12)
    e = made.response.residual[:, 0]
    reading = IrregularSerial().read(made, IrregularSerial().abouts(made.design)[0])
    assert reading.statistic[0] == pytest.approx(e @ K @ e / (e @ e))
    L = residual_space(made.design.Q)
    assert reading.p[0] == pytest.approx(imhof(L.T @ K @ L, reading.statistic[0]), abs=1e-6)


def test_calibration_equals_dense_traces() -> None:
    rng = np.random.default_rng(4)
    who, time = gappy(rng)
    made = fits(
        design(rng.standard_normal(len(who)), time=time, who=who, groups={"firm": who}), who + 0.0 * time
    )
    S = form_of(made.design, "lag:1").S.toarray()
    apart = np.abs(np.subtract.outer(time, time))
    for given_, extra in ((frozenset(), np.zeros((len(who), 0))), (FIRM, np.eye(6)[who])):
        response, part = over_groups(made, given_)
        lag = form_of(made.design, "lag:1")
        found = curve(response.design, law_of(response.design, lag, part), Run().child("test"))
        assert found is not None
        K = residual_space(made.design.Q, extra)
        M = K @ K.T
        for rho in (-0.6, 0.0, 0.4, 0.85):
            V = np.where(np.equal.outer(who, who), rho**apart, 0.0) if rho else np.eye(len(who))
            expected = np.trace(M @ S @ M @ V) / np.trace(M @ V) - 2 * rho / K.shape[1]
            assert np.interp(rho, FINE, found.mean) == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize("rho", [0.0, 0.5, 0.8])
def test_interval_covers_the_correlation_of_errors(rho: float) -> None:
    # Nominal 95 %; the interval is approximate away from 0, so 2 points are allowed besides noise.
    rng = np.random.default_rng(5)
    n, B = 40, 1500
    made = design(np.arange(n), rng.standard_normal(n), time=np.arange(n))
    reading = DurbinWatson().read(Fits(Response.of(made, ar1(rho, (n, B), rng)), Run()), STEP)
    assert reading.low is not None
    assert reading.high is not None
    inside = np.mean((reading.low < rho) & (rho < reading.high))
    assert inside == pytest.approx(0.95, abs=0.02 + 3 * np.sqrt(0.05 * 0.95 / B))


def test_size_given_groups_whatever_the_groups_do() -> None:
    rng = np.random.default_rng(6)
    G, T, B = 25, 5, 4000
    who, time = np.repeat(np.arange(G), T), np.tile(np.arange(T), G)
    made = design(rng.standard_normal(G * T), time=time, who=who, groups={"firm": who})
    y = 2 * rng.standard_normal((G, B))[who] + rng.standard_normal((G * T, B))
    swept = PanelDurbinWatson().read(Fits(Response.of(made, y), Run()), STEP, FIRM)
    assert np.mean(swept.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B))
    alone = PanelDurbinWatson().read(Fits(Response.of(made, y), Run()), STEP)
    assert np.mean(alone.p < 0.05) > 0.95  # a group effect looks like order until it is taken out


def test_size_of_irregular_times() -> None:
    rng = np.random.default_rng(7)
    time, B = np.cumsum(rng.exponential(1, 40)), 4000
    made = design(time, time=time, whole=False)
    reading = IrregularSerial().read(Fits(Response.of(made, rng.standard_normal((40, B))), Run()), STEP)
    assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B))


def test_fast_tails_equal_exact_ones() -> None:
    rng = np.random.default_rng(8)
    n = 60
    made = design(np.arange(n), time=np.arange(n))
    Y = ar1(0.2, (n, 40), rng)
    many = DurbinWatson().read(Fits(Response.of(made, Y), Run()), STEP)
    one = [DurbinWatson().read(fits(made, Y[:, b]), STEP).p[0] for b in range(40)]
    np.testing.assert_allclose(many.p, one, rtol=1e-3, atol=1e-5)


@given(st.integers(0, 1000), st.floats(1e-3, 1e3), st.floats(-1e3, 1e3))
def test_units_of_y_do_not_matter(seed: int, scale: float, slope: float) -> None:
    rng = np.random.default_rng(seed)
    t, y = np.arange(15.0), rng.standard_normal(15)
    made = design(t, time=t)
    one = DurbinWatson().read(fits(made, y), STEP)
    two = DurbinWatson().read(fits(made, scale * y + slope * t), STEP)
    assert two.p[0] == pytest.approx(one.p[0], rel=1e-6)
    assert one.estimate is not None
    assert two.estimate is not None
    assert two.estimate[0] == pytest.approx(one.estimate[0], abs=1e-6)


def test_directions_split_the_two_sided_p() -> None:
    rng = np.random.default_rng(9)
    t, y = np.arange(30.0), ar1(0.5, (30,), rng)
    made = design(t, time=t)
    p = {
        a: DurbinWatson().read(Fits(Response.of(made, y), Run(Settings(alternative=a))), STEP).p[0]  # type: ignore[arg-type]
        for a in ("two-sided", "greater", "less")
    }
    assert p["greater"] < p["less"]
    assert p["two-sided"] == pytest.approx(2 * p["greater"])
    assert p["greater"] + p["less"] == pytest.approx(1.0)


def test_the_form_follows_the_spacing() -> None:
    tests = (DurbinWatson(), PanelDurbinWatson(), IrregularSerial())

    def which(**how: object) -> str:
        made = design(n=len(how["time"]), **how)  # type: ignore[arg-type]
        return " ".join(t.id for t in tests if t.abouts(made))

    assert which(time=np.arange(9)) == "durbin-watson"
    assert which(time=[0, 1, 2, 4, 5]) == "panel-durbin-watson"
    assert which(time=[0, 1, 2, 0, 1], who=[0, 0, 0, 1, 1]) == "panel-durbin-watson"
    assert which(time=[0, 0.7, 2.2, 4.9], whole=False) == "irregular-serial"
    assert which(time=[0, 0, 1, 2]) == "irregular-serial"  # replicates at one time


def test_too_short_is_refused_with_the_numbers() -> None:
    made = fits(design(n=6, time=np.arange(6)), np.arange(6.0) ** 2)
    with pytest.raises(NotSupported, match="longest series has 6 rows") as stop:
        DurbinWatson().read(made, STEP)
    assert "8 rows" in stop.value.hint


def test_autocorrelation_curve() -> None:
    rng = np.random.default_rng(10)
    t = np.arange(80.0)
    made = fits(design(t, time=t), ar1(0.7, (80,), rng))
    found = DurbinWatson().curve(made, STEP)
    assert found is not None
    assert found.x[:3] == (1.0, 2.0, 3.0)
    assert found.size[:3] == (79.0, 78.0, 77.0)
    assert found.y[0] > found.high[0]  # 0.7 lies far outside the band of 80 independent rows
    assert found.high[0] == pytest.approx(1.96 / np.sqrt(80), rel=0.1)
    # One score step by its definition, at lag 3.
    M, S = hat(made.design), form_of(made.design, "lag:3").S.toarray()
    m, e = made.design.m, made.response.residual[:, 0]
    mean, square = np.trace(M @ S) / m, np.trace(M @ S @ M @ S)
    variance = 2 * (square - (mean * m) ** 2 / m) / (m * (m + 2))
    assert found.y[2] == pytest.approx((e @ S @ e / (e @ e) - mean) / ((m + 2) * variance))


def test_elapsed_curve_is_flat_for_independent_rows() -> None:
    rng = np.random.default_rng(11)
    time = np.cumsum(rng.exponential(1, 600))
    made = fits(design(time, time=time, whole=False), rng.standard_normal(600))
    found = elapsed_curve(made, *near_pairs(series_of(made.design)))
    assert found is not None
    outside = [not low <= y <= high for y, low, high in zip(found.y, found.low, found.high, strict=True)]
    assert sum(outside) <= 3
    assert list(found.x) == sorted(found.x)
