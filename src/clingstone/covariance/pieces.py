"""One component's own arithmetic over one design: parameters, unit covariance, draws."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from clingstone.covariance.components import Parameter
from clingstone.design.design import Design
from clingstone.maths import matern
from clingstone.maths.markov import Links, at_rho
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites

RATIO_HIGH = 14.0  # ln of the largest variance ratio: ICC 1 − 8e-7
RHO_HIGH = 7.6  # |atanh ρ| at which a series counts as a random walk: ρ = 0.9999995


class Piece(Protocol):
    """A component over one design. θ below is the piece's own slice of the working parameters."""

    @property
    def key(self) -> str: ...

    @property
    def parameters(self) -> tuple[Parameter, ...]: ...

    def variance(self, theta: Array) -> Array:
        """Variance over σ², (B,) from (d, B)."""
        ...

    def shape(self, theta: Array) -> Mapping[str, Array]: ...

    def spread(self, theta: Array) -> Array: ...

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        """(n, B) with the piece's own covariance, in units where σ² = 1."""
        ...

    def dense(self, theta: Array) -> Array:
        """(n, n) the piece's part of V; for small n."""
        ...


def ratio_parameter(name: str, cells: Array, n: int) -> Parameter:
    """ln λ, λ = σ²ₖ/σ². Low enough to be zero for the fullest cell; scanned from where it can be seen.

    The standard error of λ̂ near zero is about √(2/G)/c̄ for G cells of c̄ rows (Searle, Casella &
    McCulloch 1992), so a hundredth of that cannot be told from zero. cells : (G,) counts or total
    weights of n rows; σ² is the variance of a row of weight one, so λ goes with 1/weight.
    """
    mean, unit = float(cells.mean()), -float(np.log(cells.sum() / n))
    low = float(np.log(1e-8 / cells.max()))
    seen = float(np.log(0.01 * np.sqrt(2 / len(cells)) / mean))
    scan = tuple(np.linspace(seen, 9.0 + unit, 41))
    starts = (float(np.log(0.2 / mean)), unit - 0.7, unit + 1.1)
    return Parameter(name, low, RATIO_HIGH + unit, starts, scan, True)


def ratio_of(theta: Array, parameter: Parameter) -> Array:
    """λ from ln λ; exactly zero at the lower bound."""
    return np.where(theta <= parameter.low + 1e-9, 0.0, np.exp(theta))


@dataclass(frozen=True, eq=False)
class GroupPiece:
    """Intercepts λZZ' of one partition."""

    key: str
    design: Design
    part: Partition

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        return (ratio_parameter(f"{self.key}.log_ratio", self.design.sizes(self.part), self.design.n),)

    def variance(self, theta: Array) -> Array:
        return ratio_of(theta[0], self.parameters[0])

    def shape(self, theta: Array) -> Mapping[str, Array]:
        return {}

    def spread(self, theta: Array) -> Array:
        T = self.design.sums(self.part)
        return np.asarray(T.T @ T)

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        size = np.sqrt(self.variance(theta[:, None])[0])
        return _rows(self.design, size * rng.standard_normal((self.part.count, B))[self.part.codes])

    def dense(self, theta: Array) -> Array:
        same = (self.part.codes[:, None] == self.part.codes).astype(float)
        return _outer(self.design, self.variance(theta[:, None])[0] * same)


@dataclass(frozen=True, eq=False)
class SerialPiece:
    """AR(1) within series. The process is the row noise itself: V = R(ρ) + …, not λR + I.

    Its variance in the ledger's sense is |ρ|σ², what neighbours in time share; the other (1 − |ρ|)σ²
    counts as row noise. So σ²R = |ρ|σ²K + (1 − |ρ|)σ²I with K of unit diagonal.

    fading : ρ cannot be negative and is searched by its rate, also where times are whole steps.
    """

    key: str
    design: Design
    series: Series
    fading: bool = False

    @property
    def links(self) -> Links:
        """One for all designs and error models over the same series: its forms are as large as the table."""
        return kept(self.series, ("links",), lambda: Links(self.series.steps))

    @property
    @once
    def whole(self) -> bool:
        """Whole steps between rows, some of them odd: only then can ρ be negative."""
        if self.fading or self.series.tick is None:
            return False
        return bool(np.any(np.round(self.links.lengths[0]).astype(np.int64) % 2 == 1))

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        if self.whole:
            scan = tuple(np.linspace(-3.6, 5.2, 45))
            return (Parameter("serial.atanh_rho", -RHO_HIGH, RHO_HIGH, (-0.3, 0.3, 1.1), scan),)
        # ln κ, ρ = e^{−κ} per base step. Slower than the whole table, or faster than its closest
        # pair of rows, cannot be seen.
        length, _ = self.links.lengths
        part = self.series.part
        first, last = part.first, part.n - 1 - _last(part)
        span = float((self.series.elapsed[last] - self.series.elapsed[first]).max() / self.series.step)
        low, high = np.log(0.01 / max(span, float(length[0]))), np.log(20 / float(length[0]))
        middle = np.log(-np.log(np.array([0.3, 0.7, 0.9])) / float(np.median(self._steps)))
        starts = tuple(float(x) for x in np.clip(middle, low + 0.1, high - 0.1))
        return (
            Parameter("serial.log_rate", float(low), float(high), starts, tuple(np.linspace(low, high, 45))),
        )

    @property
    def _steps(self) -> Array:
        return np.asarray(self.links.steps[self.links.later])

    def rho(self, theta: Array) -> Array:
        """ρ per base step from the working parameter."""
        return np.asarray(np.tanh(theta[0]) if self.whole else np.exp(-np.exp(theta[0])))

    def variance(self, theta: Array) -> Array:
        return np.abs(self.rho(theta))

    def shape(self, theta: Array) -> Mapping[str, Array]:
        return {"serial.rho": self.rho(theta)}

    def spread(self, theta: Array) -> Array:
        rho = float(self.rho(theta))
        # At ρ = 0 the limit of (R − I)/|ρ| + I is taken just beside zero, where it is finite.
        rho = rho if abs(rho) > 1e-8 else 1e-8
        Q = self.design.Q
        sums = kept(self.design, ("lag sums", self.series.part.key), lambda: self.links.lag_sums(Q, Q))
        R = Q.T @ self.links.apply(rho, Q) if sums is None else at_rho(sums, rho)
        eye = np.eye(self.design.p)
        return np.asarray((R - (1 - abs(rho)) * eye) / abs(rho))

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        return self.links.colour(float(self.rho(theta)), rng.standard_normal((self.design.n, B)))

    def dense(self, theta: Array) -> Array:
        return self.links.dense(float(self.rho(theta)))


@dataclass(frozen=True, eq=False)
class SpatialPiece:
    """λZR_φZ', R the exponential correlation of the sites.

    Bounds of the range φ: a third of the median distance to the nearest site, and 1.5 times the
    extent; what is shorter is row noise, what is longer cannot be told from a constant.
    """

    key: str
    design: Design
    sites: Sites
    smoothness: float = 0.5

    @property
    def distance(self) -> Array:
        """(S, S) straight distances."""
        return self.sites.distances

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        near = float(np.median(np.asarray(self.sites.tree.query(self.sites.points, k=2)[0])[:, 1]))
        extent = self.sites.extent
        low, high = np.log(near / 3), np.log(1.5 * extent)
        starts = tuple(float(np.clip(np.log(f * extent), low + 0.1, high - 0.1)) for f in (0.05, 0.15, 0.4))
        reach = Parameter(
            f"{self.key}.log_range", float(low), float(high), starts, tuple(np.linspace(low, high, 13))
        )
        c = self.design.sizes(self.sites.part)
        mean, unit = float(c.mean()), -float(np.log(c.sum() / self.design.n))
        ratio = Parameter(
            f"{self.key}.log_ratio",
            float(np.log(1e-8 / c.max())),
            RATIO_HIGH + unit,
            (float(np.log(0.25 / mean)), unit, unit + 1.4),
            tuple(np.linspace(np.log(0.02 / mean), 10.0 + unit, 21)),
            True,
        )
        return reach, ratio

    def R(self, theta: Array) -> Array:
        """(S, S) correlation at one θ (2,)."""
        return matern.kernel(self.distance, float(np.exp(theta[0])), self.smoothness)

    def slope(self, theta: Array) -> Array:
        """(S, S) derivative of R in ln φ."""
        return matern.kernel_slope(self.distance, float(np.exp(theta[0])), self.smoothness)

    def variance(self, theta: Array) -> Array:
        return ratio_of(theta[1], self.parameters[1])

    def shape(self, theta: Array) -> Mapping[str, Array]:
        reach = self.sites.along(matern.PRACTICAL[self.smoothness] * np.exp(theta[0]))
        # With no variance there is no range to speak of.
        return {"spatial.range": np.where(self.variance(theta) > 0, reach, np.nan)}

    def spread(self, theta: Array) -> Array:
        T = self.design.sums(self.sites.part)
        return np.asarray(T.T @ self.R(theta) @ T)

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        white = rng.standard_normal((self.sites.count, B))
        size = np.sqrt(self.variance(theta[:, None])[0])
        if size == 0:
            return np.zeros((self.design.n, B))
        L = np.linalg.cholesky(self.R(theta) + 1e-12 * np.eye(self.sites.count))
        return _rows(self.design, (size * (L @ white))[self.sites.part.codes])

    def dense(self, theta: Array) -> Array:
        codes = self.sites.part.codes
        K = self.variance(theta[:, None])[0] * self.R(theta)
        return _outer(self.design, K[np.ix_(codes, codes)])


def _last(part: Partition) -> npt.NDArray[np.int64]:
    """(G,) rows after the last row of each cell."""
    backwards = Partition(part.key, part.codes[::-1], part.labels)
    return backwards.first


def _rows(design: Design, effects: Array) -> Array:
    return effects if design.root is None else effects * design.root[:, None]


def _outer(design: Design, K: Array) -> Array:
    return K if design.root is None else K * np.outer(design.root, design.root)
