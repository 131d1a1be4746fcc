"""Permutations of what was assigned to whole units, and the test of one coefficient under them.

Units g = 1 … G carry the value ξ_g; the other columns of the design have the basis Q_Z, and r = M_Z(y − θ₀x)
is what they leave of the response at the tested value. Under the sharp null r is the same whatever was
assigned, so an assignment ξ* needs only sums per unit: n_g = Σω, m_g = Q_Z,g'√ω, M_g = Q_Z,g'Q_Z,g and,
of r, e_g = Σ√ω r and σ_g = Q_Z,g'r_g. Strata bound the permutations. P assignments, C columns of y.

Sources: Fisher (1935) for the test, Rosenbaum (2002) for covariates and the inverted interval; the
statistic is the t of the unit-robust standard error, as Chung & Romano (2013) advise.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array
from clingstone.maths.resample import TIE, Curves, settled

Ints = npt.NDArray[np.int64]


def levels_of(values: Array) -> Ints:
    """(G,) code of each distinct row of values (G,) or (G, q); values equal to 9 digits are one."""
    values = values[:, None] if values.ndim == 1 else values
    scale = np.abs(values).max(axis=0)
    _, codes = np.unique(np.round(values / np.where(scale > 0, scale, 1.0), 9), axis=0, return_inverse=True)
    return np.asarray(codes, dtype=np.int64).ravel()


def count(codes: Ints, strata: Ints) -> float:
    """Distinct ways to permute the values within strata: exact below 10¹⁵, ∞ where it has no number."""
    log, exact = 0.0, 1
    for s in np.unique(strata):
        sizes = np.bincount(codes[strata == s])
        log += math.lgamma(sizes.sum() + 1) - sum(math.lgamma(k + 1) for k in sizes)
        if log < math.log(1e15):
            left = int(sizes.sum())
            for size in sizes:
                exact *= math.comb(left, int(size))
                left -= int(size)
    if log < math.log(1e15):
        return float(exact)
    return math.exp(log) if log < 700 else math.inf


def every(codes: Ints, strata: Ints) -> Ints:
    """(P, G) all distinct permutations, each as the unit whose value a unit takes."""
    blocks = [np.flatnonzero(strata == s) for s in np.unique(strata)]
    found = [list(_arrangements(codes[block], block)) for block in blocks]
    out = np.empty((math.prod(map(len, found)), len(codes)), dtype=np.int64)
    for i, choice in enumerate(itertools.product(*found)):
        for block, taken in zip(blocks, choice, strict=True):
            out[i, block] = taken
    return out


def _arrangements(codes: Ints, units: Ints) -> Iterator[Ints]:
    """Every distinct order of some units' values, as the units that the values come from."""
    kinds, sizes = np.unique(codes, return_counts=True)

    def place(kind: int, free: tuple[int, ...], taken: Ints) -> Iterator[Ints]:
        if kind == len(kinds):
            yield taken
            return
        givers = units[codes == kinds[kind]]
        for chosen in itertools.combinations(free, int(sizes[kind])):
            filled = taken.copy()
            filled[list(chosen)] = givers
            yield from place(kind + 1, tuple(i for i in free if i not in chosen), filled)

    yield from place(0, tuple(range(len(units))), np.empty(len(units), dtype=np.int64))


def drawn(rng: np.random.Generator, strata: Ints, P: int) -> Ints:
    """(P, G) random permutations of the units within strata."""
    out = np.tile(np.arange(len(strata)), (P, 1))
    for s in np.unique(strata):
        block = np.flatnonzero(strata == s)
        out[:, block] = rng.permuted(np.tile(block, (P, 1)), axis=1)
    return out


# ---- one coefficient ---------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Units:
    """Sums per unit in the basis of all columns. sizes (G,), sums (G, p), M (G, p, p)."""

    sizes: Array
    sums: Array
    M: Array


@dataclass(frozen=True, eq=False)
class Rotated:
    """Units seen from one contrast w (p,): what belongs to x alone, and what to the other columns.

    N (p, p − 1) the other columns' directions, m (G, p − 1) and M (G, (p − 1)²) their unit sums and
    squares; t (G,) and sigma (G, p − 1) the unit sums of M_Zx = Qw/w'w and its products with them.
    """

    w: Array
    sizes: Array
    N: Array
    m: Array
    M: Array
    t: Array
    sigma: Array

    @classmethod
    def of(cls, units: Units, w: Array) -> Rotated:
        N, size = _complement(w), float(w @ w)
        M = N.T @ units.M @ N
        return cls(
            w,
            units.sizes,
            N,
            units.sums @ N,
            M.reshape(len(M), -1),
            units.sums @ w / size,
            (units.M @ w) @ N / size,
        )


def curves(of: Rotated, xi: Array, taken: Ints, e: Array, s: Array, exact: bool, studentised: bool) -> Curves:
    """Permuted statistics of w'coef as functions of D = θ̂ − θ₀.

    xi (G,) the values of the column, taken (P, G). e (G, C) and s (G, p, C) unit sums and scores of the
    residuals. With ``studentised`` false the coefficients themselves are compared.
    """
    X = xi[taken]
    a = X @ of.m
    d = X**2 @ of.sizes - np.sum(a**2, axis=1)
    sound = d > 1e-10 * (X**2 @ of.sizes)
    d = np.where(sound, d, 1.0)
    k = X**2 * of.sizes - 2 * X * (a @ of.m.T)
    k += (a[:, :, None] * a[:, None, :]).reshape(len(a), -1) @ of.M.T
    n1 = X @ of.t
    u1 = X * of.t - a @ of.sigma.T - (n1 / d)[:, None] * k
    v = np.sum(np.einsum("gpc,p->gc", s, of.w) ** 2, axis=0)
    n0 = X @ e
    if not studentised:
        q0 = np.where(sound, d**2, 0.0)[:, None] * v
        none = np.zeros((len(X), 1))
        return Curves(n0, n1[:, None], q0, none, none, np.maximum(q0, 1e-300), v, exact)
    q0, q1, whole = np.empty_like(n0), np.empty_like(n0), np.empty_like(n0)
    for c in range(n0.shape[1]):
        own = X * e[:, c]
        u0 = own - a @ (s[:, :, c] @ of.N).T - (n0[:, c] / d)[:, None] * k
        q0[:, c], q1[:, c] = np.einsum("pg,pg->p", u0, u0), 2 * np.einsum("pg,pg->p", u0, u1)
        whole[:, c] = np.einsum("pg,pg->p", own, own)
    q2 = np.einsum("pg,pg->p", u1, u1)[:, None]
    q1, q2 = settled(q1, q2, whole, ((X * of.t) ** 2).sum(axis=1)[:, None])
    q0, q1, q2 = (np.where(sound[:, None], x, 0.0) for x in (q0, q1, q2))
    return Curves(n0, n1[:, None], q0, q1, q2, whole, v, exact)


def joint_squares(units: Units, W: Array, xi: Array, taken: Ints, e: Array, theta: Array) -> Array:
    """(P,) the sum of squares that q permuted columns explain beyond the others, observed first.

    W (p, q), xi (G, q), e (G,), theta (q,): one column of y. NaN where the permuted columns
    are not of full rank.
    """
    N = _complement(W)
    back = W @ np.linalg.solve(W.T @ W, theta)
    r = e + units.sums @ back
    X = np.concatenate([xi[None], xi[taken]])
    A = np.einsum("gi,pgq->piq", units.sums @ N, X)
    XX = np.einsum("g,pgq,pgr->pqr", units.sizes, X, X)
    rest = XX - np.swapaxes(A, 1, 2) @ A
    c = np.einsum("pgq,g->pq", X, r)
    scale = np.sqrt(np.einsum("pqq->pq", XX))
    values, vectors = np.linalg.eigh(rest / (scale[:, :, None] * scale[:, None, :]))
    z = np.einsum("pij,pi->pj", vectors, c / scale)
    full = values[:, 0] > 1e-10
    return np.where(full, np.sum(z**2 / np.where(full[:, None], values, 1.0), axis=1), np.nan)


def tail(found: Array, exact: bool) -> float:
    """p of the first value among all: the part at least as large."""
    observed, others = found[0], found[1:]
    kept = np.isfinite(others)
    if not np.isfinite(observed) or not kept.any():
        return float("nan")
    extra = 0 if exact else 1
    beyond = np.sum(others[kept] >= observed * (1 - TIE))
    return float((beyond + extra) / (np.sum(kept) + extra))


def _complement(W: Array) -> Array:
    """Orthonormal basis of what is orthogonal to W (p,) or (p, q), as columns."""
    W = W[:, None] if W.ndim == 1 else W
    return np.linalg.qr(W, mode="complete")[0][:, W.shape[1] :]
