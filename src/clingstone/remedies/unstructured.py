"""Few fixed visits per subject: a variance of its own for every visit, a covariance for every pair."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import MINUS
from clingstone.maths import visits
from clingstone.maths.kenward import Kenward
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.columns import FLAT, RULES, Column, FittedReady, Rule, apart, plain_df
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import Account, Estimand, Estimates, Plain

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

MOST_VISITS = 10  # 55 variances and covariances
PAIRS = 3  # subjects beyond the number of visits that must be seen at each pair of them


@dataclass(frozen=True, eq=False, kw_only=True)
class VisitsReady(FittedReady):
    """Subjects and visits of one design; Σ is fitted to every column of y."""

    remedy: Unstructured
    part: Partition
    visit: npt.NDArray[np.int64]
    labels: tuple[str, ...]

    def fit(self, fits: Fits) -> Estimates:
        response = fits.response
        columns, settled, start = [], [], None
        for one in apart(response):
            table, found = self._fitted(one, start)
            columns.append(self._column(table, found, one))
            settled.append(found.converged)
            start = found.sigma if start is None else start
        confidence = fits.run.settings.confidence
        none = np.zeros(response.B, dtype=bool)
        return self.estimates(columns, confidence, none, np.array(settled))

    def _fitted(self, response: Response, start: Array | None) -> tuple[visits.Visits, visits.Found]:
        restricted = self.remedy.estimation == "REML"

        def make() -> tuple[visits.Visits, visits.Found]:
            T, e = len(self.labels), response.residual[:, 0]
            parts = visits.patterns(self.part.codes, self.visit, T, self.design.Q, e)
            table = visits.Visits(parts, T, self.design.p, self.design.m)
            first = _start(parts, T) if start is None else start
            try:
                return table, visits.fit(table, first, restricted)
            except np.linalg.LinAlgError:
                raise NotSupported(
                    "the covariance between visits could not be told from a singular one",
                    "Use a random intercept, or fewer visits.",
                ) from None

        return kept(response, ("visits", self.part.key, restricted), make)

    def _column(self, table: visits.Visits, found: visits.Found, y: Response) -> Column:
        A, _ = table.sums(found.sigma)
        p, m = self.design.p, self.design.m
        coef = y.coef[:, 0] + np.linalg.solve(A[:p, :p], A[:p, p])
        *_, seen = table.scores(found.sigma, self.remedy.estimation == "REML")
        if (df := plain_df(self.remedy.df, m)) is not None:
            return Column.even(coef, seen.Phi, df)
        try:
            kr = Kenward.of(seen.Phi, seen.P, seen.Q, seen.information)
        except np.linalg.LinAlgError:
            return Column.even(coef, seen.Phi, 1.0, (FLAT,))
        phi = kr.adjusted if self.remedy.df == "kenward-roger" else kr.phi
        return Column.kenward(coef, phi, kr, m)

    def account(self, fits: Fits) -> Account:
        table, found = self._fitted(apart(fits.response)[0], None)
        sd = np.sqrt(np.diag(found.sigma))
        items = [
            (f"standard deviation at {label}", f"{value:.6g}")
            for label, value in zip(self.labels, sd, strict=True)
        ]
        R = found.sigma / np.outer(sd, sd)
        for i in range(len(sd)):
            for j in range(i):
                rho = f"{R[i, j]:.3f}".replace("-", MINUS)
                items.append((f"correlation of {self.labels[j]} and {self.labels[i]}", rho))
        items += [("subjects", f"{self.part.count}"), ("patterns of visits", f"{len(table.patterns)}")]
        how = "restricted maximum likelihood" if self.remedy.estimation == "REML" else "maximum likelihood"
        adjusted = ", adjusted for the estimation of Σ" if self.remedy.df == "kenward-roger" else ""
        return Account(
            estimator=f"generalised least squares, a free covariance Σ between {len(sd)} visits by {how}",
            covariance=f"(X′V⁻¹X)⁻¹{adjusted}",
            factor="none: every variance is estimated",
            df_rule=self.rule,
            reference="normal" if self.remedy.df == "normal" else "t",
            items=tuple(items),
            source="jennrich-schluchter-1986, kenward-roger-1997",
        )


@dataclass(frozen=True)
class Unstructured(Plain):
    """A free covariance between the visits of a subject (Jennrich & Schluchter 1986), REML.

    No shape is imposed on how alike two visits are. Kenward & Roger (1997) covariance and df with the
    expected information. at : the group level that holds the subjects; visits are the times of the rows.
    """

    df: Rule = "kenward-roger"
    estimation: Literal["REML", "ML"] = "REML"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "unstructured"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"group", "serial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "jennrich-schluchter-1986"

    @property
    def name(self) -> str:
        return f"free covariance between the visits of each {self.at}" if self.at else "free covariance"

    def abouts(self, design: Design) -> tuple[str, ...]:
        """The finest level in which no time recurs; the finest of all where there is none."""
        if design.group is None or design.serial is None:
            return ()
        for level in reversed(design.group.levels):
            if not _recurs(level, _visits(design)[0]):
                return (level.key,)
        return (design.group.finest.key,)

    def covering(self, fits: Fits) -> frozenset[Family]:
        design = fits.design
        assert design.serial is not None
        inside = design.partitions[self.at].relation(design.serial.part) in ("same", "nests")
        return self.covers if inside else frozenset({"group"})

    def prepare(self, design: Design, working: ErrorModel | None = None) -> VisitsReady:
        positive_m(design)
        part = None if design.group is None else design.group.named(self.at)
        if part is None or design.serial is None:
            raise NotSupported(f"these data have no group level named {self.at}", "Name it with group=.")
        visit, labels = _visits(design)
        _enough(part, visit, labels, design)
        names, W = reported(design)
        return VisitsReady(
            design, names, W, RULES[self.df], remedy=self, part=part, visit=visit, labels=labels
        )

    def conventions(self) -> tuple[tuple[str, Unstructured], ...]:
        return (
            ("the same df, covariance as it is", replace(self, df="satterthwaite")),
            ("the same fit, n − p df", replace(self, df="residual")),
            ("the same fit, normal quantile", replace(self, df="normal")),
            (
                "maximum likelihood in place of REML, normal quantile",
                replace(self, df="normal", estimation="ML"),
            ),
        )


def _visits(design: Design) -> tuple[npt.NDArray[np.int64], tuple[str, ...]]:
    """(n,) visit of each row, 0 …, in order of time, and a name for each visit."""
    assert design.serial is not None
    series = design.serial
    times = series.elapsed if series.tick is None else series.tick.astype(float)
    distinct, visit = np.unique(np.round(times, 9), return_inverse=True)
    labels = tuple(f"visit {k + 1}" for k in range(len(distinct)))
    return visit.ravel().astype(np.int64), labels


def _recurs(part: Partition, visit: npt.NDArray[np.int64]) -> bool:
    most = int(visit.max()) + 1
    pairs = part.codes.astype(np.int64) * most + visit
    if part.count * most <= 4 * part.n:  # counted, without a sort
        return bool(np.bincount(pairs).max() > 1)
    return len(np.unique(pairs)) < len(pairs)


def _enough(part: Partition, visit: npt.NDArray[np.int64], labels: tuple[str, ...], design: Design) -> None:
    """Raise NotSupported where visits are not few and fixed, or subjects too few for them."""
    assert design.serial is not None
    T, name, level = len(labels), design.serial.name, part.key
    if T > MOST_VISITS:
        raise NotSupported(
            f"{T:,} distinct values of {name}; a covariance for every pair of visits is made for "
            f"{MOST_VISITS} visits or fewer that all share",
            "Number the visits 1, 2, 3 … if they were planned alike, or use a random intercept.",
        )
    if T < 2:
        raise NotSupported(f"every row has the same {name}", "Two visits or more would be needed.")
    if _recurs(part, visit):
        raise NotSupported(
            f"some {level} has two rows of the same {name}, so a visit is not one row",
            f'Average them with ties="mean", or name the level within which {name} does not recur.',
        )
    if part.count == part.n:
        raise NotSupported(
            f"every {level} has a single row, so no covariance between visits can be seen",
            f"Several rows per {level} would be needed.",
        )
    seen = np.zeros((part.count, T))
    seen[part.codes, visit] = 1.0
    together = seen.T @ seen
    least = T + PAIRS
    if together.min() < least:
        i, j = np.unravel_index(int(together.argmin()), together.shape)
        raise NotSupported(
            f"only {int(together[i, j])} of {part.count:,} groups of {level} were seen at both "
            f"{labels[int(j)]} and {labels[int(i)]}; with {T} visits {least} are needed for every pair",
            "Use a random intercept, which needs no such pairs.",
        )


def _start(parts: tuple[visits.Pattern, ...], T: int) -> Array:
    """Moments of the residuals by pair of visits, drawn in to a positive definite matrix."""
    total, count = np.zeros((T, T)), np.zeros((T, T))
    for one in parts:
        here = np.ix_(one.at, one.at)
        total[here] += one.moments[:, :, -1, -1]
        count[here] += one.count
    S = total / np.maximum(count, 1.0)
    # An exact fit at one visit would make that variance zero: a hundredth of the mean is kept.
    diagonal = np.maximum(np.diag(S), 0.01 * np.trace(S) / T)
    S[np.diag_indices(T)] = diagonal
    for shrink in (1.0, 0.9, 0.7, 0.4, 0.0):
        trial = shrink * S + (1 - shrink) * np.diag(diagonal)
        if np.linalg.eigvalsh(trial)[0] > 1e-4 * diagonal.min():
            return np.asarray(trial)
    return np.diag(diagonal)
