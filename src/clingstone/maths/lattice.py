"""Many columns at once: the criterion on shared nodes of θ, then a local polynomial per column.

All B columns share the design, so V(θ) is factored once per node and serves them all. A coarse grid
brackets each column's minimum; a lattice four times as fine is then evaluated only around the places
where some column needs it, and a polynomial of degree four in each coordinate through 5 (5 × 5) of its
nodes gives θ̂. With three coordinates the grid is thinner (13 nodes an axis) and patches have 5 × 5 × 5
nodes.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array
from clingstone.maths.search import Axis, Flags

# At nodes θ (d, K): −2ℓ_R (K, B) and ln c (K, B), c the generalised residual sum of squares.
Surface = Callable[[Array], tuple[Array, Array]]
Places = npt.NDArray[np.int64]

WIDTH = 5  # nodes of a patch along each axis
FINER = 4  # fine nodes per coarse step
# A component whose absence costs less than this in −2ℓ_R is put at zero: ten times what the
# interpolation can be wrong by.
ABSENT = 1e-4
_LOCAL = np.linalg.inv(np.vander(np.arange(WIDTH) - 2.0, increasing=True))  # node values → coefficients


@dataclass(frozen=True, eq=False)
class Columns:
    """θ̂ (d, B), −2ℓ_R (B,), ln c (B,) and the coordinates at a bound (d, B)."""

    theta: Array
    value: Array
    log_rss: Array
    at_bound: Flags


def minimise_columns(surface: Surface, axes: Sequence[Axis]) -> Columns:
    """Minimum per column over one, two or three axes.

    Nodes are each axis' uniform ``scan``, and ``low`` besides where a component can vanish. A minimum
    at an end of the scan, or at ``low``, is a bound.
    """
    best: Columns | None = None
    for out in itertools.product(*((False, True) if a.vanishes else (False,) for a in axes)):
        found = _face(surface, axes, np.array(out))
        best = found if best is None else _better(best, found)
    assert best is not None
    return best


def _better(one: Columns, other: Columns) -> Columns:
    """Per column the lower criterion; where about equal, ``other``, which leaves a component out."""
    take = other.value <= one.value + ABSENT
    return Columns(
        np.where(take, other.theta, one.theta),
        np.where(take, other.value, one.value),
        np.where(take, other.log_rss, one.log_rss),
        np.where(take, other.at_bound, one.at_bound),
    )


def _face(surface: Surface, axes: Sequence[Axis], out: Flags) -> Columns:
    """The minimum over one face of the box: free coordinates on their scan, the others at ``low``."""
    fixed = np.array([a.low for a in axes])
    if out.all():
        value, log_rss = surface(fixed[:, None])
        B = value.shape[1]
        return Columns(
            np.repeat(fixed[:, None], B, axis=1), value[0], log_rss[0], np.repeat(out[:, None], B, axis=1)
        )
    grid = _Grid(
        surface, [np.array(a.scan) for a, gone in zip(axes, out, strict=True) if not gone], fixed, out
    )
    at = grid.coarse()
    local, value, log_rss = grid.patch(at)
    for _ in range(4):
        # A minimum at the rim of its patch is sought again around the rim, unless the scan ends there.
        moved = np.clip(at + np.round(local).astype(np.int64), 0, grid.last[:, None])
        if np.all(np.abs(local) <= 1.25) or np.array_equal(moved, at):
            break
        at = moved
        local, value, log_rss = grid.patch(at)
    inner = grid.start[:, None] + (at + local) * grid.step[:, None]
    theta = np.repeat(fixed[:, None], value.shape[0], axis=1)
    bound = np.repeat(out[:, None], value.shape[0], axis=1)
    theta[~out] = inner
    edge = 1e-3 * grid.step[:, None]
    end = grid.start[:, None] + grid.last[:, None] * grid.step[:, None]
    bound[~out] = (inner <= grid.start[:, None] + edge) | (inner >= end - edge)
    return Columns(theta, value, log_rss, bound)


class _Grid:
    """A fine lattice over the free coordinates of one face, evaluated node by node on demand."""

    def __init__(self, surface: Surface, scans: list[Array], fixed: Array, out: Flags) -> None:
        self.surface, self.fixed, self.out = surface, fixed, out
        self.sizes = np.array([len(s) for s in scans])
        self.start = np.array([s[0] for s in scans])
        self.step = np.array([(s[-1] - s[0]) / ((len(s) - 1) * FINER) for s in scans])
        self.last = (self.sizes - 1) * FINER
        self.value = np.zeros((0, 0))
        self.log_rss = np.zeros((0, 0))
        self.row = np.full(tuple(self.last + 1), -1)  # where a node's values stand, −1 if not evaluated

    def _evaluate(self, nodes: Places) -> None:
        """Values at fine nodes (f, K) that are not yet known."""
        nodes = np.unique(nodes[:, self.row[tuple(nodes)] < 0], axis=1)
        if not nodes.size:
            return
        thetas = np.repeat(self.fixed[:, None], nodes.shape[1], axis=1)
        thetas[~self.out] = self.start[:, None] + nodes * self.step[:, None]
        value, log_rss = self.surface(thetas)
        self.row[tuple(nodes)] = len(self.value) + np.arange(nodes.shape[1])
        self.value = value if not len(self.value) else np.vstack([self.value, value])
        self.log_rss = log_rss if not len(self.log_rss) else np.vstack([self.log_rss, log_rss])

    def coarse(self) -> Places:
        """(f, B) fine index of each column's minimum by the coarse nodes alone."""
        mesh = np.stack(
            [m.ravel() for m in np.meshgrid(*[np.arange(k) * FINER for k in self.sizes], indexing="ij")]
        )
        self._evaluate(mesh)
        best = self.value[self.row[tuple(mesh)]].argmin(axis=0)
        return self._interpolated(mesh[:, best])

    def _interpolated(self, at: Places) -> Places:
        """The fine node nearest to the minimum of the polynomial through coarse nodes."""
        local, middle, _, _ = self._local(at, FINER)
        fine = middle + np.round(local * FINER).astype(np.int64)
        return np.asarray(np.clip(fine, 0, self.last[:, None]))

    def patch(self, at: Places) -> tuple[Array, Array, Array]:
        """Minimum near fine nodes ``at`` (f, B): offset from them in fine steps, −2ℓ_R and ln c there."""
        local, middle, coefficients, log_c = self._local(at, 1)
        return local + (middle - at), _polynomial(coefficients, local), _polynomial(log_c, local)

    def _local(self, at: Places, stride: int) -> tuple[Array, Places, Array, Array]:
        middle = np.clip(at, 2 * stride, (self.last - 2 * stride)[:, None])
        window = (np.arange(WIDTH) - 2) * stride
        moves = np.stack([m.ravel() for m in np.meshgrid(*[window] * len(at), indexing="ij")])
        nodes = middle[:, None, :] + moves[:, :, None]  # (f, 5^f, B)
        self._evaluate(nodes.reshape(len(at), -1))
        place = self.row[tuple(nodes)], np.arange(at.shape[1])
        coefficients, log_c = _coefficients(self.value[place]), _coefficients(self.log_rss[place])
        best = moves[:, self.value[place].argmin(axis=0)] / stride
        return _minimum(coefficients, best), middle, coefficients, log_c


def _coefficients(nodes: Array) -> Array:
    """Polynomials through patches (5^f, B), rows in grid order: (5, …, 5, B)."""
    f = round(np.log(len(nodes)) / np.log(WIDTH))
    out = nodes.reshape((WIDTH,) * f + (-1,))
    for axis in range(f):
        out = np.moveaxis(np.tensordot(_LOCAL, out, axes=(1, axis)), 0, axis)
    return np.asarray(out)


def _polynomial(coefficients: Array, t: Array) -> Array:
    """The polynomial of each column at its own t (f, B)."""
    out = coefficients
    for x in t:
        out = np.einsum("k...b,kb->...b", out, np.stack([x**k for k in range(WIDTH)]))
    return out


def _minimum(coefficients: Array, start: Array) -> Array:
    """Each column's minimum over its patch [−2, 2]^f: damped Newton steps from its best node (f, B)."""
    f, B = coefficients.ndim - 1, coefficients.shape[-1]
    t, best = start, _polynomial(coefficients, start)
    slopes = [_derivative(coefficients, i) for i in range(f)]
    bends = [[_derivative(slope, j) for j in range(f)] for slope in slopes]
    damp = np.full(B, 1e-3)
    for _ in range(30):
        g = np.stack([_polynomial(slope, t) for slope in slopes])
        # A coordinate at the rim that would leave the patch is held there.
        held = ((t <= -2.0) & (g > 0)) | ((t >= 2.0) & (g < 0))
        H = np.stack([np.stack([_polynomial(bend, t) for bend in row]) for row in bends])
        trial = np.clip(t - _solve(H, g, held, damp), -2.0, 2.0)
        new = _polynomial(coefficients, trial)
        good = new < best
        t, best = np.where(good, trial, t), np.where(good, new, best)
        # Levenberg's rule: a failed step is tried again shorter and closer to steepest descent.
        damp = np.where(good, damp / 10, np.maximum(damp, 1e-4) * 10)
    return t


def _derivative(coefficients: Array, axis: int) -> Array:
    """Coefficients of the derivative along one axis, padded to the same shape."""
    moved = np.moveaxis(coefficients, axis, 0)
    out = np.zeros_like(moved)
    out[:-1] = moved[1:] * np.arange(1, WIDTH).reshape((-1,) + (1,) * (moved.ndim - 1))
    return np.moveaxis(out, 0, axis)


def _solve(H: Array, g: Array, held: Flags, damp: Array) -> Array:
    """(|H| + damp·scale)⁻¹g per column over the coordinates not held; |H| so that steps go downhill."""
    f = len(g)
    free = ~held
    H = H * (free[:, None] & free[None, :]) + np.eye(f)[:, :, None] * held[:, None]
    size, U = np.linalg.eigh(np.moveaxis(H, -1, 0))
    size = np.abs(size)
    size = size + (damp * np.maximum(size.max(axis=1), 1e-12))[:, None] + 1e-300
    inner = np.einsum("bij,ib->bj", U, g * free) / size
    return np.asarray(np.einsum("bij,bj->ib", U, inner))
