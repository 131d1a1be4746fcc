"""Delimited text: what was sniffed is told, and nothing is turned into numbers in silence."""

from __future__ import annotations

import codecs
import csv
import io
import warnings
from collections.abc import Callable, Collection, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, rows
from clingstone.intake.words import EXACT, MISSING, USUAL_MISSING, decimal_mark, numeric, typed
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar"}
SAMPLE = 1000  # rows from which the decimal mark and the likely columns of numbers are taken
_BLOCK = 1 << 23  # bytes looked over at a time
_HEAD = 1 << 18

Source = Path | bytes  # UTF-8, with or without a mark


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


@dataclass(frozen=True, eq=False)
class Text:
    """A text that was looked over once, its columns not yet read.

    numeric : columns that hold numbers in the first rows.
    """

    source: Source
    names: tuple[str, ...]
    rows: int
    dialect: Dialect
    numeric: frozenset[str]
    notes: tuple[str, ...]

    def read(self, columns: Collection[str]) -> tuple[pd.DataFrame, list[str]]:
        """The columns named, in one pass, and notes.

        A column becomes numbers only if every value that is not missing is one; leading zeros keep
        it text. Columns that look like numbers are read as such at once; where that might hide a
        leading zero, a code or a word, they are read again as text, which decides.
        """
        import pandas as pd

        wanted = [n for n in self.names if n in columns]
        number = [n for n in wanted if n in self.numeric]
        notes: list[str] = []
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", pd.errors.DtypeWarning)  # such columns are read again
            raw = self._parse(
                usecols=wanted,
                dtype={n: str for n in wanted if n not in self.numeric},
                na_values={n: list(MISSING) for n in number},
                keep_default_na=False,
                **_exact(),
                decimal=self.dialect.decimal,
            )
        doubtful = self._doubtful(raw[number])
        if doubtful:
            again = self._words(doubtful)
            raw = raw.assign(**{n: again[n] for n in doubtful})
        done = set(number) - set(doubtful)
        made = {n: raw[n] if n in done else typed(raw[n], self.dialect.decimal, notes) for n in wanted}
        return pd.DataFrame(made, index=raw.index, copy=False), notes

    def _doubtful(self, numbers: pd.DataFrame) -> list[str]:
        """Columns whose numbers may stand for something that the text alone shows."""
        kinds = {str(n): _kind(numbers[n]) for n in numbers}
        whole = [n for n, kind in kinds.items() if "whole" in kind]
        gaps = [n for n, kind in kinds.items() if "gaps" in kind]
        found = {n for n, kind in kinds.items() if "words" in kind or "long" in kind}
        if whole and self._any(_needless_zero):
            found.update(whole)
        if gaps and self._any(_unusual_code):
            found.update(gaps)
        return [n for n in kinds if n in found]

    def _any(self, holds: Callable[[bytes, str], bool]) -> bool:
        return any(holds(block, self.dialect.separator) for block in _blocks(self.source))

    def _words(self, columns: Collection[str] | None = None, most: int | None = None) -> pd.DataFrame:
        return self._parse(usecols=columns, dtype=str, na_filter=False, nrows=most)

    def _parse(self, **options: Any) -> pd.DataFrame:
        import pandas as pd

        with opened(self.source) as stream:
            frame: pd.DataFrame = pd.read_csv(
                stream,
                sep=self.dialect.separator,
                header=0,
                names=list(self.names),
                index_col=False,
                skip_blank_lines=len(self.names) > 1,
                encoding="utf-8-sig",
                **options,
            )
        return frame


def _exact() -> dict[str, str]:
    """What makes a written number be read back to its last bit; from pandas 3.1 on it always is."""
    import pandas as pd

    major, minor = (int(part) for part in pd.__version__.split(".")[:2])
    return {} if (major, minor) >= (3, 1) else {"float_precision": "round_trip"}


def look(source: Source, name: str) -> Text:
    """Encoding, separator, decimal mark, column names and number of rows of a text.

    Raises InputError for bytes that are no text, rows of unequal length, repeated names.
    """
    source, encoding, notes = _utf8(source, name)
    head = _head(source)
    if not head.strip():
        raise InputError(f"{name} is empty", "Give a file with a header line and at least one row.")
    separator = _separator(head)
    try:
        header = next(csv.reader(io.StringIO(head.lstrip("\r\n"), newline=""), delimiter=separator))
    except csv.Error as error:
        raise InputError(f"the first line of {name} cannot be read: {error}", "Mend it.") from error
    names, remarks = tidy_header(header)
    number = _scan(source, separator, len(names), name)
    if len(names) == 1:
        number = -1  # blank lines are rows then: counted when they are read
    bare = Text(source, tuple(names), number, Dialect(encoding, separator, "."), frozenset(), ())
    sample = bare._words(most=SAMPLE)
    decimal = decimal_mark(sample, separator)
    if number < 0:
        number = len(bare._words())
    return Text(
        source,
        tuple(names),
        number,
        Dialect(encoding, separator, decimal),
        frozenset(n for n in names if numeric(sample[n], decimal)),
        (*notes, *remarks),
    )


def opened(source: Source) -> BinaryIO:
    return io.BytesIO(source) if isinstance(source, bytes) else source.open("rb")


def _blocks(source: Source) -> Iterator[bytes]:
    """The bytes in blocks that end with a line."""
    with opened(source) as stream:
        while block := stream.read(_BLOCK):
            yield block if block.endswith(b"\n") else block + stream.readline()


def _head(source: Source) -> str:
    with opened(source) as stream:
        return stream.read(_HEAD).decode("utf-8-sig", errors="ignore")


def _utf8(source: Source, name: str) -> tuple[Source, str, list[str]]:
    """The same text in UTF-8 with ordinary line ends, and how it was written."""
    with opened(source) as stream:
        start = stream.read(4096)
    if start.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        try:
            return _whole(source).decode("utf-16").encode(), "utf-16", []
        except UnicodeDecodeError as error:
            raise InputError(f"{name} starts like utf-16 text and is not: {error.reason}") from error
    if b"\x00" in start:
        raise InputError(
            f"{name} is not a text file (it holds zero bytes)", "Save it as CSV, or give it its right suffix."
        )
    if b"\r" in start and b"\n" not in start:
        source = _whole(source).replace(b"\r", b"\n")
    try:
        for block in _blocks(source):
            block.decode("utf-8")
    except UnicodeDecodeError as error:
        if start.startswith(codecs.BOM_UTF8):
            raise InputError(f"{name} starts like utf-8 text and is not: {error.reason}") from error
        whole = _whole(source)
        line = whole.count(b"\n", 0, whole.index(error.object) + error.start) + 1
        note = f"{name} is not UTF-8 (line {line}); it was read as Windows-1252. Check accented letters."
        return whole.decode("cp1252", errors="replace").encode(), "windows-1252", [note]
    return source, "utf-8 with a mark" if start.startswith(codecs.BOM_UTF8) else "utf-8", []


def _whole(source: Source) -> bytes:
    return source if isinstance(source, bytes) else source.read_bytes()


def _separator(head: str) -> str:
    """The separator that gives the first lines the same number of fields, and the most of them."""
    sample = "\n".join(head.splitlines()[:200])
    best, score = ",", (0.0, 0)
    for mark in SEPARATORS:
        try:
            lengths = [len(r) for r in csv.reader(io.StringIO(sample), delimiter=mark) if r]
        except csv.Error:
            continue
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


# ---- every line looked at once ---------------------------------------------------------------


def _scan(source: Source, separator: str, width: int, name: str) -> int:
    """How many rows stand below the header.

    Rows with more or fewer fields than the header are an error: a reader would shift or pad them.
    """
    lines = 0
    for block in _blocks(source):
        found = _equal_lines(block.removeprefix(codecs.BOM_UTF8), ord(separator), width)
        if found is None:
            lines = _by_reader(source, separator, width, name)
            break
        lines += found
    if lines == 1:
        raise InputError(f"{name} has a header line and no rows", "Give a file with at least one row.")
    return lines - 1


def _kind(column: pd.Series) -> frozenset[str]:
    """What has to be asked of a column that was read as numbers: words, gaps, whole, long (beyond 2⁵³)."""
    if column.dtype.kind not in "if":
        return frozenset({"words"})
    if column.dtype.kind == "i":
        return frozenset({"whole"})
    value = column.to_numpy()
    there = value[~np.isnan(value)]
    gaps, whole = len(there) < len(value), bool(np.all(there == np.round(there)))
    long = whole and float(np.abs(there).max(initial=0.0)) >= EXACT
    return frozenset(w for w, is_so in (("gaps", gaps), ("whole", whole), ("long", long)) if is_so)


def _around(separator: str) -> npt.NDArray[np.bool_]:
    """(256,) which bytes may stand before or behind a field."""
    table = np.zeros(256, dtype=bool)
    table[list(b' \t\r\n"' + separator.encode())] = True
    return table


def _needless_zero(block: bytes, separator: str) -> bool:
    """Whether some field starts with a 0 and another digit behind it, with or without a sign."""
    sign: npt.NDArray[np.uint8] = np.frombuffer(block, dtype=np.uint8)
    digit = (sign - ord("0")) < 10  # unsigned: what is below "0" wraps round
    found = (sign[1:-1] == ord("0")) & digit[2:] & ~digit[:-2] & (sign[:-2] != ord("."))
    place = np.flatnonzero(found) + 1
    before, around = sign[place - 1], _around(separator)
    if around[before].any():
        return True
    signed = place[((before == ord("+")) | (before == ord("-"))) & (place > 1)]
    return bool(around[sign[signed - 2]].any())


def _unusual_code(block: bytes, separator: str) -> bool:
    """Whether some field may be a code for missing other than nothing and NA."""
    around = _around(separator)
    sign: npt.NDArray[np.uint8] = np.frombuffer(block, dtype=np.uint8)
    dot = np.flatnonzero(sign[1:-1] == ord(".")) + 1
    if np.any(around[sign[dot - 1]] & around[sign[dot + 1]]):
        return True
    return any(m.encode() in block for m in MISSING if m not in (*USUAL_MISSING, "."))


def _equal_lines(block: bytes, separator: int, width: int) -> int | None:
    """Lines of a block that have ``width`` fields each, or None where some may not.

    A separator or line end counts where an even number of quotes stands before it. That holds if every
    quote that opens stands at the start of a field.
    """
    sign: npt.NDArray[np.uint8] = np.frombuffer(block, dtype=np.uint8)
    marks, ends = sign == separator, sign == ord("\n")
    if b'"' not in block:
        kind = ends[np.flatnonzero(marks | ends)]
        if ends[-1] and width > 1 and len(kind) % width == 0:
            line = kind.reshape(-1, width)
            if line[:, -1].all() and not line[:, :-1].any():
                return len(line)  # the usual case, at once
    else:
        quote = sign == ord('"')
        outside = np.bitwise_and(np.cumsum(quote, dtype=np.int32), 1) == 0
        opening = np.flatnonzero(quote & ~outside)
        before = sign[np.maximum(opening, 1) - 1]
        starts = (before == separator) | (before == ord("\n")) | (before == ord('"')) | (opening == 0)
        if not outside[-1] or not starts.all():
            return None
        marks &= outside
        ends &= outside
    last = np.flatnonzero(ends)
    if not ends[-1]:
        last = np.append(last, len(sign))
    fields = np.diff(np.searchsorted(np.flatnonzero(marks), last), prepend=0) + 1
    length = np.diff(last, prepend=-1) - 1
    blank = (length == 0) | ((length == 1) & (sign[last - 1] == ord("\r")))
    return int(np.sum(~blank)) if np.all((fields == width) | blank) else None


def _by_reader(source: Source, separator: str, width: int, name: str) -> int:
    """The same by the standard library, line by line, which has the last word."""
    wrong: list[tuple[int, int]] = []
    total = 0
    with io.TextIOWrapper(opened(source), encoding="utf-8-sig", newline="") as lines:
        try:
            for row in csv.reader(lines, delimiter=separator):
                if not row:
                    continue
                if len(row) != width:
                    wrong.append((total, len(row)))
                total += 1
        except csv.Error as error:
            raise InputError(
                f"{name} cannot be read after {count(total, 'line')}: {error}", "Look for a stray quote."
            ) from error
    if wrong:
        place, found = wrong[0]
        raise InputError(
            f"{count(len(wrong), 'row')} of {name} {'has' if len(wrong) == 1 else 'have'} another "
            "number of fields "
            f"than the header's {width}: {rows(place - 1)} has {found}",
            f"The separator was taken to be a {SEPARATORS[separator]}. Quote fields that contain "
            "it, or mend the rows.",
        )
    return total
