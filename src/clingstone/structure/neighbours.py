"""Neighbour graphs over distinct sites."""

from __future__ import annotations

from dataclasses import dataclass

from scipy import sparse


@dataclass(frozen=True, eq=False)
class Neighbours:
    """A neighbour graph.

    key : e.g. "knn:6"; about : how a sentence names it, e.g. "6 nearest sites".
    W : (S, S) row-standardised weights; rows of islands are zero.
    islands : sites without a neighbour. components : connected parts.
    """

    key: str
    about: str
    W: sparse.csr_array
    islands: int = 0
    components: int = 1
