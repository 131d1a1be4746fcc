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
from clingstone.maths.groups import Load
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

    def lower(
        self,
        rho: float,
        ratio: float,
        sums: Array,
        gram: Gram,
        load: Load | None = None,
        up: Partition | None = None,
    ) -> tuple[Gram, Load | None]:
        """The Gram, and what cells of whole series amount to, once the process is in V.

        sums : (T, p + B) Z'[Q, e]. gram, load : the same at V = I. up : visits → cells of ``load``.
        """
        factor, logdet = self._factor(rho, ratio)
        p = gram.QQ.shape[0]
        wide = sums if up is None else np.column_stack([sums, self.weight])
        solved = linalg.cho_solve_banded((factor, False), wide, check_finite=False)
        QQ = gram.QQ - ratio * (sums[:, :p].T @ solved[:, :p])
        QE = gram.QE - ratio * (sums[:, :p].T @ solved[:, p : sums.shape[1]])
        EE = gram.EE - ratio * np.einsum("ij,ij->j", sums[:, p:], solved[:, p : sums.shape[1]])
        made = Gram((QQ + QQ.T) / 2, QE, EE, gram.logdet + logdet)
        if load is None or up is None:
            return made, None
        gone = ratio * up.sums(self.weight[:, None] * solved)
        return made, Load(load.c - gone[:, -1], load.TQ - gone[:, :p], load.TE - gone[:, p:-1])

    def whiten(self, rho: float, ratio: float, block: Array) -> Array:
        """A square root of V⁻¹ applied to (n,) or (n, k).

        V is I on what sums to zero within visits. On their means, of weights W, it is I + λW^½KW^½; with
        K = LL' and CC' = L⁻¹W⁻¹L⁻ᵀ + λI, tridiagonal, its inverse has the square root C⁻¹L⁻¹W^−½.
        """
        wide = block[:, None] if block.ndim == 1 else block
        size = np.sqrt(self.weight)[:, None]
        mean = self.sums(wide) / size
        links, later = self.links, self.links.later
        phi, rest = correlation(rho, links.steps[later])
        # L⁻¹ has 1/√rest on its diagonal and −φ/√rest below it, 1 and 0 at the start of a series.
        diagonal, below = np.ones(self.part.count), np.zeros(self.part.count)
        diagonal[later], below[later] = 1 / np.sqrt(rest), -phi / np.sqrt(rest)
        inverse = 1 / self.weight
        band = np.zeros((2, self.part.count))
        band[0] = ratio + diagonal**2 * inverse
        band[0, later] += below[later] ** 2 * inverse[later - 1]
        band[1, later - 1] = below[later] * inverse[later - 1] * diagonal[later - 1]
        C = linalg.cholesky_banded(band, lower=True, check_finite=False)
        C[1, -1] = 0.0
        white = linalg.solve_banded((1, 0), C, links.whiten(rho, mean / size), check_finite=False)
        change = ((white - mean) / size)[self.part.codes]
        out = wide + (change if self.root is None else change * self.root[:, None])
        return np.asarray(out[:, 0] if block.ndim == 1 else out)

    def dense(self, rho: float, ratio: float) -> Array:
        """(n, n) V; for small n."""
        Z = np.zeros((self.part.n, self.part.count))
        Z[np.arange(self.part.n), self.part.codes] = 1.0 if self.root is None else self.root
        return np.asarray(np.eye(self.part.n) + ratio * Z @ self.links.dense(rho) @ Z.T)

    def process(self, rho: float, ratio: float, rng: np.random.Generator, B: int) -> Array:
        """(n, B) draws of N(0, λZKZ')."""
        drawn = self.links.colour(rho, rng.standard_normal((self.part.count, B)))[self.part.codes]
        return np.asarray(np.sqrt(ratio) * (drawn if self.root is None else drawn * self.root[:, None]))
