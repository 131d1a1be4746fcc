"""Random intercepts and slopes: blocks of a few columns per group, by what each group adds up to.

At a level with cells g, V = V₀ + Σ_g U_gΓU_g' and V₀ does not couple rows of different cells; U holds
the functions that vary by cell (a constant, a predictor), Γ = LL' their covariance over σ². All that
matters of a cell is F_g = U_g'V₀⁻¹U_g and H_g = U_g'V₀⁻¹[Q, e]. With K_g = I + L'F_gL,

    [Q, e]'V⁻¹[Q, e] = [Q, e]'V₀⁻¹[Q, e] − Σ_g H_g'LK_g⁻¹L'H_g,   ln|V| = ln|V₀| + Σ_g ln|K_g|,

and what the same cell amounts to under V⁻¹ follows from the same factors, so that levels stack (Laird &
Ware 1982; Pinheiro & Bates 2000, ch. 2). Arrays keep the cells last: every step is then one vector
operation over all cells, whatever their number. Exact, O(cells · q²p) at each Γ.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.maths.basis import Gram
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.maths.reml import forward

TOGETHER = 2048  # cells


@dataclass(frozen=True, eq=False)
class Block:
    """What G cells amount to under V₀⁻¹: UU (q, q, G), UQ (q, p, G), UE (q, B, G)."""

    UU: Array
    UQ: Array
    UE: Array

    def shrunk(self, L: Array, at: Sequence[int]) -> Block:
        """The same cells once a block of covariance LL' of the functions ``at`` is in V."""
        C, X, Y = _halves(self, L, at)
        S = _solve(C, _turned(L, [self.UU[i] for i in at]))
        return Block(
            self.UU - np.einsum("rig,rjg->ijg", S, S),
            self.UQ - np.einsum("rig,rpg->ipg", S, X),
            self.UE - np.einsum("rig,rbg->ibg", S, Y),
        )

    def lifted(self, up: Partition) -> Block:
        """Added up to the cells of the next level; ``up`` puts these G cells into its cells."""

        def add(part: Array) -> Array:
            flat = part.reshape(-1, part.shape[-1])
            summed = np.asarray(up.indicator @ flat.T)
            return np.ascontiguousarray(summed.T).reshape(*part.shape[:-1], up.count)

        return Block(add(self.UU), add(self.UQ), add(self.UE))


def lower(gram: Gram, block: Block, L: Array, at: Sequence[int]) -> Gram:
    """The Gram once a block of covariance LL' of the functions ``at`` is added to V at these cells."""
    C, X, Y = _halves(block, L, at)
    QQ, QE, EE = gram.QQ.copy(), gram.QE.copy(), gram.EE.copy()
    for x, y in zip(X, Y, strict=True):
        QQ -= x @ x.T
        QE -= x @ y.T
        EE = EE - np.einsum("bg,bg->b", y, y)
    return Gram(QQ, QE, EE, gram.logdet + _logdet(C))


def _halves(block: Block, L: Array, at: Sequence[int]) -> tuple[Array, Array, Array]:
    """C with CC' = K (q, q, G), then C⁻¹L'H for Q and for e."""
    C = _cholesky(_inner(block, L, at))
    X = _solve(C, _turned(L, [block.UQ[i] for i in at]))
    Y = _solve(C, _turned(L, [block.UE[i] for i in at]))
    return C, X, Y


def _inner(block: Block, L: Array, at: Sequence[int]) -> Array:
    """K = I + L'FL, (q, q, G)."""
    q = len(at)
    F = [[block.UU[i, j] for j in at] for i in at]
    FL = [[_mix(L[:, j], row) for j in range(q)] for row in F]
    K = np.empty((q, q, block.UU.shape[-1]))
    for i in range(q):
        for j in range(q):
            K[i, j] = _mix(L[:, i], [FL[a][j] for a in range(q)])
        K[i, i] += 1.0
    return K


def _mix(weights: Array, vectors: Sequence[Array]) -> Array:
    """Σ weights[k]·vectors[k], zero weights left out."""
    out = np.zeros_like(vectors[0])
    for w, v in zip(weights, vectors, strict=True):
        if w != 0:
            out += w * v
    return out


def _turned(L: Array, rows: Sequence[Array]) -> list[Array]:
    """L'rows, row by row."""
    return [_mix(L[:, i], rows) for i in range(L.shape[1])]


def _cholesky(K: Array) -> Array:
    """Lower triangles of G small matrices at once; K (q, q, G)."""
    q = K.shape[0]
    C = np.zeros_like(K)
    for j in range(q):
        C[j, j] = np.sqrt(K[j, j] - np.sum(C[j, :j] ** 2, axis=0))
        for i in range(j + 1, q):
            C[i, j] = (K[i, j] - np.sum(C[i, :j] * C[j, :j], axis=0)) / C[j, j]
    return C


def _solve(C: Array, rows: Sequence[Array]) -> Array:
    """C⁻¹rows for G lower triangles; rows: q arrays (k, G)."""
    out = np.empty((len(rows), *rows[0].shape))
    for i, row in enumerate(rows):
        rest = row
        for k in range(i):
            rest = rest - C[i, k] * out[k]
        out[i] = rest / C[i, i]
    return out


def _back(C: Array, rows: Array) -> Array:
    """C⁻ᵀrows."""
    q = len(rows)
    out = np.empty_like(rows)
    for i in reversed(range(q)):
        rest = rows[i]
        for k in range(i + 1, q):
            rest = rest - C[k, i] * out[k]
        out[i] = rest / C[i, i]
    return out


def _logdet(C: Array) -> float:
    return float(2 * sum(np.log(C[i, i]).sum() for i in range(len(C))))


def criterion(gram: Gram, block: Block, L: Array, m: int) -> tuple[float, Array]:
    """−2ℓ_R with σ² profiled out, one level and one column of y, and its gradient in L (q, q).

    gram : at V₀. With B = L'H, S = K⁻¹BMB'K⁻¹ and M the derivative of ln|A₁₁| + m ln c in
    A = [Q, e]'V⁻¹[Q, e], the gradient is 2Σ_g F_gL(K⁻¹ + S) − 2Σ_g H_gMB'K⁻¹; its entries above the
    diagonal are not used.
    """
    q, p = L.shape[0], gram.QQ.shape[0]
    some = list(_split(block))
    halves = [_halved(part, L) for part in some]
    A = np.zeros((p + 1, p + 1))
    A[:p, :p], A[:p, p], A[p, :p], A[p, p] = gram.QQ, gram.QE[:, 0], gram.QE[:, 0], gram.EE[0]
    for _, _, X in halves:
        for x in X:
            A -= x @ x.T
    R = np.asarray(np.linalg.cholesky(A[:p, :p]), dtype=float)
    half = forward(R, A[:p, p:])[:, 0]
    c = max(float(A[p, p] - half @ half), 1e-300)
    inverse = forward(R, np.eye(p))  # R⁻¹
    N = np.zeros((p + 1, p + 1))
    N[:p, :p] = inverse.T
    N[:p, p], N[p, p] = -np.sqrt(m / c) * (inverse.T @ half), np.sqrt(m / c)
    gradient = sum(
        (_pull(part, L, N, *half) for part, half in zip(some, halves, strict=True)), np.zeros((q, q))
    )
    value = gram.logdet + sum(_logdet(C) for _, C, _ in halves) + 2 * float(np.log(np.diag(R)).sum())
    return value + m * (float(np.log(2 * np.pi * c / m)) + 1), gradient


def _split(block: Block) -> Iterator[Block]:
    """The cells in parts that stay in the processor's cache from one step to the next."""
    for start in range(0, block.UU.shape[-1], TOGETHER):
        cells = slice(start, start + TOGETHER)
        yield Block(block.UU[..., cells], block.UQ[..., cells], block.UE[..., cells])


def _halved(block: Block, L: Array) -> tuple[Array, Array, Array]:
    """H, C with CC' = K, and C⁻¹L'H."""
    H = np.concatenate([block.UQ, block.UE], axis=1)
    C = _cholesky(_inner(block, L, range(len(L))))
    return H, C, _solve(C, _turned(L, list(H)))


def _pull(block: Block, L: Array, N: Array, H: Array, C: Array, X: Array) -> Array:
    """(q, q) what some cells add to the gradient, M = NN'."""
    q = len(L)
    Y = np.stack([N.T @ w for w in _back(C, X)])
    P = np.stack([N.T @ h for h in H])
    unit = _back(C, _solve(C, [np.broadcast_to(row[:, None], (q, C.shape[-1])) for row in np.eye(q)]))
    T = [[unit[i, j] + np.einsum("kg,kg->g", Y[i], Y[j]) for j in range(q)] for i in range(q)]
    out = np.empty((q, q))
    for j in range(q):
        LT = [_mix(L[a], [T[b][j] for b in range(q)]) for a in range(q)]
        for i in range(q):
            curve = sum(float(block.UU[i, a] @ LT[a]) for a in range(q))
            out[i, j] = 2 * curve - 2 * float(np.vdot(P[i], Y[j]))
    return out


# ---- covariances and their working parameters ----


def factor(log_variances: Array, z: Array) -> Array:
    """L (…, q, q) of Γ from ln of its diagonal (…, q) and z (…, q, q), atanh of the partial correlations.

    z[…, i, j], j < i, belongs to the correlation of i and j given the functions before j, so that every
    value gives a covariance (Joe 2006; Lewandowski, Kurowicka & Joe 2009).
    """
    q = log_variances.shape[-1]
    out = np.zeros(z.shape)
    for i in range(q):
        left = np.ones(z.shape[:-2])
        for j in range(i):
            partial = np.tanh(z[..., i, j])
            out[..., i, j] = partial * np.sqrt(left)
            left = left * (1 - partial**2)
        out[..., i, i] = np.sqrt(left)
    return np.asarray(np.exp(log_variances / 2)[..., None] * out)


def parameters(gamma: Array, free: Array, largest: float) -> tuple[Array, Array]:
    """(ln diagonal, z) of a covariance: the inverse of :func:`factor`, z cut at ±largest.

    free (q, q) : which pairs may be correlated; z is zero elsewhere.
    """
    q = len(gamma)
    variance = np.maximum(np.diag(gamma), 1e-300)
    sd = np.sqrt(variance)
    R = gamma / sd[:, None] / sd  # never the product of two variances, which may round to zero
    z, rows = np.zeros((q, q)), np.zeros((q, q))
    for i in range(q):
        left = 1.0
        for j in range(i):
            pivot = rows[j, j] if rows[j, j] > 1e-12 else 1.0
            rows[i, j] = (R[i, j] - rows[i, :j] @ rows[j, :j]) / pivot
            partial = rows[i, j] / np.sqrt(left) if left > 1e-24 else 0.0
            if free[i, j]:
                z[i, j] = np.arctanh(np.clip(partial, -np.tanh(largest), np.tanh(largest)))
            rows[i, j] = np.tanh(z[i, j]) * np.sqrt(left)
            left = max(left - rows[i, j] ** 2, 0.0)
        rows[i, i] = np.sqrt(left)
    return np.log(variance), z


def whiten(part: Partition, W: Array, block: Array) -> Array:
    """Rows (n, k) multiplied by (I + Σ_g W_gW_g')^{−1/2}, the symmetric root; W (n, q) cut by cell.

    With W'W = TΛT' in each cell, the root is I − WT diag((1 − (1 + λ)^{−1/2})/λ) T'W'.
    """
    q = W.shape[1]
    inner = part.sums((W[:, :, None] * W[:, None, :]).reshape(len(W), q * q)).reshape(-1, q, q)
    size, T = np.linalg.eigh(inner)
    size = np.maximum(size, 0.0)
    # −expm1 keeps the digits that one minus a number near one would lose; at λ = 0 the limit is ½.
    gap = np.where(size > 1e-12, -np.expm1(-0.5 * np.log1p(size)) / np.where(size > 1e-12, size, 1.0), 0.5)
    out = np.array(block, dtype=float)
    for j in range(block.shape[1]):
        v = part.sums(W * block[:, j : j + 1])
        back = np.einsum("gij,gj,gkj,gk->gi", T, gap, T, v, optimize=True)
        out[:, j] -= np.einsum("nq,nq->n", W, back[part.codes])
    return out
