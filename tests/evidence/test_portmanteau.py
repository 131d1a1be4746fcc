"""Several lags: Breusch–Godfrey and Ljung–Box within series."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.portmanteau import (
    BreuschGodfrey,
    LjungBox,
    corrected,
    correlations,
    largest,
    moments,
    partial_r2,
    plain,
)
from clingstone.needs import NotSupported
from clingstone.run import Run

from .factories import ar1, design, fits, residual_space


def panel(rng: np.random.Generator, G: int = 5, T: int = 9) -> tuple[np.ndarray, np.ndarray]:
    keep = np.sort(rng.choice(G * T, G * T - 6, replace=False))
    return np.repeat(np.arange(G), T)[keep], np.tile(np.arange(T), G)[keep]


def test_earlier_residuals_stay_within_series() -> None:
    rng = np.random.default_rng(1)
    who, time = panel(rng)
    x, y = rng.standard_normal(len(who)), rng.standard_normal((len(who), 3))
    made = design(x, time=time, who=who)
    response = Response.of(made, y)
    for b in range(3):
        e = response.residual[:, b]
        place = {(w, t): i for i, (w, t) in enumerate(zip(who, time, strict=True))}
        E = np.array(
            [
                [e[place[w, t - k]] if (w, t - k) in place else 0.0 for k in (1, 2)]
                for w, t in zip(who, time, strict=True)
            ]
        )
        X = np.column_stack([np.ones(len(x)), x, E])
        rest = e - X @ np.linalg.lstsq(X, e, rcond=None)[0]
        r2, rank = partial_r2(response, 2)
        assert rank == 2
        assert r2[b] == pytest.approx(1 - rest @ rest / (e @ e))


def test_exact_moments_equal_dense_ones() -> None:
    rng = np.random.default_rng(2)
    who, time = panel(rng)
    made = design(rng.standard_normal(len(who)), time=time, who=who)
    mean, covariance = moments(made, 3)
    K = residual_space(made.Q)
    M, m = K @ K.T, K.shape[1]
    A = []
    for k in (1, 2, 3):
        linked = np.equal.outer(who, who) & (np.abs(np.subtract.outer(time, time)) == k)
        A.append(0.5 * linked)
    for i in range(3):
        assert mean[i] == pytest.approx(np.trace(M @ A[i]) / m)
        for j in range(3):
            cross = np.trace(M @ A[i] @ M @ A[j])
            expected = 2 * (cross - np.trace(M @ A[i]) * np.trace(M @ A[j]) / m) / (m * (m + 2))
            assert covariance[i, j] == pytest.approx(expected)
    e = Response.of(made, rng.standard_normal(len(who)))
    r = correlations(e, 3)[:, 0]
    expected = (r - mean) @ np.linalg.solve(covariance, r - mean)
    assert corrected(e, 3)[0] == pytest.approx(expected)


@pytest.mark.slow
def test_size_in_short_series_with_trend() -> None:
    # 30 rows, trend and a random walk: chi-squared on the plain statistic rejects far too often.
    rng = np.random.default_rng(3)
    n, B = 30, 1500
    made = design(np.arange(n), np.cumsum(rng.standard_normal(n)), time=np.arange(n))
    many = Fits(Response.of(made, rng.standard_normal((n, B))), Run())
    at = About("6", "")
    assert many.depth == "fast"
    read = LjungBox().read(many, at)
    assert np.mean(read.p < 0.05) < 0.08  # METHOD reports 0.059 at this size
    from scipy import stats

    assert np.mean(stats.chi2.sf(plain(many.response, 6), 6) < 0.05) > 0.08
    # One column at a time the draws make it exact.
    exact = [LjungBox().read(fits(made, rng.standard_normal(n)), at).p[0] for _ in range(300)]
    assert np.mean(np.array(exact) <= 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 300))
    exact = [BreuschGodfrey().read(fits(made, rng.standard_normal(n)), About("4")).p[0] for _ in range(300)]
    assert np.mean(np.array(exact) <= 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 300))


def test_both_find_a_process_at_lag_two() -> None:
    rng = np.random.default_rng(4)
    n = 300
    e = rng.standard_normal(n)
    for t in range(2, n):
        e[t] += 0.5 * e[t - 2]
    made = fits(design(n=n, time=np.arange(n)), e)
    assert BreuschGodfrey().read(made, About("4")).p[0] < 0.01
    reading = LjungBox().read(made, About("10"))
    assert reading.p[0] < 1e-8
    assert reading.estimate is not None
    assert reading.estimate[0] == pytest.approx(0.5, abs=0.12)
    assert largest(made.response, 1)[0] == pytest.approx(0.0, abs=0.15)


def test_one_seed_one_answer() -> None:
    rng = np.random.default_rng(5)
    made, y = design(np.arange(40), time=np.arange(40)), ar1(0.3, (40,), rng)
    first, second = (BreuschGodfrey().read(fits(made, y), About("1")).p[0] for _ in range(2))
    assert first == second
    other = BreuschGodfrey().read(fits(made, y, seed=7), About("1")).p[0]
    assert other == pytest.approx(first, abs=0.05)


def test_irregular_times_have_no_whole_lags() -> None:
    rng = np.random.default_rng(6)
    made = fits(design(n=20, time=np.cumsum(rng.exponential(1, 20)), whole=False), rng.standard_normal(20))
    for test in (BreuschGodfrey(), LjungBox()):
        with pytest.raises(NotSupported, match="times are irregular"):
            test.read(made, test.abouts(made.design)[0])


def test_lags_that_the_model_spans_are_dropped() -> None:
    # A perfect saw-tooth model leaves residuals whose second lag repeats the first up to sign.
    y = np.tile([1.0, -1.0], 12)
    made = Response.of(design(n=24, time=np.arange(24)), y)
    r2, rank = partial_r2(made, 2)
    assert 1 <= rank <= 2
    assert 0.9 < r2[0] <= 1.0
