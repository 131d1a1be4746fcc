"""Slow, obvious twins of the engine for ratios of quadratic forms: dense arrays, Imhof's integral."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
from scipy import integrate, sparse
from scipy.spatial import cKDTree

from clingstone.maths import forms
from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law


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


def panel(seed: int = 0, most: int = 30, series: int = 80) -> tuple[Partition, Basis, Any]:
    """Unequal series with a column that is constant within them, and square roots of weights."""
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(series), rng.integers(1, most, series))
    n = len(codes)
    X = np.column_stack([np.ones(n), rng.standard_normal(series)[codes], rng.standard_normal((n, 2))])
    return Partition.of("series", codes), Basis.of(X), np.sqrt(rng.uniform(0.4, 2.5, n))


def laws() -> dict[str, Law]:
    """One law for every route and kind of form; each small enough for its dense twin."""
    out: dict[str, Law] = {}
    for n in (9, 40, 700):
        basis = trend_design(n, 4)
        out[f"durbin-watson {n}"] = Law(forms.differences(*step(n), n, f"dw {n}"), basis)
        out[f"lag 3, {n}"] = Law(forms.lagged(*step(n, 3), n, f"lag {n}"), basis)
    part, basis, root = panel()
    n = part.n
    pairs = within(part.codes)
    coarse = Partition.of("coarse", part.codes // 8)
    out["panel"] = Law(forms.differences(*pairs, n, "panel"), basis)
    out["panel, series means out"] = Law(forms.differences(*pairs, n, "panel fe"), basis, part)
    out["panel, coarse means out"] = Law(forms.differences(*pairs, n, "panel coarse"), basis, coarse)
    out["panel lag"] = Law(forms.lagged(*pairs, n, "panel lag"), basis)
    out["panel lag, series means out"] = Law(forms.lagged(*pairs, n, "panel lag fe"), basis, part)
    out["groups"] = Law(forms.cells(part), basis)
    out["groups, weighted"] = Law(forms.cells(part, root), basis)
    out["groups, coarse means out"] = Law(forms.cells(part), basis, coarse)
    many, wide, many_root = panel(1, 6, 320)
    out["many groups"] = Law(forms.cells(many), wide)
    out["many groups, weighted"] = Law(forms.cells(many, many_root), wide)
    sites, W = nearest(80, 5)
    out["sites with rows"] = Law(forms.cells_graph(part, W, "sites"), basis)
    out["sites with rows, weighted"] = Law(forms.cells_graph(part, W, "sites weighted", root), basis)
    sites, W = nearest(300, 6, 2)
    trend = Basis.of(np.column_stack([np.ones(300), sites]))
    out["graph"] = Law(forms.graph(W, "graph"), trend)
    times = Partition.of("unit", np.arange(300) % 40)
    out["graph, unit means out"] = Law(forms.graph(W, "graph fe"), trend, times)
    return out
