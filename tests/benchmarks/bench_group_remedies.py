"""Cost of the group remedies beside other libraries: python tests/benchmarks/bench_group_remedies.py

Each pair is timed next to each other on the same data, best of three, with one BLAS thread. The pair with
wildboottest runs only where that library is installed (``pip install wildboottest``).
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import importlib.util
import time
from collections.abc import Callable

import numpy as np
import statsmodels.api as sm

from clingstone.covariance.fits import Fits
from clingstone.design.design import Assignment, Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies import refit, remedy
from clingstone.run import Run
from clingstone.structure.group import Groups


def best(work: Callable[[], object], times: int = 3) -> float:
    out = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        out.append(time.perf_counter() - start)
    return min(out)


def data(n: int, G: int, p: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """X (constant, p − 2 row columns, an arm by group), groups, y."""
    rng = np.random.default_rng(0)
    group = np.sort(rng.integers(0, G, n))
    inner = rng.normal(size=(n, p - 2)) + 0.3 * rng.normal(size=(G, p - 2))[group]
    X = np.column_stack([np.ones(n), inner, group % 2])
    return X, group, X[:, 1] + 0.4 * rng.normal(size=G)[group] + rng.normal(size=n)


def fits(X: np.ndarray, y: np.ndarray, *groups: Partition) -> Fits:
    names = ("constant", *(f"x{j}" for j in range(1, X.shape[1])))
    terms = tuple(Term(n, (j,), "numeric", (n,)) for j, n in enumerate(names))
    arrangement = "one level" if len(groups) == 1 else "crossed"
    lots = Assignment({names[-1]: groups[0].key})
    design = Design(Basis.of(X), names, terms, group=Groups(groups, arrangement), assignment=lots)
    return Fits(Response.of(design, y), Run())


def bare(run: Fits) -> Fits:
    """The same basis and response without anything kept."""
    d, r = run.design, run.response
    design = Design(d.basis, d.names, d.terms, group=d.group, assignment=d.assignment)
    return Fits(Response(design, r.coef, r.residual, r.ss), run.run)


def wild() -> None:
    X, group, y = data(100_000, 500, 5)
    part = Partition.of("g", group)
    made = fits(X, y, part)
    mine = best(lambda: refit(remedy("wild-cluster-bootstrap"), "g", bare(made)))
    print(f"wild cluster bootstrap, n = 100,000, 500 clusters, 9,999 draws, p = 5: {mine:.3f} s for all five")
    print("  coefficients with their intervals")
    if importlib.util.find_spec("wildboottest") is None:
        return
    from wildboottest.wildboottest import wildboottest

    model = sm.OLS(y, X)
    wildboottest(model, B=99, cluster=group, param="x1", weights_type="rademacher", seed=1)  # compiles
    other = best(
        lambda: wildboottest(model, B=9999, cluster=group, param="x1", weights_type="rademacher", seed=1)
    )
    print(f"  wildboottest, one coefficient without an interval: {other:.3f} s ({other / mine:.1f} ×)")


def many() -> None:
    X, group, y = data(1_000_000, 50_000, 5)
    part = Partition.of("g", group)
    plain = best(lambda: sm.OLS(y, X).fit().bse)
    clustered = best(lambda: sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": group}).bse)
    print("n = 1,000,000, 50,000 clusters, p = 5")
    print(f"  statsmodels OLS {plain:.3f} s, with clusters {clustered:.3f} s")
    made = fits(X, y, part)
    for id in (
        "cluster-robust",
        "cluster-jackknife",
        "wild-cluster-bootstrap",
        "group-means",
        "group-t",
        "fixed-effects",
        "within-between",
        "randomisation",
    ):
        mine = best(lambda id=id: refit(remedy(id), "g", bare(made)))
        print(f"  {id}: {mine:.3f} s ({mine / plain:.2f} × OLS)")


def crossed() -> None:
    X, group, y = data(100_000, 2000, 5)
    other = np.random.default_rng(1).integers(0, 100, len(y))
    one, two = Partition.of("g", group), Partition.of("t", other)
    labels = np.column_stack([group, other])
    theirs = best(lambda: sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": labels}).bse)
    made = fits(X, y, one, two)
    for id in ("multiway-cluster", "fixed-effects"):
        mine = best(lambda id=id: refit(remedy(id), "g + t", bare(made)))
        print(f"two ways, n = 100,000, 2,000 × 100: {id} {mine:.3f} s; statsmodels two-way {theirs:.3f} s")


if __name__ == "__main__":
    wild()
    many()
    crossed()
