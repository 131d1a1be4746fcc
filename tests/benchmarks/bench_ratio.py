"""Exact tails of ratios of quadratic forms: python -m tests.benchmarks bench_ratio"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy import sparse
from scipy.spatial import cKDTree

from clingstone.maths import forms
from clingstone.maths.basis import Basis
from clingstone.maths.ratio import Law, eigen_tails
from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way, in_r

DENSE = "numpy: dense eigenvalues, then the tail"


def columns(n: int, p: int = 5) -> Any:
    rng = np.random.default_rng(0)
    return np.column_stack([np.ones(n), np.arange(n) / n, rng.standard_normal((n, p - 2))])


def path(n: int, Q: Any) -> tuple[forms.Form, Basis]:
    """A fresh form and basis, so that nothing is kept from an earlier run."""
    return forms.differences(np.arange(n - 1), np.arange(1, n), n, "path"), Basis(Q, np.eye(Q.shape[1]))


def dense_tail(form: forms.Form, Q: Any, t: float) -> Any:
    """ln p from the eigenvalues of the dense projected form."""
    S = form.S.toarray()
    SQ = S @ Q
    A = S - Q @ SQ.T - SQ @ Q.T + Q @ (Q.T @ SQ) @ Q.T
    value = np.linalg.eigvalsh(A + 1e2 * (Q @ Q.T))[: len(S) - Q.shape[1]]
    return eigen_tails(value, t).log_lower[0]


def log_tail(made: tuple[forms.Form, Basis], t: Any, depth: str = "exact") -> Any:
    return Law(*made).tails(t, depth).log_lower


def durbin_watson_thousand() -> list[Way]:
    n, t = 1000, 1.8
    X = columns(n)
    Q = Basis.of(X).Q
    return [
        Way(OURS, lambda made: log_tail(made, t)[0], fresh=lambda: path(n, Q)),
        Way(DENSE, lambda made: dense_tail(made[0], Q, t), fresh=lambda: path(n, Q)),
    ]


def durbin_watson_r() -> list[Way]:
    """p of the statistic of one y, as lmtest finds it."""
    n = 1000
    X = columns(n)
    y = np.random.default_rng(1).standard_normal(n)
    Q = Basis.of(X).Q
    e = y - Q @ (Q.T @ y)
    d = float(np.sum(np.diff(e) ** 2) / (e @ e))
    return [
        Way(OURS, lambda made: np.exp(log_tail(made, d)[0]), fresh=lambda: path(n, Q)),
        *in_r(
            "lmtest dwtest(exact = TRUE)",
            "dwtest(m, exact = TRUE)$p.value",
            libraries=("lmtest",),
            prepare="m <- lm(y ~ X - 1)",
            X=X,
            y=y,
        ),
    ]


def durbin_watson_million() -> list[Way]:
    import statsmodels.api as sm

    n = 1_000_000
    X = columns(n)
    y = np.random.default_rng(1).standard_normal(n)
    Q = Basis.of(X).Q
    return [
        Way(OURS, lambda made: log_tail(made, 1.999), fresh=lambda: path(n, Q)),
        Way(ONE_FIT, lambda: sm.OLS(y, X).fit().params, same=False, floor=True),
    ]


def moran_two_thousand() -> list[Way]:
    n, t = 2000, -0.03
    sites = np.random.default_rng(2).uniform(size=(n, 2))
    near = cKDTree(sites).query(sites, 7)[1][:, 1:]
    W = sparse.csr_array((np.full(6 * n, 1 / 6), (np.repeat(np.arange(n), 6), near.ravel())), shape=(n, n))
    Q = Basis.of(np.column_stack([np.ones(n), sites])).Q

    def fresh() -> tuple[forms.Form, Basis]:
        return forms.graph(W, "graph"), Basis(Q, np.eye(3))

    return [
        Way(OURS, lambda made: log_tail(made, t)[0], fresh=fresh),
        Way(DENSE, lambda made: dense_tail(made[0], Q, t), fresh=fresh, rounds=3),
    ]


def many_values() -> list[Way]:
    basis, form = Basis.of(columns(500)), forms.differences(np.arange(499), np.arange(1, 500), 500, "path")
    t = 2 + 0.09 * np.random.default_rng(3).standard_normal(1000)

    def fresh() -> tuple[forms.Form, Basis]:
        return form, Basis(basis.Q, basis.R)

    return [
        Way(OURS, lambda made: log_tail(made, t, "fast"), fresh=fresh),
        Way("clingstone, one value at a time, exact", lambda made: log_tail(made, t), fresh=fresh, rounds=2),
    ]


ROWS = (
    Row("dw-thousand", "Durbin–Watson, exact p", "n = 1,000, p = 5", durbin_watson_thousand),
    Row(
        "dw-r",
        "Durbin–Watson, exact p",
        "n = 1,000, p = 5",
        durbin_watson_r,
        note="dwtest sums Pan's series with 15 terms unless told otherwise, which is off by 2e-4 here: with "
        "iterations = 30 it agrees with ours, and ours with all eigenvalues to 3e-15.",
    ),
    Row("dw-million", "Durbin–Watson, exact p", "n = 1,000,000, p = 5", durbin_watson_million),
    Row("moran-two-thousand", "Moran, exact p", "n = 2,000, 6 neighbours", moran_two_thousand),
    Row("dw-many", "1,000 Durbin–Watson values", "n = 500", many_values),
)
