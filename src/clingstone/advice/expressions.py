"""Conditions over named facts: they evaluate to booleans, one per column of y, and print themselves."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

Booleans = np.bool_ | npt.NDArray[np.bool_]


class Expression:
    """A condition; combine with ``&``, ``|`` and ``~``."""

    def read(self, facts: Mapping[str, Any]) -> Booleans:
        """0-d or (B,) booleans. ``facts`` maps a name to an object with a ``value``."""
        raise TypeError("a bare Expression has no value")

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the facts that it reads, in reading order."""
        return ()

    def __and__(self, other: Expression) -> Expression:
        return Joined(self, other, "and")

    def __or__(self, other: Expression) -> Expression:
        return Joined(self, other, "or")

    def __invert__(self) -> Expression:
        return Negated(self)

    def __bool__(self) -> bool:
        raise TypeError("a condition has no truth value of its own: use &, | and ~, and read(facts)")


@dataclass(frozen=True, eq=False)
class Compared(Expression):
    """One fact against one number. A fact that is not known makes every comparison false."""

    name: str
    sign: str
    number: float

    def read(self, facts: Mapping[str, Any]) -> Booleans:
        value = _value(facts, self.name)
        return np.bool_(False) if value is None else _SIGNS[self.sign](value, self.number)

    @property
    def names(self) -> tuple[str, ...]:
        return (self.name,)

    def __str__(self) -> str:
        return f"{self.name} {self.sign} {self.number:g}"


@dataclass(frozen=True, eq=False)
class Fact(Expression):
    """A fact by its name: itself when it is yes or no, or the left side of a comparison."""

    name: str

    def read(self, facts: Mapping[str, Any]) -> Booleans:
        value = _value(facts, self.name)
        return np.bool_(False) if value is None else np.equal(value, 1)

    @property
    def names(self) -> tuple[str, ...]:
        return (self.name,)

    def __lt__(self, number: float) -> Expression:
        return Compared(self.name, "<", number)

    def __le__(self, number: float) -> Expression:
        return Compared(self.name, "≤", number)

    def __gt__(self, number: float) -> Expression:
        return Compared(self.name, ">", number)

    def __ge__(self, number: float) -> Expression:
        return Compared(self.name, "≥", number)

    def __str__(self) -> str:
        return self.name


@dataclass(frozen=True, eq=False)
class Joined(Expression):
    left: Expression
    right: Expression
    word: str

    def read(self, facts: Mapping[str, Any]) -> Booleans:
        a = self.left.read(facts)
        if bool((a if self.word == "or" else ~a).all()):
            return a  # the other side cannot change it, and may be dear to know
        b = self.right.read(facts)
        return a & b if self.word == "and" else a | b

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys((*self.left.names, *self.right.names)))

    def __str__(self) -> str:
        return f"{self._side(self.left)} {self.word} {self._side(self.right)}"

    def _side(self, side: Expression) -> str:
        mixed = isinstance(side, Joined) and side.word != self.word
        return f"({side})" if mixed else str(side)


@dataclass(frozen=True, eq=False)
class Negated(Expression):
    inner: Expression

    def read(self, facts: Mapping[str, Any]) -> Booleans:
        return ~self.inner.read(facts)

    @property
    def names(self) -> tuple[str, ...]:
        return self.inner.names

    def __str__(self) -> str:
        return f"not ({self.inner})" if isinstance(self.inner, Joined) else f"not {self.inner}"


def fact(name: str) -> Fact:
    """A named fact, to be compared or used as it is."""
    return Fact(name)


_SIGNS: dict[str, Callable[[Any, float], Any]] = {
    "<": np.less,
    "≤": np.less_equal,
    ">": np.greater,
    "≥": np.greater_equal,
}


def _value(facts: Mapping[str, Any], name: str) -> float | npt.NDArray[np.float64] | None:
    """The value as numbers, or None where the fact is not known; words cannot be compared."""
    try:
        value = facts[name].value
    except KeyError:
        return None
    if isinstance(value, str):
        raise TypeError(f"the fact {name!r} is a word ({value!r}) and cannot be compared")
    return value if isinstance(value, float | int) else np.asarray(value, dtype=float)
