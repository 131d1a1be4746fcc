"""Simultaneous autoregressions: determinants, Grams, searches, moments, against the obvious dense twin."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, sparse
from scipy.spatial import cKDTree

from clingstone.maths import reml, sar
from clingstone.maths.groups import Load
from clingstone.maths.once import Array


def knn(n: int, k: int, seed: int) -> sparse.csr_array:
    P = np.random.default_rng(seed).uniform(size=(n, 2))
    near = cKDTree(P).query(P, k + 1)[1][:, 1:]
    return sparse.csr_array((np.ones(n * k), (np.repeat(np.arange(n), k), near.ravel())), shape=(n, n))


def basis(n: int, p: int, seed: int) -> Array:
    rng = np.random.default_rng(seed)
    return np.asarray(np.linalg.qr(np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))]))[0])


def dense_criterion(W: Array, Q: Array, y: Array, lam: float, m: int, restricted: bool) -> float:
    """−2ℓ from the n × n covariance itself."""
    n = len(y)
    A = np.eye(n) - lam * W
    V = np.linalg.inv(A.T @ A)
    Vi = np.linalg.inv(V)
    G = Q.T @ Vi @ Q
    r = y - Q @ np.linalg.solve(G, Q.T @ Vi @ y)
    c = r @ Vi @ r
    out = np.linalg.slogdet(V)[1] + m * (np.log(2 * np.pi * c / m) + 1)
    return float(out + (np.linalg.slogdet(G)[1] if restricted else 0.0))


def test_two_places_by_hand() -> None:
    # W = [[0, 1], [1, 0]]: |I − λW| = 1 − λ².
    links = sar.Links.of(sparse.csr_array(np.array([[0.0, 1.0], [1.0, 0.0]])))
    assert links.range == (-1.0, 1.0)
    assert float(links.logdet(np.array(0.5))) == pytest.approx(np.log(0.75))


@pytest.mark.parametrize("restricted", [True, False])
def test_criterion_and_estimate_are_those_of_the_dense_model(restricted: bool) -> None:
    n = 60
    links, Q = sar.Links.of(knn(n, 4, 1)), basis(n, 3, 2)
    y = Q @ [3.0, 1.0, 2.0] + links.draw(0.5, np.random.default_rng(3), 1)[:, 0]
    e = y - Q @ (Q.T @ y)
    profile, W = sar.Profile.of(links, Q, e[:, None]), links.W.toarray()
    m = n - 3 if restricted else n
    for lam in (-0.6, 0.0, 0.4, 0.9):
        expected = dense_criterion(W, Q, y, lam, m, restricted)
        assert profile.criterion(np.array([lam]), m, restricted)[0] == pytest.approx(expected, rel=1e-10)
    found, edge = profile.search(m, restricted)
    twin = optimize.minimize_scalar(
        lambda v: dense_criterion(W, Q, y, v, m, restricted),
        bounds=(-0.9, 0.99),
        method="bounded",
        options={"xatol": 1e-10},
    )
    assert found[0] == pytest.approx(twin.x, abs=1e-6)
    assert not edge[0]


def test_interpolated_determinant_holds_lambda_to_six_figures() -> None:
    n = 1500
    A = knn(n, 6, 4)
    links, Q = sar.Links.of(A), basis(n, 4, 5)
    assert links.eigenvalues is None  # so that the interpolant is what is tested
    omega = np.linalg.eigvalsh(links.similar.toarray())  # type: ignore[union-attr]
    for lam in np.linspace(-0.95, 0.995, 40):
        exact = float(np.log(1 - lam * omega).sum())
        assert float(links.logdet(np.array(lam))) == pytest.approx(exact, abs=5e-4)
    y = links.draw(0.6, np.random.default_rng(6), 3)
    e = y - Q @ (Q.T @ y)
    found, _ = sar.Profile.of(links, Q, e).search(n - 4, True)
    profile = sar.Profile.of(links, Q, e)
    for b in range(3):
        column = profile.column(b)

        def exact_criterion(lam: float, column: sar.Profile = column) -> float:
            gram = column.gram(lam)
            _, c, logdet = reml.reduced(gram)
            return float(logdet + reml.profiled(c, n - 4)[0] - 2 * np.log(1 - lam * omega).sum())

        twin = optimize.minimize_scalar(
            exact_criterion, bounds=(0.3, 0.9), method="bounded", options={"xatol": 1e-10}
        )
        assert found[b] == pytest.approx(twin.x, abs=1e-6)


def test_interpolating_in_lambda_itself_would_not_do() -> None:
    # The trap: ln|A| has a branch at the upper end, which a polynomial in λ does not follow.
    links = sar.Links.of(knn(1500, 6, 4))
    omega = np.linalg.eigvalsh(links.similar.toarray())  # type: ignore[union-attr]
    x = np.cos(np.pi * (np.arange(sar.NODES) + 0.5) / sar.NODES)
    nodes = 0.9999 * x
    series = np.polynomial.chebyshev.chebfit(x, [np.log(1 - v * omega).sum() for v in nodes], sar.NODES - 1)
    plain = float(np.polynomial.chebyshev.chebval(0.97 / 0.9999, series))
    exact = float(np.log(1 - 0.97 * omega).sum())
    assert abs(plain - exact) > 20 * abs(float(links.logdet(np.array(0.97))) - exact)


def test_many_columns_are_each_their_own_search_and_scale_does_not_matter() -> None:
    n = 80
    links, Q = sar.Links.of(knn(n, 4, 7)), basis(n, 2, 8)
    e = links.draw(0.4, np.random.default_rng(9), 6)
    e -= Q @ (Q.T @ e)
    whole, _ = sar.Profile.of(links, Q, e).search(n - 2, True)
    each = [sar.Profile.of(links, Q, 100 * e[:, b : b + 1]).search(n - 2, True)[0][0] for b in range(6)]
    np.testing.assert_allclose(whole, each, atol=1e-7)


def test_order_of_places_does_not_matter() -> None:
    n = 70
    A, Q = knn(n, 4, 10), basis(n, 3, 11)
    e = np.random.default_rng(12).standard_normal((n, 1))
    e -= Q @ (Q.T @ e)
    turn = np.random.default_rng(13).permutation(n)
    one, _ = sar.Profile.of(sar.Links.of(A), Q, e).search(n - 3, True)
    two, _ = sar.Profile.of(sar.Links.of(A[turn][:, turn]), Q[turn], e[turn]).search(n - 3, True)
    assert one[0] == pytest.approx(two[0], abs=1e-8)


def test_place_effects_beside_rows_equal_the_dense_gram() -> None:
    S, n = 12, 40
    rng = np.random.default_rng(14)
    site = np.r_[np.arange(S), rng.integers(0, S, n - S)]
    links, Q = sar.Links.of(knn(S, 3, 15)), basis(n, 3, 16)
    e = rng.standard_normal((n, 2))
    e -= Q @ (Q.T @ e)
    Z = np.eye(S)[site]
    load = Load(Z.sum(axis=0), Z.T @ Q, Z.T @ e)
    found = sar.top(reml.independent(3, np.sum(e**2, axis=0)), load, links, 0.45, 1.7)
    A = np.eye(S) - 0.45 * links.W.toarray()
    V = np.eye(n) + 1.7 * Z @ np.linalg.inv(A.T @ A) @ Z.T
    Vi = np.linalg.inv(V)
    np.testing.assert_allclose(found.QQ, Q.T @ Vi @ Q, rtol=1e-10)
    np.testing.assert_allclose(found.QE, Q.T @ Vi @ e, atol=1e-12)
    np.testing.assert_allclose(found.EE, np.einsum("ij,ik,kj->j", e, Vi, e), rtol=1e-10)
    assert found.logdet == pytest.approx(np.linalg.slogdet(V)[1], rel=1e-10)


def test_profile_interval_covers_and_an_extreme_estimate_is_an_edge() -> None:
    n, B = 100, 200
    links, Q = sar.Links.of(knn(n, 5, 17)), basis(n, 2, 18)
    e = links.draw(0.5, np.random.default_rng(19), B)
    e -= Q @ (Q.T @ e)
    profile = sar.Profile.of(links, Q, e)
    lam, _ = profile.search(n - 2, True)
    inside = 0
    for b in range(B):
        low, high = profile.column(b).interval(float(lam[b]), n - 2, True, 3.841)
        inside += low <= 0.5 <= high
    assert inside / B == pytest.approx(0.95, abs=3 * np.sqrt(0.95 * 0.05 / B))
    # A ramp is its neighbours' mean everywhere but at its ends: λ runs to one.
    smooth = (np.arange(n) - (n - 1) / 2)[:, None]
    path = sar.Links.of(
        sparse.csr_array(sparse.diags_array([np.ones(n - 1), np.ones(n - 1)], offsets=[-1, 1]))
    )
    constant = np.full((n, 1), 1 / np.sqrt(n))
    found, _ = sar.Profile.of(path, constant, smooth).search(n - 1, False)
    assert found[0] > 0.99


def test_moments_find_lambda_in_a_large_sample() -> None:
    links = sar.Links.of(knn(4000, 6, 20))
    u = links.draw(0.6, np.random.default_rng(21), 4)
    lam, sigma2 = sar.moments(links, u)
    np.testing.assert_allclose(lam, 0.6, atol=0.06)
    np.testing.assert_allclose(sigma2, 1.0, atol=0.08)


def test_weights_without_a_symmetric_sister() -> None:
    A = knn(50, 4, 22)
    W = sparse.csr_array(A / 4.0)
    links = sar.Links(W)
    assert links.range == (-1.0, 1.0)
    exact = np.linalg.slogdet(np.eye(50) - 0.7 * W.toarray())[1]
    assert float(links.logdet(np.array(0.7))) == pytest.approx(exact, abs=1e-3)


def test_correlation_of_neighbours_is_not_lambda() -> None:
    links = sar.Links.of(knn(300, 6, 23))
    exact = sar.neighbour_correlation(links, 0.6, np.random.default_rng(24))
    A = np.linalg.inv(np.eye(300) - 0.6 * links.W.toarray())
    V = A @ A.T
    R = V / np.sqrt(np.outer(np.diag(V), np.diag(V)))
    assert exact == pytest.approx(R[links.W.toarray() > 0].mean())
    assert exact < 0.5


@pytest.mark.parametrize("symmetric", [True, False])
def test_solving_by_the_symmetric_sister_is_solving(symmetric: bool) -> None:
    A = knn(40, 4, 25)
    links = sar.Links.of(A) if symmetric else sar.Links(sparse.csr_array(A / 4.0))
    block = np.random.default_rng(26).standard_normal((40, 3))
    left = np.eye(40) - 0.7 * links.W.toarray()
    np.testing.assert_allclose(links.solve(0.7, block), np.linalg.solve(left, block), rtol=1e-9)
    np.testing.assert_allclose(links.solve_across(0.7, block), np.linalg.solve(left.T, block), rtol=1e-9)
