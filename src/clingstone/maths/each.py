"""Many columns of y, each at covariance parameters of its own: Grams, and the minimum of each criterion.

The one-column search (``maths.search``) and this one minimise the same criterion by the same rules, so
they agree; here every step is taken for all columns at once.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields

import numpy as np
import numpy.typing as npt

from clingstone.maths import reml
from clingstone.maths.once import Array
from clingstone.maths.search import Axis, Flags, Optimum, slack

Places = npt.NDArray[np.int64]
# Criteria (K,) at θ (d, K), the k-th for column ``columns[k]`` of y.
Criteria = Callable[[Array, Places], Array]
# Criteria (B,) of all columns at one θ (d,) that they share: far cheaper than one θ each.
Shared = Callable[[Array], Array]

STEP = 3e-4  # of central differences: on scales of order one a gradient good to eight digits
SETTLED = 2e-7  # a Newton step below this is the last


@dataclass(frozen=True, eq=False)
class Grams:
    """[Q, e]'V⁻¹[Q, e] of K columns, V of each column its own, on the scale where σ² = 1.

    QQ (K, p, p) · QE (K, p) · EE (K,) · logdet (K,).
    """

    QQ: Array
    QE: Array
    EE: Array
    logdet: Array

    def reduced(self) -> tuple[Array, Array, Array]:
        """Per column: delta (K, p) on top of ordinary least squares, c (K,), ln|Q'V⁻¹Q| (K,)."""
        if self.QQ.shape[1] == 0:
            return self.QE, self.EE, np.zeros_like(self.EE)
        L: Array = np.asarray(np.linalg.cholesky(self.QQ), dtype=float)
        delta = np.asarray(np.linalg.solve(self.QQ, self.QE[..., None])[..., 0], dtype=float)
        c = self.EE - np.einsum("kp,kp->k", self.QE, delta)
        logdet = 2 * np.log(np.einsum("kpp->kp", L)).sum(axis=1)
        return delta, c, np.asarray(logdet)

    @classmethod
    def in_blocks(
        cls, made: Callable[[Array, Places], Grams], theta: Array, columns: Places, size: int
    ) -> Grams:
        """Grams of columns (K,), each at its own θ (d, K), made ``size`` columns at a time."""
        if len(columns) <= size:
            return made(theta, columns)
        starts = range(0, len(columns), size)
        parts = [made(theta[:, i : i + size], columns[i : i + size]) for i in starts]
        return cls(*(np.concatenate([getattr(g, each.name) for g in parts]) for each in fields(cls)))

    def only(self, which: Places | Flags) -> Grams:
        """Those of some columns."""
        return Grams(self.QQ[which], self.QE[which], self.EE[which], self.logdet[which])

    def criterion(self, m: int) -> Array:
        """(K,) −2ℓ_R with σ² profiled out."""
        _, c, logdet = self.reduced()
        return np.asarray(self.logdet + logdet + reml.profiled(c, m))


@dataclass(frozen=True, eq=False)
class Minima:
    """Per column: θ̂ (d, B), the criterion (B,), coordinates at a bound (d, B), whether it settled (B,)."""

    theta: Array
    value: Array
    at_bound: Flags
    converged: Flags

    def optimum(self) -> Optimum:
        """Of the first column."""
        return Optimum(
            self.theta[:, 0],
            float(self.value[0]),
            self.at_bound[:, 0],
            bool(self.converged[0]),
            ("slope at zero",),
        )


def minimise_each(
    f: Criteria, shared: Shared, axes: Sequence[Axis], B: int, near: Array | None = None
) -> Minima:
    """The smallest value of every column's criterion over the box of the axes.

    near : (d,) a place where the minima are likely to be, tried among the starts of a search in two or
    more coordinates.
    """
    if len(axes) == 1:
        return _line(f, shared, axes[0], B)
    return minimise_from(f, axes, _starts(shared, axes, near))


def minimise_from(f: Criteria, axes: Sequence[Axis], start: Array) -> Minima:
    """The minimum of every column's criterion near a start of its own, (d, B), over two or more axes."""
    return _Several(f, axes).minima(start)


# ---- one coordinate --------------------------------------------------------------------------


def _line(f: Criteria, shared: Shared, axis: Axis, B: int) -> Minima:
    nodes = np.unique([axis.low, *axis.scan, axis.high])
    if B == 1:
        values = f(nodes[None], np.zeros(len(nodes), dtype=np.int64))[:, None]
    else:
        values = np.stack([shared(np.array([x])) for x in nodes])  # (nodes, B)
    padded = np.pad(values, ((1, 1), (0, 0)), constant_values=np.inf)
    valley = (values <= padded[:-2]) & (values <= padded[2:])
    # The three deepest valleys of each column are followed, as in a search column by column.
    depth = np.where(valley, values, np.inf)
    order = np.argsort(depth, axis=0, kind="stable")[:3]
    keep = np.isfinite(np.take_along_axis(depth, order, axis=0))
    rank, columns = np.nonzero(keep)
    place = order[rank, columns]
    theta, value, done = _root(f, nodes, place, columns.astype(np.int64))
    best = values.argmin(axis=0)
    at, least, settled = nodes[best], values[best, np.arange(B)], np.ones(B, dtype=bool)
    for r in range(len(order)):
        here = rank == r
        c = columns[here]
        better = value[here] < least[c]
        at[c[better]], least[c[better]] = theta[here][better], value[here][better]
        settled[c[better]] = done[here][better]
    bound = np.zeros(B, dtype=bool)
    for v, x in ((values[0], axis.low), (values[-1], axis.high)):
        close = np.abs(at - x) < 1e-3 * (axis.high - axis.low)
        here = (close | axis.vanishes) & (v <= least + _slack(least)) & ~bound
        at, least, bound = np.where(here, x, at), np.where(here, v, least), bound | here
    return Minima(at[None], least, bound[None], settled | bound)


def _root(f: Criteria, nodes: Array, place: Places, columns: Places) -> tuple[Array, Array, Flags]:
    """The zero of the slope inside the bracket around each valley: Newton's method, kept by bisection."""
    low, high = nodes[np.maximum(place - 1, 0)], nodes[np.minimum(place + 1, len(nodes) - 1)]
    x = nodes[place].copy()
    x = np.where(place == 0, (low + high) / 2, np.where(place == len(nodes) - 1, (low + high) / 2, x))
    value, done = np.full(len(x), np.inf), np.zeros(len(x), dtype=bool)
    live = np.arange(len(x))
    for _ in range(60):
        c, at = columns[live], x[live]
        trio = f(np.concatenate([at, at - STEP, at + STEP])[None], np.concatenate([c, c, c]))
        here, down, up = trio.reshape(3, -1)
        value[live] = here
        slope, bend = (up - down) / (2 * STEP), (up - 2 * here + down) / STEP**2
        low[live] = np.where(slope < 0, at, low[live])
        high[live] = np.where(slope < 0, high[live], at)
        with np.errstate(divide="ignore", invalid="ignore"):
            move = -slope / bend
        newton = (bend > 0) & (at + move > low[live]) & (at + move < high[live])
        move = np.where(newton, move, (low[live] + high[live]) / 2 - at)
        end = np.abs(move) < SETTLED
        done[live[end]] = True
        x[live] = np.where(end, at, at + move)
        live = live[~end]
        if not len(live):
            break
    if len(live):  # stopped on the way: the value belongs to the place
        value[live] = f(x[live][None], columns[live])
    return x, value, done


def _slack(value: Array) -> Array:
    """As ``search.slack``, column by column."""
    return np.asarray(slack(0.0) + 1e-11 * np.abs(value))


# ---- several coordinates ------------------------------------------------------------------------


def _starts(shared: Shared, axes: Sequence[Axis], near: Array | None) -> Array:
    """(d, B) the best of the product of the axes' starts and the place given."""
    mesh = np.meshgrid(*[np.array(a.starts) for a in axes], indexing="ij")
    grid = np.stack([g.ravel() for g in mesh])[:, :81]
    if near is not None:
        # A component that can vanish starts where it can be seen, or it would never come back.
        least = np.array([a.scan[0] if a.vanishes else a.low for a in axes])
        high = np.array([a.high for a in axes])
        grid = np.column_stack([np.clip(near, least, high), grid])
    values = np.stack([shared(theta) for theta in grid.T])
    return np.asarray(grid[:, values.argmin(axis=0)])


class _Several:
    """Damped Newton steps from the start of each column, every vanishing component tried at zero."""

    def __init__(self, f: Criteria, axes: Sequence[Axis]) -> None:
        self.f, self.axes = f, axes
        self.low = np.array([a.low for a in axes])[:, None]
        self.high = np.array([a.high for a in axes])[:, None]

    def minima(self, start: Array) -> Minima:
        every = np.arange(start.shape[1])
        free = np.ones(start.shape, dtype=bool)
        theta, value, settled = self._descend(start, every, free)
        pinned = np.zeros_like(free)
        for i, axis in enumerate(self.axes):
            if not axis.vanishes:
                continue
            out = theta.copy()
            out[i] = axis.low
            near = np.flatnonzero(self.f(out, every) <= value + 10)
            if not len(near):
                continue
            held = ~pinned[:, near]
            held[i] = False
            gone, v, s = self._descend(out[:, near], near, held)
            take = v <= value[near] + _slack(value[near])
            c = near[take]
            theta[:, c], value[c], settled[c] = gone[:, take], v[take], s[take]
            pinned[i, c] = True
        bound = pinned | (theta <= self.low + 1e-6) | (theta >= self.high - 1e-4)
        return Minima(theta, value, np.asarray(bound), settled)

    def _descend(self, theta: Array, columns: Places, free: Flags) -> tuple[Array, Array, Flags]:
        """Levenberg's damped Newton over the free coordinates of each column; free (d, K)."""
        theta = theta.copy()
        value = self.f(theta, columns)
        damp = np.full(len(columns), 1e-3)
        done: Flags = np.logical_not(np.any(free, axis=0))
        for _ in range(60):
            live = np.flatnonzero(~done)
            if not len(live):
                break
            g, H = self._differences(theta[:, live], columns[live], free[:, live], value[live])
            at = theta[:, live]
            out = ((at <= self.low) & (g > 0)) | ((at >= self.high) & (g < 0)) | ~free[:, live]
            step = newton(H, g, out, damp[live])
            trial = np.clip(at + step, self.low, self.high)
            new = self.f(trial, columns[live])
            fall = np.einsum("ik,ik->k", -g * ~out, step)
            good = new < value[live]
            theta[:, live] = np.where(good, trial, at)
            value[live] = np.where(good, new, value[live])
            damp[live] = np.where(good, damp[live] / 10, np.maximum(damp[live], 1e-6) * 10)
            small = np.abs(trial - at).max(axis=0) < SETTLED
            done[live] = small | (np.abs(fall) < 1e-11) | (damp[live] > 1e8)
        return theta, value, done

    def _differences(self, theta: Array, columns: Places, free: Flags, here: Array) -> tuple[Array, Array]:
        """Gradient (d, K) and Hessian (d, d, K) by differences over coordinates free in some column."""
        d, K = theta.shape
        moves = [i for i in range(d) if free[i].any()]
        pairs = [(i, j) for i in moves for j in moves if j < i]
        unit = STEP * np.eye(d)
        shifts = [s * unit[i] for i in moves for s in (1, -1)]
        shifts += [s * (unit[i] + unit[j]) for i, j in pairs for s in (1, -1)]
        points = np.concatenate([theta + shift[:, None] for shift in shifts], axis=1)
        values = self.f(points, np.tile(columns, len(shifts))).reshape(len(shifts), K)
        g, H = np.zeros((d, K)), np.zeros((d, d, K))
        up, down = {}, {}
        for k, i in enumerate(moves):
            up[i], down[i] = values[2 * k], values[2 * k + 1]
            g[i] = (up[i] - down[i]) / (2 * STEP)
            H[i, i] = (up[i] - 2 * here + down[i]) / STEP**2
        for k, (i, j) in enumerate(pairs, start=len(moves)):
            both = values[2 * k] + values[2 * k + 1]
            H[i, j] = (both - up[i] - down[i] - up[j] - down[j] + 2 * here) / (2 * STEP**2)
            H[j, i] = H[i, j]
        return g, H


def newton(H: Array, g: Array, held: Flags, damp: Array) -> Array:
    """−(|H| + damp·scale)⁻¹g over the coordinates not held: always downhill; H (d, d, K) → (d, K)."""
    d = len(g)
    free = ~held
    H = H * (free[:, None] & free[None, :]) + np.eye(d)[:, :, None] * held[:, None]
    size, U = np.linalg.eigh(np.moveaxis(H, -1, 0))
    size = np.abs(size)
    size = size + (damp * np.maximum(size.max(axis=1), 1e-12))[:, None] + 1e-300
    inner = np.einsum("kij,ik->kj", U, g * free) / size
    step = -np.einsum("kij,kj->ik", U, inner)
    longest = np.abs(step).max(axis=0)
    return np.asarray(step * np.minimum(1.0, 2.0 / np.maximum(longest, 1e-300)))
