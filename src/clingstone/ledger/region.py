"""Profile-likelihood intervals of anything: its range over the parameters that the data do not reject.

The region {θ : 2(ℓ_R(θ̂) − ℓ_R(θ)) ≤ χ²₁} is sampled once. The smallest and the largest value that a
scalar g(θ) takes in it are the ends of the profile-likelihood interval of g, whatever g is: a share,
a half-life, the standard-error factor of a coefficient. At a boundary estimate the upper end remains
honest, where a parametric bootstrap from the estimate itself would draw too small a picture.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import stats

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.each import each
from clingstone.covariance.fits import ErrorModel, Fits
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.bracket import Bracket
from clingstone.maths.each import Grams, Places
from clingstone.maths.once import Array, kept, once
from clingstone.maths.search import Flags

RAYS = {2: 24, 3: 48}  # directions of the first round, by number of parameters; 64 above
SECOND = 10  # directions from each extreme point in the second round
FIRST = 0.4  # first step along a ray, in widths of the region
BISECTIONS = 9
CLOSE = 0.003  # of log-likelihood: a point this near the edge is on it
GRID = 61  # values of a single parameter
HEAVY = 1.5e7  # multiplications per evaluation above which the second round is left out
HEAVY_AGAIN = 3e6  # … where a wider mean is tried out
TOO_HEAVY = 3e8  # … above which the region is the ellipsoid of the curvature at the estimate


@dataclass(frozen=True, eq=False)
class Region:
    """Parameters inside the region as the columns of an error model; column 0 is the estimate.

    method : how it was found, in words.
    """

    model: ErrorModel
    confidence: float
    method: str

    def interval(self, values: Array) -> tuple[float, float, float]:
        """low, estimate, high of a quantity with one value per column; NaN where it is undefined."""
        values = np.asarray(values, dtype=float)
        seen = values[np.isfinite(values)]
        if not seen.size:
            return float("nan"), float("nan"), float("nan")
        return float(seen.min()), float(values[0]), float(seen.max())


def loglik(algebra: Chosen, theta: Array, response: Response) -> tuple[float, float]:
    """Restricted log-likelihood and the profiled σ² of the first column at one θ (d,)."""
    value, sigma2 = _alone(algebra, theta, response)
    return float(value[0]), float(sigma2[0])


def logliks(algebra: Chosen, theta: Array, response: Response, owner: Places) -> tuple[Array, Array]:
    """The same (K,) at θ (d, K), the k-th for column ``owner[k]`` of y."""
    many = each(algebra, response) if len(theta) else None
    if many is not None:
        grams = many.grams(theta, owner)
        try:
            value, sigma2 = _profiled(grams, response.design.m)
        except np.linalg.LinAlgError:
            sound = _positive(grams.QQ)
            value, sigma2 = np.full(len(owner), -np.inf), np.full(len(owner), np.nan)
            value[sound], sigma2[sound] = _profiled(grams.only(sound), response.design.m)
        return np.where(np.isfinite(value), value, -np.inf), sigma2
    out = np.empty((2, theta.shape[1]))
    for b in np.unique(owner):
        column = response if response.B == 1 else response.column(int(b))
        for k in np.flatnonzero(owner == b):
            out[:, k] = np.ravel(_alone(algebra, theta[:, k], column))
    return out[0], out[1]


def _profiled(grams: Grams, m: int) -> tuple[Array, Array]:
    _, c, logdet = grams.reduced()
    return -0.5 * (grams.logdet + logdet + reml.profiled(c, m)), c / m


def _positive(QQ: Array) -> Flags:
    """(K,) which Q'V⁻¹Q are positive definite: far out V is not, in the numbers at hand."""
    sound = np.all(np.isfinite(QQ), axis=(1, 2))
    size = np.linalg.eigvalsh(np.where(sound[:, None, None], QQ, 0.0))
    return np.asarray(sound & (size[:, 0] > 1e-13 * size[:, -1]))


def _alone(algebra: Chosen, theta: Array, response: Response) -> tuple[Array, Array]:
    """The same (B,) of every column at one θ (d,)."""
    m = response.design.m
    try:
        gram = algebra.gram(theta, response)
        value = -0.5 * reml.criterion(gram, m)
        return np.where(np.isfinite(value), value, -np.inf), reml.scale(gram, m)
    except np.linalg.LinAlgError:  # V is not numerically positive definite this far out
        return np.full(response.B, -np.inf), np.full(response.B, np.nan)


def region(fits: Fits, node: frozenset[str], confidence: float) -> Region:
    """The likelihood region of a node of the first column of y, sampled once. Raises NotSupported."""
    if fits.whole is not None:
        whole, b = fits.whole
        return regions(whole, node, confidence)[b]
    return regions(fits if fits.response.B == 1 else fits.column(0), node, confidence)[0]


def regions(fits: Fits, node: frozenset[str], confidence: float) -> tuple[Region, ...]:
    """The likelihood region of a node for every column of y, sampled once. Raises NotSupported."""
    place = ("likelihood regions", node, confidence, fits.run.limits, fits.run.settings.seed)
    return kept(fits.response, place, lambda: _sampled(fits, node, confidence))


def _sampled(fits: Fits, node: frozenset[str], confidence: float) -> tuple[Region, ...]:
    fit, algebra, B = fits[node], fits.algebra(node), fits.response.B
    walk = _Walk(algebra, fits.response, fit.theta, float(stats.chi2.isf(1 - confidence, 1)))
    d = len(fit.theta)
    work = _work(fits, node)
    if d == 0:
        points, method = Points(fit.theta, np.arange(B)), "nothing to estimate"
    elif work > TOO_HEAVY and d > 1:
        points, method = walk.ellipsoids(), "curvature of the restricted likelihood (large problem)"
    elif d == 1:
        points, method = walk.lines(GRID if work <= HEAVY else GRID // 2), "profile likelihood"
    else:
        aims = Aims(d, fits.run.child("likelihood region " + "+".join(sorted(node))))
        points = walk.rays(walk.centres, aims.of(0, RAYS.get(d, 64)))
        if work <= (HEAVY if fits.near is None else HEAVY_AGAIN):
            points = walk.outwards(points, aims)
        method = "profile likelihood, region sampled along rays"
    return tuple(Region(model, confidence, method) for model in _models(fits, node, walk, points))


def _work(fits: Fits, node: frozenset[str]) -> float:
    """Multiplications of one evaluation, from the design alone."""
    design = fits.design
    work = float(design.n) * (design.p + 1) ** 2
    if "spatial" in node and design.spatial is not None:
        work += design.spatial.count**3 / 3
    return work


def _models(fits: Fits, node: frozenset[str], walk: _Walk, points: Points) -> list[ErrorModel]:
    """Per column of y its points as an error model, the estimate first."""
    fit, algebra = fits[node], fits.algebra(node)
    value, sigma2 = walk.logliks(*points)
    out = []
    for b in range(fits.response.B):
        mine = points.of(b)
        theta, scale = points.theta[:, mine], sigma2[mine]
        scale[0] = fit.sigma2[b]
        out.append(
            ErrorModel(
                node=fit.node,
                names=fit.names,
                theta=theta,
                sigma2=scale,
                loglik=value[mine],
                at_bound=np.repeat(np.asarray(fit.at_bound)[:, b : b + 1], len(mine), axis=1),
                converged=np.ones(len(mine), dtype=bool),
                variances=algebra.variances(theta, scale),
                shape=algebra.shape(theta),
            )
        )
    return out


class Points(NamedTuple):
    """Parameters theta (d, N), each of a column of y, owner (N,)."""

    theta: Array
    owner: Places

    def of(self, b: int) -> Places:
        """Where the points of one column stand."""
        return np.flatnonzero(self.owner == b)

    def only(self, which: Places | Flags) -> Points:
        return Points(self.theta[:, which], self.owner[which])

    def plus(self, other: Points) -> Points:
        return Points(np.hstack([self.theta, other.theta]), np.concatenate([self.owner, other.owner]))


class Aims:
    """Directions of the rays, the same for every column of y: the k-th centre of each has the k-th set."""

    def __init__(self, d: int, rng: np.random.Generator) -> None:
        self.d, self.rng = d, rng
        self.held: list[Array] = []

    def of(self, k: int, count: int) -> Array:
        """(d, count + 2d) directions from the k-th centre."""
        while len(self.held) <= k:
            self.held.append(self._drawn(count))
        return self.held[k]

    def _drawn(self, count: int) -> Array:
        if self.d == 2:
            angle = 2 * np.pi * (np.arange(count) + self.rng.uniform()) / count
            aims = np.stack([np.cos(angle), np.sin(angle)], axis=1)
        else:
            aims = self.rng.standard_normal((count, self.d))
        return np.vstack([np.eye(self.d), -np.eye(self.d), aims]).T


Known = dict[tuple[int, bytes], tuple[float, float]]  # log-likelihood and σ² by (column, θ)


class _Walk:
    """Looks for the edge of the region of every column of y, from points inside, all rays in step.

    best (d, B) : the estimates.
    """

    def __init__(self, algebra: Chosen, response: Response, best: Array, cut: float) -> None:
        self.algebra, self.response, self.best = algebra, response, np.asarray(best, dtype=float)
        self.low = np.array([q.low for q in algebra.parameters])[:, None]
        self.high = np.array([q.high for q in algebra.parameters])[:, None]
        every = np.arange(self.best.shape[1])
        self.known: Known = {}
        self.floor = self.logliks(self.best, every)[0] - cut / 2
        self.centres = Points(self.best, every)

    def logliks(self, theta: Array, owner: Places) -> tuple[Array, Array]:
        """As ``logliks``, each point once in a walk: most are asked for again, as an end and as a model."""
        places = [(int(b), at.tobytes()) for b, at in zip(owner, theta.T, strict=True)]
        first = {place: k for k, place in enumerate(places) if place not in self.known}
        if first:
            new = list(first.values())
            found = logliks(self.algebra, theta[:, new], self.response, owner[new])
            self.known |= zip(first, zip(*(v.tolist() for v in found), strict=True), strict=True)
        value, sigma2 = np.array([self.known[place] for place in places]).reshape(-1, 2).T
        return value, sigma2

    def margin(self, theta: Array, owner: Places) -> Array:
        """(K,) how far the log-likelihoods lie above the edge of the region."""
        return self.logliks(theta, owner)[0] - self.floor[owner]

    def inside(self, points: Points) -> Points:
        """Those of the points that lie inside."""
        return points.only(self.margin(*points) >= 0)

    def edge(self, start: Points, direction: Array, first: float | None = None) -> Array:
        """(d, K) the last point inside along each ray that leaves ``start``, stopped by the bounds.

        first : the step, in units of ``direction``, that is tried first; by default a 64th of the way to the
            bounds.
        """
        theta, owner = start
        with np.errstate(divide="ignore", invalid="ignore"):
            room = np.where(direction > 0, self.high - theta, self.low - theta)
            reach = np.nanmin(np.where(direction == 0, np.inf, room / direction), axis=0)
        end = theta.copy()
        live = np.flatnonzero(reach > 0)
        if not len(live):
            return end
        ray = _Rays(self, theta[:, live], direction[:, live], owner[live])
        step = reach[live] / 64 if first is None else np.minimum(first, reach[live])
        end[:, live] = self._at(ray.start, ray.direction, ray.crossing(reach[live], step))
        return end

    def _at(self, start: Array, direction: Array, step: Array) -> Array:
        return np.asarray(np.clip(start + step * direction, self.low, self.high))

    def lines(self, count: int) -> Points:
        """One parameter: the outermost crossings on a grid, refined, and what lies between."""
        B = len(self.floor)
        grid = np.linspace(self.low[0, 0], self.high[0, 0], count)
        value = np.stack([_alone(self.algebra, np.array([g]), self.response)[0] for g in grid])  # (count, B)
        held = value >= self.floor
        found = self.centres
        ends = []
        for side in (-1.0, 1.0):
            outer = held & (side * (grid[:, None] - self.best) > 0)
            furthest = np.where(outer, side * grid[:, None], -np.inf).max(axis=0)
            start = np.where(np.isfinite(furthest), side * furthest, self.best[0])
            ends.append(self.edge(Points(start[None], np.arange(B)), np.full((1, B), side)))
            found = found.plus(Points(ends[-1], np.arange(B)))
        between = np.linspace(ends[0][0], ends[1][0], count // 2)  # (count // 2, B)
        inner = Points(between.reshape(1, -1), np.tile(np.arange(B), count // 2))
        return found.plus(self.inside(inner))

    def rays(self, centres: Points, aims: Array) -> Points:
        """Edge points in many directions, in units of the region's own width along each axis.

        aims (d, A) for every centre, or (d, A, K) with directions of its own for each.
        """
        d, K = centres.theta.shape
        A = aims.shape[1]
        aims = np.repeat(aims[:, :, None], K, axis=2) if aims.ndim == 2 else aims
        start = np.repeat(centres.theta[:, None], A, axis=1)  # (d, A, K)
        low, high = self.low[:, :, None], self.high[:, :, None]
        outward = ((start <= low) & (aims < 0)) | ((start >= high) & (aims > 0))
        aims = np.where(outward, -aims, aims)
        down, up = (width[:, centres.owner][:, None] for width in self._scale)
        direction = np.where(aims < 0, aims * down, aims * up).reshape(d, -1)
        rays = Points(start.reshape(d, -1), np.tile(centres.owner, A))
        end = self.edge(rays, direction, FIRST)
        half = rays.theta + (end - rays.theta) / 2
        return self.inside(centres.plus(Points(end, rays.owner)).plus(Points(half, rays.owner)))

    @property
    @once
    def _scale(self) -> tuple[Array, Array]:
        """Distance to the edge down and up each axis, (d, B) each."""
        d, B = self.best.shape
        aims = np.repeat(np.hstack([-np.eye(d), np.eye(d)]), B, axis=1)  # (d, 2d·B)
        start = Points(np.tile(self.best, 2 * d), np.tile(np.arange(B), 2 * d))
        apart = np.abs(self.edge(start, aims) - start.theta).reshape(d, 2, d, B)
        down, up = (np.einsum("iib->ib", apart[:, side]) for side in (0, 1))
        least = 1e-3 * (self.high - self.low)
        return np.maximum(down, least), np.maximum(up, least)

    def outwards(self, points: Points, aims: Aims) -> Points:
        """The second round: rays from the points that are furthest out, drawn a little inwards."""
        centres = self.inside(self._extremes(points))
        if not len(centres.owner):
            return points
        order = np.zeros(len(centres.owner), dtype=np.int64)  # which centre of its column each one is
        for b in np.unique(centres.owner):
            mine = centres.of(int(b))
            order[mine] = np.arange(len(mine))
        chosen = np.stack([aims.of(1 + k, SECOND) for k in range(int(order.max()) + 1)], axis=2)
        return points.plus(self.rays(centres, chosen[:, :, order]))

    def _extremes(self, points: Points) -> Points:
        """Per column the points furthest out in some direction of interest, a tenth of the way back."""
        variances = self.algebra.variances(points.theta, np.ones(len(points.owner)))
        total = sum(variances.values(), start=np.zeros(len(points.owner)))
        scales = [*points.theta, *(value / total for value in variances.values())]
        drawn, owner = [], []
        for b in range(len(self.floor)):
            mine = points.of(b)
            seen = [scale[mine] for scale in scales]
            chosen = sorted({int(v.argmin()) for v in seen} | {int(v.argmax()) for v in seen})
            theta = points.theta[:, mine[chosen]]
            drawn.append(theta + 0.1 * (self.best[:, b : b + 1] - theta))
            owner += [b] * len(chosen)
        return Points(np.hstack(drawn), np.array(owner, dtype=np.int64))

    def ellipsoids(self) -> Points:
        """Where the quadratic approximation at each estimate puts the edge, along its axes."""
        found = self.centres
        for b in range(len(self.floor)):
            ends = self._ellipsoid(b)
            found = found.plus(Points(ends, np.full(ends.shape[1], b)))
        return found

    def _ellipsoid(self, b: int) -> Array:
        best = self.best[:, b : b + 1]
        d = len(best)
        h = 1e-3 * (self.high - self.low)[:, 0]
        pairs = [(i, j) for i in range(d) for j in range(i + 1)]
        E = np.diag(h)
        moves = [side * (E[i] + (E[j] if i != j else 0)) for i, j in pairs for side in (1, -1)]
        theta = np.clip(best + np.array([np.zeros(d), *moves]).T, self.low, self.high)
        owner = np.full(theta.shape[1], b)
        value = self.logliks(theta, owner)[0]
        rise = (value[0] - value[1:]).reshape(-1, 2).sum(axis=1)
        bend = dict(zip(pairs, rise.tolist(), strict=True))
        H = np.empty((d, d))
        for i, j in pairs:
            both = bend[i, j] - bend[i, i] - bend[j, j]
            H[i, j] = H[j, i] = bend[i, i] / h[i] ** 2 if i == j else both / (2 * h[i] * h[j])
        values, vectors = np.linalg.eigh(H)
        reach = np.sqrt(2 * (value[0] - self.floor[b]) / np.maximum(values, 1e-12))
        reach = np.minimum(reach, float(np.max(self.high - self.low)))
        ends = [side * r * v for r, v in zip(reach, vectors.T, strict=True) for side in (-1, 1)]
        return np.asarray(np.clip(best + np.array(ends).T, self.low, self.high))


@dataclass(frozen=True, eq=False)
class _Rays:
    """Rays: start, inside, and direction (d, K), owner (K,)."""

    walk: _Walk
    start: Array
    direction: Array
    owner: Places

    def margin(self, which: Places, step: Array) -> Array:
        at = self.walk._at(self.start[:, which], self.direction[:, which], step)
        return self.walk.margin(at, self.owner[which])

    def crossing(self, reach: Array, first: Array) -> Array:
        """(K,) the step at which each margin reaches zero, from inside; ``reach`` where it never does.

        A first step that doubles finds the nearest way out; a search over the whole ray may jump over
        a second piece of the region.
        """
        every = np.arange(len(reach))
        near, far, last = np.zeros(len(reach)), first.copy(), np.zeros(len(reach))
        above, below = self.margin(every, near), self.margin(every, far)
        before = np.full(len(reach), np.nan)
        while True:
            live = np.flatnonzero((far < reach) & (below >= 0))
            if not len(live):
                break
            last[live], before[live] = near[live], above[live]
            near[live], above[live] = far[live], below[live]
            far[live] = np.minimum(2 * far[live], reach[live])
            below[live] = self.margin(live, far[live])
        out = below < 0
        near[~out] = far[~out]
        found = Bracket(near[out], above[out], far[out], below[out], last[out], before[out])
        near[out] = found.closed(lambda which, step: self.margin(every[out][which], step), CLOSE, BISECTIONS)
        return near
