"""Places: Moran's I and Geary's C of residuals, at the level of sites."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy import sparse, special

from clingstone.design.derived import sweep
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import bounds, number, p_value, percent, significant
from clingstone.evidence.anova import absorbed
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.nested import level_name
from clingstone.evidence.read import (
    Plain,
    degenerate,
    direction,
    exceedance,
    normal_quantile,
    ratio,
    simulated,
    tail_p,
)
from clingstone.evidence.serial import law_of
from clingstone.evidence.sites import (
    CURVE_SITES,
    at_sites,
    neighbours_of,
    residual_map,
    site_design,
    sites_of,
    stand_by,
    unequal_spread,
    unusable,
    weighted_sites,
)
from clingstone.maths.forms import Form, graph
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law, Tails
from clingstone.needs import Family, Needs, NotSupported
from clingstone.run import Alternative

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

__all__ = [
    "Geary",
    "Moran",
    "at_sites",
    "geary_form",
    "moran_form",
    "neighbours_of",
    "residual_map",
    "robust_z",
    "site_design",
    "sites_of",
]

DRAWS = 999
UNEQUAL = 0.10  # p below which unequal spread over the map is allowed for
ROBUST_DF = 25  # residual df from which the robust form may stand for the exact one
GEARY_EXACT = 2000  # sites up to which the second statistic gets the exact tail too


@once
def moran_form(design: Design, key: str) -> Form:
    """(W + W')/2 over the sites."""
    return graph(neighbours_of(design, key).W, f"moran:{key}")


@once
def geary_form(design: Design, key: str) -> Form:
    """diag((W1 + W'1)/2) − (W + W')/2, so that e'Se = ½ Σ w_ij (e_i − e_j)²."""
    W = neighbours_of(design, key).W
    degree = (np.asarray(W.sum(axis=0)).ravel() + np.asarray(W.sum(axis=1)).ravel()) / 2
    return graph(sparse.csr_array(sparse.diags_array(degree) - (W + W.T) / 2), f"geary:{key}")


def _unit(fits: Fits, about: About, given: frozenset[str]) -> tuple[Response, Partition | None, Form, bool]:
    """Site-level response and form; the means of a coarser group level are taken out when it is given.

    Sites with unequal numbers of rows are weighted by the precision of their means (last: whether so).
    """
    if not given:
        weighted = weighted_sites(fits, about.key)
        if weighted is not None:
            return weighted[0], None, weighted[1], True
    response = at_sites(fits.response)
    if not given:
        return response, None, moran_form(response.design, about.key), False
    (key,) = given
    level = fits.design.partitions[key.removeprefix("group:")]
    part = Partition(level.key, frozen(level.codes[sites_of(fits.design).part.first]), level.labels)
    inner = absorbed(response.design, part)
    if inner.m < 5:
        raise NotSupported(
            f"taking out the {level_name(level.key)} means leaves {inner.m} degrees of freedom between sites"
        )
    return sweep(response, inner, part), part, moran_form(inner, about.key), False


def _abouts(design: Design) -> tuple[About, ...]:
    return tuple(About(nb.key, nb.about, primary=i == 0) for i, nb in enumerate(design.neighbours))


@dataclass(frozen=True)
class Moran(Plain):
    """Moran's I of the residuals of a regression, with exact moments and tail given X.

    I = (n/S₀) e'We/e'e. The size is I rescaled to its attainable range, (I − E I)/(I_max − E I) with
    I_max = (n/S₀) λ_max(MSM); its interval is ± z exact null standard deviations on that scale.
    Residuals are never permuted: they are not exchangeable.
    """

    id: str = "moran"
    family: Family = "spatial"
    null: str = "Residuals of neighbouring sites are no more alike than those of distant sites."
    alternative: str = "Residuals of neighbouring sites are more alike (or less) than those of distant sites."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 8}))
    source: str = "cliff-ord-1981"
    primary: bool = True

    def abouts(self, design: Design) -> tuple[About, ...]:
        return _abouts(design)

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        """The finest group level made of whole sites: its means can be swept out exactly."""
        design = fits.design
        if design.group is None or not about.primary:
            return ()
        coarser = [
            g for g in design.group.levels if g.relation(sites_of(design).part) == "nests" and g.count > 1
        ]
        return (frozenset({f"group:{coarser[-1].key}"}),) if coarser else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        unusable(fits.design, about.key)
        nb = neighbours_of(fits.design, about.key)
        response, swept, form, weighed = _unit(fits, about, given)
        design = response.design
        law = law_of(design, form, swept)
        T = ratio(response, form)
        alternative = fits.run.settings.alternative
        tails = law.tails(T, fits.tails)
        p, log_p = tail_p(tails, alternative, "upper")
        p, log_p, method, unequal = _allowing(response, law, alternative, p, log_p, tails)
        reach = law.range[1] - law.mean
        z = normal_quantile(fits) * np.sqrt(law.variance) / reach
        size = (T - law.mean) / reach
        return Reading(
            statistic=T * design.n / nb.W.sum(),
            statistic_name="Moran's I",
            p=p,
            log_p=log_p,
            p_method=f"{method}, {direction(alternative)}",
            estimate=np.clip(size, -1.0, 1.0),
            estimate_name="likeness of neighbouring sites, on a scale where 1 is the most these sites allow",
            low=np.clip(size - z, -1.0, 1.0),
            high=np.clip(size + z, -1.0, 1.0),
            n_used=design.n,
            caveats=(*stand_by(fits, nb, weighed), *unequal, *_elsewhere(fits, about, given)),
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return residual_map(fits, about.key) if about.primary else None

    def sentence(self, reading: Reading, about: About) -> str:
        size = f"{number(column(reading.estimate), 2)}{bounds(column(reading.low), column(reading.high))}"
        return (
            f"Residuals of neighbouring sites ({about.words}) are alike to {size}, where 0 is no likeness "
            f"and 1 the most that these sites allow (Moran's I {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )


def standardised(response: Response, keys: list[str]) -> Array:
    """(K, B) (T − E T)/sd T at each neighbourhood."""
    design = response.design
    laws = [law_of(design, moran_form(design, key)) for key in keys]
    return np.stack([(ratio(response, w.form) - w.mean) / np.sqrt(w.variance) for w in laws])


def robust_z(response: Response, law: Law) -> Array:
    """z of e'Se when rows may have unequal variances (Kelejian & Prucha 2001), (B,).

    Mean Σ (MSM)_ii e_i², variance 2 Σ s_ij² e_i² e_j².
    """
    Q, S = response.design.Q, law.form.S
    SQ = law.form.apply(Q)
    diagonal = S.diagonal() - 2 * np.sum(Q * SQ, axis=1) + np.einsum("ij,ij->i", Q @ (Q.T @ SQ), Q)
    e2 = response.residual**2
    squares = sparse.csr_array(S.multiply(S))
    spread = 2 * np.einsum("ij,ij->j", e2, squares @ e2)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((response.gram(law.form)[1] - diagonal @ e2) / np.sqrt(spread))


def _allowing(
    response: Response, law: Law, alternative: Alternative, p: Array, log_p: Array, tails: Tails
) -> tuple[Array, Array, str, tuple[str, ...]]:
    """p, ln p, how it was got and a caveat, once unequal spread over the map is allowed for.

    Unequal variances alone make the exact test reject up to a third of independent maps at 5 %. Where
    squared residuals follow the coordinates or the fitted values, the robust form (Kelejian & Prucha 2001)
    therefore gives p.
    """
    if law.swept is not None or response.design.m < ROBUST_DF:
        return p, log_p, tails.method, ()
    uneven = unequal_spread(response) < UNEQUAL
    if not uneven.any():
        return p, log_p, tails.method, ()
    z = robust_z(response, law)
    side = {"greater": -z, "less": z}.get(alternative, -np.abs(z))
    log_robust = special.log_ndtr(side) + (np.log(2) if alternative == "two-sided" else 0.0)
    exact = p[0]
    p, log_p = np.where(uneven, np.exp(log_robust), p), np.where(uneven, log_robust, log_p)
    if not uneven[0]:
        return p, log_p, tails.method, ()
    said = f"With equal variances it would be {p_value(float(exact))}."
    return p, log_p, "normal, allowing for the unequal spread of residuals over the map", (said,)


def _elsewhere(fits: Fits, about: About, given: frozenset[str]) -> tuple[str, ...]:
    """How the other neighbourhoods read, with one p for the largest of all; never a choice."""
    design = site_design(fits.design)
    keys = [nb.key for nb in design.neighbours if nb.W.nnz]
    if fits.depth != "exact" or given or not about.primary or len(keys) < 2 or design.n > CURVE_SITES:
        return ()
    response = at_sites(fits.response)
    if bool(degenerate(response)[0]):
        return ()
    sizes = np.abs(standardised(response, keys))[:, 0]
    drawn = np.abs(standardised(simulated(response, fits, "neighbourhoods", DRAWS), keys)).max(axis=0)
    p = float(exceedance(sizes.max(keepdims=True), drawn)[0])
    large = int(np.sum(sizes > special.ndtri(0.975)))
    return (
        f"Of {len(keys)} neighbourhoods, {large} show more likeness (or less) than 95\u00a0% of independent "
        f"data would; for the largest of them {p_value(p)}.",
    )


@dataclass(frozen=True)
class Geary(Plain):
    """Geary's C, (n − 1) Σ w_ij(e_i − e_j)²/(2 S₀ e'e): the same question with more weight on close steps.

    Shown beside Moran's I, never counted as a second confirmation. Its size is 1 − C/E C.
    """

    id: str = "geary"
    family: Family = "spatial"
    null: str = "Residuals of neighbouring sites differ as much as those of distant sites."
    alternative: str = "Residuals of neighbouring sites differ less (or more) than those of distant sites."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 8}))
    source: str = "cliff-ord-1981"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return _abouts(design)[:1]

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        unusable(fits.design, about.key)
        nb, response = neighbours_of(fits.design, about.key), at_sites(fits.response)
        design = response.design
        form = geary_form(design, about.key)
        law = law_of(design, form)
        T = ratio(response, form)
        alternative = fits.run.settings.alternative
        tails = law.tails(T, fits.tails if design.n <= GEARY_EXACT else "fast")
        p, log_p = tail_p(tails, alternative, "lower")
        z = normal_quantile(fits) * np.sqrt(law.variance) / law.mean
        size = 1.0 - T / law.mean
        return Reading(
            statistic=T * (design.n - 1) / nb.W.sum(),
            statistic_name="Geary's C",
            p=p,
            log_p=log_p,
            p_method=f"{tails.method}, {direction(alternative)}",
            estimate=size,
            estimate_name="how much less neighbouring sites differ",
            low=size - z,
            high=size + z,
            n_used=design.n,
            caveats=stand_by(fits, nb),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = column(reading.estimate)
        words = "less" if size >= 0 else "more"
        return (
            f"Squared differences between neighbouring sites ({about.words}) are {percent(abs(size))} "
            f"{words} than without dependence (Geary's C {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )
