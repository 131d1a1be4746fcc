"""Files: what each holds and how it was read; its columns are read when they are asked for."""

from __future__ import annotations

import gzip
import json
import zlib
from collections.abc import Collection
from pathlib import Path
from typing import TYPE_CHECKING

from clingstone.display import count, listed, quoted
from clingstone.intake import delimited, words
from clingstone.intake.opened import Source, chosen, missing_reader, unreadable
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

TEXT = (".csv", ".tsv", ".txt", ".csv.gz", ".tsv.gz", ".txt.gz")
ARROW = (".parquet", ".feather", ".arrow")
EXCEL = (".xlsx", ".xlsm", ".xls")
LABELLED = (".sav", ".zsav", ".por", ".dta", ".sas7bdat", ".xpt")
MAPS = (".gpkg", ".geojson", ".shp")
SUFFIXES = (*TEXT, *ARROW, *EXCEL, *LABELLED, *MAPS)
_FORMATS = {
    **dict.fromkeys(TEXT, "delimited text"),
    **dict.fromkeys(EXCEL, "Excel"),
    ".parquet": "Parquet",
    ".feather": "Feather",
    ".arrow": "Feather",
    ".sav": "SPSS",
    ".zsav": "SPSS",
    ".por": "SPSS",
    ".dta": "Stata",
    ".sas7bdat": "SAS",
    ".xpt": "SAS",
    ".gpkg": "GeoPackage",
    ".geojson": "GeoJSON",
    ".shp": "shapefile",
}


def source(path: str | Path, sheet: str | None = None) -> Source:
    """A file opened.

    Parameters
    ----------
    path : file whose suffix is one of ``SUFFIXES``.
    sheet : of a file that holds several tables (Excel, GeoPackage), which one; by default the first.

    Raises
    ------
    InputError : not found, not readable, unknown suffix, what reads it is not installed, empty,
        repeated column names, no such sheet.
    """
    path = Path(path)
    if path.is_dir():
        raise InputError(f"{path} is a folder", "Name one file in it.")
    suffix = _suffix(path)
    _there(path)
    if sheet is not None and suffix not in (*EXCEL, ".gpkg"):
        raise InputError(
            f"sheet={sheet!r} was given, and {path.name} holds one table only", "Leave sheet= out."
        )
    found = _opened(path, suffix, sheet)
    delimited.unique_names(list(found.names))
    if not found.rows:
        raise InputError(f"{path.name} has column names and no rows", "Give a file with at least one row.")
    return found


def _opened(path: Path, suffix: str, sheet: str | None) -> Source:
    """Each reader is imported when such a file comes."""
    origin = {"file": path.name, "format": _FORMATS[suffix]}
    if suffix in TEXT:
        text = delimited.look(_unzipped(path) if suffix.endswith(".gz") else path, path.name)
        return Source(text.names, text.rows, text.read, origin | text.dialect.origin, text.notes)
    if suffix in EXCEL:
        return _excel(path, sheet, origin)
    if suffix in ARROW:
        return _arrow(path, origin)
    if suffix in LABELLED:
        from clingstone.intake import labelled

        return labelled.opened(path, suffix, origin)
    from clingstone.intake import maps

    return maps.opened(path, sheet, origin)


def _suffix(path: Path) -> str:
    name = path.name.casefold()
    found = [s for s in SUFFIXES if name.endswith(s)]
    if not found:
        raise InputError(
            f"{path.name} has {'the suffix ' + path.suffix if path.suffix else 'no suffix'}, which "
            "is not read here",
            f"Files that are read: {listed(SUFFIXES, most=30)}.",
        )
    return max(found, key=len)


def _there(path: Path) -> None:
    """Raises InputError that says why there is no content."""
    try:
        with path.open("rb") as stream:
            if not stream.read(1):
                raise InputError(
                    f"{path.name} is empty", "Give a file with a header line and at least one row."
                )
    except FileNotFoundError:
        parent = path.parent
        if not parent.is_dir():
            raise InputError(f"there is no folder {parent}", "Check the path of the file.") from None
        from clingstone.display import near

        close = near(path.name, [p.name for p in parent.iterdir() if p.is_file()])
        hint = f"In that folder there is {quoted(close)}." if close else "Check the path of the file."
        raise InputError(f"there is no file {path.name} in {parent.resolve()}", hint) from None
    except OSError as error:
        raise InputError(
            f"{path.name} cannot be read: {error.strerror or error}", "Check the permissions of the file."
        ) from error


def _unzipped(path: Path) -> bytes:
    try:
        return gzip.decompress(path.read_bytes())
    except (OSError, EOFError, zlib.error) as error:
        raise InputError(f"{path.name} is not a whole gzip file: {error}", "Get the file again.") from error


# ---- Parquet, Feather ------------------------------------------------------------------------


def _arrow(path: Path, origin: dict[str, str]) -> Source:
    """Columns by name, among them what was the index of a pandas frame; a nameless index is left out."""
    kind = origin["format"]
    try:
        import pyarrow
        import pyarrow.feather
        import pyarrow.parquet
    except ImportError as error:
        raise missing_reader(path, "pyarrow", "files") from error
    try:
        if kind == "Parquet":
            parquet = pyarrow.parquet.ParquetFile(path)
            schema, rows = parquet.schema_arrow, parquet.metadata.num_rows
        else:
            with pyarrow.memory_map(str(path)) as mapped:
                table = pyarrow.ipc.open_file(mapped)
                schema = table.schema
                rows = sum(table.get_batch(i).num_rows for i in range(table.num_record_batches))
    except (pyarrow.ArrowException, OSError, ValueError) as error:
        raise unreadable(path, kind, error) from error
    names = tuple(n for n in schema.names if not n.startswith("__index_level_"))

    def read(columns: Collection[str]) -> tuple[pd.DataFrame, list[str]]:
        wanted = [n for n in names if n in columns]
        if kind == "Parquet":
            held = pyarrow.parquet.ParquetFile(path).read(columns=wanted)
        else:
            held = pyarrow.feather.read_table(path, columns=wanted)
        return held.to_pandas(ignore_metadata=True), []

    found = Source(names, rows, read, origin)
    shapes = (schema.metadata or {}).get(b"geo")
    if shapes is None:
        return found
    from clingstone.intake import maps

    return maps.of_parquet(path, found, json.loads(shapes)["primary_column"])


# ---- Excel -----------------------------------------------------------------------------------


def _excel(path: Path, sheet: str | None, origin: dict[str, str]) -> Source:
    """One sheet; its first row that is not empty holds the names."""
    import zipfile

    import pandas as pd

    try:
        with pd.ExcelFile(path) as book:
            name, notes = chosen(sheet, [str(s) for s in book.sheet_names], path, "sheet")
            raw = pd.read_excel(book, sheet_name=name, header=None, dtype=object)
    except ImportError as error:
        if path.suffix.casefold() == ".xls":
            raise InputError(
                f"{path.name} is of an old kind that needs xlrd to be read, which is not installed",
                "Save it as .xlsx, or install xlrd.",
            ) from error
        raise missing_reader(path, "openpyxl", "files") from error
    except (ValueError, KeyError, OSError, zipfile.BadZipFile) as error:
        if isinstance(error, InputError):
            raise
        raise unreadable(path, origin["format"], error) from error
    filled = raw.dropna(how="all").dropna(how="all", axis=1)
    if filled.empty:
        raise InputError(f"the sheet ‘{name}’ of {path.name} is empty", "Name another with sheet=.")
    _one_heading(filled, name, path)
    names, remarks = delimited.tidy_header(list(filled.iloc[0]))
    body = filled.iloc[1:].reset_index(drop=True)
    body.columns = pd.Index(names)

    def read(columns: Collection[str]) -> tuple[pd.DataFrame, list[str]]:
        told: list[str] = []
        return pd.DataFrame({c: _cells(body[c], told) for c in names if c in columns}), told

    return Source(tuple(names), len(body), read, origin | {"sheet": name}, (*notes, *remarks))


def _one_heading(filled: pd.DataFrame, sheet: str, path: Path) -> None:
    """Stop at a title or merged cells above the names: several columns would have no name of their own."""
    top = filled.iloc[0]
    nameless = int(top.isna().sum())
    if nameless < 2 or len(filled) < 2:
        return
    below = filled.iloc[1]
    if all(isinstance(v, str) for v in below[top.isna()]):
        raise InputError(
            f"the first row of the sheet ‘{sheet}’ of {path.name} leaves {count(nameless, 'column')} of "
            f"{filled.shape[1]} without a name, and the row below holds text there: a title or merged cells "
            "above the names",
            "Keep one row of names, one name for each column, at the top of the sheet.",
        )


def _cells(column: pd.Series, notes: list[str]) -> pd.Series:
    """One kind where all cells are of one kind; text cells are treated as in delimited text."""
    kept = column.dropna()
    if len(kept) and all(isinstance(v, str) for v in kept):
        text = column.where(column.notna(), "").astype(str)
        text.name = column.name
        return words.typed(text, ".", notes)
    return column.infer_objects()
