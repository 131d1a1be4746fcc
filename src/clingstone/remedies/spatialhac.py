"""Ordinary least squares with a covariance that allows dependence between near places."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np
from scipy import sparse

from clingstone.covariance.algebras import Chosen, choose
from clingstone.covariance.components import declared
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import spatialhac
from clingstone.maths.once import Array, kept
from clingstone.maths.spatialhac import Kernel, Law
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.joint import Joint, hotelling_joint, wald_joint
from clingstone.remedies.linear import LinearReady, reported, stop_if_none_left
from clingstone.remedies.places import OnMap, enough_sites, length
from clingstone.remedies.remedy import PLACED, Account, ByBandwidth, Estimand
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

EXACT = 300  # rows and sites up to which the law is worked out, not drawn
DRAWS = 500
QUANTILES = (0.01, 0.02, 0.05, 0.1, 0.2, 0.35, 0.5)  # of the distances between sites: cutoffs looked at
MOST_LINKS = 2_000_000
WORK = 5e7  # links × draws × contrasts per cutoff looked at
ROWS = 2e7  # rows × draws of y; never fewer than 100 draws


@dataclass(frozen=True, eq=False)
class Cutoff:
    """One cutoff: K, and per reported row the bias factor and df under the working covariance."""

    along: float
    K: sparse.csr_array
    factor: Array
    df: Array
    loss: float = np.nan


@dataclass(frozen=True, eq=False, kw_only=True)
class SpatialHacReady(LinearReady):
    """cutoff : the one used. others : those it was chosen among."""

    cutoff: Cutoff
    others: tuple[Cutoff, ...]
    kernel: Kernel
    corrected: bool

    def _scores(self, response: Response, columns: list[int]) -> Array:
        """(S, q, B) site scores of some reported rows."""
        assert self.design.spatial is not None
        part = self.design.spatial.part
        a = self.design.Q @ self.W[:, columns]
        return np.stack([part.sums(a[:, i : i + 1] * response.residual) for i in range(len(columns))], axis=1)

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        found = spatialhac.meat(self.cutoff.K, self._scores(response, list(columns)))
        if self.kernel not in spatialhac.POSITIVE:
            found, _ = spatialhac.clipped(found)
        root = np.sqrt(self.cutoff.factor[list(columns)])
        return np.asarray(root[:, None, None] * root[None, :, None] * found)

    def variance(self, response: Response) -> Array:
        return self._variance(response, self.cutoff)

    def _variance(self, response: Response, cutoff: Cutoff) -> Array:
        scores = self._scores(response, list(range(len(self.names))))
        S, k, B = scores.shape
        across = (cutoff.K @ scores.reshape(S, k * B)).reshape(S, k, B)
        v = np.einsum("skb,skb->kb", scores, across)
        return np.asarray(cutoff.factor[:, None] * np.maximum(v, 0.0))

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        q = len(columns)
        if not self.corrected:
            return wald_joint(wald, q, np.inf)
        return hotelling_joint(wald, q, float(self.cutoff.df[list(columns)].min()))

    def account(self, fits: Fits) -> Account:
        sites = self.design.spatial
        assert sites is not None
        items = [("kernel", self.kernel), ("cutoff", length(self.cutoff.along, sites.unit))]
        if self.corrected:
            low, high = float(self.cutoff.factor.min()), float(self.cutoff.factor.max())
            items.append(("factor for what the kernel misses", f"{low:.2f} to {high:.2f}"))
        focus = [j for t in self.design.focus() for j in t.columns] or list(range(self.design.p))
        others = self.others
        se = [np.sqrt(self._variance(fits.response, cutoff)[:, 0]) for cutoff in others]
        at = tuple(float(cutoff.along) for cutoff in others)
        shown = tuple(
            ByBandwidth(
                self.names[j],
                "cutoff",
                sites.unit,
                at,
                tuple(float(one[j]) for one in se),
                tuple(float(cutoff.df[j]) for cutoff in others) if self.corrected else (),
            )
            for j in focus[:3]
        )
        return Account(
            estimator="ordinary least squares",
            covariance="sandwich over places, near places weighted by distance",
            factor="variance under the fitted covariance over what the kernel finds of it"
            if self.corrected
            else "none",
            df_rule=self.rule,
            reference="t" if self.corrected else "normal",
            items=tuple(items),
            source="conley-1999, kelejian-prucha-2007, bell-mccaffrey-2002, pustejovsky-tipton-2018",
            bandwidths=shown,
        )


@dataclass(frozen=True)
class SpatialHac(OnMap):
    """Ordinary estimates with a covariance that allows dependence between near places.

    A plain interval of this kind is far too short when the predictor is smooth over the map. Its
    bias and df are therefore taken from the fitted spatial covariance, which need not be right: it only
    serves to judge how much the kernel misses. The cutoff is the one of least mean squared error under
    that covariance, never the one of largest or smallest standard error.
    """

    kernel: Kernel = "spherical"
    law: Literal["working", "independent", "normal"] = "working"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    cutoff: float | None = None  # along the surface, in the sites' unit
    id: ClassVar[str] = "spatial-hac"
    name: ClassVar[str] = "robust to dependence between near places"
    covers: ClassVar[frozenset[Family]] = frozenset({"spatial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = PLACED
    source: ClassVar[str] = "conley-1999"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> SpatialHacReady:
        enough_sites(design, self.limits.sites_estimate, "this covariance needs")
        if working is None and self.law == "working":
            raise NotSupported(
                "no spatial covariance could be fitted to say what the kernel misses",
                "Use spatial-error or region-cluster.",
            )
        names, W = reported(design)
        key = ("spatial-hac", self.kernel, self.law, self.cutoff, _key(working))
        chosen, looked = kept(design, key, lambda: self._cutoffs(design, W, working))
        normal = self.law == "normal"
        df = np.full(len(names), np.inf) if normal else np.minimum(chosen.df, float(design.m))
        unusable = {} if normal else _few(names, df, self.limits.df_floor)
        stop_if_none_left(names, unusable)
        rule = "normal quantile" if normal else "Satterthwaite, fitted covariance"
        return SpatialHacReady(
            design,
            names,
            W,
            df[:, None],
            "Satterthwaite" if self.law == "independent" else rule,
            unusable,
            cutoff=chosen,
            others=looked,
            kernel=self.kernel,
            corrected=not normal,
        )

    # ---- cutoff, bias, df ------------------------------------------------------------------

    def _cutoffs(
        self, design: Design, W: Array, working: ErrorModel | None
    ) -> tuple[Cutoff, tuple[Cutoff, ...]]:
        sites = design.spatial
        assert sites is not None
        a = design.Q @ W
        truth, law = _law(design, W, a, working if self.law != "independent" else None)
        lengths = [_straight(sites, self.cutoff)] if self.cutoff is not None else _lengths(sites)
        looked = tuple(self._at(sites, h, truth, law, None) for h in lengths)
        best = looked[int(np.argmin([c.loss for c in looked]))]
        straight = lengths[looked.index(best)]
        return self._at(sites, straight, truth, law, DRAWS), looked

    def _at(self, sites: Sites, straight: float, truth: Array, law: Law, draws: int | None) -> Cutoff:
        K = spatialhac.table(sites.tree, sites.points, straight, self.kernel)
        draws = draws or int(np.clip(WORK / (K.nnz * len(truth)), 50, DRAWS))
        found = law.moments(K, draws)
        along = float(sites.along(np.asarray(straight)))
        # Mean squared error of each variance estimate, relative to the variance; the median over rows.
        loss = float(np.median(((found.mean - truth) ** 2 + found.variance) / truth**2))
        if self.law == "normal":
            return Cutoff(along, K, np.ones(len(truth)), np.full(len(truth), np.inf), loss)
        return Cutoff(along, K, truth / found.mean, found.df, loss)

    def conventions(self) -> tuple[tuple[str, SpatialHac], ...]:
        return (
            ("the same kernel, df and bias under independence", replace(self, law="independent")),
            ("the same kernel uncorrected, normal quantile", replace(self, law="normal")),
            (
                "Bartlett kernel uncorrected, normal quantile",
                replace(self, kernel="bartlett", law="normal"),
            ),
            ("uniform kernel uncorrected, normal quantile", replace(self, kernel="uniform", law="normal")),
        )


def _key(working: ErrorModel | None) -> tuple[float, ...]:
    if working is None:
        return ()
    return (*working.theta[:, 0].tolist(), float(working.sigma2[0]))


def algebra_of(design: Design, working: ErrorModel, limits: Limits) -> Chosen:
    """The algebra behind a fitted model of the same design."""
    found, _ = declared(design, limits)
    return kept(
        design,
        ("working algebra", working.node),
        lambda: choose(design, tuple(found[k] for k in working.node), limits),
    )


def _law(design: Design, W: Array, a: Array, working: ErrorModel | None) -> tuple[Array, Law]:
    """Var(a'y) of each reported row, and the law of its site scores, under the working covariance."""
    sites = design.spatial
    assert sites is not None
    small = design.n <= EXACT and sites.count <= EXACT
    draws = int(np.clip(ROWS / design.n, 100, DRAWS))
    rng = np.random.default_rng(0)  # the draws are part of the method: the same for the same design
    if working is None:
        truth = np.einsum("ik,ik->k", W, W)
        if small:
            return truth, Law.of(sites.part, a, np.eye(design.n) - design.Q @ design.Q.T)
        e = design.basis.project(rng.standard_normal((design.n, draws)))
        return truth, Law.by_draws(sites.part, a, e)
    algebra = algebra_of(design, working, Limits())
    theta, sigma2 = working.theta[:, 0], float(working.sigma2[0])
    if small:
        V = sigma2 * algebra.dense(theta)
        truth = np.einsum("ik,ij,jk->k", a, V, a)
        MV = V - design.Q @ (design.Q.T @ V)
        return truth, Law.of(sites.part, a, MV - (MV @ design.Q) @ design.Q.T)
    QVQ = sum(float(variance[0]) * algebra.spread(key, theta) for key, variance in working.variances.items())
    truth = np.einsum("ik,ij,jk->k", W, np.asarray(QVQ), W)
    e = design.basis.project(algebra.draw(theta, sigma2, rng, draws))
    return truth, Law.by_draws(sites.part, a, e)


def _straight(sites: Sites, along: float) -> float:
    if sites.kind == "planar":
        return along
    from clingstone.structure.spatial import EARTH_RADIUS_KM

    return 2 * EARTH_RADIUS_KM * float(np.sin(min(along / (2 * EARTH_RADIUS_KM), np.pi / 2)))


def _lengths(sites: Sites) -> list[float]:
    """Cutoffs looked at: quantiles of the distances between sites, while K stays sparse enough."""
    rng = np.random.default_rng(0)
    S = sites.count
    i, j = rng.integers(0, S, 20_000), rng.integers(0, S, 20_000)
    apart = np.linalg.norm(sites.points[i] - sites.points[j], axis=1)
    found = np.unique(np.quantile(apart[i != j], QUANTILES))
    nearest = float(np.median(np.asarray(sites.tree.query(sites.points, k=2)[0])[:, 1]))
    found = found[found > nearest]
    kept_lengths = [float(h) for h in found if spatialhac.links(sites.tree, float(h)) <= MOST_LINKS]
    return kept_lengths or [nearest * 2]


def _few(names: tuple[str, ...], df: Array, floor: float) -> dict[str, Refusal]:
    return {
        name: Refusal(
            f"its degrees of freedom are {value:.1f} at the best cutoff, and {floor:g} are needed",
            "Use spatial-components or spatial-gls.",
        )
        for name, value in zip(names, df, strict=True)
        if not value >= floor
    }
