"""The simulation study: what an examination says of worlds whose truth is known.

    python -m tests.validation.study OUT [replicates] [words of a world's name …]

appends one JSON line per replicate to OUT; ``tests.validation.write`` turns them into
docs/validation.md. Replicate r of a world has the seed (SEED, crc32 of its name, r), so that a study
can be continued or repeated in part.
"""

from __future__ import annotations

import json
import sys
import time
import zlib
from pathlib import Path
from typing import Any

import numpy as np

import clingstone
from tests.validation.battery import WORLDS
from tests.validation.worlds import Array, Truth, World

SEED = 20_261_201
BATCH = 20
FAULTS = (ValueError, ArithmeticError, LookupError, TypeError, AttributeError, np.linalg.LinAlgError)
Z = 1.959963984540054


def oracle(truth: Truth, y: Array) -> dict[str, float]:
    """x by generalised least squares at the true covariance, and the true factor of the ordinary fit.

    The factor is the true standard deviation of the ordinary coefficient over the root of what the
    ordinary fit expects its variance to be, E(s²)(X'X)⁻¹.
    """
    n = len(y)
    X = np.column_stack([np.ones(n), truth.x])
    L = np.linalg.cholesky(truth.V + 1e-10 * np.eye(n))
    A, b = np.linalg.solve(L, X), np.linalg.solve(L, y - truth.mean)
    cov = np.linalg.inv(A.T @ A)
    inverse = np.linalg.inv(X.T @ X)
    H = X @ inverse
    s2 = (np.trace(truth.V) - np.trace(H.T @ truth.V @ X)) / (n - 2)
    return {
        "estimate": float((cov @ (A.T @ b))[1]),
        "se": float(np.sqrt(cov[1, 1])),
        "factor": float(np.sqrt((H.T @ truth.V @ H)[1, 1] / (s2 * inverse[1, 1]))),
    }


def replicate(world: World, r: int) -> dict[str, Any]:
    """One draw of a world, examined through the front door."""
    rng = np.random.default_rng([SEED, zlib.crc32(world.name.encode()), r])
    frame, truth = world.table(rng)
    out: dict[str, Any] = {"world": world.name, "r": r, "oracle": oracle(truth, frame["y"].to_numpy())}
    started = time.process_time()
    try:
        found = clingstone.examine(frame, seed=r, rehearsal="none", **world.arguments)
    except Exception as error:
        return {**out, "error": f"{type(error).__name__}: {error}"}
    advice, ledger = found.advice, found.ledger
    total = ledger.factor("x")
    return {
        **out,
        "seconds": time.process_time() - started,
        "state": advice.state,
        "remedy": advice.remedy,
        "at": advice.at,
        "structures": sorted(advice.structures),
        "protected": sorted(advice.protected),
        "doubt": advice.mean_in_doubt,
        "because": [c.rule for c in advice.because],
        "cautions": [c.rule for c in advice.cautions],
        "headline": advice.headline,
        "rows": [
            [row.remedy, fit.at, row.estimate, row.se, row.df, row.low, row.high, row.status]
            for fit in found.refits
            for row in fit.intervals
            if row.term == "x"
        ],
        "primary": {f"{f.test} {f.about}": f.p for f in found.evidence if f.primary},
        "standing": {s.key: [s.verdict, s.p_alone, s.p_given, s.worst] for s in ledger.standing},
        "shares": {s.key: [s.low, s.share, s.high] for s in ledger.shares},
        "factor": [total.low, total.estimate, total.high] if total else None,
        "detectable": {d.key: d.value for d in ledger.detectable},
    }


def wanted(words: list[str]) -> tuple[World, ...]:
    return tuple(world for world in WORLDS if all(word in world.name for word in words))


def done(path: Path) -> set[tuple[str, int]]:
    if not path.exists():
        return set()
    lines = (json.loads(line) for line in path.read_text(encoding="utf-8").splitlines())
    return {(line["world"], line["r"]) for line in lines}


def main(arguments: list[str]) -> None:
    path = Path(arguments[0])
    count = int(arguments[1]) if len(arguments) > 1 else 100
    already = done(path)
    with path.open("a", encoding="utf-8") as out:
        for start in range(0, count, BATCH):
            for world in wanted(arguments[2:]):
                for r in range(start, min(start + BATCH, count)):
                    if (world.name, r) in already:
                        continue
                    out.write(json.dumps(replicate(world, r)) + "\n")
                out.flush()


if __name__ == "__main__":
    main(sys.argv[1:])
