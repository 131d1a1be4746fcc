"""The null law of the restricted likelihood ratio: its spectrum, its draws."""

from __future__ import annotations

import time

import numpy as np
import pytest

from clingstone.maths import restricted


def grouped(sizes, seed=0, p=3):
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(len(sizes)), sizes)
    X = np.column_stack(
        [np.ones(len(codes)), rng.normal(size=(len(codes), p - 2)), (codes % 2).astype(float)]
    )
    Q, _ = np.linalg.qr(X)
    sums = np.stack([np.bincount(codes, q, len(sizes)) for q in Q.T], axis=1)
    return np.asarray(sizes, dtype=float), sums


def test_compressed_spectrum_equals_the_dense_one():
    sizes, sums = grouped(np.random.default_rng(1).integers(2, 12, 450))
    dense = np.linalg.eigvalsh(np.diag(sizes) - sums @ sums.T)
    rank = int(np.sum(dense > 1e-9))
    found = restricted.modes(sizes, sums, rank)
    assert found.rank == rank
    np.testing.assert_allclose(np.repeat(found.mu, found.count), dense[len(dense) - rank :], atol=1e-10)


def test_many_sizes_are_put_into_classes_close_to_the_truth():
    sizes, sums = grouped(np.random.default_rng(2).integers(2, 900, 600))
    dense = np.linalg.eigvalsh(np.diag(sizes) - sums @ sums.T)
    rank = int(np.sum(dense > 1e-9))
    found = restricted.modes(sizes, sums, rank)
    near = np.repeat(found.mu, found.count)
    assert near.sum() == pytest.approx(dense.sum(), rel=1e-3)
    assert np.mean(np.abs(near - dense[len(dense) - rank :])) < 0.01 * dense.mean()


def test_twenty_groups_of_six():
    # RLRsim 3.1.8, 20,000 draws: P(0) = 0.537, 95 % point 2.45.
    sizes, sums = grouped([6] * 20, p=2)
    sums = sums[:, :1]
    Q = np.full((20, 1), 6 / np.sqrt(120))
    draws = restricted.draws(restricted.modes(sizes, Q, 19), 119, np.random.default_rng(0), 40_000)
    assert np.mean(draws < 1e-9) == pytest.approx(0.537, abs=0.015)
    assert np.quantile(draws, 0.95) == pytest.approx(2.45, abs=0.12)


def test_many_groups_come_near_the_half_and_half_mixture():
    sizes, sums = grouped([4] * 5000)
    found = restricted.modes(sizes, sums, 5000 - 2)
    draws = restricted.draws(found, 20_000 - 3, np.random.default_rng(0), 20_000)
    assert np.mean(draws > 2.7055) == pytest.approx(0.05, abs=0.007)


def test_a_hundred_thousand_draws_within_seconds():
    sizes, sums = grouped(np.random.default_rng(3).integers(2, 30, 300))
    found = restricted.modes(sizes, sums, 298)
    start = time.perf_counter()
    assert len(restricted.draws(found, 4000, np.random.default_rng(0), 100_000)) == 100_000
    assert time.perf_counter() - start < 10


class Fixed:
    """A generator that hands out what it was given."""

    def __init__(self, w2, rest):
        self.w2, self.rest = w2, rest

    def standard_normal(self, size):
        return np.sqrt(self.w2)

    def chisquare(self, df, size):
        return self.rest if np.isscalar(df) else np.empty(size)


def test_draws_are_the_supremum_written_out():
    rng = np.random.default_rng(4)
    sizes, sums = grouped([3, 4, 5, 6, 7, 8])
    found, m = restricted.modes(sizes, sums, 4), 30
    w2, rest = rng.chisquare(1, size=(50, 4)), rng.chisquare(m - 4, size=50)
    drawn = restricted.draws(found, m, Fixed(w2, rest), 50)
    best = np.zeros(50)
    for lam in np.concatenate([[0.0], np.geomspace(1e-4, 1e3, 20_000)]):
        kept = 1 / (1 + lam * found.mu)
        N, D = w2 @ (1 - kept), w2 @ kept + rest
        best = np.maximum(best, m * np.log1p(N / D) + np.log(kept).sum())
    np.testing.assert_allclose(drawn, best, rtol=2e-3, atol=2e-3)  # sixty λ against twenty thousand
    assert np.all(drawn <= best + 1e-9)
    assert (drawn == 0).sum() == (best == 0).sum() > 5
