"""The plain bundle of an examination: the keys of results.json, in order, both ways."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from clingstone.advice.choose import Advice
from clingstone.evidence.finding import Finding
from clingstone.ledger.ledger import Ledger
from clingstone.needs import InputError
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.remedies.remedy import Interval, JointTest, Refit
from clingstone.summary import CaseSummary

if TYPE_CHECKING:
    import cattrs

SCHEMA = 1
KEYS = (
    "clingstone",
    "schema",
    "case",
    "evidence",
    "ledger",
    "advice",
    "intervals",
    "terms",
    "refits",
    "rehearsal",
    "methods",
    "references",
    "settings",
    "versions",
)
_NON_FINITE = {"NaN": math.nan, "Infinity": math.inf, "-Infinity": -math.inf}


@dataclass(frozen=True)
class Reference:
    """A source, as it will stand in references.bib."""

    key: str
    bibtex: str
    text: str


@dataclass(frozen=True)
class Results:
    """Everything that an examination says, as numbers and words."""

    clingstone: str
    schema: int
    case: CaseSummary
    evidence: tuple[Finding, ...]
    ledger: Ledger
    advice: Advice
    refits: tuple[Refit, ...]
    rehearsal: Rehearsal | None
    methods: str
    references: tuple[Reference, ...]
    settings: Mapping[str, Any]
    versions: Mapping[str, str] = field(default_factory=dict)

    @property
    def intervals(self) -> tuple[Interval, ...]:
        """The rows of all refits, one after the other."""
        return tuple(row for refit in self.refits for row in refit.intervals)

    @property
    def terms(self) -> tuple[JointTest, ...]:
        """The joint tests of all refits, one after the other."""
        return tuple(row for refit in self.refits for row in refit.terms)


# ---- to and from text ------------------------------------------------------------------------


def to_json(results: Results) -> str:
    """results.json, schema 1.

    Numbers keep every digit; those that are not finite stand as the words "NaN", "Infinity",
    "-Infinity" (in ``settings``, whose values have no declared type, as
    ``{"float": "NaN"}``). ``intervals`` and ``terms`` repeat, as two flat tables, what the refits
    hold, so that other programs can read them at once.
    """
    tree = dict(_converter().unstructure(results))
    tree["intervals"] = [row for refit in tree["refits"] for row in refit["intervals"]]
    tree["terms"] = [row for refit in tree["refits"] for row in refit["terms"]]
    return _write({key: tree[key] for key in KEYS}) + "\n"


def from_json(text: str) -> Results:
    """The Results that ``to_json`` wrote, equal in every number and word.

    Raises InputError when the text is no results.json of this schema.
    """
    tree = read_tree(text)
    for flat in ("intervals", "terms"):
        if tree.pop(flat) != [row for refit in tree["refits"] for row in refit[flat]]:
            raise InputError(
                f"results.json contradicts itself: the table {flat!r} differs from the refits",
                "Use the file as it was saved.",
            )
    import cattrs

    try:
        return _converter().structure(tree, Results)
    except cattrs.BaseValidationError as error:
        found = "; ".join(cattrs.transform_error(error, path="results")[:3])
        raise InputError(f"results.json cannot be read: {found}", "Use the file as it was saved.") from error


def read_tree(text: str) -> dict[str, Any]:
    """The bare tree of results.json after a look at its schema and keys."""
    try:
        tree = json.loads(text)
    except json.JSONDecodeError as error:
        raise InputError(
            f"results.json is not JSON: {error.msg} in line {error.lineno}", "Use the file as it was saved."
        ) from error
    if not isinstance(tree, dict) or "schema" not in tree:
        raise InputError("this JSON is no results.json of clingstone", "Give a folder that clingstone saved.")
    if tree["schema"] != SCHEMA:
        raise InputError(
            f"results.json has schema {tree['schema']}; this version reads schema {SCHEMA}",
            f"Use the version of clingstone that wrote it ({tree.get('clingstone', 'unknown')}).",
        )
    missing = [key for key in KEYS if key not in tree]
    if missing:
        raise InputError(f"results.json lacks {', '.join(missing)}", "Use the file as it was saved.")
    return tree


@cache
def _converter() -> cattrs.Converter:
    import cattrs

    converter = cattrs.Converter(forbid_extra_keys=True)
    to = converter.register_unstructure_hook
    to(bool, bool)
    to(int, int)
    to(float, _number)
    to(np.bool_, bool)
    to(np.integer, int)
    to(np.floating, lambda value: _number(float(value)))
    to(np.ndarray, lambda value: converter.unstructure(value.tolist()))
    converter.register_unstructure_hook_func(_is_frozenset, sorted)
    converter.register_unstructure_hook_func(lambda kind: kind is Any, _loose)
    converter.register_structure_hook(float, lambda value, _: _float(value))
    converter.register_structure_hook(int, lambda value, _: _strict(value, int))
    converter.register_structure_hook(bool, lambda value, _: _strict(value, bool))
    converter.register_structure_hook(str, lambda value, _: _strict(value, str))
    converter.register_structure_hook_func(lambda kind: kind is Any, lambda value, _: _tight(value))
    return converter


def _is_frozenset(kind: Any) -> bool:
    return kind is frozenset or getattr(kind, "__origin__", None) is frozenset


def _number(value: float) -> float | str:
    value = float(value)
    if math.isfinite(value):
        return value
    return next(word for word, number in _NON_FINITE.items() if repr(number) == repr(value))


def _float(value: Any) -> float:
    if isinstance(value, str) and value in _NON_FINITE:
        return _NON_FINITE[value]
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"expected a number, found {value!r}")
    return float(value)


def _strict(value: Any, kind: type) -> Any:
    if type(value) is not kind:
        raise ValueError(f"expected {kind.__name__}, found {value!r}")
    return value


def _loose(value: Any) -> Any:
    """A value of no declared type, ready for JSON."""
    if isinstance(value, Mapping):
        return {str(key): _loose(item) for key, item in value.items()}
    if isinstance(value, frozenset | set):
        return sorted(_loose(item) for item in value)
    if isinstance(value, np.ndarray | np.generic):
        return _loose(value.tolist())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return [_loose(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return {"float": _number(value)}
    if value is None or isinstance(value, str | int | float):
        return value
    raise TypeError(f"results.json has no place for a {type(value).__name__}")


def _tight(value: Any) -> Any:
    """The way back: plain objects hold tuples, not lists."""
    if isinstance(value, list):
        return tuple(_tight(item) for item in value)
    if isinstance(value, dict):
        if len(value) == 1 and value.get("float") in _NON_FINITE:
            return _NON_FINITE[value["float"]]
        return {key: _tight(item) for key, item in value.items()}
    return value


def _write(value: Any, indent: str = "") -> str:
    """JSON with one line for a list of bare numbers or words, so that files can be read and diffed."""
    deeper = indent + "  "
    if isinstance(value, Mapping) and value:
        rows = [
            f"{deeper}{json.dumps(key, ensure_ascii=False)}: {_write(value[key], deeper)}" for key in value
        ]
        return "{\n" + ",\n".join(rows) + f"\n{indent}}}"
    if isinstance(value, list | tuple) and any(isinstance(item, Mapping | list | tuple) for item in value):
        return "[\n" + ",\n".join(deeper + _write(item, deeper) for item in value) + f"\n{indent}]"
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


# ---- two results, number by number -----------------------------------------------------------


def compare(a: Results, b: Results, tolerance: float = 1e-8) -> tuple[str, ...]:
    """Every place at which two results differ, one line each; empty when they agree.

    Words, verdicts and counts must be equal. Numbers agree to ``tolerance`` relative to the
    larger; inside a list of numbers (a curve, a covariance) also to 1e-14 of the largest beside
    them, because what is zero in theory is rounding noise in practice. ``versions``, the
    version of clingstone itself and the path of the data are not compared.
    """
    first, second = (json.loads(to_json(each)) for each in (a, b))
    for tree in (first, second):
        tree["case"]["origin"].pop("path", None)  # the same data may have been moved
        for key in ("clingstone", "versions", "intervals", "terms"):  # tables: compared inside the refits
            tree.pop(key)
    return tuple(_differences("", first, second, tolerance, 0.0))


def _differences(path: str, a: Any, b: Any, tolerance: float, floor: float) -> Iterator[str]:
    if isinstance(a, dict) and isinstance(b, dict):
        for key in dict.fromkeys([*a, *b]):
            here = f"{path}.{key}" if path else key
            if key not in a or key not in b:
                yield f"{here}: only in the {'second' if key not in a else 'first'}"
            else:
                yield from _differences(here, a[key], b[key], tolerance, 0.0)
    elif isinstance(a, list) and isinstance(b, list):
        yield from _in_lists(path, a, b, tolerance)
    elif not _same(a, b, tolerance, floor):
        if isinstance(a, str) and isinstance(b, str):
            a, b = _from_first_difference(a, b)
        yield f"{path}: {_brief(a)} and {_brief(b)}"


def _in_lists(path: str, a: list[Any], b: list[Any], tolerance: float) -> Iterator[str]:
    if len(a) != len(b):
        yield f"{path}: {len(a)} and {len(b)} entries"
        return
    sizes = [abs(v) for v in (*a, *b) if isinstance(v, int | float)]
    floor = 1e-14 * max(sizes, default=0.0)
    for index, (left, right) in enumerate(zip(a, b, strict=True)):
        yield from _differences(f"{path}[{_label(left, right, index)}]", left, right, tolerance, floor)


def _label(left: Any, right: Any, index: int) -> str:
    """What a reader calls this entry: its test, remedy, term or key, when both sides agree on it."""
    if isinstance(left, dict) and isinstance(right, dict):
        names = ("test", "remedy", "at", "about", "term", "key", "name", "words")
        shared = [left[n] for n in names if left.get(n) and left.get(n) == right.get(n)]
        if shared:
            return ", ".join(dict.fromkeys(map(str, shared)))
    return str(index)


def _same(a: Any, b: Any, tolerance: float, floor: float) -> bool:
    numbers = all(isinstance(v, int | float) and not isinstance(v, bool) for v in (a, b))
    if numbers and (isinstance(a, float) or isinstance(b, float)):
        return math.isclose(a, b, rel_tol=tolerance, abs_tol=max(floor, 1e-300))
    return type(a) is type(b) and a == b


def _from_first_difference(a: str, b: str) -> tuple[str, str]:
    """Two long texts from shortly before they part, in one line each."""
    if max(len(a), len(b)) <= 60:
        return a, b
    parts = (k for k, (x, y) in enumerate(zip(a, b, strict=False)) if x != y)
    start = max(0, next(parts, min(len(a), len(b))) - 20)
    cut = [("…" if start else "") + " ".join(text[start : start + 200].split()) for text in (a, b)]
    return cut[0], cut[1]


def _brief(value: Any) -> str:
    text = value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
    return text if len(text) <= 60 else text[:57] + "…"
