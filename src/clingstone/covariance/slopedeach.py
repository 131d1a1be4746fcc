"""Mixed models with random slopes on many columns of y, each at its own covariance parameters."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.covariance.bundles import SlopePiece
from clingstone.covariance.sloped import Sloped
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import slopeseach
from clingstone.maths.each import Grams, Minima, Places
from clingstone.maths.eachdf import SlopesEach, slopes_each
from clingstone.maths.once import Array, once
from clingstone.maths.search import slack
from clingstone.maths.slopeseach import Blocks

BLOCK = 500_000  # doubles in the largest array of one evaluation: what a cache holds
NEAR = 0.1  # part of what a mean cell can show below which a standard deviation is looked at twice


@dataclass(frozen=True, eq=False)
class SlopedEach:
    """A sloped algebra of one level or several over B columns of y; the minima need one level."""

    algebra: Sloped
    response: Response

    @property
    def design(self) -> Design:
        return self.response.design

    @property
    @once
    def _block(self) -> Blocks:
        """Cells of the finest level under independent rows, the columns of y first."""
        found = self.algebra._block(self.response)
        return Blocks(found.UU[None], found.UQ[None], np.ascontiguousarray(found.UE.transpose(1, 0, 2)))

    def _base(self, columns: Places) -> Grams:
        K, p = len(columns), self.design.p
        QQ = np.broadcast_to(np.eye(p), (K, p, p))
        return Grams(QQ, np.zeros((K, p)), self.response.ss[columns], np.zeros(K))

    @property
    def _size(self) -> int:
        """Columns that one evaluation takes at a time."""
        r, p, G = self._block.UQ.shape[1:]
        return max(1, int(BLOCK // (r * max(p + 1, r) * G)))

    def grams(self, theta: Array, columns: Places) -> Grams:
        """Grams of columns (K,) of y, each at its own θ (d, K)."""
        return Grams.in_blocks(self._grams, theta, columns, self._size)

    def slopes(self, theta: Array, columns: Places, free: Sequence[int]) -> SlopesEach:
        """What Satterthwaite's df take, at θ (d, K); free : coordinates that are not at a bound."""
        return slopes_each(lambda at: self.grams(at, columns), theta, free, self.design.m)

    def _grams(self, theta: Array, columns: Places) -> Grams:
        gram, block = self._base(columns), self._of(columns)
        algebra = self.algebra
        for step, (bundle, at) in enumerate(zip(algebra.levels, algebra._functions[1], strict=True)):
            L = bundle.factors(algebra.joined(bundle, theta))
            gram = block.lower(gram, L, at)
            if step < len(algebra._up):
                block = block.shrunk(L, at).lifted(algebra._up[step])
        return gram

    def _of(self, columns: Places) -> Blocks:
        block = self._block
        return Blocks(block.UU, block.UQ, block.UE[columns])

    # ---- the minima, in the entries of L ---------------------------------------------------------------

    def minima(self) -> Minima:
        """The REML estimates of every column: as ``Sloped.minimum``, all columns at once."""
        algebra, m = self.algebra, self.design.m
        (bundle,) = algebra.levels
        rows, across = algebra._places[0]
        unit, diagonal = algebra._units(self.response)
        size = self._size

        def f(x: Array, columns: Places) -> tuple[Array, Array]:
            value, slope = np.empty(len(x)), np.empty_like(x)
            for i in range(0, len(x), size):
                part = slice(i, i + size)
                L = np.zeros((len(x[part]), bundle.q, bundle.q))
                L[:, rows, across] = x[part]
                base, block = self._base(columns[part]), self._of(columns[part])
                value[part], gradient = slopeseach.criterion(base, block, L, m)
                slope[part] = gradient[:, rows, across]
            return value, slope

        B = self.response.B
        start = np.broadcast_to(np.where(diagonal, unit, 0.0), (B, len(unit)))
        x, value, done = slopeseach.descend(f, 0.2 * start, np.arange(B), unit)
        # A variance near zero may be one of two valleys: such columns start again from larger ones.
        edge = np.any(np.abs(x[:, diagonal]) < NEAR * unit[diagonal], axis=1)
        again = np.flatnonzero(edge | ~done)
        if len(again):
            x2, value2, done2 = slopeseach.descend(f, start[again], again, unit)
            take = value2 < value[again]
            x[again[take]], value[again[take]] = x2[take], value2[take]
            done[again[take]] = done2[take]
        theta = np.stack([algebra._theta(entries) for entries in x], axis=1)
        for b in np.flatnonzero(~done):
            # What does not come to rest is searched by itself.
            alone = algebra.minimum(self.response.column(int(b)), m, None)
            if alone is not None and alone.value <= value[b]:
                theta[:, b], done[b] = alone.start, alone.converged
        return self._settle(theta, done)

    def _settle(self, theta: Array, done: npt.NDArray[np.bool_]) -> Minima:
        """As ``Sloped._settle``."""
        algebra, m = self.algebra, self.design.m
        every = np.arange(self.response.B)
        here = self.grams(theta, every).criterion(m)
        bound = np.zeros(theta.shape, dtype=bool)
        for piece in algebra.pieces:
            place, first = algebra.slices[piece.key].start, piece.parameters[0]
            near = np.flatnonzero(theta[place] - first.low <= 12)
            if not len(near):
                continue
            out = theta[:, near].copy()
            out[place] = first.low
            less = self.grams(out, near).criterion(m)
            gone = less <= here[near] + slack(0.0) + 1e-11 * np.abs(here[near])
            theta[:, near[gone]], here[near[gone]] = out[:, gone], less[gone]
            bound[place, near[gone]] = True
        for place, parameter in enumerate(algebra.parameters):
            bound[place] |= theta[place] >= parameter.high - 1e-4
            if not parameter.vanishes:
                bound[place] |= theta[place] <= parameter.low + 1e-4
        for piece in algebra.pieces:
            # A correlation with what is not there has no value.
            for j, key in enumerate(piece.earlier if isinstance(piece, SlopePiece) else ()):
                bound[algebra.slices[piece.key].start + 1 + j] |= bound[algebra.slices[key].start]
        return Minima(theta, here, bound, done)
