"""Error processes along time that stand beside the lattice of ``Fits``: fading with row noise, ARMA.

Each is one error model of the whole response, V on the scale where σ² = 1, searched by restricted
likelihood as the nodes of the lattice are.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from clingstone.covariance.algebras import Layered
from clingstone.covariance.components import Parameter
from clingstone.covariance.pieces import RHO_HIGH, SerialPiece, ratio_of, ratio_parameter
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.arma import Steps, autocovariances, from_partial
from clingstone.maths.basis import Gram
from clingstone.maths.longrun import Grid
from clingstone.maths.nugget import Visits
from clingstone.maths.once import Array, kept, once
from clingstone.maths.search import Optimum, minimise
from clingstone.needs import NotSupported, memory
from clingstone.structure.serial import Series

MISSING = 600  # missing steps that an exact ARMA likelihood takes in


class Process(Protocol):
    """An error model along time. θ (d,) are its working parameters."""

    @property
    def key(self) -> str: ...

    @property
    def design(self) -> Design: ...

    @property
    def parameters(self) -> tuple[Parameter, ...]: ...

    def gram(self, theta: Array, response: Response) -> Gram: ...

    def shape(self, theta: Array) -> Mapping[str, float]:
        """What readers know: "rho" per base step, "noise" the share of row noise, φ and θ."""
        ...


@dataclass(frozen=True, eq=False)
class Fading:
    """ρ^|t − s| by elapsed time within series, ρ ≥ 0 (continuous-time AR(1))."""

    design: Design
    key: str = field(default="fading", init=False)

    @property
    @once
    def algebra(self) -> Layered:
        piece = SerialPiece("serial", self.design, _series(self.design), fading=True)
        return Layered(self.design, (piece,), piece)

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        return self.algebra.parameters

    def gram(self, theta: Array, response: Response) -> Gram:
        return self.algebra.gram(theta, response)

    def shape(self, theta: Array) -> Mapping[str, float]:
        return {"rho": float(np.exp(-np.exp(theta[0])))}


@dataclass(frozen=True, eq=False)
class Noisy:
    """The same process of variance λσ² plus row noise σ²; rows at one time are replicates of a visit."""

    design: Design
    key: str = field(default="fading with row noise", init=False)

    @property
    @once
    def visits(self) -> Visits:
        return Visits.of(_series(self.design).steps, self.design.root)

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        series = _series(self.design)
        at = np.flatnonzero(~(series.steps == 0))
        apart = SerialPiece("serial", self.design, series.take(at), fading=True)
        return (*apart.parameters, ratio_parameter("serial.log_ratio", self.visits.weight, self.design.n))

    def gram(self, theta: Array, response: Response) -> Gram:
        sums = kept(response, ("visit sums",), lambda: self._sums(response))
        plain = reml.independent(self.design.p, response.ss)
        return self.visits.gram(self._rho(theta), self._ratio(theta), sums, plain)

    def _sums(self, response: Response) -> Array:
        return self.visits.sums(np.hstack([self.design.Q, response.residual]))

    def _rho(self, theta: Array) -> float:
        return float(np.exp(-np.exp(theta[0])))

    def _ratio(self, theta: Array) -> float:
        return float(ratio_of(theta[1:2], self.parameters[1])[0])

    def shape(self, theta: Array) -> Mapping[str, float]:
        ratio = self._ratio(theta) * float(np.mean(self.visits.weight) * self.visits.part.count)
        return {"rho": self._rho(theta), "noise": 1 / (1 + ratio / self.design.n)}


@dataclass(frozen=True, eq=False)
class Arma:
    """ARMA(p, q) within series on whole steps, missing steps taken in exactly."""

    design: Design
    p: int
    q: int

    @property
    def key(self) -> str:
        return f"arma:{self.p}:{self.q}"

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        starts = {1: ((0.2, 0.9), (-0.4, 0.4)), 2: ((-0.2, 0.3), (0.0,))}
        out = []
        for kind, name, count in ((0, "partial", self.p), (1, "moving", self.q)):
            for i in range(1, count + 1):
                start = starts.get(i, ((0.0,), (0.0,)))[kind]
                scan = tuple(np.linspace(-3.6, 5.2, 45))
                out.append(Parameter(f"serial.{name}_{i}", -RHO_HIGH, RHO_HIGH, start, scan))
        return tuple(out)

    @property
    def steps(self) -> Steps:
        return kept(self.design, ("arma steps",), lambda: Steps(_grid(self.design)))

    def coefficients(self, theta: Array) -> tuple[Array, Array]:
        """φ (p,) and θ (q,), z_t = Σφ_i z_{t−i} + a_t + Σθ_j a_{t−j}."""
        partial = np.tanh(theta)
        return from_partial(partial[: self.p]), -from_partial(-partial[self.p :])

    def gram(self, theta: Array, response: Response) -> Gram:
        wide = kept(response, ("arma rows",), lambda: self._wide(response))
        phi, moving = self.coefficients(theta)
        return self.steps.gram(phi, moving, wide, self.design.p)

    def _wide(self, response: Response) -> Array:
        N, k = self.steps.grid.N, self.design.p + response.B + len(self.steps.missing)
        memory(4 * 8.0 * N * k, f"{N:,} steps with {len(self.steps.missing)} missing ones")
        return self.steps.filled(np.hstack([self.design.Q, response.residual]))

    def shape(self, theta: Array) -> Mapping[str, float]:
        phi, moving = self.coefficients(theta)
        gamma = autocovariances(phi, moving, 2)
        out = {"rho": float(gamma[1] / gamma[0]), "marginal": float(gamma[0])}
        out.update({f"φ{i}": float(v) for i, v in enumerate(phi, start=1)})
        out.update({f"θ{i}": float(v) for i, v in enumerate(moving, start=1)})
        return out


def search(process: Process, response: Response, warm: Optimum | None = None) -> Optimum:
    """The restricted-likelihood optimum for one column of y; kept with the response."""
    m = response.design.m

    def value(theta: Array) -> float:
        return float(reml.criterion(process.gram(theta, response), m)[0])

    key = ("process", process.key)
    return kept(response, key, lambda: minimise(value, process.parameters, warm=warm))


def _series(design: Design) -> Series:
    assert design.serial is not None
    return design.serial


def _grid(design: Design) -> Grid:
    series = _series(design)
    assert series.tick is not None
    grid = Grid.of(series.part.codes, series.tick)
    missing = grid.N - design.n
    if missing > MISSING:
        raise NotSupported(
            f"{missing:,} steps inside series are missing; an exact ARMA likelihood takes in {MISSING}",
            "Use car1, which works by elapsed time.",
        )
    return grid
