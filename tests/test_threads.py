"""One BLAS thread inside every verb, whatever the machine offers; the numbers do not depend on it."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd

import clingstone
from clingstone.run import one_thread

WORK = """
import sys
import numpy as np
import pandas as pd
import clingstone
from clingstone.results import to_json

rng = np.random.default_rng(1)
g, t = np.repeat(np.arange(12), 8), np.tile(np.arange(8), 12)
x = rng.standard_normal(96)
y = x + rng.standard_normal(12)[g] + rng.standard_normal(96)
table = pd.DataFrame({"y": y, "x": x, "g": g, "t": t})
found = clingstone.examine(table, model="y ~ x", group="g", time="t", rehearsal=2)
sys.stdout.write(to_json(found.results))
"""


def _blas_threads() -> list[int]:
    from threadpoolctl import threadpool_info

    return [pool["num_threads"] for pool in threadpool_info() if pool["user_api"] == "blas"]


def test_the_numbers_do_not_depend_on_the_number_of_threads() -> None:
    said = {}
    for threads in ("1", "4"):
        set_to = {name: threads for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")}
        run = subprocess.run(
            [sys.executable, "-c", WORK], env=os.environ | set_to, capture_output=True, text=True, check=True
        )
        said[threads] = run.stdout
    assert len(said["1"]) > 10_000
    assert said["1"] == said["4"]


def test_one_thread_while_a_verb_runs_and_the_callers_number_after_it() -> None:
    import scipy.linalg  # noqa: F401 - has a pool of its own, which must be there before the count
    from threadpoolctl import threadpool_limits

    rng = np.random.default_rng(2)
    table = pd.DataFrame(
        {"x": rng.standard_normal(60), "y": rng.standard_normal(60), "g": np.arange(60) // 6}
    )
    seen: list[int] = []

    def look(label: str, done: int, total: int) -> None:
        seen.extend(_blas_threads())

    with threadpool_limits(limits=3, user_api="blas"):
        before = _blas_threads()
        clingstone.examine(table, model="y ~ x", group="g", rehearsal="none", progress=look)
        assert _blas_threads() == before
    assert seen
    assert set(seen) == {1}


def test_one_thread_gives_back_what_it_found() -> None:
    before = _blas_threads()
    with one_thread():
        assert set(_blas_threads()) == {1}
    assert _blas_threads() == before


def test_no_pool_of_threads_is_started_by_the_package_itself() -> None:
    """Work in parallel is an engine's that the caller hands over; nothing here starts threads unasked."""
    root = Path(clingstone.__file__).parent
    found = [p.name for p in root.rglob("*.py") if "ThreadPoolExecutor" in p.read_text(encoding="utf-8")]
    assert not found
