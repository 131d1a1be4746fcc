"""ARMA processes with missing steps, and fading processes with row noise, against dense twins."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import toeplitz

from clingstone.maths.arma import Steps, autocovariances, from_partial
from clingstone.maths.basis import Gram
from clingstone.maths.longrun import Grid
from clingstone.maths.markov import Links
from clingstone.maths.nugget import Visits

ORDERS = [
    ((0.6,), ()),
    ((1.0, -0.3), ()),
    ((0.5, -0.2, 0.1), ()),
    ((), (0.5,)),
    ((0.5,), (0.4,)),
    ((0.3,), (0.2, 0.5)),
]


def steps() -> Steps:
    """Three series, of 12 rows with two missing steps, 3 rows with three, and 9 rows."""
    codes = np.repeat([0, 1, 2], [12, 3, 9]).astype(np.int32)
    tick = np.concatenate([np.r_[0:6, 8:14], [0, 1, 5], np.arange(9)])
    return Steps(Grid.of(codes, tick))


def dense(grid: Grid, phi, theta):
    V = np.zeros((grid.N, grid.N))
    for start, length in zip(grid.starts, grid.lengths, strict=True):
        V[start : start + length, start : start + length] = toeplitz(autocovariances(phi, theta, length))
    return V[np.ix_(grid.place, grid.place)]


def blocks(n: int, seed: int = 0):
    rng = np.random.default_rng(seed)
    Q = np.linalg.qr(rng.normal(size=(n, 3)))[0]
    E = rng.normal(size=(n, 2))
    return Q, E - Q @ (Q.T @ E)


def test_missing_steps_of_different_series_share_columns():
    # Two, three and no missing steps: three columns, the first holding the first hole of both series.
    made = steps()
    assert made.holes.tolist() == [2, 3, 0]
    assert made.depth == 3
    D = made.filled(np.zeros((24, 0)))
    assert np.flatnonzero(D[:, 0]).tolist() == [6, 16]
    assert np.flatnonzero(D[:, 1]).tolist() == [7, 17]
    assert np.flatnonzero(D[:, 2]).tolist() == [18]


def test_autocovariances_by_hand():
    # AR(1): φᵏ/(1 − φ²). MA(1): 1 + θ², θ, 0. ARMA(1,1): γ₀ = (1 + 2φθ + θ²)/(1 − φ²), γ₁ = φγ₀ + θ.
    assert autocovariances(np.array([0.5]), np.zeros(0), 3) == pytest.approx([4 / 3, 2 / 3, 1 / 3])
    assert autocovariances(np.zeros(0), np.array([0.5]), 3) == pytest.approx([1.25, 0.5, 0.0])
    both = autocovariances(np.array([0.5]), np.array([0.4]), 3)
    assert both == pytest.approx([1.56 / 0.75, 0.5 * 1.56 / 0.75 + 0.4, 0.5 * (0.5 * 1.56 / 0.75 + 0.4)])


def test_partial_correlations_give_stationary_coefficients():
    # AR(2) with partial correlations r₁, r₂ has φ₁ = r₁(1 − r₂), φ₂ = r₂.
    assert from_partial([0.6, -0.3]) == pytest.approx([0.6 * 1.3, -0.3])
    rng = np.random.default_rng(1)
    for _ in range(20):
        phi = from_partial(np.tanh(rng.normal(size=4)))
        assert np.all(np.abs(np.roots(np.r_[1.0, -phi])) < 1)


@pytest.mark.parametrize(("phi", "theta"), ORDERS)
def test_gram_equals_dense_with_missing_steps(phi, theta):
    made, (phi, theta) = steps(), (np.array(phi), np.array(theta))
    Q, E = blocks(24)
    found = made.gram(phi, theta, made.filled(np.hstack([Q, E])), 3)
    inverse = np.linalg.inv(dense(made.grid, phi, theta))
    assert pytest.approx(Q.T @ inverse @ Q, abs=1e-12) == found.QQ
    assert pytest.approx(Q.T @ inverse @ E, abs=1e-12) == found.QE
    assert pytest.approx(np.diag(E.T @ inverse @ E), rel=1e-12) == found.EE
    assert found.logdet == pytest.approx(np.linalg.slogdet(dense(made.grid, phi, theta))[1], abs=1e-11)


def test_first_order_equals_the_markov_links():
    made, (Q, E) = steps(), blocks(24)
    found = made.gram(np.array([0.7]), np.zeros(0), made.filled(np.hstack([Q, E])), 3)
    gap = np.full(24, np.nan)
    gap[1:] = np.diff(np.concatenate([np.r_[0:6, 8:14], [0, 1, 5], np.arange(9)]))
    gap[[0, 12, 15]] = np.nan
    R = Links(gap).dense(0.7) / (1 - 0.49)
    assert pytest.approx(np.diag(E.T @ np.linalg.solve(R, E)), rel=1e-12) == found.EE
    assert found.logdet == pytest.approx(np.linalg.slogdet(R)[1], abs=1e-11)


# ---- row noise ------------------------------------------------------------------------------------

GAPS = np.array([np.nan, 1, 0, 0.5, 2.2, 0, 0, np.nan, 1, 3, 0, 0.1])  # zeros are replicates


@pytest.mark.parametrize("weighted", [False, True])
@pytest.mark.parametrize(("rho", "ratio"), [(0.5, 1.0), (0.9, 30.0), (0.99, 1e-6), (0.2, 1e4)])
def test_noisy_gram_equals_dense(rho, ratio, weighted):
    root = np.sqrt(np.random.default_rng(3).uniform(0.5, 2, 12)) if weighted else None
    visits = Visits.of(GAPS, root)
    assert visits.part.count == 8
    Q, E = blocks(12)
    plain = Gram(np.eye(3), np.zeros((3, 2)), np.einsum("ij,ij->j", E, E), 0.0)
    found, _ = visits.lower(rho, ratio, visits.sums(np.hstack([Q, E])), plain)
    V = visits.dense(rho, ratio)
    inverse = np.linalg.inv(V)
    assert pytest.approx(Q.T @ inverse @ Q, abs=1e-9) == found.QQ
    assert pytest.approx(Q.T @ inverse @ E, abs=1e-9) == found.QE
    assert pytest.approx(np.diag(E.T @ inverse @ E), abs=1e-9) == found.EE
    assert found.logdet == pytest.approx(np.linalg.slogdet(V)[1], abs=1e-9)


def test_dense_covariance_by_hand_and_draws_follow_it():
    visits = Visits.of(np.array([np.nan, 0.0, 2.0]))
    # Two replicates and a row two steps later: λ + 1 on the diagonal, λ between replicates, λρ² beyond.
    V = np.array([[3.0, 2.0, 0.5], [2.0, 3.0, 0.5], [0.5, 0.5, 3.0]])
    assert visits.dense(0.5, 2.0) == pytest.approx(V)
    drawn = visits.process(0.5, 2.0, np.random.default_rng(0), 200_000)
    # Standard error about 2·√2/√200,000 = 0.006.
    assert np.cov(drawn) == pytest.approx(V - np.eye(3), abs=0.03)
