"""What someone who knew the true covariance would find: intervals, and tests of the true structures."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from tests.validation.worlds import Array, Truth

NULL = 2000  # draws that give the 5 % point of an oracle's test, and as many that give its power
LEVEL = 0.05
JITTER = 1e-10


def oracle(truth: Truth, Y: Array) -> dict[str, Any]:
    """x by generalised least squares at the true covariance, for each column of Y (n, B).

    estimates (B,), se : of x. factor : the true standard deviation of the ordinary coefficient over the
    root of what the ordinary fit expects its variance to be, E(s²)(X'X)⁻¹.
    """
    n = len(truth.x)
    X = basis(truth)
    E = Y - np.broadcast_to(np.asarray(truth.mean), n)[:, None]
    L = factor(truth.V)
    A, b = np.linalg.solve(L, X), np.linalg.solve(L, E)
    cov = np.linalg.inv(A.T @ A)
    inverse = np.linalg.inv(X.T @ X)
    H = X @ inverse
    s2 = (np.trace(truth.V) - np.trace(H.T @ truth.V @ X)) / (n - 2)
    return {
        "estimates": (cov @ (A.T @ b))[1].tolist(),
        "se": float(np.sqrt(cov[1, 1])),
        "factor": float(np.sqrt((H.T @ truth.V @ H)[1, 1] / (s2 * inverse[1, 1]))),
    }


def basis(truth: Truth) -> Array:
    return np.column_stack([np.ones(len(truth.x)), truth.x])


def power(truth: Truth, holds: Iterable[str]) -> float:
    """Share of the data drawn at V on this design in which every structure is found at 5 %; NaN for none."""
    families = sorted(holds)
    if not families:
        return float("nan")
    n = len(truth.x)
    E = factor(truth.V) @ np.random.default_rng([n, 1]).standard_normal((n, NULL))
    return float(np.mean(np.all([detected(truth, family, basis(truth), E) for family in families], axis=0)))


def factor(V: Array) -> Array:
    return np.linalg.cholesky(V + JITTER * np.eye(len(V)))


def detected(truth: Truth, family: str, X: Array, E: Array) -> Array:
    """(B,) whether the test of V against the nearest covariance without one structure rejects at 5 %.

    The ratio of the two generalised sums of squares is the likelihood ratio of any two covariances known
    up to scale, free of mean and scale (King 1980); its null law by simulation on the same design.
    """
    n = len(X)
    without = (truth.without or {}).get(family, np.eye(n))
    V, V0 = factor(truth.V), factor(without)

    def ratio(Z: Array) -> Array:
        return squares(V, X, Z) / squares(V0, X, Z)

    rng = np.random.default_rng(n)
    null = ratio(V0 @ rng.standard_normal((n, NULL)))
    return np.asarray(ratio(E) < np.quantile(null, LEVEL))


def squares(L: Array, X: Array, Z: Array) -> Array:
    """(B,) Z'V⁻¹Z − Z'V⁻¹X(X'V⁻¹X)⁻¹X'V⁻¹Z for V = LL'."""
    Q, _ = np.linalg.qr(np.linalg.solve(L, X))
    z = np.linalg.solve(L, Z)
    return np.asarray(np.einsum("ij,ij->j", z, z) - np.einsum("ij,ij->j", Q.T @ z, Q.T @ z))
