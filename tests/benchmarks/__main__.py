"""Measures the rows of the benchmarks and writes docs/benchmarks.md and docs/benchmarks.json.

python -m tests.benchmarks                    rows not yet measured of the code as it is now
python -m tests.benchmarks reml cr2-million   those whose id, file or piece holds one of the words
python -m tests.benchmarks --again [WORD …]   also those measured already
python -m tests.benchmarks --list | --page    the ids; the page alone, from docs/benchmarks.json

What a reader must know of a run besides (a machine that was not quiet, a row that was broken off) stands as a
list of sentences in docs/benchmarks.json, under ``remarks``.

A row runs in a process of its own and is kept as soon as it is done, so a run can be broken off and
taken up again. Ratios are taken within rounds, but a quiet machine gives steadier ones.
"""

from __future__ import annotations

import hashlib
import importlib
import json
import os
import platform
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from tests.benchmarks import page
from tests.benchmarks.pairs import Row, as_json, measure, r_versions

ROOT = Path(__file__).parents[2]
LIBRARIES = ("numpy", "scipy", "statsmodels", "linearmodels", "pyfixest", "wildboottest", "spreg", "esda")


def rows() -> dict[str, tuple[str, Row]]:
    """Every row by id, with the file that offers it."""
    found: dict[str, tuple[str, Row]] = {}
    for path in sorted(Path(__file__).parent.glob("bench_*.py")):
        for row in getattr(importlib.import_module(f"tests.benchmarks.{path.stem}"), "ROWS", ()):
            if row.id in found:
                raise ValueError(f"two rows are called {row.id}: in {found[row.id][0]} and in {path.stem}")
            found[row.id] = (path.stem, row)
    return found


def code() -> str:
    """A fingerprint of the source and of the benchmarks: what a measurement is a measurement of."""
    whole = hashlib.sha256()
    for folder in ("src/clingstone", "tests/benchmarks"):
        for path in sorted((ROOT / folder).rglob("*.py")):
            whole.update(path.read_bytes())
    return whole.hexdigest()[:12]


def machine() -> dict[str, Any]:
    """Processor, cores, memory and versions."""
    from importlib.metadata import PackageNotFoundError, version

    versions = {"Python": platform.python_version()}
    for name in ("clingstone", *LIBRARIES):
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            continue
    return {
        "processor": _line("/proc/cpuinfo", "model name") or platform.processor(),
        "cores": os.cpu_count(),
        "memory": _line("/proc/meminfo", "MemTotal"),
        "system": f"{platform.system()} {platform.machine()}",
        "versions": versions | r_versions(),
    }


def _line(path: str, start: str) -> str:
    try:
        lines = Path(path).read_text(encoding="utf-8").splitlines()
    except OSError:
        return ""
    return next((line.partition(":")[2].strip() for line in lines if line.startswith(start)), "")


def chosen(words: Sequence[str]) -> list[str]:
    return [
        id
        for id, (file, row) in rows().items()
        if not words or any(w in f"{id} {file} {row.piece}".lower() for w in map(str.lower, words))
    ]


def main(arguments: list[str]) -> int:
    options = [a for a in arguments if a.startswith("--")]
    words = [a for a in arguments if not a.startswith("--")]
    if "--one" in options:  # the process of one row
        print(json.dumps(as_json(measure(rows()[words[0]][1]))))
        return 0
    if "--list" in options:
        print("\n".join(f"{id:32s} {row.piece}, {row.size}" for id, (_, row) in rows().items()))
        return 0
    held = page.read()
    failed = 0
    if "--page" not in options:
        here, now = machine(), code()
        for id in chosen(words):
            if "--again" not in options and held["rows"].get(id, {}).get("code") == now:
                continue
            print(f"{id} …", end=" ", flush=True)
            command = [sys.executable, "-m", "tests.benchmarks", "--one", id]
            said = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
            if said.returncode:
                failed += 1
                print(f"failed\n{said.stderr}")
                continue
            row = rows()[id][1]
            told = {"piece": row.piece, "size": row.size, "note": row.note, "file": rows()[id][0]}
            ways = json.loads(said.stdout.splitlines()[-1])
            held["rows"][id] = {**told, "code": now, "ways": ways}
            held["machine"] = here
            page.keep(held)
            print(page.short(held["rows"][id]))
    page.write(held, [id for id in rows() if id in held["rows"]])
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
