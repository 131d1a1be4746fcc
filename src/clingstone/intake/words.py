"""Phrases for what was found: row numbers, lists, near names."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np


def count(n: int, one: str, many: str = "") -> str:
    """``count(1, "row")`` → "1 row"; ``count(1200, "row")`` → "1,200 rows"."""
    return f"{n:,} {one if n == 1 else many or one + 's'}"


def listed(words: Iterable[str], most: int = 6, last: str = "and") -> str:
    """Words in a sentence: "a, b and c", or "a, b and 12 more"."""
    items = [str(w) for w in words]
    if len(items) > most:
        return f"{', '.join(items[: most - 1])} and {len(items) - most + 1:,} more"
    if len(items) < 2:
        return "".join(items)
    return f"{', '.join(items[:-1])} {last} {items[-1]}"


def rows(places: Any, most: int = 5) -> str:
    """Row numbers, counted from 1, of 0-based places: "row 3", "rows 3, 9 and 41 more"."""
    numbers = [str(int(i) + 1) for i in np.asarray(places).ravel()]
    return ("row " if len(numbers) == 1 else "rows ") + listed(numbers, most)


def quoted(values: Iterable[Any], most: int = 4) -> str:
    """Values in a sentence, each in quotation marks."""
    return listed((f"‘{v}’" for v in values), most)


def near(name: str, choices: Sequence[str], most: int = 3) -> tuple[str, ...]:
    """Choices that look like ``name``, best first, whatever the case of letters."""
    folded: dict[str, str] = {}
    for choice in choices:
        folded.setdefault(choice.casefold(), choice)
    found = difflib.get_close_matches(name.casefold(), list(folded), n=most, cutoff=0.6)
    return tuple(folded[f] for f in found)


def instead(name: str, choices: Sequence[str]) -> str:
    """A hint that offers near names, else every choice."""
    close = near(name, choices)
    if close:
        return f"Did you mean {listed((f'‘{c}’' for c in close), last='or')}?"
    return f"Choose from {quoted(choices, most=12)}." if choices else ""


def number(value: float) -> str:
    """Three significant digits without an exponent: 0.0123, 41.2, 72,800."""
    if value == 0 or not np.isfinite(value):
        return f"{value:g}"
    digits = 2 - int(np.floor(np.log10(abs(value))))
    return f"{round(value, digits):,.{max(digits, 0)}f}"
