"""One mask of rows from every column that is used; what is lost is counted by reason."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, quoted, rows
from clingstone.intake.frames import Table
from clingstone.needs import InputError, memory

if TYPE_CHECKING:
    import pandas as pd

Role = Literal["response", "predictor", "weight", "group", "time", "series", "place"]
ROLES: tuple[Role, ...] = ("response", "predictor", "weight", "group", "time", "series", "place")
Places = npt.NDArray[np.int64]
MEASURED = ("response", "predictor", "weight")
IDS = ("group", "series")
_BLOCK = 1 << 16  # rows of a fingerprint at a time
SENTINELS = (-9, -99, -999, -9999, -99999, -1e30, 999, 9999, 99999, 999999, 1e30)


@dataclass(frozen=True, eq=False)
class Columns:
    """Used columns on the rows that stay.

    frame : those columns, rows counted from 0. kept : (n,) position of each row in the table that
    was given. dropped : rows left out, by reason. fingerprint : of the used columns before any row
    was left out.
    """

    frame: pd.DataFrame
    kept: npt.NDArray[np.int64]
    rows_read: int
    dropped: Mapping[str, int]
    notes: tuple[str, ...]
    fingerprint: str


def gather(
    table: Table,
    roles: Mapping[Role, Sequence[str]],
    missing: str = "stop",
    numeric: Sequence[str] = (),
) -> Columns:
    """The columns named under each role, on one set of rows.

    Parameters
    ----------
    roles : role → column names. A row with a missing response, predictor or weight, or with
        weight 0, is left out and counted; a missing id, time or place stops, unless ``missing`` is
        "drop" or, for ids, "own-group" (each such row is a group of its own).
    numeric : names that must hold numbers.

    Raises
    ------
    InputError : no such column, text where numbers are needed, infinite values, missing ids, times
        or places, no rows left.
    """
    import pandas as pd

    used = {name: role for role in ROLES for name in reversed(roles.get(role, ()))}
    frame = pd.DataFrame({name: plain(table.column(name, role)) for name, role in used.items()})
    mark = fingerprint(frame)
    told = _by_codes(frame, [*roles.get("response", ()), *numeric], table.codes)
    for name in numeric:
        frame[name] = numbers(frame[name], table.places)
    _finite(frame, [n for role in ROLES if role not in IDS for n in roles.get(role, ())], table.places)
    gone = {name: _missing(frame[name]) for name in used}
    keep = np.ones(len(frame), dtype=bool)
    dropped: dict[str, int] = {}
    for role in ROLES:
        for name in dict.fromkeys(roles.get(role, ())):
            lost = gone[name] & keep
            if not lost.any():
                continue
            if role not in MEASURED and not _settled(role, missing):
                raise _missing_error(role, gone, keep, roles, table.places)
            if role in IDS and missing == "own-group":
                frame[name] = _own_groups(frame[name], lost, table.places)
                continue
            dropped[f"missing {name} ({role})"] = int(lost.sum())
            keep &= ~lost
    for name in roles.get("weight", ()):
        lost = _no_weight(frame[name].to_numpy(dtype=float), keep, name, table.places)
        if lost.any():
            dropped[f"weight 0 ({name})"] = int(lost.sum())
            keep &= ~lost
    if not keep.any():
        why = listed(f"{reason}: {n:,}" for reason, n in dropped.items())
        raise InputError(f"no row is left of {len(frame):,} ({why})", "Check these columns.")
    more = _counted_elsewhere(roles, gone, dropped)
    kept = np.flatnonzero(keep).astype(np.int64)
    held = frame.iloc[kept].reset_index(drop=True)
    for name in used:
        if pd.api.types.is_bool_dtype(held[name].infer_objects().dtype):
            held[name] = held[name].astype(bool)
    notes = (*table.notes, *told, *more, *_remarks(held, table.places[kept]))
    return Columns(held, kept, len(frame), dropped, notes, mark)


def repeated(got: Columns, name: str) -> Columns:
    """Each row as often as its frequency says."""
    weight = got.frame[name].to_numpy(dtype=float)
    part = np.flatnonzero(weight != np.round(weight))
    if len(part):
        raise InputError(
            f"{name} counts rows (weights_kind='frequency') and is not a whole number in "
            f"{rows(got.kept[part])}",
            "Use weights_kind='precision' if it says how exact a row is.",
        )
    memory(8.0 * float(weight.sum()) * (len(got.frame.columns) + 10), "repeating rows by their frequency")
    again = np.repeat(np.arange(len(weight)), weight.astype(np.int64))
    note = f"{len(weight):,} rows stand for {len(again):,} by their frequency in {name}."
    return replace(
        got,
        frame=got.frame.iloc[again].reset_index(drop=True),
        kept=got.kept[again],
        notes=(*got.notes, note),
    )


def plain(column: pd.Series) -> pd.Series:
    """The same values in an ordinary type: numbers as numpy numbers, the rest as it is."""
    import decimal
    import numbers as kinds

    import pandas as pd

    dtype = column.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        return column.cat.remove_unused_categories()
    if pd.api.types.is_bool_dtype(dtype) or pd.api.types.is_datetime64_any_dtype(dtype):
        return (
            column
            if not column.isna().any() or pd.api.types.is_object_dtype(dtype)
            else column.astype(object)
        )
    if dtype.kind == "c":
        raise InputError(f"{column.name} holds complex numbers", "Give a column of real numbers.")
    if pd.api.types.is_numeric_dtype(dtype):
        whole = pd.api.types.is_integer_dtype(dtype) and not column.isna().any()
        return column.astype("int64" if whole and not str(dtype).lower().startswith("uint64") else "float64")
    if pd.api.types.is_object_dtype(dtype):
        there = column.dropna()
        if len(there) and all(
            isinstance(v, (kinds.Real, decimal.Decimal)) and not isinstance(v, (bool, np.bool_))
            for v in there
        ):
            return pd.to_numeric(column.astype("float64"))
    return column


def _by_codes(
    frame: pd.DataFrame, names: Sequence[str], codes: Mapping[str, Mapping[str, float]]
) -> list[str]:
    """Where numbers are needed, a column with value labels is used by its codes; in place, with notes."""
    import pandas as pd

    notes = []
    for name in dict.fromkeys(names):
        column = frame[name]
        if name not in codes or not isinstance(column.dtype, pd.CategoricalDtype):
            continue
        shown = listed((f"{codes[name][w]:g} ‘{w}’" for w in column.cat.categories), most=6)
        frame[name] = column.astype(object).map(codes[name]).astype(float)
        notes.append(f"{name} has value labels and is used by its codes here ({shown}).")
    return notes


def numbers(column: pd.Series, places: Places) -> pd.Series:
    """The column as decimals, or an error that shows which rows hold something else."""
    import pandas as pd

    if pd.api.types.is_bool_dtype(column.dtype):
        return column.astype(float)
    if pd.api.types.is_numeric_dtype(column.dtype):
        return column.astype(float)
    raise text_error(column, places)


def text_error(column: pd.Series, places: Places, hint: str = "") -> InputError:
    """Text where numbers are needed: which rows (of the user's table), which values."""
    import numbers

    import pandas as pd

    name = str(column.name)
    text = column.astype(object).where(column.notna(), None)
    readable = [v if isinstance(v, (str, numbers.Real)) else None for v in text]
    parsed = pd.to_numeric(pd.Series(readable, dtype=object), errors="coerce")
    there = np.array([v is not None for v in text])
    wrong = np.flatnonzero(parsed.isna().to_numpy() & there)
    if not len(wrong):
        first = int(np.flatnonzero(there)[0])
        return InputError(
            f"{name} holds numbers stored as text, such as ‘{text.iloc[first]}’ in {rows(places[first])}",
            hint or "Store them as numbers (a decimal comma or thousands marks may be in the way).",
        )
    values = quoted(dict.fromkeys(str(text.iloc[i]) for i in wrong), 3)
    return InputError(
        f"{name} holds text where numbers are needed: {rows(places[wrong])} "
        f"{'has' if len(wrong) == 1 else 'have'} {values}",
        hint or "Mend these values, or leave them empty if they are missing.",
    )


def mostly_numbers(column: pd.Series) -> bool:
    """Whether a column that is no numbers holds some, or text that mostly looks like them."""
    import numbers as kinds

    import pandas as pd

    if pd.api.types.is_numeric_dtype(column.dtype) or isinstance(column.dtype, pd.CategoricalDtype):
        return False
    values = list(column.dropna().unique())
    if any(isinstance(v, kinds.Real) and not isinstance(v, (bool, np.bool_)) for v in values):
        return True
    distinct = pd.Series([v for v in values if isinstance(v, str)], dtype=object)
    if len(distinct) < 3:
        return False
    parsed = pd.to_numeric(distinct.str.replace(",", ".", regex=False), errors="coerce")
    return bool(parsed.notna().mean() >= 0.5)


def fingerprint(frame: pd.DataFrame) -> str:
    """SHA-256 of the values by column, the same whatever the file format or the order of columns.

    Numbers count as 64-bit decimals, so 1 and 1.0 agree; text, times and missing values as such.
    """
    import pandas as pd

    digest = hashlib.sha256(str(len(frame)).encode())
    for name in sorted(frame.columns):
        column = frame[name]
        digest.update(f"\x1f{name}\x1f".encode())
        if isinstance(column.dtype, pd.CategoricalDtype) and not pd.api.types.is_string_dtype(
            column.cat.categories.dtype
        ):
            column = plain(column.astype(column.cat.categories.dtype))
        if pd.api.types.is_datetime64_any_dtype(column.dtype):
            stamps = pd.DatetimeIndex(column)
            stamps = stamps.tz_convert("UTC").tz_localize(None) if stamps.tz is not None else stamps
            digest.update(stamps.to_numpy().astype("datetime64[us]").astype("<i8").tobytes())
        elif pd.api.types.is_numeric_dtype(column.dtype):
            value = column.to_numpy(dtype="<f8", na_value=np.nan)
            for start in range(0, len(value), _BLOCK):
                part = value[start : start + _BLOCK] + 0.0  # −0 and 0 are one number
                part[np.isnan(part)] = np.nan
                digest.update(part.tobytes())
        else:
            codes, distinct = pd.factorize(column)
            for v in distinct:
                word = str(v).encode()
                digest.update(f"{len(word)}:".encode() + word)
            digest.update(codes.astype("<i8").tobytes())
    return digest.hexdigest()


def _missing(column: pd.Series) -> npt.NDArray[np.bool_]:
    """Missing values; text of nothing but blanks counts."""
    import pandas as pd

    gone = column.isna().to_numpy(dtype=bool)
    if pd.api.types.is_string_dtype(column.dtype) or pd.api.types.is_object_dtype(column.dtype):
        codes, distinct = pd.factorize(column)
        blank = np.array([isinstance(v, str) and not v.strip() for v in distinct] + [False], dtype=bool)
        gone = gone | blank[codes]
    return gone


def _finite(frame: pd.DataFrame, names: Sequence[str], places: Places) -> None:
    import pandas as pd

    for name in dict.fromkeys(names):
        column = frame[name]
        if not pd.api.types.is_float_dtype(column.dtype):
            continue
        infinite = np.flatnonzero(np.isinf(column.to_numpy()))
        if len(infinite):
            raise InputError(
                f"{name} is infinite in {rows(places[infinite])}, and no sum can be formed with that",
                "Mend these values, or leave them empty if they are missing.",
            )


def _counted_elsewhere(
    roles: Mapping[Role, Sequence[str]], gone: Mapping[str, Any], dropped: Mapping[str, int]
) -> list[str]:
    """A note for each column whose missing values are counted under another column in part."""
    notes = []
    for role in MEASURED:
        for name in dict.fromkeys(roles.get(role, ())):  # type: ignore[call-overload]
            whole, own = int(gone[name].sum()), dropped.get(f"missing {name} ({role})", 0)
            if whole > own:
                notes.append(
                    f"{name} is missing in {count(whole, 'row')} in all; {whole - own:,} of them "
                    f"{'is' if whole - own == 1 else 'are'} counted under another column."
                )
    return notes


def _settled(role: Role, missing: str) -> bool:
    return missing == "drop" or (missing == "own-group" and role in IDS)


def _missing_error(
    role: Role,
    gone: Mapping[str, Any],
    keep: npt.NDArray[np.bool_],
    roles: Mapping[Role, Sequence[str]],
    places: Places,
) -> InputError:
    counts = {
        name: np.flatnonzero(gone[name] & keep)
        for r in ROLES
        if r not in MEASURED
        for name in dict.fromkeys(roles.get(r, ()))
    }
    shown = listed(
        f"{name} in {count(len(i), 'row')} ({rows(places[i], 3)})" for name, i in counts.items() if len(i)
    )
    word = {"group": "group", "series": "series", "time": "time", "place": "place"}[role]
    hint = "Fill them in, or leave these rows out with missing='drop'"
    hint += ", or let each be a group of its own with missing='own-group'." if role in IDS else "."
    return InputError(f"missing: {shown}; a row without its {word} cannot be set beside the others", hint)


def _own_groups(column: pd.Series, lost: npt.NDArray[np.bool_], places: Places) -> pd.Series:
    filled = column.astype(object)
    for i in np.flatnonzero(lost):
        filled.iloc[int(i)] = f"(row {places[i] + 1})"
    return filled


def _no_weight(
    weight: npt.NDArray[Any], keep: npt.NDArray[np.bool_], name: str, places: Places
) -> npt.NDArray[np.bool_]:
    negative = np.flatnonzero((weight < 0) & keep)
    if len(negative):
        raise InputError(
            f"{name} is negative in {rows(places[negative])}, and a weight cannot be", "Mend these weights."
        )
    return np.asarray((weight == 0) & keep)


def _remarks(frame: pd.DataFrame, places: Places) -> list[str]:
    import pandas as pd

    notes = []
    twice = _copies(frame)
    if twice.any():
        total, some = int(twice.sum()), rows(places[twice], 3)
        equal, kept = (
            ("equals", "it is kept. If it is a copy")
            if total == 1
            else ("equal", "they are kept. If they are copies")
        )
        notes.append(
            f"{count(total, 'row')} {equal} another row in every column used ({some}); "
            f"{kept}, n is too large."
        )
    for name in frame:
        if pd.api.types.is_numeric_dtype(frame[name].dtype) and not pd.api.types.is_bool_dtype(
            frame[name].dtype
        ):
            notes.extend(_sentinels(str(name), frame[name].to_numpy(dtype=float)))
    return notes


def _copies(frame: pd.DataFrame) -> npt.NDArray[np.bool_]:
    """Rows that equal an earlier one in every column.

    Such rows are alike in each column alone, so that after the response few are left to be compared.
    """
    left = np.arange(len(frame))
    for name in frame:
        left = left[frame[name].iloc[left].duplicated(keep=False).to_numpy()]
    found = np.zeros(len(frame), dtype=bool)
    found[left] = frame.iloc[left].duplicated(keep="first").to_numpy()
    return found


def _sentinels(name: str, values: npt.NDArray[Any]) -> list[str]:
    """Codes such as −999 that stand apart from all other values."""
    notes = []
    for code in (float(values.min()), float(values.max())):
        rest = values[values != code]
        if code not in SENTINELS or len(rest) < 3:
            continue
        low, high = float(rest.min()), float(rest.max())
        apart = low - code if code < 0 else code - high
        if apart > 2 * (high - low) and apart > 5 and (code > 0 or low >= 0 or apart > 50):
            notes.append(
                f"{name} is {code:g}".replace("-", "−")
                + f" in {count(int(np.sum(values == code)), 'row')}, far from "
                "all other values: often a code for missing. It is used as a number here."
            )
    return notes
