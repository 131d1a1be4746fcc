"""Profile-likelihood intervals of standard deviations and correlations between groups.

The interval of a parameter g is its range over {φ : D(φ) − D(φ̂) ≤ χ²₁}, D = −2ℓ_R over all parameters,
σ among them (Venzon & Moolgavkar 1988). Each end is the largest or smallest g in that region, sought in the
entries of the factors L, where a variance of zero is no wall.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import optimize, stats

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.bundles import Bundle
from clingstone.covariance.each import Each, each
from clingstone.covariance.fieldeach import FieldEach
from clingstone.covariance.fits import ErrorModel
from clingstone.covariance.layered import Layered
from clingstone.covariance.profileline import Line
from clingstone.covariance.ranges import Ranges
from clingstone.covariance.sloped import Sloped
from clingstone.covariance.slopedeach import SlopedEach
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.once import Array, once

WORK = 3e5  # multiplications of one evaluation beyond which no profile is followed
STEP = 1e-4  # of central differences, on scales where the region has a radius of about two
FAR = 12.0  # on those scales, how far a search may go
NOTHING = 1e-6  # part of the estimated variance (or of σ²) that is as good as zero


@dataclass(frozen=True)
class Varying:
    """One parameter of what varies between groups, in the user's units, with the ends of its interval.

    level, names : "ward" and the functions ("" for the constant, else a predictor): one for a standard
    deviation, two for a correlation; level "row" for the noise of rows. low, high : NaN where none was
    worked out.
    """

    level: str
    names: tuple[str, ...]
    estimate: float
    low: float
    high: float


def varying(
    algebra: Chosen, response: Response, model: ErrorModel, confidence: float, restricted: bool = True
) -> tuple[Varying, ...]:
    """Standard deviations and correlations of one column of y, level by level, then that of the rows.

    restricted : False profiles the likelihood itself, around its own optimum, as lme4 does.
    """
    surface = _Surface(algebra, response, restricted)
    x = surface.at(model.theta[:, 0], float(model.sigma2[0]))
    walk = None
    if followed(algebra, response):
        cut = float(stats.chi2.isf(1 - confidence, 1))
        x = surface.lowest(x)
        if len(x) == 2:
            return _of_one(surface, x, cut)
        walk = _Walk.of(surface, x, cut)
    none = (np.nan, np.nan)
    out = []
    for b, bundle in enumerate(surface.bundles):
        for j, name in enumerate(bundle.names):
            size = partial(surface.variance, b=b, j=j)
            ends = none if walk is None else walk.spread(size)
            out.append(Varying(bundle.part.key, (name,), _sd(size(x)), *ends))
        for i, j in zip(*np.nonzero(bundle.free), strict=True):
            tie = partial(surface.correlation, b=b, i=int(i), j=int(j))
            ends = none if walk is None or not np.isfinite(tie(x)) else walk.ends(tie)
            out.append(Varying(bundle.part.key, (bundle.names[j], bundle.names[i]), tie(x), *ends))
    ends = none if walk is None else walk.spread(lambda z: float(np.exp(2 * z[-1])))
    return (*out, Varying("row", ("",), float(np.exp(x[-1])), *ends))


def _of_one(surface: _Surface, x: Array, cut: float) -> tuple[Varying, ...]:
    """Intercepts of one level and the rows."""

    (ratio,) = surface.algebra.parameters

    def parts(at: Array) -> tuple[Array, Array]:
        return surface.parts(np.clip(2 * np.log(np.maximum(at, 1e-150)), ratio.low, ratio.high)[None])

    line = Line(parts, surface.count, abs(float(x[0])), cut)
    unit = surface.variance(np.array([1.0, 0.0]), 0, 0)
    rows, between = np.sqrt(line.ends() * [[1.0], [unit]]).tolist()
    own = Varying(surface.bundles[0].part.key, ("",), _sd(surface.variance(x, 0, 0)), *between)
    return own, Varying("row", ("",), float(np.exp(x[-1])), *rows)


def _sd(variance: float) -> float:
    return float(np.sqrt(max(variance, 0.0)))


def followed(algebra: Chosen, response: Response) -> bool:
    """Whether ends are worked out: a profile takes hundreds of evaluations, so each must be cheap."""
    return _work(algebra, response) <= WORK


def _work(algebra: Chosen, response: Response) -> float:
    """Multiplications of one evaluation; beyond all bounds with other components."""
    p = algebra.design.p
    bundles = [algebra.bundle(key) for key in algebra.level_keys]
    if sum(bundle.q for bundle in bundles) != len(algebra.pieces):
        return np.inf
    classes = algebra.classes(response) if isinstance(algebra, Layered) else None
    if classes is not None:  # intercepts of one level: groups of equal load are one
        return float(len(classes.c) * (p + 2.0) ** 2)
    cells = sorted(bundle.part.count for bundle in bundles)
    nested = all(b.part.relation(a.part) in ("nests", "nested", "same") for a in bundles for b in bundles)
    return sum(b.part.count * (b.q + p + 1.0) ** 2 for b in bundles) + (
        0 if nested else sum(cells[:-1]) ** 3 / 3
    )


@dataclass(frozen=True, eq=False)
class _Surface:
    """D at x: the free entries of every L (over σ), then ln σ."""

    algebra: Chosen
    response: Response
    restricted: bool

    @property
    @once
    def bundles(self) -> tuple[Bundle, ...]:
        return tuple(self.algebra.bundle(key) for key in self.algebra.level_keys)

    @property
    @once
    def _places(self) -> tuple[tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]], ...]:
        return tuple(np.nonzero(b.free | np.eye(b.q, dtype=bool)) for b in self.bundles)  # type: ignore[misc]

    def at(self, theta: Array, sigma2: float) -> Array:
        pairs = zip(self.bundles, self._places, strict=True)
        entries = [b.L(self.algebra.joined(b, theta))[place] for b, place in pairs]
        return np.concatenate([*entries, [np.log(sigma2) / 2]])

    def factors(self, x: Array) -> list[Array]:
        out, start = [], 0
        for bundle, place in zip(self.bundles, self._places, strict=True):
            L = np.zeros((bundle.q, bundle.q))
            L[place] = x[start : start + len(place[0])]
            start += len(place[0])
            out.append(L)
        return out

    def theta(self, x: Array) -> Array:
        out = np.empty(len(self.algebra.parameters))
        for bundle, L in zip(self.bundles, self.factors(x), strict=True):
            own, start = bundle.theta(L), 0
            for piece in bundle.pieces:
                where = self.algebra.slices[piece.key]
                out[where] = own[start : start + where.stop - where.start]
                start += where.stop - where.start
        return out

    @property
    @once
    def _many(self) -> SlopedEach | Each | Ranges | FieldEach | None:
        if isinstance(self.algebra, Sloped):
            return SlopedEach(self.algebra, self.response)
        return each(self.algebra, self.response)

    def value(self, x: Array) -> float:
        return float(self.values(x[:, None])[0])

    def values(self, X: Array) -> Array:
        """(K,) D at the columns of X (d, K)."""
        fixed, c = self.parts(np.stack([self.theta(x) for x in X.T], axis=1))
        return np.asarray(fixed + self.count * 2 * X[-1] + c * np.exp(-2 * X[-1]))

    @property
    def count(self) -> int:
        design = self.algebra.design
        return design.m if self.restricted else design.n

    def parts(self, thetas: Array) -> tuple[Array, Array]:
        """D without its terms in σ, and c, (K,) each, at θ (d, K)."""
        if self._many is not None:
            found = self._many.grams(thetas, np.zeros(thetas.shape[1], dtype=np.int64))
            _, c, logdet = found.reduced()
            big = found.logdet
        else:
            grams = [self.algebra.gram(theta, self.response) for theta in thetas.T]
            c = np.array([reml.reduced(gram)[1][0] for gram in grams])
            logdet = np.array([reml.reduced(gram)[2] for gram in grams])
            big = np.array([gram.logdet for gram in grams])
        return np.asarray(big + logdet if self.restricted else big), np.asarray(c)

    def lowest(self, x: Array) -> Array:
        """The optimum, from that of the restricted likelihood."""
        if self.restricted:
            return x
        found = optimize.minimize(self.value, x, method="BFGS", options={"gtol": 1e-6})
        return np.asarray(found.x, dtype=float)

    def gamma(self, x: Array, b: int) -> Array:
        """(q, q) covariance between the cells of a level, in the user's units."""
        bundle = self.bundles[b]
        half = bundle.turned @ self.factors(x)[b] * np.exp(x[-1])
        return np.asarray(half @ half.T)

    def variance(self, x: Array, b: int, j: int) -> float:
        return float(self.gamma(x, b)[j, j])

    def correlation(self, x: Array, b: int, i: int, j: int) -> float:
        gamma = self.gamma(x, b)
        size = np.sqrt(gamma[i, i] * gamma[j, j])
        return float(gamma[i, j] / size) if size > 0 else np.nan


@dataclass(frozen=True, eq=False)
class _Walk:
    """Coordinates z around the optimum in which D rises by about |z|²: x = best + turn z."""

    surface: _Surface
    best: Array
    least: float
    turn: Array
    cut: float

    @classmethod
    def of(cls, surface: _Surface, best: Array, cut: float) -> _Walk:
        H = _curvature(surface.values, best)
        size, U = np.linalg.eigh(H)
        # Where D is all but flat (a variance at zero) the scale is that of the stiffest direction.
        size = np.maximum(size, 1e-4 * size.max())
        return cls(surface, best, surface.value(best), U * np.sqrt(2 / size), cut)

    def spread(self, variance: Callable[[Array], float]) -> tuple[float, float]:
        """The ends of a standard deviation."""
        here = variance(self.best)
        unit = here if here > 0 else float(np.exp(2 * self.best[-1]))
        low, high = self.ends(lambda x: variance(x) / unit)
        return (0.0 if low < NOTHING else float(np.sqrt(low * unit))), float(np.sqrt(high * unit))

    def ends(self, g: Callable[[Array], float]) -> tuple[float, float]:
        """The smallest and largest g in the region; NaN where the search does not settle."""
        return self._end(g, -1.0), self._end(g, 1.0)

    def _edges(self, side: float) -> list[Array]:
        """Where D has risen by half of the cut along each axis; where D is flat its scale is a guess."""
        out = []
        for axis in np.eye(len(self.best)):
            for sign in (side, -side):
                far = np.geomspace(FAR, 1e-3, 40)[:, None] * sign * axis
                risen = self.surface.values(self.best[:, None] + self.turn @ far.T) - self.least
                inside = far[risen < self.cut / 2]
                out += [inside[0]] if len(inside) else []
        return out

    def _end(self, g: Callable[[Array], float], side: float) -> float:
        minimise: Any = optimize.minimize  # its published types leave this form of call out

        def to_x(z: Array) -> Array:
            return np.asarray(self.best + self.turn @ z)

        def room(z: Array) -> float:
            return self.cut - (self.surface.value(to_x(z)) - self.least)

        def slopes(z: Array) -> Array:
            steps = self.turn * STEP
            x = to_x(z)[:, None]
            d = len(z)
            both = self.surface.values(np.hstack([x + steps, x - steps]))
            return np.asarray((both[d:] - both[:d]) / (2 * STEP))

        def aim(z: Array) -> float:
            return -side * g(to_x(z))

        zero = np.zeros(len(self.best))
        slope = _gradient(aim, zero)
        length = float(np.linalg.norm(slope))
        starts = [-0.95 * np.sqrt(self.cut) * slope / length] if length > 1e-6 else []
        if not starts:  # from an optimum on the wall g has no slope: every axis is tried
            starts = self._edges(side)
        found = []
        for start in starts:
            try:
                with np.errstate(over="ignore", invalid="ignore"):
                    run: Any = minimise(
                        aim,
                        start,
                        jac=lambda z: _gradient(aim, z),
                        bounds=[(-FAR, FAR)] * len(start),
                        constraints={"type": "ineq", "fun": room, "jac": slopes},
                        method="SLSQP",
                        options={"maxiter": 60, "ftol": 1e-7},
                    )
            except np.linalg.LinAlgError:  # V is not numerically positive definite that far out
                continue
            if np.all(np.isfinite(run.x)) and room(run.x) > -1e-3 and run.success:
                found.append(-side * float(run.fun))
        return (max(found) if side > 0 else min(found)) if found else np.nan


def _gradient(f: Callable[[Array], float], z: Array) -> Array:
    return np.array([(f(z + h) - f(z - h)) / (2 * STEP) for h in STEP * np.eye(len(z))])


def _curvature(f: Callable[[Array], Array], x: Array) -> Array:
    """(d, d) second derivatives by differences; f takes columns."""
    d = len(x)
    h = 1e-3 * np.maximum(np.abs(x), 0.05) * np.eye(d)
    pairs = [(i, j) for i in range(d) for j in range(i)]
    moves = [np.zeros(d), *h, *-h]
    moves += [a * h[i] + b * h[j] for i, j in pairs for a, b in ((1, 1), (1, -1), (-1, 1), (-1, -1))]
    value = f(x[:, None] + np.array(moves).T)
    H = np.diag((value[1 : d + 1] - 2 * value[0] + value[d + 1 : 2 * d + 1]) / np.diag(h) ** 2)
    for (i, j), four in zip(pairs, value[2 * d + 1 :].reshape(-1, 4), strict=True):
        H[i, j] = H[j, i] = (four[0] - four[1] - four[2] + four[3]) / (4 * h[i, i] * h[j, j])
    return H
