"""Files of statistical packages: SPSS, SAS, Stata, with their value labels."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from clingstone.display import count, listed, quoted
from clingstone.intake.opened import Source, missing_reader, unreadable

if TYPE_CHECKING:
    import pandas as pd

Labels = Mapping[float, str]


def opened(path: Path, suffix: str, origin: dict[str, str]) -> Source:
    """Columns and rows from the file's own directory; columns are read when asked for."""
    try:
        import pyreadstat
    except ImportError as error:
        raise missing_reader(path, "pyreadstat", "files") from error
    readers: dict[str, Any] = {
        ".sav": pyreadstat.read_sav,
        ".zsav": pyreadstat.read_sav,
        ".por": pyreadstat.read_por,
        ".dta": pyreadstat.read_dta,
        ".sas7bdat": pyreadstat.read_sas7bdat,
        ".xpt": pyreadstat.read_xport,
    }
    reader = readers[suffix]
    catalog, notes = _catalog(path) if suffix == ".sas7bdat" else ({}, [])
    failures = (pyreadstat.ReadstatError, pyreadstat.PyreadstatError, ValueError, OSError)
    try:
        declares = {"user_missing": True} if suffix in (".sav", ".zsav") else {}
        _, about = reader(str(path), metadataonly=True, **declares, **catalog)
    except failures as error:
        raise unreadable(path, origin["format"], error) from error
    names = tuple(about.column_names)
    rows = about.number_rows
    if rows is None:  # some writers leave the number out
        rows = len(reader(str(path), usecols=list(names[:1]))[0])
    labels: dict[str, Labels] = {n: dict(v) for n, v in about.variable_value_labels.items()}

    def read(columns: Collection[str]) -> tuple[pd.DataFrame, list[str]]:
        import pandas as pd

        wanted = [n for n in names if n in columns]
        try:
            held, _ = reader(str(path), usecols=wanted, **catalog)
        except failures as error:
            raise unreadable(path, origin["format"], error) from error
        told: list[str] = []
        made = {n: with_labels(held[n], labels.get(n, {}), told) for n in wanted}
        told += [_declared(n, about.missing_ranges[n]) for n in wanted if n in about.missing_ranges]
        return pd.DataFrame(made), told

    codes = {
        n: {label: float(code) for code, label in v.items() if _is_number(code)} for n, v in labels.items()
    }
    return Source(names, int(rows), read, origin, tuple(notes), codes=codes)


def _catalog(path: Path) -> tuple[dict[str, Any], list[str]]:
    """SAS keeps labels in a file of their own: that of the same name, or formats.sas7bcat, beside it."""
    for name in (f"{path.stem}.sas7bcat", "formats.sas7bcat"):
        if (path.parent / name).is_file():
            return {"catalog_file": str(path.parent / name)}, [f"Value labels are those of {name}."]
    return {}, []


def with_labels(column: pd.Series, labels: Labels, notes: list[str]) -> pd.Series:
    """Labels as the levels of a factor, in the order of their codes, where every value that occurs has one.

    A scale with a label at its ends, or with one for a code such as 99, stays a column of numbers, and
    the labels are told.
    """
    import pandas as pd

    if not labels or not all(_is_number(code) for code in labels):
        return column
    name = str(column.name)
    there = set(column.dropna().unique())
    if not there <= set(labels):
        shown = listed((f"{code:g} ‘{label}’" for code, label in labels.items()), most=4)
        some = there & set(labels)
        notes.append(
            f"{name} has labels for {len(some)} of its {count(len(there), 'value')} only ({shown}), so it is "
            "kept as numbers."
        )
        return column
    if len(set(labels.values())) < len(labels):
        words = list(labels.values())
        twice = quoted(dict.fromkeys(w for w in words if words.count(w) > 1), 2)
        notes.append(
            f"Two codes of {name} have one label ({twice}), so its codes are kept instead of labels."
        )
        return column
    order = sorted(labels)
    place = {code: i for i, code in enumerate(order)}
    codes = column.map(place).fillna(-1).to_numpy(dtype=np.int64)
    levels = pd.Index([labels[c] for c in order], dtype=object)
    return pd.Series(
        pd.Categorical.from_codes(codes, dtype=pd.CategoricalDtype(levels, ordered=True)),
        index=column.index,
        name=column.name,
    )


def _declared(name: str, ranges: list[dict[str, Any]]) -> str:
    spans = [
        f"{r['lo']:g}" if r["lo"] == r["hi"] else f"{r['lo']:g} to {r['hi']:g}"
        for r in ranges
        if _is_number(r["lo"])
    ] or [f"‘{r['lo']}’" for r in ranges]
    return f"{name} is missing where it is {listed(spans, last='or')}, as the file declares.".replace(
        "-", "−"
    )


def _is_number(code: object) -> bool:
    return isinstance(code, int | float) and not isinstance(code, bool)
