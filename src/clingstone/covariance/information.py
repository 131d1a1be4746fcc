"""Kenward and Roger's ingredients for intercepts and slopes, from what the groups add up to."""

from __future__ import annotations

import numpy as np

from clingstone.covariance.base import Pieces
from clingstone.covariance.bundles import Bundle, SlopePiece
from clingstone.covariance.pieces import GroupPiece
from clingstone.maths import slopes
from clingstone.maths.groups import Expected
from clingstone.maths.once import Array, kept

WHOLE = 600  # random effects up to which levels that are fitted together are one dense block
PARAMETERS = 12  # covariance parameters beyond which the ingredients are not worked out


def ingredients(algebra: Pieces, theta: Array, sigma2: float) -> Expected | None:
    """Expected information and what goes with it at θ (d,), or None where it would be dear.

    Exact for one level at any number of groups, and for several levels (nested or crossed) with at most
    ``WHOLE`` random effects together. V is linear in the variances and covariances.
    """
    levels = algebra.level_keys
    if not levels or not all(isinstance(piece, GroupPiece | SlopePiece) for piece in algebra.pieces):
        return None
    bundles = [algebra.bundle(key) for key in levels]
    if sum(_count(bundle) for bundle in bundles) > PARAMETERS:
        return None
    gammas: list[Array] = []
    for bundle in bundles:
        L = bundle.L(algebra.joined(bundle, theta))
        gammas.append(np.asarray(sigma2 * L @ L.T, dtype=float))
    design = algebra.design
    if len(bundles) == 1:
        C, H = _cells(bundles[0])
        return slopes.expected(design.n, C, H, sigma2, gammas[0], _directions(bundles[0].free))
    if sum(bundle.q * bundle.part.count for bundle in bundles) > WHOLE:
        return None
    C, H = kept(design, ("one block", *levels, *(b.names for b in bundles)), lambda: _together(bundles))
    sizes = [bundle.part.count for bundle in bundles]
    gamma = _blocks([np.asarray(np.kron(g, np.eye(c))) for g, c in zip(gammas, sizes, strict=True)])
    E = []
    for i, bundle in enumerate(bundles):
        for one in _directions(bundle.free):
            parts = [np.zeros((b.q * b.part.count,) * 2) for b in bundles]
            parts[i] = np.kron(one, np.eye(sizes[i]))
            E.append(_blocks(parts))
    return slopes.expected(design.n, C, H, sigma2, gamma, np.stack(E))


def _count(bundle: Bundle) -> int:
    return bundle.q + int(bundle.free.sum())


def _directions(free: Array) -> Array:
    """(d, q, q) the matrices whose multiples add up to Γ: variances, then free covariances."""
    q = len(free)
    out = [np.diag(row) for row in np.eye(q)]
    for i, j in zip(*np.nonzero(free), strict=True):
        pair = np.zeros((q, q))
        pair[i, j] = pair[j, i] = 1.0
        out.append(pair)
    return np.stack(out)


def _cells(bundle: Bundle) -> tuple[Array, Array]:
    """U_g'U_g (G, q, q) and U_g'Q_g (G, q, p)."""

    def make() -> tuple[Array, Array]:
        U, part = bundle.columns, bundle.part
        C = np.stack([part.sums(u[:, None] * U) for u in U.T], axis=1)
        H = np.stack([part.sums(u[:, None] * bundle.design.Q) for u in U.T], axis=1)
        return C, H

    return kept(bundle.design, ("cells", bundle.part.key, *(p.key for p in bundle.pieces)), make)


def _together(bundles: list[Bundle]) -> tuple[Array, Array]:
    """Z'Z (1, q, q) and Z'Q (1, q, p) of every random effect of every level."""
    from scipy import sparse

    columns = []
    for bundle in bundles:
        n = bundle.design.n
        for u in bundle.columns.T:
            place = (np.arange(n), bundle.part.codes)
            columns.append(sparse.csr_array((u, place), shape=(n, bundle.part.count)))
    Z = sparse.csc_array(sparse.hstack(columns))
    return np.asarray((Z.T @ Z).toarray())[None], np.asarray(Z.T @ bundles[0].design.Q)[None]


def _blocks(parts: list[Array]) -> Array:
    from scipy import linalg

    return np.asarray(linalg.block_diag(*parts))
