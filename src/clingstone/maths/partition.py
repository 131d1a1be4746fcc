"""Rows put into cells: group levels, series, sites, periods."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
from scipy import sparse

from clingstone.maths.once import Array, Codes, frozen, once

FEW = 4096  # rows that are looked at before all others

Relation = Literal["same", "nests", "nested", "crossed"]


@dataclass(frozen=True, eq=False)
class Partition:
    """n rows in G cells.

    Parameters
    ----------
    key : name of the partition, unique within a design.
    codes : (n,) int32, the cell of each row, 0 … G−1, every cell used.
    labels : (G,) the user's label of each cell, as text.
    """

    key: str
    codes: Codes
    labels: tuple[str, ...]

    @classmethod
    def of(cls, key: str, values: npt.ArrayLike) -> Partition:
        """Cells in sorted order of their values."""
        distinct, codes = np.unique(np.asarray(values), return_inverse=True)
        return cls(key, frozen(codes.astype(np.int32).ravel()), tuple(str(v) for v in distinct))

    @property
    def n(self) -> int:
        return len(self.codes)

    @property
    def count(self) -> int:
        """G, the number of cells."""
        return len(self.labels)

    @property
    @once
    def sizes(self) -> npt.NDArray[np.int64]:
        """(G,) rows per cell."""
        return frozen(np.bincount(self.codes, minlength=self.count))

    @property
    @once
    def first(self) -> npt.NDArray[np.int64]:
        """(G,) the first row of each cell."""
        rows = np.empty(self.count, dtype=np.int64)
        rows[self.codes[::-1]] = np.arange(self.n - 1, -1, -1)
        return frozen(rows)

    @property
    @once
    def starts(self) -> npt.NDArray[np.int64] | None:
        """(G,) the first row of each cell where rows stand cell after cell, in order; else None."""
        together = bool(np.all(self.codes[1:] >= self.codes[:-1]))
        return frozen(np.cumsum(self.sizes) - self.sizes) if together else None

    @property
    @once
    def indicator(self) -> sparse.csc_array:
        """Z' as a (G, n) sparse array of ones.

        Column storage needs no sort of the rows, and its product with an (n, p) block is several
        times faster than adding up by ``bincount`` column by column.
        """
        ones = np.ones(self.n)
        return sparse.csc_array(
            (ones, self.codes, np.arange(self.n + 1, dtype=np.int32)), shape=(self.count, self.n)
        )

    def sums(self, values: Array) -> Array:
        """Z'values: (n,) → (G,) or (n, k) → (G, k)."""
        if values.ndim == 1:
            if (starts := self.starts) is not None:
                return np.asarray(np.add.reduceat(values, starts, dtype=float))
            return np.bincount(self.codes, weights=values, minlength=self.count).astype(float)
        return np.asarray(self.indicator @ values)

    def products(self, left: Array, right: Array) -> Array:
        """Z'(left ∘ right): (n,) and (n, k) → (G, k), without a copy of the rows."""
        places = (left, self.codes, np.arange(self.n + 1, dtype=np.int32))
        return np.asarray(sparse.csc_array(places, shape=(self.count, self.n)) @ right)

    def means(self, values: Array) -> Array:
        """Cell means, (G,) or (G, k)."""
        sizes = self.sizes if values.ndim == 1 else self.sizes[:, None]
        return np.asarray(self.sums(values) / sizes)

    @once
    def relation(self, other: Partition) -> Relation:
        """How this partition stands to another of the same rows.

        ``nests``: every cell of the other lies within one cell of this one.
        """
        if self.codes is other.codes:
            return "same"
        up = _constant_within(self.codes, other)
        down = _constant_within(other.codes, self)
        if up and down:
            return "same"
        return "nests" if up else "nested" if down else "crossed"

    def parent(self, outer: Partition) -> npt.NDArray[np.int32]:
        """(G,) the cell of ``outer`` that holds each cell; needs ``outer`` to nest this one."""
        return outer.codes[self.first]

    def within(self, outer: Partition, key: str | None = None, sep: str = "/") -> Partition:
        """Cells of the pair (outer, this): labels that recur under two parents become two cells."""
        pair = outer.codes.astype(np.int64) * self.count + self.codes
        distinct, codes = np.unique(pair, return_inverse=True)
        labels = tuple(f"{outer.labels[v // self.count]}{sep}{self.labels[v % self.count]}" for v in distinct)
        return Partition(key or f"{outer.key}{sep}{self.key}", frozen(codes.astype(np.int32).ravel()), labels)

    def take(self, rows: npt.NDArray[Any]) -> Partition:
        """The partition of some rows; cells left empty are dropped."""
        codes = self.codes[rows]
        used = np.bincount(codes, minlength=self.count) > 0
        if used.all():
            return Partition(self.key, frozen(codes), self.labels)
        place = (np.cumsum(used) - 1).astype(np.int32)
        labels = tuple(self.labels[c] for c in np.flatnonzero(used))
        return Partition(self.key, frozen(place[codes]), labels)


def _constant_within(codes: npt.NDArray[np.int32], cells: Partition) -> bool:
    first = codes[cells.first]
    # Cells that cross do so within a few rows, as a rule.
    rows = (slice(0, FEW), slice(FEW, None))
    return all(bool(np.all(codes[some] == first[cells.codes[some]])) for some in rows)
