"""One row of the benchmarks: the same numbers by several ways, on the same data, in one run.

A file ``bench_*.py`` offers its rows as ``ROWS``. A row is made in a process of its own, one BLAS thread:

    ROWS = (
        Row("cr2-million", "Cluster-robust covariance (CR2) with df", "1e6 rows, 5e4 clusters, p = 5", cr2),
    )

    def cr2() -> list[Way]:
        X, group, y = data(1_000_000, 50_000, 5)
        made = fits(X, y, part)
        return [
            Way(OURS, lambda f: refit(CR2, "g", f).se, fresh=lambda: bare(made)),
            Way("statsmodels OLS, cov_type='cluster' (CR1)", lambda: sm.OLS(y, X).fit(…).bse, same=False),
            Way(ONE_FIT, lambda: sm.OLS(y, X).fit().bse, floor=True),
            *in_r("clubSandwich vcovCR", "sqrt(diag(vcovCR(m, g, 'CR2')))", libraries=("clubSandwich",),
                  prepare="m <- lm(y ~ X - 1)", X=X, y=y, g=group),
        ]

The first way is ours. The others are timed in turn with it, round after round, so that what slows the
machine slows both; each ratio is taken within a round.
"""

from __future__ import annotations

import gc
import json
import multiprocessing
import shutil
import statistics
import subprocess
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

OURS = "clingstone"
ONE_FIT = "one statsmodels OLS fit"
R_LIBRARIES = ("lme4", "nlme", "pbkrtest", "clubSandwich", "sandwich", "lmtest", "plm", "spdep", "spatialreg")


@dataclass(frozen=True)
class Way:
    """One program's way to the numbers of a row.

    name : program and call, as a reader would write it.
    work : what is timed; gives the numbers to compare (an array, or None). Takes what ``fresh`` made.
    fresh : made anew before each round and not timed: objects that keep what they computed.
    same : whether the numbers should equal ours; False for a relative (CR1 beside CR2), or for a floor.
    floor : a yardstick (one pass, one ordinary fit), not a rival.
    rounds : at most so many, for ways that take minutes. library : whose version is printed.
    """

    name: str
    work: Callable[..., Any]
    fresh: Callable[[], Any] | None = None
    same: bool = True
    floor: bool = False
    rounds: int = 5
    library: str = ""


@dataclass(frozen=True)
class Row:
    """A heavy piece at one size. id : for the command line. note : what a reader must know to be fair."""

    id: str
    piece: str
    size: str
    ways: Callable[[], Sequence[Way]]
    note: str = ""


@dataclass(frozen=True)
class Timed:
    """What a way gives that takes its own time, as R does: seconds, numbers, bytes beyond the data."""

    seconds: float
    numbers: Any
    memory: float


@dataclass
class Measured:
    """One way of one row: seconds and ratios to ours of each round, memory, distance of its numbers."""

    name: str
    floor: bool
    seconds: list[float] = field(default_factory=list)
    ratio: list[float] = field(default_factory=list)  # its seconds / ours, in the same round
    memory: float | None = None  # bytes at the peak beyond the data held before
    difference: float | None = None  # largest, relative to the largest of its own numbers
    failed: str = ""

    @property
    def median(self) -> float:
        return statistics.median(self.seconds) if self.seconds else float("nan")


def measure(row: Row, budget: float = 60.0) -> list[Measured]:
    """All ways of a row: three rounds at least (one where a way takes over 20 s), five at most."""
    ways = list(row.ways())
    out = [Measured(w.name, w.floor) for w in ways]
    numbers: list[Any] = [None] * len(ways)
    start = time.perf_counter()
    for turn in range(5):
        for i, (way, found) in enumerate(zip(ways, out, strict=True)):
            if found.failed or turn >= way.rounds or (turn and found.median > 20):
                continue
            try:
                seconds, numbers[i], memory = once(way)
            except Exception as error:  # a rival that fails is a row of its own, not the end of the run
                if i == 0:
                    raise
                found.failed = f"{type(error).__name__}: {error}"[:200]
                continue
            found.seconds.append(seconds)
            found.ratio.append(seconds / out[0].seconds[-1])
            found.memory = found.memory if memory is None else memory
        if turn >= 2 and time.perf_counter() - start > budget:
            break
    for i, (way, found) in enumerate(zip(ways, out, strict=True)):
        if way.same and i and not found.failed:
            found.difference = distance(numbers[0], numbers[i])
        if found.memory is None and not found.failed:
            found.memory = peak(way)
    return out


def once(way: Way) -> tuple[float, Any, float | None]:
    """Seconds, numbers and, where the way says so itself, memory of one run."""
    held = () if way.fresh is None else (way.fresh(),)
    gc.collect()
    start = time.perf_counter()
    got = way.work(*held)
    seconds = time.perf_counter() - start
    return (got.seconds, got.numbers, got.memory) if isinstance(got, Timed) else (seconds, got, None)


def distance(ours: Any, theirs: Any) -> float | None:
    """max |a − b| / max |b|, over the numbers that both give."""
    if ours is None or theirs is None:
        return None
    a, b = np.ravel(np.asarray(ours, dtype=float)), np.ravel(np.asarray(theirs, dtype=float))
    if a.shape != b.shape:
        raise ValueError(f"{a.shape} numbers of ours beside {b.shape}")
    return float(np.max(np.abs(a - b)) / max(float(np.max(np.abs(b))), 1e-300))


def peak(way: Way) -> float | None:
    """Bytes at the peak of a run beyond those held before it, in a copy of this process (Linux)."""
    try:
        fork = multiprocessing.get_context("fork")
    except ValueError:
        return None
    held = () if way.fresh is None else (way.fresh(),)
    ours, theirs = fork.Pipe(duplex=False)

    def copy() -> None:
        before = _resident("VmRSS")
        Path("/proc/self/clear_refs").write_text("5")
        way.work(*held)
        theirs.send(_resident("VmHWM") - before)

    process = fork.Process(target=copy)
    process.start()
    theirs.close()
    try:
        return float(ours.recv())
    except EOFError:
        return None
    finally:
        process.join()


def _resident(which: str) -> float:
    with open("/proc/self/status", encoding="ascii") as lines:
        return next(1024.0 * float(line.split()[1]) for line in lines if line.startswith(which))


def has_r(*libraries: str) -> bool:
    """Whether Rscript and these of its libraries are here."""
    if shutil.which("Rscript") is None:
        return False
    wanted = ", ".join(f"requireNamespace('{name}', quietly = TRUE)" for name in libraries) or "TRUE"
    said = subprocess.run(["Rscript", "-e", f"cat(all({wanted}))"], capture_output=True, text=True)
    return said.stdout.strip() == "TRUE"


def in_r(
    name: str,
    work: str,
    *,
    libraries: Sequence[str] = (),
    prepare: str = "",
    same: bool = True,
    rounds: int = 3,
    **arrays: Any,
) -> list[Way]:
    """A peer in R as a list of one way, empty where Rscript or a library of it is missing: ``[…, *in_r(…)]``.

    arrays : by the name under which R sees them; a 2-d array is a matrix. prepare : R code run before the
    clock (libraries, data frames). work : the R expression that is timed; it gives a numeric vector.
    Only the expression counts: neither the start of R nor the passing of the data.
    """
    if not has_r(*libraries):
        return []

    def run() -> Timed:
        with tempfile.TemporaryDirectory() as folder:
            return _in_r(Path(folder), work, libraries, prepare, arrays)

    return [Way(f"R: {name}", run, same=same, rounds=rounds, library="R:" + ",".join(libraries))]


def _in_r(
    folder: Path, work: str, libraries: Sequence[str], prepare: str, arrays: Mapping[str, Any]
) -> Timed:
    lines = [f"suppressMessages(library({name}))" for name in libraries]
    for key, value in arrays.items():
        array = np.asarray(value)
        whole = array.dtype.kind in "iub"
        array.astype("<i4" if whole else "<f8").ravel(order="F").tofile(folder / key)
        kind = "integer" if whole else "double"
        lines.append(f"{key} <- readBin('{folder / key}', '{kind}', {array.size}, endian = 'little')")
        if array.ndim == 2:
            lines.append(f"{key} <- matrix({key}, {array.shape[0]})")
    lines += [
        prepare,
        "invisible(gc(reset = TRUE)); held <- sum(gc()[, 2])",
        f"took <- system.time(numbers <- {{ {work} }})[['elapsed']]",
        "most <- sum(gc()[, 6])",
        # 17 digits: what R holds, no less
        "cat(sprintf('%.6f %.3f\\n', took, max(0, most - held)))",
        "cat(sprintf('%.17g', as.numeric(numbers)), sep = ' ')",
    ]
    script = folder / "work.R"
    script.write_text("\n".join(lines) + "\n", encoding="utf-8")
    said = subprocess.run(["Rscript", "--vanilla", str(script)], capture_output=True, text=True)
    if said.returncode:
        raise RuntimeError(said.stderr.strip()[-200:])
    first, numbers = said.stdout.rstrip("\n").split("\n")[-2:]
    seconds, megabytes = map(float, first.split())
    return Timed(seconds, np.array(numbers.split(), dtype=float), megabytes * 2**20)


def r_versions() -> dict[str, str]:
    """Versions of R and of the libraries that rows use, where they are here."""
    if shutil.which("Rscript") is None:
        return {}
    names = ", ".join(f"'{name}'" for name in R_LIBRARIES)
    code = (
        "cat(as.character(getRversion()), '\\n'); "
        f"for (p in c({names})) if (requireNamespace(p, quietly = TRUE)) "
        "cat(p, as.character(packageVersion(p)), '\\n')"
    )
    lines = subprocess.run(["Rscript", "-e", code], capture_output=True, text=True).stdout.splitlines()
    return {"R": lines[0].strip()} | {a: b for a, b in (line.split() for line in lines[1:])}


def as_json(found: Sequence[Measured]) -> list[dict[str, Any]]:
    return json.loads(json.dumps([vars(one) for one in found]))
