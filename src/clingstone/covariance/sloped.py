"""Random slopes: levels that nest one another, each with an intercept and the slopes that vary there."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from clingstone.covariance.base import Pieces
from clingstone.covariance.bundles import Bundle, SlopePiece
from clingstone.covariance.pieces import GroupPiece, Piece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import newton, reml, slopes
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition
from clingstone.maths.search import Optimum, slack

ONE_START = 5000  # groups from which the search starts once, where one over some of them ended
SOME = 1000  # how many these are, or a few more


@dataclass(frozen=True, eq=False)
class Sloped(Pieces):
    """Bundles at levels that nest one another, finest first; rows beyond them are independent."""

    levels: tuple[Bundle, ...] = field(default=())

    @property
    @once
    def _functions(self) -> tuple[tuple[str, ...], tuple[tuple[int, ...], ...]]:
        """Distinct functions over all levels, and which of them each level uses."""
        names: list[str] = []
        at = []
        for bundle in self.levels:
            own = [_function(piece) for piece in bundle.pieces]
            names += [name for name in own if name not in names]
            at.append(tuple(names.index(name) for name in own))
        return tuple(names), tuple(at)

    @property
    @once
    def _columns(self) -> Array:
        """(n, r) the distinct functions, on the scale of the basis."""
        names, _ = self._functions
        by_name = {
            _function(piece): u
            for bundle in self.levels
            for piece, u in zip(bundle.pieces, bundle.columns.T, strict=True)
        }
        return np.column_stack([by_name[name] for name in names])

    def _block(self, response: Response) -> slopes.Block:
        """What each cell of the finest level amounts to."""
        part, U, key = self.levels[0].part, self._columns, ("functions", *self._functions[0])
        r = U.shape[1]

        def sums(block: Array) -> Array:
            """(r, k, G) of Z'(u ∘ block) for every function u, no copy of the block being made."""
            return np.stack([_turned(part, u, block) for u in U.T])

        def of_design() -> tuple[Array, Array]:
            return sums(U).reshape(r, r, part.count), sums(self.design.Q)

        def of_response() -> Array:
            return sums(response.residual)

        UU, UQ = kept(self.design, (*key, part.key), of_design)
        return slopes.Block(UU, UQ, kept(response, (*key, part.key), of_response))

    @property
    @once
    def _up(self) -> tuple[Partition, ...]:
        parts = [bundle.part for bundle in self.levels]
        return tuple(
            Partition(f"{low.key}>{high.key}", low.parent(high), high.labels) for low, high in pairwise(parts)
        )

    def gram(self, theta: Array, response: Response) -> Gram:
        theta = np.asarray(theta, dtype=float)
        return self._gram([bundle.L(self.joined(bundle, theta)) for bundle in self.levels], response)

    def _gram(self, factors: Sequence[Array], response: Response) -> Gram:
        gram, block = reml.independent(self.design.p, response.ss), self._block(response)
        for step, (L, at) in enumerate(zip(factors, self._functions[1], strict=True)):
            gram = slopes.lower(gram, block, L, at)
            if step < len(self._up):
                block = block.shrunk(L, at).lifted(self._up[step])
        return gram

    def whiten(self, theta: Array, block: Array) -> Array:
        """A square root of V⁻¹ applied to (n, k) rows on the scale of the basis, level by level."""
        U, out = self._columns.copy(), np.array(block, dtype=float)
        for bundle, at in zip(self.levels, self._functions[1], strict=True):
            L = bundle.L(self.joined(bundle, theta))
            both = slopes.whiten(bundle.part, U[:, list(at)] @ L, np.hstack([U, out]))
            U, out = both[:, : U.shape[1]], both[:, U.shape[1] :]
        return out

    # ---- the optimum, in the entries of L -------------------------------------------------------------

    def minimum(self, response: Response, m: int, warm: Optimum | None) -> Optimum | None:
        """Quasi-Newton steps in the entries of every L, where a zero variance is no wall.

        The gradient is exact for one level, by differences for several.
        """
        one = self._exact if len(self.levels) == 1 else self._differenced
        f = one(response.column(0), m)
        unit, diagonal = self._units(response)
        # One start is enough where many cells make the criterion all but quadratic.
        many = self.levels[0].part.count > ONE_START
        starts = [np.where(diagonal, size * unit, 0.0) for size in ((1.0,) if many else (1.0, 0.2))]
        if warm is not None:
            starts = [self._entries(warm.start)]
        elif many and len(self.levels) == 1:
            starts = [newton.descend(self._some(response.column(0)), starts[0], unit).x]
        runs = [newton.descend(f, start, unit) for start in starts]
        best = min(runs, key=lambda run: run.value)
        agree = sum(run.value <= best.value + 1e-3 for run in runs)
        note = f"{sum(r.calls for r in runs)} evaluations, {agree} of {len(runs)} starts reached the optimum"
        reached = self._theta(best.x)
        value, theta, bound = self._settle(reached, response, m)
        return Optimum(theta, value, bound, best.converged, (note,), np.eye(len(theta)), reached)

    @property
    @once
    def _places(self) -> tuple[tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]], ...]:
        """Rows and columns of the free entries of each level's L."""
        found = (np.nonzero(b.free | np.eye(b.q, dtype=bool)) for b in self.levels)
        return tuple((rows, columns) for rows, columns in found)

    def _factors(self, entries: Array) -> list[Array]:
        """L of every level from the free entries of all."""
        out, start = [], 0
        for bundle, place in zip(self.levels, self._places, strict=True):
            L = np.zeros((bundle.q, bundle.q))
            L[place] = entries[start : start + len(place[0])]
            out.append(L)
            start += len(place[0])
        return out

    def _entries(self, theta: Array) -> Array:
        pairs = zip(self.levels, self._places, strict=True)
        return np.concatenate([b.L(self.joined(b, theta))[place] for b, place in pairs])

    def _theta(self, entries: Array) -> Array:
        """Working parameters, in the order of the pieces."""
        out = np.empty(len(self.parameters))
        for bundle, L in zip(self.levels, self._factors(entries), strict=True):
            own, start = bundle.theta(L), 0
            for piece in bundle.pieces:
                where = self.slices[piece.key]
                out[where] = own[start : start + where.stop - where.start]
                start += where.stop - where.start
        return out

    def _units(self, response: Response) -> tuple[Array, npt.NDArray[np.bool_]]:
        """The size of each entry that its mean cell can show, and which entries are on a diagonal."""
        units, diagonals = [], []
        UU = self._block(response).UU
        rows = UU.sum(axis=2)
        for bundle, at, place in zip(self.levels, self._functions[1], self._places, strict=True):
            mean = np.array([rows[i, i] for i in at]) / bundle.part.count
            units.append(1 / np.sqrt(mean[place[0]]))
            diagonals.append(place[0] == place[1])
        return np.concatenate(units), np.concatenate(diagonals)

    def _exact(self, column: Response, m: int) -> newton.Function:
        block, base = self._block(column), reml.independent(self.design.p, column.ss)

        def f(entries: Array) -> tuple[float, Array]:
            value, slope = slopes.criterion(base, block, self._factors(entries)[0], m)
            return value, slope[self._places[0]]

        return f

    def _some(self, column: Response) -> newton.Function:
        """The criterion of some cells alone, whose minimum lies near that of all."""
        part, block = self.levels[0].part, self._block(column)
        every = part.count // SOME
        rows = np.flatnonzero(part.codes % every == 0)
        Q, e = self.design.Q[rows], column.residual[rows]
        size, turn = np.linalg.eigh(Q.T @ Q)
        turn = turn[:, size > 1e-8 * size[-1]]  # of columns that vary over other cells alone nothing is left
        Q = Q @ turn
        base = Gram(Q.T @ Q, Q.T @ e, np.einsum("ij,ij->j", e, e), 0.0)
        UQ = np.einsum("qpg,pk->qkg", block.UQ[..., ::every], turn)
        few = slopes.Block(block.UU[..., ::every], UQ, block.UE[..., ::every])

        def f(entries: Array) -> tuple[float, Array]:
            value, slope = slopes.criterion(base, few, self._factors(entries)[0], len(rows) - turn.shape[1])
            return value, slope[self._places[0]]

        return f

    def _differenced(self, column: Response, m: int) -> newton.Function:
        def value(entries: Array) -> float:
            return float(reml.criterion(self._gram(self._factors(entries), column), m)[0])

        unit, _ = self._units(column)

        def f(entries: Array) -> tuple[float, Array]:
            return value(entries), reml.gradient(lambda z: value(z * unit), entries / unit) / unit

        return f

    def _settle(self, theta: Array, response: Response, m: int) -> tuple[float, Array, newton.Flags]:
        """Components that are as good left out are; correlations at ±1 are at their bound."""

        def value(at: Array) -> float:
            return float(reml.criterion(self.gram(at, response.column(0)), m)[0])

        here = value(theta)
        bound = np.zeros(len(theta), dtype=bool)
        for piece in self.pieces:
            place = self.slices[piece.key].start
            first = piece.parameters[0]
            if theta[place] - first.low > 12:
                continue
            out = theta.copy()
            out[place] = first.low
            less = value(out)
            if less <= here + slack(here):
                theta, here, bound[place] = out, less, True
        for place, parameter in enumerate(self.parameters):
            bound[place] |= theta[place] >= parameter.high - 1e-4
            bound[place] |= not parameter.vanishes and theta[place] <= parameter.low + 1e-4
        for piece in self.pieces:
            # A correlation with what is not there has no value.
            for j, key in enumerate(piece.earlier if isinstance(piece, SlopePiece) else ()):
                bound[self.slices[piece.key].start + 1 + j] |= bound[self.slices[key].start]
        return here, theta, bound


def _function(piece: Piece) -> str:
    return f"{'apart ' if piece.apart else ''}{piece.x}" if isinstance(piece, SlopePiece) else ""


def _turned(part: Partition, u: Array, block: Array) -> Array:
    """(k, G) Z'(u ∘ block)."""
    from scipy import sparse

    n = part.n
    Z = sparse.csc_array((u, part.codes, np.arange(n + 1, dtype=np.int32)), shape=(part.count, n))
    return np.ascontiguousarray(np.asarray(Z @ block).T)


def sloped(design: Design, pieces: Sequence[Piece]) -> Sloped | None:
    """The algebra of intercepts and slopes of levels that nest, or None when they do not."""
    if not all(isinstance(piece, GroupPiece | SlopePiece) for piece in pieces):
        return None
    plain = Pieces(design, tuple(pieces))
    keys = dict.fromkeys(p.part.key for p in pieces if isinstance(p, GroupPiece | SlopePiece))
    bundles = sorted((plain.bundle(key) for key in keys), key=lambda b: -b.part.count)
    if any(high.part.relation(low.part) != "nests" for low, high in pairwise(bundles)):
        return None
    return Sloped(design, tuple(pieces), tuple(bundles))
