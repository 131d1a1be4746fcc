"""One named fact: value, unit and the words for it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.display import significant
from clingstone.maths.once import Array

Value = float | bool | str | Array


@dataclass(frozen=True)
class Fact:
    """A fact by name. ``value`` may be a (B,) array; ``text`` is how a sentence says it."""

    name: str
    value: Value
    unit: str
    sentence: str
    text: str


def named(name: str, value: float | Array, unit: str = "", text: str = "") -> Fact:
    """A number."""
    if not text:
        first = float(np.ravel(np.asarray(value, dtype=float))[0])
        whole = np.isfinite(first) and first == round(first)
        text = f"{first:.0f}" if whole else significant(first, 2) if np.isfinite(first) else "not known"
    return Fact(name, value, unit, f"{name}: {text}{' ' + unit if unit else ''}", text)


def yes(name: str, value: bool, sentence: str) -> Fact:
    """A yes or no."""
    return Fact(name, bool(value), "", sentence, "yes" if value else "no")


def words(name: str, value: str) -> Fact:
    """A word, for sentences and levels."""
    return Fact(name, value, "", f"{name}: {value}", value)
