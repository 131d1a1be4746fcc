"""AR(1) by elapsed steps."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import markov
from clingstone.maths.markov import Links, at_rho, correlation

NAN = float("nan")
GAPS = np.array([NAN, 1.0, 2.0, 1.0, NAN, 3.0, 1.0, NAN])
UNEVEN = np.array([NAN, 0.4, 2.7, 1.1, NAN, 0.05, 1.9, NAN])
CASES = [(GAPS, 0.6), (GAPS, -0.7), (GAPS, 0.0), (UNEVEN, 0.35), (GAPS, 0.9999), (UNEVEN, 1e-9)]


def full(steps: np.ndarray, rho: float) -> np.ndarray:
    """R written out pair by pair."""
    starts = np.isnan(steps)
    series, time = np.cumsum(starts), np.zeros(len(steps))
    for i in range(1, len(steps)):
        time[i] = 0.0 if starts[i] else time[i - 1] + steps[i]
    R = np.zeros((len(steps), len(steps)))
    for i in range(len(steps)):
        for j in range(len(steps)):
            if series[i] == series[j]:
                lag = abs(time[i] - time[j])
                R[i, j] = 1.0 if lag == 0 else (rho ** round(lag) if rho < 0 else rho**lag)
    return R


def weighed(links: Links, rho: float) -> tuple[np.ndarray, float]:
    """R⁻¹ and ln|R| from the fixed forms, at two ρ at once."""
    weights, logdet = links.weights(np.array([0.1, rho]))
    eye = np.eye(links.n)
    forms = [eye, *(form.apply(eye) for pair in links.forms for form in pair)]
    return sum(w * S for w, S in zip(weights[1], forms, strict=True)), logdet[1]


def test_three_rows_by_hand() -> None:
    # Equal steps, ρ = ½: R⁻¹ = (4/3)[[1, −½, 0], [−½, 5/4, −½], [0, −½, 1]], |R| = (3/4)².
    links = Links(np.array([NAN, 1.0, 1.0]))
    inverse, logdet = weighed(links, 0.5)
    assert inverse == pytest.approx(4 / 3 * np.array([[1, -0.5, 0], [-0.5, 1.25, -0.5], [0, -0.5, 1]]))
    assert logdet == pytest.approx(2 * np.log(0.75))


@pytest.mark.parametrize(("steps", "rho"), CASES)
def test_every_route_equals_the_full_matrix(steps: np.ndarray, rho: float) -> None:
    links, R = Links(steps), full(steps, rho)
    n = len(steps)
    eye = np.eye(n)
    assert links.few
    inverse, logdet = weighed(links, rho)
    # Entries of R⁻¹ grow as 1/(1 − ρ²), and rounding with them.
    size = np.abs(inverse).max()
    assert inverse @ R == pytest.approx(eye, abs=1e-13 * size)
    assert logdet == pytest.approx(np.linalg.slogdet(R)[1], abs=1e-9)
    assert links.logdet(rho) == pytest.approx(logdet, abs=1e-12)
    assert links.dense(rho) == pytest.approx(R, abs=1e-12)
    W = links.whiten(rho, eye)
    assert pytest.approx(eye, abs=1e-10) == W @ R @ W.T
    assert links.whiten(rho, links.colour(rho, eye)) == pytest.approx(eye, abs=1e-10)
    assert links.whiten(rho, np.ones(n)) == pytest.approx(W.sum(axis=1), abs=1e-12)


def test_correlation_keeps_its_digits_near_one() -> None:
    phi, rest = correlation(1 - 1e-12, np.array([1.0]))
    assert phi[0] == pytest.approx(1 - 1e-12)
    # 1 − φ² = 2e-12 − 1e-24; ρ itself is stored with a rounding of 1e-16, so four digits.
    assert rest[0] == pytest.approx(2e-12, rel=1e-4)


def test_many_lengths_are_told() -> None:
    steps = np.random.default_rng(0).uniform(0.5, 2, 60)
    steps[0] = NAN
    assert not Links(steps).few


def test_lag_sums_equal_the_full_matrix_at_every_correlation(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(3)
    left, right = rng.normal(size=(len(GAPS), 3)), rng.normal(size=(len(GAPS), 2))
    for block in (markov.BLOCK, 10):  # all series at once; one after the other
        monkeypatch.setattr(markov, "BLOCK", block)
        sums = Links(GAPS).lag_sums(left, right)
        assert sums is not None
        for rho in (-0.7, 0.0, 0.6, 0.9999):
            assert at_rho(sums, rho) == pytest.approx(left.T @ full(GAPS, rho) @ right, abs=1e-12)


def test_lag_sums_of_no_column_are_empty() -> None:
    """Residuals alone come without a model, so without a column."""
    none = np.zeros((len(GAPS), 0))
    sums = Links(GAPS).lag_sums(none, none)
    assert sums is not None
    assert sums.shape[1:] == (0, 0)


def test_lags_are_not_summed_one_by_one_where_series_are_long_or_times_uneven() -> None:
    long = np.ones(markov.SHORT + 1)
    long[0] = NAN
    for steps in (UNEVEN, long, np.array([NAN, 0.0, 1.0])):
        assert Links(steps).lag_sums(np.ones((len(steps), 1)), np.ones((len(steps), 1))) is None
