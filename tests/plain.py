"""Plain objects made from their types alone, so that tests of saving follow every new field.

Run as a script it prints the schema of results.json: python tests/plain.py > tests/schema_1.txt
"""

from __future__ import annotations

import types
from collections.abc import Iterator, Mapping
from dataclasses import fields, is_dataclass
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from clingstone.results import KEYS, Results

LEAVES = {str: "word", int: 3, float: 0.1, bool: True}


def example(kind: Any, **given: Any) -> Any:
    """An instance of a type: every collection holds one item, every optional value is there."""
    origin, arguments = get_origin(kind), get_args(kind)
    if is_dataclass(kind) and isinstance(kind, type):
        hints = get_type_hints(kind)
        return kind(**{f.name: given.get(f.name, example(hints[f.name])) for f in fields(kind)})
    if origin in (Union, types.UnionType):
        return example(next(part for part in arguments if part is not types.NoneType))
    if origin is Literal:
        return arguments[0]
    if origin is tuple and arguments[-1] is Ellipsis:
        return (example(arguments[0]),)
    if origin is tuple:
        return tuple(example(part) for part in arguments)
    if origin is frozenset:
        return frozenset({example(arguments[0])})
    if isinstance(origin, type) and issubclass(origin, Mapping):
        return {"key": example(arguments[1])}
    if kind is Any:
        return "anything"
    return LEAVES[kind]


def results(**given: Any) -> Results:
    made: Results = example(Results, **{"schema": 1, **given})
    return made


def schema() -> Iterator[str]:
    """Every path of results.json with its type, in the order of the file."""
    hints = get_type_hints(Results)
    flat = {"intervals": "Interval", "terms": "JointTest"}
    for key in KEYS:
        if key in flat:
            yield f"{key}[]: the {flat[key]} rows of all refits"
        else:
            yield from _paths(key, hints[key])


def _paths(path: str, kind: Any) -> Iterator[str]:
    origin, arguments = get_origin(kind), get_args(kind)
    if is_dataclass(kind):
        for name, part in get_type_hints(kind).items():
            yield from _paths(f"{path}.{name}", part)
    elif origin in (Union, types.UnionType):
        found = [part for part in arguments if part is not types.NoneType]
        ends = "?" if len(found) < len(arguments) else ""
        for part in found:
            yield from _paths(path + ends, part)
    elif origin is tuple and arguments[-1] is Ellipsis:
        yield from _paths(f"{path}[]", arguments[0])
    elif origin is tuple:
        for index, part in enumerate(arguments):
            yield from _paths(f"{path}[{index}]", part)
    elif isinstance(origin, type) and issubclass(origin, Mapping):
        yield from _paths(path + "{}", arguments[1])
    elif origin is frozenset:
        yield from _paths(f"{path}[]", arguments[0])
    elif origin is Literal:
        yield f"{path}: {' | '.join(map(str, arguments))}"
    else:
        yield f"{path}: {getattr(kind, '__name__', kind)}"


if __name__ == "__main__":
    print("\n".join(schema()))
