"""Cost of refits in units of one statsmodels fit of the same data: python tests/benchmarks/bench_remedies.py

Each pair is timed next to each other, best of three, with one BLAS thread.
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import time
from collections.abc import Callable

import numpy as np
import statsmodels.api as sm

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies import refit, remedy
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series


def best(work: Callable[[], object], times: int = 3) -> float:
    out = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        out.append(time.perf_counter() - start)
    return min(out)


def data(n: int, G: int, p: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(0)
    group = np.sort(rng.integers(0, G, n))
    X = np.column_stack([np.ones(n), rng.normal(size=(n, p - 1)) + 0.3 * rng.normal(size=(G, p - 1))[group]])
    return X, group, X[:, 1] + 0.4 * rng.normal(size=G)[group] + rng.normal(size=n)


def fits(X: np.ndarray, y: np.ndarray, part: Partition, serial: Series | None = None) -> Fits:
    names = ("constant", *(f"x{j}" for j in range(1, X.shape[1])))
    terms = tuple(Term(n, (j,), "numeric") for j, n in enumerate(names))
    design = Design(Basis.of(X), names, terms, group=Groups((part,), "one level"), serial=serial)
    return Fits(Response.of(design, y), Run())


def grouped(n: int, G: int, p: int) -> None:
    X, group, y = data(n, G, p)
    part = Partition.of("g", group)
    clustered = best(lambda: sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": group}).bse)
    plain = best(lambda: sm.OLS(y, X).fit().bse)
    print(f"n = {n:,}, {part.count:,} clusters, p = {p}")
    print(f"  statsmodels: OLS {plain:.3f} s, with clusters {clustered:.3f} s")
    for id in ("ordinary", "cluster-robust", "heteroscedasticity-robust", "mixed-intercept"):
        whole = best(lambda id=id: refit(remedy(id), "", fits(X, y, part)))
        made = fits(X, y, part)
        shared = best(lambda id=id, made=made: refit(remedy(id), "", _bare(made)))
        print(
            f"  {id}: {whole:.3f} s ({whole / clustered:.2f} × clusters, {whole / plain:.2f} × OLS), "
            f"of which {shared:.3f} s after the decomposition of X"
        )


def _bare(run: Fits) -> Fits:
    """The same basis and response without anything kept."""
    d, r = run.design, run.response
    design = Design(d.basis, d.names, d.terms, group=d.group, serial=d.serial)
    return Fits(Response(design, r.coef, r.residual, r.ss), run.run)


def ordered(n: int, p: int) -> None:
    X, _, y = data(n, 10, p)
    tick = np.arange(n)
    serial = Series(
        "day", Partition.of("series", np.zeros(n, int)), tick.astype(float), "day", 1.0, tick, "regular"
    )
    part = Partition.of("g", tick // 20)
    lags = int(4 * (n / 100) ** (2 / 9))
    other = best(lambda: sm.OLS(y, X).fit(cov_type="HAC", cov_kwds={"maxlags": lags}).bse)
    for id in ("hac", "ar1"):
        mine = best(lambda id=id: refit(remedy(id), "", fits(X, y, part, serial)))
        print(f"n = {n:,}, p = {p}: {id} {mine:.3f} s; statsmodels HAC, {lags} lags: {other:.4f} s")


if __name__ == "__main__":
    grouped(20_000, 1000, 8)
    grouped(1_000_000, 50_000, 5)
    ordered(1000, 5)
    ordered(10_000, 5)
    ordered(100_000, 5)
