"""Delimited text: what was sniffed is told, and nothing is turned into numbers in silence."""

from __future__ import annotations

import codecs
import csv
import io
import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from clingstone.display import count, listed, quoted, rows
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar"}
MISSING = ("", "NA", "N/A", "NaN", "nan", "null", "NULL", "None", "<NA>", "#N/A", ".")
USUAL_MISSING = ("", "NA")
_BOMS = ((codecs.BOM_UTF8, "utf-8-sig"), (codecs.BOM_UTF16_LE, "utf-16"), (codecs.BOM_UTF16_BE, "utf-16"))


@dataclass(frozen=True)
class Dialect:
    """How a text was read."""

    encoding: str
    separator: str
    decimal: str

    @property
    def origin(self) -> dict[str, str]:
        return {
            "encoding": self.encoding,
            "separator": SEPARATORS[self.separator],
            "decimal mark": "comma" if self.decimal == "," else "point",
        }


def read(
    content: bytes, name: str, columns: Collection[str] | None
) -> tuple[pd.DataFrame, Dialect, list[str]]:
    """A table from the bytes of a file; ``columns`` are those to keep where present.

    A column becomes numbers only if every value that is not missing is one; leading zeros keep it
    text. Raises InputError for bytes that are no text, rows of unequal length, repeated names.
    """
    import pandas as pd

    text, encoding, notes = _decode(content, name)
    if not text.strip():
        raise InputError(f"{name} is empty", "Give a file with a header line and at least one row.")
    separator = _separator(text)
    header = next(csv.reader(io.StringIO(text, newline=""), delimiter=separator))
    names, remarks = tidy_header(header)
    notes += remarks
    _equal_lengths(text, separator, len(names), name)
    raw = pd.read_csv(
        io.StringIO(text),
        sep=separator,
        header=0,
        names=names,
        usecols=[n for n in names if columns is None or n in columns],
        dtype=str,
        keep_default_na=False,
        na_filter=False,
        index_col=False,
        skip_blank_lines=len(names) > 1,
    )
    decimal = _decimal(raw, separator)
    frame = pd.DataFrame({c: typed(raw[c], decimal, notes) for c in raw.columns}, index=raw.index)
    return frame, Dialect(encoding, separator, decimal), notes


def _decode(content: bytes, name: str) -> tuple[str, str, list[str]]:
    for mark, encoding in _BOMS:
        if content.startswith(mark):
            try:
                return content.decode(encoding), "utf-8 with a mark" if "8" in encoding else "utf-16", []
            except UnicodeDecodeError as error:
                raise InputError(f"{name} starts like {encoding} text and is not: {error.reason}") from error
    if b"\x00" in content[:4096]:
        raise InputError(
            f"{name} is not a text file (it holds zero bytes)", "Save it as CSV, or give it its right suffix."
        )
    try:
        return content.decode("utf-8"), "utf-8", []
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        note = f"{name} is not UTF-8 (line {line}); it was read as Windows-1252. Check accented letters."
        return content.decode("cp1252", errors="replace"), "windows-1252", [note]


def _separator(text: str) -> str:
    """The separator that gives the first lines the same number of fields, and the most of them."""
    sample = "\n".join(text.splitlines()[:200])
    best, score = ",", (0.0, 0)
    for mark in SEPARATORS:
        lengths = [len(r) for r in csv.reader(io.StringIO(sample), delimiter=mark) if r]
        width = lengths[0]
        same = sum(n == width for n in lengths) / len(lengths)
        if width > 1 and (same, width) > score:
            best, score = mark, (same, width)
    return best


def tidy_header(header: Sequence[object]) -> tuple[list[str], list[str]]:
    """Column names without blanks round them; nameless ones get a number. Repeated names stop."""
    notes: list[str] = []
    names: list[str] = []
    for i, given in enumerate(header):
        plain = "" if given is None or given != given else str(given).strip()
        names.append(plain or f"column {i + 1}")
        if not plain and i > 0:
            notes.append(f"Column {i + 1} has no name; it is called ‘column {i + 1}’.")
    unique_names(names)
    return names, notes


def unique_names(names: Sequence[str]) -> None:
    """Stop where a column name occurs twice."""
    twice = (
        list(dict.fromkeys(n for n in names if names.count(n) > 1)) if len(set(names)) < len(names) else []
    )
    if twice:
        places = [listed((str(i + 1) for i, n in enumerate(names) if n == t), most=6) for t in twice]
        shown = listed(f"‘{t}’ (columns {p})" for t, p in zip(twice, places, strict=True))
        raise InputError(f"column names occur more than once: {shown}", "Give every column its own name.")


def _equal_lengths(text: str, separator: str, width: int, name: str) -> None:
    """Rows with more or fewer fields than the header are an error: a reader would shift or pad them."""
    wrong: list[tuple[int, int]] = []
    total = 0
    for row in csv.reader(io.StringIO(text, newline=""), delimiter=separator):
        if not row:
            continue
        if len(row) != width:
            wrong.append((total, len(row)))
        total += 1
    if total == 1:
        raise InputError(f"{name} has a header line and no rows", "Give a file with at least one row.")
    if wrong:
        place, found = wrong[0]
        raise InputError(
            f"{count(len(wrong), 'row')} of {name} {'has' if len(wrong) == 1 else 'have'} another "
            "number of fields "
            f"than the header's {width}: {rows(place - 1)} has {found}",
            f"The separator was taken to be a {SEPARATORS[separator]}. Quote fields that contain "
            "it, or mend the rows.",
        )


_COMMA = re.compile(r"\s*[+-]?\d+,\d+(?:[eE][+-]?\d+)?\s*")
_POINT = re.compile(r"\s*[+-]?\d*\.\d+(?:[eE][+-]?\d+)?\s*")
_NUMBER = r"\s*[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?\s*"
_SPECIAL = r"\s*[+-]?(?:inf|infinity)\s*"
_LEADING_ZERO = r"\s*[+-]?0\d+\s*"


def _decimal(raw: pd.DataFrame, separator: str) -> str:
    """A comma where some column holds nothing but such numbers and none holds points."""
    if separator == ",":
        return "."
    comma = point = 0
    for c in raw.columns:
        values = [v for v in raw[c].head(500) if v.strip() not in MISSING]
        comma += (
            bool(values) and any(_COMMA.fullmatch(v) for v in values) and not any("." in v for v in values)
        )
        point += bool(values) and any(_POINT.fullmatch(v) for v in values)
    return "," if comma > 0 and comma >= point else "."


def typed(column: pd.Series, decimal: str, notes: list[str]) -> pd.Series:
    """Numbers or true/false where every value is one, else the text as it stands."""
    import pandas as pd

    plain = column.str.strip()
    gone = plain.isin(MISSING)
    name = str(column.name)
    values = plain[~gone]
    if values.empty:
        return pd.Series(float("nan"), index=column.index, name=name)
    if values.isin(("True", "False", "TRUE", "FALSE", "true", "false")).all() and not gone.any():
        return plain.str.casefold() == "true"
    number = values.str.replace(",", ".", regex=False) if decimal == "," else values
    if number.str.fullmatch(f"(?:{_NUMBER})|(?:{_SPECIAL})", case=False).all():
        zeros = number.str.fullmatch(_LEADING_ZERO)
        if zeros.any():
            notes.append(
                f"{name} has leading zeros ({quoted(values[zeros].unique(), 2)}), so it is kept as text."
            )
            return column.where(~gone)
        _tell_missing(name, plain[gone], notes)
        return _numbers(number, gone, name)
    # These two may be words of the user's own in a column of text: no treatment, a placeholder.
    word = plain.isin(("None", "."))
    notes.extend(f"‘{v}’ in {name} is kept as a value of its own." for v in sorted(set(plain[word])))
    _tell_missing(name, plain[gone & ~word], notes)
    return column.where(~(gone & ~word))


def _numbers(number: pd.Series, gone: pd.Series, name: str) -> pd.Series:
    if not gone.any() and number.str.fullmatch(r"[+-]?\d{1,18}").all():
        return number.astype("int64").rename(name)
    values = number.astype(float)  # rounds correctly, so a written number is read back to its last bit
    return values.reindex(gone.index).rename(name)


def _tell_missing(name: str, codes: pd.Series, notes: list[str]) -> None:
    unusual = codes[~codes.isin(USUAL_MISSING)]
    for code, times in unusual.value_counts().items():
        notes.append(f"‘{code}’ in {name} is read as missing ({count(int(times), 'row')}).")
