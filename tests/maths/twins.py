"""Slow, obvious twins of the engine for ratios of quadratic forms: dense arrays, Imhof's integral."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
from scipy import integrate, sparse
from scipy.spatial import cKDTree

from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.partition import Partition


def residual_space(basis: Basis, swept: Partition | None = None) -> Any:
    """(n, m) orthonormal complement of the basis and of the indicators of the swept cells."""
    columns = basis.Q
    if swept is not None:
        columns = np.hstack([np.eye(swept.count)[swept.codes], basis.Q])
    U, size, _ = np.linalg.svd(columns, full_matrices=True)
    return U[:, int(np.sum(size > 1e-9)) :]


def eigenvalues(form: Form, basis: Basis, swept: Partition | None = None) -> Any:
    """All eigenvalues of MSM on range M."""
    N = residual_space(basis, swept)
    return np.linalg.eigvalsh(N.T @ form.S.toarray() @ N)


def imhof(eigenvalues: Any, t: float) -> float:
    """P(Σ(λ − t)z² > 0) by the integral of Imhof (1961, equation 3.2), adaptive quadrature.

    u is split at the scale of the form; good to about 1e-10 where many λ differ from t.
    """
    b = np.asarray(eigenvalues) - t
    b = b / np.sqrt(np.sum(b**2))

    def integrand(u: float) -> float:
        theta = 0.5 * np.sum(np.arctan(b * u))
        damping = np.exp(-0.25 * np.sum(np.log1p((b * u) ** 2)))
        return float(np.sin(theta) * damping / u) if u > 0 else float(0.5 * np.sum(b))

    total = 0.0
    edges = [0.0, 1.0, 3.0, 8.0, 20.0, 50.0, 150.0, 500.0, 2000.0, 1e4]
    for low, high in pairwise(edges):
        total += integrate.quad(integrand, low, high, limit=400, epsabs=1e-13, epsrel=1e-12)[0]
    return 0.5 + total / np.pi


def trend_design(n: int, p: int, seed: int = 0) -> Basis:
    """Constant, trend and p − 2 random walks: the hard case for tests of order."""
    rng = np.random.default_rng(seed)
    walks = rng.standard_normal((n, p - 2)).cumsum(axis=0)
    return Basis.of(np.column_stack([np.ones(n), np.arange(n), walks]))


def step(n: int, lag: int = 1) -> tuple[Any, Any]:
    """Rows (earlier, later) of one series without gaps."""
    return np.arange(n - lag), np.arange(lag, n)


def within(codes: Any) -> tuple[Any, Any]:
    """Neighbouring rows of the same stretch."""
    earlier = np.flatnonzero(codes[1:] == codes[:-1])
    return earlier, earlier + 1


def nearest(n: int, k: int, seed: int = 0) -> tuple[Any, Any]:
    """Uniform sites (n, 2) and their row-standardised k-nearest-neighbour weights."""
    sites = np.random.default_rng(seed).uniform(size=(n, 2))
    return sites, weights(sites, k)


def weights(sites: Any, k: int) -> Any:
    n = len(sites)
    near = cKDTree(sites).query(sites, k + 1)[1][:, 1:]
    rows = np.repeat(np.arange(n), k)
    return sparse.csr_array((np.full(n * k, 1.0 / k), (rows, near.ravel())), shape=(n, n))
