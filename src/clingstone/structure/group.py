"""Groups: one level, nested levels, or crossed factors."""

from __future__ import annotations

import itertools
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, quoted
from clingstone.maths.once import frozen
from clingstone.maths.partition import Partition
from clingstone.needs import InputError

Arrangement = Literal["one level", "nested", "crossed"]
SLASH = "\N{DIVISION SLASH}"  # stands for a slash in a column's own name, where keys part levels by one
APART = " (group)"  # ends the name of a level that would else share it with the series or the sites


@dataclass(frozen=True, eq=False)
class Groups:
    """Group levels of the rows.

    levels : partitions, outermost first when nested. A level's ``key`` is the user's own name of
        it: "clinic", or "clinic/ward" for the inner level of a nesting (its cells are pairs).
    arrangement : how the levels stand to each other.
    notes : what a reader should know (recycled labels, singletons), one sentence each.
    """

    levels: tuple[Partition, ...]
    arrangement: Arrangement
    notes: tuple[str, ...] = ()

    @property
    def finest(self) -> Partition:
        return self.levels[-1]

    def __getitem__(self, key: str) -> Partition:
        for level in self.levels:
            if level.key == key:
                return level
        raise KeyError(key)

    def __contains__(self, key: str) -> bool:
        return any(level.key == key for level in self.levels)

    def named(self, name: str) -> Partition | None:
        """The level of that key, or the only level whose last column has that name."""
        if name in self:
            return self[name]
        own = key_of(name)
        if own in self:
            return self[own]
        found = [v for v in self.levels if v.key.removesuffix(APART).rsplit("/", 1)[-1] == own]
        return found[0] if len(found) == 1 else None

    def title(self, key: str) -> str:
        """What a sentence calls a level: "lamb", or "Variety within Block" where its labels recur."""
        level = self.named(key)
        outer = [v for v in self.levels if key.startswith(f"{v.key}/")]
        if level is not None and outer:
            around = max(outer, key=lambda v: len(v.key))
            inner = {
                label[len(around.labels[parent]) + 1 :]
                for label, parent in zip(level.labels, level.parent(around), strict=True)
            }
            if len(inner) == level.count:
                return key.rsplit("/", 1)[-1]
        return title_of(key)

    def apart_from(self, other: Partition) -> Groups:
        """The same levels, one of them renamed where it bears the key of another partition of other cells.

        What is worked out per partition is kept under its key, so two must not share one.
        """
        clash = [v for v in self.levels if v.key == other.key and v.relation(other) != "same"]
        if not clash:
            return self
        renamed = tuple(replace(v, key=v.key + APART) if v in clash else v for v in self.levels)
        note = f"The group level {other.key} is called ‘{other.key}{APART}’, apart from "
        f"{other.key} as structure."
        return replace(self, levels=renamed, notes=(*self.notes, note))

    def take(self, rows: npt.NDArray[Any]) -> Groups:
        """The same levels on some rows, in the order given."""
        return replace(self, levels=tuple(level.take(rows) for level in self.levels))


def paths(group: str | Sequence[str], known: Sequence[str]) -> tuple[tuple[str, ...], ...]:
    """Columns of each declared grouping, outermost first.

    A name that is itself a column is one level, even with a slash in it; otherwise a slash parts
    the levels of a nesting.
    """
    specs = (group,) if isinstance(group, str) else tuple(group)
    odd = [s for s in specs if not isinstance(s, str)]
    if odd:
        raise InputError(
            f"group={group!r} holds {odd[0]!r} where the name of a column is needed",
            "Write group='a', group='a/b' or group=['a', 'b'].",
        )
    found = tuple((s,) if s in known else tuple(part.strip() for part in s.split("/")) for s in specs)
    flat = [name for path in found for name in path]
    if not flat or any(not name for name in flat):
        raise InputError(f"group={group!r} names no column in one of its places", "Write group='a' or 'a/b'.")
    twice = sorted({name for name in flat if flat.count(name) > 1})
    if twice:
        raise InputError(
            f"group={group!r} names {quoted(twice)} more than once, and a level can stand in one place only",
            "Name each column once.",
        )
    return found


def key_of(name: str) -> str:
    """The key of a column as a level: its name, a slash of its own told from one that parts levels."""
    return name.replace("/", SLASH)


def title_of(key: str) -> str:
    """ "ward within clinic" for "clinic/ward"; other keys as they are."""
    return " within ".join(reversed(key.split("/")))


def cells(key: str, values: Any) -> Partition:
    """Cells of one column: numbers in order, text in natural order ("w2" before "w10").

    Text is kept as it is, blanks and leading zeros included. Whole numbers stored as decimals lose
    the ".0" in their label. A categorical column keeps its own order.
    """
    import pandas as pd

    column = pd.Series(np.asarray(values) if not hasattr(values, "dtype") else values)
    if isinstance(column.dtype, pd.CategoricalDtype):
        codes, distinct = column.cat.codes.to_numpy(), list(column.cat.categories)
        used = np.unique(codes[codes >= 0])
        order = [int(i) for i in used]
    else:
        codes, uniques = pd.factorize(column)
        distinct = list(uniques)
        numbers = isinstance(uniques, np.ndarray) and uniques.dtype.kind in "iuf"
        order = (
            np.argsort(uniques, kind="stable").tolist()
            if numbers
            else sorted(range(len(distinct)), key=lambda i: _natural(distinct[i]))
        )
    if np.any(codes < 0):
        raise ValueError("a group is missing in some row; settle missing ids first")
    place = np.empty(len(distinct), dtype=np.int32)
    place[order] = np.arange(len(order), dtype=np.int32)
    return Partition(key, frozen(place[codes]), _distinct_labels([distinct[i] for i in order]))


def build(spec: Sequence[Sequence[str]], columns: Mapping[str, Any]) -> Groups:
    """Group levels from columns without missing values.

    Parameters
    ----------
    spec : what :func:`paths` gives: one path per grouping; several paths are crossed.
    columns : (n,) values of every named column.

    Notes
    -----
    The cells of an inner level are pairs with the level around it, so labels that recur under
    several parents are told apart. Levels of a nesting that add nothing (one value for all rows,
    the same cells as the level around them, one row each) are left out where another level
    remains, and a note says so.
    """
    notes: list[str] = []
    chains = [_chain(path, columns, notes) for path in spec]
    levels = tuple(level for chain in chains for level in chain)
    if len(chains) == 1:
        arrangement: Arrangement = "one level" if len(levels) == 1 else "nested"
    else:
        levels, arrangement = _arrange(levels, notes)
    for level in levels:
        notes.extend(_remarks(level))
    return Groups(levels, arrangement, tuple(notes))


def _natural(value: Any) -> tuple[Any, ...]:
    if isinstance(value, (bool, np.bool_)):
        return (0, float(value))
    if isinstance(value, (int, float, np.integer, np.floating)):
        return (1, float(value))
    parts = re.split(r"(\d+)", str(value))
    return (2, [(0, int(p), "") if p.isdecimal() else (1, 0, p) for p in parts if p], str(value))


def _label(value: Any) -> str:
    if isinstance(value, (float, np.floating)) and float(value).is_integer():
        return str(int(value))
    return str(value)


def _distinct_labels(values: Sequence[Any]) -> tuple[str, ...]:
    """Labels as text; a text that reads like a number of the same column says that it is text."""
    plain = [_label(v) for v in values]
    if len(set(plain)) == len(plain):
        return tuple(plain)
    return tuple(
        f"{p} (text)" if isinstance(v, str) and plain.count(p) > 1 else p
        for p, v in zip(plain, values, strict=True)
    )


def _chain(path: Sequence[str], columns: Mapping[str, Any], notes: list[str]) -> list[Partition]:
    """The levels of one nesting, outermost first."""
    levels: list[Partition] = []
    for name in path:
        own = cells(key_of(name), columns[name])
        notes.extend(_lookalikes(own))
        if levels:
            notes.extend(_turned(levels[-1], own) or _recycled(levels[-1], own))
            own = own.within(levels[-1])
        levels.append(own)
    return _informative(levels, notes) if len(levels) > 1 else levels


def _informative(levels: list[Partition], notes: list[str]) -> list[Partition]:
    """Levels that tell something; at least one is kept."""
    kept: list[Partition] = []
    for level in levels:
        if kept and level.count == kept[-1].count:
            notes.append(
                f"Each {_word(kept[-1])} holds one {_word(level)} only: "
                f"the two are one level here, kept as {kept[-1].key}."
            )
        elif level.count == 1:
            notes.append(f"{level.key} has one value in all rows, so it is left out as a level.")
        elif kept and level.count == level.n:
            notes.append(f"Every row has its own {_word(level)}, so {level.key} is left out as a level.")
        else:
            kept.append(level)
    return kept or levels[-1:]


def _arrange(levels: tuple[Partition, ...], notes: list[str]) -> tuple[tuple[Partition, ...], Arrangement]:
    """Groupings that were declared side by side: crossed, unless the data nest them all in one chain."""
    apart: list[Partition] = []
    for level in levels:
        twin = next((a for a in apart if a.count == level.count and a.relation(level) == "same"), None)
        if twin is None:
            apart.append(level)
        else:
            notes.append(
                f"{twin.key} and {level.key} put the same rows together: they are one level, kept "
                f"as {twin.key}."
            )
    levels = tuple(apart)
    if len(levels) == 1:
        return levels, "one level"
    ordered = sorted(levels, key=lambda level: level.count)
    pairs = list(itertools.pairwise(ordered))
    if pairs and all(outer.relation(inner) == "nests" for outer, inner in pairs):
        chain = " / ".join(level.key for level in ordered)
        notes.append(f"Declared side by side, but the labels are nested: {chain}. They are read as nested.")
        return tuple(ordered), "nested"
    notes.extend(_counters(levels))
    return levels, "crossed"


def _word(level: Partition) -> str:
    return level.key.rsplit("/", 1)[-1]


def _turned(outer: Partition, inner: Partition) -> list[str]:
    """A note when groups of the inner column are made of whole groups of the outer one."""
    if not 1 < inner.count < outer.count or inner.relation(outer) != "nests":
        return []
    return [
        f"Every group of {inner.key} is made of whole groups of {outer.key}, so the nesting "
        f"{outer.key}/{inner.key} seems turned round: as declared, {inner.key} is not a level. Declare "
        f"{inner.key}/{outer.key} to have both."
    ]


def _counters(levels: tuple[Partition, ...]) -> list[str]:
    """A note when the labels of a crossed grouping are bare counters, which may start anew in every group."""
    for inner in sorted(levels, key=lambda level: level.count):
        first = inner.labels[0] in ("0", "1") and all(label.isdecimal() for label in inner.labels)
        if not first or int(inner.labels[-1]) - int(inner.labels[0]) != inner.count - 1:
            continue
        outer = max(levels, key=lambda level: level.count)
        if outer is inner or outer.count < inner.count:
            continue
        return [
            f"Labels of {inner.key} are counters ({inner.labels[0]} to {inner.labels[-1]}): declared side by "
            f"side with {outer.key}, ‘{inner.labels[0]}’ is one and the same {inner.key} wherever it occurs. "
            f"If it is another one in each {outer.key}, declare {outer.key}/{inner.key}."
        ]
    return []


def _recycled(outer: Partition, inner: Partition) -> list[str]:
    """A note when labels of the inner column occur under several parents."""
    pair = outer.codes.astype(np.int64) * inner.count + inner.codes
    parents = np.bincount(np.unique(pair) % inner.count, minlength=inner.count)
    again = np.flatnonzero(parents > 1)
    if not len(again):
        return []
    some = quoted((inner.labels[i] for i in again), most=4)
    return [
        f"Labels of {inner.key} recur in several groups of {outer.key} ({some}): each pair of "
        f"{outer.key} and {inner.key} is a group of its own."
    ]


def _lookalikes(level: Partition) -> list[str]:
    """A note on labels that differ only by blanks, case or leading zeros; they stay apart."""
    if all(v.isascii() and v.isdecimal() and (v == "0" or v[0] != "0") for v in level.labels):
        return []
    alike: dict[str, list[str]] = {}
    for label in level.labels:
        key = re.sub(r"\s+", " ", label.replace(" (text)", "").strip().casefold())
        if re.fullmatch(r"\d+(\.0*)?", key):
            key = str(int(float(key))) if len(key) < 15 else key.lstrip("0")
        alike.setdefault(key, []).append(label)
    same = [labels for labels in alike.values() if len(labels) > 1]
    if not same:
        return []
    shown = listed((" = ".join(f"‘{x}’" for x in labels) for labels in same), most=3)
    return [
        f"Some labels of {level.key} differ only by blanks, case or leading zeros: {shown}. "
        "They are kept as different groups."
    ]


def _remarks(level: Partition) -> list[str]:
    """One group, a group per row, singletons."""
    if level.count == 1:
        return [
            f"{level.key} has one value (‘{level.labels[0]}’) in all rows: it holds no grouping information."
        ]
    if level.count == level.n:
        return [f"Every row has its own {level.key}: no rows share one, so it holds no grouping information."]
    return _single(level) + _giant(level)


def _giant(level: Partition) -> list[str]:
    """A note when one group of several holds most of the rows."""
    most = int(level.sizes.argmax())
    if level.count == 2 or 2 * level.sizes[most] <= level.n:
        return []
    return [
        f"One group of {level.key}, ‘{level.labels[most]}’, holds {level.sizes[most]:,} of {level.n:,} rows: "
        f"what the other {level.count - 1:,} tell of likeness within {level.key} rests on few rows."
    ]


def _single(level: Partition) -> list[str]:
    """A note on groups of one row."""
    single = int(np.sum(level.sizes == 1))
    if single:
        return [
            f"{single:,} of {count(level.count, 'group')} of {level.key} "
            f"{'holds' if single == 1 else 'hold'} one row each: they stay in, but tell nothing of likeness "
            f"within {level.key}."
        ]
    return []
