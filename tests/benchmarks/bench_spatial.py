"""Places: ratios to general-purpose libraries in one run, one BLAS thread, best of three.

    OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_spatial.py

Each line: what, seconds, seconds of what stands beside it, and their ratio.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import time
import warnings
from collections.abc import Callable

import numpy as np
from scipy import sparse
from scipy.spatial import cKDTree

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.lagrange import Scores
from clingstone.maths import matern, reml, sar, vecchia
from clingstone.maths.basis import Basis
from clingstone.maths.forms import graph
from clingstone.maths.groups import Load
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.spatial import Sites


def best(work: Callable[[], object], times: int = 3) -> float:
    took = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        took.append(time.perf_counter() - start)
    return min(took)


def line(what: str, ours: float, beside: str = "", theirs: float = float("nan")) -> None:
    ratio = f"{theirs / ours:8.1f} times faster" if theirs == theirs else ""
    print(f"{what:58s} {ours:9.4f} s   {beside:30s} {theirs:9.3f} s {ratio}")


def table(n: int, k: int, seed: int = 1) -> tuple[np.ndarray, sparse.csr_array]:
    P = np.random.default_rng(seed).uniform(size=(n, 2))
    near = cKDTree(P).query(P, k + 1)[1][:, 1:]
    return P, sparse.csr_array((np.full(n * k, 1.0 / k), (np.repeat(np.arange(n), k), near.ravel())), (n, n))


def rows(n: int, p: int = 5, seed: int = 2) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))])
    return X, X @ np.arange(1.0, p + 1) + rng.standard_normal(n)


def moran(n: int, k: int) -> float:
    """Exact moments and tail of Moran's I, everything made anew."""
    _, W = table(n, k)
    X, y = rows(n)

    def work() -> object:
        basis = Basis.of(X)
        form = graph(W, "moran")
        e = basis.project(y[:, None])
        return Law(form, basis).tails(np.array([float(e[:, 0] @ (W @ e[:, 0]) / (e[:, 0] @ e[:, 0]))]))

    return best(work)


def dense_moran(n: int, k: int) -> float:
    _, W = table(n, k)
    X, _ = rows(n)
    S = 0.5 * (W + W.T).toarray()

    def work() -> object:
        Q = np.linalg.qr(X)[0]
        M = np.eye(n) - Q @ Q.T
        return np.linalg.eigvalsh(M @ S @ M)

    return best(work, 1)


def scores(n: int, k: int) -> tuple[float, float]:
    """The four score statistics and Moran's moments, beside spreg's diagnostics of the same."""
    import spreg
    from libpysal.weights import KNN

    P, W = table(n, k)
    X, y = rows(n)
    w = KNN.from_array(P, k=k)
    w.transform = "r"
    part = Partition.of("site", np.arange(n))
    near = (Neighbours("knn", "near", W),)

    def ours() -> object:
        basis = Basis.of(X)
        made = Design(basis, tuple("abcde"), (), spatial=Sites(part, P, "planar"), neighbours=near)
        law = Law(graph(W, "moran"), basis)
        return Scores.of(Response.of(made, y), "knn").read("robust-lm-error"), law.mean, law.variance

    def theirs() -> object:
        return spreg.OLS(y[:, None], X[:, 1:], w=w, spat_diag=True, moran=True)

    return best(ours), best(theirs, 1)


def spatial_error(n: int) -> None:
    import spreg
    from libpysal.weights import KNN

    P, W = table(n, 6)
    links = sar.Links.of(W)
    X, _ = rows(n)
    y = X @ np.arange(1.0, 6.0) + links.draw(0.6, np.random.default_rng(3), 1)[:, 0]
    w = KNN.from_array(P, k=6).symmetrize()
    w.transform = "r"

    def ours() -> float:
        Q = np.linalg.qr(X)[0]
        e = y - Q @ (Q.T @ y)
        return float(sar.Profile.of(sar.Links.of(W), Q, e[:, None]).search(n, False)[0][0])

    found: list[float] = []

    def theirs() -> None:
        found.append(float(spreg.ML_Error(y[:, None], X[:, 1:], w=w, method="LU").lam))

    line(f"spatial-error by ML, {n:,} places", best(ours), "spreg ML_Error(method='LU')", best(theirs, 1))
    print(f"    λ {ours():.7f} and {found[0]:.7f}")


def nearest(n: int) -> None:
    P, _ = table(n, 6)
    X, y = rows(n)
    Q = np.linalg.qr(X)[0]
    e = y - Q @ (Q.T @ y)
    load, base = Load(np.ones(n), Q, e[:, None]), reml.independent(5, np.array([e @ e]))
    for m in (10, 20, 30):
        start = time.perf_counter()
        order = vecchia.Order.of(P, m, np.random.default_rng(0))
        setup = time.perf_counter() - start

        def work(order: vecchia.Order = order) -> object:
            return vecchia.top(base, load, order, lambda d: matern.kernel(d, 0.05), 4.0)

        line(f"nearest neighbours, {n:,} places, m = {m} (order {setup:.2f} s)", best(work))


def main() -> None:
    warnings.simplefilter("ignore")
    line("Moran exact, 2,000 places", moran(2000, 8), "dense eigenvalues", dense_moran(2000, 8))
    ours, theirs = scores(5000, 8)
    line("scores and Moran's moments, 5,000 places", ours, "spreg OLS(spat_diag, moran)", theirs)
    spatial_error(5000)
    start = time.perf_counter()
    _, W = table(100_000, 6)
    X, _ = rows(100_000)
    links = sar.Links.of(W)
    y = links.draw(0.6, np.random.default_rng(3), 1)
    begin = time.perf_counter()
    Q = np.linalg.qr(X)[0]
    sar.Profile.of(sar.Links.of(W), Q, y - Q @ (Q.T @ y)).search(100_000, False)
    line("spatial-error by ML, 100,000 places", time.perf_counter() - begin)
    print(f"    with its table and its data {time.perf_counter() - start:.1f} s")
    nearest(100_000)


if __name__ == "__main__":
    main()
