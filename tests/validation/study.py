"""The simulation study: what an examination says of worlds whose truth is known.

    python -m tests.validation.study OUT [draws] [words of a world's name …]
        [--rehearsed] [--minutes M] [--processes P]

appends one JSON line per design of a world to OUT; ``tests.validation.write`` turns them into
docs/validation.md. The columns of y on one design are examined together, by the rules alone; the first
column of a first design goes through ``clingstone.examine`` as well, and it is noted whether the two agree.
With ``--rehearsed`` every table goes through ``clingstone.examine`` with its defaults, one to a design.

Design d of a world has the seed (SEED, crc32 of its name, d), so that a study can be stopped, continued
or repeated in part. The next design is one of the world that has taken the least time: when the minutes
are over, fast worlds are whole and slow ones have had the same time as each other.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import time
from collections.abc import Iterable, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np

import clingstone
from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.examination import settings_of
from clingstone.ledger.ledger import Ledger
from clingstone.rehearsal.many import Many
from clingstone.remedies.remedy import Refit
from clingstone.run import Run, one_thread
from tests.validation.battery import WORLDS
from tests.validation.oracle import oracle
from tests.validation.worlds import World

DRAWS = 1000
CHECKED = 1  # designs of a world whose first column goes through the front door as well
RULES, REHEARSED = "rules", "rehearsed"
NEAR = 1e-4  # of its width: what two ways to one interval may differ by
BY_NAME = {world.name: world for world in WORLDS}
Line = dict[str, Any]


# ---- one column of y -----------------------------------------------------------------------------


def record(
    state: str,
    advised: Refit | None,
    ordinary: Refit,
    ledger: Ledger,
    structures: Iterable[str],
    protected: Iterable[str],
    doubt: bool,
) -> Line:
    """What is kept of one examination; intervals are those of x."""
    total = ledger.factor("x")
    return {
        "state": state.removesuffix(" with caveat"),
        "remedy": advised.remedy if advised is not None else "",
        "at": advised.at if advised is not None else "",
        "structures": sorted(structures),
        "protected": sorted(protected),
        "doubt": bool(doubt),
        "advised": ends(advised),
        "ordinary": ends(ordinary),
        "factor": [total.low, total.estimate, total.high] if total is not None else None,
    }


def ends(fit: Refit | None) -> list[float] | None:
    """The interval of x; None where the refit has none."""
    rows = () if fit is None else fit.intervals
    return next(([r.low, r.high] for r in rows if r.term == "x" and np.isfinite(r.high - r.low)), None)


def through_the_door(world: World, frame: Any, seed: int, rehearsal: str) -> Line:
    """One table as a user hands it over."""
    found = clingstone.examine(frame, seed=seed, rehearsal=rehearsal, **world.arguments)
    advice = found.advice
    refits = {(r.remedy, r.at): r for r in found.refits}
    return record(
        advice.state,
        refits.get((advice.remedy, advice.at)),
        refits["ordinary", ""],
        found.ledger,
        advice.structures,
        advice.protected,
        advice.mean_in_doubt,
    )


def together(world: World, truth: Any, Y: Any, seed: int) -> list[Line]:
    """Columns of y on one design, examined at once."""
    settings = settings_of({**world.arguments, "seed": seed, "rehearsal": "none"})
    case = Case.of(truth.table(Y[:, 0]), settings)
    out = []
    with one_thread():
        response = Response.of(case.response.design, Y[np.asarray(case.kept)])
        many = Many(Fits(response, Run(settings), depth="exact"))
        for b in range(Y.shape[1]):
            seen = many.seen(b)
            out.append(
                record(
                    seen.state,
                    seen.refit,
                    seen.ordinary,
                    seen.ledger,
                    seen.structures,
                    seen.protected,
                    seen.mean_in_doubt,
                )
            )
    return out


def agree(one: Line, other: Line) -> bool:
    """Whether two ways of examining one column said the same."""
    for name in ("advised", "ordinary"):
        a, b = one[name], other[name]
        if (a is None) != (b is None):
            return False
        if a is not None and np.abs(np.subtract(a, b)).max() > NEAR * (a[1] - a[0]):
            return False
    words = ("state", "remedy", "at", "structures", "protected", "doubt")
    return all(one[word] == other[word] for word in words)


# ---- one design ----------------------------------------------------------------------------------


def measure(arm: str, name: str, d: int) -> Line:
    """Design d of a world, with everything that a page needs of its columns of y."""
    world = BY_NAME[name]
    truth, rng = world.design(d)
    Y = truth.y(rng, 1 if arm == REHEARSED else world.batch)
    out: Line = {"arm": arm, "world": name, "design": d, "oracle": oracle(truth, Y)}
    started = time.process_time()
    try:
        if arm == REHEARSED:
            columns = [through_the_door(world, truth.table(Y[:, 0]), d, "auto")]
        else:
            columns = together(world, truth, Y, d)
        seconds = time.process_time() - started
        agreed = None
        if arm == RULES and d < CHECKED:
            agreed = agree(columns[0], through_the_door(world, truth.table(Y[:, 0]), d, "none"))
    except Exception as error:  # any fault of an examination is a result of the study
        return {**out, "error": f"{type(error).__name__}: {error}", "seconds": time.process_time() - started}
    return {**out, "columns": columns, "agreed": agreed, "seconds": seconds}


# ---- all of them ---------------------------------------------------------------------------------


def wanted(words: Iterable[str]) -> tuple[World, ...]:
    return tuple(world for world in WORLDS if all(word in world.name for word in words))


def read(path: Path) -> list[Line]:
    if not path.exists():
        return []
    return [json.loads(line) for line in path.read_text(encoding="utf-8").splitlines()]


class Queue:
    """Designs still to be measured; the next one is of the world that has taken the least time."""

    def __init__(self, worlds: Iterable[World], arm: str, draws: int, already: Iterable[Line]) -> None:
        done = [line for line in already if line["arm"] == arm]
        had = {(line["world"], line["design"]) for line in done}
        self.left: dict[str, list[int]] = {}
        for world in worlds:
            count = draws if arm == REHEARSED else -(-draws // world.batch)
            left = [d for d in reversed(range(count)) if (world.name, d) not in had]
            if left:
                self.left[world.name] = left
        self.spent = dict.fromkeys(self.left, 0.0)
        for line in done:
            self.took(line["world"], line["seconds"])
        self.arm, self.size = arm, sum(map(len, self.left.values()))

    def took(self, name: str, seconds: float) -> None:
        self.spent[name] = self.spent.get(name, 0.0) + seconds

    def take(self) -> tuple[str, str, int] | None:
        open_ = [name for name, left in self.left.items() if left]
        if not open_:
            return None
        name = min(open_, key=lambda one: self.spent[one])
        # What is under way counts as a little, so that processes spread over the worlds.
        self.took(name, 1e-3)
        return self.arm, name, self.left[name].pop()


def run(queue: Queue, path: Path, minutes: float, processes: int) -> None:
    """Measure and append, until nothing is left or the time is over."""
    os.environ |= dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    end, done = time.monotonic() + 60 * minutes, 0
    pool = ProcessPoolExecutor(processes, mp_context=get_context("spawn"))
    waiting: set[Future[Line]] = set()
    with pool, path.open("a", encoding="utf-8") as out:
        while True:
            while len(waiting) < processes and time.monotonic() < end and (job := queue.take()) is not None:
                waiting.add(pool.submit(measure, *job))
            if not waiting:
                break
            ready, waiting = wait(waiting, return_when=FIRST_COMPLETED)
            for line in (one.result() for one in ready):
                out.write(json.dumps(line) + "\n")
                out.flush()
                queue.took(line["world"], line["seconds"])
                done += 1
                told(done, queue.size, line)


def told(done: int, size: int, line: Mapping[str, Any]) -> None:
    what = line.get("error", f"{len(line.get('columns', ()))} columns in {line['seconds']:.1f} s")
    print(f"{done} of {size} designs: {line['world']}, {what}", file=sys.stderr, flush=True)


def main() -> None:
    ask = argparse.ArgumentParser(description="Measure what examinations say of known worlds.")
    ask.add_argument("out", type=Path)
    ask.add_argument("draws", type=int, nargs="?", default=DRAWS, help="columns of y a world")
    ask.add_argument("words", nargs="*", help="only worlds whose names hold all of these")
    ask.add_argument("--rehearsed", action="store_true", help="one table a design, with a rehearsal")
    ask.add_argument("--minutes", type=float, default=float("inf"))
    ask.add_argument("--processes", type=int, default=2)
    given = ask.parse_args()
    arm = REHEARSED if given.rehearsed else RULES
    queue = Queue(wanted(given.words), arm, given.draws, read(given.out))
    run(queue, given.out, given.minutes, given.processes)


if __name__ == "__main__":
    main()
