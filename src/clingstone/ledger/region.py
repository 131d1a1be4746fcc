"""Profile-likelihood intervals of anything: its range over the parameters that the data do not reject.

The region {θ : 2(ℓ_R(θ̂) − ℓ_R(θ)) ≤ χ²₁} is sampled once. The smallest and the largest value that a
scalar g(θ) takes in it are the ends of the profile-likelihood interval of g, whatever g is: a share,
a half-life, the standard-error factor of a coefficient. At a boundary estimate the upper end remains
honest, where a parametric bootstrap from the estimate itself would draw too small a picture.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.fits import ErrorModel, Fits
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.once import Array, kept

RAYS = {2: 24, 3: 48}  # directions of the first round, by number of parameters; 64 above
SECOND = 10  # directions from each extreme point in the second round
BISECTIONS = 9
CLOSE = 0.01  # of log-likelihood: a point this near the edge is on it
GRID = 61  # values of a single parameter
HEAVY = 1.5e7  # multiplications per evaluation above which the second round is left out
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
    m = response.design.m
    try:
        gram = algebra.gram(theta, response)
        value = -0.5 * float(reml.criterion(gram, m)[0])
        return (value if np.isfinite(value) else -np.inf), float(reml.scale(gram, m)[0])
    except np.linalg.LinAlgError:
        return -np.inf, float("nan")  # V is not numerically positive definite this far out


def region(fits: Fits, node: frozenset[str], confidence: float) -> Region:
    """The likelihood region of a node of the first column of y, sampled once. Raises NotSupported."""
    place = ("likelihood region", node, confidence, fits.run.limits, fits.run.settings.seed)
    return kept(fits.response, place, lambda: _sampled(fits, node, confidence))


def _sampled(fits: Fits, node: frozenset[str], confidence: float) -> Region:
    fit = fits[node]
    algebra = fits.algebra(node)
    best = np.asarray(fit.theta[:, 0], dtype=float)
    walk = _Walk(algebra, fits.response, best, float(stats.chi2.isf(1 - confidence, 1)))
    d = len(best)
    work = _work(fits, node)
    if d == 0:
        points, method = [best], "nothing to estimate"
    elif work > TOO_HEAVY and d > 1:
        points, method = walk.ellipsoid(), "curvature of the restricted likelihood (large problem)"
    elif d == 1:
        points, method = walk.line(GRID if work <= HEAVY else GRID // 2), "profile likelihood"
    else:
        rng = fits.run.child("likelihood region " + "+".join(sorted(node)))
        rays = RAYS.get(d, 64)
        points = walk.rays(best, rays, rng)
        if work <= HEAVY:
            for centre in walk.extremes(points):
                points += walk.rays(centre, SECOND, rng)
        method = "profile likelihood, region sampled along rays"
    return Region(_columns(fits, node, points), confidence, method)


def _work(fits: Fits, node: frozenset[str]) -> float:
    """Multiplications of one evaluation, from the design alone."""
    design = fits.design
    work = float(design.n) * (design.p + 1) ** 2
    if "spatial" in node and design.spatial is not None:
        work += design.spatial.count**3 / 3
    return work


def _columns(fits: Fits, node: frozenset[str], points: list[Array]) -> ErrorModel:
    fit, algebra = fits[node], fits.algebra(node)
    theta = np.array(points).T.reshape(len(points[0]), len(points))
    pairs = [loglik(algebra, point, fits.response) for point in points]
    sigma2 = np.array([pair[1] for pair in pairs])
    sigma2[0] = fit.sigma2[0]
    B = len(points)
    return ErrorModel(
        node=fit.node,
        names=fit.names,
        theta=theta,
        sigma2=sigma2,
        loglik=np.array([pair[0] for pair in pairs]),
        at_bound=np.repeat(np.asarray(fit.at_bound)[:, :1], B, axis=1),
        converged=np.ones(B, dtype=bool),
        variances=algebra.variances(theta, sigma2),
        shape=algebra.shape(theta),
    )


class _Walk:
    """Looks for the edge of the region from points inside it."""

    def __init__(self, algebra: Chosen, response: Response, best: Array, cut: float) -> None:
        self.algebra, self.response, self.best = algebra, response, best
        self.low = np.array([q.low for q in algebra.parameters])
        self.high = np.array([q.high for q in algebra.parameters])
        self.floor = loglik(algebra, best, response)[0] - cut / 2

    def margin(self, theta: Array) -> float:
        """How far the log-likelihood lies above the edge of the region."""
        return loglik(self.algebra, theta, self.response)[0] - self.floor

    def inside(self, theta: Array) -> bool:
        return self.margin(theta) >= 0

    def edge(self, start: Array, direction: Array) -> Array:
        """The last point inside along a ray that leaves ``start``, stopped by the bounds."""
        with np.errstate(divide="ignore", invalid="ignore"):
            steps = np.where(direction > 0, (self.high - start) / direction, (self.low - start) / direction)
        reach = float(np.nanmin(np.where(direction == 0, np.inf, steps)))
        if not reach > 0:
            return start
        if self.inside(self._at(start, direction, reach)):
            return self._at(start, direction, reach)
        # A first step that doubles finds the nearest way out; a search over the whole ray may jump
        # over a second piece of the region.
        near, far = 0.0, reach / 64
        above, below = self.margin(start), self.margin(self._at(start, direction, far))
        while far < reach and below >= 0:
            near, above, far = far, below, min(2 * far, reach)
            below = self.margin(self._at(start, direction, far))
        return self._at(start, direction, self._crossing(start, direction, (near, above), (far, below)))

    def _crossing(
        self, start: Array, direction: Array, near: tuple[float, float], far: tuple[float, float]
    ) -> float:
        """The step at which the margin reaches zero, from inside: false position with Illinois' halving."""
        (low, above), (high, below) = near, far
        width, pull = high - low, [above, below]  # what draws the line; the end that stays loses half
        for _ in range(BISECTIONS):
            if above <= CLOSE or high - low <= width / 2**BISECTIONS:
                break
            fall = pull[0] - pull[1]
            part = pull[0] / fall if np.isfinite(fall) and fall > 0 else 0.5
            step = low + (high - low) * float(np.clip(part, 0.05, 0.95))
            found = self.margin(self._at(start, direction, step))
            if found >= 0:
                low, above, pull = step, found, [found, pull[1] / 2]
            else:
                high, pull = step, [pull[0] / 2, found]
        return low

    def _at(self, start: Array, direction: Array, step: float) -> Array:
        return np.asarray(np.clip(start + step * direction, self.low, self.high))

    def line(self, count: int) -> list[Array]:
        """One parameter: the outermost crossings on a grid, refined, and what lies between."""
        grid = np.linspace(self.low[0], self.high[0], count)
        held = [g for g in grid if self.inside(np.array([g]))]
        ends = []
        for side in (-1.0, 1.0):
            outer = [g for g in held if side * (g - self.best[0]) > 0]
            start = np.array([max(outer, key=lambda g: side * g)]) if outer else self.best
            ends.append(self.edge(start, np.array([side])))
        between = np.linspace(ends[0][0], ends[1][0], count // 2)
        return [self.best, *ends, *(np.array([g]) for g in between if self.inside(np.array([g])))]

    def widths(self) -> tuple[Array, Array]:
        """Distance to the edge down and up each axis."""
        d = len(self.best)
        down, up = np.empty(d), np.empty(d)
        for j, axis in enumerate(np.eye(d)):
            down[j] = self.best[j] - self.edge(self.best, -axis)[j]
            up[j] = self.edge(self.best, axis)[j] - self.best[j]
        return down, up

    def rays(self, start: Array, count: int, rng: np.random.Generator) -> list[Array]:
        """Edge points in many directions, in units of the region's own width along each axis."""
        d = len(start)
        down, up = self._scale()
        if d == 2:
            angle = 2 * np.pi * (np.arange(count) + rng.uniform()) / count
            aims = np.stack([np.cos(angle), np.sin(angle)], axis=1)
        else:
            aims = rng.standard_normal((count, d))
        aims = np.vstack([np.eye(d), -np.eye(d), aims])
        found = [start]
        for aim in aims:
            outward = ((start <= self.low) & (aim < 0)) | ((start >= self.high) & (aim > 0))
            aim = np.where(outward, -aim, aim)
            direction = np.where(aim < 0, aim * down, aim * up)
            end = self.edge(start, direction)
            found += [end, start + (end - start) / 2]
        return [point for point in found if self.inside(point)]

    def _scale(self) -> tuple[Array, Array]:
        if not hasattr(self, "_held"):
            down, up = self.widths()
            least = 1e-3 * (self.high - self.low)
            self._held = np.maximum(down, least), np.maximum(up, least)
        return self._held

    def extremes(self, points: list[Array]) -> list[Array]:
        """Points that are furthest out in some direction of interest, drawn a little inwards."""
        theta = np.array(points)
        chosen = {int(i) for i in np.r_[theta.argmin(axis=0), theta.argmax(axis=0)]}
        P = theta.T
        variances = self.algebra.variances(P, np.ones(P.shape[1]))
        total = sum(variances.values(), start=np.zeros(P.shape[1]))
        for value in variances.values():
            chosen |= {int(np.argmin(value / total)), int(np.argmax(value / total))}
        drawn = [theta[i] + 0.1 * (self.best - theta[i]) for i in sorted(chosen)]
        return [point for point in drawn if self.inside(point)]

    def ellipsoid(self) -> list[Array]:
        """Where the quadratic approximation at the estimate puts the edge, along its axes."""
        d = len(self.best)
        h = 1e-3 * (self.high - self.low)
        base = loglik(self.algebra, self.best, self.response)[0]

        def rise(step: Array) -> float:
            at = np.clip(self.best + step, self.low, self.high)
            return base - loglik(self.algebra, at, self.response)[0]

        E = np.diag(h)
        H = np.empty((d, d))
        for i in range(d):
            for j in range(i + 1):
                H[i, j] = H[j, i] = (
                    rise(E[i] + E[j]) - rise(E[i] - E[j]) - rise(E[j] - E[i]) + rise(-E[i] - E[j])
                ) / (4 * h[i] * h[j])
        values, vectors = np.linalg.eigh(H)
        reach = np.sqrt(2 * (base - self.floor) / np.maximum(values, 1e-12))
        reach = np.minimum(reach, float(np.max(self.high - self.low)))
        ends = [self.best + side * r * v for r, v in zip(reach, vectors.T, strict=True) for side in (-1, 1)]
        return [self.best, *(np.clip(end, self.low, self.high) for end in ends)]
