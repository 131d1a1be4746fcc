"""A saved examination's case, read again from its data."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from clingstone.case import Case
from clingstone.needs import InputError
from clingstone.results import Results, from_json
from clingstone.run import Settings, one_thread


def saved(folder: str | Path) -> Results:
    """The results of a folder that was saved. Raises InputError when it holds none."""
    path = Path(folder) / "results.json"
    if not path.is_file():
        raise InputError(f"{path} is not there", "Give a folder that clingstone saved.")
    return from_json(path.read_text(encoding="utf-8"))


def reopened(results: Results, data: Any = None) -> Case:
    """The case of saved results, under their settings.

    data : where the data are now, when the path in the results no longer leads to them.

    Raises InputError when the data are not found or have changed.
    """
    origin = results.case.origin
    source = data if data is not None else _where(origin)
    if source is None:
        raise InputError(
            "this examination was made from a table in memory, so there is no file to read again",
            "Call clingstone.replay(folder, data=table).",
        )
    settings = Settings(**{k: _tuples(v) for k, v in results.settings.items()})
    with one_thread():
        case = Case.of(source, settings)
    if case.origin.get("fingerprint") != origin.get("fingerprint"):
        raise InputError(
            f"the data have changed since {origin.get('file') or 'results.json'} was examined: their "
            "fingerprints differ",
            "Give the data as they were, with data=, or examine the new data.",
        )
    return case


def _where(origin: Mapping[str, str]) -> str | None:
    """The path as given, else the name alone, whichever leads to a file; None for a table in memory."""
    known = [origin[key] for key in ("path", "file") if origin.get(key)]
    return next((p for p in known if Path(p).expanduser().is_file()), known[0] if known else None)


def _tuples(value: Any) -> Any:
    return tuple(_tuples(v) for v in value) if isinstance(value, list | np.ndarray) else value
