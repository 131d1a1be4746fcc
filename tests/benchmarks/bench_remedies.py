"""Cost of refits beside general-purpose fits of the same rows: python -m tests.benchmarks bench_remedies

The decomposition of X is counted on both sides.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies import refit, remedy
from clingstone.remedies.sandwich import ClusterRobust
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way, in_r


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


def errors(found: object) -> np.ndarray:
    return np.array([row.se for row in found.intervals])  # type: ignore[attr-defined]


def clusters(n: int, G: int, p: int) -> list[Way]:
    import pandas as pd
    import pyfixest
    import statsmodels.api as sm
    from linearmodels.iv import IV2SLS

    X, group, y = data(n, G, p)
    part = Partition.of("g", group)
    count, table = part.count, pd.DataFrame(X[:, 1:], columns=[f"x{j}" for j in range(1, p)])
    table["y"], table["g"] = y, group
    formula = "y ~ " + " + ".join(f"x{j}" for j in range(1, p))

    def cr1() -> np.ndarray:
        return errors(refit(ClusterRobust(kind="CR1S", df="clusters"), "g", fits(X, y, part)))

    def by_linearmodels() -> np.ndarray:
        found = IV2SLS(y, X, None, None).fit(cov_type="clustered", clusters=group, debiased=True)
        return np.asarray(found.std_errors) * np.sqrt(count / (count - 1) * (n - 1) / n)

    def by_pyfixest() -> np.ndarray:
        return np.asarray(pyfixest.feols(formula, table, vcov={"CRV1": "g"}).se())

    def by_statsmodels() -> np.ndarray:
        return np.asarray(sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": group}).bse)

    return [
        Way(OURS + ", CR1 with both factors", cr1),
        Way("statsmodels OLS(…).fit(cov_type='cluster')", by_statsmodels),
        Way("linearmodels IV2SLS(…, cov_type='clustered'), scaled", by_linearmodels, same=False),
        Way("pyfixest feols(…, vcov={'CRV1': …})", by_pyfixest),
        Way(ONE_FIT, lambda: sm.OLS(y, X).fit().bse, same=False, floor=True),
    ]


def bias_reduced(n: int, G: int, p: int) -> list[Way]:
    import statsmodels.api as sm

    X, group, y = data(n, G, p)
    part = Partition.of("g", group)
    return [
        Way(OURS + ", CR2 with df", lambda: errors(refit(remedy("cluster-robust"), "g", fits(X, y, part)))),
        Way(ONE_FIT, lambda: sm.OLS(y, X).fit().bse, same=False, floor=True),
        *in_r(
            "clubSandwich vcovCR(type = 'CR2'), without df",
            "sqrt(diag(as.matrix(vcovCR(lm(y ~ X - 1), g, 'CR2'))))",
            libraries=("clubSandwich",),
            rounds=2,
            X=X,
            y=y,
            g=part.codes,
        ),
    ]


def intercept(n: int, G: int, p: int) -> list[Way]:
    import statsmodels.api as sm

    X, group, y = data(n, G, p)
    part = Partition.of("g", group)

    def variances() -> np.ndarray:
        held = fits(X, y, part)[{"group:g"}]
        return np.array([held.variances["group:g"][0], held.variances["row"][0]])

    def by_statsmodels() -> np.ndarray:
        found = sm.MixedLM(y, X, groups=group).fit(reml=True)
        return np.array([float(np.ravel(found.cov_re)[0]), float(found.scale)])

    return [
        Way(OURS + ", random intercept by REML", variances),
        Way("statsmodels MixedLM(…).fit(reml=True)", by_statsmodels, rounds=2),
        *in_r(
            "lme4 lmer",
            "v <- as.data.frame(VarCorr(lmer(y ~ X - 1 + (1 | g))))$vcov",
            libraries=("lme4",),
            X=X,
            y=y,
            g=part.codes,
        ),
    ]


def long_run(n: int, p: int) -> list[Way]:
    import statsmodels.api as sm

    X, _, y = data(n, 10, p)
    tick = np.arange(n)
    series = Partition.of("series", np.zeros(n, int))
    serial = Series("day", series, tick.astype(float), "day", 1.0, tick, "regular")
    part, lags = Partition.of("g", tick // 20), int(4 * (n / 100) ** (2 / 9))

    def ours() -> np.ndarray:
        return errors(refit(remedy("hac"), "", fits(X, y, part, serial)))

    def library() -> np.ndarray:
        return np.asarray(sm.OLS(y, X).fit(cov_type="HAC", cov_kwds={"maxlags": lags}).bse)

    return [
        Way(OURS + ", equal-weighted cosines with exact p", ours, rounds=3),
        Way(f"statsmodels OLS(…).fit(cov_type='HAC'), {lags} lags", library, same=False),
    ]


def row(id: str, piece: str, size: str, make: Callable[..., list[Way]], *at: int) -> Row:
    return Row(id, piece, size, partial(make, *at))


SMALL, LARGE = "2e4 rows, 1,000 groups, p = 8", "1e6 rows, 50,000 groups, p = 5"
ROWS = (
    row("cr1-small", "Cluster-robust, CR1", SMALL, clusters, 20_000, 1000, 8),
    row("cr1-large", "Cluster-robust, CR1", LARGE, clusters, 1_000_000, 50_000, 5),
    row("cr2-small", "Cluster-robust, CR2", SMALL, bias_reduced, 20_000, 1000, 8),
    row("intercept-small", "Random intercept, REML", SMALL, intercept, 20_000, 1000, 8),
    row("hac-1e3", "Long-run variance", "one series of 1,000, p = 5", long_run, 1000, 5),
    row("hac-1e5", "Long-run variance", "one series of 1e5, p = 5", long_run, 100_000, 5),
)
