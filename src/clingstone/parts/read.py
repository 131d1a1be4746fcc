"""Two passes over partitions: a tree of QR factorizations, then the sums over groups and neighbours."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from clingstone.design.design import Design, Term
from clingstone.design.parted import (
    SAMPLE,
    PartedBasis,
    PartedCells,
    PartedDesign,
    PartedResponse,
    Sums,
    triangle,
)
from clingstone.design.response import Response
from clingstone.intake import columns, formula, frames, model, partitions, wanted
from clingstone.maths.basis import Basis, aliased
from clingstone.maths.once import Array
from clingstone.needs import InputError, NotSupported
from clingstone.run import Missing
from clingstone.structure import group as grouping
from clingstone.structure import serial as ordering
from clingstone.structure.group import Groups

if TYPE_CHECKING:
    import pandas as pd

LAGS = 10  # of Ljung and Box
# Functions of a formula that make a row's columns from that row alone (with those of numpy, of which a
# formula may hold nothing else). What is not named here may learn from all rows.
ROWWISE = frozenset({"I", "Q", "C", "log", "log2", "log10", "exp", "exp2", "exp10"})
CODINGS = frozenset({"Treatment", "Poly", "Sum", "Helmert", "Diff"})  # of a factor whose levels are known
_CALLED = re.compile(r"(?<![\w.])([A-Za-z_]\w*)\s*\(")


@dataclass(frozen=True)
class Asked:
    """Formula and columns that were named."""

    model: str
    group: str | None
    time: str | None
    missing: Missing


@dataclass(frozen=True, eq=False)
class Block:
    """A partition as columns: design, response, groups, time; rows dropped."""

    found: model.Blocks
    frame: pd.DataFrame
    dropped: Mapping[str, int]


@dataclass(frozen=True, eq=False)
class Triangle:
    """R of [X, y] of some rows, their number, and what names the columns."""

    R: Array
    n: int
    names: tuple[str, ...]
    terms: tuple[Term, ...]
    dropped: Mapping[str, int]

    def __add__(self, other: Triangle) -> Triangle:
        if other.names != self.names:
            raise NotSupported("the partitions do not give the same columns of the model", SAMPLE)
        R = triangle(np.vstack([self.R, other.R]))
        keys = dict.fromkeys([*self.dropped, *other.dropped])
        dropped = {k: self.dropped.get(k, 0) + other.dropped.get(k, 0) for k in keys}
        return Triangle(R, self.n + other.n, self.names, self.terms, dropped)


@dataclass(frozen=True, eq=False)
class Plan:
    """The table's named columns, and how a partition is read. factors : their levels, over all rows."""

    table: Any
    asked: Asked
    parsed: formula.Parsed
    factors: Mapping[str, list[Any]]

    @classmethod
    def of(cls, table: Any, asked: Asked) -> Plan:
        import pandas as pd

        parsed = formula.parse(asked.model, [str(c) for c in table.columns])
        called = _CALLED.findall(re.sub(r"`[^`]*`", "", parsed.text))
        learns = [f for f in called if f not in ROWWISE | CODINGS]
        if learns:
            raise NotSupported(
                f"{learns[0]}() learns from all rows at once, and they lie in partitions",
                f"Write the column out before. {SAMPLE}",
            )
        more = [c for c in (asked.group, asked.time) if c is not None]
        table = partitions.named(table, [*parsed.made_of, *parsed.predictors, *more])
        kinds = table.dtypes
        coded = [
            c
            for c in parsed.predictors
            if c in parsed.declared or not pd.api.types.is_numeric_dtype(kinds[c])
        ]
        return cls(table, asked, parsed, {c: partitions.levels(table, c) for c in coded})

    def block(self, part: pd.DataFrame) -> Block:
        import pandas as pd

        part = part.reset_index(drop=True)
        s, parsed = self.asked, self.parsed
        roles: dict[columns.Role, tuple[str, ...]] = {
            "response": parsed.made_of,
            "predictor": parsed.predictors,
            "group": () if s.group is None else (s.group,),
            "time": () if s.time is None else (s.time,),
        }
        got = columns.gather(frames.table(part), roles, s.missing)
        for name, levels in self.factors.items():  # a partition need not hold every level
            got.frame[name] = pd.Categorical(got.frame[name], categories=pd.Index(levels))
        return Block(model.blocks(parsed, got.frame, got.kept), got.frame, got.dropped)

    def read(self) -> tuple[PartedResponse, Mapping[str, int]]:
        """Both passes: the response over its design, and the rows left out by reason.

        Raises InputError where the rows are too few or columns of the model depend on each other.
        """
        top = partitions.over(self.table, self._triangle, Triangle.__add__)
        p = len(top.names)
        if top.n <= p:
            raise InputError(f"{top.n} rows cannot carry {p} coefficients", "Use fewer terms or more rows.")
        if lost := aliased(top.R[:, :p]):
            raise InputError(
                f"the columns of the model are linearly dependent: {top.names[lost[0]]} follows from others",
                f"Drop {top.names[lost[0]]}.",
            )
        R, coef, ss = top.R[:p, :p], top.R[:p, p], float(top.R[p, p] ** 2)
        held: Sums | None = None
        if (group := self.asked.group) is not None:
            table = partitions.together(self.table, group)
            held = partitions.over(table, self._sums(R, coef, group), Sums.__add__)
            ss = held.ss
        cells = (
            None
            if held is None
            else PartedCells(grouping.key_of(str(self.asked.group)), held.labels, held.sizes)
        )
        design = PartedDesign(
            basis=PartedBasis(top.n, R),
            names=top.names,
            terms=top.terms,
            group=None if cells is None else Groups((cells,), "one level"),
            held=held,
        )
        return PartedResponse.made(design, coef, ss), top.dropped

    def _triangle(self, part: pd.DataFrame) -> Triangle:
        block = self.block(part)
        found = block.found
        Z = np.column_stack([found.X, found.y])
        focus = wanted.focus(found, None, ())
        terms = tuple(Term(t.name, t.columns, t.kind, t.variables, t.name in focus) for t in found.terms)
        return Triangle(triangle(Z), len(found.y), found.names, terms, block.dropped)

    def _sums(self, R: Array, coef: Array, group: str) -> Callable[[pd.DataFrame], Sums]:
        inverse, time = np.linalg.inv(R), self.asked.time

        def work(part: pd.DataFrame) -> Sums:
            block = self.block(part)
            cells = grouping.cells(grouping.key_of(group), block.frame[group])
            found, serial, top = block.found, None, 0
            if time is not None:
                serial, order = ordering.build(time, block.frame[time], cells)
                if serial.tick is None and np.any(cells.sizes > 1):
                    raise NotSupported(f"{time} does not run in whole steps in a partition", SAMPLE)
                found, cells, top = found.ordered(order), serial.part, LAGS
            Q = found.X @ inverse
            design = Design(Basis(Q, R), found.names, (), serial=serial)
            e = (found.y - Q @ coef)[:, None]
            return Sums.of(
                Response(design, coef[:, None], e, np.array([float(e[:, 0] @ e[:, 0])])), cells, top
            )

        return work
