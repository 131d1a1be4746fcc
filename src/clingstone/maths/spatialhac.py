"""Sandwich covariance over places: kernels of distance, and the law of the variance they estimate.

With scores ξ_s = Σ_{rows of s} a e of a contrast (a = Qw), v = ξ'Kξ estimates Var(a'y) = a'Va (Conley 1999;
Kelejian & Prucha 2007). Under a working V the estimate has mean tr(BV) and variance 2tr((BV)²),
B = M D_a ZKZ' D_a M, which give its bias and its degrees of freedom (Bell & McCaffrey 2002;
Pustejovsky & Tipton 2018).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import sparse
from scipy.spatial import cKDTree

from clingstone.maths.once import Array
from clingstone.maths.partition import Partition

Kernel = Literal["spherical", "wendland", "bartlett", "uniform"]
POSITIVE: frozenset[Kernel] = frozenset({"spherical", "wendland"})  # in three dimensions, so in the chord too


def weight(x: Array, kernel: Kernel) -> Array:
    """k(x) for x = distance over cutoff, zero from 1 on (the uniform kernel up to and with 1)."""
    inside = np.clip(x, 0.0, 1.0)
    if kernel == "spherical":
        return np.asarray(1 - 1.5 * inside + 0.5 * inside**3)
    if kernel == "wendland":
        return np.asarray((1 - inside) ** 4 * (4 * inside + 1))
    if kernel == "bartlett":
        return np.asarray(1 - inside)
    return np.asarray((x <= 1.0).astype(float))


def table(tree: cKDTree, points: Array, cutoff: float, kernel: Kernel) -> sparse.csr_array:
    """(S, S) K with ones on the diagonal; straight distances."""
    S = len(points)
    pairs = tree.query_pairs(cutoff * (1 + 1e-12), output_type="ndarray")
    i, j = pairs[:, 0], pairs[:, 1]
    w = weight(np.linalg.norm(points[i] - points[j], axis=1) / (cutoff * (1 + 1e-12)), kernel)
    half = sparse.coo_array((w, (i, j)), shape=(S, S))
    return sparse.csr_array(half + half.T + sparse.eye_array(S))


def links(tree: cKDTree, cutoff: float) -> int:
    """Entries of K, without making it."""
    return int(tree.count_neighbors(tree, cutoff))


@dataclass(frozen=True, eq=False)
class Moments:
    """Mean and variance (k,) of v for k contrasts under the working V."""

    mean: Array
    variance: Array

    @property
    def df(self) -> Array:
        """Satterthwaite: 2 mean²/variance."""
        return np.asarray(2 * self.mean**2 / self.variance)


@dataclass(frozen=True, eq=False)
class Law:
    """What the working V does to site scores: exactly from H_j = Cov(ξ_j), or by draws of them.

    exact (k, S, S), or drawn (S, k, R) score columns from R draws of y.
    """

    exact: Array | None = None
    drawn: Array | None = None

    @classmethod
    def of(cls, part: Partition, a: Array, MVM: Array) -> Law:
        """a (n, k) contrasts, MVM (n, n) covariance of the residuals."""
        Z = part.indicator
        H = []
        for column in a.T:
            scaled = column[:, None] * MVM * column
            H.append(np.asarray(Z @ (Z @ scaled).T))
        return cls(exact=np.stack(H))

    @classmethod
    def by_draws(cls, part: Partition, a: Array, residuals: Array) -> Law:
        """residuals (n, R) : residuals of R draws of y."""
        scores = [part.sums(column[:, None] * residuals) for column in a.T]
        return cls(drawn=np.stack(scores, axis=1))

    def moments(self, K: sparse.csr_array, draws: int | None = None) -> Moments:
        """``draws`` : the first so many of the draws."""
        if self.exact is not None:
            KH = [np.asarray(K @ H) for H in self.exact]
            mean = np.array([np.trace(G) for G in KH])
            return Moments(mean, np.array([2 * np.sum(G * G.T) for G in KH]))
        assert self.drawn is not None
        part = self.drawn[:, :, :draws]
        S, k, R = part.shape
        # Half of a symmetric K, its diagonal of ones apart.
        above = (sparse.triu(K, 1, format="csr") @ part.reshape(S, k * R)).reshape(S, k, R)
        v = np.einsum("skr,skr->kr", part, part + 2 * above)
        return Moments(v.mean(axis=1), v.var(axis=1, ddof=1))


def meat(K: sparse.csr_array, scores: Array) -> Array:
    """(q, q, B) Σ k(d_st) ξ_s ξ_t' of scores (S, q, B)."""
    S, q, B = scores.shape
    across = (K @ scores.reshape(S, q * B)).reshape(S, q, B)
    return np.asarray(np.einsum("sib,sjb->ijb", scores, across))


def clipped(covariance: Array) -> tuple[Array, bool]:
    """(q, q, B) with negative eigenvalues put to zero, and whether there were any.

    Kernels that are not positive definite in the dimension of the map can give a negative variance.
    """
    moved = np.moveaxis(covariance, -1, 0)
    values, vectors = np.linalg.eigh(0.5 * (moved + moved.transpose(0, 2, 1)))
    negative = bool(np.any(values < -1e-12 * np.abs(values).max(axis=1, keepdims=True)))
    if not negative:
        return covariance, False
    fixed = np.einsum("bik,bk,bjk->bij", vectors, np.maximum(values, 0.0), vectors)
    return np.moveaxis(fixed, 0, -1), True
