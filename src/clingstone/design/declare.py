"""From settings and columns to a design: structures, assignment, contrasts, in one row order."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Assignment, Contrast, Design, Term
from clingstone.display import count, instead, listed
from clingstone.intake import wanted
from clingstone.intake.columns import Role
from clingstone.intake.frames import Table
from clingstone.intake.model import Blocks, TermBlock
from clingstone.maths.basis import Basis
from clingstone.maths.once import Array, frozen
from clingstone.maths.partition import Partition
from clingstone.needs import InputError
from clingstone.run import Settings
from clingstone.structure import group as grouping
from clingstone.structure import neighbours as neighbourhoods
from clingstone.structure import serial as ordering
from clingstone.structure import spatial as placing
from clingstone.structure.group import Groups
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    import pandas as pd

Order = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Declaration:
    """Which columns were declared for what, before any is read."""

    group: tuple[tuple[str, ...], ...] = ()
    time: str | None = None
    series: tuple[str, ...] | None = None  # outermost first; () for the whole table
    coords: tuple[str, str] | None = None

    @property
    def roles(self) -> dict[Role, tuple[str, ...]]:
        groups = tuple(dict.fromkeys(name for path in self.group for name in path))
        return {
            "group": groups,
            "time": () if self.time is None else (self.time,),
            "series": tuple(name for name in self.series or () if name not in groups),
            "place": self.coords or (),
        }


@dataclass(frozen=True, eq=False)
class Structures:
    """The declared structures, all in one row order. order : that order, of the rows read."""

    order: Order
    group: Groups | None = None
    serial: Series | None = None
    spatial: Sites | None = None
    neighbours: tuple[Neighbours, ...] = field(default=())

    @property
    def notes(self) -> tuple[str, ...]:
        return tuple(
            n for part in (self.group, self.serial, self.spatial) if part is not None for n in part.notes
        )


def declaration(settings: Settings, table: Table) -> Declaration:
    """Columns by role. InputError for options that have nothing to work on."""
    coords = settings.coords or table.place
    group = () if settings.group is None else grouping.paths(settings.group, table.names)
    _idle("series", settings.series, "time", settings.time)
    _idle("neighbours", settings.neighbours, "coords", coords)
    _idle("lonlat", settings.lonlat, "coords", coords)
    _idle("sampled", settings.sampled, "group", settings.group)
    _idle("assigned", settings.assigned, "group", settings.group)
    if settings.weights_kind != "precision":
        _idle("weights_kind", settings.weights_kind, "weights", settings.weights)
        named = [k for k, v in (("time", settings.time), ("coords", coords)) if v is not None]
        if settings.weights is not None and named:
            raise InputError(
                f"{settings.weights} counts rows (weights_kind='frequency') and {named[0]}= was given: rows "
                "that were counted together share one time or place, where their copies would look like "
                "perfect dependence",
                "Give one line per row, or use weights_kind='precision' if each line is a mean of its rows.",
            )
    if coords is not None and (len(coords) != 2 or coords[0] == coords[1]):
        raise InputError(f"coords={coords!r} does not name two different columns", "Give coords=('x', 'y').")
    series = None if settings.series is None else _series_path(settings.series, group, table.names)
    return Declaration(group, settings.time, series, coords)


def _idle(option: str, value: object, needs: str, there: object) -> None:
    if value is not None and there is None:
        raise InputError(
            f"{option}={value!r} was given without {needs}=, so it would do nothing", f"Give {needs}= too."
        )


def _series_path(series: str, group: Sequence[Sequence[str]], known: Sequence[str]) -> tuple[str, ...]:
    """Columns that tell the series apart: those of a group level where it names one."""
    if series == ordering.WHOLE and series not in known:
        return ()
    for path in group:
        for depth in range(1, len(path) + 1):
            if series in (path[depth - 1], "/".join(path[:depth])):
                return tuple(path[:depth])
    return tuple(name for path in grouping.paths(series, known) for name in path)


def structures(
    declared: Declaration, settings: Settings, frame: pd.DataFrame, places: Order, table: Table
) -> Structures:
    """Groups, series, sites and neighbourhoods of rows without missing ids, times or places."""
    groups = grouping.build(declared.group, {str(c): frame[c] for c in frame}) if declared.group else None
    serial, order = None, np.arange(len(frame), dtype=np.int64)
    if declared.time is not None:
        serial, order = ordering.build(
            declared.time,
            frame[declared.time],
            _series(declared, frame, groups),
            groups,
            settings.ties,
            places,
        )
    sites: Sites | None = None
    near: tuple[Neighbours, ...] = ()
    if declared.coords is not None:
        x, y = (frame[c].to_numpy(dtype=float) for c in declared.coords)
        own = declared.coords == table.place
        lonlat = settings.lonlat if settings.lonlat is not None else table.lonlat if own else None
        sites = placing.build(x, y, declared.coords, lonlat, table.unit if own else "", places)
        shapes = None if table.shapes is None or not own else table.shapes.iloc[places]
        near = neighbourhoods.build(sites, settings.neighbours, shapes, _named_column(table, places))
        sites = sites.take(order)
    return Structures(order, _set_apart(groups, order, serial, sites), serial, sites, near)


def _named_column(table: Table, places: Order) -> Callable[[str], pd.Series[Any]]:
    """A column of the user's table on the rows read, for ids in a file of pairs."""

    def column(name: str) -> pd.Series[Any]:
        return table.column(name, "the ids of neighbours=").iloc[places].reset_index(drop=True)

    return column


def _set_apart(
    groups: Groups | None, order: Order, serial: Series | None, sites: Sites | None
) -> Groups | None:
    """Groups in the common order, none of them under the key of the series or the sites."""
    if groups is None:
        return None
    moved = groups.take(order)
    if sites is not None:
        moved = moved.apart_from(sites.part)
    if serial is not None:
        moved = moved.apart_from(replace(serial.part, key="series")).apart_from(serial.part)
    return moved


def _series(declared: Declaration, frame: pd.DataFrame, groups: Groups | None) -> Partition | None:
    if declared.series is None:
        return None
    if not declared.series:
        return Partition(ordering.WHOLE, frozen(np.zeros(len(frame), dtype=np.int32)), (ordering.WHOLE,))
    key = "/".join(grouping.key_of(name) for name in declared.series)
    if groups is not None and key in groups:
        return groups[key]
    part: Partition | None = None
    for name in declared.series:
        own = grouping.cells(name, frame[name])
        part = own if part is None else own.within(part)
    return part


def design(
    found: Blocks,
    held: Structures,
    settings: Settings,
    root: Array | None = None,
    known: bool = True,
) -> Design:
    """The design of blocks that already stand in the order of the structures.

    Raises
    ------
    InputError : unknown focus, contrast, factor, group level; a term that varies inside the unit
        that it was assigned to.
    """
    combinations: tuple[wanted.Combination, ...] = ()
    focus: frozenset[str] = frozenset()
    if known:
        combinations = (*wanted.contrasts(found, settings.contrasts), *wanted.means(found, settings.means))
        focus = wanted.focus(found, settings.focus, combinations)
    else:
        for option in ("focus", "contrasts", "means", "assigned"):
            if getattr(settings, option):
                raise InputError(
                    f"{option}= needs a model, and only residuals were given", "Give the data and model=."
                )
    X = found.X if root is None else found.X * root[:, None]
    return Design(
        basis=Basis.of(X),
        names=found.names,
        terms=tuple(Term(t.name, t.columns, t.kind, t.variables, t.name in focus) for t in found.terms),
        group=held.group,
        serial=held.serial,
        spatial=held.spatial,
        neighbours=held.neighbours,
        assignment=_assignment(found, held.group, settings),
        covariates={k: frozen(v) for k, v in found.covariates.items()},
        contrasts=tuple(Contrast(c.name, c.weights, c.kind, c.of) for c in combinations),
        root=None if root is None else frozen(root),
        known=known,
    )


def _assignment(found: Blocks, groups: Groups | None, settings: Settings) -> Assignment:
    assigned: dict[str, str] = {}
    within: dict[str, str] = {}
    for name, where in (settings.assigned or {}).items():
        term = wanted.term(found, name, "assigned=")
        parts = _unit_and_stratum(name, where)
        unit = _level(groups, parts["unit"], "assigned=")
        _constant_in_units(found, term, unit)
        assigned[term.name] = unit.key
        if "within" in parts:
            stratum = _level(groups, parts["within"], "assigned=")
            _units_in_strata(unit, stratum)
            within[term.name] = stratum.key
    sampled = None if settings.sampled is None else _level(groups, settings.sampled, "sampled=").key
    return Assignment(assigned, within, sampled)


def _unit_and_stratum(name: str, where: Any) -> dict[str, str]:
    parts = {"unit": where} if isinstance(where, str) else dict(where)
    if "unit" not in parts or not set(parts) <= {"unit", "within"}:
        raise InputError(
            f"assigned={{{name!r}: {where!r}}} does not say which unit",
            f"Write {{{name!r}: 'clinic'}} or {{{name!r}: {{'unit': 'clinic', 'within': 'district'}}}}.",
        )
    return parts


def _level(groups: Groups | None, name: str, what: str) -> Partition:
    found = None if groups is None else groups.named(name)
    if found is None:
        keys = [] if groups is None else [level.key for level in groups.levels]
        raise InputError(f"{what} names ‘{name}’, which is no declared group level", instead(name, keys))
    return found


def _constant_in_units(found: Blocks, term: TermBlock, unit: Partition) -> None:
    X = found.X[:, list(term.columns)]
    off = np.any(np.abs(X - X[unit.first][unit.codes]) > 1e-9 * (np.abs(X).max(axis=0) + 1e-300), axis=1)
    if off.any():
        units = np.unique(unit.codes[off])
        named = listed((unit.labels[u] for u in units), most=4)
        raise InputError(
            f"{term.name} is said to be assigned by {unit.key}, but it varies inside {len(units):,} of "
            f"{count(unit.count, 'unit')} ({named})",
            "Name the unit within which it is constant, or leave it out of assigned=.",
        )


def _units_in_strata(unit: Partition, stratum: Partition) -> None:
    if stratum.relation(unit) in ("nests", "same"):
        return
    pair = np.unique(unit.codes.astype(np.int64) * stratum.count + stratum.codes)
    several = int(np.sum(np.bincount(pair // stratum.count) > 1))
    raise InputError(
        f"{several:,} of {count(unit.count, 'unit')} of {unit.key} lie in more than one {stratum.key}, "
        "so assignment cannot have been within it",
        "Name the stratum that holds whole units.",
    )
