"""Random slopes for many columns of y at once, each with its own covariance: ``slopes`` column by column.

The same sums over cells, with the columns K in front and the cells still last, so that every step is one
vector operation over all cells of all columns (Laird & Ware 1982; Pinheiro & Bates 2000, ch. 2).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths import reml
from clingstone.maths.each import Grams
from clingstone.maths.newton import ENOUGH, SMALL
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition

Flags = npt.NDArray[np.bool_]
Columns = npt.NDArray[np.int64]
# Criteria (K,) and gradients (K, d) at x (K, d), the k-th for column ``columns[k]`` of y.
Sloping = Callable[[Array, Columns], tuple[Array, Array]]
STEPS = 25  # of Newton; what has not come to rest by then is searched by itself


@dataclass(frozen=True, eq=False)
class Blocks:
    """As ``slopes.Block`` for K columns: UU (K, r, r, G), UQ (K, r, p, G), UE (K, r, G).

    UU and UQ may have one column for all: independent rows know no covariance yet.
    """

    UU: Array
    UQ: Array
    UE: Array

    def lower(self, gram: Grams, L: Array, at: Sequence[int]) -> Grams:
        """The Grams once blocks LL', L (K, q, q), of the functions ``at`` are added to V at these cells."""
        C, X, Y = self._halves(L, list(at))
        return Grams(
            gram.QQ - _products(X, X),
            gram.QE - _products(X, Y[:, :, None])[..., 0],
            gram.EE - np.einsum("kqg,kqg->k", Y, Y),
            gram.logdet + _logdet(C),
        )

    def shrunk(self, L: Array, at: Sequence[int]) -> Blocks:
        """The same cells once these blocks are in V."""
        C, X, Y = self._halves(L, list(at))
        S = _solve(C, _turned(L, self.UU[:, list(at)]))  # (K, q, r, G)
        return Blocks(
            self.UU - np.einsum("kqig,kqjg->kijg", S, S),
            self.UQ - np.einsum("kqig,kqpg->kipg", S, X),
            self.UE - np.einsum("kqig,kqg->kig", S, Y),
        )

    def lifted(self, up: Partition) -> Blocks:
        """Added up to the cells of the next level; ``up`` puts these G cells into its cells."""

        def add(part: Array) -> Array:
            flat = part.reshape(-1, part.shape[-1])
            return np.ascontiguousarray((up.indicator @ flat.T).T).reshape(*part.shape[:-1], up.count)

        return Blocks(add(self.UU), add(self.UQ), add(self.UE))

    def _halves(self, L: Array, at: list[int]) -> tuple[Array, Array, Array]:
        """C with CC' = I + L'FL (K, q, q, G), then C⁻¹L'H for Q (K, q, p, G) and for e (K, q, G)."""
        C = _cholesky(_inner(self.UU, L, at))
        X = _solve(C, _turned(L, self.UQ[:, at]))
        Y = _solve(C, _turned(L, self.UE[:, at][:, :, None]))[:, :, 0]
        return C, X, Y


def criterion(base: Grams, block: Blocks, L: Array, m: int) -> tuple[Array, Array]:
    """As ``slopes.criterion``: (K,) −2ℓ_R with σ² profiled out and its gradients (K, q, q)."""
    K, q, _ = L.shape
    p = base.QQ.shape[1]
    H = np.empty((K, q, p + 1, block.UE.shape[-1]))
    H[:, :, :p], H[:, :, p] = block.UQ, block.UE
    C = _cholesky(_inner(block.UU, L, list(range(q))))
    X = _solve(C, _turned(L, H))
    A = np.empty((K, p + 1, p + 1))
    A[:, :p, :p], A[:, :p, p], A[:, p, :p], A[:, p, p] = base.QQ, base.QE, base.QE, base.EE
    A -= _products(X, X)
    R = np.linalg.cholesky(A[:, :p, :p])
    inverse = np.linalg.inv(R)
    half = (inverse @ A[:, :p, p:])[..., 0]
    c = np.maximum(A[:, p, p] - np.sum(half**2, axis=1), 1e-300)
    N = np.zeros((K, p + 1, p + 1))
    N[:, :p, :p] = np.swapaxes(inverse, 1, 2)
    N[:, p, p] = np.sqrt(m / c)
    N[:, :p, p] = -N[:, p, p, None] * (N[:, :p, :p] @ half[..., None])[..., 0]
    Nt = np.swapaxes(N, 1, 2)[:, None]
    Y, P = Nt @ _back(C, X), Nt @ H
    eye = np.broadcast_to(np.eye(q)[None, :, :, None], C.shape)
    T = _back(C, _solve(C, eye)) + np.einsum("kipg,kjpg->kijg", Y, Y)
    LT = np.einsum("kab,kbjg->kajg", L, T)
    gradient = 2 * np.einsum("kiag,kajg->kij", np.broadcast_to(block.UU, C.shape), LT)
    gradient -= 2 * np.einsum("kipg,kjpg->kij", P, Y)
    logdet = base.logdet + _logdet(C) + 2 * np.log(np.einsum("kpp->kp", R)).sum(axis=1)
    return logdet + reml.profiled(c, m), gradient


# ---- small triangles, the cells last ----


def _inner(UU: Array, L: Array, at: list[int]) -> Array:
    """I + L'FL, (K, q, q, G)."""
    q = len(at)
    FL = np.einsum("kijg,kjb->kibg", np.broadcast_to(UU[:, at][:, :, at], (len(L), q, q, UU.shape[-1])), L)
    out = _turned(L, FL)
    out[:, range(q), range(q)] += 1.0
    return out


def _turned(L: Array, rows: Array) -> Array:
    """L'rows, rows (K, q, k, G)."""
    flat = rows.reshape(len(rows), rows.shape[1], -1)
    return np.asarray(np.swapaxes(L, 1, 2) @ flat).reshape(len(L), *rows.shape[1:])


def _products(X: Array, Y: Array) -> Array:
    """(K, a, b) Σ over functions and cells; X (K, q, a, G), Y (K, q, b, G)."""
    return np.asarray((X @ np.swapaxes(Y, -1, -2)).sum(axis=1))


def _cholesky(M: Array) -> Array:
    q = M.shape[1]
    C = np.zeros_like(M)
    for j in range(q):
        C[:, j, j] = np.sqrt(M[:, j, j] - np.sum(C[:, j, :j] ** 2, axis=1))
        for i in range(j + 1, q):
            C[:, i, j] = (M[:, i, j] - np.sum(C[:, i, :j] * C[:, j, :j], axis=1)) / C[:, j, j]
    return C


def _solve(C: Array, rows: Array) -> Array:
    """C⁻¹rows; rows (K, q, k, G)."""
    out = np.empty((len(C), *rows.shape[1:]))
    for i in range(C.shape[1]):
        rest = rows[:, i]
        for k in range(i):
            rest = rest - C[:, i, k, None] * out[:, k]
        out[:, i] = rest / C[:, i, i, None]
    return out


def _back(C: Array, rows: Array) -> Array:
    """C⁻ᵀrows."""
    q = C.shape[1]
    out = np.empty_like(rows)
    for i in reversed(range(q)):
        rest = rows[:, i]
        for k in range(i + 1, q):
            rest = rest - C[:, k, i, None] * out[:, k]
        out[:, i] = rest / C[:, i, i, None]
    return out


def _logdet(C: Array) -> Array:
    return np.asarray(2 * sum(np.log(C[:, i, i]).sum(axis=-1) for i in range(C.shape[1])))


# ---- the minima ----


def descend(f: Sloping, start: Array, columns: Columns, unit: Array) -> tuple[Array, Array, Flags]:
    """The minimum of the criteria of columns (K,) from their starts (K, d): x, values, which came to rest.

    Newton steps with the exact gradient and its forward differences, on scales ``unit`` (d,); the
    last steps are taken, as in ``newton.descend``.
    """
    x = start.copy()
    value, slope = f(x, columns)
    done = np.zeros(len(x), dtype=bool)
    live = np.arange(len(x))
    for _ in range(STEPS):
        H = _curvature(f, x[live], slope[live], columns[live], unit)
        size, U = np.linalg.eigh(H)
        flat = np.maximum(np.abs(size), 1e-10 * np.abs(size).max(axis=1, initial=1e-300, keepdims=True))
        inner = np.einsum("kij,ki->kj", U, slope[live] * unit)
        decrement = np.sum(inner**2 / flat, axis=1)
        step = -np.einsum("kij,kj->ki", U, inner / flat) * unit
        close = decrement < SMALL
        left = np.ones(len(live), dtype=bool)  # columns that no step has brought down yet
        for shrink in (1.0, 0.3, 0.1, 0.01):
            these = np.flatnonzero(left)
            trial = x[live[these]] + shrink * step[these]
            new, after = f(trial, columns[live[these]])
            good = (np.isfinite(new) & (new < value[live[these]])) | close[these]
            at = live[these[good]]
            x[at], value[at], slope[at] = trial[good], new[good], after[good]
            left[these[good]] = False
            if not left.any():
                break
        done[live[close | (left & (decrement < ENOUGH))]] = True
        live = live[~close & ~left]
        if not len(live):
            break
    return x, value, done


def _curvature(f: Sloping, x: Array, slope: Array, columns: Columns, unit: Array) -> Array:
    """(K, d, d) second derivatives of f at x = unit·z in z."""
    d = x.shape[1]
    H = np.empty((len(x), d, d))
    for i in range(d):
        h = 1e-5 * np.maximum(1.0, np.abs(x[:, i] / unit[i])) * unit[i]
        ahead = x.copy()
        ahead[:, i] += h
        H[:, i] = (f(ahead, columns)[1] - slope) * unit * (unit[i] / h)[:, None]
    return np.asarray((H + np.swapaxes(H, 1, 2)) / 2)
