"""Many columns at once: the criterion on a shared grid of θ, then a local polynomial per column.

All B columns share the design, so V(θ) is factored once per node and serves them all. Around each
column's best node a polynomial of degree four in each coordinate goes through 5 (5 × 5) nodes, and
its minimum is θ̂.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array
from clingstone.maths.search import Axis, slack

# At nodes θ (d, K): −2ℓ_R (K, B) and ln c (K, B), c the generalised residual sum of squares.
Surface = Callable[[Array], tuple[Array, Array]]

WIDTH = 5
_LOCAL = np.linalg.inv(np.vander(np.arange(WIDTH) - 2.0, increasing=True))  # node values → coefficients


@dataclass(frozen=True, eq=False)
class Columns:
    """θ̂ (d, B), −2ℓ_R (B,), ln c (B,) and the coordinates at a bound (d, B)."""

    theta: Array
    value: Array
    log_rss: Array
    at_bound: npt.NDArray[np.bool_]


def minimise_columns(surface: Surface, axes: Sequence[Axis]) -> Columns:
    """Minimum per column over one or two axes.

    Nodes are each axis' uniform ``scan``, and ``low`` besides where a component can vanish. A best
    node at an end of the scan, or at ``low``, is a bound. One axis is refined once: the intervals that
    hold a minimum are cut into eight.
    """
    nodes = [np.array(a.scan) for a in axes]
    if len(axes) == 1:
        nodes[0] = _refined(surface, axes[0], nodes[0])
    vanish = [a.vanishes for a in axes]
    best: Columns | None = None
    for out in itertools.product(*((False, True) if v else (False,) for v in vanish)):
        free = [i for i, gone in enumerate(out) if not gone]
        lists = [nodes[i] if i in free else np.array([axes[i].low]) for i in range(len(axes))]
        found = _face(surface, lists, free, np.array(out))
        best = found if best is None else _better(best, found)
    assert best is not None
    return best


def _refined(surface: Surface, axis: Axis, scan: Array) -> Array:
    """A finer uniform scan over the stretch of the axis that holds the columns' minima."""
    value, _ = surface(scan[None, :])
    at = value.argmin(axis=0)
    low, high = scan[max(int(at.min()) - 1, 0)], scan[min(int(at.max()) + 1, len(scan) - 1)]
    step = (scan[1] - scan[0]) / 4
    count = max(WIDTH, round((high - low) / step) + 1)
    return np.linspace(low, high, count)


def _better(one: Columns, other: Columns) -> Columns:
    """Per column the lower criterion; where equal, the one with a component left out."""
    take = other.value <= one.value + slack(float(np.abs(one.value).max()))
    return Columns(
        np.where(take, other.theta, one.theta),
        np.where(take, other.value, one.value),
        np.where(take, other.log_rss, one.log_rss),
        np.where(take, other.at_bound, one.at_bound),
    )


def _face(surface: Surface, lists: list[Array], free: list[int], out: npt.NDArray[np.bool_]) -> Columns:
    """The minimum over one face of the box: free coordinates on their scan, the others at ``low``."""
    mesh = np.stack([m.ravel() for m in np.meshgrid(*lists, indexing="ij")])
    flat, flat_rss = surface(mesh)
    B = flat.shape[1]
    sizes = [len(lists[i]) for i in free]
    value, log_rss = flat.reshape(*sizes, B), flat_rss.reshape(*sizes, B)
    theta = np.repeat(np.array([x[0] for x in lists])[:, None], B, axis=1)
    bound = np.repeat(out[:, None], B, axis=1)
    if not free:
        return Columns(theta, value.reshape(B), log_rss.reshape(B), bound)
    at = np.stack(np.unravel_index(value.reshape(-1, B).argmin(axis=0), sizes))  # (f, B)
    start = np.clip(at - WIDTH // 2, 0, np.array(sizes)[:, None] - WIDTH)
    coefficients = _patch(value, start)
    local = _minimum(coefficients, at - start - 2)
    best = _evaluate(coefficients, local)
    log_c = _evaluate(_patch(log_rss, start), local)
    for row, i in enumerate(free):
        step = lists[i][1] - lists[i][0]
        theta[i] = lists[i][start[row]] + (local[row] + 2) * step
        end = step * 1e-3
        bound[i] = (theta[i] < lists[i][0] + end) | (theta[i] > lists[i][-1] - end)
    return Columns(theta, best, log_c, bound)


def _patch(values: Array, start: npt.NDArray[np.int64]) -> Array:
    """Polynomial coefficients through the WIDTH^f nodes from ``start``: (WIDTH, …, B)."""
    B = values.shape[-1]
    window = np.arange(WIDTH)
    column = np.arange(B)
    if len(start) == 1:
        return np.asarray(np.einsum("ka,ab->kb", _LOCAL, values[start[0] + window[:, None], column]))
    rows = (start[0] + window[:, None])[:, None, :]
    columns = (start[1] + window[:, None])[None, :, :]
    nodes = values[rows, columns, column[None, None, :]]
    return np.asarray(np.einsum("ka,lc,acb->klb", _LOCAL, _LOCAL, nodes))


def _powers(t: Array) -> Array:
    return np.stack([t**k for k in range(WIDTH)])


def _evaluate(coefficients: Array, t: Array) -> Array:
    """The polynomial of each column at its own t (f, B)."""
    if len(t) == 1:
        return np.asarray(np.einsum("kb,kb->b", coefficients, _powers(t[0])))
    return np.asarray(np.einsum("klb,kb,lb->b", coefficients, _powers(t[0]), _powers(t[1])))


def _minimum(coefficients: Array, at: Array) -> Array:
    """Each column's minimum within one step of its best node ``at`` (f, B), by shrinking grids."""
    low, high = np.maximum(at - 1.0, -2.0), np.minimum(at + 1.0, 2.0)
    f, B = at.shape
    fine = 9 if f == 1 else 5
    t = at.astype(float)
    half = (high - low) / 2
    # Each round keeps one grid step to either side of the best point: 12 rounds give about 1e-7 steps.
    for _ in range(12 if f == 1 else 18):
        ticks = np.linspace(-1, 1, fine)
        moves = np.stack([m.ravel() for m in np.meshgrid(*[ticks] * f, indexing="ij")])  # (f, fine^f)
        trial = np.clip(t[:, None, :] + moves[:, :, None] * half[:, None, :], low[:, None], high[:, None])
        value = np.stack([_evaluate(coefficients, trial[:, k]) for k in range(trial.shape[1])])
        pick = value.argmin(axis=0)
        t = trial[:, pick, np.arange(B)]
        half = half * (2 / (fine - 1)) if f == 1 else half * 0.6
    return t
