"""Intercepts of levels that cut across one another, at any number of rows.

V = I + Σ_k λ_k Z_kZ_k'. The level with most cells is eliminated in closed form (its Z'Z is diagonal), the
cells of the others are left: with w = λ₁/(1 + λ₁c₁), N = Z₁'Z_r, s² = λ of each remaining cell,

    F = Z_r'Z_r − N' diag(w) N,   M = I + diag(s) F diag(s),   ln|V| = Σ ln(1 + λ₁c₁) + ln|M|,

and [Q, e]'V⁻¹[Q, e] loses (s∘t)'M⁻¹(s∘t), t = Z_r'[Q, e] − N'(w∘Z₁'[Q, e]) (Bates, Mächler, Bolker & Walker
2015 for the same elimination by sparse factors). N' diag(w) N is a sum over classes of first-level cells of
equal size, so that no evaluation visits the rows. Beyond ``DENSE`` remaining cells the whole system is
factored sparsely.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg, sparse
from scipy.sparse.linalg import splu

from clingstone.maths import groups
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.maths.reml import forward

DENSE = 4000  # remaining cells up to which M is a dense array
CLASSES = 25_000_000  # doubles that the sums over classes may take


@dataclass(frozen=True, eq=False)
class Cells:
    """The cells of two levels or more, the level with most of them first.

    parts : the levels. root : (n,) √weights, the entries of every Z, or None. Q : (n, p) basis.
    """

    parts: tuple[Partition, ...]
    root: Array | None
    Q: Array

    @property
    @once
    def counts(self) -> tuple[int, ...]:
        return tuple(part.count for part in self.parts)

    @property
    def rest(self) -> int:
        """Cells of all levels but the first."""
        return sum(self.counts[1:])

    @property
    @once
    def owner(self) -> npt.NDArray[np.int64]:
        """(rest,) the level of each remaining cell, 1 …"""
        return np.repeat(np.arange(1, len(self.parts)), self.counts[1:])

    @property
    @once
    def c(self) -> Array:
        """(q₁,) rows, or total weight, of each cell of the first level."""
        first = self.parts[0]
        return first.sizes.astype(float) if self.root is None else first.sums(self.root**2)

    @property
    @once
    def cross(self) -> sparse.csr_array:
        """(q, q) Z'Z over all cells, sparse."""
        weight = np.ones(self.parts[0].n) if self.root is None else self.root**2
        blocks = [
            [
                sparse.coo_array((weight, (a.codes, b.codes)), shape=(a.count, b.count)).tocsr()
                for b in self.parts
            ]
            for a in self.parts
        ]
        return sparse.csr_array(sparse.block_array(blocks))

    @property
    @once
    def N(self) -> sparse.csr_array:
        """(q₁, rest) Z₁'Z_r."""
        return sparse.csr_array(self.cross[: self.counts[0], self.counts[0] :])

    def sums(self, block: Array) -> Array:
        """(q, k) Z'block over all cells."""
        weighted = block if self.root is None else block * self.root[:, None]
        return np.vstack([part.sums(weighted) for part in self.parts])

    @property
    @once
    def TQ(self) -> Array:
        return self.sums(self.Q)

    # ---- N' diag(w) N --------------------------------------------------------------------------------

    @property
    @once
    def _triangle(self) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]]:
        return np.tril_indices(self.rest)

    @property
    @once
    def _diagonal(self) -> npt.NDArray[np.intp]:
        """Places of the diagonal among the packed entries."""
        return np.cumsum(np.arange(1, self.rest + 1)) - 1

    @property
    @once
    def _classes(self) -> tuple[Array, npt.NDArray[np.intp], Array] | None:
        """Distinct c, the first cell of each, and the packed N'N of every class; None where too large."""
        sizes, first, code = np.unique(self.c, return_index=True, return_inverse=True)
        r = self.rest
        if len(sizes) * (r * (r + 1) // 2) > CLASSES:
            return None
        packed = np.empty((len(sizes), r * (r + 1) // 2))
        for k in range(len(sizes)):
            rows = self.N[np.flatnonzero(code == k)]
            dense = rows.toarray()
            packed[k] = (dense.T @ dense)[self._triangle]
        return sizes, first, packed

    def squared(self, weights: list[Array]) -> list[Array]:
        """Lower triangles of N' diag(w) N, packed row by row, for every w; w depends on c alone."""
        held = self._classes
        if held is None:
            N = self.N
            return [(N.T @ (sparse.diags_array(w) @ N)).toarray()[self._triangle] for w in weights]
        _, first, packed = held
        return list(np.stack([w[first] for w in weights]) @ packed)

    @property
    @once
    def _own(self) -> Array:
        """Z_r'Z_r, packed likewise."""
        return np.asarray(self.cross[self.counts[0] :, self.counts[0] :].toarray()[self._triangle])

    def _scales(self, s: Array) -> Array:
        rows, columns = self._triangle
        return np.asarray(s[rows] * s[columns])

    def inner(self, s: Array, first: Array) -> Array:
        """M − I = diag(s) F diag(s) in the lower triangle of a (rest, rest) array."""
        out = np.zeros((self.rest, self.rest))
        out[self._triangle] = self._scales(s) * (self._own - first)
        return out

    def factor(self, s: Array, first: Array) -> Array:
        """The lower Cholesky factor of M."""
        M = self.inner(s, first)
        M[np.diag_indices_from(M)] += 1.0
        return np.asarray(linalg.cholesky(M, lower=True, overwrite_a=True, check_finite=False))

    # ---- one evaluation ------------------------------------------------------------------------------

    def gram(self, ratios: Array, base: Gram, TE: Array) -> Gram:
        """The Gram at λ (levels,); base at V = I, TE (q, B) sums of e over all cells."""
        if self.rest > DENSE:
            return self._sparse(ratios, base, TE)
        q1 = self.counts[0]
        w = ratios[0] / (1 + ratios[0] * self.c)
        s = np.sqrt(ratios[self.owner])
        R = self.factor(s, self.squared([w])[0])
        T = np.hstack([self.TQ, TE])
        half = forward(R, s[:, None] * (T[q1:] - self.N.T @ (w[:, None] * T[:q1])))
        p, WT = self.Q.shape[1], w[:, None] * T[:q1]
        Q1, E1 = T[:q1, :p], T[:q1, p:]
        return Gram(
            base.QQ - WT[:, :p].T @ Q1 - half[:, :p].T @ half[:, :p],
            base.QE - WT[:, :p].T @ E1 - half[:, :p].T @ half[:, p:],
            base.EE - np.sum(WT[:, p:] * E1, axis=0) - np.sum(half[:, p:] ** 2, axis=0),
            base.logdet + float(np.log1p(ratios[0] * self.c).sum() + 2 * np.log(np.diag(R)).sum()),
        )

    def _sparse(self, ratios: Array, base: Gram, TE: Array) -> Gram:
        """The whole system of all cells, by a sparse factor."""
        s = np.sqrt(np.repeat(ratios, self.counts))
        scale = sparse.diags_array(s)
        M = sparse.csc_array(scale @ self.cross @ scale + sparse.eye_array(len(s)))
        # M is positive definite: no pivoting is needed, and the diagonal of U is positive.
        solver = splu(M, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
        T = s[:, None] * np.hstack([self.TQ, TE])
        back = solver.solve(T)
        p = self.Q.shape[1]
        return Gram(
            base.QQ - T[:, :p].T @ back[:, :p],
            base.QE - T[:, :p].T @ back[:, p:],
            base.EE - np.sum(T[:, p:] * back[:, p:], axis=0),
            base.logdet + float(np.log(np.abs(solver.U.diagonal())).sum()),
        )

    def criterion(self, ratios: Array, base: Gram, TE: Array, m: int) -> tuple[float, Array]:
        """−2ℓ_R with σ² profiled out, one column of y, and its gradient in ln λ (levels,).

        ∂/∂λ_k = tr(Z_k'V⁻¹Z_k) − tr(M B_k'B_k) with B_k = Z_k'V⁻¹[Q, e] and M the derivative of
        ln|A₁₁| + m ln c in A = [Q, e]'V⁻¹[Q, e]. Needs λ > 0 and a dense rest.
        """
        q1, p = self.counts[0], self.Q.shape[1]
        d = 1 + ratios[0] * self.c
        w = ratios[0] / d
        s = np.sqrt(ratios[self.owner])
        first, second = self.squared([w, d**-2.0])
        R = self.factor(s, first)
        T = np.hstack([self.TQ, TE])
        half = forward(R, s[:, None] * (T[q1:] - self.N.T @ (w[:, None] * T[:q1])))
        A = np.zeros((p + 1, p + 1))
        A[:p, :p], A[:p, p], A[p, :p], A[p, p] = base.QQ, base.QE[:, 0], base.QE[:, 0], base.EE[0]
        A -= T[:q1].T @ (w[:, None] * T[:q1]) + half.T @ half
        C = np.asarray(np.linalg.cholesky(A[:p, :p]), dtype=float)
        a = forward(C, A[:p, p:])[:, 0]
        c = max(float(A[p, p] - a @ a), 1e-300)
        inverse = forward(C, np.eye(p))
        G = np.zeros((p + 1, p + 1))
        G[:p, :p], G[:p, p], G[p, p] = inverse.T, -np.sqrt(m / c) * (inverse.T @ a), np.sqrt(m / c)
        back = linalg.solve_triangular(R, half, lower=True, trans=1, check_finite=False)
        Minv, _ = linalg.lapack.dpotri(R, lower=1)
        own = np.diag(Minv)
        gradient = np.empty(len(ratios))
        seen = ((T[:q1] - self.N @ (s[:, None] * back)) / d[:, None]) @ G
        second *= self._scales(s)
        hidden = 2 * float(Minv[self._triangle] @ second) - float(own @ second[self._diagonal])
        gradient[0] = ratios[0] * (float(np.sum(self.c / d)) - hidden - float(np.sum(seen**2)))
        # λ_k Z_k'V⁻¹Z_k = I − M⁻¹ on the cells of level k, and √λ_k B_k = M⁻¹(s∘t).
        pull = np.sum((back @ G) ** 2, axis=1)
        for k in range(1, len(ratios)):
            at = self.owner == k
            gradient[k] = float(np.sum(1 - own[at]) - np.sum(pull[at]))
        logdet = float(np.log(d).sum() + 2 * np.log(np.diag(R)).sum())
        value = base.logdet + logdet + 2 * float(np.log(np.diag(C)).sum())
        return value + m * (float(np.log(2 * np.pi * c / m)) + 1), gradient

    # ---- rows ------------------------------------------------------------------------------------------

    def whiten(self, ratios: Array, block: Array) -> Array:
        """Rows (n, k) multiplied by a square root of V⁻¹: the first level's own, then that of the rest.

        With A = V₁^{−½}Z_r diag(s), the second root is I − AT diag((1 − (1 + φ)^{−½})/φ) T'A', and
        A'A = TΦT' is M − I above.
        """
        first = self.parts[0]
        ones = np.ones(first.n) if self.root is None else self.root
        w = ratios[0] / (1 + ratios[0] * self.c)
        s = np.sqrt(ratios[self.owner])
        size, T = np.linalg.eigh(self.inner(s, self.squared([w])[0]))  # reads the lower triangle
        size = np.maximum(size, 0.0)
        gap = np.where(size > 1e-12, -np.expm1(-0.5 * np.log1p(size)) / np.maximum(size, 1e-12), 0.5)

        def root(rows: Array) -> Array:
            return groups.whiten(first, ones, rows, float(ratios[0]))[1]

        out = root(np.array(block, dtype=float))
        pulled = s[:, None] * self.sums(root(out))[self.counts[0] :]
        back = s[:, None] * (T @ (gap[:, None] * (T.T @ pulled)))
        spread, start = np.zeros_like(out), 0
        for part in self.parts[1:]:
            spread += back[start : start + part.count][part.codes] * ones[:, None]
            start += part.count
        return np.asarray(out - root(spread))
