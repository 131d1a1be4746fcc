"""Exact tails against the obvious way, one after the other on one BLAS thread: ratios to trust to a factor 2.

Run: OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_ratio.py
"""

from __future__ import annotations

from collections.abc import Callable
from time import perf_counter
from typing import Any

import numpy as np
from scipy import sparse
from scipy.spatial import cKDTree

from clingstone.maths import forms
from clingstone.maths.basis import Basis
from clingstone.maths.ratio import Law, eigen_tails


def timed(work: Callable[[], Any], repeats: int) -> tuple[float, Any]:
    """Best of some runs, and what the last one gave."""
    best, value = np.inf, None
    for _ in range(repeats):
        start = perf_counter()
        value = work()
        best = min(best, perf_counter() - start)
    return best, value


def columns(n: int, p: int = 5) -> Any:
    rng = np.random.default_rng(0)
    return np.column_stack([np.ones(n), np.arange(n) / n, rng.standard_normal((n, p - 2))])


def path(n: int, Q: Any) -> tuple[forms.Form, Basis]:
    """A fresh form and basis, so that nothing is kept from an earlier run."""
    return forms.differences(np.arange(n - 1), np.arange(1, n), n, "path"), Basis(Q, np.eye(Q.shape[1]))


def dense_tail(form: forms.Form, Q: Any, t: float) -> Any:
    """Eigenvalues of the dense projected form, then the tail."""
    S = form.S.toarray()
    SQ = S @ Q
    A = S - Q @ SQ.T - SQ @ Q.T + Q @ (Q.T @ SQ) @ Q.T
    value = np.linalg.eigvalsh(A + 1e2 * (Q @ Q.T))[: len(S) - Q.shape[1]]
    return eigen_tails(value, t).log_lower[0]


def show(what: str, ours: float, other: float, against: str, difference: float | None = None) -> None:
    agreement = "" if difference is None else f"; difference in ln p {difference:.1e}"
    times = f"{ours * 1e3:9.1f} ms   {against} {other * 1e3:9.1f} ms"
    print(f"{what:40s} {times}   ratio {ours / other:7.4f}{agreement}")


def durbin_watson_thousand() -> None:
    Q = Basis.of(columns(1000)).Q
    ours, tail = timed(lambda: Law(*path(1000, Q)).tails(1.8).log_lower[0], 5)
    form = path(1000, Q)[0]
    other, twin = timed(lambda: dense_tail(form, Q, 1.8), 2)
    show("Durbin-Watson, exact, n = 1000", ours, other, "dense eigenvalues", abs(tail - twin))


def durbin_watson_million() -> None:
    import statsmodels.api as sm

    n = 1_000_000
    X = columns(n)
    y = np.random.default_rng(1).standard_normal(n)
    Q = Basis.of(X).Q
    ours, _ = timed(lambda: Law(*path(n, Q)).tails(1.999), 3)
    other, _ = timed(lambda: sm.OLS(y, X).fit().params, 3)
    show("Durbin-Watson, exact, n = 1 000 000", ours, other, "one statsmodels OLS")


def moran_two_thousand() -> None:
    n = 2000
    sites = np.random.default_rng(2).uniform(size=(n, 2))
    near = cKDTree(sites).query(sites, 7)[1][:, 1:]
    W = sparse.csr_array((np.full(6 * n, 1 / 6), (np.repeat(np.arange(n), 6), near.ravel())), shape=(n, n))
    Q = Basis.of(np.column_stack([np.ones(n), sites])).Q

    def fresh() -> Any:
        return Law(forms.graph(W, "graph"), Basis(Q, np.eye(3))).tails(-0.03).log_lower[0]

    ours, tail = timed(fresh, 3)
    other, twin = timed(lambda: dense_tail(forms.graph(W, "graph"), Q, -0.03), 1)
    show("Moran, exact, n = 2000, 6 neighbours", ours, other, "dense eigenvalues", abs(tail - twin))


def many_values() -> None:
    basis, form = Basis.of(columns(500)), forms.differences(np.arange(499), np.arange(1, 500), 500, "path")
    t = 2 + 0.09 * np.random.default_rng(3).standard_normal(1000)

    def fresh(depth: str) -> Any:
        return Law(form, Basis(basis.Q, basis.R)).tails(t, depth).log_lower

    ours, fast = timed(lambda: fresh("fast"), 2)
    other, exact = timed(lambda: fresh("exact"), 1)
    show("1000 Durbin-Watson values, n = 500", ours, other, "one by one", np.abs(fast - exact).max())


if __name__ == "__main__":
    durbin_watson_thousand()
    durbin_watson_million()
    moran_two_thousand()
    many_values()
