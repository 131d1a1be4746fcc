"""Profile intervals where one level of intercepts is all that varies: λ = x² alone is searched.

At x the region D ≤ D̂ + κ is an interval of u = ln σ². With N the count that goes with σ² and r(x) what is
left of κ once u is at its best, ln(c/N), its ends are u = ln(c/N) − ln v, v the two roots of
v − ln v = 1 + r/N (branches of Lambert's W). The end of an interval is then the largest or smallest
2a ln x + u over x: a = 1 for the variance between groups, 0 for that of the rows.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import special

from clingstone.maths.once import Array, once

REACH = np.geomspace(1e-5, 1e5, 60)  # how far from the optimum the region may end, on the scale of x
NODES = 17
ROUNDS = 7  # each narrows the search by eight


@dataclass(frozen=True, eq=False)
class Line:
    """parts : x (K,) → D without its terms in σ², and c, both (K,). count : N. best : x at the optimum."""

    parts: Callable[[Array], tuple[Array, Array]]
    count: float
    best: float
    cut: float

    def ends(self) -> Array:
        """(2, 2) the smallest and largest σ², then x²σ²; NaN where the region does not end."""
        low, high, zero = self._bracket()
        if not np.isfinite(high):
            return np.full((2, 2), np.nan)
        power, side = np.array([0, 0, 1, 1]), np.array([-1.0, 1.0, -1.0, 1.0])
        lows, highs = np.full(4, low), np.full(4, high)
        for _ in range(ROUNDS):
            x = np.linspace(lows, highs, NODES)
            room, level = (part.reshape(x.shape) for part in self._room(x.ravel()))
            edge = -np.exp(-1 - np.maximum(room, 0) / self.count)
            # −W₀ is the smaller root v, that of the larger u.
            v = -np.where(side > 0, special.lambertw(edge, 0).real, special.lambertw(edge, -1).real)
            value = level - np.log(v) + 2 * power * np.log(np.maximum(x, 1e-150))
            value = np.where(room >= 0, side * value, -np.inf)
            best = value.argmax(axis=0)
            at, width = x[best, range(4)], (highs - lows) / (NODES - 1)
            lows, highs = np.maximum(at - width, 0.0), at + width
        out = np.exp(side * value[best, range(4)]).reshape(2, 2)
        if zero:
            out[1, 0] = 0.0
        return np.asarray(out)

    def _room(self, x: Array) -> tuple[Array, Array]:
        """What is left of κ above x once u is at its best, and that u."""
        fixed, c = self.parts(x)
        level = np.log(c / self.count)
        return self.cut - (fixed + self.count * (level + 1) - self._least), level

    @property
    @once
    def _least(self) -> float:
        fixed, c = self.parts(np.array([self.best]))
        return float(fixed[0] + self.count * (np.log(c[0] / self.count) + 1))

    def _bracket(self) -> tuple[float, float, bool]:
        """x between which the region lies, and whether it holds x = 0."""
        steps = (self.best if self.best > 0 else 1.0) * REACH
        left = np.append(self.best - steps[steps < self.best], 0.0)
        right = self.best + steps
        out = self._room(np.concatenate([left, right]))[0] < 0
        short, beyond = out[: len(left)], out[len(left) :]
        low = float(left[short.argmax()]) if short.any() else 0.0
        return low, float(right[beyond.argmax()]) if beyond.any() else np.inf, not short[-1]
