"""Refits and tests for groups beside general-purpose fits of the same rows.

A refit is counted whole: group sums, search, covariance, degrees of freedom, intervals. The basis (QR)
and the groups are made before.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Assignment, Design, Term
from clingstone.design.response import Response
from clingstone.evidence.restricted import null_draws
from clingstone.maths.basis import Basis
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.remedies import remedy
from clingstone.remedies.refit import refit
from clingstone.run import Run
from clingstone.structure.group import Groups
from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way

P = 5


class Table:
    """Constant, three columns of rows, an arm of whole groups; an intercept and a slope of each group."""

    def __init__(self, n: int, *counts: int, slope: float = 0.0) -> None:
        rng = np.random.default_rng(0)
        self.groups = [rng.integers(0, G, n) for G in counts]
        first = self.groups[0]
        rows = rng.standard_normal((n, P - 2)) + 0.3 * rng.standard_normal((counts[0], P - 2))[first]
        self.X = np.column_stack([np.ones(n), rows, first % 2])
        self.y = self.X[:, 1] + rng.standard_normal(n)
        for codes, G in zip(self.groups, counts, strict=True):
            self.y += 0.6 * rng.standard_normal(G)[codes]
        self.y += slope * rng.standard_normal(counts[0])[first] * self.X[:, 1]
        self.basis = Basis.of(self.X)
        self.parts = tuple(Partition.of(k, c) for k, c in zip("gh", self.groups, strict=False))

    def fits(self) -> Fits:
        """Nothing is kept from one run to the next."""
        names = ("constant", *(f"x{j}" for j in range(1, P)))
        terms = tuple(
            Term(name, (j,), "numeric" if j else "constant", (name,) if j else (), j == 1)
            for j, name in enumerate(names)
        )
        design = Design(
            self.basis,
            names,
            terms,
            group=Groups(self.parts, "one level" if len(self.parts) == 1 else "crossed"),
            assignment=Assignment({names[-1]: "g"}),
            covariates={f"x{j}": self.X[:, j] for j in range(1, P)},
        )
        return Fits(Response.of(design, self.y), Run())

    def one_fit(self) -> Way:
        import statsmodels.api as sm

        return Way(ONE_FIT, lambda: sm.OLS(self.y, self.X).fit().bse, same=False, floor=True)


def whole(id: str, at: str, found: Fits) -> Array:
    """The estimates of a refit, its intervals made."""
    return np.array([row.estimate for row in refit(remedy(id), at, found).intervals])


def million(id: str, at: str = "g") -> list[Way]:
    table = Table(1_000_000, 50_000, slope=0.5 if id == "mixed-slope" else 0.0)
    return [Way(OURS, partial(whole, id, at), fresh=table.fits, rounds=3), table.one_fit()]


def crossed() -> list[Way]:
    table = Table(100_000, 2_000, 500)
    ours = Way(OURS, lambda f: f[{"group:g", "group:h"}].theta[:, 0], fresh=table.fits)
    return [ours, table.one_fit()]


def beside_mixedlm(slope: bool) -> list[Way]:
    import statsmodels.api as sm

    table = Table(20_000, 1_000, slope=0.5) if slope else Table(100_000, 5_000)
    id, at = ("mixed-slope", "x1 by g") if slope else ("mixed-intercept", "g")
    random = table.X[:, :2] if slope else None

    def library() -> Array:
        model = sm.MixedLM(table.y, table.X, groups=table.groups[0], exog_re=random)
        return np.asarray(model.fit(reml=True).fe_params)

    return [
        Way(f"{OURS}, with Kenward–Roger intervals", partial(whole, id, at), fresh=table.fits),
        Way("statsmodels MixedLM(…).fit(reml=True)", library, rounds=1, library="statsmodels"),
    ]


def wild() -> list[Way]:
    import statsmodels.api as sm
    from wildboottest.wildboottest import wildboottest

    table = Table(100_000, 500)
    model, group = sm.OLS(table.y, table.X), table.groups[0]

    def library(draws: int = 9_999) -> None:
        wildboottest(model, B=draws, cluster=group, param="x1", weights_type="rademacher", seed=1)

    library(99)  # compiles
    return [
        Way(
            f"{OURS}, five coefficients with intervals",
            partial(whole, "wild-cluster-bootstrap", "g"),
            table.fits,
        ),
        Way("wildboottest, one p", library, same=False, rounds=3, library="wildboottest"),
    ]


def two_ways() -> list[Way]:
    import statsmodels.api as sm

    table = Table(100_000, 2_000, 100)
    labels = np.column_stack(table.groups)

    def library() -> Array:
        fit = sm.OLS(table.y, table.X).fit(cov_type="cluster", cov_kwds={"groups": labels})
        return np.asarray(fit.params)

    return [
        Way(OURS, partial(whole, "multiway-cluster", "g + h"), fresh=table.fits),
        Way("statsmodels OLS(…).fit(cov_type='cluster'), two ways", library),
        table.one_fit(),
    ]


def null_law() -> list[Way]:
    table = Table(100_000, 5_000)

    def ours(f: Fits) -> None:
        null_draws(f.design, table.parts[0], 4_999, f.run, 100_000)

    return [Way(OURS, ours, fresh=table.fits), table.one_fit()]


MILLION = "1e6 rows, 50,000 groups, p = 5"
LARGE: dict[str, tuple[str, str, str]] = {  # id → remedy, where, in words
    "intercept-million": ("mixed-intercept", "g", "Random intercept by REML with df"),
    "slope-million": ("mixed-slope", "x1 by g", "Random intercept and slope by REML with df"),
    "mixed-robust-million": ("mixed-robust", "g", "Random intercept, CR2 on top, with df"),
    "cr2-million": ("cluster-robust", "g", "Cluster-robust, CR2 with df"),
    "jackknife-million": ("cluster-jackknife", "g", "Cluster jackknife with df"),
    "wild-million": ("wild-cluster-bootstrap", "g", "Wild cluster bootstrap"),
    "group-means-million": ("group-means", "g", "Regression of group means"),
    "fixed-million": ("fixed-effects", "g", "Groups absorbed"),
    "within-between-million": ("within-between", "g", "Within and between groups"),
}


def _large(id: str) -> Callable[[], list[Way]]:
    name, at, _ = LARGE[id]
    return lambda: million(name, at)


ROWS = (
    *(Row(id, words, MILLION, _large(id)) for id, (_, _, words) in LARGE.items()),
    Row("crossed", "Crossed intercepts, REML alone", "1e5 rows, 2,000 × 500 groups, p = 5", crossed),
    Row(
        "intercept-mixedlm",
        "Random intercept, REML",
        "1e5 rows, 5,000 groups, p = 5",
        lambda: beside_mixedlm(False),
    ),
    Row(
        "slope-mixedlm",
        "Random intercept and slope, REML",
        "2e4 rows, 1,000 groups, p = 5",
        lambda: beside_mixedlm(True),
    ),
    Row("wild", "Wild cluster bootstrap, 9,999 draws", "1e5 rows, 500 clusters, p = 5", wild),
    Row("two-ways", "Clusters of two ways", "1e5 rows, 2,000 × 100 clusters, p = 5", two_ways),
    Row("restricted-null", "Null law of the exact restricted ratio, 1e5 draws", "5,000 groups", null_law),
)
