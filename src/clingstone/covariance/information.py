"""Kenward and Roger's ingredients for intercepts and slopes, from what the groups add up to.

V is linear in the variances and covariances. Rows of different cells of the outermost level are
independent, so that the random effects of one such cell are a block; where levels cut across one
another the whole table is one cell.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import numpy.typing as npt

from clingstone.covariance.base import Pieces
from clingstone.covariance.bundles import Bundle, SlopePiece
from clingstone.covariance.pieces import GroupPiece
from clingstone.design.design import Design
from clingstone.maths import expected
from clingstone.maths.groups import Expected
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition

WORK = 600**3  # multiplications of one product of all blocks: one block of 600 random effects, or many small
ENTRIES = 2_000_000  # entries of all blocks
PARAMETERS = 12  # covariance parameters beyond which the ingredients are not worked out


def affordable(algebra: Pieces) -> bool:
    """Whether :func:`ingredients` works them out: the design alone decides.

    Exact for one level at any number of groups, and for several levels while the blocks of their
    outermost cells stay within ``WORK`` and ``ENTRIES``.
    """
    if not algebra.level_keys or not all(isinstance(p, GroupPiece | SlopePiece) for p in algebra.pieces):
        return False
    bundles = _bundles(algebra)
    if sum(bundle.q + int(bundle.free.sum()) for bundle in bundles) > PARAMETERS:
        return False
    if len(bundles) == 1:
        return True
    cells, width = _shape(algebra.design, bundles)
    return cells * width**3 <= WORK and cells * width**2 <= ENTRIES


def ingredients(algebra: Pieces, theta: Array, sigma2: float) -> Expected | None:
    """Expected information and what goes with it at θ (d,), or None where it would be dear."""
    found = ingredients_each(algebra, np.asarray(theta, dtype=float)[:, None], np.array([sigma2]))
    if found is None:
        return None
    return Expected(found.information[0], found.Phi[0], found.P[:, 0], found.Q[:, :, 0])


def ingredients_each(algebra: Pieces, theta: Array, sigma2: Array) -> Expected | None:
    """The same at θ (d, K) and σ² (K,), a column each: see ``expected.blocks``."""
    if not affordable(algebra):
        return None
    bundles, design = _bundles(algebra), algebra.design
    if len(bundles) == 1 and bundles[0].names == ("",):
        part = bundles[0].part
        c, count, products = kept(design, ("cells by size", part.key), lambda: _by_size(design, part))
        tau2 = algebra.variances(theta, sigma2)[bundles[0].pieces[0].key]
        return expected.intercepts(design.n, c, count, products, sigma2, tau2)
    K, width = len(sigma2), [1] * len(bundles)
    if len(bundles) == 1:
        C, H = _cells(bundles[0])
    else:
        key = ("blocks", *((b.part.key, b.names) for b in bundles))
        C, H, width = kept(design, key, lambda: _blocks(bundles))
    q = C.shape[1]
    gamma, E, start = np.zeros((K, q, q)), [], 0
    for bundle, w in zip(bundles, width, strict=True):
        end, eye = start + bundle.q * w, np.eye(w)
        for one in _directions(bundle.free):
            whole = np.zeros((q, q))
            whole[start:end, start:end] = np.kron(one, eye)
            E.append(whole)
        L = bundle.factors(algebra.joined(bundle, theta))
        between = sigma2[:, None, None] * L @ np.swapaxes(L, 1, 2)
        gamma[:, start:end, start:end] = np.kron(between, eye)
        start = end
    return expected.blocks(design.n, C, H, sigma2, gamma, np.stack(E))


def _bundles(algebra: Pieces) -> list[Bundle]:
    return [algebra.bundle(key) for key in algebra.level_keys]


def _directions(free: Array) -> Array:
    """(d, q, q) the matrices whose multiples add up to Γ: variances, then free covariances."""
    q = len(free)
    out = [np.diag(row) for row in np.eye(q)]
    for i, j in zip(*np.nonzero(free), strict=True):
        pair = np.zeros((q, q))
        pair[i, j] = pair[j, i] = 1.0
        out.append(pair)
    return np.stack(out)


def _by_size(design: Design, part: Partition) -> tuple[Array, Array, Array]:
    """Sizes (D,), how many cells have each (D,), and Σ t_g t_g' over them (D, p, p); t_g the sums of Q."""
    c, code, count = np.unique(design.sizes(part), return_inverse=True, return_counts=True)
    order, ends = np.argsort(code, kind="stable"), np.cumsum(count)
    T = design.sums(part)[order]
    return (
        c,
        count.astype(float),
        np.stack([T[e - k : e].T @ T[e - k : e] for e, k in zip(ends, count, strict=True)]),
    )


def _cells(bundle: Bundle) -> tuple[Array, Array]:
    """U_g'U_g (G, q, q) and U_g'Q_g (G, q, p)."""

    def make() -> tuple[Array, Array]:
        U, part = bundle.columns, bundle.part
        C = np.stack([part.sums(u[:, None] * U) for u in U.T], axis=1)
        H = np.stack([part.sums(u[:, None] * bundle.design.Q) for u in U.T], axis=1)
        return C, H

    return kept(bundle.design, ("cells", bundle.part.key, *(p.key for p in bundle.pieces)), make)


# ---- several levels ----


def _outermost(bundles: list[Bundle]) -> Partition | None:
    """The level whose cells hold those of every other; None where levels cut across one another."""
    parts = sorted((bundle.part for bundle in bundles), key=lambda part: part.count)
    nested = all(outer.relation(inner) == "nests" for outer, inner in pairwise(parts))
    return parts[0] if nested else None


def _places(part: Partition, outer: Partition | None) -> tuple[npt.NDArray[np.intp], int]:
    """(G,) the place of each cell among those of its outer cell, and the most that one holds."""
    if outer is None:
        return np.arange(part.count), part.count
    if outer.key == part.key:
        return np.zeros(part.count, dtype=np.intp), 1
    parent = part.parent(outer)
    held = np.bincount(parent, minlength=outer.count)
    order = np.argsort(parent, kind="stable")
    place = np.empty(part.count, dtype=np.intp)
    place[order] = np.arange(part.count) - np.repeat(np.cumsum(held) - held, held)
    return place, int(held.max())


def _shape(design: Design, bundles: list[Bundle]) -> tuple[int, int]:
    """How many blocks there are, and the random effects of the largest."""

    def make() -> tuple[int, int]:
        outer = _outermost(bundles)
        width = sum(bundle.q * _places(bundle.part, outer)[1] for bundle in bundles)
        return (1 if outer is None else outer.count), width

    return kept(design, ("shape of blocks", *((b.part.key, b.q) for b in bundles)), make)


def _blocks(bundles: list[Bundle]) -> tuple[Array, Array, list[int]]:
    """Z'Z (G, q, q) and Z'Q (G, q, p) of every block, and the cells of each level in one.

    Places that a block does not fill are columns of zeros, which no result sees.
    """
    from scipy import sparse

    design, outer = bundles[0].design, _outermost(bundles)
    at, widths, start, n = [], [], 0, design.n
    for bundle in bundles:
        place, width = _places(bundle.part, outer)
        at += [start + j * width + place[bundle.part.codes] for j in range(bundle.q)]
        widths.append(width)
        start += bundle.q * width
    cells, q = 1 if outer is None else outer.count, start
    block = np.zeros(n, dtype=np.int64) if outer is None else outer.codes.astype(np.int64)
    values = np.concatenate([bundle.columns.T for bundle in bundles]).ravel()
    where = np.concatenate([block * q + a for a in at])
    Z = sparse.csc_array((values, (np.tile(np.arange(n), len(at)), where)), shape=(n, cells * q))
    inner = sparse.coo_array(Z.T @ Z)
    C = np.zeros((cells, q, q))
    rows, columns = inner.coords
    C[rows // q, rows % q, columns % q] = inner.data
    return C, np.asarray(Z.T @ design.Q).reshape(cells, q, -1), widths
