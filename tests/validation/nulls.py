"""Null laws and promised power of the primary tests, measured.

    python -m tests.validation.nulls OUT [replicates]

writes one JSON line per design: the p-value of every primary test on replicates of independent rows
(read one column at a time, so by the exact route a user gets), and, for every size that an
examination calls detectable, the share of draws of that size in which the test finds it.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

import clingstone
from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence import TESTS
from clingstone.evidence.gather import read_columns
from clingstone.examination import settings_of
from clingstone.run import Run, one_thread
from tests.validation import worlds as w
from tests.validation.battery import GROUP, PANEL, PLACE, TIME

SEED = 20_261_202
DRAWS = 2000
PRIMARY = tuple(test for test in TESTS if test.primary)
NEST: Mapping[str, Any] = {"model": "y ~ x", "group": "a/b"}

DESIGNS: tuple[w.World, ...] = (
    w.World("12 groups of 5, x of groups", w.groups(12, 5, 0.0, "group"), GROUP),
    w.World("6 unequal groups, x in rows", w.groups(6, 8, 0.0, "row", equal=False), GROUP),
    w.World("40 times, x a trend", w.series(40, 0.0, "trend"), TIME),
    w.World("100 times, x autoregressive", w.series(100, 0.0, "ar"), TIME),
    w.World("12 series of 6 in groups, x in rows", w.panel(12, 6, 0.0, 0.0, "row"), PANEL),
    w.World("60 places, x smooth", w.places(60, 20, 0.0, "smooth"), PLACE),
    w.World("6 × 3 × 4 nested, x in rows", w.nested(6, 3, 4, 0.0, 0.0, "row"), NEST),
)


def fits_of(world: w.World, r: int) -> tuple[Fits, Case, pd.DataFrame]:
    frame, _ = world.table(np.random.default_rng([SEED, DESIGNS.index(world), r]))
    settings = settings_of({**world.arguments, "seed": r})
    case = Case.of(frame, settings)
    return Fits(case.response, Run(settings)), case, frame


def null_p(world: w.World, count: int) -> dict[str, list[float]]:
    """p of each primary test on ``count`` tables of independent rows."""
    out: dict[str, list[float]] = {}
    with one_thread():
        for r in range(count):
            read = read_columns(fits_of(world, r)[0], PRIMARY, given=False)
            for item, p in zip(read.items, read.p, strict=True):
                if item.decides:
                    out.setdefault(f"{item.test.id} {item.about.key}", []).append(float(p[0]))
    return out


def covariance(key: str, value: float, frame: pd.DataFrame, fits: Fits) -> w.Array:
    """Rows of one structure at the size that the examination names, in the order of the table."""
    n = len(frame)
    if key.startswith("group:"):
        columns = key.removeprefix("group:").split("/")
        code = frame.groupby(columns).ngroup().to_numpy()
        return np.asarray(value * w.same(code) + (1 - value) * np.eye(n))
    t = frame["t"].to_numpy()
    g = frame.groupby("g").ngroup().to_numpy() if "g" in frame else np.zeros(n)
    return np.asarray(w.same(g) * value ** np.abs(t[:, None] - t[None]))


def promised(world: w.World) -> list[tuple[str, float, float, float]]:
    """(key, size, share found by the test alone, share found after Holm) of every detectable size."""
    out = []
    for r in range(20):  # the first table of independent rows on which something is left undetected
        fits, case, frame = fits_of(world, r)
        found = clingstone.examine(frame, seed=r, rehearsal="none", **world.arguments)
        if found.ledger.detectable:
            break
    for one in found.ledger.detectable:
        if one.key == "spatial" or not np.isfinite(one.value):
            continue  # its range is part of the claim and not written down
        rng = np.random.default_rng([SEED, 1, DESIGNS.index(world)])
        L = np.linalg.cholesky(covariance(one.key, one.value, frame, fits) + 1e-10 * np.eye(len(frame)))
        Y = (L @ rng.standard_normal((len(frame), DRAWS)))[np.asarray(case.kept)]
        with one_thread():
            again = Fits(Response.of(fits.design, Y), fits.run)
            read = read_columns(again, PRIMARY, given=False)
        for item, p, adjusted in zip(read.items, read.p, read.adjusted, strict=True):
            mine = f"group:{item.about.key}" if item.test.family == "group" else item.test.family
            if item.decides and mine == one.key:
                out.append((one.key, one.value, float(np.mean(p < 0.05)), float(np.mean(adjusted < 0.05))))
    return out


def main(arguments: list[str]) -> None:
    count = int(arguments[1]) if len(arguments) > 1 else 500
    with Path(arguments[0]).open("w", encoding="utf-8") as out:
        for world in DESIGNS:
            line = {"design": world.name, "p": null_p(world, count), "promised": promised(world)}
            out.write(json.dumps(line) + "\n")
            out.flush()


if __name__ == "__main__":
    main(sys.argv[1:])
