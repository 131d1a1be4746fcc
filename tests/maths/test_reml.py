"""The restricted likelihood from a Gram, and the searches over it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import stats

from clingstone.maths import reml
from clingstone.maths.basis import Basis, Gram
from clingstone.maths.lattice import minimise_columns
from clingstone.maths.search import minimise


@dataclass(frozen=True)
class Axis:
    name: str
    low: float
    high: float
    starts: tuple[float, ...]
    scan: tuple[float, ...]
    vanishes: bool = False


def case(seed: int = 0, n: int = 25, p: int = 3, B: int = 2) -> tuple[Basis, np.ndarray, np.ndarray, Gram]:
    rng = np.random.default_rng(seed)
    basis = Basis.of(np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))]))
    A = rng.standard_normal((n, n))
    V = A @ A.T + n * np.eye(n)
    Y = rng.standard_normal((n, B))
    e = basis.project(Y)
    W = np.linalg.inv(V)
    gram = Gram(
        basis.Q.T @ W @ basis.Q,
        basis.Q.T @ W @ e,
        np.einsum("ij,ik,kj->j", e, W, e),
        float(np.linalg.slogdet(V)[1]),
    )
    return basis, V, Y, gram


def test_criterion_is_the_density_of_error_contrasts() -> None:
    """−2ℓ_R is minus twice the log density of K'y for any orthonormal K with K'X = 0 (Harville 1974),
    in the basis Q, where ln|Q'Q| = 0: evaluated here by scipy's multivariate normal."""
    basis, V, Y, gram = case()
    n, p = basis.n, basis.p
    K = np.linalg.qr(np.hstack([basis.Q, np.eye(n)]))[0][:, p:n]
    sigma2 = reml.scale(gram, n - p)
    for b in range(2):
        law = stats.multivariate_normal(np.zeros(n - p), sigma2[b] * K.T @ V @ K)
        assert reml.criterion(gram, n - p)[b] == pytest.approx(-2 * law.logpdf(K.T @ Y[:, b]), abs=1e-9)


def test_generalised_least_squares_by_normal_equations() -> None:
    basis, V, Y, gram = case(1)
    X, W = basis.Q @ basis.R, np.linalg.inv(V)
    delta, c, logdet = reml.reduced(gram)
    beta = np.linalg.solve(X.T @ W @ X, X.T @ W @ Y)
    assert np.allclose(basis.inverse @ (basis.Q.T @ Y + delta), beta, atol=1e-11)
    r = Y - X @ beta
    assert np.allclose(c, np.einsum("ij,ik,kj->j", r, W, r), rtol=1e-11)
    assert logdet == pytest.approx(np.linalg.slogdet(basis.Q.T @ W @ basis.Q)[1], abs=1e-11)


def test_independence_is_ordinary_least_squares() -> None:
    gram = reml.independent(2, np.array([8.0, 18.0]))
    # By hand: σ̂² = 8/4 = 2, −2ℓ_R = 4 ln(2π·2) + 4.
    assert reml.scale(gram, 4).tolist() == [2.0, 4.5]
    assert reml.criterion(gram, 4)[0] == pytest.approx(4 * np.log(4 * np.pi) + 4)


def test_no_columns_at_all() -> None:
    gram = reml.independent(0, np.array([3.0]))
    delta, c, logdet = reml.reduced(gram)
    assert delta.shape == (0, 1)
    assert (c[0], logdet) == (3.0, 0.0)


def test_differences_of_a_known_function() -> None:
    def f(t: np.ndarray) -> float:
        return float(np.sin(t[0]) * np.exp(t[1]))

    t = np.array([0.4, -0.3])
    s, c, e = np.sin(0.4), np.cos(0.4), np.exp(-0.3)
    assert reml.gradient(f, t) == pytest.approx([c * e, s * e], abs=1e-8)
    assert reml.hessian(f, t) == pytest.approx(np.array([[-s * e, c * e], [c * e, s * e]]), abs=1e-6)


# ---- searches ---------------------------------------------------------------------------------

SCAN = tuple(np.linspace(-3, 3, 13))


def axis(vanishes: bool = False, low: float = -5.0) -> Axis:
    return Axis("t", low, 5.0, (-1.0, 0.0, 1.0), SCAN, vanishes)


def test_line_finds_the_deeper_of_two_valleys() -> None:
    def f(t: np.ndarray) -> float:
        x = float(t[0])
        return 100 + min((x + 2) ** 2, (x - 1.3) ** 2 - 0.01)

    found = minimise(f, [axis()])
    assert found.theta[0] == pytest.approx(1.3, abs=1e-6)
    assert not found.at_bound[0]


@pytest.mark.parametrize("slope", [1.0, -1.0])
def test_line_tells_a_bound(slope: float) -> None:
    found = minimise(lambda t: slope * float(t[0]), [axis()])
    assert found.theta[0] == -5.0 * slope
    assert found.at_bound[0]


def test_component_that_adds_nothing_vanishes() -> None:
    # Flat below −1: as good as "not there".
    found = minimise(lambda t: float(np.maximum(t[0] + 1, 0) ** 2), [axis(vanishes=True)])
    assert found.theta[0] == -5.0
    assert found.at_bound[0]


def bowl(t: np.ndarray) -> float:
    x, y = t
    return float(10 + 3 * (x - 0.7) ** 2 + 2 * (x - 0.7) * (y + 0.4) + (y + 0.4) ** 2)


def test_several_coordinates() -> None:
    found = minimise(bowl, [axis(), axis()])
    assert found.theta == pytest.approx([0.7, -0.4], abs=1e-6)
    assert found.converged
    assert found.curvature == pytest.approx(np.array([[6, 2], [2, 2]]), abs=1e-4)


def test_warm_search_reaches_the_same_optimum_with_fewer_evaluations() -> None:
    cold = minimise(bowl, [axis(), axis()])

    def moved(t: np.ndarray) -> float:
        return bowl(t - 0.3)

    calls = []

    def counted(t: np.ndarray) -> float:
        calls.append(1)
        return moved(t)

    warm = minimise(counted, [axis(), axis()], warm=cold)
    assert warm.theta == pytest.approx([1.0, -0.1], abs=1e-5)
    assert warm.converged
    assert len(calls) < 40


def test_inner_minimum_is_not_mistaken_for_zero() -> None:
    # Flat towards low and high, a ridge, a deeper valley at 2: from the flat part nothing points there.
    def f(t: np.ndarray) -> float:
        x, y = t
        ridge = np.exp(-((x + 0.5) ** 2)) - 2 * np.exp(-2 * (x - 2) ** 2)
        return float(ridge + (y - 0.1) ** 2)

    for start in (-2.5, 0.0):
        one = Axis("t", -20.0, 5.0, (start,), SCAN, True)
        found = minimise(f, [one, axis()])
        assert found.theta[0] == pytest.approx(2.0, abs=0.02)
        assert not found.at_bound[0]


def test_columns_agree_with_one_at_a_time() -> None:
    rng = np.random.default_rng(3)
    centres = rng.uniform(-1.5, 1.5, (2, 20))

    def value(t: np.ndarray, b: int) -> float:
        d = t - centres[:, b]
        return float(20 * np.log(1 + d[0] ** 2 + 0.8 * d[0] * d[1] + d[1] ** 2))

    def surface(thetas: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        v = np.array([[value(t, b) for b in range(20)] for t in thetas.T])
        return v, v / 20

    found = minimise_columns(surface, [axis(), axis()])
    # Quartic patches of 0.125 on a function of size 20 that varies on the scale of one: θ̂ to about
    # (0.125)⁴ = 2e-4, values to about 20·(0.125)⁵ = 6e-4.
    assert np.abs(found.theta - centres).max() < 2e-4
    assert np.abs(found.value).max() < 6e-4
    assert np.allclose(found.log_rss, found.value / 20, atol=1e-12)
    assert not found.at_bound.any()


def test_columns_at_bounds() -> None:
    # Column 0: best where the component is absent; column 1: beyond the scan's end; column 2: inside.
    def surface(thetas: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        x = np.maximum(thetas[0], -4.0)
        v = np.stack([x + 4, -x, (x - 0.5) ** 2], axis=1)
        return v, v

    found = minimise_columns(surface, [axis(vanishes=True)])
    assert found.theta[0].tolist() == pytest.approx([-5.0, 3.0, 0.5], abs=1e-5)
    assert found.at_bound[0].tolist() == [True, True, False]
