"""Places beside spdep, spatialreg, nlme and spreg: python -m tests.benchmarks bench_spatial"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
from scipy import linalg, sparse
from scipy.spatial import cKDTree

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.lagrange import Scores
from clingstone.maths import matern, reml, sar, vecchia
from clingstone.maths.basis import Basis
from clingstone.maths.forms import graph
from clingstone.maths.groups import Load
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.remedies import refit
from clingstone.remedies.gls import Gls
from clingstone.run import Run
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.spatial import Sites
from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way, in_r

NEIGHBOURS_IN_R = "nb <- knn2nb(knearneigh(P, k = {k})); lw <- nb2listw(nb, style = 'W'); "
KINDS = ("lm-error", "lm-lag", "robust-lm-error", "robust-lm-lag")


@cache
def table(n: int, k: int) -> tuple[Any, sparse.csr_array]:
    """Places in a square, and each one's k nearest with equal weights that add to one."""
    P = np.random.default_rng(1).uniform(size=(n, 2))
    near = cKDTree(P).query(P, k + 1)[1][:, 1:]
    return P, sparse.csr_array((np.full(n * k, 1.0 / k), (np.repeat(np.arange(n), k), near.ravel())), (n, n))


def rows(n: int, p: int = 5) -> tuple[Any, Any]:
    rng = np.random.default_rng(2)
    X = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))])
    return X, X @ np.arange(1.0, p + 1) + rng.standard_normal(n)


def one_fit(X: Any, y: Any) -> Way:
    import statsmodels.api as sm

    return Way(ONE_FIT, lambda: sm.OLS(y, X).fit().bse, same=False, floor=True)


def moran_p(W: sparse.csr_array, X: Any, y: Any, depth: str = "exact") -> float:
    """Upper tail of Moran's I from the columns on, nothing kept; "fast" by a saddlepoint of four moments."""
    basis, form = Basis.of(X), graph(W, "moran")
    e = basis.project(y[:, None])[:, 0]
    return float(Law(form, basis).tails(np.array([e @ (W @ e) / (e @ e)]), depth).upper[0])


def moran_exact() -> list[Way]:
    n, k = 2000, 8
    (P, W), (X, y) = table(n, k), rows(n)
    m = "m <- lm(y ~ X - 1)"
    return [
        Way(OURS, lambda: moran_p(W, X, y)),
        *in_r(
            "spdep lm.morantest.exact",
            "lm.morantest.exact(m, lw)$p.value",
            libraries=("spdep",),
            prepare=NEIGHBOURS_IN_R.format(k=k) + m,
            same=False,  # adaptive quadrature of Imhof's integral, good to about five figures
            rounds=1,
            P=P,
            X=X,
            y=y,
        ),
        one_fit(X, y),
    ]


def moran_million() -> list[Way]:
    n, k = 1_000_000, 6
    (_, W), (X, y) = table(n, k), rows(n)
    return [Way(OURS, lambda: moran_p(W, X, y)), one_fit(X, y)]


def design_of(X: Any, P: Any, near: tuple[Neighbours, ...] = (), code: Any = None) -> Design:
    code = np.arange(len(X)) if code is None else code
    names = tuple(f"x{j}" for j in range(X.shape[1]))
    return Design(
        Basis.of(X),
        names,
        (),
        spatial=Sites(Partition.of("site", code), P, "planar"),
        neighbours=near,
    )


def scores() -> list[Way]:
    import spreg
    from libpysal.weights import KNN

    n, k = 5000, 8
    (P, W), (X, y) = table(n, k), rows(n)
    w = KNN.from_array(P, k=k)
    w.transform = "r"

    def ours() -> Any:
        made = design_of(X, P, (Neighbours("knn", "near", W),))
        found = Scores.of(Response.of(made, y), "knn")
        pairs = [found.read(kind) for kind in KINDS]  # type: ignore[arg-type]
        moran_p(W, X, y, "fast")
        return [float(score[0] ** 2 / variance[0]) for score, variance in pairs]

    def theirs() -> Any:
        fit = spreg.OLS(y[:, None], X[:, 1:], w=w, spat_diag=True, moran=True)
        return [fit.lm_error[0], fit.lm_lag[0], fit.rlm_error[0], fit.rlm_lag[0]]

    return [
        Way(OURS, ours),
        Way("spreg OLS(spat_diag=True, moran=True)", theirs, library="spreg"),
        *in_r(
            "spdep lm.LMtests and lm.morantest",
            "{invisible(lm.morantest(m, lw)); sapply(lm.LMtests(m, lw, "
            "test = c('LMerr', 'LMlag', 'RLMerr', 'RLMlag')), function(t) t$statistic)}",
            libraries=("spdep",),
            prepare=NEIGHBOURS_IN_R.format(k=k) + "m <- lm(y ~ X - 1)",
            P=P,
            X=X,
            y=y,
        ),
    ]


def errors_of(n: int) -> tuple[Any, sparse.csr_array, Any, Any]:
    P, W = table(n, 6)
    X, _ = rows(n)
    y = X @ np.arange(1.0, 6.0) + sar.Links.of(W).draw(0.6, np.random.default_rng(3), 1)[:, 0]
    return P, W, X, y


def lam(W: sparse.csr_array, X: Any, y: Any) -> float:
    """λ̂ by maximum likelihood from the graph on, nothing kept."""
    Q = np.linalg.qr(X)[0]
    e = y - Q @ (Q.T @ y)
    return float(sar.Profile.of(sar.Links.of(W), Q, e[:, None]).search(len(y), False)[0][0])


def spatial_error() -> list[Way]:
    import spreg
    from libpysal.weights import KNN

    n = 5000
    P, W, X, y = errors_of(n)
    w = KNN.from_array(P, k=6).symmetrize()
    w.transform = "r"
    return [
        Way(OURS, lambda: lam(W, X, y)),
        Way(
            "spreg ML_Error(method='LU')",
            lambda: float(spreg.ML_Error(y[:, None], X[:, 1:], w=w, method="LU").lam),
            rounds=1,
            library="spreg",
        ),
        *in_r(
            "spatialreg errorsarlm(method = 'Matrix')",
            "errorsarlm(y ~ X - 1, listw = lw, method = 'Matrix', control = list(tol.opt = 1e-12))$lambda",
            libraries=("spdep", "spatialreg"),
            prepare="lw <- nb2listw(make.sym.nb(knn2nb(knearneigh(P, k = 6))), style = 'W')",
            rounds=2,
            P=P,
            X=X,
            y=y,
        ),
    ]


def spatial_error_large() -> list[Way]:
    _, W, X, y = errors_of(100_000)
    return [Way(OURS, lambda: lam(W, X, y), rounds=2), one_fit(X, y)]


def field(P: Any, reach: float = 0.15, seed: int = 4) -> Any:
    apart = np.linalg.norm(P[:, None] - P, axis=2)
    return np.linalg.cholesky(np.exp(-apart / reach) + 1e-10 * np.eye(len(P))) @ np.random.default_rng(
        seed
    ).standard_normal(len(P))


def nugget() -> list[Way]:
    n = 600
    P, _ = table(n, 6)
    X, y = rows(n)
    y = y + 2 * field(P)
    made = design_of(X, P)

    def ours() -> Any:
        return (
            Fits(Response.of(design_of(X, P), y), Run())[{"spatial"}].loglik[0]
            - np.linalg.slogdet(made.basis.R)[1]
        )

    return [
        Way(OURS, ours),
        *in_r(
            "nlme gls(corExp(nugget = TRUE))",
            "as.numeric(logLik(gls(y ~ X - 1, d, correlation = corExp(form = ~u + v, nugget = TRUE))))",
            libraries=("nlme",),
            prepare="d <- data.frame(y = y, u = P[, 1], v = P[, 2]); d$X <- X",
            rounds=1,
            P=P,
            X=X,
            y=y,
        ),
    ]


def repeats() -> list[Way]:
    """300 places × 40 rows, one likelihood: collapsed to places beside V as an n × n array."""
    S, each, thinned = 300, 40, 4
    P, _ = table(S, 6)
    code = np.repeat(np.arange(S), each)
    X, y = rows(S * each)
    y = y + 2 * field(P)[code]

    def design(rows_: Any) -> Design:
        return design_of(X[rows_], P, code=code[rows_])

    def fresh() -> Fits:
        return Fits(Response.of(design(slice(None)), y), Run())

    theta = np.array([np.log(0.15), np.log(4.0)])

    def ours(fits: Fits) -> Any:
        return float(reml.criterion(fits.algebra({"spatial"}).gram(theta, fits.response), fits.design.m)[0])

    few = slice(None, None, thinned)

    def dense() -> Any:
        apart = np.linalg.norm(P[:, None] - P, axis=2)
        V = 4 * np.exp(-apart / 0.15)[np.ix_(code[few], code[few])]
        V[np.diag_indices_from(V)] += 1.0
        white = linalg.solve_triangular(np.linalg.cholesky(V), np.column_stack([X[few], y[few]]), lower=True)
        return white.T @ white

    return [
        Way(OURS, ours, fresh=fresh),
        Way("numpy, V dense, on a quarter of the rows", dense, same=False),
    ]


def vecchia_large() -> list[Way]:
    n, m = 100_000, 20
    P, _ = table(n, 6)
    X, y = rows(n)
    Q = np.linalg.qr(X)[0]
    e = y - Q @ (Q.T @ y)
    load, base = Load(np.ones(n), Q, e[:, None]), reml.independent(5, np.array([e @ e]))
    order = vecchia.Order.of(P, m, np.random.default_rng(0))

    def ours() -> Any:
        return vecchia.top(base, load, order, lambda d: matern.kernel(d, 0.05), 4.0).logdet

    return [Way(OURS, ours), one_fit(X, y)]


def vecchia_refit() -> list[Way]:
    n = 20_000
    P, _ = table(n, 6)
    X, y = rows(n)
    rng = np.random.default_rng(5)
    order = vecchia.Order.of(P, 20, rng)
    weights, _ = order.rows(lambda d: matern.kernel(d, 0.05), 1.0, np.full(n, 1e-6))
    y = y + 2 * order.draw(weights, rng.standard_normal((n, 1)))[:, 0]

    def ours() -> Any:
        found = refit(Gls("spatial-gls"), "", Fits(Response.of(design_of(X, P), y), Run()))
        return [row.se for row in found.intervals]

    return [Way(OURS, ours, rounds=1), one_fit(X, y)]


ROWS = (
    Row("moran-exact", "Moran, exact p", "2,000 places, 8 neighbours, p = 5", moran_exact),
    Row("moran-million", "Moran, moments and p", "1,000,000 places, 6 neighbours, p = 5", moran_million),
    Row("scores-places", "Score tests and Moran", "5,000 places, 8 neighbours, p = 5", scores),
    Row("spatial-error", "Autoregressive errors, ML", "5,000 places, 6 neighbours, p = 5", spatial_error),
    Row(
        "spatial-error-large",
        "Autoregressive errors, ML",
        "100,000 places, 6 neighbours, p = 5",
        spatial_error_large,
    ),
    Row("nugget", "Exponential and nugget, REML", "600 places, p = 5", nugget),
    Row("repeats", "Places with repeats, one likelihood", "300 places of 40 rows, p = 5", repeats),
    Row("vecchia", "Nearest-neighbour likelihood, once", "100,000 places, 20 neighbours", vecchia_large),
    Row("vecchia-refit", "Nearest-neighbour refit with df", "20,000 places, 20 neighbours", vecchia_refit),
)
