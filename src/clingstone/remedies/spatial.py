"""Simultaneous autoregressive errors over a neighbour graph."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np
import numpy.typing as npt
from scipy import stats

from clingstone.covariance.components import Parameter
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import curvature, reml, sar
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, kept
from clingstone.maths.search import minimise
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.columns import Column, FittedReady, plain_df
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.places import Spread
from clingstone.remedies.remedy import Account, Estimand, Estimates, Plain, Price
from clingstone.structure.neighbours import Neighbours

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

LIKELIHOOD_SITES = 150_000  # above, moments in place of a likelihood
OTHERS = 1000  # sites up to which λ is also given for the other neighbourhoods
Estimation = Literal["REML", "ML", "moments"]


@dataclass(frozen=True, eq=False)
class Found:
    """One column of y under its fitted autoregression, in the basis.

    lam, ratio : λ̂ and the variance of the place effects over that of the rows (0: none apart).
    fixed_df : the df of every row where the rule gives one.
    """

    lam: float
    ratio: float
    sigma2: float
    coef: Array
    slopes: curvature.Slopes
    edge: bool
    fixed_df: float | None = None

    @property
    def column(self) -> Column:
        if self.fixed_df is None:
            return Column.bent(self.coef, self.slopes)
        return Column.even(self.coef, self.slopes.phi, self.fixed_df)


@dataclass(frozen=True, eq=False, kw_only=True)
class SpatialErrorReady(FittedReady):
    """Autoregressive errors over one design; λ is fitted at each reading."""

    remedy: SpatialError
    near: Neighbours
    links: sar.Links

    def fit(self, fits: Fits) -> Estimates:
        found = self._columns(fits.response)
        return self.estimates(
            [one.column for one in found],
            fits.run.settings.confidence,
            np.array([one.edge for one in found]),
            np.ones(len(found), dtype=bool),
            self._found_notes(fits.response, found[0]) if len(found) == 1 else (),
        )

    def _found_notes(self, response: Response, found: Found) -> tuple[str, ...]:
        out: tuple[str, ...] = ()
        if found.edge:
            out = (
                "λ was estimated at the end of its range: a surface or a predictor that is missing from the "
                "mean looks like that, and no autoregression describes it.",
            )
        return out + self._spread(found).confounded(response.coef[:, 0], found.coef)

    # ---- one column ----------------------------------------------------------------------

    def _columns(self, response: Response) -> list[Found]:
        key = ("spatial-error", self.remedy.estimation, self.remedy.df, self.near.key)
        return kept(response, key, lambda: self._fitted(response))

    @property
    def _single(self) -> bool:
        return self.links.count == self.design.n

    def _fitted(self, response: Response) -> list[Found]:
        if not self._single:
            return [self._repeated(response.column(b)) for b in range(response.B)]
        profile = self._profile(response)
        restricted = self.remedy.estimation == "REML"
        m = self.design.m if restricted else self.design.n
        if self.remedy.estimation == "moments":
            lam, _ = sar.moments(self.links, response.residual[self._order])
            edge = np.abs(lam) > 0.989
        else:
            lam, edge = profile.search(m, restricted)
        out = []
        for b in range(response.B):
            one = profile.column(b)
            out.append(self._found(one.gram, response, b, float(lam[b]), bool(edge[b]), m, restricted))
        return out

    @property
    def _order(self) -> npt.NDArray[np.int64]:
        assert self.design.spatial is not None
        return self.design.spatial.part.first

    def _profile(self, response: Response) -> sar.Profile:
        rows = self._order
        return sar.Profile.of(self.links, self.design.Q[rows], response.residual[rows])

    def _found(
        self,
        gram: Callable[[float], Gram],
        response: Response,
        b: int,
        lam: float,
        edge: bool,
        m: int,
        restricted: bool,
    ) -> Found:
        scale = _Scale(*self.links.searched)
        theta = np.array([scale.inward(lam)])
        free = [] if edge or self.remedy.estimation == "moments" else [0]
        slopes = curvature.slopes(lambda at: gram(scale.outward(at[0])), theta, free, m, restricted)
        return self._made(gram(lam), response.coef[:, b], slopes, lam, 0.0, edge, m)

    def _made(
        self, here: Gram, coef: Array, slopes: curvature.Slopes, lam: float, ratio: float, edge: bool, m: int
    ) -> Found:
        delta, _, _ = reml.reduced(here)
        fixed = plain_df(self.remedy.df, self.design.m)
        return Found(lam, ratio, float(reml.scale(here, m)[0]), coef + delta[:, 0], slopes, edge, fixed)

    def _repeated(self, response: Response) -> Found:
        """Rows that share places: the autoregression is of what a place adds, beside independent rows."""
        assert self.design.spatial is not None
        part = self.design.spatial.part
        load = Load(self.design.sizes(part), self.design.sums(part), response.sums(part))
        base = reml.independent(self.design.p, response.ss)
        restricted = self.remedy.estimation == "REML"
        m = self.design.m if restricted else self.design.n
        scale = _Scale(*self.links.searched)

        def gram(theta: Array) -> Gram:
            return sar.top(base, load, self.links, scale.outward(theta[0]), float(np.exp(theta[1])))

        def value(theta: Array) -> float:
            found = gram(theta)
            if restricted:
                return float(reml.criterion(found, m)[0])
            return float(found.logdet + reml.profiled(reml.rss(found), m)[0])

        best = minimise(value, _axes(float(load.c.mean())))
        theta = best.theta
        free = [int(i) for i in np.flatnonzero(~best.at_bound)]
        slopes = curvature.slopes(gram, theta, free, m, restricted)
        lam, ratio = scale.outward(theta[0]), float(np.exp(theta[1]))
        edge = bool(best.at_bound.any())
        return self._made(gram(theta), response.coef[:, 0], slopes, lam, ratio, edge, m)

    # ---- what is said ---------------------------------------------------------------------

    def _spread(self, found: Found) -> Spread:
        """Q'VQ and Q'V⁻¹Q at the estimate, on the scale of y."""
        design, p = self.design, self.design.p
        part = design.spatial.part  # type: ignore[union-attr]
        rng = np.random.default_rng(0)
        T = design.Q[self._order] if self._single else design.sums(part)
        back = self.links.solve_across(found.lam, T)
        mean = float(np.mean(self.links.draw(found.lam, rng, 50) ** 2))
        size = found.sigma2 * (1.0 if self._single else found.ratio)
        QVQ = size * back.T @ back + (0.0 if self._single else found.sigma2) * np.eye(p)
        total = size * mean + (0.0 if self._single else found.sigma2)
        return Spread(design, QVQ, np.asarray(np.linalg.inv(found.slopes.phi)), total)

    def account(self, fits: Fits) -> Account:
        found = self._columns(fits.response)[0]
        how = {
            "REML": "restricted maximum likelihood",
            "ML": "maximum likelihood",
            "moments": "moments",
        }[self.remedy.estimation]
        level = fits.run.settings.confidence
        items = [("neighbours", self.near.about), ("λ", f"{found.lam:.6g}")]
        if self._single and self.remedy.estimation != "moments":
            restricted = self.remedy.estimation == "REML"
            m = self.design.m if restricted else self.design.n
            drop = float(stats.chi2.isf(1 - level, 1))
            low, high = self._profile(fits.response).interval(found.lam, m, restricted, drop)
            items.append((f"λ by its profile likelihood, {level:.0%}", f"{low:.4g} to {high:.4g}"))
        rng = fits.run.child("neighbour correlation")
        items.append(
            ("mean correlation of neighbours", f"{sar.neighbour_correlation(self.links, found.lam, rng):.3f}")
        )
        items.append(("variance of the innovations", f"{found.sigma2 * (found.ratio or 1.0):.6g}"))
        if found.ratio:
            items.append(("variance of single rows", f"{found.sigma2:.6g}"))
        if self.near.islands:
            items.append(("sites without a neighbour", f"{self.near.islands}"))
        items += self._elsewhere(fits)
        items += self._spread(found).items()
        return Account(
            estimator=f"generalised least squares, autoregressive errors over neighbours, λ by {how}",
            covariance="σ²(X′A′AX)⁻¹, A = I − λW",
            factor="σ² = e′A′Ae/(n − p)" if self.remedy.estimation != "ML" else "σ² = e′A′Ae/n",
            df_rule=self.rule,
            reference="normal" if self.remedy.df == "normal" else "t",
            items=tuple(items),
            source="ord-1975, satterthwaite-1946"
            if self.remedy.estimation != "moments"
            else "kelejian-prucha-1999",
        )

    def _elsewhere(self, fits: Fits) -> list[tuple[str, str]]:
        """λ̂ over the other neighbourhoods: the choice of neighbours is not the data's."""
        if not self._single or self.links.count > OTHERS or self.remedy.estimation == "moments":
            return []
        out = []
        for near in self.design.neighbours:
            if near.key == self.near.key or near.W.nnz == 0:
                continue
            other = replace(self, near=near, links=links_of(self.design, near))
            out.append((f"λ over {near.about}", f"{other._columns(fits.response)[0].lam:.4g}"))
        return out


@dataclass(frozen=True)
class _Scale:
    """λ in (low, high) ↔ θ on the line, for differences that never leave the range."""

    low: float
    high: float

    def outward(self, theta: float) -> float:
        return float(0.5 * (self.low + self.high) + 0.5 * (self.high - self.low) * np.tanh(theta))

    def inward(self, lam: float) -> float:
        x = (2 * lam - self.low - self.high) / (self.high - self.low)
        return float(np.arctanh(np.clip(x, -1 + 1e-9, 1 - 1e-9)))


def _axes(rows: float) -> tuple[Parameter, Parameter]:
    """θ of λ, and the logarithm of the ratio of variances, for places of so many rows each."""
    lam = Parameter("spatial.lambda", -4.0, 4.5, (0.0, 0.7, 1.5), tuple(np.linspace(-2, 4, 25)))
    near = float(np.log(1 / rows))
    ratio = Parameter(
        "spatial.log_ratio",
        near - 14.0,
        12.0,
        (near - 1.0, near + 0.5, near + 2.5),
        tuple(np.linspace(near - 5, near + 8, 25)),
        True,
    )
    return lam, ratio


def links_of(design: Design, near: Neighbours) -> sar.Links:
    """The symmetrised graph; kept with the design, with its determinant."""
    return kept(design, ("sar links", near.key), lambda: sar.Links.of(near.table))


@dataclass(frozen=True)
class SpatialError(Plain):
    """Generalised least squares under u = λWu + ε over the primary neighbourhood (Ord 1975).

    The neighbourhood is made symmetric first, because a likelihood needs it. λ by REML with
    Satterthwaite's df; by moments above 150,000 sites. With several rows per site the autoregression is
    of what a site adds, beside independent rows.
    """

    estimation: Estimation = "REML"
    df: Literal["satterthwaite", "residual", "normal"] = "satterthwaite"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "spatial-error"
    name: ClassVar[str] = "autoregressive errors over neighbours"
    covers: ClassVar[frozenset[Family]] = frozenset({"spatial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"spatial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "ord-1975"
    price: ClassVar[Price | None] = Price(20000.0, 600.0)

    def prepare(self, design: Design, working: ErrorModel | None = None) -> SpatialErrorReady:
        positive_m(design)
        sites = design.spatial
        if sites is None or not design.neighbours:
            raise NotSupported("no neighbourhood of places was declared", "Name coords= (and neighbours=).")
        if sites.count < self.limits.sites_estimate:
            raise NotSupported(
                f"{sites.count} distinct places; autoregressive errors need {self.limits.sites_estimate}",
                "More places would be needed.",
            )
        near = next((nb for nb in design.neighbours if nb.key == self.at), design.neighbours[0])
        if near.islands > 0.2 * sites.count:
            raise NotSupported(
                f"{near.islands} of {sites.count} places have no neighbour in this graph ({near.about})",
                "Name a wider neighbourhood with neighbours=.",
            )
        chosen = self
        if sites.count > LIKELIHOOD_SITES:
            if sites.count < design.n:
                raise NotSupported(
                    f"{sites.count:,} places with several rows each are too many for this likelihood",
                    "Average the rows of each place first.",
                )
            chosen = replace(self, estimation="moments", df="residual")
        names, W = reported(design)
        rule = {"satterthwaite": "Satterthwaite", "residual": "n − p", "normal": "normal quantile"}[chosen.df]
        links = links_of(design, near)
        if chosen.estimation != "moments":
            links.logdet(np.zeros(1))  # the factorizations belong to the design, not to y
        return SpatialErrorReady(design, names, W, rule, remedy=chosen, near=near, links=links)

    def conventions(self) -> tuple[tuple[str, SpatialError], ...]:
        return (
            ("the same fit, n − p df", replace(self, df="residual")),
            ("maximum likelihood, normal quantile", replace(self, estimation="ML", df="normal")),
            (
                "λ by three moment conditions, normal quantile",
                replace(self, estimation="moments", df="normal"),
            ),
        )
