"""Where a function comes down to zero, between a step inside and a step outside; many at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array

Places = npt.NDArray[np.int64]


@dataclass(eq=False)
class Bracket:
    """K brackets: low, where the function is ``above`` ≥ 0, and high, where it is ``below`` < 0.

    last, before : a third step and its value, NaN where there is none. All (K,).
    """

    low: Array
    above: Array
    high: Array
    below: Array
    last: Array
    before: Array

    def closed(self, f: Callable[[Places, Array], Array], close: float, most: int) -> Array:
        """(K,) low, once its value is at most ``close`` or the bracket has shrunk by 2^``most``.

        f : (which brackets, steps) → values. A log-likelihood is much like a parabola, so that the one
        through three steps soon meets zero; a bracket that this does not halve is halved next.
        """
        width = self.high - self.low
        slow = np.zeros(len(width), dtype=bool)
        for _ in range(most):
            live = np.flatnonzero((self.above > close) & (self.high - self.low > width / 2**most))
            if not len(live):
                break
            wide = self.high[live] - self.low[live]
            step = self.low[live] + wide * np.where(slow[live], 0.5, self._part(live, close / 2))
            found = f(live, step)
            ahead = found >= 0
            i, o = live[ahead], live[~ahead]
            self.last[i], self.before[i] = self.low[i], self.above[i]
            self.low[i], self.above[i] = step[ahead], found[ahead]
            self.last[o], self.before[o] = self.high[o], self.below[o]
            self.high[o], self.below[o] = step[~ahead], found[~ahead]
            slow[live] = self.high[live] - self.low[live] > wide / 2
        return self.low

    def _part(self, live: Places, aim: float) -> Array:
        """Where in each bracket the parabola, or the line where there is none, comes down to ``aim``."""
        width, above = self.high[live] - self.low[live], self.above[live]
        with np.errstate(divide="ignore", invalid="ignore"):
            t = (self.last[live] - self.low[live]) / width
            fall = self.below[live] - above
            a = (self.before[live] - above - fall * t) / (t * (t - 1))
            a = np.where(np.isfinite(a), a, 0.0)
            b, c = fall - a, above - aim
            part = 2 * c / (-b + np.sqrt(b * b - 4 * a * c))
        return np.where(np.isfinite(fall + part), np.clip(part, 0.02, 0.98), 0.5)
