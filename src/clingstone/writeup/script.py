"""What makes a study again: its job file, and a short script with public calls."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from dataclasses import fields
from pathlib import Path
from typing import Any

from clingstone.intake.job import written
from clingstone.results import Results
from clingstone.run import Settings

JOB, SCRIPT = "study.toml", "replay.py"
FILES = (JOB, SCRIPT)

_SCRIPT = '''\
"""The numbers of this folder once more: python {script} [DATA]

Made by clingstone {version}, which compares every number with those in results.json. DATA says where
the data are now, if they were moved.
"""

import os
import sys
from pathlib import Path

import clingstone

here = Path(__file__).resolve().parent
data = Path(sys.argv[1]).resolve() if len(sys.argv) > 1 else {data}
os.chdir(here / {start})  # paths below start from here, as they did

examination = clingstone.examine(
    data,
{arguments})
print(examination)

agrees, lines = examination.agrees_with(here)
print(*lines, sep="\\n")
sys.exit(not agrees)
'''


def files(results: Results, folder: Path) -> dict[str, Callable[[], str]]:
    """The texts of job file and script for a folder; none where there is no file to read again.

    A table in memory or a fitted model cannot be named in a file: ``clingstone.replay`` takes them.
    """
    path = results.case.origin.get("path", "")
    if not path:
        return {}
    return {JOB: lambda: written(results.settings, path, folder), SCRIPT: lambda: script(results, folder)}


def script(results: Results, folder: Path) -> str:
    """A script that calls ``examine`` with the options of these results and compares every number."""
    return _SCRIPT.format(
        script=SCRIPT,
        version=results.clingstone,
        data=repr(results.case.origin["path"]),
        start=repr(_start(folder)),
        arguments="".join(f"    {name}={value!r},\n" for name, value in _arguments(results.settings)),
    )


def _start(folder: Path) -> str:
    """The working folder as seen from where the script will stand."""
    try:
        return Path(os.path.relpath(Path.cwd(), folder)).as_posix()
    except ValueError:  # on another drive
        return Path.cwd().as_posix()


def _arguments(settings: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Options that were not left alone, in the order of Settings."""
    return [(f.name, _bare(settings[f.name])) for f in fields(Settings) if settings.get(f.name) != f.default]


def _bare(value: Any) -> Any:
    """Plain Python, whatever kind of mapping or number was given."""
    if isinstance(value, Mapping):
        return {str(k): _bare(v) for k, v in value.items()}
    if isinstance(value, tuple | list):
        return tuple(_bare(v) for v in value)
    return value.item() if hasattr(value, "item") else value
