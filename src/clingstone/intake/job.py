"""A job file: the data and every option of a study, in TOML."""

from __future__ import annotations

import os
import tomllib
import types
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from clingstone.display import instead, listed
from clingstone.needs import InputError
from clingstone.run import Settings

SUFFIX = ".toml"
PAIRS = "pairs:"


@dataclass(frozen=True)
class Job:
    """What a job file says. data : the file to examine. out : folder for what is saved, if it names one.

    arguments : options by name, only those that stand in the file. Paths lead from the working folder.
    """

    data: Path
    arguments: Mapping[str, Any]
    out: Path | None = None


def read(path: Path) -> Job:
    """A job file; paths in it start from its own folder.

    Raises
    ------
    InputError : no such file, no TOML, no data named, an unknown key (with near ones), a value of the
        wrong kind.
    """
    try:
        tree = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(f"there is no file {path}", "Check the path of the job file.") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise InputError(
            f"{path.name} cannot be read as TOML: {error}", 'Write options as group = "clinic".'
        ) from error
    kinds = get_type_hints(Settings)
    known = ["data", "out", *kinds]
    for key in tree:
        if key not in known:
            raise InputError(f"{path.name} has the key ‘{key}’, which is no option", instead(key, known))
    if "data" not in tree:
        raise InputError(f"{path.name} names no data", 'Add data = "FILE" at its top.')
    places = {key: _value(path, key, str, tree[key]) for key in ("data", "out") if key in tree}
    arguments = {key: _value(path, key, kinds[key], tree[key]) for key in tree if key in kinds}
    near = arguments.get("neighbours")
    if near is not None and near.startswith(PAIRS):
        arguments["neighbours"] = PAIRS + str(_from(path.parent, near.removeprefix(PAIRS)))
    out = _from(path.parent, places["out"]) if "out" in places else None
    return Job(_from(path.parent, places["data"]), arguments, out)


def written(settings: Mapping[str, Any], data: str, folder: Path) -> str:
    """The text of a job file that stands in ``folder``: the data, and every option that has a value.

    settings : the fields of Settings. data : path as the user gave it.
    """
    import tomli_w

    tree: dict[str, Any] = {"data": _seen_from(folder, data)}
    for each in fields(Settings):
        value = settings.get(each.name)
        if value is not None:
            tree[each.name] = _plain(value)
    near = tree.get("neighbours", "")
    if near.startswith(PAIRS):
        tree["neighbours"] = PAIRS + _seen_from(folder, near.removeprefix(PAIRS))
    return tomli_w.dumps(tree)


def _from(folder: Path, given: str) -> Path:
    path = Path(given).expanduser()
    return path if path.is_absolute() else Path(os.path.normpath(folder / path))


def _seen_from(folder: Path, given: str) -> str:
    """A relative path where the file was given by one, so that folders can be moved together."""
    path = Path(given).expanduser()
    if path.is_absolute():
        return path.as_posix()
    try:
        return Path(os.path.relpath(path, folder)).as_posix()
    except ValueError:  # on another drive
        return path.absolute().as_posix()


def _plain(value: Any) -> Any:
    """Lists for tuples, tables for mappings, numbers of Python."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, str):
        return [_plain(v) for v in value]
    return value.item() if hasattr(value, "item") else value


# ---- values of the right kind ----------------------------------------------------------------

_WORDS = {str: "text", bool: "true or false", int: "a whole number", float: "a number"}


def _value(path: Path, key: str, kind: Any, value: Any) -> Any:
    """The value as Settings holds it. Raises InputError where it is of another kind."""
    for member in _members(kind):
        try:
            return _fitted(member, value)
        except TypeError:
            continue
    wanted = listed(dict.fromkeys(_words(m) for m in _members(kind)), last="or")
    raise InputError(f"{path.name} has {key} = {value!r}, where {wanted} is needed", "Mend the value.")


def _members(kind: Any) -> tuple[Any, ...]:
    parts = get_args(kind) if get_origin(kind) in (Union, types.UnionType) else (kind,)
    return tuple(p for p in parts if p is not type(None))


def _fitted(kind: Any, value: Any) -> Any:
    """The value, lists as tuples. Raises TypeError where it is of another kind."""
    origin, inner = get_origin(kind), get_args(kind)
    if kind is Any:
        return value
    if origin is Literal:
        return _fitted(str, value)  # which words there are is told by Settings
    if origin is tuple and isinstance(value, list):
        if Ellipsis in inner:
            return tuple(_fitted(inner[0], v) for v in value)
        if len(value) == len(inner):
            return tuple(_fitted(k, v) for k, v in zip(inner, value, strict=True))
    elif isinstance(origin, type) and issubclass(origin, Mapping) and isinstance(value, dict):
        return {k: _fitted(inner[1], v) for k, v in value.items()}
    elif type(value) is kind:
        return value
    elif kind is float and type(value) is int:
        return float(value)
    raise TypeError


def _words(kind: Any) -> str:
    origin, inner = get_origin(kind), get_args(kind)
    if origin is Literal:
        return "text"
    if origin is tuple:
        many = "a list" if Ellipsis in inner else f"a list of {len(inner)}"
        return f"{many} ({_WORDS[inner[0]]})"
    return _WORDS.get(kind, "a table")
