"""Places as tests see them: one row per site, what a graph lacks, and the map of residuals."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import sparse, special

from clingstone.design.derived import collapse, whole
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.finding import Curve
from clingstone.evidence.read import degenerate, floats
from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form, graph
from clingstone.maths.once import Array, frozen, kept, once
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

CURVE_SITES = 5000
CURVE_LINKS = 5000
WEIGHT_STEP = 0.01  # of ln(1 + ratio): site weights are made for ratios no closer than this


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
    return Response.of(site_design(design), _site_means(response))


def _site_means(response: Response) -> Array:
    """(S, B) means of y, weighted by precision."""
    design = response.design
    part = sites_of(design).part
    root = np.ones(design.n) if design.root is None else design.root
    return np.asarray(part.sums(whole(response) * root[:, None]) / part.sums(root**2)[:, None])


def neighbours_of(design: Design, key: str) -> Neighbours:
    return next(nb for nb in design.neighbours if nb.key == key)


def unusable(design: Design, key: str) -> None:
    nb, small = neighbours_of(design, key), site_design(design)
    if small.m < 5:
        raise NotSupported(
            f"{small.n} sites and {small.p} coefficients leave {small.m} degrees of freedom between sites",
            "At least 5 would be needed.",
        )
    if nb.W.nnz == 0:
        raise NotSupported("no site has a neighbour", "Name a wider neighbourhood with neighbours=.")


def stand_by(fits: Fits, nb: Neighbours, weighed: bool = False) -> tuple[str, ...]:
    """Caveats of every test of places. weighed : site means were weighted by their precision."""
    design, sites = fits.design, sites_of(fits.design)
    out, sizes = [], sites.part.sizes
    if sites.count < fits.run.limits.sites_verdict:
        out.append(f"There are only {sites.count} sites, too few for a verdict.")
    if design.n > sites.count:
        words = "It is tested on site means, because several rows share a site"
        if weighed:
            words += f" ({sizes.min()} to {sizes.max()} rows each, weighted by the precision of their means)"
        elif sizes.max() > sizes.min():
            words += f" ({sizes.min()} to {sizes.max()} rows each, so the means are not equally precise)"
        out.append(f"{words}.")
    if nb.islands:
        out.append(f"{nb.islands} of {sites.count} sites have no neighbour.")
    parts = nb.components - nb.islands
    if parts > 1:
        out.append(f"The neighbours ({nb.about}) fall into {parts} parts without a link between them.")
    if not design.known:
        out.append("Only residuals were given, so the moments leave out the columns of the model.")
    return tuple(out)


def site_level(fits: Fits) -> str | None:
    """The component of what rows of one site share, where these data can carry one."""
    design = fits.design
    part = sites_of(design).part
    keys = ["group:site"]
    if design.group is not None:
        keys += [f"group:{g.key}" for g in design.group.levels if g.relation(part) == "same"]
    return next((key for key in keys if key in fits.components), None)


def weighted_sites(fits: Fits, key: str) -> tuple[Response, Form] | None:
    """Site means weighted by their precision, and (W + W')/2 between the weighted means.

    Where sites hold unequal numbers of rows, a site mean has variance σ²(θ + 1/N_s) under independent
    site effects. With θ fitted without dependence between sites, the score for such dependence is this
    form in the weighted means (C(α): Neyman 1959; any consistent θ will do). None where sites do not
    repeat, hold equal numbers, or no θ can be fitted. Many columns share the median of their θ.
    """
    design = fits.design
    part = sites_of(design).part
    level = site_level(fits)
    if part.count == part.n or np.ptp(design.sizes(part)) == 0 or level is None:
        return None
    try:
        model = fits[{level}]
    except NotSupported:
        return None
    ratio = float(np.median(model.variances[level] / model.variances["row"]))
    step = round(float(np.log1p(ratio)) / WEIGHT_STEP)
    made = kept(design, ("weighted sites", key, step), lambda: _weighted(design, key, step))
    return Response.of(made[0], _site_means(fits.response)), made[1]


def _weighted(design: Design, key: str, step: int) -> tuple[Design, Form]:
    ratio = float(np.expm1(step * WEIGHT_STEP))
    plain = site_design(design)
    root = 1.0 / np.sqrt(ratio + 1.0 / design.sizes(sites_of(design).part))
    root = root / np.sqrt(np.mean(root**2))
    basis = Basis.of((plain.Q @ plain.basis.R) * root[:, None])
    W = neighbours_of(design, key).W
    D = sparse.diags_array(root)
    form = graph(sparse.csr_array(D @ W @ D), f"moran:{key}:weighted:{step}")
    return replace(plain, basis=basis, root=frozen(root)), form


def unequal_spread(response: Response) -> Array:
    """(B,) p of Koenker's (1981) test: do squared residuals follow the coordinates or the fitted values?

    nR² of e² on both at once, χ²; NaN where nothing varies.
    """
    design = response.design
    points = sites_of(design).points
    n = design.n
    common = np.column_stack(
        [np.ones(n), (points - points.mean(axis=0)) / np.maximum(np.ptp(points), 1e-300)]
    )
    U, size, _ = np.linalg.svd(common, full_matrices=False)
    U = U[:, size > 1e-8 * size[0]]
    e2 = response.residual**2
    fitted = design.Q @ response.coef
    total = e2 - e2.mean(axis=0)
    rest, beyond = e2 - U @ (U.T @ e2), fitted - U @ (U.T @ fitted)
    explained = np.einsum("ij,ij->j", total, total) - np.einsum("ij,ij->j", rest, rest)
    length = np.einsum("ij,ij->j", beyond, beyond)
    own = length > 1e-12 * np.einsum("ij,ij->j", fitted, fitted)
    with np.errstate(divide="ignore", invalid="ignore"):
        more = np.where(own, np.einsum("ij,ij->j", rest, beyond) ** 2 / length, 0.0)
        statistic = n * (explained + more) / np.einsum("ij,ij->j", total, total)
    statistic = np.where(degenerate(response), np.nan, statistic)
    return np.asarray(special.chdtrc(U.shape[1] - 1 + own, statistic))


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
