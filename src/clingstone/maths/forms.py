"""Symmetric quadratic forms e'Se over the rows: lags, paths, groups, neighbour graphs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from clingstone.maths.once import Array


@dataclass(frozen=True, eq=False)
class Form:
    """A symmetric form S of order n.

    key : unique within a design. S : (n, n) sparse symmetric. low, high : bounds of its spectrum.
    """

    key: str
    S: sparse.csr_array
    low: float
    high: float

    def apply(self, block: Array) -> Array:
        """S @ block."""
        return np.asarray(self.S @ block)
