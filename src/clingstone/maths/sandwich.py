"""Sandwich covariances of ordinary least squares: per cluster and per row, with their df.

Everything is in the basis Q (X = QR): per cluster g, M_g = Q_g'Q_g (p, p) and s_g = Q_g'e_g (p, B).
The key identity Q_g'(I − Q_gQ_g')^(−k) = (I − M_g)^(−k) Q_g' keeps every matrix p × p, whatever the size
of a cluster. A contrast c of β is w = R⁻ᵀc.

Sources: Bell & McCaffrey (2002) for CR2 and its df; MacKinnon & White (1985) for HC0-HC3;
Pustejovsky & Tipton (2018) for singular I − M_g and for the joint test.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array
from clingstone.maths.partition import Partition

Power = Literal["CR0", "CR2", "CR3"]
ROWS = 65536  # rows of a block where what is made of each row is larger than the row
SINGULAR = 1e-10  # 1 − λ below this: a direction of the coefficients that one cluster alone decides
SLIGHT = 0.1  # trace of M_g below which (I − M_g)^power is summed up as a series,
SERIES = 1e-17  # until its terms are below this
_POWERS = {"CR0": 0.0, "CR2": -0.5, "CR3": -1.0}


@dataclass(frozen=True, eq=False)
class Adjusted:
    """Contrast weights adjusted cluster by cluster: Var̂(c'β̂) = Σ_g (a_g's_g)².

    a : (k, G, p) F_g w. b : (k, G, p) M_g a_g. lost : (k,) largest part of ‖w‖² that a single cluster
    alone decides. at : (k,) that cluster.
    """

    a: Array
    b: Array
    lost: Array
    at: npt.NDArray[np.int64]

    def some(self, rows: slice) -> Adjusted:
        """Some of the contrasts."""
        return Adjusted(self.a[rows], self.b[rows], self.lost[rows], self.at[rows])


def grams(Q: Array, part: Partition) -> Array:
    """(G, p, p) M_g = Q_g'Q_g, column by column: no array of n × p² products."""
    p = Q.shape[1]
    out = np.empty((part.count, p, p))
    for j in range(p):
        out[:, j, j:] = out[:, j:, j] = part.sums(Q[:, j : j + 1] * Q[:, j:])
    return out


def adjust(M: Array, W: Array, power: Power) -> Adjusted:
    """F_g w for k contrasts. M (G, p, p), W (p, k).

    F_g is I for CR0, (I − M_g)^(−½) for CR2 and (I − M_g)^(−1) for CR3, by the Moore-Penrose inverse
    where I − M_g is singular: there, one cluster alone decides a direction and ``lost`` says how much
    of each contrast lies in it.
    """
    G, p, _ = M.shape
    k = W.shape[1]
    a, b = np.empty((k, G, p)), np.empty((k, G, p))
    lost, at = np.zeros(k), np.zeros(k, dtype=np.int64)
    size = np.sum(W**2, axis=0)
    size = np.where(size > 0, size, 1.0)
    for start in range(0, G, 4096):  # chunks keep the eigenvectors of many clusters from piling up
        part = slice(start, start + 4096)
        most = float(np.einsum("gii->g", M[part]).max())  # no eigenvalue of M_g is above its trace
        if most < SLIGHT:
            a[:, part], b[:, part] = _slight(M[part], W, _POWERS[power], most)
            continue
        values, vectors = np.linalg.eigh(M[part])
        rest = 1.0 - values
        alone = rest < SINGULAR
        factor = np.where(alone, 0.0, np.where(alone, 1.0, rest) ** _POWERS[power])
        seen = np.einsum("gij,ik->gjk", vectors, W)  # contrasts in the eigenvectors of each M_g
        a[:, part] = np.einsum("gij,gjk->kgi", vectors, factor[:, :, None] * seen)
        b[:, part] = np.einsum("gij,gjk->kgi", vectors, (factor * values)[:, :, None] * seen)
        gone = np.einsum("gj,gjk->gk", alone.astype(float), seen**2) / size
        top = gone.argmax(axis=0)
        here = gone[top, np.arange(k)]
        at[here > lost] = start + top[here > lost]
        lost = np.maximum(lost, here)
    return Adjusted(a, b, lost, at)


def _slight(M: Array, W: Array, power: float, most: float) -> tuple[Array, Array]:
    """F_g w and M_gF_g w by the binomial series of (1 − λ)^power, λ ≤ most; (k, G, p) both.

    With many clusters each holds little of the basis, and a few products do for the eigenvectors.
    """
    term = np.broadcast_to(W, (len(M), *W.shape))
    total, size, k = term.copy(), 1.0, 0
    while power and size > SERIES:
        k += 1
        size *= most
        term = (k - 1 - power) / k * (M @ term)
        total += term
    return np.moveaxis(total, 2, 0), np.moveaxis(M @ total, 2, 0)


def cluster_variance(a: Array, S: Array) -> Array:
    """(k, B) Σ_g (a_g's_g)²; a (k, G, p), scores S (G, p, B)."""
    return np.stack([np.sum(np.einsum("gp,gpb->gb", row, S) ** 2, axis=0) for row in a])


def cluster_covariance(a: Array, S: Array) -> Array:
    """(k, k, B) covariance of k contrasts."""
    Z = np.stack([np.einsum("gp,gpb->gb", row, S) for row in a])
    return np.asarray(np.einsum("sgb,tgb->stb", Z, Z))


def cluster_df(a: Array, b: Array) -> Array:
    """(k,) Satterthwaite df (tr N)²/tr N² under independent equal-variance errors.

    N_gh = δ_gh a_g'M_ga_g − b_g'b_h is G × G and is never formed: with d_g = a_g'b_g,
    tr N = Σd − tr B'B and tr N² = Σd² − 2Σd‖b‖² + ‖B'B‖²_F. NaN where tr N vanishes.
    """
    out = np.full(len(a), np.nan)
    for i, (ai, bi) in enumerate(zip(a, b, strict=True)):
        d = np.einsum("gp,gp->g", ai, bi)
        norm = np.einsum("gp,gp->g", bi, bi)
        BB = bi.T @ bi
        trace = d.sum() - norm.sum()
        square = np.sum(d**2) - 2 * np.sum(d * norm) + np.sum(BB**2)
        if trace > 1e-12 * d.sum() and square > 0:
            out[i] = trace**2 / square
    return out


def joint_df(D: Array, K: Array, G: Array) -> float:
    """η of the approximate Hotelling T² test of q contrasts (Pustejovsky & Tipton 2018).

    N_st(g, h) = δ_gh D_st,g − b_sg'b_th. D (q, q, clusters): a_sg'b_tg. K (q, q, clusters): b_sg'b_tg.
    G (q, q, p, p): Σ_g b_sg b_tg'. The contrasts are standardised here so that the expected
    covariance Ω_st = tr N_st is the identity. NaN where Ω is not positive definite.
    """
    omega = np.sum(D - K, axis=2)
    values, vectors = np.linalg.eigh((omega + omega.T) / 2)
    if values[0] <= 1e-10 * values[-1]:
        return float("nan")
    T = (vectors / np.sqrt(values)) @ vectors.T
    # Pairs of operands at a time: all three at once would cost q⁴ for q contrasts.
    D, K = (np.einsum("su,uvg,tv->stg", T, x, T, optimize=True) for x in (D, K))
    G = np.einsum("su,uvij,tv->stij", T, G, T, optimize=True)
    q = len(T)
    Ds, Ks = np.einsum("ssg->sg", D), np.einsum("ssg->sg", K)
    first = Ds @ Ds.T - Ds @ Ks.T - Ks @ Ds.T + np.einsum("stij,stij->st", G, G)
    second = np.einsum("stg,tsg->st", D, D) - np.einsum("stg,tsg->st", D, K)
    second += -np.einsum("stg,tsg->st", K, D) + np.einsum("stij,tsij->st", G, G)
    return float(q * (q + 1) / np.sum(first + second))


def cluster_joint_df(a: Array, b: Array) -> float:
    """η for the q contrasts whose adjusted weights are a, b (q, G, p)."""
    return joint_df(
        np.einsum("sgp,tgp->stg", a, b),
        np.einsum("sgp,tgp->stg", b, b),
        np.einsum("sgi,tgj->stij", b, b, optimize=True),
    )


# ---- rows as their own clusters -------------------------------------------------------


def _blocks(n: int) -> Iterator[slice]:
    return (slice(start, start + ROWS) for start in range(0, n, ROWS))


def row_weights(Q: Array, W: Array, delta: int) -> tuple[Array, Array, npt.NDArray[np.int64]]:
    """(n, k) adjusted weights z_i/(1−h_i)^(δ/2), z = QW; then lost (k,) and at (k,) as in ``adjust``.

    δ = 0, 1, 2 gives HC0, HC2, HC3. A row of leverage one has no residual; its term is dropped.
    """
    T = Q @ W
    size, k = np.sum(W**2, axis=0), np.arange(W.shape[1])
    lost, at = np.zeros(len(k)), np.zeros(len(k), dtype=np.int64)
    for rows in _blocks(len(Q)):
        left = 1.0 - np.einsum("ij,ij->i", Q[rows], Q[rows])
        alone = left < SINGULAR
        if alone.any():
            gone = np.where(alone[:, None], T[rows] ** 2, 0.0) / size
            top = gone.argmax(axis=0)
            here = gone[top, k]
            at[here > lost] = rows.start + top[here > lost]
            lost = np.maximum(lost, here)
        T[rows] *= np.where(alone, 0.0, np.where(alone, 1.0, left) ** (-delta / 2))[:, None]
    return T, lost, at


def row_variance(T: Array, E: Array) -> Array:
    """(k, B) Σ_i t_i²e_i² for T (n, k), E (n, B)."""
    return np.asarray(sum((T[rows] ** 2).T @ E[rows] ** 2 for rows in _blocks(len(T))))


def row_meat(T: Array, E: Array) -> Array:
    """(q, q, B) Σ_i e_i² t_i t_i' for T (n, q), E (n, B); no n × q² array."""
    q, B = T.shape[1], E.shape[1]
    out = np.zeros((q * q, B))
    for rows in _blocks(len(T)):
        products = T[rows, :, None] * T[rows, None, :]
        out += products.reshape(-1, q * q).T @ E[rows] ** 2
    return out.reshape(q, q, B)


def row_df(Q: Array, T: Array) -> Array:
    """(k,) Satterthwaite df of Σ t_i²e_i² under equal variances: (Σvr)²/[Σv²(1−2h) + ‖Q'diag(v)Q‖²_F].

    T (n, k) from ``row_weights``, v = t², r = 1 − h; O(np²) per contrast, no n × n array.
    """
    k, p = T.shape[1], Q.shape[1]
    total, trace, square = np.zeros(k), np.zeros(k), np.zeros(k)
    inner = np.zeros((k, p, p))
    for rows in _blocks(len(Q)):
        q = Q[rows]
        h = np.einsum("ij,ij->i", q, q)
        v = T[rows] ** 2
        total += v.sum(axis=0)
        trace += (1 - h) @ v
        square += (1 - 2 * h) @ v**2
        for j in range(k):
            inner[j] += q.T @ (v[:, j : j + 1] * q)
    square += np.einsum("kij,kij->k", inner, inner)
    sound = (trace > 1e-12 * total) & (square > 0)
    return np.where(sound, trace**2 / np.where(sound, square, 1.0), np.nan)


def row_joint_df(Q: Array, T: Array) -> float:
    """η of the joint test of q contrasts with row weights T (n, q)."""
    h = np.einsum("ij,ij->i", Q, Q)
    D = np.einsum("is,it->sti", T, T)
    G = np.stack([[Q.T @ (D[s, t][:, None] * Q) for t in range(len(D))] for s in range(len(D))])
    return joint_df(D, D * h, G)


# ---- conventional factors -------------------------------------------------------------


def cluster_factor(kind: str, G: int, n: int, p: int) -> float:
    """Multiplier of the covariance: G/(G−1) for CR1, times (n−1)/(n−p) for CR1S, 1 for the rest."""
    if kind == "CR1":
        return G / (G - 1)
    if kind == "CR1S":
        return G / (G - 1) * (n - 1) / (n - p)
    return 1.0


# ---- crossed clusters ------------------------------------------------------------------


def clipped(meat: Array) -> tuple[Array, Array]:
    """A symmetric meat (p, p, B) with negative eigenvalues set to zero, and its eigenvalues (p, B), rising.

    In the basis Q the result does not depend on units or coding of X, for those only rotate the meat.
    """
    values, vectors = np.linalg.eigh(np.moveaxis((meat + np.swapaxes(meat, 0, 1)) / 2, -1, 0))
    kept = np.einsum("bij,bj,bkj->ikb", vectors, np.maximum(values, 0.0), vectors)
    tiny = np.abs(values) <= 1e-12 * np.abs(values).max(axis=1, keepdims=True)
    return np.asarray(kept), np.where(tiny, 0.0, values).T
