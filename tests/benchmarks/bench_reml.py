"""Error models by REML beside general-purpose fits, one BLAS thread, best of three.

    OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_reml.py

Each line: what, seconds, and the ratio to what stands beside it. "Intercept" includes group sums and the
search; the basis (QR) is made before, as it is for every method.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import time
from collections.abc import Callable

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


def best(work: Callable[[], object], times: int = 3) -> float:
    took = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        took.append(time.perf_counter() - start)
    return min(took)


def rows(n: int, p: int, seed: int = 0) -> tuple[np.random.Generator, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng, np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))])


def grouped(n: int, G: int, p: int = 5) -> tuple[np.ndarray, np.ndarray, np.ndarray, Basis]:
    rng, X = rows(n, p)
    g = rng.integers(0, G, n)
    return X, rng.standard_normal(G)[g] + rng.standard_normal(n), g, Basis.of(X)


def intercept_fit(basis: Basis, y: np.ndarray, part: Partition) -> Fits:
    design = Design(basis, tuple("abcde"), (), group=Groups((part,), "one level"))
    f = Fits(Response.of(design, y), Run())
    f[{"group:g"}]
    return f


def series_fit(basis: Basis, y: np.ndarray, part: Partition, tick: np.ndarray) -> Fits:
    serial = Series("t", part, tick.astype(float), "", 1.0, tick, "regular")
    f = Fits(Response.of(Design(basis, tuple("abcde"), (), serial=serial), y), Run())
    f[{"serial"}]
    return f


def million() -> None:
    import statsmodels.api as sm

    n, G = 10**6, 5 * 10**4
    X, y, g, basis = grouped(n, G)
    part = Partition.of("g", g)
    ols = best(lambda: sm.OLS(y, X).fit())
    reml = best(lambda: intercept_fit(basis, y, part))
    print(f"intercept REML, 1e6 rows, 5e4 groups, p=5   {reml:.3f} s   {reml / ols:.2f} × statsmodels OLS")
    whole, tick = Partition("all rows", np.zeros(n, np.int32), ("all",)), np.arange(n)
    ar1 = best(lambda: series_fit(basis, y, whole, tick))
    print(f"AR(1) REML, 1e6 rows in one series, p=5     {ar1:.3f} s   {ar1 / ols:.2f} × statsmodels OLS")
    print(f"statsmodels OLS, 1e6 rows, p=5              {ols:.3f} s")


def beside_mixedlm() -> None:
    import statsmodels.api as sm

    X, y, g, basis = grouped(20_000, 1_000)
    part = Partition.of("g", g)
    ours = best(lambda: intercept_fit(basis, y, part))
    theirs = best(lambda: sm.MixedLM(y, X, groups=g).fit(reml=True), 1)
    mixed = sm.MixedLM(y, X, groups=g).fit(reml=True)
    model = intercept_fit(basis, y, part)[{"group:g"}]
    gap = abs(model.variances["group:g"][0] / mixed.cov_re[0, 0] - 1)
    print(f"intercept REML, 2e4 rows, 1e3 groups        {ours:.4f} s   MixedLM {theirs / ours:.0f} × longer")
    print(f"  relative difference of τ² to MixedLM      {gap:.1e}")


def many_columns() -> None:
    rng, X = rows(1000, 5)
    basis = Basis.of(X)
    tick = np.arange(1000)
    whole = Partition("all rows", np.zeros(1000, np.int32), ("all",))
    one = series_fit(basis, rng.standard_normal(1000), whole, tick)
    Y = one.algebra({"serial"}).draw(np.array([0.5]), 1.0, rng, 1000)
    many = Response.of(one.design, Y)
    took = best(lambda: Fits(many, Run())[{"serial"}])
    print(f"AR(1) REML, 1,000 columns of 1,000 rows     {took:.3f} s   {1000 / took:,.0f} fits per second")
    X, _, g, basis = grouped(778, 30)
    part = Partition.of("g", g)
    f = intercept_fit(basis, rng.standard_normal(778), part)
    Y = f.algebra({"group:g"}).draw(np.array([-1.0]), 1.0, rng, 1000)
    many = Response.of(f.design, Y)
    took = best(lambda: Fits(many, Run())[{"group:g"}])
    print(f"intercept REML, 1,000 columns of 778 rows   {took:.3f} s   {1000 / took:,.0f} fits per second")


def places() -> None:
    for S in (300, 1000, 3000):
        rng, X = rows(S, 5)
        xy = rng.uniform(size=(S, 2))
        D = np.linalg.norm(xy[:, None] - xy, axis=2)
        y = np.linalg.cholesky(0.8 * np.exp(-D / 0.15) + 0.2 * np.eye(S)) @ rng.standard_normal(S)
        sites = Sites(Partition.of("site", np.arange(S)), xy, "planar")
        design = Design(Basis.of(X), tuple("abcde"), (), spatial=sites)
        response = Response.of(design, y)
        took = best(lambda r=response: Fits(r, Run())[{"spatial"}], 1)
        print(f"exponential + nugget REML, {S:,} sites        {took:.2f} s")


if __name__ == "__main__":
    million()
    beside_mixedlm()
    many_columns()
    places()
