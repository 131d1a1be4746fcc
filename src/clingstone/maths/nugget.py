"""A fading process plus row noise: V = λZKZ' + I, K_ts = ρ^|t − s| over the visits of each series.

A visit is a time of one series; Z puts rows on visits and carries √weights, so rows that share a time
are replicates of one visit. K⁻¹ is tridiagonal, and with W = Z'Z, T visits,

    V⁻¹ = I − λZ(K⁻¹ + λW)⁻¹Z',     ln|V| = ln|K| + ln|K⁻¹ + λW|,

by one banded factorisation, O(T) (Jones 1980 for the process; Woodbury's identity for the rest).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from clingstone.maths.basis import Gram
from clingstone.maths.markov import Links, correlation
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class Visits:
    """Rows on the visits of their series.

    part : rows → visits, in (series, time) order. links : between neighbouring visits.
    root : (n,) square roots of precision weights, or None.
    """

    part: Partition
    links: Links
    root: Array | None = None

    @classmethod
    def of(cls, steps: Array, root: Array | None = None) -> Visits:
        """From steps since the row before in the series (n,), NaN at a start, 0 for a replicate."""
        new = ~(steps == 0)
        codes = (np.cumsum(new) - 1).astype(np.int32)
        part = Partition("visit", codes, ("",) * int(codes[-1] + 1))
        return cls(part, Links(np.asarray(steps[new])), root)

    @property
    @once
    def weight(self) -> Array:
        """(T,) rows per visit, or their total weight: the diagonal of W."""
        if self.root is None:
            return self.part.sizes.astype(float)
        return self.part.sums(self.root**2)

    def sums(self, block: Array) -> Array:
        """Z'block, (T, k)."""
        return self.part.sums(block if self.root is None else block * self.root[:, None])

    def _factor(self, rho: float, ratio: float) -> tuple[Array, float]:
        """Banded Cholesky factor of K⁻¹ + λW, and ln|V|."""
        T, later = self.part.count, self.links.later
        phi, rest = correlation(rho, self.links.steps[later])
        band = np.zeros((2, T))
        band[0, later] = -phi / rest
        band[1] = 1.0 + ratio * self.weight
        band[1, later] += phi**2 / rest
        band[1, later - 1] += phi**2 / rest
        factor = linalg.cholesky_banded(band, overwrite_ab=True, check_finite=False)
        logdet = float(np.log(rest).sum() + 2 * np.log(factor[1]).sum())
        return np.asarray(factor), logdet

    def gram(self, rho: float, ratio: float, sums: Array, cross: Gram) -> Gram:
        """[Q, e]'V⁻¹[Q, e].

        sums : (T, p + B) Z'[Q, e]. cross : the same Gram at V = I.
        """
        factor, logdet = self._factor(rho, ratio)
        p = cross.QQ.shape[0]
        solved = linalg.cho_solve_banded((factor, False), sums, check_finite=False)
        QQ = cross.QQ - ratio * (sums[:, :p].T @ solved[:, :p])
        QE = cross.QE - ratio * (sums[:, :p].T @ solved[:, p:])
        EE = cross.EE - ratio * np.einsum("ij,ij->j", sums[:, p:], solved[:, p:])
        return Gram((QQ + QQ.T) / 2, QE, EE, logdet)

    def dense(self, rho: float, ratio: float) -> Array:
        """(n, n) V; for small n."""
        Z = np.zeros((self.part.n, self.part.count))
        Z[np.arange(self.part.n), self.part.codes] = 1.0 if self.root is None else self.root
        return np.asarray(np.eye(self.part.n) + ratio * Z @ self.links.dense(rho) @ Z.T)

    def draw(self, rho: float, ratio: float, rng: np.random.Generator, B: int) -> Array:
        """(n, B) draws of N(0, V)."""
        process = self.links.colour(rho, rng.standard_normal((self.part.count, B)))[self.part.codes]
        if self.root is not None:
            process = process * self.root[:, None]
        return np.asarray(np.sqrt(ratio) * process + rng.standard_normal((self.part.n, B)))
