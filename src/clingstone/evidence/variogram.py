"""Variogram of residuals over sites, with a simultaneous envelope of independent data."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import sparse
from scipy.spatial.distance import pdist

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import bounds, number, p_value, significant
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, degenerate, exceedance, floats, normal_quantile, simulated
from clingstone.evidence.sites import at_sites, site_design, sites_of
from clingstone.maths.once import Array, kept
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

ALL_PAIRS = 3000  # sites up to which every pair is used
NEAR, RANDOM_PAIRS = 30, 200_000
BINS, FEWEST_PAIRS = 12, 30
DRAWS = 199
Line = tuple[tuple[float, ...], tuple[float, ...]]


@dataclass(frozen=True, eq=False)
class Bins:
    """Pairs of sites in distance bins.

    distance (K,) mean distance, along the great circle for longitude and latitude. pairs (K,).
    forms : K sparse (S, S) matrices G with e'Ge = mean over the pairs of a bin of
    (e_i − e_j)²/(2 − h_ii − h_jj + 2h_ij): 1·σ² in every bin without dependence. ends : per bin the two
    sites of each pair and that expectation.
    """

    distance: Array
    pairs: npt.NDArray[np.int64]
    forms: tuple[sparse.csr_array, ...]
    ends: tuple[tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], Array], ...] = ()

    def robust(self, response: Response) -> Array:
        """(K,) the same from fourth roots (Cressie & Hawkins 1980), for the first column of y.

        ½[mean |d|^½]⁴/(0.457 + 0.494/N), d the difference over the root of half its expectation.
        """
        e, s2 = response.residual[:, 0], float(response.s2[0])
        out = []
        for i, j, expected in self.ends:
            root = np.mean(np.sqrt(np.abs(e[i] - e[j]) * np.sqrt(2 / expected)))
            out.append(0.5 * root**4 / (0.457 + 0.494 / len(i)) / s2)
        return np.array(out)

    def read(self, response: Response) -> Array:
        """(K, B) semivariance over s²."""
        e = response.residual
        with np.errstate(divide="ignore", invalid="ignore"):
            values = np.stack([np.einsum("ij,ij->j", e, G @ e) for G in self.forms])
            return np.asarray(values / np.where(degenerate(response), np.nan, response.s2))


def pairs_of(design: Design, rng: np.random.Generator) -> Bins:
    """Bins of about equal numbers of pairs, up to half the largest distance between sites."""
    small = site_design(design)
    sites = sites_of(small)
    i, j, apart = pairs_between(small, rng)
    keep = (apart <= sites.extent / 2) & (apart > 0)
    i, j, apart = i[keep], j[keep], apart[keep]
    order = np.argsort(apart, kind="stable")
    count = max(1, min(BINS, len(order) // FEWEST_PAIRS))
    h, Q, n = small.basis.leverage, small.Q, small.n
    expected = 2 - h[i] - h[j] + 2 * np.einsum("ij,ij->i", Q[i], Q[j])
    forms, used = [], []
    bins = np.array_split(order, count)
    for b in bins:
        usable = b[expected[b] > 1e-8]
        used.append((i[usable], j[usable], expected[usable]))
        w = 1.0 / (expected[usable] * len(usable))
        half = sparse.coo_array((w, (i[usable], j[usable])), shape=(n, n))
        ends = np.bincount(i[usable], w, n) + np.bincount(j[usable], w, n)
        forms.append(sparse.csr_array(sparse.diags_array(ends) - half - half.T))
    distance = sites.along(np.array([apart[b].mean() for b in bins]))
    return Bins(distance, np.array([len(b) for b in bins], dtype=np.int64), tuple(forms), tuple(used))


def pairs_between(
    small: Design, rng: np.random.Generator, most: int = ALL_PAIRS
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64], Array]:
    """Every pair of sites, or near pairs and random ones when there are more sites than ``most``."""
    sites = sites_of(small)
    S, points = sites.count, sites.points
    if most >= S:
        i, j = np.triu_indices(S, 1)
        return i.astype(np.int64), j.astype(np.int64), np.asarray(pdist(points))
    _, near = sites.tree.query(points, k=min(NEAR, S - 1) + 1)
    one = np.repeat(np.arange(S), near.shape[1])
    two = near.ravel()
    draw = rng.integers(0, S, size=(RANDOM_PAIRS, 2))
    one, two = np.concatenate([one, draw[:, 0]]), np.concatenate([two, draw[:, 1]])
    codes = np.unique((np.minimum(one, two).astype(np.int64) * S + np.maximum(one, two))[one != two])
    i, j = codes // S, codes % S
    return i, j, np.linalg.norm(points[i] - points[j], axis=1)


@dataclass(frozen=True)
class Variogram(Plain):
    """Largest departure of the residual variogram from flat, against draws of Mz on the same pairs.

    Each squared difference is divided by its expectation without dependence, so residual bias is
    out. The statistic is the largest departure in standard deviations of the draws; p comes from
    normal draws. The size is 1 − semivariance in the first bin: the correlation of the closest sites.
    """

    id: str = "variogram"
    family: Family = "spatial"
    null: str = "Squared differences between sites do not depend on their distance."
    alternative: str = "Squared differences between sites depend on their distance."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 10}))
    source: str = "matheron-1963"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "up to half the largest distance"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        bins, response, centre, spread, drawn = _prepared(fits)
        value = bins.read(response)
        first = 1.0 - value[0]
        half = normal_quantile(fits) * float(spread[0])
        distance = float(bins.distance[0])
        unit = sites_of(fits.design).unit
        return Reading(
            statistic=_departure(value, centre, spread),
            statistic_name="largest departure, in standard deviations",
            p=exceedance(_departure(value, centre, spread), drawn),
            p_method=f"by {DRAWS} draws of independent residuals",
            estimate=np.clip(first, -1.0, 1.0),
            estimate_name=f"correlation of sites {significant(distance)} {unit} apart",
            low=np.clip(first - half, -1.0, 1.0),
            high=np.clip(first + half, -1.0, 1.0),
            n_used=int(bins.pairs.sum()),
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        bins, response, centre, spread, drawn = _prepared(fits)
        value = bins.read(response)[:, 0]
        if np.isnan(value).any():
            return None
        reach = float(np.quantile(drawn, fits.run.settings.confidence))
        return Curve(
            kind="variogram",
            x=floats(bins.distance),
            y=floats(value),
            low=floats(np.maximum(centre - reach * spread, 0.0)),
            high=floats(centre + reach * spread),
            size=floats(bins.pairs),
            x_name="distance between sites",
            y_name="semivariance (1 without dependence)",
            unit=sites_of(fits.design).unit,
            note=f"envelope: all points at once in {DRAWS} draws of independent residuals",
            lines=_lines(fits, bins, response),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        r = f"{number(column(reading.estimate), 2)}{bounds(column(reading.low), column(reading.high))}"
        name = reading.estimate_name.removeprefix("correlation of ")
        return (
            f"Residuals of {name} correlate {r}; the variogram departs from flat by "
            f"{significant(column(reading.statistic))} standard deviations at most "
            f"({p_value(column(reading.p))})."
        )


def _prepared(fits: Fits) -> tuple[Bins, Response, Array, Array, Array]:
    """Bins, the site-level response, mean and sd of the draws per bin, and their largest departures."""
    small = site_design(fits.design)
    if small.m < 5:
        raise NotSupported(f"{small.m} degrees of freedom between sites", "At least 5 would be needed.")
    key = ("variogram pairs", fits.run.settings.seed)
    bins = kept(fits.design, key, lambda: pairs_of(fits.design, fits.run.child("variogram pairs")))
    response = at_sites(fits.response)
    null = bins.read(simulated(response, fits, "variogram", DRAWS))
    centre, spread = null.mean(axis=1), null.std(axis=1, ddof=1)
    return bins, response, centre, spread, _departure(null, centre, spread)


def _lines(fits: Fits, bins: Bins, response: Response) -> dict[str, Line]:
    """The robust variogram, and what residuals of the fitted dependence look like on these very pairs.

    Residuals fall short of the errors, so the fitted line is the mean of residual variograms of draws, never
    the covariance itself, from which the sill would be read too low.
    """
    x = floats(bins.distance)
    lines = {"robust": (x, floats(bins.robust(response)))}
    node = frozenset({"spatial"})
    if "spatial" not in fits.components or bins.forms[0].shape[0] > ALL_PAIRS:
        return lines
    model, algebra, design = fits[node], fits.algebra(node), fits.design
    rng = fits.run.child("variogram of the fitted dependence")
    errors = algebra.draw(model.theta[:, 0], float(model.sigma2[0]), rng, DRAWS)
    e = design.basis.project(errors)
    drawn = Response(design, np.zeros((design.p, DRAWS)), e, np.einsum("ij,ij->j", e, e))
    return lines | {"fitted": (x, floats(bins.read(at_sites(drawn)).mean(axis=1)))}


def _departure(values: Array, centre: Array, spread: Array) -> Array:
    """(B,) largest |γ − centre| / spread over the bins."""
    return np.asarray(np.max(np.abs(values - centre[:, None]) / spread[:, None], axis=0))
