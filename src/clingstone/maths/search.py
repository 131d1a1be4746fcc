"""The minimum of a smooth criterion over a box, with its boundaries told apart.

One coordinate: a scan, then Brent's method in every promising bracket. Several: L-BFGS-B from the
best of a product of starts, each vanishing component tried at zero, then Newton steps. Slopes are central
differences where the criterion does not bring its own.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt
from scipy import optimize

from clingstone.maths.once import Array
from clingstone.maths.reml import gradient, hessian

Criterion = Callable[[Array], float]
_TIGHT: Any = {"ftol": 1e-13, "gtol": 1e-6, "maxiter": 200}
Flags = npt.NDArray[np.bool_]


class Axis(Protocol):
    """One coordinate: its bounds, starts, a uniform scan, and whether ``low`` means "not there"."""

    @property
    def name(self) -> str: ...
    @property
    def low(self) -> float: ...
    @property
    def high(self) -> float: ...
    @property
    def starts(self) -> tuple[float, ...]: ...
    @property
    def scan(self) -> tuple[float, ...]: ...
    @property
    def vanishes(self) -> bool: ...


@runtime_checkable
class Steep(Protocol):
    """A criterion with its gradient (d,) and a definite (d, d) close to its second derivatives."""

    def __call__(self, theta: Array) -> float: ...
    def gradient(self, theta: Array) -> Array: ...
    def information(self, theta: Array) -> Array: ...


@dataclass(frozen=True, eq=False)
class Optimum:
    """θ̂ (d,), the criterion there, which coordinates are at a bound, and how the search ended.

    curvature (d, d), start (d,) : second derivatives, and the best point before components were put to
    zero; what a search of a similar criterion starts from.
    """

    theta: Array
    value: float
    at_bound: Flags
    converged: bool
    history: tuple[str, ...] = ()
    curvature: Array = field(default_factory=lambda: np.eye(0), repr=False)
    start: Array = field(default_factory=lambda: np.zeros(0), repr=False)


Descent = Callable[["_Counted", Array, Flags, Array], tuple[Array, float]]


def slack(value: float) -> float:
    """A difference in −2ℓ_R that rounding can make: two values this close are equal."""
    return 1e-7 + 1e-11 * abs(value)


def minimise(
    f: Criterion | Steep,
    axes: Sequence[Axis],
    *,
    warm: Optimum | None = None,
    thinned: bool = False,
) -> Optimum:
    """The smallest value of f over the box of the axes.

    warm : the optimum of a similar criterion; the search then starts from there alone, with its
    curvature. Without it the best three of the product of the axes' starts are followed, those left out
    that lie in the valley of an optimum already found.
    thinned : ``warm`` comes from a part of the data or another mean, which may not show all: other valleys
        are looked for.
    """
    if not axes:
        return Optimum(np.zeros(0), f(np.zeros(0)), np.zeros(0, dtype=bool), True)
    if len(axes) == 1:
        return _line(f, axes[0])
    return _several(f, axes, warm, thinned)


def nearby(f: Criterion | Steep, axes: Sequence[Axis], start: Array) -> Optimum:
    """The minimum in the valley of a start that is close to it: the optimum of a criterion much like f."""
    box = np.array([[a.low, a.high] for a in axes])
    free = np.ones(len(axes), dtype=bool)
    counted = _Counted(f, box)
    H = counted.curvature(start, free)
    if np.linalg.eigvalsh(H)[0] <= 0:
        theta, value = _descend(counted, start, free, box)
    else:
        theta, value = _Quasi(H)(counted, start, free, box)
    edge = (theta <= box[:, 0] + 1e-6) | (theta >= box[:, 1] - 1e-4)
    return Optimum(theta, value, edge, True, (f"{counted.calls} evaluations",))


def _line(f: Criterion, axis: Axis) -> Optimum:
    counted = _Counted(f, np.array([[axis.low, axis.high]]))

    def g(x: float) -> float:
        return counted(np.array([x]))

    nodes = np.unique([axis.low, *axis.scan, axis.high])
    values = np.array([g(x) for x in nodes])
    padded = np.concatenate([[np.inf], values, [np.inf]])
    valleys = np.flatnonzero((values <= padded[:-2]) & (values <= padded[2:]))
    valleys = valleys[np.argsort(values[valleys], kind="stable")][:3]
    best, at = float(values.min()), float(nodes[int(values.argmin())])
    for i in valleys.tolist():
        low, high = nodes[max(i - 1, 0)], nodes[min(i + 1, len(nodes) - 1)]
        found = optimize.minimize_scalar(g, bounds=(low, high), method="bounded", options={"xatol": 1e-9})
        if found.fun < best:
            best, at = float(found.fun), float(found.x)
    bound = False
    for value, x in ((values[0], axis.low), (values[-1], axis.high)):
        near = abs(at - x) < 1e-3 * (axis.high - axis.low) or axis.vanishes
        if near and value <= best + slack(best):
            best, at, bound = float(value), x, True
            break
    return Optimum(np.array([at]), float(best), np.array([bound]), True, (f"{counted.calls} evaluations",))


def _several(f: Criterion, axes: Sequence[Axis], warm: Optimum | None, thinned: bool) -> Optimum:
    box = np.array([[a.low, a.high] for a in axes])
    counted = _Counted(f, box)
    free = np.ones(len(axes), dtype=bool)
    if warm is not None:
        descend: Descent = _Quasi(warm.curvature)
        runs = [descend(counted, warm.start, free, box)]
    else:
        descend = _descend
        runs = []
        for start in _starts(counted, axes):
            known = next((run for run in runs if _valley(counted, start, *run)), None)
            runs.append(known or _descend(counted, start, free, box))
    theta, value = min(runs, key=lambda run: float(run[1]))
    if warm is None or thinned:
        # A part has been looked over all around by its own search: what it hides shows from fewer places.
        theta, value = _look_around(counted, axes, theta, value, box, 3 if thinned else 8)
    theta, value, pinned = _pin(counted, axes, theta, value, box, descend)
    edge = (theta <= box[:, 0] + 1e-6) | (theta >= box[:, 1] - 1e-4)
    theta, value, ok, curvature = _polish(counted, theta, value, ~(edge | pinned), box, warm)
    agree = sum(v <= value + 1e-3 for _, v in runs)
    note = f"{counted.calls} evaluations, {agree} of {len(runs)} starts reached the optimum"
    return Optimum(theta, value, edge | pinned, ok, (note,), curvature, runs[0][0])


class _Counted:
    """The criterion, counted, kept inside the box, and infinite where it cannot be evaluated.

    What was read at one place is known: a look around and an end of a range are often the same.
    """

    def __init__(self, f: Criterion, box: Array) -> None:
        self.f, self.box, self.known = f, box, dict[bytes, float]()

    @property
    def calls(self) -> int:
        return len(self.known)

    def __call__(self, theta: Array) -> float:
        inside = np.clip(theta, self.box[:, 0], self.box[:, 1])
        place = inside.tobytes()
        if place not in self.known:
            self.known[place] = self._read(inside)
        return self.known[place]

    def _read(self, theta: Array) -> float:
        try:
            value = self.f(theta)
        except np.linalg.LinAlgError:
            return 1e300
        return value if np.isfinite(value) else 1e300

    def gradient(self, theta: Array, free: Flags | None = None) -> Array:
        """Slopes in the free coordinates."""
        free = np.ones(len(theta), dtype=bool) if free is None else free
        if isinstance(self.f, Steep):
            try:
                return np.asarray(self.f.gradient(np.clip(theta, self.box[:, 0], self.box[:, 1]))[free])
            except np.linalg.LinAlgError:
                return np.zeros(int(free.sum()))
        return gradient(self._over(theta, free), theta[free])

    def curvature(self, theta: Array, free: Flags, step: float = 1e-3) -> Array:
        """Second derivatives in the free coordinates, or what the criterion gives for them."""
        if isinstance(self.f, Steep):
            return np.asarray(self.f.information(theta)[np.ix_(free, free)])
        return hessian(self._over(theta, free), theta[free], step)

    def _over(self, theta: Array, free: Flags) -> Criterion:
        def inner(some: Array) -> float:
            whole = theta.copy()
            whole[free] = some
            return self(whole)

        return inner


def _starts(f: Criterion, axes: Sequence[Axis]) -> list[Array]:
    grid = [np.array(s) for s in itertools.islice(itertools.product(*(a.starts for a in axes)), 81)]
    order = np.argsort([f(s) for s in grid], kind="stable")
    return [grid[i] for i in order[:3]]


def _valley(f: Criterion, start: Array, theta: Array, value: float) -> bool:
    """Whether the criterion falls all the way from a start to an optimum that is known, in a straight line.

    Following such a start down would lead to the same place.
    """
    walk = [f(start + share * (theta - start)) for share in (0.0, 0.2, 0.4, 0.6, 0.8)]
    return all(after < before for before, after in pairwise([*walk, value]))


def _descend(f: _Counted, start: Array, free: Flags, box: Array) -> tuple[Array, float]:
    """L-BFGS-B over the free coordinates."""
    if not free.any():
        return start, f(start)

    def whole(part: Array) -> Array:
        theta = start.copy()
        theta[free] = part
        return theta

    def inner(part: Array) -> float:
        return f(whole(part))

    def slope(part: Array) -> Array:
        return f.gradient(whole(part), free)

    found = optimize.minimize(
        inner,
        start[free],
        jac=slope,
        method="L-BFGS-B",
        bounds=[(float(low), float(high)) for low, high in box[free]],
        options=_TIGHT,
    )
    return whole(np.asarray(found.x)), float(found.fun)


class _Quasi:
    """Projected BFGS from a known curvature: few evaluations when the start is close."""

    def __init__(self, curvature: Array) -> None:
        self.curvature = curvature

    def __call__(self, f: _Counted, start: Array, free: Flags, box: Array) -> tuple[Array, float]:
        theta, value = start.copy(), f(start)
        slope = f.gradient(theta)
        H = f.f.information(theta) if isinstance(f.f, Steep) else self.curvature.copy()
        for _ in range(40):
            out = ((theta <= box[:, 0]) & (slope > 0)) | ((theta >= box[:, 1]) & (slope < 0))
            # A coordinate of no curvature (the range of a component of zero variance) changes nothing.
            move = free & ~out & (np.diag(H) > 1e-9 * np.diag(H).max())
            if not move.any():
                break
            step = np.zeros_like(theta)
            step[move] = -np.linalg.solve(H[np.ix_(move, move)], slope[move])
            if -float(step @ slope) < 1e-8:
                break
            for shrink in (1.0, 0.4, 0.15, 0.03):
                trial = np.clip(theta + shrink * step, box[:, 0], box[:, 1])
                new = f(trial)
                if new < value:
                    break
            else:
                break
            after = f.gradient(trial)
            s, y = trial - theta, after - slope
            if isinstance(f.f, Steep):
                H = f.f.information(trial)
            if float(s @ y) > 1e-10:
                Hs = H @ s
                H += np.outer(y, y) / float(s @ y) - np.outer(Hs, Hs) / float(s @ Hs)
            theta, value, slope = trial, new, after
        return theta, value


def _pin(
    f: _Counted, axes: Sequence[Axis], theta: Array, value: float, box: Array, descend: Descent
) -> tuple[Array, float, Flags]:
    """Components that are as good left out: their coordinate goes to ``low`` and is kept there.

    So does a coordinate to an end of its range when that is as good (a criterion that is flat out there).
    """
    pinned = np.zeros(len(axes), dtype=bool)
    for i, axis in enumerate(axes):
        for end in (axis.high,) if axis.vanishes else (axis.low, axis.high):
            out = theta.copy()
            out[i] = end
            if f(out) <= value + slack(value):
                theta, pinned[i] = out, True
        if not axis.vanishes or pinned[i]:
            continue
        out = theta.copy()
        out[i] = axis.low
        if f(out) > value + 10:
            continue
        free = ~pinned
        free[i] = False
        out, v = descend(f, out, free, box)
        if v > value + slack(value):
            continue
        back = _lower(f, axis, i, out, v)
        if back is not None:
            # The criterion falls again as the component grows: an inner minimum was missed.
            again, w = _descend(f, back, ~pinned, box)
            if w < v - slack(v):
                theta, value = again, w
                continue
        theta, value, pinned[i] = out, v, True
    return theta, value, pinned


def _look_around(
    f: _Counted, axes: Sequence[Axis], theta: Array, value: float, box: Array, places: int
) -> tuple[Array, float]:
    """Each axis scanned with the others held: a deeper valley elsewhere is followed down."""
    for i, axis in enumerate(axes):
        elsewhere = _lower(f, axis, i, theta, value, places)
        if elsewhere is not None:
            found, v = _descend(f, elsewhere, np.ones(len(axes), dtype=bool), box)
            if v < value - slack(value):
                theta, value = found, v
    return theta, value


def _lower(f: Criterion, axis: Axis, i: int, at: Array, value: float, places: int = 8) -> Array | None:
    """The lowest of some places along one axis, if it is lower than here."""
    best = None
    for x in axis.scan[:: max(1, len(axis.scan) // places)]:
        trial = at.copy()
        trial[i] = x
        v = f(trial)
        if v < value - slack(value):
            best, value = trial, v
    return best


def _polish(
    f: _Counted, theta: Array, value: float, free: Flags, box: Array, warm: Optimum | None
) -> tuple[Array, float, bool, Array]:
    """Newton steps on the free coordinates; converged when the Newton decrement is below 1e-6.

    Returns the curvature too, with that of ``warm`` (or one) for coordinates at a bound.
    """
    curvature = np.eye(len(theta)) if warm is None else warm.curvature.copy()
    if warm is not None and _arrived(f, theta, free, curvature):
        return theta, value, True, curvature
    decrement = 0.0
    for _ in range(6):
        slope, H = f.gradient(theta, free), f.curvature(theta, free)
        # A coordinate that changes nothing (the range of a component of zero variance) is left alone.
        alive = np.diag(H) > 1e-9 * np.abs(H).max(initial=0.0)
        free = free.copy()
        free[np.flatnonzero(free)[~alive]] = False
        if not free.any():
            return theta, value, True, curvature
        slope, H = slope[alive], H[np.ix_(alive, alive)]
        size, U = np.linalg.eigh(H)
        if size.min() <= 0:
            return theta, value, bool(np.abs(slope).max() < 1e-3), curvature
        curvature[np.ix_(free, free)] = H
        step = np.zeros_like(theta)
        step[free] = U @ ((U.T @ slope) / size)
        decrement = float(slope @ step[free])
        if decrement < 1e-8:
            break
        for shrink in (1.0, 0.5, 0.1):
            trial = np.clip(theta - shrink * step, box[:, 0], box[:, 1])
            v = f(trial)
            if v < value:
                theta, value = trial, v
                break
        else:
            break
    return theta, value, decrement < 1e-6, curvature


def _arrived(f: _Counted, theta: Array, free: Flags, curvature: Array) -> bool:
    """Whether the gradient alone, measured by a curvature known well enough, says that this is the end."""
    slope = f.gradient(theta, free)
    return float(slope @ np.linalg.solve(curvature[np.ix_(free, free)], slope)) < 1e-6
