"""Tails of ratios of quadratic forms T = e'Se / e'e under spherical errors: one engine."""

from __future__ import annotations

from dataclasses import dataclass

from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class Tails:
    """P(T < t) and P(T > t) for (B,) values t, each with relative accuracy, and how they were got."""

    lower: Array
    upper: Array
    log_lower: Array
    log_upper: Array
    method: str

    @property
    def two_sided(self) -> Array:
        raise NotImplementedError


@dataclass(frozen=True, eq=False)
class Law:
    """The null law of T = e'Se / e'e, e = My, y spherical.

    swept : cells whose means are taken out of y and X as well (M then projects off the cell
        indicators too), or None.
    """

    form: Form
    basis: Basis
    swept: Partition | None = None

    @property
    def mean(self) -> float:
        raise NotImplementedError

    @property
    def variance(self) -> float:
        raise NotImplementedError

    def tails(self, values: Array, depth: str = "exact") -> Tails:
        raise NotImplementedError

    def quantile(self, probability: float) -> float:
        raise NotImplementedError
