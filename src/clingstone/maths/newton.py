"""The minimum of a smooth function whose gradient is known, in few evaluations.

Limited-memory quasi-Newton steps (Byrd, Lu, Nocedal & Zhu 1995) bring the search near; Newton steps with
the curvature measured there, by differences of the gradient, bring it to rest and say whether it did.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import optimize

from clingstone.maths.once import Array

Flags = npt.NDArray[np.bool_]
Function = Callable[[Array], tuple[float, Array]]
NEAR = {"ftol": 1e-9, "gtol": 1e-4, "maxiter": 100, "maxls": 30}
NEWTON = 6
SMALL = 1e-8  # a Newton decrement (twice the fall still expected) at which the search is over
ENOUGH = 1e-5  # … at which it counts as arrived when no step brings the value down any more
BEYOND = 1e300  # the value where the function cannot be evaluated


@dataclass(frozen=True, eq=False)
class Minimum:
    """x (d,), the value there, the curvature (d, d), whether the search came to rest, evaluations."""

    x: Array
    value: float
    curvature: Array
    converged: bool
    calls: int


def descend(f: Function, start: Array, scale: Array | float = 1.0, low: Array | None = None) -> Minimum:
    """The minimum of f from one start.

    scale : lengths on which f changes by one or so, (d,) or one for all. low : (d,) lower bounds, at which
    a coordinate may come to rest.
    """
    unit = np.broadcast_to(np.asarray(scale, dtype=float), start.shape)
    counted = _Counted(f, unit)
    bounds = None if low is None else [(b / u, None) for b, u in zip(low, unit, strict=True)]
    search: Any = optimize.minimize  # its published types leave this form of call out
    near = search(counted, start / unit, jac=True, method="L-BFGS-B", bounds=bounds, options=NEAR)
    floor = np.full(len(start), -np.inf) if low is None else low / unit
    x, value, H, arrived = _rest(counted, np.asarray(near.x, dtype=float), floor)
    return Minimum(x * unit, value, H / np.outer(unit, unit), arrived, counted.calls)


def _rest(f: _Counted, x: Array, floor: Array) -> tuple[Array, float, Array, bool]:
    """Newton steps until the fall still expected is nothing."""
    value, slope = f(x)
    H = _curvature(f, x, slope)
    for _ in range(NEWTON):
        free = ~((x <= floor) & (slope >= 0))
        if not free.any():
            return x, value, H, True
        step = np.zeros_like(x)
        size, U = np.linalg.eigh(H[np.ix_(free, free)])
        flat = np.maximum(np.abs(size), 1e-10 * np.abs(size).max(initial=1e-300))
        step[free] = -(U @ ((U.T @ slope[free]) / flat))
        decrement = -float(step @ slope)
        if decrement < SMALL:
            return (*_settled(f, x, floor, free, (U, flat), slope), H, True)
        for shrink in (1.0, 0.3, 0.1, 0.01):
            trial = np.maximum(x + shrink * step, floor)
            new, after = f(trial)
            if new < value:
                break
        else:
            return x, value, H, decrement < ENOUGH
        x, value, slope = trial, new, after
        if decrement > 1e-3:
            H = _curvature(f, x, slope)
    return x, value, H, False


def _settled(
    f: _Counted, x: Array, floor: Array, free: Flags, curvature: tuple[Array, Array], slope: Array
) -> tuple[Array, float]:
    """The last two steps, which lead to where rounding ends: values no longer tell better from worse."""
    U, flat = curvature
    for _ in range(2):
        step = np.zeros_like(x)
        step[free] = -(U @ ((U.T @ slope[free]) / flat))
        x = np.maximum(x + step, floor)
        value, slope = f(x)
    return x, value


def _curvature(f: _Counted, x: Array, slope: Array) -> Array:
    """Second derivatives by forward differences of the gradient."""
    d = len(x)
    H = np.empty((d, d))
    for i in range(d):
        h = 1e-5 * max(1.0, abs(x[i]))
        ahead = x.copy()
        ahead[i] += h
        H[i] = (f(ahead)[1] - slope) / h
    return np.asarray((H + H.T) / 2)


class _Counted:
    """The function of x/scale, counted, and very large where it cannot be evaluated."""

    def __init__(self, f: Function, unit: Array) -> None:
        self.f, self.unit, self.calls = f, unit, 0
        self.last: tuple[Array, tuple[float, Array]] | None = None

    def __call__(self, x: Array) -> tuple[float, Array]:
        if self.last is None or not np.array_equal(self.last[0], x):
            self.last = np.array(x, dtype=float), self._at(x)
        return self.last[1]

    def _at(self, x: Array) -> tuple[float, Array]:
        self.calls += 1
        try:
            value, slope = self.f(x * self.unit)
        except np.linalg.LinAlgError:
            return BEYOND, np.zeros_like(x)
        if not (np.isfinite(value) and np.all(np.isfinite(slope))):
            return BEYOND, np.zeros_like(x)
        return float(value), np.asarray(slope) * self.unit
