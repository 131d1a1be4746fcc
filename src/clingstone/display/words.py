"""Words around numbers: counts, lists, row numbers, near names, lines of a terminal."""

from __future__ import annotations

import difflib
import re
import textwrap
import unicodedata
from collections.abc import Iterable, Sequence

import numpy as np
import numpy.typing as npt

from clingstone.display.numbers import number

COLUMNS = 80


# Nouns of fewer letters than a column's name needs to be taken for a word.
SHORT = frozenset(("row", "id", "day", "arm", "fit", "set", "use", "way", "map", "cow", "eye", "ewe", "pen"))
WORD = re.compile(r"[A-Za-z]?[a-z]+(?:[ -][a-z]+)*")


def count(n: int, noun: str, plural: str = "") -> str:
    """ "1 clinic", "12 clinics", "1 series", "6 groups of g", "18 units of Variety within Block" """
    return f"{number(n, 0)} {(one_of(noun) if n == 1 else plural or plural_of(noun))}"


def one_of(noun: str) -> str:
    """ "clinic", "group of g", "unit of Variety within Block" """
    if " within " in noun:
        return f"unit of {noun}"
    return noun if is_word(noun) else f"group of {noun}"


def is_word(noun: str) -> bool:
    """Whether a noun can take a plural: small letters, four or more or a known short word, a vowel."""
    plain = WORD.fullmatch(noun) is not None and re.search("[aeiouy]", noun.lower()) is not None
    return plain and (len(noun) >= 4 or noun.lower() in SHORT)


def plural_of(noun: str) -> str:
    """The plural of a plain English noun; "groups of g" for what is no word."""
    if " within " in noun:
        return f"units of {noun}"
    if not is_word(noun):
        return f"groups of {noun}"
    if noun.endswith("series"):
        return noun
    if noun.endswith(("s", "x", "ch", "sh")):
        return noun + "es"
    if noun.endswith("y") and noun[-2:-1] not in tuple("aeiou"):
        return noun[:-1] + "ies"
    return noun + "s"


def listed(items: Iterable[object], last: str = "and", most: int | None = None) -> str:
    """ "a", "a and b", "a, b and c"; beyond ``most`` words "a, b and 12 more"."""
    words = [str(item) for item in items]
    if most is not None and len(words) > most:
        words, rest = words[: most - 1], len(words) - most + 1
        words.append(f"{number(rest, 0)} more")
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def quoted(values: Iterable[object], most: int = 4) -> str:
    """Values in a sentence, each in quotation marks."""
    return listed((f"‘{v}’" for v in values), most=most)


def rows(places: npt.ArrayLike, most: int = 5) -> str:
    """Row numbers, counted from 1, of places counted from 0: "row 3", "rows 3, 9 and 41 more"."""
    numbers = [str(int(i) + 1) for i in np.asarray(places).ravel()]
    return ("row " if len(numbers) == 1 else "rows ") + listed(numbers, most=most)


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


def sentence(text: str) -> str:
    """Words as a sentence of their own: a capital first, a full stop last; nothing stays nothing."""
    text = text.strip()
    if not text:
        return ""
    return text[0].upper() + text[1:] + ("" if text[-1] in ".?!" else ".")


JOINERS = "\u200c\u200d"  # part of the spelling in Persian, Hindi and of joined emoji


def clean(text: str) -> str:
    """One printable line: control characters of a label never reach a terminal or a page."""
    if text.isprintable():
        return text
    spaced = "".join(" " if c in "\t\r\n\v\f" else c for c in text)
    return "".join("\ufffd" if _unseen(c) else c for c in spaced)


def _unseen(c: str) -> bool:
    return c not in JOINERS and unicodedata.category(c) in ("Cc", "Cf", "Cs")


def columns_of(text: str) -> int:
    """Terminal columns of a text: wide characters take two, combining ones none."""
    wide = sum(2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)
    return wide - sum(1 for c in text if unicodedata.combining(c))


def pad(text: str, width: int, right: bool = False) -> str:
    space = " " * max(0, width - columns_of(text))
    return space + text if right else text + space


def wrapped(text: str, width: int = COLUMNS, indent: str = "", hang: str | None = None) -> list[str]:
    """Lines of at most ``width`` columns; a no-break space never breaks."""
    return textwrap.wrap(
        clean(text),
        width,
        initial_indent=indent,
        subsequent_indent=indent if hang is None else hang,
        break_long_words=True,
        break_on_hyphens=False,
    ) or [indent.rstrip()]
