"""Mixed models and tests for groups beside general-purpose fits of the same rows, one BLAS thread.

    OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_mixed.py

Each line: what, seconds (best of three), and the ratio to one statsmodels OLS fit of the same rows, or to
what stands beside it. Group sums, search, covariance and df are counted; the basis (QR) is made before.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import time
import tracemalloc
from collections.abc import Callable

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.grouplm import GroupLM
from clingstone.evidence.restricted import RestrictedLR, null_draws
from clingstone.evidence.slopes import SlopeVariation
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies import remedy
from clingstone.remedies.mixed import MixedSlope
from clingstone.remedies.mixedrobust import MixedRobust
from clingstone.remedies.refit import refit
from clingstone.run import Run
from clingstone.structure.group import Groups

NAMES = ("constant", "x1", "x2", "x3", "x4")
TERMS = tuple(
    Term(name, (j,), "numeric" if j else "constant", (name,) if j else (), j == 1)
    for j, name in enumerate(NAMES)
)


def say(what: str, figure: str, beside: str = "") -> None:
    print(f"{what:<56}{figure:>10}   {beside}")


def best(work: Callable[[], object], times: int = 3) -> float:
    took = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        took.append(time.perf_counter() - start)
    return min(took)


def ols(X: np.ndarray, y: np.ndarray) -> float:
    import statsmodels.api as sm

    return best(lambda: sm.OLS(y, X).fit())


def columns(n: int, seed: int = 0) -> tuple[np.random.Generator, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng, np.column_stack([np.ones(n), rng.standard_normal((n, 4))])


def fresh(basis: Basis, X: np.ndarray, y: np.ndarray, **levels: np.ndarray) -> Fits:
    """Nothing is kept from one run to the next."""
    parts = tuple(Partition.of(k, v) for k, v in levels.items())
    groups = Groups(parts, "one level" if len(parts) == 1 else "crossed")
    design = Design(basis, NAMES, TERMS, group=groups, covariates={f"x{j}": X[:, j] for j in range(1, 5)})
    return Fits(Response.of(design, y), Run())


def million() -> None:
    n, G = 10**6, 5 * 10**4
    rng, X = columns(n)
    g = rng.integers(0, G, n)
    y = rng.standard_normal(G)[g] + 0.5 * rng.standard_normal(G)[g] * X[:, 1] + rng.standard_normal(n)
    basis, unit = Basis.of(X), ols(X, y)
    say("statsmodels OLS, 1e6 rows, p = 5", f"{unit:.3f} s")
    made = [fresh(basis, X, y, g=g) for _ in range(3)]
    search = best(lambda: made.pop()[{"group:g", "slope:g:x1"}])
    say("slope REML, 1e6 rows, 5e4 groups", f"{search:.3f} s", f"{search / unit:.2f} × OLS")
    made = [fresh(basis, X, y, g=g) for _ in range(3)]
    whole = best(lambda: refit(MixedSlope(), "x1 by g", made.pop()))
    say("slope REML with Kenward–Roger df, whole refit", f"{whole:.3f} s", f"{whole / unit:.2f} × OLS")
    made = [fresh(basis, X, y, g=g) for _ in range(3)]
    robust = best(lambda: refit(MixedRobust(), "g", made.pop()))
    say("random intercept, CR2 by 5e4 clusters with df", f"{robust:.3f} s", f"{robust / unit:.2f} × OLS")
    for test, about in ((GroupLM(), "g"), (SlopeVariation(), "x1 by g"), (RestrictedLR(), "g")):
        made = [fresh(basis, X, y, g=g) for _ in range(3)]
        took = best(lambda t=test, a=about, m=made: t.read(m.pop(), About(a, "")))
        say(test.id, f"{took:.3f} s", f"{took / unit:.2f} × OLS")
    f = fresh(basis, X, y, g=g)
    tracemalloc.start()
    f[{"group:g", "slope:g:x1"}]
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    say("memory of the slope fit", f"{peak / X.nbytes:.2f} ×", "the numeric columns, beside them")


def cut_across() -> None:
    n = 10**5
    rng, X = columns(n)
    a, b = rng.integers(0, 2000, n), rng.integers(0, 500, n)
    y = 0.8 * rng.standard_normal(2000)[a] + 0.5 * rng.standard_normal(500)[b] + rng.standard_normal(n)
    basis, unit = Basis.of(X), ols(X, y)
    made = [fresh(basis, X, y, a=a, b=b) for _ in range(3)]
    took = best(lambda: made.pop()[{"group:a", "group:b"}])
    say("crossed REML, 1e5 rows, 2,000 × 500", f"{took:.3f} s", f"{took / unit:.1f} × OLS")


def beside_mixedlm() -> None:
    import statsmodels.api as sm

    n, G = 20_000, 1000
    rng, X = columns(n)
    g = rng.integers(0, G, n)
    y = rng.standard_normal(G)[g] + 0.5 * rng.standard_normal(G)[g] * X[:, 1] + rng.standard_normal(n)
    basis = Basis.of(X)
    made = [fresh(basis, X, y, g=g) for _ in range(3)]
    ours = best(lambda: made.pop()[{"group:g", "slope:g:x1"}])
    theirs = best(lambda: sm.MixedLM(y, X, groups=g, exog_re=X[:, :2]).fit(reml=True), 1)
    say("slope REML, 2e4 rows, 1e3 groups", f"{ours:.4f} s", f"MixedLM {theirs / ours:.0f} × longer")


def intercept_beside_mixedlm() -> None:
    import statsmodels.api as sm

    n, G = 10**5, 5000
    rng, X = columns(n)
    g = rng.integers(0, G, n)
    y = rng.standard_normal(G)[g] + rng.standard_normal(n)
    basis = Basis.of(X)
    made = [fresh(basis, X, y, g=g) for _ in range(3)]
    ours = best(lambda: refit(remedy("mixed-intercept"), "g", made.pop()))
    theirs = best(lambda: sm.MixedLM(y, X, groups=g).fit(reml=True), 1)
    say(
        "intercept with Kenward–Roger, 1e5 rows, 5e3 groups",
        f"{ours:.4f} s",
        f"MixedLM {theirs / ours:.0f} × longer",
    )


def clusters_at_size() -> None:
    n, G = 10**6, 5 * 10**4
    rng, X = columns(n)
    g = rng.integers(0, G, n)
    y = rng.standard_normal(G)[g] + rng.standard_normal(n)
    basis, unit = Basis.of(X), ols(X, y)
    for name in ("cluster-robust", "cluster-jackknife", "wild-cluster-bootstrap"):
        made = [fresh(basis, X, y, g=g) for _ in range(4)]
        took = best(lambda i=name, m=made: refit(remedy(i), "g", m.pop()))
        f = made.pop()
        tracemalloc.start()
        refit(remedy(name), "g", f)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        say(f"{name}, 1e6 rows, 5e4 groups", f"{took:.3f} s", f"{took / unit:.2f} × OLS")
        say("  its memory", f"{peak / X.nbytes:.2f} ×", "the numeric columns, beside them")


def null_law() -> None:
    n, G = 10**5, 5000
    rng, X = columns(n)
    g = rng.integers(0, G, n)
    f = fresh(Basis.of(X), X, rng.standard_normal(n), g=g)
    part = f.design.group.finest
    took = best(lambda: null_draws(f.design, part, G - 1, f.run, 100_000), 1)
    say("exact restricted ratio, 1e5 draws, 5,000 groups", f"{took:.3f} s")


if __name__ == "__main__":
    million()
    cut_across()
    beside_mixedlm()
    intercept_beside_mixedlm()
    clusters_at_size()
    null_law()
