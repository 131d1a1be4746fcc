"""A rehearsal beside a loop over a mixed-model library: python -m tests.benchmarks bench_rehearsal

Replicates per second of every kind, and memory: python -m tests.benchmarks.bench_rehearsal

2,000 rows, 100 groups, 5 coefficients. Every figure includes drawing y, intervals and their degrees of
freedom; design quantities are prepared once, before the clock starts. Processor seconds, best of three.
"""

from __future__ import annotations

import resource
import sys
import time
import warnings
from pathlib import Path

import numpy as np

from tests.benchmarks.pairs import OURS, Row, Way

sys.path.insert(0, str(Path(__file__).parents[1]))

from clingstone.ledger.ledger import focus_rows
from clingstone.rehearsal.path import Paths
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
        start = time.process_time()
        for chunk in range(chunks):
            found.run(Job(0, chunk, size))
        best = max(best, chunks * size / (time.process_time() - start))
    return best


def whole_paths(time_too: bool, size: int = 100) -> float:
    """Whole examinations per second: detect, advise, refit; groups, or groups with an order in time."""
    rng = np.random.default_rng(0)
    X = np.column_stack([np.ones(N), rng.standard_normal((N, P - 1))])
    group, tick = np.repeat(np.arange(G), N // G), np.tile(np.arange(N // G), G)
    of = design(X, group=group, series=group, tick=tick) if time_too else design(X, group=group)
    f = fits(of, rng.standard_normal(N) + 0.5 * rng.standard_normal(G)[group])
    model = f[{"group:clinic"}]
    truth = Truth("bench", "", model.node, tuple(model.theta[:, 0].tolist()), float(model.sigma2[0]))
    work = Paths(f, (truth,), focus_rows(f))
    work.run(Job(0, 9, 3))
    best = 0.0
    for chunk in range(3):
        start = time.process_time()
        work.run(Job(0, chunk, size))
        best = max(best, size / (time.process_time() - start))
    return best


def peak() -> float:
    """MB that this process has held at the most."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def loop(found: Study, count: int) -> list[float]:
    """The first slope by statsmodels' MixedLM on so many columns, one after the other; drawing included."""
    from statsmodels.regression.mixed_linear_model import MixedLM

    f = found.fits
    y = draw(found.truths[0], f, np.random.default_rng(1), count)
    X, codes = f.design.Q @ f.design.basis.R, f.design.partitions["clinic"].codes
    Y = f.design.Q @ y.coef + y.residual
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return [float(MixedLM(Y[:, b], X, groups=codes).fit(reml=True).fe_params[1]) for b in range(count)]


COUNT = 500  # replicates of the pair


def pair() -> list[Way]:
    mixed = world(False, GROUPED[2:])
    few = COUNT // 50
    return [
        Way(OURS, lambda: mixed.run(Job(0, 0, COUNT)) and None),
        Way(
            f"statsmodels MixedLM, a loop over a fiftieth of them ({few})",
            lambda: loop(mixed, few) and None,
            same=False,
            rounds=2,
            library="statsmodels",
        ),
    ]


ROWS = (
    Row(
        "rehearsal-mixed",
        "Random intercept by REML in a rehearsal, with Kenward–Roger intervals",
        f"{COUNT} replicates of 2,000 rows, 100 groups, p = 5",
        pair,
        note="The loop has a fiftieth of the replicates and gives no degrees of freedom: the ratio per "
        "replicate is fifty times that shown.",
    ),
)


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
        paths = [("whole paths, groups", whole_paths(False), 500), ("… and time", whole_paths(True), 500)]
        lines += paths
        start = time.process_time()
        loop(mixed, 4)
        slow = 4 / (time.process_time() - start)
        rate(mixed, chunks=4)
        few = peak()
        rate(mixed, chunks=40)
        many = peak()
    for words, per_second, aim in lines:
        target = f"   (aim {aim:,})" if aim else ""
        print(f"{words:58s} {per_second:9,.0f} /s{target}")
    print(f"{'MixedLM in a loop (statsmodels), drawing included':58s} {slow:9,.1f} /s")
    print(f"random intercept against that loop: {lines[1][1] / slow:,.0f} times")
    print(
        f"peak memory of this process: {few:,.0f} MB after 2,000 replicates, {many:,.0f} MB after 60,000 more"
    )


if __name__ == "__main__":
    main()
