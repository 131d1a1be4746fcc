"""Mixed models in which slopes vary between groups, by restricted maximum likelihood."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.covariance.algebras import choose
from clingstone.covariance.components import declared, on_request, slope_key
from clingstone.covariance.information import affordable, ingredients
from clingstone.covariance.sloped import Sloped
from clingstone.covariance.slopedeach import SlopedEach
from clingstone.design.design import Design, rows_of
from clingstone.design.response import Response
from clingstone.display import MINUS
from clingstone.maths import curvature, reml
from clingstone.maths.kenward import Kenward
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.columns import DEAR, FLAT, RULES, Column, FittedReady, Rule, apart, plain_df
from clingstone.remedies.glseach import read_each
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Flags, Plain, Price
from clingstone.remedies.words import profiled

if TYPE_CHECKING:
    from clingstone.covariance.algebras import Chosen
    from clingstone.covariance.fits import ErrorModel, Fits

BY = " by "  # "day by patient": slopes of day that vary between patients
AND = " and "
MOST = 3  # slopes fitted together


@dataclass(frozen=True, eq=False, kw_only=True)
class SlopeReady(FittedReady):
    """A mixed model over one design; the error model comes from ``Fits`` at each reading."""

    remedy: MixedSlope

    kenward: bool

    def fit(self, fits: Fits) -> Estimates:
        node = self.remedy.node(fits)
        algebra = fits.algebra(node)
        if fits.response.B > 1 and isinstance(algebra, Sloped) and len(algebra.levels) == 1:
            return read_each(self, self.remedy.df, fits, SlopedEach(algebra, fits.response))
        model = fits[node]
        ys = enumerate(apart(fits.response))
        columns = [self.column_at(fits, algebra, y, model.theta[:, b], model.at_bound[:, b]) for b, y in ys]
        return self.estimates(
            columns,
            fits.run.settings.confidence,
            np.asarray(np.any(model.at_bound, axis=0)),
            np.asarray(model.converged, dtype=bool),
            boundary_notes(algebra, model),
        )

    def column_at(self, fits: Fits, algebra: Chosen, y: Response, theta: Array, bound: Flags) -> Column:
        """One column of y at its REML estimate θ (d,), with the coordinates that are at a bound."""
        here = algebra.gram(theta, y)
        m = self.design.m
        coef = y.coef[:, 0] + reml.reduced(here)[0][:, 0]
        s2 = float(reml.scale(here, m)[0])
        if (df := plain_df(self.remedy.df, m)) is not None:
            return Column.even(coef, np.asarray(s2 * np.linalg.inv(here.QQ)), df)
        if self.kenward and (found := kenward(algebra, theta, s2)) is not None:
            # At a bound the adjustment would treat it as an ordinary estimate: Φ is kept.
            return Column.kenward(coef, found.phi if bound.any() else found.adjusted, found, m)
        free = [int(i) for i in np.flatnonzero(~bound)]
        bent = curvature.slopes(lambda at: algebra.gram(at, y), theta, free, m)
        return Column.bent(coef, bent, () if bent.sound else (FLAT,))

    def at_zero(self, found: Array, W: Array, bound: Flags) -> Array:
        """df at a bound are those of Kenward and Roger, as anywhere."""
        return np.clip(found, 1.0, float(self.design.m))

    def account(self, fits: Fits) -> Account:
        node = self.remedy.node(fits)
        model, algebra = fits[node], fits.algebra(node)
        level = fits.run.settings.confidence
        items = profiled(algebra, fits.response, model, level)
        items.append(("restricted log-likelihood", f"{_printed(self.design, model):.6g}".replace("-", MINUS)))
        df = {"Kenward–Roger": ", kenward-roger-1997", "Satterthwaite": ", giesbrecht-burns-1985"}
        return Account(
            estimator="generalised least squares, error parameters by restricted maximum likelihood: "
            f"{self.remedy.name}",
            covariance="σ²(X′V⁻¹X)⁻¹"
            + (", adjusted for the estimation of the variances" if self.rule == "Kenward–Roger" else ""),
            factor="σ² = e′V⁻¹e/(n − p)",
            df_rule=self.rule,
            reference="normal" if self.remedy.df == "normal" else "t",
            items=tuple(items),
            source="laird-ware-1982, harville-1977" + df.get(self.rule, ""),
        )


@dataclass(frozen=True)
class MixedSlope(Plain):
    """Random slopes with a random intercept, correlated by default, at one group level.

    Laird & Ware (1982); REML by Harville (1977); Kenward & Roger (1997) df and covariance. Every other
    level that can be estimated keeps its intercept. at : "day by patient", or "day and dose by patient".
    apart : slopes uncorrelated with the intercept, the line of a group then turning about x = 0.
    """

    df: Rule = "kenward-roger"
    apart: bool = False
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "mixed-slope"
    covers: ClassVar[frozenset[Family]] = frozenset({"group"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "laird-ware-1982"
    price: ClassVar[Price | None] = Price(900.0, 0.8)

    @property
    def name(self) -> str:
        if not self.at:
            return "random slopes"
        x, _, level = self.at.rpartition(BY)
        what = "slopes" if AND in x else "slope"
        return f"random intercept and {what} of {x} by {level}" + (", uncorrelated" if self.apart else "")

    def abouts(self, design: Design) -> tuple[str, ...]:
        """Row-level predictors at each level: all in focus together first where they are few, then each."""
        found: list[str] = []
        for level in () if design.group is None else reversed(design.group.levels):
            names = [x for x in candidates(design, level) if _stop(design, level, x, self.limits) is None]
            if 1 < len(names) <= MOST:
                found.append(AND.join(names) + BY + level.key)
            found += [x + BY + level.key for x in names]
        if found or design.group is None:
            return tuple(found)
        # Where none can be estimated the first is kept: the refusal then says why.
        finest = design.group.finest
        return tuple(x + BY + finest.key for x in candidates(design, finest)[:1])

    def keys(self, design: Design) -> tuple[str, ...]:
        """Component keys: every level's intercept and the slopes. Raises NotSupported."""
        level, names = _parsed(design, self.at)
        found, refused = declared(design, self.limits)
        own = f"group:{level.key}"
        if own not in found:
            no = refused.get(own, Refusal(f"these data have no level named {level.key}"))
            raise no.error()
        keys = [slope_key(level.key, x, self.apart) for x in names]
        for key in keys:
            on_request(design, key, self.limits)
        return (*(k for k, c in found.items() if c.family == "group"), *keys)

    def node(self, fits: Fits) -> frozenset[str]:
        return frozenset(self.keys(fits.design))

    def prepare(self, design: Design, working: ErrorModel | None = None) -> SlopeReady:
        positive_m(design)
        found, _ = declared(design, self.limits)
        together = [found.get(k) or on_request(design, k, self.limits) for k in self.keys(design)]
        algebra = choose(design, together, self.limits)  # refuses what cannot be fitted together
        names, W = reported(design)
        asked = self.df == "kenward-roger"
        kenward = asked and affordable(algebra)
        dear = asked and not kenward
        rule = RULES["satterthwaite" if dear else self.df]
        return SlopeReady(design, names, W, rule, notes=(DEAR,) if dear else (), remedy=self, kenward=kenward)

    def conventions(self) -> tuple[tuple[str, MixedSlope], ...]:
        return (
            (
                "the same fit, Satterthwaite df from the observed information",
                replace(self, df="satterthwaite"),
            ),
            ("slopes uncorrelated with intercepts", replace(self, apart=not self.apart)),
            ("the same fit, n − p df", replace(self, df="residual")),
            ("the same fit, normal quantile", replace(self, df="normal")),
        )


def kenward(algebra: Chosen, theta: Array, sigma2: float) -> Kenward | None:
    """Kenward and Roger's covariance and df of intercepts and slopes, or None where they would be dear."""
    seen = ingredients(algebra, theta, sigma2)
    if seen is None:
        return None
    try:
        return Kenward.of(seen.Phi, seen.P, seen.Q, seen.information)
    except np.linalg.LinAlgError:
        return None


@once
def candidates(design: Design, level: Partition) -> tuple[str, ...]:
    """Numeric predictors in focus that enter the model as they are and vary within the level.

    Slopes of what is adjusted for may vary too, but only that of a predictor in focus, when it does, makes
    that predictor's interval too narrow by far (Barr 2013).
    """
    out = []
    for term in design.focus():
        if term.kind != "numeric" or len(term.columns) != 1 or len(term.variables) != 1:
            continue
        x = term.variables[0]
        if x not in design.covariates:
            continue
        values = np.asarray(design.covariates[x], dtype=float)
        column = rows_of(design, design.Q @ design.basis.R[:, term.columns[0]])
        size = float(np.abs(values).max())
        if np.all(np.abs(column - values) <= 1e-9 * size) and _varies(values, level):
            out.append(x)
    return tuple(dict.fromkeys(out))


def _varies(values: Array, level: Partition) -> bool:
    inside = values - level.means(values)[level.codes]
    return bool(np.any(np.abs(inside) > 1e-9 * np.abs(values).max()))


def _stop(design: Design, level: Partition, x: str, limits: Limits) -> str | None:
    try:
        on_request(design, slope_key(level.key, x), limits)
    except NotSupported as no:
        return str(no)
    return None


def _parsed(design: Design, at: str) -> tuple[Partition, tuple[str, ...]]:
    """Level and predictors of "x by level"; names may themselves hold the joining words."""
    for level in () if design.group is None else design.group.levels:
        known = candidates(design, level)
        if at == AND.join(known) + BY + level.key:
            return level, known
        for x in known:
            if at == x + BY + level.key:
                return level, (x,)
        if at.endswith(BY + level.key):
            names = tuple(at.removesuffix(BY + level.key).split(AND))
            if set(names) <= set(known):
                return level, names
    raise NotSupported(
        f"slopes at {at!r} were asked for, and no numeric predictor of the model varies there",
        "Write 'predictor by level', a predictor of the model that varies within groups of the level.",
    )


# ---- words ----


def _printed(design: Design, model: ErrorModel) -> float:
    """The restricted log-likelihood as programs print it: with ln|X'V⁻¹X| in place of ln|Q'V⁻¹Q|."""
    weights = 0.0 if design.root is None else float(np.log(design.root).sum())
    return float(model.loglik[0]) - float(np.linalg.slogdet(design.basis.R)[1]) + weights


def boundary_notes(algebra: Chosen, model: ErrorModel) -> tuple[str, ...]:
    """A sentence per variance at zero and per correlation at its end, of the first column."""
    out = []
    for piece in algebra.pieces:
        where = algebra.slices[piece.key]
        own, bound = model.theta[where, 0], model.at_bound[where, 0]
        slope = getattr(piece, "x", None)
        level = piece.part.key if hasattr(piece, "part") else piece.key
        what = f"slope of {slope}" if slope is not None else "intercept"
        if float(piece.variance(own[:, None])[0]) <= 0:
            out.append(
                f"The variance of the {what} between {level} was estimated at zero, so the fit is the one "
                "without it."
            )
        elif bool(bound[1:].any()):
            out.append(
                f"The {what} between {level} was estimated as exactly tied to the others (correlation ±1): "
                "these data cannot tell its own variation from theirs."
            )
    return tuple(out)
