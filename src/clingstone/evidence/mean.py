"""The mean in doubt: curves, trends and surfaces, tested plainly and under the fitted dependence."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import special, stats

from clingstone.covariance.each import each
from clingstone.design.derived import extend, onto
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import freedom, p_value, percent, percent_bounds, significant
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.read import Plain, around, by_f, degenerate, floats
from clingstone.maths.once import Array, lately
from clingstone.needs import Family, Needs, NotSupported
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

KNOTS = 6  # natural cubic spline: 4 columns beyond the line (METHODS: 4–5 beyond linear)
TREND_KNOTS = 4  # 2 columns beyond the line: a trend is slow by definition
CURVE_BINS = 20


def natural_spline(x: Array, knots: int) -> Array:
    """(n, k) columns of a natural cubic spline beyond the line, knots at quantiles of distinct values.

    The truncated-power form that is linear beyond the outer knots (Stone & Koo 1985); x is scaled
    to 0 … 1 first. Fewer distinct values give fewer knots; below 3 there is no curve.
    """
    distinct = np.unique(x)
    count = min(knots, len(distinct))
    if count < 3:
        raise NotSupported(f"{len(distinct)} distinct values cannot show a curve", "3 would be needed.")
    span = distinct[-1] - distinct[0]
    u, d = (x - distinct[0]) / span, (distinct - distinct[0]) / span
    t = d if count == len(d) else np.quantile(d, np.linspace(0.05, 0.95, count))

    def cube(at: float) -> Array:
        d = np.maximum(u - at, 0.0)
        return np.asarray(d * d * d)

    last, before = float(t[-1]), float(t[-2])
    columns = [
        cube(float(k))
        - cube(before) * (last - k) / (last - before)
        + cube(last) * (before - k) / (last - before)
        for k in t[:-2]
    ]
    return np.stack(columns, axis=1)


def plane(sites: Sites) -> Array:
    """(S, 2) coordinates for a surface: as given and scaled, or east and north on the tangent plane."""
    if sites.kind == "planar":
        centred = sites.xy - sites.xy.mean(axis=0)
        return np.asarray(centred / max(float(np.abs(centred).max()), 1e-300))
    points = sites.points / np.linalg.norm(sites.points, axis=1, keepdims=True)
    centre = points.mean(axis=0)
    if np.linalg.norm(centre) < 0.5:
        raise NotSupported("the sites go around the globe, so no plane fits them")
    up = centre / np.linalg.norm(centre)
    east = np.cross([0.0, 0.0, 1.0], up)
    east = east / np.linalg.norm(east) if np.linalg.norm(east) > 1e-6 else np.array([0.0, 1.0, 0.0])
    flat = points @ np.stack([east, np.cross(up, east)], axis=1)
    return np.asarray(flat / max(float(np.abs(flat).max()), 1e-300))


@lately
def extension(design: Design, test: str, about: str) -> Design:
    """The design with the columns at which a mean test looks: the one that a repaired mean refits.

    test, about : ``functional-form`` and a covariate, ``trend`` and "", ``trend-surface`` and
    "linear" or "quadratic". Raises NotSupported where the model already spans them.
    """
    if test == "functional-form":
        x = np.asarray(design.covariates[about], dtype=float)
        return extend(design, f"curve in {about}", np.column_stack([x, natural_spline(x, KNOTS)]), (about,))
    if test == "trend":
        assert design.serial is not None
        t = design.serial.elapsed
        name = design.serial.name
        return extend(design, f"trend in {name}", np.column_stack([t, _bend(t)]), (name,))
    assert design.spatial is not None
    x, y = plane(design.spatial)[design.spatial.part.codes].T
    columns = [x, y] if about == "linear" else [x, y, x * x, x * y, y * y]
    return extend(design, f"{about} surface", np.column_stack(columns), design.spatial.names)


def _bend(t: Array) -> Array:
    return natural_spline(t, TREND_KNOTS) if len(np.unique(t)) >= 3 else np.zeros((len(t), 0))


def f_test(fits: Fits, wide: Design) -> tuple[Array, int, int]:
    """Ordinary F (B,) of the added columns, with its two degrees of freedom."""
    q, df2 = wide.p - fits.design.p, wide.m
    if df2 < 2:
        raise NotSupported(f"{df2} degrees of freedom would be left", "More rows would be needed.")
    rest = onto(fits.response, wide).ss
    lost = degenerate(fits.response)
    with np.errstate(divide="ignore", invalid="ignore"):
        F = (np.maximum(fits.response.ss - rest, 0.0) / q) / (rest / df2)
    return np.where(lost, np.nan, F), q, df2


def f_test_given(fits: Fits, wide: Design, node: frozenset[str]) -> tuple[Array, int, int]:
    """Generalised least squares F of the added columns, V̂ fitted without them and held (§ "null V̂").

    With V̂ from the unextended model the test keeps its size for functions of covariates; V̂ refitted
    with the columns in it rejects too often. F = γ'Ĉ⁻¹γ/q at scale σ̂² of the extended model.
    """
    q, df2 = wide.p - fits.design.p, wide.m
    if df2 < 2:
        raise NotSupported(f"{df2} degrees of freedom would be left", "More rows would be needed.")
    model, wide_fits = fits[node], fits.onto(wide)
    algebra, response = wide_fits.algebra(node), wide_fits.response
    F = np.full(response.B, np.nan)
    lost = degenerate(fits.response)
    many = each(algebra, response) if response.B > 1 and len(model.theta) else None
    if many is not None:
        here = np.flatnonzero(~lost)
        grams = many.grams(model.theta[:, here], here)
        F[here] = _added_f(grams.QQ, grams.QE, grams.EE, response.coef[:, here].T, q, df2)
        return F, q, df2
    for b in np.flatnonzero(~lost):
        one = response.column(int(b)) if response.B > 1 else response
        gram = algebra.gram(model.theta[:, b], one)
        F[b] = _added_f(gram.QQ[None], gram.QE.T, gram.EE, one.coef.T, q, df2)[0]
    return F, q, df2


def _added_f(QQ: Array, QE: Array, EE: Array, coef: Array, q: int, df2: int) -> Array:
    """(K,) F of the last q of p columns; QQ (K, p, p), QE, coef (K, p), EE (K,)."""
    inverse = np.linalg.inv(QQ)
    move = np.einsum("kij,kj->ki", inverse, QE)
    gamma = (coef + move)[:, -q:]
    scale = (EE - np.einsum("kp,kp->k", QE, move)) / df2
    block = np.linalg.solve(inverse[:, -q:, -q:], gamma[..., None])[..., 0]
    return np.asarray(np.einsum("kq,kq->k", gamma, block) / q / scale)


def explained(F: Array, q: int, df2: int, confidence: float) -> tuple[Array, Array, Array]:
    """Partial R² = qF/(qF + df2) and its interval from the noncentral F, each (B,).

    The noncentrality at which F lies at a quantile gives ncp/(ncp + q + df2 + 1) (Smithson 2003).
    """
    estimate = q * F / (q * F + df2)
    total = q + df2 + 1

    def end(level: float) -> Array:
        out = np.zeros_like(F)
        known = ~np.isnan(F)
        # At ncp = 0 the probability of a smaller F is largest; below the level the end is 0.
        solve = known & (special.fdtr(q, df2, np.where(known, F, 0.0)) > level)
        out[solve] = _noncentrality(F[solve], q, df2, level)
        return np.where(known, out / (out + total), np.nan)

    alpha = 1 - confidence
    return around(estimate, end(1 - alpha / 2), end(alpha / 2), np.isnan(F))


def _noncentrality(F: Array, q: int, df2: int, level: float) -> Array:
    """ncp with P(F' ≤ F | ncp) = level, by bisection: the library's inverse is not always convergent."""
    low, high = np.zeros_like(F), np.maximum(4 * q * F + 40.0, 10.0)
    for _ in range(60):
        if not np.any(stats.ncf.cdf(F, q, df2, high) > level):
            break
        high = np.where(stats.ncf.cdf(F, q, df2, high) > level, 2 * high, high)
    for _ in range(40):
        mid = (low + high) / 2
        above = stats.ncf.cdf(F, q, df2, mid) > level
        low, high = np.where(above, mid, low), np.where(above, high, mid)
    return np.asarray((low + high) / 2)


def added(fits: Fits, wide: Design, given: frozenset[str], caveats: tuple[str, ...]) -> Reading:
    """F of the columns that a wider design adds, its size the share that they explain."""
    F, q, df2 = f_test_given(fits, wide, given) if given else f_test(fits, wide)
    estimate, low, high = explained(F, q, df2, fits.run.settings.confidence)
    method = "F, dependence fitted without the added columns and held" if given else "exact F"
    return replace(
        by_f(F, q, df2, method),
        estimate=estimate,
        estimate_name="share of the residual variance that the added columns explain",
        low=low,
        high=high,
        n_used=fits.design.n,
        caveats=caveats,
    )


@dataclass(frozen=True)
class FunctionalForm(Plain):
    """A natural cubic spline in one numeric covariate, added to the model: ordinary F, and F given V̂."""

    id: str = "functional-form"
    family: Family = "mean"
    null: str = "The mean follows the model as it stands."
    alternative: str = "A smooth curve in the covariate improves the mean."
    needs: Needs = field(default=Needs(frozenset(), {"residual df": 8}, known_design=True))
    source: str = "stone-koo-1985"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(
            About(name, f"a curve in {name}", primary=False)
            for name, x in design.covariates.items()
            if len(np.unique(x)) >= 3
        )

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        node = fits.full_node
        return (node,) if node else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        wide = extension(fits.design, self.id, about.key)
        return added(fits, wide, given, self.caveats(bool(given), fits))

    def caveats(self, given: bool, fits: Fits) -> tuple[str, ...]:
        if given:
            return ()
        declared = [p for p in ("group", "serial", "spatial") if getattr(fits.design, p) is not None]
        words = "It takes the rows as independent, so dependence alone can make its p small."
        return (words,) if declared else ()

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return function_curve(fits, about.key, fits.design.covariates[about.key], self.id)

    def sentence(self, reading: Reading, about: About) -> str:
        share = percent(column(reading.estimate))
        share += percent_bounds(column(reading.low), column(reading.high))
        words = about.words[:1].upper() + about.words[1:]
        return (
            f"{words} would explain {share} of what the model leaves over "
            f"(F = {significant(column(reading.statistic))} on {freedom(reading.df, reading.df2)}, "
            f"{p_value(column(reading.p))})."
        )


@dataclass(frozen=True)
class Trend(FunctionalForm):
    """A slow trend in elapsed time (a line and two bends): ordinary F, and F given V̂.

    Given V̂ it is conservative: one smooth error and one smooth trend look the same.
    """

    id: str = "trend"
    null: str = "The mean does not drift with time beyond the model."
    alternative: str = "The mean drifts slowly with time."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"residual df": 8}, known_design=True))

    def abouts(self, design: Design) -> tuple[About, ...]:
        assert design.serial is not None
        return (About("", f"a slow trend in {design.serial.name}", primary=False),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        assert fits.design.serial is not None
        times = len(fits.design.serial.times[0])
        if times < 5:
            raise NotSupported(f"{times} distinct times cannot show a trend", "5 would be needed.")
        return super().read(fits, about, given)

    def caveats(self, given: bool, fits: Fits) -> tuple[str, ...]:
        if not given:
            return super().caveats(given, fits)
        return ("A slow trend and slow dependence are hard to tell apart, so its p is seldom small.",)

    def curve(self, fits: Fits, about: About) -> Curve | None:
        serial = fits.design.serial
        assert serial is not None
        if serial.name in fits.design.covariates:
            return None  # the curve in that covariate shows it
        return function_curve(fits, about.key, serial.elapsed, self.id)


@dataclass(frozen=True)
class TrendSurface(Trend):
    """A linear or quadratic surface in the coordinates: ordinary F, and F given V̂."""

    id: str = "trend-surface"
    null: str = "The mean does not drift over the map beyond the model."
    alternative: str = "The mean drifts smoothly over the map."
    needs: Needs = field(default=Needs(frozenset({"spatial"}), {"sites": 12}, known_design=True))

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(
            About(kind, f"a {kind} surface over the map", primary=False) for kind in ("linear", "quadratic")
        )

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        return FunctionalForm.read(self, fits, about, given)

    def caveats(self, given: bool, fits: Fits) -> tuple[str, ...]:
        if not given:
            return FunctionalForm.caveats(self, given, fits)
        return ("A smooth surface and smooth dependence are hard to tell apart, so its p is seldom small.",)

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return None


def function_curve(fits: Fits, key: str, x: Array, test: str) -> Curve | None:
    """Mean partial residual in bins of x with its interval; what the model has there, and what the
    added columns would make of it.

    The partial residual adds to the residual what the terms in this variable alone contribute, taken
    from its mean, and is the residual itself where the model has no such term.
    """
    response = fits.response
    if bool(degenerate(response)[0]):
        return None
    wide = onto(response, extension(fits.design, test, key))
    added = response.residual[:, 0] - wide.residual[:, 0]
    serial = fits.design.serial
    own = contribution(response, key or (serial.name if serial is not None else ""))
    edges = np.unique(x)
    if len(edges) > CURVE_BINS:
        edges = np.unique(np.quantile(x, np.linspace(0, 1, CURVE_BINS + 1))[1:-1])
    codes = np.searchsorted(edges, x, side="left")
    size = np.bincount(codes).astype(float)
    filled = np.flatnonzero(size)
    size = size[filled]

    def mean(v: Array) -> Array:
        return np.asarray(np.bincount(codes, weights=v)[filled] / size)

    half = special.stdtrit(wide.design.m, 0.5 + fits.run.settings.confidence / 2) * np.sqrt(
        float(wide.s2[0]) / size
    )
    at, fitted = mean(x), mean(own)
    y = mean(response.residual[:, 0]) + fitted
    return Curve(
        kind="function",
        x=floats(at),
        y=floats(y),
        low=floats(y - half),
        high=floats(y + half),
        size=floats(size),
        x_name=key or (serial.name if serial is not None else ""),
        y_name="mean partial residual" if np.any(own) else "mean residual",
        unit=serial.unit if test == "trend" and serial is not None else "",
        lines={
            "repaired": (floats(at), floats(fitted + mean(added))),
            "fitted": (floats(at), floats(fitted)),
        },
    )


def contribution(response: Response, key: str) -> Array:
    """(n,) what the terms made of one variable alone add to the fit, less its mean; else zeros."""
    design = response.design
    columns = [j for t in design.terms if t.variables == (key,) for j in t.columns]
    if not columns:
        return np.zeros(design.n)
    b = design.basis.coefficients(response.coef)[:, 0]
    added = design.Q @ (design.basis.R[:, columns] @ b[columns])
    if design.root is not None:
        added = added / design.root
    return np.asarray(added - added.mean())
