"""The options of the command line, made from the fields of Settings: one source for both.

Types, defaults and help all come from the dataclass; only how a mapping is written on a command
line is decided here.
"""

from __future__ import annotations

import inspect
import re
import types
from collections.abc import Callable, Mapping, Sequence
from dataclasses import MISSING, Field, dataclass, fields
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from clingstone.needs import InputError
from clingstone.run import Settings


@dataclass(frozen=True)
class Option:
    """One field of Settings as a command-line option.

    kind : the type that the command line reads. metavar, help : what --help shows.
    read : from what the command line gave to the value of the field.
    """

    name: str
    kind: Any
    default: Any
    metavar: str | None
    help: str
    read: Callable[[Any], Any]

    @property
    def flag(self) -> str:
        return "--" + self.name.replace("_", "-")

    @property
    def is_switch(self) -> bool:
        """True for a yes-or-no option, which has a --no- form too."""
        return bool in _members(self.kind)


def settings_options() -> tuple[Option, ...]:
    """An option for every field of Settings, in the order of its fields."""
    kinds, helps = get_type_hints(Settings), field_help()
    return tuple(_option(each, kinds[each.name], helps.get(each.name, "")) for each in fields(Settings))


def field_help() -> dict[str, str]:
    """The sentence for each field, from the docstring of Settings ("name, name : sentence; sentence")."""
    names = {each.name for each in fields(Settings)}
    text = " ".join(inspect.cleandoc(Settings.__doc__ or "").partition("\n\n")[2].split())
    marks = [
        mark
        for mark in re.finditer(r"((?:\w+, )*\w+) : ", text)
        if set(mark[1].split(", ")) <= names  # a colon inside a sentence starts no entry
    ]
    found: dict[str, str] = {}
    for mark, after in zip(marks, [*marks[1:], None], strict=True):
        sentence = text[mark.end() : after.start() if after else len(text)].strip().rstrip(".")
        heads, parts = mark[1].split(", "), sentence.split("; ")
        each = parts if len(parts) == len(heads) > 1 else [sentence] * len(heads)
        found.update(zip(heads, each, strict=True))
    return {name: _plain(found[name]) for name in found}


def _plain(text: str) -> str:
    text = text.replace("``", "")
    return text[:1].upper() + text[1:] + "."


def _option(each: Field[Any], kind: Any, text: str) -> Option:
    default = None if each.default is MISSING else each.default
    bare = [part for part in _members(kind) if part is not type(None)]

    def made(kind: Any, metavar: str | None, read: Callable[[Any], Any] = _as_given) -> Option:
        kind = kind | None if default is None else kind
        return Option(each.name, kind, default, metavar, text, read)

    if any(_is_mapping(part) for part in bare):
        metavar, read = _MAPPINGS[each.name]
        return made(list[str], metavar, read)
    if get_origin(bare[0]) is Literal:
        return made(str, "|".join(get_args(bare[0])))
    if str in bare and int in bare:
        return made(str, "WORD|NUMBER", _word_or_number)
    tuples = [part for part in bare if get_origin(part) is tuple]
    if tuples and Ellipsis in get_args(tuples[0]):
        text += " Give it once for each."
        return made(list[str], "NAME", _one_or_many if str in bare else _many)
    if tuples:
        return made(tuples[0], " ".join(_METAVARS[part] for part in get_args(tuples[0])))
    return made(bare[0], _METAVARS.get(bare[0]))


def _members(kind: Any) -> tuple[Any, ...]:
    return get_args(kind) if get_origin(kind) in (Union, types.UnionType) else (kind,)


def _is_mapping(kind: Any) -> bool:
    origin = get_origin(kind)
    return isinstance(origin, type) and issubclass(origin, Mapping)


# ---- from words to values --------------------------------------------------------------------


def apart(words: Sequence[str]) -> list[str]:
    """The words of a call, ``--coords x,y`` as ``--coords x y`` where no second word follows the first."""
    pairs = {o.flag for o in settings_options() if get_origin(_bare(o.kind)) is tuple}
    out: list[str] = []
    for i, word in enumerate(words):
        alone = i + 1 == len(words) or words[i + 1].startswith("--")
        if i and words[i - 1] in pairs and alone and word.count(",") == 1:
            out += [part.strip() for part in word.split(",")]
        else:
            out.append(word)
    return out


def _as_given(value: Any) -> Any:
    return value


def _many(value: Sequence[str] | None) -> tuple[str, ...] | None:
    return tuple(value) if value else None


def _one_or_many(value: Sequence[str] | None) -> str | tuple[str, ...] | None:
    return value[0] if value and len(value) == 1 else _many(value)


def _word_or_number(value: str) -> str | int:
    return int(value) if re.fullmatch(r"[+-]?\d+", value) else value


def _contrasts(values: Sequence[str] | None) -> dict[str, dict[str, float]] | None:
    """``"late − early: visit[late]=1, visit[early]=-1"`` → {name: {coefficient: weight}}."""
    if not values:
        return None
    out: dict[str, dict[str, float]] = {}
    for text in values:
        name, colon, body = text.partition(": ")
        pairs = [part.rpartition("=") for part in body.split(", ")]
        try:
            weights = {coefficient.strip(): float(weight) for coefficient, _, weight in pairs}
        except ValueError:
            weights = {}
        if not colon or not weights or "" in weights:
            raise InputError(
                f"--contrasts {text!r} cannot be read",
                'Write it as "NAME: COEFFICIENT=WEIGHT, COEFFICIENT=WEIGHT".',
            )
        out[name.strip()] = weights
    return out


def _assigned(values: Sequence[str] | None) -> dict[str, Any] | None:
    """``"arm=clinic"`` or ``"arm=clinic within district"`` → {term: level or {"unit", "within"}}."""
    if not values:
        return None
    out: dict[str, Any] = {}
    for text in values:
        term, _, level = text.rpartition("=")
        unit, within, stratum = level.partition(" within ")
        if not term.strip() or not unit.strip() or (within and not stratum.strip()):
            raise InputError(
                f"--assigned {text!r} cannot be read",
                'Write it as "TERM=LEVEL", or "TERM=LEVEL within STRATUM".',
            )
        place: Any = {"unit": unit.strip(), "within": stratum.strip()} if within else unit.strip()
        out[term.strip()] = place
    return out


# ---- from Python's words to the shell's ------------------------------------------------------


def in_shell(text: str) -> str:
    """A message as the shell would write it: missing='drop' is --missing drop, group= is --group."""
    known = {option.name: option for option in settings_options()}
    value = r"'[^']*'|\"[^\"]*\"|\([^()]*\)|\[[^\[\]]*\]|\{[^{}]*\}|True|False|-?\d+(?:\.\d+)?"
    return re.sub(
        rf"(?<![\w-])({'|'.join(known)})=({value})?(?!=)",
        lambda found: _shell_word(known[found[1]], found[2] or ""),
        text,
    )


def _shell_word(option: Option, value: str) -> str:
    if value in ("True", "False"):
        return option.flag if value == "True" else f"--no-{option.flag[2:]}"
    if not value:
        return option.flag
    if value[0] in "-0123456789":
        return f"{option.flag} {value}"
    if value[0] == "(" and not re.search("['\"]", value):
        return " ".join([option.flag, *re.findall(r"[^(), ]+", value)])
    inside = re.findall(r"'([^']*)'|\"([^\"]*)\"", value)
    words = [a or b for a, b in inside]
    if value.startswith("{"):
        pairs = [f"{a}={b}" for a, b in zip(words[::2], words[1::2], strict=False)]
        return " ".join(f"{option.flag} {_quoted(pair)}" for pair in pairs) or option.flag
    if get_origin(_bare(option.kind)) is tuple:
        return " ".join([option.flag, *map(_quoted, words)])
    return " ".join(f"{option.flag} {_quoted(word)}" for word in words) or option.flag


def _bare(kind: Any) -> Any:
    return next((part for part in _members(kind) if part is not type(None)), kind)


def _quoted(word: str) -> str:
    return word if re.fullmatch(r"[\w./:%+=-]+", word) else f'"{word}"'


_METAVARS = {str: "TEXT", int: "NUMBER", float: "NUMBER"}
_MAPPINGS: Mapping[str, tuple[str, Callable[[Sequence[str] | None], Any]]] = {
    "contrasts": ('"NAME: COEFFICIENT=WEIGHT, …"', _contrasts),
    "assigned": ('"TERM=LEVEL [within STRATUM]"', _assigned),
}
