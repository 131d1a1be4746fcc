"""Likeness by distance, all bands at once, and by direction."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import sparse

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import bounds, number, p_value, significant
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, degenerate, exceedance, floats, normal_quantile, ratio, simulated
from clingstone.evidence.sites import at_sites, neighbours_of, site_design, sites_of, stand_by, unusable
from clingstone.evidence.variogram import pairs_between
from clingstone.maths.forms import Form, graph
from clingstone.maths.once import Array, kept
from clingstone.maths.traces import covariances, means
from clingstone.needs import Family, Needs, NotSupported
from clingstone.structure import triangles

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

BANDS, FEWEST_PAIRS = 8, 100
DRAWS, WORK = 999, 4e8  # draws of independent data, fewer where draws × pairs would exceed this
SECTORS = ("0", "45", "90", "135")
FITTED_DRAWS = 400
DRAWN_SITES = 3000  # sites up to which the fitted dependence is drawn for a reference


@dataclass(frozen=True, eq=False)
class Bands:
    """Forms whose ratio to e'e is the mean product of two residuals in a band, and their exact moments.

    distance, pairs (K,). mean (K,), covariance (K, K) : of the ratios under independence.
    """

    distance: Array
    pairs: npt.NDArray[np.int64]
    forms: tuple[Form, ...]
    mean: Array
    covariance: Array

    @property
    def sd(self) -> Array:
        return np.asarray(np.sqrt(np.diag(self.covariance)))

    def standardised(self, response: Response) -> Array:
        """(K, B)"""
        T = np.stack([ratio(response, form) for form in self.forms])
        return np.asarray((T - self.mean[:, None]) / self.sd[:, None])


def _draws(pairs: int) -> int:
    return int(np.clip(WORK / max(pairs, 1), 99, DRAWS))


def bands_of(design: Design, rng: np.random.Generator) -> Bands:
    """Up to eight bands of about equal numbers of pairs, up to half the largest distance."""
    small = site_design(design)
    sites, n = sites_of(small), small.n
    i, j, apart = pairs_between(small, rng, most=400)
    keep = np.flatnonzero((apart <= sites.extent / 2) & (apart > 0))
    order = keep[np.argsort(apart[keep], kind="stable")]
    count = int(np.clip(len(order) // FEWEST_PAIRS, 1, BANDS))
    split = np.array_split(order, count)
    forms = []
    for k, band in enumerate(split):
        w = np.full(len(band), 0.5 * n / len(band))
        half = sparse.coo_array((w, (i[band], j[band])), shape=(n, n))
        forms.append(graph(sparse.csr_array(half + half.T), f"band:{k}:{len(band)}"))
    distance = sites.along(np.array([apart[b].mean() for b in split]))
    return Bands(
        distance,
        np.array([len(b) for b in split], dtype=np.int64),
        tuple(forms),
        means(forms, small.basis),
        covariances(forms, small.basis),
    )


@dataclass(frozen=True)
class Correlogram(Plain):
    """Correlation of residuals in bands of distance; one p for the band that departs most.

    Each correlation is the mean product of two residuals over their mean square, its exact mean under
    independence taken off. p and the simultaneous band come from draws of Mz; no band is chosen for
    being extreme. The size is the correlation in the first band.
    """

    id: str = "correlogram"
    family: Family = "spatial"
    null: str = "Residuals are unrelated at every distance."
    alternative: str = "Residuals are related at some distance."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 20}))
    source: str = "cliff-ord-1981"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "in bands of distance, up to half the largest"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        bands, drawn = _prepared(fits)
        response = at_sites(fits.response)
        z = bands.standardised(response)
        largest = np.max(np.abs(z), axis=0)
        first, half = z[0] * bands.sd[0], normal_quantile(fits) * bands.sd[0]
        unit = sites_of(fits.design).unit
        distance = significant(float(bands.distance[0]))
        return Reading(
            statistic=largest,
            statistic_name="largest departure, in standard deviations",
            p=exceedance(largest, drawn),
            p_method=f"by {len(drawn)} draws of independent residuals, all bands at once",
            estimate=np.clip(first, -1.0, 1.0),
            estimate_name=f"correlation of sites about {distance} {unit} apart",
            low=np.clip(first - half, -1.0, 1.0),
            high=np.clip(first + half, -1.0, 1.0),
            n_used=response.design.n,
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        """Correlation by distance with its simultaneous band of independent data."""
        bands, drawn = _prepared(fits)
        z = bands.standardised(at_sites(fits.response))[:, 0]
        if np.isnan(z).any():
            return None
        reach = float(np.quantile(drawn, fits.run.settings.confidence)) * bands.sd
        return Curve(
            kind="correlogram",
            x=floats(bands.distance),
            y=floats(z * bands.sd),
            low=floats(-reach),
            high=floats(reach),
            size=floats(bands.pairs),
            x_name="distance between sites",
            y_name="correlation of residuals",
            unit=sites_of(fits.design).unit,
            note=f"band: all points at once in {len(drawn)} draws of independent residuals",
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = number(column(reading.estimate), 2) + bounds(column(reading.low), column(reading.high))
        name = reading.estimate_name.removeprefix("correlation of ")
        return (
            f"Residuals of {name} correlate {size}; over all bands of distance the largest departure is "
            f"{significant(column(reading.statistic))} standard deviations ({p_value(column(reading.p))})."
        )


def _prepared(fits: Fits) -> tuple[Bands, Array]:
    """Bands, and the largest departure in draws of independent residuals."""
    small = site_design(fits.design)
    if small.m < 5:
        raise NotSupported(f"{small.m} degrees of freedom between sites", "At least 5 would be needed.")
    seed = fits.run.settings.seed
    bands = kept(fits.design, ("bands", seed), lambda: bands_of(fits.design, fits.run.child("bands")))

    def draw() -> Array:
        response = at_sites(fits.response)
        null = simulated(response, fits, "correlogram", _draws(int(bands.pairs.sum())))
        return np.asarray(np.max(np.abs(bands.standardised(null)), axis=0))

    return bands, kept(fits.design, ("correlogram draws", seed), draw)


# ---- direction ---------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Axes:
    """Forms of neighbours weighted by cos 2θ and sin 2θ of their bearing, and by sector of 45 degrees."""

    waves: tuple[Form, Form]
    sectors: tuple[Form, ...]
    mean: Array
    covariance: Array
    total: float

    def gaps(self, response: Response) -> Array:
        """(2, B) departures of the two ratios from their exact means."""
        T = np.stack([ratio(response, form) for form in self.waves])
        return np.asarray(T - self.mean[:, None])

    def wald(self, gaps: Array, covariance: Array) -> Array:
        return np.asarray(np.einsum("ib,ij,jb->b", gaps, np.linalg.inv(covariance), gaps))


def axes_of(design: Design, key: str) -> Axes:
    """θ from the first coordinate axis (east on the globe), counter-clockwise."""
    small = site_design(design)
    S = sparse.coo_array(0.5 * (neighbours_of(design, key).W + neighbours_of(design, key).W.T))
    i, j = S.coords
    flat = triangles.plane(sites_of(small))
    gap = flat[j] - flat[i]
    angle = np.arctan2(gap[:, 1], gap[:, 0])

    def form(weight: Array, name: str) -> Form:
        return graph(sparse.csr_array((S.data * weight, (i, j)), shape=S.shape), f"direction:{key}:{name}")

    waves = (form(np.cos(2 * angle), "cos"), form(np.sin(2 * angle), "sin"))
    quarter = np.floor(((angle % np.pi) + np.pi / 8) / (np.pi / 4)).astype(int) % 4
    sectors = tuple(form((quarter == q).astype(float), SECTORS[q]) for q in range(4))
    centre, spread = means(waves, small.basis), covariances(waves, small.basis)
    size = np.linalg.eigvalsh(spread)
    if size[0] <= 1e-8 * size[1]:
        raise NotSupported(
            "all neighbours lie along one axis, so none is left to compare it with",
            "Places off that line would be needed.",
        )
    return Axes(waves, sectors, centre, spread, float(S.data.sum()))


@dataclass(frozen=True)
class Direction(Plain):
    """Are neighbours along one axis more alike than across it? Two waves of the bearing, at once.

    Alone, the reference is independent data: any departure from it may speak. Given the map, it is
    data drawn from the fitted dependence, which is alike in all directions; only that reading is a
    test of direction where there is dependence. The size is the difference of the likeness along the
    axis and across it.
    """

    id: str = "direction"
    family: Family = "spatial"
    null: str = "Neighbours along every axis are equally alike."
    alternative: str = "Neighbours along some axis are more alike than across it."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 30}))
    source: str = "cliff-ord-1981"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(About(nb.key, nb.about) for nb in design.neighbours[:1])

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        few = sites_of(fits.design).count <= DRAWN_SITES
        return (frozenset({"spatial"}),) if few and "spatial" in fits.components else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        unusable(fits.design, about.key)
        axes = _axes(fits, about.key)
        response = at_sites(fits.response)
        centre, spread, drawn, how = _reference(fits, axes, given)
        gaps = axes.gaps(response) - centre[:, None]
        statistic = axes.wald(gaps, spread)
        scale = 4 * response.design.n / axes.total
        size = scale * np.hypot(gaps[0], gaps[1])
        half = normal_quantile(fits) * scale * float(np.sqrt(np.trace(spread) / 2))
        caveats = stand_by(fits, neighbours_of(fits.design, about.key))
        if not given:
            caveats = (
                *caveats,
                "Any dependence may show here; direction is told by the reading given place.",
            )
        return Reading(
            statistic=statistic,
            statistic_name="Wald statistic of two directions",
            p=exceedance(statistic, drawn),
            p_method=how,
            estimate=size,
            estimate_name=f"likeness along the axis at {_axis(gaps)} degrees less that across it",
            low=np.maximum(size - half, 0.0),
            high=size + half,
            n_used=response.design.n,
            caveats=caveats,
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        """Moran's I of the neighbours in each of four axes."""
        axes, response = _axes(fits, about.key), at_sites(fits.response)
        if bool(degenerate(response)[0]):
            return None
        weight = np.array([form.matrix.sum() for form in axes.sectors])
        if np.any(weight <= 0):
            return None
        basis, n = response.design.basis, response.design.n
        T = np.array([ratio(response, form)[0] for form in axes.sectors])
        centre = means(axes.sectors, basis)
        sd = np.sqrt(np.diag(covariances(axes.sectors, basis)))
        reach = 2.5 * sd  # four at once at 95 %, normal: Bonferroni
        return Curve(
            kind="directions",
            x=tuple(float(s) for s in SECTORS),
            y=floats(n * T / weight),
            low=floats(n * (centre - reach) / weight),
            high=floats(n * (centre + reach) / weight),
            size=floats(weight),
            x_name="axis, degrees counter-clockwise from the first coordinate",
            y_name="Moran's I of neighbours along the axis",
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = number(column(reading.estimate), 2) + bounds(column(reading.low), column(reading.high))
        axis = reading.estimate_name.split(" at ")[1].split(" degrees")[0]
        return (
            f"Neighbours ({about.words}) along the axis {axis} degrees counter-clockwise from the first "
            f"coordinate are more alike than across it by {size} ({p_value(column(reading.p))})."
        )


def _axis(gaps: Array) -> str:
    if np.isnan(gaps[:, 0]).any():
        return "unknown"
    return number(float(np.degrees(0.5 * np.arctan2(gaps[1, 0], gaps[0, 0])) % 180), 0)


def _axes(fits: Fits, key: str) -> Axes:
    return kept(fits.design, ("axes", key), lambda: axes_of(fits.design, key))


def _reference(fits: Fits, axes: Axes, given: frozenset[str]) -> tuple[Array, Array, Array, str]:
    """Centre and spread of the two departures, drawn statistics, and how they were got."""
    if not given:
        response = at_sites(fits.response)
        links = axes.waves[0].matrix.nnz

        def draw() -> Array:
            null = simulated(response, fits, "direction", _draws(links))
            return axes.wald(axes.gaps(null), axes.covariance)

        key = ("direction draws", axes.waves[0].key, fits.run.settings.seed)
        drawn = kept(fits.design, key, draw)
        return np.zeros(2), axes.covariance, drawn, f"by {len(drawn)} draws of independent residuals"
    node = frozenset({"spatial"})
    algebra, model = fits.algebra(node), fits[node]
    rng = fits.run.child("direction under dependence")
    errors = algebra.draw(model.theta[:, 0], float(model.sigma2[0]), rng, FITTED_DRAWS)
    design = fits.design
    e = design.basis.project(errors)
    null = Response(design, np.zeros((design.p, FITTED_DRAWS)), e, np.einsum("ij,ij->j", e, e))
    gaps = axes.gaps(at_sites(null))
    centre, spread = gaps.mean(axis=1), np.cov(gaps)
    drawn = axes.wald(gaps - centre[:, None], spread)
    return centre, spread, drawn, f"by {FITTED_DRAWS} draws from the fitted dependence"
