"""A design with other numbers of units and rows: what a larger (or smaller) study of the same kind would be.

New units are copies of the units at hand, taken in turn; new rows repeat the rows of their group, and in a
series they follow the last visit at the same steps. New places lie between the old ones and take the
predictors of the nearest. Nothing else is assumed of what was not yet observed.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
from scipy.stats import qmc

from clingstone.design.design import Design
from clingstone.maths.basis import Basis, aliased
from clingstone.maths.once import frozen
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites

Rows = npt.NDArray[np.int64]


def units(design: Design) -> Partition:
    """The independent units: the outermost group level, else series, else places, else the whole table."""
    group = design.group
    if group is not None:
        if group.arrangement == "crossed":
            raise NotSupported(
                "the group levels cross, so more of one level says nothing of the other",
                "Plan with stated numbers instead (icc=, groups=, rows=).",
            )
        return group.levels[0]
    if design.serial is not None and design.serial.part.count > 1:
        return design.serial.part
    if design.spatial is not None:
        return design.spatial.part
    return Partition("all rows", np.zeros(design.n, dtype=np.int32), ("all rows",))


def cells(design: Design) -> Partition:
    """Where rows are added: the finest group level, else series, else places, else the whole table."""
    if design.group is not None:
        return design.group.finest
    if design.serial is not None:
        return design.serial.part
    return units(design)


def enlarged(design: Design, count: int, factor: float) -> Design:
    """The design with ``count`` units and ``factor`` times the rows in each cell.

    Raises NotSupported when the columns of the model can no longer be told apart.
    """
    unit, cell = units(design), cells(design)
    source, copy, turn = _rows(unit, cell, count, factor)
    X = (design.Q @ design.basis.R)[source]
    spatial = None if design.spatial is None else _places(design.spatial, unit, source, copy)
    if spatial is not None and unit.relation(design.spatial.part) == "same":  # type: ignore[union-attr]
        X = _nearest(design, spatial, source, copy)
    order = np.arange(len(source))
    serial = None
    if design.serial is not None:
        serial, order = _later(design.serial, source, copy, turn)
        X, source, copy = X[order], source[order], copy[order]
        spatial = None if spatial is None else replace(spatial, part=_reordered(spatial.part, order))
    # What is zero in the rows kept is zero up to the rounding of QR, and must not count as a column.
    X = np.where(np.abs(X) <= 1e-10 * np.abs(design.Q @ design.basis.R).max(axis=0), 0.0, X)
    lost = aliased(X)
    if lost:
        names = ", ".join(design.names[j] for j in lost)
        raise NotSupported(f"{count} units cannot tell {names} from the rest of the model", "Plan for more.")
    group = design.group
    levels = () if group is None else tuple(_copied(level, source, copy) for level in group.levels)
    return Design(
        basis=Basis.of(X),
        names=design.names,
        terms=design.terms,
        group=None if group is None else Groups(levels, group.arrangement),
        serial=serial,
        spatial=spatial,
        contrasts=design.contrasts,
        root=None if design.root is None else frozen(design.root[source]),
    )


def _rows(unit: Partition, cell: Partition, count: int, factor: float) -> tuple[Rows, Rows, Rows]:
    """Source row, copy of its unit, and turn within its cell, for every new row."""
    source: list[Rows] = []
    copies: list[int] = []
    members = [np.flatnonzero(unit.codes == u) for u in range(unit.count)]
    turns: list[Rows] = []
    for j in range(count):
        rows = members[j % unit.count]
        for c in np.unique(cell.codes[rows]):
            own = rows[cell.codes[rows] == c]
            size = max(1, round(len(own) * factor))
            index = np.arange(size)
            source.append(own[index % len(own)])
            turns.append(index // len(own))
            copies += [j // unit.count] * size
    return np.concatenate(source), np.array(copies, dtype=np.int64), np.concatenate(turns)


def _copied(part: Partition, source: Rows, copy: Rows) -> Partition:
    """The cells of a partition, each copy a cell of its own."""
    pair = copy * part.count + part.codes[source]
    distinct, codes = np.unique(pair, return_inverse=True)
    labels = tuple(f"{part.labels[v % part.count]} {v // part.count + 1}" for v in distinct)
    return Partition(part.key, frozen(codes.astype(np.int32).ravel()), labels)


def _reordered(part: Partition, order: Rows) -> Partition:
    return Partition(part.key, frozen(part.codes[order]), part.labels)


def _later(series: Series, source: Rows, copy: Rows, turn: Rows) -> tuple[Series, Rows]:
    """The series of the new rows, in time order, and that order. Repeated rows follow the last visit."""
    part = _copied(series.part, source, copy)
    last = np.zeros(series.part.count)
    np.maximum.at(last, series.part.codes, series.elapsed)
    first = np.full(series.part.count, np.inf)
    np.minimum.at(first, series.part.codes, series.elapsed)
    span = (last - first + series.step)[series.part.codes[source]]
    elapsed = series.elapsed[source] + turn * span
    order = np.lexsort((elapsed, part.codes))
    tick = None
    if series.tick is not None:
        tick = series.tick[source] + turn * np.round(span / series.step).astype(np.int64)
        tick = frozen(tick[order])
    new = replace(series, part=_reordered(part, order), elapsed=frozen(elapsed[order]), tick=tick)
    return new, order


def _places(sites: Sites, unit: Partition, source: Rows, copy: Rows) -> Sites:
    """Places of the new rows; copies lie anywhere in the rectangle of the old ones, evenly spread."""
    part = _copied(sites.part, source, copy)
    first = part.first
    xy = sites.xy[sites.part.codes[source[first]]].copy()
    new = np.flatnonzero(copy[first] > 0)
    if len(new):
        low, high = sites.xy.min(axis=0), sites.xy.max(axis=0)
        xy[new] = low + qmc.Halton(2, scramble=False).random(len(new) + 1)[1:] * (high - low)
    return Sites(part, frozen(xy), sites.kind, sites.unit, sites.names)


def _nearest(design: Design, placed: Sites, source: Rows, copy: Rows) -> npt.NDArray[np.float64]:
    """Columns of the new rows: those of a copied place come from the place nearest to where it lies now."""
    sites = design.spatial
    assert sites is not None
    X = design.Q @ design.basis.R
    rows = source.copy()
    near = np.asarray(sites.tree.query(placed.points)[1])
    first = sites.part.first
    moved = copy > 0
    rows[moved] = first[near[placed.part.codes[moved]]]
    return np.asarray(X[rows])
