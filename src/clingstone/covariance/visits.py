"""A process along time beside row noise: rows of one series and time are repeats of one visit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.components import Parameter
from clingstone.covariance.pieces import SerialPiece, ratio_of, ratio_parameter
from clingstone.design.design import Design
from clingstone.maths.nugget import Visits
from clingstone.maths.once import Array, once
from clingstone.structure.serial import Series


@dataclass(frozen=True, eq=False)
class VisitPiece:
    """λZKZ' beside row noise I: Z puts rows on the visits of their series, K_ts = ρ^|t − s|, ρ ≥ 0.

    Its variance λσ² is what two rows of one visit share; rows Δ base steps apart share λσ²ρ^Δ.
    θ is (ln rate of ρ, ln λ).
    """

    key: str
    design: Design
    series: Series

    @property
    @once
    def visits(self) -> Visits:
        return Visits.of(self.series.steps, self.design.root)

    @property
    @once
    def _apart(self) -> SerialPiece:
        """The process from visit to visit."""
        return SerialPiece(self.key, self.design, self.series.take(self.visits.part.first), fading=True)

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        ratio = ratio_parameter(f"{self.key}.log_ratio", self.visits.weight, self.design.n)
        return (*self._apart.parameters, ratio)

    def rho(self, theta: Array) -> Array:
        """ρ per base step."""
        return self._apart.rho(theta)

    def variance(self, theta: Array) -> Array:
        return ratio_of(theta[1], self.parameters[1])

    def shape(self, theta: Array) -> Mapping[str, Array]:
        return {"serial.rho": self.rho(theta)}

    def spread(self, theta: Array) -> Array:
        T = self.visits.sums(self.design.Q)
        return np.asarray(T.T @ self.visits.links.apply(float(self.rho(theta)), T))

    def at(self, theta: Array) -> tuple[float, float]:
        """ρ and λ at one θ (2,)."""
        return float(self.rho(theta)), float(self.variance(theta[:, None])[0])

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        return self.visits.process(*self.at(theta), rng, B)

    def dense(self, theta: Array) -> Array:
        return self.visits.dense(*self.at(theta)) - np.eye(self.design.n)
