"""Error processes along time that stand beside the lattice of ``Fits``: fading with row noise, ARMA.

Each is one error model of the whole response, V on the scale where σ² = 1, searched by restricted
likelihood as the nodes of the lattice are.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from clingstone.covariance.components import Parameter
from clingstone.covariance.fits import Fits
from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import RHO_HIGH, SerialPiece
from clingstone.covariance.visits import VisitPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.arma import Steps, autocovariances, from_partial
from clingstone.maths.armaeach import ArmaEach
from clingstone.maths.basis import Gram
from clingstone.maths.each import Minima
from clingstone.maths.longrun import Grid
from clingstone.maths.once import Array, kept, once
from clingstone.maths.search import Optimum, minimise
from clingstone.needs import NotSupported, memory
from clingstone.structure.serial import Series

MISSING = 600  # missing steps of one series that an exact ARMA likelihood takes in


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
    """ρ^|t − s| by elapsed time within series, ρ ≥ 0 (continuous-time AR(1)).

    noise : of variance λσ² beside row noise σ²; rows at one time are then repeats of a visit.
    """

    design: Design
    noise: bool = False

    @property
    def key(self) -> str:
        return "fading with row noise" if self.noise else "fading"

    @property
    @once
    def _piece(self) -> SerialPiece | VisitPiece:
        series = _series(self.design)
        if self.noise:
            return VisitPiece("serial", self.design, series)
        return SerialPiece("serial", self.design, series, fading=True)

    @property
    @once
    def algebra(self) -> Layered:
        return Layered(self.design, (self._piece,), self._piece)

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        return self.algebra.parameters

    def gram(self, theta: Array, response: Response) -> Gram:
        return self.algebra.gram(theta, response)

    def shape(self, theta: Array) -> Mapping[str, float]:
        out = {"rho": float(self._piece.rho(theta))}
        if isinstance(self._piece, VisitPiece):
            total = float(self._piece.variance(theta[:, None])[0] * self._piece.visits.weight.sum())
            out["noise"] = 1 / (1 + total / self.design.n)
        return out


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
        return kept(self.design, ("arma steps",), lambda: _steps(self.design))

    def coefficients(self, theta: Array) -> tuple[Array, Array]:
        """φ (p,) and θ (q,), z_t = Σφ_i z_{t−i} + a_t + Σθ_j a_{t−j}."""
        partial = np.tanh(theta)
        return from_partial(partial[: self.p]), -from_partial(-partial[self.p :])

    def gram(self, theta: Array, response: Response) -> Gram:
        wide = kept(response, ("arma rows",), lambda: self._wide(response))
        phi, moving = self.coefficients(theta)
        return self.steps.gram(phi, moving, wide, self.design.p)

    def _wide(self, response: Response) -> Array:
        N, k = self.steps.grid.N, self.design.p + response.B + self.steps.depth
        memory(4 * 8.0 * N * k, f"{N:,} steps with up to {self.steps.depth} missing ones in a series")
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


def search_together(process: Arma, fits: Fits) -> None:
    """The optimum for the one column of ``fits``, found with all that it is one of and kept for ``search``.

    Nothing where the column stands alone, the process is not searched for many at once, or the search of
    this column did not settle (as on the edge of what is stationary).
    """
    if fits.whole is None:
        return
    (whole, b), key = fits.whole, ("process", process.key)
    found = kept(whole.response, ("each", *key), lambda: _minima(process, whole.response))
    if found is not None:
        one = Optimum(
            found.theta[:, b], float(found.value[b]), found.at_bound[:, b], bool(found.converged[b])
        )
        kept(fits.response, key, lambda: one)


def _minima(process: Arma, response: Response) -> Minima | None:
    grid = process.steps.grid
    if not ArmaEach.carries(grid, process.p, process.q):
        return None
    Q, E = grid.spread(response.design.Q), grid.spread(response.residual)
    return ArmaEach(grid, Q, E, process.p, process.q).minima(process.parameters, response.design.m)


def _series(design: Design) -> Series:
    assert design.serial is not None
    return design.serial


def _steps(design: Design) -> Steps:
    series = _series(design)
    assert series.tick is not None
    steps = Steps(Grid.of(series.part.codes, series.tick))
    if steps.depth > MISSING:
        raise NotSupported(
            f"{steps.depth:,} steps inside one series are missing; "
            f"an exact ARMA likelihood takes in {MISSING}",
            "Use car1, which works by elapsed time.",
        )
    return steps
