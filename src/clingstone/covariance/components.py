"""Dependence structures as components of V = Σ σ²ₖKₖ(φₖ) + σ²I, and the algebra of a set of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from clingstone.design.response import Response
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array
from clingstone.needs import Family


@dataclass(frozen=True)
class Component:
    """One dependence structure that a design declares.

    key : "group:<level>", "serial" or "spatial". part : key of its partition in the design.
    label : how a sentence names it ("clinic", "time within patient", "place").
    """

    key: str
    family: Family
    part: str
    label: str


@dataclass(frozen=True)
class Parameter:
    """One working parameter of an algebra: name, bounds on the working scale, starting values."""

    name: str
    low: float
    high: float
    starts: tuple[float, ...]


class Algebra(Protocol):
    """V⁻¹ and ln|V| of one set of components over one design, V on the scale where σ² = 1."""

    parameters: tuple[Parameter, ...]

    def gram(self, theta: Array, response: Response) -> Gram:
        """[Q, e]'V⁻¹[Q, e] at one θ (d,), for all B columns."""
        ...

    def variances(self, theta: Array, sigma2: Array) -> Mapping[str, Array]:
        """Variance of each component and of "row" noise; θ (d, B), σ² (B,)."""
        ...

    def shape(self, theta: Array) -> Mapping[str, Array]:
        """What readers know: "serial.rho" per base step, "spatial.range" the practical range in the sites' unit."""
        ...

    def spread(self, key: str, theta: Array) -> Array:
        """(p, p) Q'KQ of one component ("row" gives Q'Q or Q'Ω⁻¹Q), at one θ (d,); K has unit variance."""
        ...

    def draw(self, theta: Array, sigma2: float, rng: np.random.Generator, B: int) -> Array:
        """(n, B) errors drawn from V, on the scale of the basis (√weights applied)."""
        ...

    def whiten(self, theta: Array, block: Array) -> Array:
        """L⁻¹ block with LL' = V, or any equivalent square root: (n, k) → (n, k)."""
        ...
