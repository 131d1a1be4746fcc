"""Places: Moran's I and Geary's C of residuals, at the level of sites."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import sparse, special

from clingstone.design.derived import collapse, sweep, whole
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
    floats,
    normal_quantile,
    ratio,
    simulated,
    tail_p,
)
from clingstone.evidence.serial import law_of
from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form, graph
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.needs import Family, Needs, NotSupported
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

CURVE_SITES = 5000
CURVE_LINKS = 5000
DRAWS = 999
GEARY_EXACT = 2000  # sites up to which the second statistic gets the exact tail too


def sites_of(design: Design) -> Sites:
    assert design.spatial is not None
    return design.spatial


@once
def site_design(design: Design) -> Design:
    """One row per site: site means of the design's columns, in the order of the sites.

    Where no site repeats, the rows themselves with their precision weights kept in them.
    """
    part = sites_of(design).part
    if part.count < part.n:
        return collapse(Response.of(design, np.zeros(design.n)), part).design
    rows = part.first
    spatial = replace(sites_of(design), part=Partition("site", frozen(part.codes[rows]), part.labels))
    basis = Basis(frozen(design.Q[rows]), design.basis.R)
    return replace(design, basis=basis, group=None, serial=None, spatial=spatial, covariates={}, root=None)


def at_sites(response: Response) -> Response:
    """The response on ``site_design``: site means of y (weighted by precision), or its rows.

    Site means are the right unit: several rows of one site share whatever the site adds, and a graph
    over rows takes independent site effects for spatial dependence.
    """
    design = response.design
    part = sites_of(design).part
    if part.count == part.n:
        return Response.of(site_design(design), whole(response)[part.first])
    root = np.ones(design.n) if design.root is None else design.root
    Y = part.sums(whole(response) * root[:, None]) / part.sums(root**2)[:, None]
    return Response.of(site_design(design), Y)


def neighbours_of(design: Design, key: str) -> Neighbours:
    return next(nb for nb in design.neighbours if nb.key == key)


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


def _unit(fits: Fits, given: frozenset[str]) -> tuple[Response, Partition | None]:
    """Site-level response, with the means of a coarser group level taken out when it is given."""
    response = at_sites(fits.response)
    if not given:
        return response, None
    (key,) = given
    level = fits.design.partitions[key.removeprefix("group:")]
    part = Partition(level.key, frozen(level.codes[sites_of(fits.design).part.first]), level.labels)
    inner = absorbed(response.design, part)
    if inner.m < 5:
        raise NotSupported(
            f"taking out the {level_name(level.key)} means leaves {inner.m} degrees of freedom between sites"
        )
    return sweep(response, inner, part), part


def _abouts(design: Design) -> tuple[About, ...]:
    return tuple(About(nb.key, nb.about, primary=i == 0) for i, nb in enumerate(design.neighbours))


def _needed(design: Design, key: str) -> None:
    nb, small = neighbours_of(design, key), site_design(design)
    if small.m < 5:
        raise NotSupported(
            f"{small.n} sites and {small.p} coefficients leave {small.m} degrees of freedom between sites",
            "At least 5 would be needed.",
        )
    if nb.W.nnz == 0:
        raise NotSupported("no site has a neighbour", "Name a wider neighbourhood with neighbours=.")


def _caveats(fits: Fits, nb: Neighbours) -> tuple[str, ...]:
    design, sites = fits.design, sites_of(fits.design)
    out, sizes = [], sites.part.sizes
    if sites.count < fits.run.limits.sites_verdict:
        out.append(f"There are only {sites.count} sites, too few for a verdict.")
    if design.n > sites.count:
        words = "It is tested on site means, because several rows share a site"
        if sizes.max() > sizes.min():
            words += f" ({sizes.min()} to {sizes.max()} rows each, so the means are not equally precise)"
        out.append(f"{words}.")
    if nb.islands:
        out.append(f"{nb.islands} of {sites.count} sites have no neighbour.")
    if not design.known:
        out.append("Only residuals were given, so the moments leave out the columns of the model.")
    return tuple(out)


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
        _needed(fits.design, about.key)
        nb = neighbours_of(fits.design, about.key)
        response, swept = _unit(fits, given)
        design = response.design
        form = moran_form(design, about.key)
        law = law_of(design, form, swept)
        T = ratio(response, form)
        alternative = fits.run.settings.alternative
        tails = law.tails(T, fits.depth)
        p, log_p = tail_p(tails, alternative, "upper")
        reach = law.range[1] - law.mean
        z = normal_quantile(fits) * np.sqrt(law.variance) / reach
        size = (T - law.mean) / reach
        return Reading(
            statistic=T * design.n / nb.W.sum(),
            statistic_name="Moran's I",
            p=p,
            log_p=log_p,
            p_method=f"{tails.method}, {direction(alternative)}",
            estimate=np.clip(size, -1.0, 1.0),
            estimate_name="likeness of neighbouring sites, on a scale where 1 is the most these sites allow",
            low=np.clip(size - z, -1.0, 1.0),
            high=np.clip(size + z, -1.0, 1.0),
            n_used=design.n,
            caveats=(*_caveats(fits, nb), *_unequal(fits, response, law, p), *_elsewhere(fits, about, given)),
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


def _unequal(fits: Fits, response: Response, law: Law, p: Array) -> tuple[str, ...]:
    """A caveat when allowing for unequal variances would tip the verdict."""
    if fits.depth != "exact" or law.swept is not None or bool(degenerate(response)[0]):
        return ()
    robust = float(2 * special.ndtr(-abs(robust_z(response, law)[0])))
    if (robust < 0.05) == (float(p[0]) < 0.05):
        return ()
    return (f"If the sites have unequal variances, {p_value(robust)}, which changes the picture.",)


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
        _needed(fits.design, about.key)
        nb, response = neighbours_of(fits.design, about.key), at_sites(fits.response)
        design = response.design
        form = geary_form(design, about.key)
        law = law_of(design, form)
        T = ratio(response, form)
        alternative = fits.run.settings.alternative
        tails = law.tails(T, fits.depth if design.n <= GEARY_EXACT else "fast")
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
            caveats=_caveats(fits, nb),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = column(reading.estimate)
        words = "less" if size >= 0 else "more"
        return (
            f"Squared differences between neighbouring sites ({about.words}) are {percent(abs(size))} "
            f"{words} than without dependence (Geary's C {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )


def residual_map(fits: Fits, key: str) -> Curve | None:
    """Mean residual at each site, at its coordinates, and the graph of neighbours.

    At most 5,000 sites, evenly by index; the graph only where all are shown and it has at most 5,000
    pairs, because more would hide the map.
    """
    sites = sites_of(fits.design)
    values = fits.response.sums(sites.part)[:, 0] / fits.design.sizes(sites.part)
    rows = np.arange(sites.count)
    if len(rows) > CURVE_SITES:
        rows = np.unique(np.linspace(0, sites.count - 1, CURVE_SITES).round().astype(int))
    note = "" if len(rows) == sites.count else f"{CURVE_SITES} of {sites.count} sites"
    return Curve(
        kind="map",
        x=floats(sites.xy[rows, 0]),
        y=floats(sites.xy[rows, 1]),
        size=floats(values[rows]),
        x_name=sites.names[0],
        y_name=sites.names[1],
        unit=sites.unit if sites.kind == "planar" else "degrees",
        note=note,
        links=_links(neighbours_of(fits.design, key)) if not note else (),
    )


def _links(nb: Neighbours) -> tuple[tuple[int, int], ...]:
    """Pairs of sites that are neighbours, each once."""
    W = sparse.coo_array(nb.W)
    i, j = np.minimum(W.row, W.col), np.maximum(W.row, W.col)
    pairs = np.unique(np.stack([i, j], axis=1)[i < j], axis=0)
    return tuple((int(a), int(b)) for a, b in pairs) if len(pairs) <= CURVE_LINKS else ()
