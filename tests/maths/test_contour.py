"""The contour integral of a quadratic form: known tails, and paths that leave what numbers can hold."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from scipy import stats

from clingstone.maths.contour import Saddle, integrate, saddle


def form(values: np.ndarray, t: float):
    """ln det(I − 2z(Λ − t·mean)) of Σ λχ²₁ against t, as the callers write it for Q > 0."""
    gaps = values - t

    def log_det(z: np.ndarray) -> np.ndarray:
        return np.sum(np.log(1 - 2 * z[:, None] * gaps), axis=1)

    return log_det


def test_tail_of_an_f_ratio():
    """λ is 1 k times and 0 m − k times: e'Se/e'e > t is F(k, m − k) > t(m − k)/(k(1 − t))."""
    k, m, t = 5, 40, 0.35
    values = np.r_[np.ones(k), np.zeros(m - k)]
    log_det = form(values, t)
    found = integrate(log_det, saddle(log_det, 1.0, 0.5 / (1 - t)))
    wanted = stats.f.logsf(t * (m - k) / (k * (1 - t)), k, m - k)
    assert found.log_tail == pytest.approx(wanted, rel=1e-9)


def test_a_path_that_overflows_gives_its_bound_and_no_warning():
    def log_det(z: np.ndarray) -> np.ndarray:
        return -4e3 * np.abs(z.imag) + 0j * z  # grows along the path, as no true form does

    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = integrate(log_det, Saddle(1.0, 1.0, 0.0, True))
    assert found.accuracy == 1.0
    assert found.log_tail == -np.inf
    assert found.log_bound == 0.0


def test_a_hundred_thousand_crossed_rows_raise_no_warning():
    from tests.evidence import factories as make

    from clingstone.evidence.grouplm import GroupLM

    rng = np.random.default_rng(1)
    n, a, b = 100_000, 2_972, 1_128
    one, two = rng.integers(0, a, n), rng.integers(0, b, n)
    y = 0.3 * rng.normal(size=a)[one] + 0.5 * rng.normal(size=b)[two] + rng.normal(size=n)
    fits = make.fits(make.design(rng.normal(size=n), groups={"one": one, "two": two}), y)
    test = GroupLM()
    with warnings.catch_warnings():
        warnings.simplefilter("error", RuntimeWarning)
        read = [test.read(fits, about) for about in test.abouts(fits.design)]
    assert all(r.log_p[0] < -1000 for r in read)
