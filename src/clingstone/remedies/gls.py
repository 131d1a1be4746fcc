"""Generalised least squares under a fitted error model: groups, order, places, or all together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from clingstone.covariance.algebras import choose
from clingstone.covariance.components import Component, declared
from clingstone.covariance.each import each
from clingstone.covariance.information import affordable, ingredients
from clingstone.design.derived import absorb
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import curvature, reml
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Expected
from clingstone.maths.kenward import Kenward
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.maths.search import nearby
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.columns import DEAR, FLAT, RULES, Column, FittedReady, Rule, apart, plain_df
from clingstone.remedies.glseach import read_each
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.places import map_items, map_notes, site_keys
from clingstone.remedies.praiswinsten import PraisWinsten
from clingstone.remedies.remedy import (
    DATED,
    GROUPED,
    KNOWN,
    PLACED,
    Account,
    Estimand,
    Estimates,
    Flags,
    Price,
    Remedy,
    no_level,
)
from clingstone.remedies.words import bound_notes, gls_account, profiled

if TYPE_CHECKING:
    from clingstone.covariance.algebras import Chosen
    from clingstone.covariance.fits import ErrorModel, Fits

Kind = Literal["mixed-intercept", "ar1", "spatial-gls", "joint"]
DRAWS = 400  # simulated columns behind an expected information, when the observed one has no inverse
TOGETHER = " + "  # joins the levels of a nesting that are fitted together

_NEEDS: dict[Kind, Needs] = {
    "mixed-intercept": GROUPED,
    "ar1": DATED,
    "spatial-gls": PLACED,
    "joint": KNOWN,
}
_COVERS: dict[Kind, frozenset[Family]] = {
    "mixed-intercept": frozenset({"group"}),
    "ar1": frozenset({"serial"}),
    "spatial-gls": frozenset({"spatial"}),
    "joint": frozenset({"group", "serial", "spatial"}),
}
_SOURCES: dict[Kind, str] = {
    "mixed-intercept": "kenward-roger-1997",
    "ar1": "harville-1977",
    "spatial-gls": "harville-1977",
    "joint": "harville-1977",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class GlsReady(FittedReady):
    """A GLS remedy over one design; the error model comes from ``Fits`` at each reading.

    kenward : whether the df are Kenward and Roger's.
    """

    remedy: Gls
    components: tuple[Component, ...]
    kenward: bool

    def fit(self, fits: Fits) -> Estimates:
        if fits.response.B > 1 and self.remedy.estimation == "REML":
            many = each(fits.algebra(self.remedy.node(fits)), fits.response)
            if many is not None:
                return read_each(self, self.remedy.df, fits, many)
        model, columns = self.columns(fits)
        notes: tuple[str, ...] = ()
        if len(columns) == 1:
            notes += bound_notes(self._held(fits), model)
            notes += tuple(f"Not in this fit: {why.reason}." for why in self._left_out(fits))
            notes += map_notes(fits, self.remedy.node(fits), columns[0].coef)
        return self.estimates(
            columns,
            fits.run.settings.confidence,
            np.asarray(np.any(model.at_bound, axis=0)),
            np.asarray(model.converged, dtype=bool),
            notes,
        )

    def columns(self, fits: Fits) -> tuple[ErrorModel, list[Column]]:
        """The fitted error model and every column of y under it."""
        node = self.remedy.node(fits)
        model, algebra = fits[node], fits.algebra(node)
        ys = enumerate(apart(fits.response))
        return model, [self._column(fits, model, algebra, y, b) for b, y in ys]

    def account(self, fits: Fits) -> Account:
        node = self.remedy.node(fits)
        unit = "" if fits.design.spatial is None else fits.design.spatial.unit
        found = gls_account(self.remedy.estimation, self.rule, self._held(fits), fits[node], unit)
        items = [*found.items, *map_items(fits, node)]
        if self.remedy.id == "mixed-intercept" and self.remedy.estimation == "REML":
            items += profiled(fits.algebra(node), fits.response, fits[node], fits.run.settings.confidence)
        return replace(found, items=tuple(items))

    def _held(self, fits: Fits) -> tuple[Component, ...]:
        """Those components that the fit holds: of all together, the ones whose algebra the data carry."""
        node = self.remedy.node(fits)
        return tuple(one for one in self.components if one.key in node)

    def _left_out(self, fits: Fits) -> list[Refusal]:
        return list(fits.left_out.values()) if self.remedy.id == "joint" else []

    # ---- one column ----------------------------------------------------------------------

    def _column(self, fits: Fits, model: ErrorModel, algebra: Chosen, y: Response, b: int) -> Column:
        return self.column_at(fits, algebra, y, model.theta[:, b], model.at_bound[:, b])

    def column_at(self, fits: Fits, algebra: Chosen, y: Response, theta: Array, bound: Flags) -> Column:
        """One column of y at its REML estimate θ (d,), with the coordinates that are at a bound."""

        def gram(theta: Array) -> Gram:
            return algebra.gram(theta, y)

        restricted = self.remedy.estimation == "REML"
        if not restricted:
            theta = _most_likely(y, theta, bound, algebra)
        m = self.design.m if restricted else self.design.n
        here = gram(theta)
        delta, _, _ = reml.reduced(here)
        coef = y.coef[:, 0] + delta[:, 0]
        s2 = float(reml.scale(here, m)[0])
        if (df := plain_df(self.remedy.df, self.design.m)) is not None:
            return Column.even(coef, np.asarray(s2 * np.linalg.inv(here.QQ)), df)
        if self.kenward and (seen := ingredients(algebra, theta, s2)) is not None:
            return self._kenward_column(coef, seen, bound)
        free = [int(i) for i in np.flatnonzero(~bound)]
        bent = curvature.slopes(gram, theta, free, m, restricted)
        notes: tuple[str, ...] = ()
        if not bent.sound:
            bent, notes = self._expected(fits, algebra, theta, free, s2, m, restricted, gram)
        return Column.bent(coef, bent, notes if bent.sound else (FLAT,))

    def _kenward_column(self, coef: Array, seen: Expected, bound: Flags) -> Column:
        kr = Kenward.of(seen.Phi, seen.P, seen.Q, seen.information)
        if not bound.any():
            return Column.kenward(coef, kr.adjusted, kr, self.design.m)

        # At a variance of zero the adjustment would treat the bound as an ordinary estimate: Φ is kept.
        def df(w: Array) -> float:
            return float(self.at_zero(np.array([kr.df(w)]), w[:, None], bound)[0])

        return Column(coef, kr.phi, df, kr.joint)

    def at_zero(self, found: Array, W: Array, bound: Flags) -> Array:
        """(k,) or (B, k) df where variances between groups are zero, from those of Kenward and Roger.

        At a bound they lean on a curvature that says little, and can fall to one: they are kept between
        4 and the df of groups, those of the parts of each row W (p, k) between and within groups, each with
        the df of its own mean square (Satterthwaite 1946). bound (d,) : which levels; the fewest df count.
        """
        held = [one for one, out in zip(self.components, bound, strict=True) if out]
        most = np.min([self._of_groups(self.design.partitions[one.part], W) for one in held], axis=0)
        return np.asarray(np.clip(found, np.minimum(self.remedy.limits.df_floor, most), most))

    def _of_groups(self, part: Partition, W: Array) -> Array:
        inner = absorb(self.design, part)[0].p
        df1, df2 = part.count + inner - self.design.p, self.design.n - part.count - inner
        if df1 < 1 or df2 < 1:
            return np.full(W.shape[1], float(self.design.m))
        share = np.sum((self.design.sums(part) @ W) ** 2 / self.design.sizes(part)[:, None], axis=0)
        share = np.clip(share / np.sum(W**2, axis=0), 0.0, 1.0)
        return np.asarray(1.0 / (share**2 / df1 + (1 - share) ** 2 / df2))

    def _expected(
        self,
        fits: Fits,
        algebra: Chosen,
        theta: Array,
        free: list[int],
        s2: float,
        m: int,
        restricted: bool,
        gram: Callable[[Array], Gram],
    ) -> tuple[curvature.Slopes, tuple[str, ...]]:
        """The same with the expected information, by columns drawn from the fitted model."""
        errors = algebra.draw(theta, s2, fits.run.child("expected-information"), DRAWS)
        e = self.design.basis.project(errors)
        drawn = Response(self.design, self.design.Q.T @ errors, e, np.einsum("ij,ij->j", e, e))
        found = curvature.slopes(
            gram, theta, free, m, restricted, lambda at: algebra.gram(at, drawn), sigma2=s2
        )
        note = f"The df use the expected information, from {DRAWS} simulated columns."
        return found, (note,)


@dataclass(frozen=True)
class Gls:
    """Generalised least squares with REML error parameters, one remedy for every error model.

    kind : which structures are fitted. df : Kenward-Roger holds for group levels, one or several; every
    other model takes Satterthwaite's df. estimation : REML, or ML to show what it would give.
    """

    id: Kind = "mixed-intercept"
    df: Rule = "satterthwaite"
    estimation: Literal["REML", "ML"] = "REML"
    at: str = ""
    limits: Limits = field(default_factory=Limits)

    @property
    def name(self) -> str:
        if self.id == "mixed-intercept":
            return (
                f"random intercept of {self.at.replace(TOGETHER, ' and ')}" if self.at else "random intercept"
            )
        return {
            "ar1": "autoregressive errors along time",
            "spatial-gls": "spatial errors",
            "joint": "all structures fitted together",
        }[self.id]

    @property
    def covers(self) -> frozenset[Family]:
        return _COVERS[self.id]

    @property
    def estimand(self) -> Estimand:
        return "pooled"

    @property
    def needs(self) -> Needs:
        return _NEEDS[self.id]

    @property
    def source(self) -> str:
        return _SOURCES[self.id]

    def abouts(self, design: Design) -> tuple[str, ...]:
        """For groups: all levels together first when there are several, then each."""
        if self.id != "mixed-intercept":
            return ("",)
        if design.group is None:
            return ()
        found, _ = declared(design, self.limits)
        declared_keys = tuple(level.key for level in design.group.levels)
        # Where no level can be estimated, all are kept: the refusal then says why.
        keys = tuple(k for k in declared_keys if f"group:{k}" in found) or declared_keys
        return keys if len(keys) == 1 else (TOGETHER.join(keys), *keys)

    def lacking(self, design: Design) -> Refusal:
        return no_level(self.id)

    def covering(self, fits: Fits) -> frozenset[Family]:
        return frozenset(fits.components[key].family for key in self.node(fits))

    @property
    def price(self) -> Price | None:
        return None

    def working(self, fits: Fits) -> ErrorModel | None:
        return None

    def keys(self, design: Design) -> tuple[str, ...]:
        """Component keys that this remedy asks for; Raises NotSupported for what the data cannot carry."""
        found, refused = declared(design, self.limits)
        if self.id == "joint":
            if len(found) < 2:
                raise _too_few(found, refused)
            return tuple(found)
        if self.id == "mixed-intercept":
            wanted = [f"group:{key}" for key in self.at.split(TOGETHER)]
        elif self.id == "ar1":
            wanted = ["serial"]
        else:
            wanted = [*site_keys(design, found), "spatial"]
        for key in wanted:
            if key not in found:
                unknown = Refusal(f"these data have no structure named {key}")
                raise refused.get(key, unknown).error()
        return tuple(wanted)

    def node(self, fits: Fits) -> frozenset[str]:
        if self.id != "joint":
            return frozenset(self.keys(fits.design))
        node = fits.full_node
        if len(node) < 2:
            raise _too_few(fits.components, fits.refused)
        return node

    def prepare(self, design: Design, working: ErrorModel | None) -> GlsReady:
        positive_m(design)
        found, _ = declared(design, self.limits)
        components = tuple(found[key] for key in self.keys(design))
        names, W = reported(design)
        asked = self.df == "kenward-roger" and self.estimation == "REML"
        kenward = asked and self._affordable(design, components)
        rule = "satterthwaite" if self.df == "kenward-roger" and not kenward else self.df
        notes = (DEAR,) if asked and not kenward else ()
        return GlsReady(
            design, names, W, RULES[rule], notes=notes, remedy=self, components=components, kenward=kenward
        )

    def _affordable(self, design: Design, components: tuple[Component, ...]) -> bool:
        return all(c.family == "group" for c in components) and affordable(
            choose(design, components, self.limits)
        )

    def conventions(self) -> tuple[tuple[str, Remedy], ...]:
        out: list[tuple[str, Remedy]] = []
        if self.df == "kenward-roger":
            out.append(
                (
                    "the same fit, Satterthwaite df from the observed information",
                    replace(self, df="satterthwaite"),
                )
            )
        out += [
            ("the same fit, n − p df", replace(self, df="residual")),
            ("the same fit, normal quantile", replace(self, df="normal")),
            (
                "maximum likelihood in place of REML, normal quantile",
                replace(self, df="normal", estimation="ML"),
            ),
        ]
        if self.id == "ar1":
            words = "Prais–Winsten: ρ from the residuals in two steps, n − p df"
            out.append((words, PraisWinsten(self.at, self.limits)))
        return tuple(out)


def _too_few(found: Mapping[str, Component], refused: Mapping[str, Refusal]) -> NotSupported:
    have = ", ".join(c.label for c in found.values()) or "none"
    return NotSupported(
        f"a joint model needs two structures that can be estimated; here: {have}",
        "; ".join(f"{key}: {no.reason}" for key, no in refused.items()),
    )


def _most_likely(y: Response, theta: Array, bound: Flags, algebra: Chosen) -> Array:
    """θ of maximum likelihood by steps from the REML estimate; parameters at a bound stay there."""
    free = np.flatnonzero(~bound)
    if not len(free):
        return theta
    n = algebra.design.n
    steep = None if bound.any() else algebra.field(y, n, restricted=False)

    def whole(part: Array) -> Array:
        out = theta.copy()
        out[free] = part
        return out

    def minus_two(part: Array) -> float:
        found = algebra.gram(whole(part), y)
        return float(found.logdet + reml.profiled(reml.rss(found), n)[0])

    return whole(nearby(steep or minus_two, [algebra.parameters[i] for i in free], theta[free]).theta)
