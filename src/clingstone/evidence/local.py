"""Where on the map likeness sits: each site against its neighbours, false discoveries controlled."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import count, p_value
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, degenerate, floats
from clingstone.evidence.sites import CURVE_SITES, at_sites, neighbours_of, sites_of, stand_by, unusable
from clingstone.maths.longrun import ANGLE, WEIGHT
from clingstone.maths.once import Array, once
from clingstone.needs import Family, Needs

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

LEVEL = 0.05


@dataclass(frozen=True, eq=False)
class Pairs:
    """Per site the two eigenvalues of its projected form, which has rank two (Tiefelsdorf 2002)."""

    low: Array
    high: Array


@once
def pairs(design: Design, key: str) -> Pairs:
    """With u = Me_i and v = Mw_i the form is (uv' + vu')/2: eigenvalues ½(u'v ± |u||v|), (S,) each."""
    W, Q = neighbours_of(design, key).W, design.Q
    WQ = np.asarray(W @ Q)
    uu = 1.0 - np.einsum("ij,ij->i", Q, Q)
    vv = np.asarray(W.multiply(W).sum(axis=1)).ravel() - np.einsum("ij,ij->i", WQ, WQ)
    uv = W.diagonal() - np.einsum("ij,ij->i", Q, WQ)
    size = np.sqrt(np.maximum(uu * vv, 0.0))
    return Pairs(0.5 * (uv - size), 0.5 * (uv + size))


def contributions(response: Response, key: str) -> Array:
    """(S, B) e_i(We)_i/e'e; NaN where nothing is left over."""
    e = response.residual
    ss = np.where(degenerate(response), np.nan, response.ss)
    return np.asarray(e * (neighbours_of(response.design, key).W @ e) / ss)


def log_tails(low: Array, high: Array, m: int, t: Array) -> tuple[Array, Array]:
    """Logarithms of P(T < t) and P(T > t) for T with eigenvalues low < 0 < high and zero (m − 2 times).

    Exact: beyond zero, Σ μ_j z_j² with μ = eigenvalue − t has one positive weight, so its tail is one smooth
    integral over an angle (Bakirov & Székely 2006), here by Gauss's rule for all sites at once. T is far too
    skew for a normal law, and permuting residuals is no way out. low and high broadcast against t.
    """
    up = t >= 0
    ahead, behind = np.where(up, high, -low), np.where(up, low, -high)
    size = np.abs(t)
    room = ahead - size
    with np.errstate(divide="ignore", invalid="ignore"):
        one, many = (size - behind) / room, size / room
        total = np.zeros(np.broadcast(room, t).shape)
        for angle, weight in zip(ANGLE, WEIGHT, strict=True):
            x = np.cos(angle) ** 2
            total += weight * np.cos(angle) * np.exp(-0.5 * (m - 2) * np.log1p(many / x)) / np.sqrt(x + one)
        small = np.where(room > 0, np.log(2 / np.pi * total), -np.inf)
        large = np.log1p(-np.minimum(np.exp(small), 1.0))
    lost = np.isnan(t)
    small, large = np.where(lost, np.nan, small), np.where(lost, np.nan, large)
    return np.where(up, large, small), np.where(up, small, large)


def benjamini_yekutieli(p: Array) -> Array:
    """Adjusted p along axis 0, valid whatever the dependence between them (2001)."""
    m = len(p)
    order = np.argsort(p, axis=0)
    ranked = np.take_along_axis(p, order, axis=0)
    rank = np.arange(1, m + 1).reshape(m, *([1] * (p.ndim - 1)))
    factor = m * np.sum(1.0 / np.arange(1, m + 1)) / rank
    stepped = np.minimum(np.minimum.accumulate((ranked * factor)[::-1], axis=0)[::-1], 1.0)
    out = np.empty_like(p)
    np.put_along_axis(out, order, stepped, axis=0)
    return out


def adjusted(response: Response, key: str) -> Array:
    """(S, B) two-sided p of every site, adjusted; islands have p = 1."""
    design = response.design
    found = pairs(design, key)
    t = contributions(response, key)
    lower, upper = log_tails(found.low[:, None], found.high[:, None], design.m, t)
    p = np.minimum(2 * np.exp(np.minimum(lower, upper)), 1.0)
    alone = np.diff(neighbours_of(design, key).W.indptr) == 0
    p[alone] = 1.0
    return benjamini_yekutieli(p)


@dataclass(frozen=True)
class Local(Plain):
    """Local contributions to Moran's I, each with its own law given X; p by Benjamini & Yekutieli.

    With dependence over the whole map they show where it is strongest, not where it exists alone. The
    size is the share of sites that stand out.
    """

    id: str = "local"
    family: Family = "spatial"
    null: str = "No site is more like its neighbours, or less, than independent data would be."
    alternative: str = "Some sites are more like their neighbours, or less, than independent data would be."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 20}))
    source: str = "anselin-1995"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(About(nb.key, nb.about) for nb in design.neighbours[:1])

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        unusable(fits.design, about.key)
        response = at_sites(fits.response)
        p = adjusted(response, about.key)
        marked = p < LEVEL
        lost = degenerate(response)
        rows: tuple[int, ...] = ()
        if marked[:, 0].any() and not lost[0]:
            part = sites_of(fits.design).part
            rows = tuple(int(r) for r in np.flatnonzero(marked[part.codes, 0]))
        shown = np.where(lost, np.nan, marked.sum(axis=0))
        return Reading(
            statistic=shown,
            statistic_name="sites that stand out",
            p=np.where(lost, np.nan, p.min(axis=0)),
            p_method="exact at each site, false discovery rate under any dependence",
            estimate=shown / len(p),
            estimate_name="share of sites that stand out from independent data",
            n_used=response.design.n,
            caveats=(
                *stand_by(fits, neighbours_of(fits.design, about.key)),
                "Where the whole map hangs together, this shows where it does so most.",
            ),
            rows=rows,
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        """The map of sites: size the mean residual, low the adjusted p, labels what stands out and how."""
        response, sites = at_sites(fits.response), sites_of(fits.design)
        p = adjusted(response, about.key)[:, 0]
        if not np.any(p < LEVEL):
            return None
        values = fits.response.sums(sites.part)[:, 0] / fits.design.sizes(sites.part)
        words = _words(response, about.key, p)
        shown = np.arange(sites.count)
        if len(shown) > CURVE_SITES:  # every site that stands out, and evenly the others
            some = np.unique(np.linspace(0, sites.count - 1, CURVE_SITES).round().astype(int))
            shown = np.union1d(some, np.flatnonzero(p < LEVEL))
        return Curve(
            kind="local-map",
            x=floats(sites.xy[shown, 0]),
            y=floats(sites.xy[shown, 1]),
            low=floats(p[shown]),
            size=floats(values[shown]),
            labels=tuple(words[i] for i in shown),
            x_name=sites.names[0],
            y_name=sites.names[1],
            unit=sites.unit if sites.kind == "planar" else "degrees",
        )

    def sentence(self, reading: Reading, about: About) -> str:
        found, S = int(column(reading.statistic)), reading.n_used
        p = p_value(column(reading.p))
        if not found:
            return f"No single site stands out from its neighbours ({about.words}); least adjusted {p}."
        verb = "stands" if found == 1 else "stand"
        return (
            f"{count(found, 'site')} of {S:,} {verb} out, being more like the neighbours ({about.words}) "
            f"or less than independent data would be (least adjusted {p})."
        )


def _words(response: Response, key: str, p: Array) -> list[str]:
    """What each site that stands out is, in words; "" for the others."""
    e = response.residual[:, 0]
    around = np.asarray(neighbours_of(response.design, key).W @ e)
    say = {
        (True, True): "above the fit, as its neighbours are",
        (False, False): "below the fit, as its neighbours are",
        (True, False): "above the fit among sites below it",
        (False, True): "below the fit among sites above it",
    }
    return [
        say[bool(own > 0), bool(near > 0)] if small else ""
        for own, near, small in zip(e, around, p < LEVEL, strict=True)
    ]
