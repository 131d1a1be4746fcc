"""Slopes and average information of places over independent rows."""

import numpy as np
import pytest
from scipy.spatial.distance import pdist, squareform

from clingstone.maths import matern, reml
from clingstone.maths.field import Field
from clingstone.maths.groups import Load
from clingstone.maths.once import Array

RNG = np.random.default_rng(5)
S, N, PLAIN = 150, 240, 3
CODE = np.append(np.arange(S), RNG.integers(0, S, N - S))
APART = squareform(pdist(RNG.uniform(size=(S, 2))))
Q = np.linalg.qr(np.column_stack([np.ones(N), RNG.standard_normal((N, PLAIN - 1))]))[0]
E = RNG.standard_normal(N) + RNG.standard_normal(S)[CODE]
E -= Q @ (Q.T @ E)


def added(values: Array) -> Array:
    return np.stack([np.bincount(CODE, column, S) for column in np.atleast_2d(values.T)], axis=1)


def field(smoothness: float, restricted: bool) -> Field:
    def K(theta: Array) -> Array:
        return np.exp(theta[1]) * matern.kernel(APART, float(np.exp(theta[0])), smoothness)

    def slope(theta: Array) -> Array:
        return np.exp(theta[1]) * matern.kernel_slope(APART, float(np.exp(theta[0])), smoothness)

    load = Load(np.bincount(CODE, minlength=S).astype(float), added(Q), added(E))
    base = reml.independent(PLAIN, np.array([E @ E]))
    return Field(base, load, K, slope, N - PLAIN if restricted else N, restricted)


def rows(theta: Array, smoothness: float) -> tuple[Array, list[Array]]:
    """V and its two derivatives row by row."""
    reach = float(np.exp(theta[0]))
    R = [one(APART, reach, smoothness)[np.ix_(CODE, CODE)] for one in (matern.kernel, matern.kernel_slope)]
    return np.eye(N) + np.exp(theta[1]) * R[0], [np.exp(theta[1]) * R[1], np.exp(theta[1]) * R[0]]


@pytest.mark.parametrize("smoothness", [0.5, 1.5, 2.5])
@pytest.mark.parametrize("restricted", [True, False])
def test_slopes_against_differences_and_information_against_the_rows(
    smoothness: float, restricted: bool
) -> None:
    f, theta = field(smoothness, restricted), np.array([-1.8, 0.4])
    assert f.gradient(theta) == pytest.approx(reml.gradient(f, theta), rel=1e-6, abs=1e-6)
    V, dV = rows(theta, smoothness)
    inverse = np.linalg.inv(V)
    P = inverse - inverse @ Q @ np.linalg.solve(Q.T @ inverse @ Q, Q.T @ inverse)
    c = float(E @ P @ E)
    fixed = np.linalg.slogdet(Q.T @ inverse @ Q)[1] if restricted else 0.0
    plain = np.linalg.slogdet(V)[1] + fixed + f.m * (np.log(2 * np.pi * c / f.m) + 1)
    assert f(theta) == pytest.approx(plain, abs=1e-8)
    moved = [one @ P @ E for one in [V, *dV]]  # σ² first: the whole of V moves with it
    AI = np.array([[a @ P @ b for b in moved] for a in moved]) * f.m / c
    profiled = AI[1:, 1:] - np.outer(AI[0, 1:], AI[0, 1:]) / AI[0, 0]
    assert f.information(theta) == pytest.approx(profiled, rel=1e-9)


def test_order_of_asking_does_not_matter() -> None:
    """The factor is used up by the slopes; the criterion at the same place must not be read from it after."""
    a, b = np.array([-1.8, 0.4]), np.array([-2.2, 1.0])
    first, second = field(0.5, True), field(0.5, True)
    assert first.gradient(a) == pytest.approx(second.gradient(a), rel=1e-14)
    assert first(a) == second(a)
    assert first(b) == second(b)
    assert first(a) == field(0.5, True)(a)
