"""Which combinations of coefficients a design of deficient rank still tells, and their weights."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.basis import RANK_TOLERANCE, Basis, aliased
from clingstone.maths.once import Array

EMPTY = 1e-9  # a column below this part of its former length has nothing left


@dataclass(frozen=True, eq=False)
class Reduced:
    """A basis of the columns kept, and k combinations c'β in it.

    kept (q,) places of the columns. W (q, k) weights, of use where ``told`` (k,). empty (p,): columns
    with nothing left.
    """

    basis: Basis
    kept: npt.NDArray[np.int64]
    W: Array
    told: npt.NDArray[np.bool_]
    empty: npt.NDArray[np.bool_]


def reduced(X: Array, length: Array, C: Array) -> Reduced:
    """Drop what is empty or aliased from X (n, p); judge each row of C (k, p).

    length (p,) : the columns' lengths before they were swept, by which nothing is told from little. A
    combination is told when it is orthogonal to every c with Xc = 0; its estimate then does not depend
    on which of several aliased columns is kept.
    """
    norm = np.linalg.norm(X, axis=0)
    empty = norm <= EMPTY * length
    live = np.flatnonzero(~empty)
    Z = X[:, live] / norm[live]
    told = np.all(C[:, empty] == 0, axis=1)
    kept = live
    if len(live):
        R = np.asarray(np.linalg.qr(Z, mode="r"))
        _, values, right = np.linalg.svd(R)
        rank = int(np.sum(values > RANK_TOLERANCE))
        scaled = C[:, live] / norm[live]
        outside = np.linalg.norm(scaled @ right[rank:].T, axis=1)
        told &= outside <= 1e-8 * np.maximum(np.linalg.norm(scaled, axis=1), 1e-300)
        kept = np.delete(live, list(aliased(R)))  # R carries the dependencies of Z
    told &= np.any(C[:, kept] != 0, axis=1)
    basis = Basis.of(X[:, kept]) if len(kept) else Basis(np.zeros((len(X), 0)), np.zeros((0, 0)))
    return Reduced(basis, kept, basis.contrast(C[:, kept]).reshape(len(kept), len(C)), told, empty)
