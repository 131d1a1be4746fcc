"""Replicates per second of a rehearsal, one core, beside a loop over a general-purpose mixed-model library.

    OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_rehearsal.py

2,000 rows, 100 groups, 5 coefficients. Every figure includes drawing y, intervals and their degrees of
freedom; design quantities are prepared once, before the clock starts. Best of three.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import resource
import sys
import time
import warnings
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from clingstone.rehearsal.study import Job, Study, study
from clingstone.rehearsal.truths import Truth, draw
from clingstone.run import one_thread
from remedies.cases import design, fits

N, G, P = 2000, 100, 5
GROUPED = (("ordinary", ""), ("cluster-robust", "clinic"), ("mixed-intercept", "clinic"))


def world(serial: bool, wanted: tuple[tuple[str, str], ...]) -> Study:
    rng = np.random.default_rng(0)
    X = np.column_stack([np.ones(N), rng.standard_normal((N, P - 1))])
    group = np.repeat(np.arange(G), N // G)
    of = design(X, tick=np.arange(N)) if serial else design(X, group=group)
    f = fits(of, rng.standard_normal(N) + 0.5 * rng.standard_normal(G)[group])
    node = ("serial",) if serial else ("group:clinic",)
    truth = Truth("bench", "", node, (0.5,) if serial else (-1.4,), 1.0)
    found, left = study(f, [truth], wanted)
    assert not left
    return found


def rate(found: Study, size: int = 500, chunks: int = 4) -> float:
    """Replicates per second, best of three."""
    found.run(Job(0, 0, size))
    best = 0.0
    for _ in range(3):
        start = time.perf_counter()
        for chunk in range(chunks):
            found.run(Job(0, chunk, size))
        best = max(best, chunks * size / (time.perf_counter() - start))
    return best


def library(found: Study, count: int = 4) -> float:
    """Fits per second of statsmodels' MixedLM on the same columns, drawing excluded."""
    from statsmodels.regression.mixed_linear_model import MixedLM

    f = found.fits
    y = draw(found.truths[0], f, np.random.default_rng(1), count)
    X, codes = f.design.Q @ f.design.basis.R, f.design.partitions["clinic"].codes
    Y = f.design.Q @ y.coef + y.residual
    start = time.perf_counter()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for b in range(count):
            MixedLM(Y[:, b], X, groups=codes).fit(reml=True)
    return count / (time.perf_counter() - start)


def main() -> None:
    with one_thread():
        robust = world(False, GROUPED[:2])
        mixed = world(False, GROUPED[2:])
        rows = world(False, (*GROUPED, ("heteroscedasticity-robust", "")))
        lines = [
            ("naive + CR2 with df, sums drawn", rate(robust), 20_000),
            ("random intercept, REML with Kenward–Roger df, sums drawn", rate(mixed), 5_000),
            ("naive + CR2 + random intercept together", rate(world(False, GROUPED)), None),
            (
                "… and HC2, so rows are drawn",
                rate(rows),
                None,
            ),
            ("AR(1) REML with Satterthwaite df", rate(world(True, (("ar1", ""),))), 2_000),
            ("AR(1) and cosine HAC together", rate(world(True, (("ar1", ""), ("hac", "")))), None),
        ]
        loop = library(mixed)
    for words, per_second, aim in lines:
        target = f"   (aim {aim:,})" if aim else ""
        print(f"{words:58s} {per_second:9,.0f} /s{target}")
    print(f"{'MixedLM in a loop (statsmodels), fit only':58s} {loop:9,.1f} /s")
    print(f"random intercept against that loop: {lines[1][1] / loop:,.0f} times")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"peak memory of this process: {peak:,.0f} MB, whatever the number of replicates")


if __name__ == "__main__":
    main()
