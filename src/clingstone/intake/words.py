"""A column of words: numbers, true/false or text, and which words stand for missing values."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, quoted

if TYPE_CHECKING:
    import pandas as pd

MISSING = ("", "NA", "N/A", "NaN", "nan", "null", "NULL", "None", "<NA>", "#N/A", ".")
USUAL_MISSING = ("", "NA")
EXACT = 2**53  # whole numbers from here on are not all held by a 64-bit decimal

_COMMA = re.compile(r"\s*[+-]?\d+,\d+(?:[eE][+-]?\d+)?\s*")
_POINT = re.compile(r"\s*[+-]?\d*\.\d+(?:[eE][+-]?\d+)?\s*")
_NUMBER = r"\s*[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?\s*"
_SPECIAL = r"\s*[+-]?(?:inf|infinity)\s*"
_LEADING_ZERO = r"\s*[+-]?0\d+\s*"


def decimal_mark(raw: pd.DataFrame, separator: str) -> str:
    """A comma where some column holds nothing but such numbers and none holds points."""
    if separator == ",":
        return "."
    comma = point = 0
    for c in raw.columns:
        values = [v for v in raw[c] if v.strip() not in MISSING]
        comma += (
            bool(values) and any(_COMMA.fullmatch(v) for v in values) and not any("." in v for v in values)
        )
        point += bool(values) and any(_POINT.fullmatch(v) for v in values)
    return "," if comma > 0 and comma >= point else "."


def numeric(words: pd.Series, decimal: str) -> bool:
    """Whether every word that is not missing is a number."""
    pattern = re.compile(f"(?:{_NUMBER})|(?:{_SPECIAL})", re.IGNORECASE)
    return all(
        pattern.fullmatch(v.replace(",", ".") if decimal == "," else v)
        for v in words
        if v.strip() not in MISSING
    )


def typed(column: pd.Series, decimal: str, notes: list[str]) -> pd.Series:
    """Numbers or true/false where every value is one, else the text as it stands.

    Each distinct word is looked at once.
    """
    import pandas as pd

    codes, distinct = pd.factorize(column)
    plain = pd.Series(distinct, dtype=object).str.strip()
    times = np.bincount(codes, minlength=len(plain))
    gone = plain.isin(MISSING)
    name = str(column.name)
    values = plain[~gone]
    if values.empty:
        return pd.Series(float("nan"), index=column.index, name=name)

    def spread(found: npt.NDArray[Any]) -> pd.Series:
        return pd.Series(found[codes], index=column.index, name=name)

    if values.isin(("True", "False", "TRUE", "FALSE", "true", "false")).all() and not gone.any():
        return spread((plain.str.casefold() == "true").to_numpy(dtype=bool))
    number = values.str.replace(",", ".", regex=False) if decimal == "," else values
    if number.str.fullmatch(f"(?:{_NUMBER})|(?:{_SPECIAL})", case=False).all():
        why = _kept_as_text(name, values, number, bool(gone.any()))
        if why:
            notes.append(why)
            return column.where(~gone.to_numpy()[codes])
        _tell_missing(name, plain[gone], times, notes)
        if not gone.any() and number.str.fullmatch(r"[+-]?\d+").all():
            return spread(number.astype("int64").to_numpy())
        return spread(number.astype(float).reindex(plain.index).to_numpy())  # rounds correctly
    # These two may be words of the user's own in a column of text: no treatment, a placeholder.
    word = plain.isin(("None", "."))
    notes.extend(f"‘{v}’ in {name} is kept as a value of its own." for v in sorted(set(plain[word])))
    _tell_missing(name, plain[gone & ~word], times, notes)
    lost = (gone & ~word).to_numpy()
    return column.where(~lost[codes]) if lost.any() else column


def _kept_as_text(name: str, values: pd.Series, number: pd.Series, gaps: bool) -> str:
    """Why digits are no number here: leading zeros, or more of them than a number holds exactly."""
    zeros = number.str.fullmatch(_LEADING_ZERO)
    if zeros.any():
        return f"{name} has leading zeros ({quoted(values[zeros].unique(), 2)}), so it is kept as text."
    if not number.str.fullmatch(r"[+-]?\d+").all():
        return ""
    long = np.array([abs(int(v)) >= (EXACT if gaps else 2**63) for v in number])
    if not long.any():
        return ""
    return (
        f"{name} has whole numbers too long to be held exactly ({quoted(values[long].unique(), 1)}), "
        "so it is kept as text."
    )


def _tell_missing(name: str, codes: pd.Series, times: npt.NDArray[np.int64], notes: list[str]) -> None:
    unusual = codes[~codes.isin(USUAL_MISSING)]
    for code, places in unusual.groupby(unusual).groups.items():
        n = int(times[np.asarray(places)].sum())
        notes.append(f"‘{code}’ in {name} is read as missing ({count(n, 'row')}).")
