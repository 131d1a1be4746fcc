"""Intercepts of levels that cut across one another, at any number of rows."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.base import Pieces
from clingstone.covariance.pieces import GroupPiece, Piece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import newton, reml
from clingstone.maths.basis import Gram
from clingstone.maths.crossed import DENSE, Cells
from clingstone.maths.once import Array, kept, once
from clingstone.maths.search import Flags, Optimum, slack
from clingstone.needs import NotSupported, memory

SMALL = 150  # cells beside the largest level up to which the plain search, from many starts, is quick
CELLS = 20_000  # … beyond which even a sparse factor may fill up


@dataclass(frozen=True, eq=False)
class Crossed(Pieces):
    """Intercepts of two levels or more that do not all nest."""

    @property
    @once
    def order(self) -> tuple[int, ...]:
        """Places of the pieces, the level with most cells first."""
        counts = [piece.part.count for piece in self.pieces if isinstance(piece, GroupPiece)]
        return tuple(int(i) for i in np.argsort([-c for c in counts], kind="stable"))

    @property
    @once
    def cells(self) -> Cells:
        parts = [piece.part for piece in self.pieces if isinstance(piece, GroupPiece)]
        return Cells(tuple(parts[i] for i in self.order), self.design.root, self.design.Q)

    def _ratios(self, theta: Array) -> Array:
        found = [float(p.variance(self.own(p, theta)[:, None])[0]) for p in self.pieces]
        return np.array([found[i] for i in self.order])

    def _sums(self, response: Response) -> Array:
        cells = self.cells
        key = ("crossed", *(part.key for part in cells.parts))
        return kept(response, key, lambda: cells.sums(response.residual))

    def gram(self, theta: Array, response: Response) -> Gram:
        base = reml.independent(self.design.p, response.ss)
        return self.cells.gram(self._ratios(np.asarray(theta, dtype=float)), base, self._sums(response))

    def whiten(self, theta: Array, block: Array) -> Array:
        if self.cells.rest > DENSE:
            raise NotSupported(
                f"{self.cells.rest:,} cells beside the largest level are too many to whiten rows by",
                "Use the cluster-robust remedies, or fewer levels.",
            )
        return self.cells.whiten(self._ratios(np.asarray(theta, dtype=float)), block)

    def minimum(self, response: Response, m: int, warm: Optimum | None) -> Optimum | None:
        """Quasi-Newton steps in ln λ with the exact gradient; small tables take the plain search."""
        cells = self.cells
        if cells.rest <= SMALL or cells.rest > DENSE:
            return None
        base, TE = reml.independent(self.design.p, response.ss), self._sums(response)
        back = np.argsort(self.order)
        low = np.array([self.parameters[i].low for i in self.order])

        def search(start: Array, zero: Flags) -> newton.Minimum:
            def f(u: Array) -> tuple[float, Array]:
                ratios = np.exp(low)
                ratios[~zero] = np.exp(u)
                value, slope = cells.criterion(ratios, base, TE, m)
                return value, slope[~zero]

            # q cells tell ln λ to about √(2/q).
            unit = np.sqrt(2 / np.array(cells.counts, dtype=float))
            return newton.descend(f, start[~zero], unit[~zero], low[~zero])

        start = (
            warm.start[list(self.order)]
            if warm is not None
            else self._start(TE[:, 0] / np.sqrt(float(response.s2[0])))
        )
        zero = np.zeros(len(low), dtype=bool)
        found = search(start, zero)
        u, value, calls, done = found.x, found.value, found.calls, found.converged
        for k in np.flatnonzero(u - low < 14).tolist():
            # Near zero (λc below 0.01) the slope in ln λ fades: the fit without the level is compared.
            out = zero.copy()
            out[k] = True
            again = search(u, out)
            calls += again.calls
            if again.value <= value + slack(value) + 1e-6:
                zero, value, done = out, again.value, again.converged
                u = np.where(out, low, 0.0)
                u[~out] = again.x
        theta = u[back]
        value = float(reml.criterion(self.gram(theta, response.column(0)), m)[0])
        return Optimum(
            theta, value, zero[back], done, (f"{calls} evaluations",), np.eye(len(u)), found.x[back]
        )

    def _start(self, TE: Array) -> Array:
        """ln λ by moments: how far the sums of each level spread beyond what rows of no level would.

        TE (q,) : sums of residuals in units of their standard deviation.
        """
        cells, m = self.cells, float(self.design.m)
        out = []
        for end, count in zip(np.cumsum(cells.counts), cells.counts, strict=True):
            between = float(np.sum(TE[end - count : end] ** 2)) / m
            out.append(np.log(max(between - 1, 0.1) * count / m))
        return np.array(out)


def crossed(design: Design, pieces: Sequence[Piece]) -> Crossed | None:
    """The algebra of intercepts of any levels, or None where something else is among them.

    Raises NotSupported where the levels beside the largest have too many cells together.
    """
    if len(pieces) < 2 or not all(isinstance(piece, GroupPiece) for piece in pieces):
        return None
    made = Crossed(design, tuple(pieces))
    rest = made.cells.rest
    if rest > CELLS:
        raise NotSupported(
            f"the levels beside the largest have {rest:,} cells, and they cut across it; "
            f"at most {CELLS:,} can be fitted together",
            "Fit one level at a time, or use cluster-robust standard errors.",
        )
    if rest <= DENSE:
        memory(4 * 8.0 * rest**2, f"intercepts of {rest:,} cells that cut across another level")
    return made
