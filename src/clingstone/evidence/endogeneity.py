"""Groups: does a predictor mean the same between groups as within them?"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from clingstone.design.derived import extend, onto
from clingstone.design.design import Design, Term, rows_of
from clingstone.display import bounds, decimals_for, freedom, number, p_value, significant
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.groups import BY, found, level_name, moving, row_level
from clingstone.evidence.read import Plain, degenerate
from clingstone.maths import reference, sandwich
from clingstone.maths.once import Array, kept, lately
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits


TOGETHER = "all predictors"


@dataclass(frozen=True)
class GroupEndogeneity(Plain):
    """Group means of row-level predictors added to the model; does one of them matter?

    Mundlak's (1978) form of the Hausman test: the coefficient of a group mean is the between effect less the
    within effect. Cluster-robust (CR2, Satterthwaite df; for several columns the approximate Hotelling T² of
    Pustejovsky & Tipton 2018), so it holds under any dependence within groups. Means of all predictors in
    focus are in the model together while groups allow it; where there are several, all are tested at once
    too, as none may stand out where together they do.
    """

    id: str = "group-endogeneity"
    family: Family = "group"
    null: str = "The predictor has the same effect between groups as within them."
    alternative: str = "The predictor has another effect between groups than within them."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}, known_design=True))
    source: str = "mundlak-1978"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        each = row_level(design)
        out = [
            About(
                f"{term.name}{BY}{level.key}", f"{term.name}, between against within {level_name(level.key)}"
            )
            for level, term in each
        ]
        for level in dict.fromkeys(level for level, _ in each):
            if sum(v is level for v, _ in each) > 1:
                words = f"{TOGETHER}, between against within {level_name(level.key)}"
                out.append(About(f"{TOGETHER}{BY}{level.key}", words))
        return tuple(out)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        if about.key.startswith(TOGETHER + BY):
            part = next(v for v, _ in row_level(fits.design) if about.key == f"{TOGETHER}{BY}{v.key}")
            wider, columns = _widened(fits.design, part, None)
            name = "several predictors"
        else:
            part, term = found(fits.design, about)
            wider, columns = _widened(fits.design, part, term)
            name = term.name
        response = onto(fits.response, wider)
        q = len(columns)
        W = wider.basis.contrast(np.eye(wider.p)[columns])
        weights = kept(wider, ("between", part.key, *columns), lambda: _weights(wider, part, W))
        if float(weights.lost.max()) > 1e-8:
            raise NotSupported(
                f"one {level_name(part.key)} alone decides how {name} would differ between groups",
                "More groups would be needed.",
            )
        S = response.scores(part)
        effect = W.T @ response.coef
        block = sandwich.cluster_covariance(weights.a, S)
        lost = degenerate(fits.response)
        if q == 1:
            return _single(fits, effect[0], np.sqrt(block[0, 0]), weights, part, lost)
        eta = sandwich.cluster_joint_df(weights.a, weights.b)
        if not eta - q + 1 > 0:
            raise NotSupported(
                f"{part.count} groups of {part.key} are too few to compare {q} columns of {name}",
                "More groups would be needed.",
            )
        F, df2 = reference.hotelling(reference.wald(effect, block), q, eta)
        F = np.where(lost, np.nan, F)
        return Reading(
            statistic=F,
            statistic_name="F",
            df=float(q),
            df2=float(df2),
            p=reference.f_tail(F, q, df2),
            p_method="cluster-robust F (CR2)",
            n_used=fits.design.n,
            caveats=_caveats(part),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        name, _, level = about.key.rpartition(BY)
        p = p_value(column(reading.p))
        if name == TOGETHER:
            return (
                f"Whether any predictor has another effect between groups of {level_name(level)} than within "
                f"them: F = {significant(column(reading.statistic))} on "
                f"{freedom(reading.df, reading.df2)}, {p}."
            )
        if reading.estimate is None:
            return (
                f"Whether {name} has another effect between groups of {level_name(level)} than within them: "
                f"F = {significant(column(reading.statistic))} on {freedom(reading.df, reading.df2)}, {p}."
            )
        low, high = column(reading.low), column(reading.high)
        decimals = decimals_for((high - low) / 4)
        return (
            f"Between groups of {level_name(level)} the effect of {name} differs from that within them by "
            f"{number(column(reading.estimate), decimals)}{bounds(low, high, decimals)}, {p}."
        )


def _single(
    fits: Fits,
    effect: Array,
    se: Array,
    weights: sandwich.Adjusted,
    part: Partition,
    lost: npt.NDArray[np.bool_],
) -> Reading:
    df = sandwich.cluster_df(weights.a, weights.b)
    if not df[0] >= 1:
        raise NotSupported(
            "the groups leave less than one degree of freedom for the comparison",
            "More groups among which the predictor's mean varies would be needed.",
        )
    low, high, p = reference.t_rows(effect[None], se[None], df[:, None], fits.run.settings.confidence)
    return Reading(
        statistic=np.where(lost, np.nan, effect / se),
        statistic_name="t",
        df=float(df[0]),
        p=np.where(lost, np.nan, p[0]),
        p_method="cluster-robust t (CR2)",
        estimate=np.where(lost, np.nan, effect),
        estimate_name="between effect less within effect",
        low=np.where(lost, np.nan, low[0]),
        high=np.where(lost, np.nan, high[0]),
        n_used=fits.design.n,
        caveats=_caveats(part),
    )


def _caveats(part: Partition) -> tuple[str, ...]:
    small = float(np.median(part.sizes))
    if small < 5:
        return (f"Means over few rows (median {small:g}) pull the between effect toward the within effect.",)
    return ()


def _weights(wider: Design, part: Partition, W: Array) -> sandwich.Adjusted:
    return sandwich.adjust(wider.scores(part), W, "CR2")


@lately
def _widened(design: Design, part: Partition, term: Term | None) -> tuple[Design, list[int]]:
    """The design with group means of the moving terms in focus that it can take; places of the tested ones.

    term : the one that is tested, whose means come first; None where all are tested at once.
    """
    wider, columns = design, []
    if term is not None:
        wider = extend(design, f"{term.name} between", _means(design, part, term))
        columns = list(range(design.p, wider.p))
    most = part.count // (2 if term is None else 3)
    for level, other in row_level(design):
        if level is not part or other is term:
            continue
        more = _means(design, part, other)
        if wider.p + more.shape[1] > most:
            continue
        try:
            wider = extend(wider, f"{other.name} between", more)
        except NotSupported:
            continue  # the model spans those means already
    if term is None:
        columns = list(range(design.p, wider.p))
        if len(columns) < 2:
            raise NotSupported(
                f"fewer than two group means can be added beside the model at {level_name(part.key)}",
                "More groups, or predictors whose means differ between them, would be needed.",
            )
    return wider, columns


def _means(design: Design, part: Partition, term: Term) -> Array:
    """(n, k) group means of the columns of a term that vary within groups."""
    X = rows_of(design, design.Q @ design.basis.R[:, list(moving(design, part, term))])
    weight = np.ones(design.n) if design.root is None else design.root**2
    means = part.sums(X * weight[:, None]) / part.sums(weight)[:, None]
    return np.asarray(means[part.codes])
