"""The whole examination without its rehearsal, and how it grows: python -m tests.benchmarks bench_examine

python -m tests.benchmarks.bench_examine 1e4 1e5 1e6 1e7   measures these and draws docs/images/growth.svg
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way

MODEL = "y ~ x1 + x2 + x3"
ROOT = Path(__file__).parents[2]


def dated(n: int) -> pd.DataFrame:
    """n rows in groups of 20, shuffled: an intercept per group, a predictor of groups, white noise."""
    rng = np.random.default_rng(0)
    G = n // 20
    g, t = np.repeat(np.arange(G), 20), np.tile(np.arange(20), G)
    table = pd.DataFrame({"x1": rng.standard_normal(n), "x2": rng.standard_normal(G)[g]})
    table["x3"] = rng.standard_normal(n)
    table["g"], table["t"] = g, t
    table["y"] = table.x1 + 0.5 * table.x2 + rng.standard_normal(G)[g] + rng.standard_normal(n)
    return table.sample(frac=1, random_state=1).reset_index(drop=True)


def placed(n: int, sites: int) -> pd.DataFrame:
    """n rows at so many sites, groups of 20 rows across them."""
    rng = np.random.default_rng(1)
    site = rng.integers(0, sites, n)
    where = rng.uniform(0, 100, (sites, 2))
    wave = np.sin(where[:, 0] / 9) + np.cos(where[:, 1] / 7)
    table = pd.DataFrame(rng.standard_normal((n, 3)), columns=["x1", "x2", "x3"])
    table["g"] = rng.integers(0, n // 20, n)
    table["east"], table["north"] = where[site].T
    table["y"] = table.x1 + 0.5 * wave[site] + rng.standard_normal(n)
    return table


def whole(table: pd.DataFrame, **declared: Any) -> list[Way]:
    import statsmodels.formula.api as smf

    import clingstone

    def ours() -> np.ndarray:
        found = clingstone.examine(table, model=MODEL, rehearsal="none", **declared)
        return np.array([row.estimate for row in found.refit("ordinary").intervals])

    def library() -> np.ndarray:
        return np.asarray(smf.ols(MODEL, table).fit().params)

    return [Way(OURS, ours, rounds=3), Way(ONE_FIT + " of the formula", library, floor=True, rounds=5)]


def by_time(n: int) -> Callable[[], list[Way]]:
    return lambda: whole(dated(n), group="g", time="t")


def by_place(n: int, sites: int) -> Callable[[], list[Way]]:
    return lambda: whole(placed(n, sites), group="g", coords=("east", "north"))


def by_parts() -> list[Way]:
    """The same refits partition by partition and in memory."""
    import dask
    import dask.dataframe as dd

    import clingstone
    from clingstone.case import Case

    table = dated(1_000_000)
    frame = dd.from_pandas(table, npartitions=8)

    def ours() -> np.ndarray:
        with dask.config.set(scheduler="synchronous"):
            found = clingstone.examine_parts(frame, model=MODEL, group="g")
        return np.array([row.se for row in found.refit("cluster-robust").intervals])

    def memory() -> np.ndarray:
        case = Case.from_formula(table, MODEL, group="g")
        return np.array([row.se for row in clingstone.refit(case, "cluster-robust").intervals])

    return [
        Way("clingstone, examine_parts, 8 partitions", ours, rounds=3),
        Way("clingstone in memory, cluster-robust alone", memory, rounds=3),
    ]


def command(*words: str) -> Callable[[], None]:
    return partial(subprocess.run, [sys.executable, *words], check=True, stdout=subprocess.DEVNULL)


def start() -> list[Way]:
    rich = "import rich.console, rich.panel, rich.table"
    return [
        Way("clingstone --help", command("-m", "clingstone", "--help")),
        Way("python -c pass", command("-c", "pass"), same=False, floor=True),
        Way("python: import of rich's console and tables", command("-c", rich), same=False, floor=True),
    ]


ROWS = (
    Row("start", "Start of the command line", "--help", start),
    Row("examine-1e4", "examine, group and time", "1e4 rows, 500 groups", by_time(10_000)),
    Row("examine-1e5", "examine, group and time", "1e5 rows, 5,000 groups", by_time(100_000)),
    Row("examine-1e6", "examine, group and time", "1e6 rows, 50,000 groups", by_time(1_000_000)),
    Row("examine-places", "examine, group and places", "1e6 rows, 1e5 sites", by_place(1_000_000, 100_000)),
    Row("parts-1e6", "Cluster-robust by partitions", "1e6 rows, 50,000 groups", by_parts),
)


# ---- growth ----------------------------------------------------------------------------------------------


def grown(n: int) -> tuple[float, float, float]:
    """Processor seconds of examine and of one ordinary fit, and peak bytes over the numeric columns."""
    import json

    said = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.bench_examine", "--one", str(n)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    found: tuple[float, float, float] = tuple(json.loads(said.stdout.splitlines()[-1]))
    return found


def one(n: int) -> tuple[float, float, float]:
    import time

    from tests.benchmarks.pairs import _resident

    table = dated(n)
    ours, library = whole(table, group="g", time="t")
    start = time.process_time()
    library.work()
    fit = time.process_time() - start
    before = _resident("VmRSS")
    Path("/proc/self/clear_refs").write_text("5")
    start = time.process_time()
    ours.work()
    return time.process_time() - start, fit, (_resident("VmHWM") - before) / (48.0 * n)


def growth(sizes: list[int]) -> None:
    """Prints what was measured with the exponent of the cost, and draws it."""
    import matplotlib.pyplot as plt

    found = {n: grown(n) for n in sizes}
    seconds = np.array([found[n][0] for n in sizes])
    slope = float(np.polyfit(np.log(sizes[-2:]), np.log(seconds[-2:]), 1)[0])
    for n, (took, fit, held) in found.items():
        print(
            f"{n:>10,} rows: {took:8.2f} s = {took / fit:6.1f} fits; peak {held:5.1f} × the numeric columns"
        )
    print(f"exponent over the last two sizes: {slope:.2f}")
    figure, axis = plt.subplots(figsize=(5, 3.2), layout="constrained")
    axis.loglog(sizes, seconds, "o-", color="#2b5c8a", label="examine, no rehearsal")
    axis.loglog(sizes, [found[n][1] for n in sizes], "s--", color="#8a5a2b", label="one ordinary fit")
    axis.set_xlabel("rows")
    axis.set_ylabel("processor seconds")
    axis.set_title(f"group and time, groups of 20; exponent {slope:.2f}", fontsize=9, loc="left")
    axis.legend(frameon=False, fontsize=8)
    axis.spines[["top", "right"]].set_visible(False)
    figure.savefig(ROOT / "docs" / "images" / "growth.svg", metadata={"Date": None})


if __name__ == "__main__":
    if sys.argv[1] == "--one":
        print(list(one(int(sys.argv[2]))))
    else:
        growth([int(float(size)) for size in sys.argv[1:]])
