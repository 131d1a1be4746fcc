"""Groups: the F test with the intraclass correlation as its size, and the REML correlation."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import special, stats

from clingstone.design.design import Design
from clingstone.display import bounds, freedom, number, p_value, percent, percent_bounds, significant
from clingstone.evidence.anova import anova, icc_interval
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.groups import AtLevels, BesideOthers, caveats, level_name, levels, repeats
from clingstone.evidence.read import Plain, around, by_f, degenerate, exceedance, floats
from clingstone.evidence.restricted import DRAWS, null_draws, ratio, shared, spread
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

CURVE_GROUPS = 200


@dataclass(frozen=True)
class GroupF(BesideOthers):
    """Exact F test of group effects, its size the signed analysis-of-variance correlation.

    F = (SSB/r)/(SSW/(n − rank[X, Z])) with r = rank Z'MZ is F distributed under normal errors for any
    unbalance and any covariates. Given other structures it is a restricted likelihood ratio of two
    REML fits, with a half-and-half chi-squared mixture on 0 and 1 degrees of freedom (Self & Liang
    1987), conservative with few groups.
    """

    id: str = "group-f"
    family: Family = "group"
    null: str = "Rows of one group are no more alike than rows of different groups."
    alternative: str = "Rows of one group are more alike than rows of different groups."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}))
    source: str = "harville-fenech-1985"
    primary: bool = True

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        if given:
            return _ratio_given(fits, f"group:{about.key}", given)
        return _exact(fits, repeats(fits.design, about), level_name(about.key))

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return group_means(fits, about)

    def sentence(self, reading: Reading, about: About) -> str:
        icc, words = column(reading.estimate), about.words[:1].upper() + about.words[1:]
        size = f"{number(icc, 2)}{bounds(column(reading.low), column(reading.high))}"
        if reading.statistic_name != "F":
            return shared(reading, about)
        tail = (
            f"F = {significant(column(reading.statistic))} on {freedom(reading.df, reading.df2)}, "
            f"{p_value(column(reading.p))}."
        )
        return f"{words} have an intraclass correlation (likeness beyond the model) of {size}; {tail}"


def _exact(fits: Fits, part: Partition, name: str) -> Reading:
    """The analysis of variance of one partition, its F and the interval of its correlation."""
    design, response = fits.design, fits.response
    table = anova(response, part)
    if table.df1 == 0:
        raise NotSupported(f"the model already has a coefficient for every {name}")
    if table.df2 < 1:
        raise NotSupported("the model and the groups together leave no degrees of freedom within groups")
    lost = degenerate(response)
    F = np.where(lost, np.nan, table.F)
    steps = 46 if fits.depth == "exact" else 26
    icc, low, high = around(
        table.icc, *icc_interval(response, part, table, fits.run.settings.confidence, steps), lost
    )
    return replace(
        by_f(F, table.df1, table.df2, "exact F, one-sided"),
        estimate=icc,
        estimate_name="intraclass correlation",
        low=low,
        high=high,
        n_used=design.n,
        caveats=caveats(design, part),
    )


@dataclass(frozen=True)
class SiteF(Plain):
    """Exact F test of what the rows of one place share, where places repeat.

    The analysis of variance of ``group-f`` with the places as groups. It sees whatever holds a place
    apart from others, a dependence that fades with distance as well. A second look in the tests of
    places; the ledger judges by it what rows of one place share.
    """

    id: str = "site-f"
    family: Family = "spatial"
    null: str = "Rows of one place are no more alike than rows of different places."
    alternative: str = "Rows of one place are more alike than rows of different places."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 2}))
    source: str = "harville-fenech-1985"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        """Where places repeat and are not a group level that has the test already."""
        assert design.spatial is not None
        part = design.spatial.part
        known = design.group.levels if design.group is not None else ()
        if part.count == part.n or any(level.relation(part) == "same" for level in known):
            return ()
        return (About("site", "rows of one place", primary=False),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        assert fits.design.spatial is not None
        return _exact(fits, fits.design.spatial.part, "place")

    def sentence(self, reading: Reading, about: About) -> str:
        return GroupF().sentence(reading, about)


def _ratio_given(fits: Fits, key: str, given: frozenset[str]) -> Reading:
    """Restricted likelihood ratio for one variance, other components fitted in both models."""
    statistic, share = ratio(fits, key, given)
    p, log_p = half_mixture(statistic)
    return Reading(
        statistic=statistic,
        statistic_name="restricted likelihood ratio",
        df=1.0,
        p=p,
        log_p=log_p,
        p_method="half-and-half chi-squared mixture (approximate)",
        estimate=share,
        estimate_name="share of the residual variance",
        n_used=fits.design.n,
        caveats=("With few groups this reference makes p too large rather than too small.",),
    )


def half_mixture(statistic: Array) -> tuple[Array, Array]:
    """p and log p of a likelihood ratio under ½χ²₀ + ½χ²₁ (Self & Liang 1987); NaN stays NaN."""
    zero = statistic <= 0
    p = np.where(zero, 1.0, 0.5 * special.chdtrc(1, statistic))
    return p, np.where(zero, 0.0, stats.chi2.logsf(statistic, 1) - np.log(2.0))


def group_means(fits: Fits, about: About) -> Curve | None:
    """Mean residual of each group with its interval, sorted; at most 200 groups, evenly by rank.

    1'e_g has variance σ²(n_g − ‖Q_g'1‖²); σ² is the mean square within groups.
    """
    design, response = fits.design, fits.response
    part = repeats(design, about)
    table = anova(response, part)
    if table.df2 < 1:
        return None
    sizes = design.sizes(part)
    means = response.sums(part)[:, 0] / sizes
    spread = np.maximum(sizes - np.sum(design.sums(part) ** 2, axis=1), 0.0)
    t = float(special.stdtrit(table.df2, 0.5 + fits.run.settings.confidence / 2))
    half = t * np.sqrt(float(table.within[0]) / table.df2 * spread) / sizes
    order = np.argsort(means, kind="stable")
    note = ""
    if len(order) > CURVE_GROUPS:
        order = order[np.unique(np.linspace(0, len(order) - 1, CURVE_GROUPS).round().astype(int))]
        note = f"{CURVE_GROUPS} of {part.count} groups, evenly by rank"
    name = level_name(about.key)
    return Curve(
        kind="group-means",
        x=floats(np.arange(1, len(order) + 1)),
        y=floats(means[order]),
        low=floats((means - half)[order]),
        high=floats((means + half)[order]),
        size=floats(part.sizes[order]),
        labels=tuple(part.labels[g] for g in order),
        x_name=name,
        y_name="mean residual",
        note=note,
    )


@dataclass(frozen=True)
class IntraclassCorrelation(AtLevels):
    """REML intraclass correlation, tested by the restricted likelihood ratio with its exact null law.

    The law is that of Crainiceanu & Ruppert (2004), from 10,000 draws in the spectrum of Z'MZ. The
    interval is the exact one of the variance ratio, cut at 0 because REML shares are not negative.
    """

    id: str = "intraclass-correlation"
    family: Family = "group"
    null: str = "The variance between groups is zero."
    alternative: str = "The variance between groups is greater than zero."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}))
    source: str = "crainiceanu-ruppert-2004"
    primary: bool = False

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, key = fits.design, f"group:{about.key}"
        part, table = spread(fits.response, about)
        if key not in fits.components:
            refusal = fits.refused.get(key)
            reason, hint = (refusal.reason, refusal.hint) if refusal else ("no such component", "")
            raise NotSupported(reason, hint)
        statistic, fitted = ratio(fits, key)
        p = exceedance(statistic, null_draws(design, part, table.df1, fits.run))
        method = f"exact law of the restricted likelihood ratio, {DRAWS:,} draws"
        steps = 46 if fits.depth == "exact" else 26
        ends = icc_interval(fits.response, part, table, fits.run.settings.confidence, steps)
        low, high = (np.maximum(end, 0.0) for end in ends)
        share, low, high = around(fitted, low, high, degenerate(fits.response))
        return Reading(
            statistic=statistic,
            statistic_name="restricted likelihood ratio",
            df=1.0,
            p=p,
            p_method=method,
            estimate=share,
            estimate_name="intraclass correlation (REML)",
            low=low,
            high=high,
            n_used=design.n,
            caveats=caveats(design, part),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"By restricted maximum likelihood, {about.words} share {percent(column(reading.estimate))}"
            f"{percent_bounds(column(reading.low), column(reading.high))} of what the model leaves over "
            f"(restricted likelihood ratio {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )


__all__ = ["GroupF", "IntraclassCorrelation", "group_means", "half_mixture", "level_name", "levels"]
