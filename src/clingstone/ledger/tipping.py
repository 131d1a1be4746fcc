"""Tipping points: how strong a dependence would have to be for a focus interval to take in zero.

The ordinary estimate is held, its variance is that under V(s), and σ² is scaled to the observed e'e:
Var(s) = e'e/tr(MV) · w'Q'VQw with w = R⁻ᵀc. Everything is linear in Q'KQ and tr MK of the structures, so
a scan over hundreds of values costs no fit.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.interpolate import CubicSpline

from clingstone.covariance.components import Component
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import NBSP, percent, significant
from clingstone.evidence.anova import absorbed
from clingstone.ledger.consequence import trace_of
from clingstone.ledger.entries import Ledger, Tipping
from clingstone.maths import matern
from clingstone.maths.once import Array
from clingstone.remedies.remedy import rows
from clingstone.structure.spatial import EARTH_RADIUS_KM

MOST = 0.95  # largest correlation or share that is tried
NODES = 17  # values of a shape parameter at which Q'KQ is worked out; a spline between them
GRID = 25  # values of each of two structures that are varied together
ACROSS = 1 / 3  # practical range over the map's width where none was estimated


@dataclass(frozen=True, eq=False)
class Scan:
    """One structure over a grid of its parameter.

    s (P,) : share, ρ, or practical range. mixed (P, p, p) : Q'VQ. trace (P,) : tr MV.
    freedom : w → (P,) degrees of freedom of the variance of w'β̂. name, size, where : words, "an
    intraclass correlation", "between rows of one ward".
    """

    key: str
    s: Array
    mixed: Array
    trace: Array
    freedom: Callable[[Array], Array]
    name: str
    size: str
    where: str
    unit: str = ""

    def gap(self, fits: Fits, w: Array) -> Array:
        """(P,) distance of the interval of w'β̂ from zero; negative where it takes in zero."""
        return _gap(fits, w, self.mixed, self.trace, self.freedom(w))

    def told(self, value: float) -> str:
        if self.name == "spatial share":
            return percent(value)
        return f"{significant(value)}{NBSP + self.unit if self.unit else ''}"


def tipping(fits: Fits, ledger: Ledger, focus: tuple[str, ...]) -> tuple[Tipping, ...]:
    """For each focus row: by each structure alone, and by two together where two were fitted.

    Groups by the intraclass correlation, order by ρ, places by their share at the range that was
    estimated and by the range at the share that was estimated. The t quantile has m degrees of freedom
    along a series; with groups those of Satterthwaite's combination of what varies between and within
    them, so that a term of groups is judged by the number of groups; with places those of e'e under V.
    """
    keys = tuple(k for k in fits.components if k in fits.full_node)
    scans = [scan for key in keys for scan in _scans(fits, ledger, key)]
    out = [_tip(fits, scan, term) for scan in scans for term in focus]
    if len(keys) == 2:
        pair = [next((scan for scan in scans if scan.key == key), None) for key in keys]
        if pair[0] is not None and pair[1] is not None and not _slope(keys):
            out += _together(fits, ledger, pair[0], pair[1], focus)
    return tuple(out)


def _slope(keys: tuple[str, ...]) -> bool:
    return any(key.startswith("slope") for key in keys)


def _scans(fits: Fits, ledger: Ledger, key: str) -> list[Scan]:
    component = fits.components[key]
    if key == "serial" and not component.repeats:
        return [_series(fits, component)]
    if key == "spatial":
        return _places(fits, ledger)
    return [_alike(fits, component)] if key == "serial" or key.startswith("group:") else []


# ---- one structure ---------------------------------------------------------------------------


def _alike(fits: Fits, component: Component) -> Scan:
    """V = (1 − s)I + sK of rows of one group, or of rows that share a time, whose K is held as fitted."""
    design, key = fits.design, component.key
    s = np.linspace(0.0, MOST, 96)
    spread = fits.algebra(frozenset({key})).spread(key, fits[{key}].theta[:, 0])
    mixed, trace = _mixture(design, s, spread, trace_of(design, key))
    return Scan(
        key,
        s,
        mixed,
        trace,
        lambda w: _freedom(design, component, w, s),
        "intraclass correlation",
        "an intraclass correlation",
        f"between rows of one {'time' if component.repeats else _one(component.label)}",
    )


def _mixture(design: Design, s: Array, spread: Array, trace: float) -> tuple[Array, Array]:
    """Q'VQ (P, p, p) and tr MV (P,) of V = (1 − s)I + sK."""
    mixed = (1 - s)[:, None, None] * np.eye(design.p) + s[:, None, None] * spread
    return mixed, (1 - s) * design.n + s * trace - np.einsum("Bpp->B", mixed)


def _series(fits: Fits, component: Component) -> Scan:
    """V = K(ρ) from 0 to 0.95, where rows of a series follow each other one by one."""
    design, algebra = fits.design, fits.algebra(frozenset({"serial"}))
    bound = algebra.parameters[0]
    theta = np.linspace(bound.low, bound.high, 401)[None]
    rho = np.asarray(algebra.shape(theta)["serial.rho"], dtype=float)
    order = np.argsort(rho)
    order = order[(rho[order] > 0) & (rho[order] <= MOST)]
    grid, nodes = (order[np.unique(np.linspace(0, len(order) - 1, k).astype(int))] for k in (60, NODES))
    spread = np.array([algebra.spread("serial", theta[:, i]) for i in nodes])
    known, left = _mixture(design, rho[nodes], spread, trace_of(design, "serial"))  # K = (1 − ρ)I + ρ·spread
    # Q'KQ, unlike the spread alone, is bounded for unequal steps too and bends slowly along the working
    # parameter: a spline over some of it serves the rest.
    if theta[0, nodes[0]] > theta[0, nodes[-1]]:  # a rate falls as the correlation rises
        nodes, known, left = nodes[::-1], known[::-1], left[::-1]
    at, p = theta[0, nodes], design.p
    between = CubicSpline(at, np.column_stack([known.reshape(len(at), -1), left]))(theta[0, grid])
    s = np.r_[0.0, rho[grid]]
    mixed = np.concatenate([np.eye(p)[None], between[:, :-1].reshape(-1, p, p)])
    trace = np.r_[float(design.n - p), between[:, -1]]
    whole = np.full(len(s), float(design.m))
    return Scan(
        "serial",
        s,
        mixed,
        trace,
        lambda w: whole,
        "ρ",
        "a correlation from one step to the next",
        f"along {component.label}",
    )


def _places(fits: Fits, ledger: Ledger) -> list[Scan]:
    """The share at the estimated range, then the range at the estimated share, up to half the map's width."""
    design, sites = fits.design, fits.design.spatial
    if sites is None or sites.count > fits.run.limits.dense_sites:
        return []
    reach = ledger.parameter("spatial", "practical range")
    share = ledger.share("spatial")
    found = share is not None and share.share > 0.01 and reach is not None and np.isfinite(reach.estimate)
    held = reach.estimate if found and reach is not None else ACROSS * sites.extent
    reaches = np.geomspace(held / 8, max(sites.extent / 2, held), NODES)
    s = np.linspace(0.0, MOST, 96)
    at = significant(held) + (NBSP + sites.unit if sites.unit else "")
    spread, first, second = _field(fits, held)
    mixed, trace = _mixture(design, s, spread, trace_of(design, "spatial"))
    df = _of_squares(s, design.m, first, second)
    where = f"of near places that fades over {at}"
    out = [Scan("spatial", s, mixed, trace, lambda w: df, "spatial share", "a share", where)]
    if not found or share is None:
        return out
    fields = [_field(fits, float(r)) for r in reaches]
    fine = np.geomspace(reaches[0], reaches[-1], 60)
    known = np.array([np.r_[m.ravel(), a, b] for m, a, b in fields])
    between = CubicSpline(np.log(reaches), known)(np.log(fine))
    spreads, ones, twos = between[:, :-2].reshape(-1, design.p, design.p), between[:, -2], between[:, -1]
    held_share = np.full(len(fine), min(share.share, MOST))
    mixed = (1 - held_share)[:, None, None] * np.eye(design.p) + held_share[:, None, None] * spreads
    trace = (1 - held_share) * design.m + held_share * ones
    df_range = _of_squares(held_share, design.m, ones, twos)
    words = f"of near places, at their share of {percent(share.share)}"
    out.append(
        Scan(
            "spatial", fine, mixed, trace, lambda w: df_range, "practical range", "a range", words, sites.unit
        )
    )
    return out


def _field(fits: Fits, reach: float) -> tuple[Array, float, float]:
    """Q'KQ, tr MK and tr MKMK of an exponential field; MKMK through Z'MZ = diag(c) − TT', T = Z'Q."""
    design, sites = fits.design, fits.design.spatial
    assert sites is not None
    straight = reach  # of a great circle the chord, in which kernels are taken
    if sites.kind != "planar":
        straight = 2 * EARTH_RADIUS_KM * np.sin(min(reach / (2 * EARTH_RADIUS_KM), np.pi / 2))
    length = straight / matern.PRACTICAL[0.5]
    R = matern.kernel(sites.distances, length)
    T, c = design.sums(sites.part), design.sizes(sites.part)
    RT = R @ T
    spread = T.T @ RT
    # tr MKMK = tr CRCR − 2 tr T'RCRT + tr (T'RT)², C = diag(c).
    R *= R
    second = c @ (R @ c) - 2 * c @ np.einsum("ij,ij->i", RT, RT) + np.sum(spread * spread)
    return spread, float(c.sum() - np.trace(spread)), float(second)


def _of_squares(s: Array, m: int, first: Array | float, second: Array | float) -> Array:
    """tr(MV)²/tr(MVMV), the degrees of freedom of e'e under V = (1 − s)I + sK (Satterthwaite 1946)."""
    one = (1 - s) * m + s * first
    two = (1 - s) ** 2 * m + 2 * s * (1 - s) * first + s**2 * second
    return np.asarray(one**2 / two)


def _gap(fits: Fits, w: Array, mixed: Array, trace: Array, df: Array) -> Array:
    t = stats.t.isf((1 - fits.run.settings.confidence) / 2, df)
    variance = float(fits.response.ss[0]) / trace * np.einsum("p,...pq,q->...", w, mixed, w)
    return np.asarray(abs(float(w @ fits.response.coef[:, 0])) - t * np.sqrt(variance))


def _contrast(fits: Fits, term: str) -> Array:
    names, weights = rows(fits.design)
    return np.asarray(fits.design.basis.contrast(weights[names.index(term)]))


def _tip(fits: Fits, scan: Scan, term: str) -> Tipping:
    named = f"“{term}”" if ":" in term else term
    w = _contrast(fits, term)
    gap = scan.gap(fits, w)
    plain = _gap(
        fits, w, np.eye(fits.design.p), np.array(float(fits.design.m)), np.array(float(fits.design.m))
    )
    if plain <= 0:
        sentence = f"The ordinary interval of {named} takes in zero without any dependence."
        return Tipping(term, scan.key, scan.name, None, sentence)
    crossed = np.flatnonzero(gap <= 0)
    if not crossed.size:
        most = scan.told(float(scan.s[-1])) if scan.name != "ρ" else f"{MOST:g}"
        sentence = (
            f"Not even {scan.size} of {most} {scan.where} would make the interval of {named} take in zero."
        )
        return Tipping(term, scan.key, scan.name, None, sentence)
    value = _crossing(scan.s, gap, int(crossed[0]))
    till = "" if crossed[-1] == len(gap) - 1 else f" to {scan.told(float(scan.s[crossed[-1]]))}"
    over = "" if till else " or more"
    sentence = (
        f"With {scan.size} of {scan.told(value)}{till}{over} {scan.where}, the interval of {named} would "
        "take in zero."
    )
    return Tipping(term, scan.key, scan.name, value, sentence)


def _crossing(s: Array, gap: Array, i: int) -> float:
    """Where the gap closes, by a straight line between two values of the grid."""
    if i == 0:
        return float(s[0])
    return float(s[i - 1] + (s[i] - s[i - 1]) * gap[i - 1] / (gap[i - 1] - gap[i]))


# ---- two structures --------------------------------------------------------------------------


def _together(fits: Fits, ledger: Ledger, first: Scan, second: Scan, focus: tuple[str, ...]) -> list[Tipping]:
    """The border along which two structures together make a focus interval take in zero.

    ``value`` is the parameter of the second with the first at its estimate; ``border`` holds the pairs.
    A ρ is that of the row noise, which keeps the share that the other structure leaves.
    """
    held = _estimate(ledger, first)
    if held is None:
        return []
    a, b = (_thinned(scan) for scan in (first, second))
    a = np.unique(np.r_[a, held])
    out = []
    for term in focus:
        w = _contrast(fits, term)
        if first.gap(fits, w)[0] <= 0:
            continue  # said already: without any dependence
        gap = _surface(fits, w, first, second, a, b)
        border = []
        for i, row in enumerate(gap):
            crossed = np.flatnonzero(row <= 0)
            if crossed.size:
                border.append((float(a[i]), _crossing(b, row, int(crossed[0]))))
        value = next((y for x, y in border if x == held), None)
        named = f"“{term}”" if ":" in term else term
        start = f"With {first.size} of {first.told(held)} {first.where}, as estimated,"
        if value is None:
            most = second.told(float(b[-1]))
            told = (
                f"not even {second.size} of {most} {second.where} would make the interval of {named} take in"
            )
            sentence = f"{start} {told} zero."
        elif value <= b[0]:
            sentence = f"{start} the interval of {named} takes in zero already."
        else:
            told = f"{second.size} of {second.told(value)} or more {second.where}"
            sentence = f"{start} {told} would make the interval of {named} take in zero."
        key, name = f"{first.key} + {second.key}", f"{first.name} and {second.name}"
        out.append(Tipping(term, key, name, value, sentence, tuple(border)))
    return out


def _estimate(ledger: Ledger, scan: Scan) -> float | None:
    share = ledger.share(scan.key)
    if scan.name == "spatial share":
        return None if share is None else min(share.share, MOST)
    found = ledger.parameter(scan.key, scan.name)
    return None if found is None else float(np.clip(found.estimate, 0.0, MOST))


def _thinned(scan: Scan) -> Array:
    return np.linspace(scan.s[0], scan.s[-1], GRID)


def _surface(fits: Fits, w: Array, first: Scan, second: Scan, a: Array, b: Array) -> Array:
    """(len(a), len(b)) gaps; V = Σ shares of structures, the rest row noise, which a ρ correlates."""
    design = fits.design
    form = {scan.key: np.einsum("p,Bpq,q->B", w, scan.mixed, w) for scan in (first, second)}
    values = {}
    for scan, at in ((first, a), (second, b)):
        values[scan.key] = [np.interp(at, scan.s, v) for v in (form[scan.key], scan.trace, scan.freedom(w))]
    size, m = float(w @ w), float(design.m)
    A, B = a[:, None], b[None]
    fa, ta, da = (v[:, None] for v in values[first.key])
    fb, tb, db = (v[None] for v in values[second.key])
    # Each scan holds (1 − s)I + sK, but that of a series K(ρ) itself.
    if second.name == "ρ":
        left = 1 - A  # V = (1 − a)K(ρ) + aK
        quadratic, trace, ok = left * fb + fa - left * size, left * tb + ta - left * m, B <= MOST
    elif first.name == "ρ":
        left = 1 - B
        quadratic, trace, ok = left * fa + fb - left * size, left * ta + tb - left * m, A <= MOST
    else:  # V = (1 − a − b)I + aK + bK'
        quadratic, trace, ok = fa + fb - size, ta + tb - m, A + B <= MOST
    t = stats.t.isf((1 - fits.run.settings.confidence) / 2, np.minimum(da, db))
    with np.errstate(invalid="ignore", divide="ignore"):
        wide = t * np.sqrt(float(fits.response.ss[0]) / trace * quadratic)
    return np.where(ok, abs(float(w @ fits.response.coef[:, 0])) - wide, np.inf)


def _freedom(design: Design, component: Component, w: Array, s: Array) -> Array:
    """(P,) degrees of freedom of the variance of w'β̂ at every intraclass correlation.

    Its parts between and within groups are estimated by their own mean squares, with r and n − rank[X, Z]
    degrees of freedom (Satterthwaite 1946); at s = 0 they are one and have m.
    """
    whole = np.full(len(s), float(design.m))
    part = None if component.key == "serial" else design.partitions.get(component.part)
    if part is None:
        return whole
    inner = absorbed(design, part)
    df1, df2 = part.count + inner.p - design.p, design.n - part.count - inner.p
    if df1 < 1 or df2 < 1:
        return whole
    sizes = design.sizes(part)
    between = float(np.sum((design.sums(part) @ w) ** 2 / sizes) / (w @ w))
    n0 = float(sizes.sum() - np.sum(design.sums(part) ** 2)) / df1
    a = between * (1 + s * (n0 - 1))
    b = (1 - between) * (1 - s)
    df = (a + b) ** 2 / (a**2 / df1 + b**2 / df2)
    return np.where(s > 0, df, whole)


def _one(label: str) -> str:
    """The inner name of a nested level."""
    return label.split("/")[-1]
