"""All that does not know y: basis, terms, structures, assignment, weights."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal

import numpy as np

from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.structure.group import Groups
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


@dataclass(frozen=True)
class Term:
    """One term of the model.

    name : as in the formula. columns : its coefficients' places. kind : what it is.
    variables : columns of the data that it uses. focus : its interval matters to the user.
    """

    name: str
    columns: tuple[int, ...]
    kind: Literal["constant", "numeric", "factor", "interaction"]
    variables: tuple[str, ...] = ()
    focus: bool = False


@dataclass(frozen=True)
class Contrast:
    """A named linear combination of coefficients, weights (p,). ``of`` names the factor of a mean."""

    name: str
    weights: tuple[float, ...]
    kind: Literal["contrast", "mean"] = "contrast"
    of: str = ""


@dataclass(frozen=True)
class Assignment:
    """Design facts: at which level terms were assigned, and which level was sampled."""

    assigned: Mapping[str, str] = field(default_factory=dict)  # term → group level
    within: Mapping[str, str] = field(default_factory=dict)  # term → stratum level
    sampled: str | None = None

    @property
    def levels(self) -> tuple[str, ...]:
        """Group levels that the design fixes, in a stable order."""
        named = [*self.assigned.values(), *([self.sampled] if self.sampled else [])]
        return tuple(dict.fromkeys(named))


@dataclass(frozen=True, eq=False)
class Design:
    """The columns of a model and how its rows hang together.

    basis : of the (weight-scaled) columns. names : (p,) coefficient names.
    covariates : raw numeric predictors, (n,) each, by column name.
    root : (n,) square roots of precision weights, or None; ``basis`` and every residual are
        already multiplied by it, and indicators of groups carry it (see ``sums``).
    swept : rank taken out by absorbed groups. known : False when only residuals were given.
    """

    basis: Basis
    names: tuple[str, ...]
    terms: tuple[Term, ...]
    group: Groups | None = None
    serial: Series | None = None
    spatial: Sites | None = None
    neighbours: tuple[Neighbours, ...] = ()
    assignment: Assignment = field(default_factory=Assignment)
    covariates: Mapping[str, Array] = field(default_factory=lambda: MappingProxyType({}))
    contrasts: tuple[Contrast, ...] = ()
    root: Array | None = None
    swept: int = 0
    known: bool = True

    @property
    def n(self) -> int:
        return self.basis.n

    @property
    def p(self) -> int:
        return self.basis.p

    @property
    def m(self) -> int:
        """Residual degrees of freedom."""
        return self.n - self.p - self.swept

    @property
    def Q(self) -> Array:
        return self.basis.Q

    # ---- what the structures amount to -------------------------------------------------

    @property
    @once
    def partitions(self) -> Mapping[str, Partition]:
        """Every partition of the rows by key: group levels, "series", "site"."""
        found: dict[str, Partition] = {}
        if self.group is not None:
            found.update({level.key: level for level in self.group.levels})
        if self.serial is not None:
            found.setdefault("series", self.serial.part)
        if self.spatial is not None:
            found.setdefault("site", self.spatial.part)
        return found

    @property
    @once
    def counts(self) -> Mapping[str, int]:
        """What ``Needs.counts`` may ask about: rows, residual df, groups, series, sites …"""
        out = {"rows": self.n, "residual df": self.m}
        if self.group is not None:
            finest = self.group.finest
            out["groups"] = max(level.count for level in self.group.levels)
            out["groups with repeats"] = int(np.sum(finest.sizes > 1))
        if self.serial is not None:
            sizes = self.serial.part.sizes
            out["series"] = self.serial.part.count
            out["rows in the longest series"] = int(sizes.max())
            out["series of 3 rows or more"] = int(np.sum(sizes >= 3))
            out["series of 5 rows or more"] = int(np.sum(sizes >= 5))
        if self.spatial is not None:
            out["sites"] = self.spatial.count
        return out

    @once
    def level_of(self, term: str) -> str:
        """The coarsest group level within which a term's columns are constant, or "row"."""
        found = next(t for t in self.terms if t.name == term)
        if found.kind == "constant":
            return "all rows"
        if self.group is None:
            return "row"
        w = self.basis.R[:, list(found.columns)]
        X = self.Q @ w
        if self.root is not None:
            X = X / self.root[:, None]
        scale = np.abs(X).max(axis=0) + 1e-300
        for level in self.group.levels:
            held = X[level.first][level.codes]
            if np.all(np.abs(X - held) <= 1e-9 * scale):
                return level.key
        return "row"

    def focus(self) -> tuple[Term, ...]:
        return tuple(t for t in self.terms if t.focus)

    # ---- views of the rows -------------------------------------------------------------

    @once
    def sizes(self, part: Partition) -> Array:
        """(G,) rows per cell, or their total precision weight."""
        if self.root is None:
            return part.sizes.astype(float)
        return part.sums(self.root**2)

    @once
    def sums(self, part: Partition) -> Array:
        """(G, p) Z'Q, with √weights in Z."""
        return part.sums(self.Q if self.root is None else self.Q * self.root[:, None])

    @once
    def scores(self, part: Partition) -> Array:
        """(G, p, p) Q_g'Q_g, one small matrix per cell."""
        return np.stack([part.products(column, self.Q) for column in self.Q.T], axis=1)

    @once
    def gram(self, form: Form) -> Array:
        """(p, p) Q'SQ."""
        return np.asarray(self.Q.T @ form.apply(self.Q))


def rows_of(design: Design, values: Any) -> Array:
    """Values on the rows, on the user's scale (weights taken out)."""
    array = np.asarray(values, dtype=float)
    if design.root is None:
        return array
    return np.asarray(array / (design.root if array.ndim == 1 else design.root[:, None]))
