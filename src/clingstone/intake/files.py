"""Files: delimited text, Parquet, Excel, Stata. What the reader chose is told."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Collection
from pathlib import Path
from typing import TYPE_CHECKING

from clingstone.display import listed, quoted
from clingstone.intake import delimited
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

Read = tuple["pd.DataFrame", dict[str, str], tuple[str, ...]]

TEXT = (".csv", ".tsv", ".txt", ".csv.gz", ".tsv.gz", ".txt.gz")
EXCEL = (".xlsx", ".xlsm", ".xls")
SUFFIXES = (*TEXT, ".parquet", *EXCEL, ".dta")
_EXTRA = "Install what reads it with: pip install 'clingstone[files]'."


def read(path: str | Path, columns: Collection[str] | None = None) -> Read:
    """A table, where it came from and how it was read, and notes.

    Parameters
    ----------
    path : file whose suffix is one of ``SUFFIXES``.
    columns : names to keep; names that the file lacks are not an error here. Default: all.

    Raises
    ------
    InputError : not found, not readable, unknown suffix, empty, repeated column names.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(f"{path} is a folder", "Name one file in it.")
    suffix = _suffix(path)
    content = _bytes(path)
    if not content:
        raise InputError(f"{path.name} is empty", "Give a file with a header line and at least one row.")
    origin = {"file": path.name, "format": _format(suffix)}
    if suffix in TEXT:
        if suffix.endswith(".gz"):
            content = _unzip(content, path.name)
        frame, dialect, notes = delimited.read(content, path.name, columns)
        return frame, origin | dialect.origin, tuple(notes)
    if suffix in EXCEL:
        frame, sheet, notes = _excel(path, columns)
        origin["sheet"] = sheet
    else:
        frame, notes = _parquet(path) if suffix == ".parquet" else _stata(path)
    delimited.unique_names([str(c) for c in frame.columns])
    if not len(frame):
        raise InputError(f"{path.name} has column names and no rows", "Give a file with at least one row.")
    kept = [c for c in frame.columns if columns is None or str(c) in columns]
    return frame[kept], origin, tuple(notes)


def _suffix(path: Path) -> str:
    name = path.name.casefold()
    found = [s for s in SUFFIXES if name.endswith(s)]
    if not found:
        raise InputError(
            f"{path.name} has {'the suffix ' + path.suffix if path.suffix else 'no suffix'}, which "
            "is not read here",
            f"Files that are read: {listed(SUFFIXES, most=20)}.",
        )
    return max(found, key=len)


def _format(suffix: str) -> str:
    if suffix in TEXT:
        return "delimited text"
    return {".parquet": "Parquet", ".dta": "Stata"}.get(suffix, "Excel")


def _bytes(path: Path) -> bytes:
    """The content, or a message that says why there is none."""
    try:
        return path.read_bytes()
    except FileNotFoundError:
        parent = path.parent
        if not parent.is_dir():
            raise InputError(f"there is no folder {parent}", "Check the path of the file.") from None
        from clingstone.display import near

        close = near(path.name, [p.name for p in parent.iterdir() if p.is_file()])
        hint = f"In that folder there is {quoted(close)}." if close else "Check the path of the file."
        raise InputError(f"there is no file {path.name} in {parent.resolve()}", hint) from None
    except IsADirectoryError:
        raise InputError(f"{path} is a folder", "Name one file in it.") from None
    except OSError as error:
        raise InputError(
            f"{path.name} cannot be read: {error.strerror or error}", "Check the permissions of the file."
        ) from error


def _unzip(content: bytes, name: str) -> bytes:
    try:
        return gzip.decompress(content)
    except (OSError, EOFError, zlib.error) as error:
        raise InputError(f"{name} is not a whole gzip file: {error}", "Get the file again.") from error


def _parquet(path: Path) -> tuple[pd.DataFrame, list[str]]:
    try:
        import pyarrow
        import pyarrow.parquet
    except ImportError as error:
        raise InputError(f"{path.name} needs pyarrow to be read", _EXTRA) from error
    try:
        frame = pyarrow.parquet.ParquetFile(path).read().to_pandas()
    except (pyarrow.ArrowException, OSError, ValueError) as error:
        raise InputError(
            f"{path.name} is not a readable Parquet file: {error}", "Write the file again."
        ) from error
    return _index_to_columns(frame), []


def _index_to_columns(frame: pd.DataFrame) -> pd.DataFrame:
    named = [n for n in frame.index.names if n is not None and n not in frame.columns]
    return frame.reset_index(level=named).reset_index(drop=True) if named else frame


def _stata(path: Path) -> tuple[pd.DataFrame, list[str]]:
    """Value labels are kept as the levels of a factor."""
    import struct

    import pandas as pd

    failures = (ValueError, struct.error, EOFError, OSError, UnicodeDecodeError, KeyError)
    try:
        return pd.read_stata(path), []
    except ValueError as error:
        if "Value labels" not in str(error) and "value label" not in str(error).casefold():
            raise InputError(
                f"{path.name} is not a readable Stata file: {error}", "Save it again."
            ) from error
        try:
            frame = pd.read_stata(path, convert_categoricals=False)
        except failures as second:
            raise InputError(
                f"{path.name} is not a readable Stata file: {second}", "Save it again."
            ) from second
        return frame, ["Some value labels occur twice for one column, so codes are kept instead of labels."]
    except failures as error:
        raise InputError(f"{path.name} is not a readable Stata file: {error}", "Save it again.") from error


def _excel(path: Path, columns: Collection[str] | None) -> tuple[pd.DataFrame, str, list[str]]:
    """The first sheet; its first row that is not empty holds the names."""
    import zipfile

    import pandas as pd

    try:
        with pd.ExcelFile(path) as book:
            sheets = [str(s) for s in book.sheet_names]
            raw = pd.read_excel(book, sheet_name=sheets[0], header=None, dtype=object)
    except ImportError as error:
        raise InputError(f"{path.name} needs a reader of Excel files", _EXTRA) from error
    except (ValueError, KeyError, OSError, zipfile.BadZipFile) as error:
        raise InputError(f"{path.name} is not a readable Excel file: {error}", "Save it again.") from error
    notes = []
    if len(sheets) > 1:
        notes.append(f"{path.name} has {len(sheets)} sheets; ‘{sheets[0]}’, the first, is read.")
    filled = raw.dropna(how="all").dropna(how="all", axis=1)
    if filled.empty:
        raise InputError(
            f"the sheet ‘{sheets[0]}’ of {path.name} is empty", "Put the table on the first sheet."
        )
    names, remarks = delimited.tidy_header(list(filled.iloc[0]))
    body = filled.iloc[1:].reset_index(drop=True)
    body.columns = pd.Index(names)
    return pd.DataFrame({c: _cells(body[c], notes) for c in names}), sheets[0], notes + remarks


def _cells(column: pd.Series, notes: list[str]) -> pd.Series:
    """One kind where all cells are of one kind; text cells are treated as in delimited text."""
    kept = column.dropna()
    if len(kept) and all(isinstance(v, str) for v in kept):
        text = column.where(column.notna(), "").astype(str)
        text.name = column.name
        return delimited.typed(text, ".", notes)
    return column.infer_objects()
