"""One measure at several times side by side, and the same rows under each other."""

from __future__ import annotations

import re
from collections.abc import Collection, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from clingstone.display import count, instead, listed, quoted
from clingstone.intake.frames import Table
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

ROW, OCCASION = "row", "occasion"
NO = "none"
_NUMBERED = re.compile(r"(?P<stem>.*?[^\d\s_.])(?P<mark>[_. ]?)(?P<number>\d+)")


def sisters(names: Sequence[str], stem: str) -> dict[int, str]:
    """Number → column, of the columns ``stem`` followed by a number: bp_1, bp.2, bp 3, bp4."""
    parts = [(name, _NUMBERED.fullmatch(name)) for name in names]
    found = [(int(m["number"]), name) for name, m in parts if m and m["stem"] == stem]
    return dict(sorted(found))


def lengthened(table: Table, stems: Sequence[str]) -> Table:
    """The rows of each table row under each other, one for each number.

    Each stem becomes a column; ``occasion`` is the number behind it, ``row`` the row it came from
    (counted from 1); every other column is repeated. Several stems go together by their numbers.

    Raises
    ------
    InputError : a stem without two columns, stems with unequal numbers, names that are taken.
    """
    found = {stem: sisters(table.names, stem) for stem in stems}
    for stem, columns in found.items():
        if len(columns) < 2:
            raise InputError(
                f"wide={stem!r} names {count(len(columns), 'column')} with a number behind it, and two are "
                "needed",
                instead(stem, sorted(_stems(table.names)))
                or "Columns such as bp_1 and bp_2 have the stem bp.",
            )
    numbers = list(found[stems[0]])
    for stem, columns in found.items():
        if list(columns) != numbers:
            raise InputError(
                f"the columns of ‘{stem}’ are numbered {listed(columns)}, and those of ‘{stems[0]}’ "
                f"{listed(numbers)}",
                "Measures that were taken at one set of occasions can be put under each other together.",
            )
    inside = [name for columns in found.values() for name in columns.values()]
    rest = tuple(n for n in table.names if n not in inside)
    taken = [n for n in (*stems, ROW, OCCASION) if n in rest]
    if taken:
        raise InputError(
            f"{quoted(taken)} would be made by wide= and {'is' if len(taken) == 1 else 'are'} in the data "
            "already",
            f"Rename {'it' if len(taken) == 1 else 'them'}.",
        )
    k = len(numbers)

    def fetch(name: str) -> pd.Series:
        import pandas as pd

        if name == ROW:
            return pd.Series(np.repeat(table.places + 1, k), name=name)
        if name == OCCASION:
            return pd.Series(np.tile(np.array(numbers, dtype=np.int64), table.rows), name=name)
        if name in found:
            side = pd.concat([table.fetch(c) for c in found[name].values()], ignore_index=True)
            order = np.arange(k * table.rows).reshape(k, table.rows).T.ravel()
            return side.iloc[order].reset_index(drop=True).rename(name)
        return table.fetch(name).repeat(k).reset_index(drop=True)

    def hold(names: Collection[str]) -> Table:
        whole = {c for n in names for c in (found[n].values() if n in found else (n,))}
        return lengthened(table.holding(whole), stems)

    shown = listed(inside, most=6)
    note = (
        f"{table.rows:,} rows stand for {k * table.rows:,}: {shown} are put under each other. "
        f"{ROW} is the row of the table, {OCCASION} the number in the name."
    )
    return replace(
        table,
        names=(*rest, *stems, ROW, OCCASION),
        rows=k * table.rows,
        fetch=fetch,
        index=None,
        notes=(*table.notes, note),
        picked=None,
        shapes=None if table.shapes is None else table.shapes.repeat(k).reset_index(drop=True),
        hold=None if table.hold is None else hold,
    )


def noticed(
    names: Sequence[str], used: Sequence[str], response: Sequence[str], alone: bool
) -> tuple[str, ...]:
    """A note where the response is one of several columns that hold one measure at several times.

    alone : neither groups nor times were declared, so that each row counts as one of its own. Then
    a clear case stops the work until the user says what it is.
    """
    for name in response:
        match = _NUMBERED.fullmatch(name)
        stem = match["stem"] if match and name in names else name
        found = sisters(names, stem)
        others = [n for n in found.values() if n != name]
        if name not in names:
            if len(found) > 1:
                raise _offer(stem, found, f"there is no column ‘{name}’")
            continue
        if len(found) < 3 or name not in found.values() or any(n in used for n in others):
            continue
        if alone and _clear(found):
            raise _offer(stem, found, f"the model uses {name} alone")
        return (
            f"{listed(found.values(), most=6)} look like one measure at several times, side by side, and "
            f"{name} alone is used. To put them under each other, give wide='{stem}'.",
        )
    return ()


def _clear(found: dict[int, str]) -> bool:
    """Numbers set apart by a sign, or counted on from 0 or 1; pm1, pm10 and pm25 are something else."""
    numbers = list(found)
    apart = all(not name[: len(name) - len(str(n))][-1].isalnum() for n, name in found.items())
    return apart or (numbers[0] in (0, 1) and numbers[-1] - numbers[0] == len(numbers) - 1)


def _offer(stem: str, found: dict[int, str], why: str) -> InputError:
    return InputError(
        f"{listed(found.values(), most=6)} look like one measure at several times, side by side, and {why}",
        f"With wide='{stem}' they are put under each other: the model is then ‘{stem} ~ …’, with "
        f"group='{ROW}' and time='{OCCASION}', or columns of your own. If they are no such thing, say "
        f"wide='{NO}'.",
    )


def _stems(names: Sequence[str]) -> set[str]:
    return {m["stem"] for n in names if (m := _NUMBERED.fullmatch(n)) and len(sisters(names, m["stem"])) > 1}
