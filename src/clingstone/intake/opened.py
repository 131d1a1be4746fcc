"""A file that was opened, and what its readers say when they cannot go on."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from clingstone.display import instead, quoted
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

Read = Callable[[Collection[str]], "tuple[pd.DataFrame, list[str]]"]


@dataclass(frozen=True, eq=False)
class Source:
    """A file that was opened: its columns and rows are known, and none but those asked for is read.

    read : names → a frame of those columns, and notes. origin : file, format, how it was read.
    geometry : of a geographic file, a frame with its shapes alone. codes : column → label → the number
    that the label stands for.
    """

    names: tuple[str, ...]
    rows: int
    read: Read = field(repr=False)
    origin: Mapping[str, str]
    notes: tuple[str, ...] = ()
    geometry: pd.DataFrame | None = field(default=None, repr=False)
    codes: Mapping[str, Mapping[str, float]] = field(default_factory=dict, repr=False)


def missing_reader(path: Path, package: str, extra: str) -> InputError:
    """What to install for a file of this kind."""
    return InputError(
        f"{path.name} needs {package} to be read, which is not installed",
        f"Install it with: pip install 'clingstone[{extra}]'.",
    )


def unreadable(path: Path, kind: str, error: Exception) -> InputError:
    said = " ".join(str(error).split())
    return InputError(f"{path.name} is not a readable {kind} file: {said}", "Save it again.")


def chosen(sheet: str | None, sheets: list[str], path: Path, what: str) -> tuple[str, list[str]]:
    """The sheet or layer to read, and a note where there are others."""
    if sheet is not None and sheet not in sheets:
        raise InputError(f"{path.name} has no {what} ‘{sheet}’", instead(sheet, sheets))
    if sheet is not None or len(sheets) == 1:
        return sheet or sheets[0], []
    others = quoted(sheets[1:], most=6)
    return sheets[0], [
        f"{path.name} has {len(sheets)} {what}s; ‘{sheets[0]}’, the first, is read ({others} "
        f"{'is' if len(sheets) == 2 else 'are'} not). Another is named with sheet=."
    ]
