"""Two crossed groupings swept out of columns at once, without a column for each cell.

With D₁, D₂ the indicators (carrying √weights), the first grouping's means are taken out of everything; what
the second adds is projected out by its normal equations A = D₂'D₂ − N'diag(n₁)⁻¹N, N = D₁'D₂, which are as
large as the second grouping has cells. Columns and rank are exact whatever the pattern of empty cells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class TwoWay:
    """Two groupings of n rows. root : (n,) square roots of weights, or None."""

    first: Partition
    second: Partition
    root: Array | None = None

    @property
    def _squares(self) -> Array:
        return np.ones(self.first.n) if self.root is None else self.root**2

    @property
    @once
    def _inverse(self) -> tuple[Array, int]:
        """Moore-Penrose inverse of A and its rank: cells of the second less the connected pieces."""
        weight = self._squares
        shape = (self.first.count, self.second.count)
        N = sparse.coo_array((weight, (self.first.codes, self.second.codes)), shape=shape).tocsr()
        scaled = sparse.diags_array(1 / self.first.sums(weight)) @ N
        A = np.diag(self.second.sums(weight)) - (N.T @ scaled).toarray()
        values, vectors = np.linalg.eigh(A)
        live = values > 1e-10 * values[-1]
        part = np.where(live, 1 / np.where(live, values, 1.0), 0.0)
        return (vectors * part) @ vectors.T, int(live.sum())

    @property
    def rank(self) -> int:
        """Dimensions that both groupings span together."""
        return self.first.count + self._inverse[1]

    def sweep(self, columns: Array) -> Array:
        """Columns (n, k), on the scale of √weights, less all that the two groupings span."""
        once_swept = self._less_first(columns)
        root = 1.0 if self.root is None else self.root[:, None]
        level = self._inverse[0] @ self.second.sums(once_swept * root)
        return once_swept - self._less_first(root * level[self.second.codes])

    def _less_first(self, columns: Array) -> Array:
        root = 1.0 if self.root is None else self.root[:, None]
        held = self.first.sums(columns * root) / self.first.sums(self._squares)[:, None]
        return np.asarray(columns - root * held[self.first.codes])
