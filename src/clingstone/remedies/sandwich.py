"""Ordinary least squares: its own covariance, and covariances robust to unequal spread and to clusters."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import sandwich
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, Refusal
from clingstone.remedies.clusters import OverClusters, clusters, rank_note, sizes_of
from clingstone.remedies.joint import Joint, hotelling_joint, wald_joint
from clingstone.remedies.linear import LinearReady, few_df, positive_m, reported, stop_if_none_left
from clingstone.remedies.remedy import KNOWN, Account, Estimand, Plain

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits


# ---- ordinary -------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class OrdinaryReady(LinearReady):
    def variance(self, response: Response) -> Array:
        return np.asarray(np.sum(self.W**2, axis=0)[:, None] * response.s2)

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        w = self.W[:, list(columns)]
        return (w.T @ w)[:, :, None] * response.s2

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        return wald_joint(wald, len(columns), float(self.df[0, 0]))

    def account(self, fits: Fits) -> Account:
        return Account(
            estimator="ordinary least squares" if self.design.root is None else "weighted least squares",
            covariance="s²(X′X)⁻¹, independent errors of one variance",
            factor="s² = e′e/(n − p)",
            df_rule=self.rule,
            reference="t" if np.isfinite(self.df).all() else "normal",
            items=(("n − p", f"{self.design.m}"), ("s", f"{float(np.sqrt(fits.response.s2[0])):.6g}")),
            source="",
        )


@dataclass(frozen=True)
class Ordinary(Plain):
    """Ordinary least squares with independent errors of one variance: what every refit is compared with."""

    normal: bool = False
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "ordinary"
    name: ClassVar[str] = "ordinary"
    covers: ClassVar[frozenset[Family]] = frozenset()
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = KNOWN
    source: ClassVar[str] = ""

    def prepare(self, design: Design, working: ErrorModel | None = None) -> OrdinaryReady:
        positive_m(design)
        names, W = reported(design)
        df = np.full((len(names), 1), np.inf if self.normal else float(design.m))
        return OrdinaryReady(design, names, W, df, "normal quantile" if self.normal else "n − p")

    def conventions(self) -> tuple[tuple[str, Ordinary], ...]:
        return (("normal quantile in place of t", replace(self, normal=True)),)


# ---- heteroscedasticity-robust ----------------------------------------------------------

HC = Literal["HC0", "HC1", "HC2", "HC3"]
_DELTA = {"HC0": 0, "HC1": 0, "HC2": 1, "HC3": 2}
_HC_FACTOR = {
    "HC0": "none",
    "HC1": "n/(n − p)",
    "HC2": "residuals divided by √(1 − leverage)",
    "HC3": "residuals divided by (1 − leverage)",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class SandwichReady(LinearReady):
    """own_df : Satterthwaite df, and T² for joint tests; else F with the df of every row."""

    own_df: bool

    @abstractmethod
    def _eta(self, columns: tuple[int, ...]) -> float:
        """η of T² for some coefficients."""

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        q = len(columns)
        if not self.own_df:
            return wald_joint(wald, q, float(self.df[0, 0]))
        return hotelling_joint(wald, q, self._eta(columns))


@dataclass(frozen=True, eq=False, kw_only=True)
class RowRobustReady(SandwichReady):
    """T : (n, k) adjusted contrast weights."""

    kind: HC
    T: Array

    @property
    def _scale(self) -> float:
        return self.design.n / self.design.m if self.kind == "HC1" else 1.0

    def variance(self, response: Response) -> Array:
        return self._scale * sandwich.row_variance(self.T, response.residual)

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        return self._scale * sandwich.row_meat(self.T[:, list(columns)], response.residual)

    @once
    def _eta(self, columns: tuple[int, ...]) -> float:
        return sandwich.row_joint_df(self.design.Q, self.T[:, list(columns)])

    def account(self, fits: Fits) -> Account:
        return Account(
            estimator="ordinary least squares",
            covariance=f"sandwich with one score per row ({self.kind})",
            factor=_HC_FACTOR[self.kind],
            df_rule=self.rule,
            reference="t" if np.isfinite(self.df).all() else "normal",
            items=(("largest leverage", f"{float(self.design.basis.leverage.max()):.3g}"),),
            source="mackinnon-white-1985, bell-mccaffrey-2002, satterthwaite-1946",
        )


@dataclass(frozen=True)
class HeteroscedasticityRobust(Plain):
    """Ordinary estimates with a covariance that allows every row its own variance (HC2 by default).

    MacKinnon & White (1985); Satterthwaite df under equal variances, Bell & McCaffrey (2002) with every
    row a cluster of its own.
    """

    kind: HC = "HC2"
    df: Literal["satterthwaite", "residual", "normal"] = "satterthwaite"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "heteroscedasticity-robust"
    covers: ClassVar[frozenset[Family]] = frozenset()
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = KNOWN
    source: ClassVar[str] = "mackinnon-white-1985"

    @property
    def name(self) -> str:
        return f"robust to unequal spread ({self.kind})"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> RowRobustReady:
        positive_m(design)
        names, W = reported(design)
        T, lost, _ = sandwich.row_weights(design.Q, W, _DELTA[self.kind])
        unusable: dict[str, Refusal] = {
            name: Refusal(
                "one row alone decides it, so that row's residual is zero and says nothing of its spread",
                "More rows of that kind would be needed.",
            )
            for j, name in enumerate(names)
            if lost[j] > 1e-8
        }
        own = self.df == "satterthwaite"
        df = sandwich.row_df(design.Q, T) if own else np.full(len(names), self._plain_df(design))
        if own:
            unusable = {**few_df(names, df), **unusable}
        stop_if_none_left(names, unusable)
        rule = {"satterthwaite": "Satterthwaite", "residual": "n − p", "normal": "normal quantile"}[self.df]
        return RowRobustReady(design, names, W, df[:, None], rule, unusable, kind=self.kind, T=T, own_df=own)

    def _plain_df(self, design: Design) -> float:
        return float(design.m) if self.df == "residual" else np.inf

    def conventions(self) -> tuple[tuple[str, HeteroscedasticityRobust], ...]:
        return (
            ("HC0 with a normal quantile", replace(self, kind="HC0", df="normal")),
            ("HC1, factor n/(n − p), t with n − p df", replace(self, kind="HC1", df="residual")),
            ("HC2 with n − p df", replace(self, kind="HC2", df="residual")),
            ("HC3 with n − p df", replace(self, kind="HC3", df="residual")),
            ("HC3 with its own Satterthwaite df", replace(self, kind="HC3", df="satterthwaite")),
        )


# ---- cluster-robust -----------------------------------------------------------------------

CR = Literal["CR0", "CR1", "CR1S", "CR2", "CR3"]
ClusterDf = Literal["satterthwaite", "clusters", "normal"]
CLUSTER_RULES: dict[ClusterDf, str] = {
    "satterthwaite": "Satterthwaite",
    "clusters": "clusters − 1",
    "normal": "normal quantile",
}
_CR_FACTOR = {
    "CR0": "none",
    "CR1": "G/(G − 1)",
    "CR1S": "G/(G − 1) · (n − 1)/(n − p)",
    "CR2": "each cluster's residuals multiplied by (I − H_gg)^(−½)",
    "CR3": "each cluster's residuals multiplied by (I − H_gg)^(−1)",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class ClusterReady(SandwichReady):
    """at, part : the clusters. weights : contrasts adjusted per cluster."""

    kind: CR
    at: str
    part: Partition
    weights: sandwich.Adjusted

    @property
    def _scale(self) -> float:
        return sandwich.cluster_factor(self.kind, self.part.count, self.design.n, self.design.p)

    def variance(self, response: Response) -> Array:
        return self._scale * sandwich.cluster_variance(self.weights.a, response.scores(self.part))

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        a = self.weights.a[list(columns)]
        return self._scale * sandwich.cluster_covariance(a, response.scores(self.part))

    @once
    def _eta(self, columns: tuple[int, ...]) -> float:
        pick = list(columns)
        return sandwich.cluster_joint_df(self.weights.a[pick], self.weights.b[pick])

    def account(self, fits: Fits) -> Account:
        part, weights = self.part, self.weights
        share = np.einsum("kgp,kgp->kg", weights.a, weights.b)
        total = share.sum(axis=1, keepdims=True)
        share = share / np.where(total > 0, total, 1.0)
        j = int(np.argmax(share.max(axis=1)))
        g = int(np.argmax(share[j]))
        return Account(
            estimator="ordinary least squares",
            covariance=f"sandwich with one score per {self.at} ({self.kind})",
            factor=_CR_FACTOR[self.kind],
            df_rule=self.rule,
            reference="t" if np.isfinite(self.df).all() else "normal",
            items=(
                *sizes_of(part),
                ("working model", "independent errors of one variance"),
                ("largest part one cluster has in a variance", f"{share[j, g]:.0%} ({part.labels[g]})"),
            ),
            source="bell-mccaffrey-2002, satterthwaite-1946, pustejovsky-tipton-2018",
        )


@dataclass(frozen=True)
class ClusterRobust(OverClusters):
    """Ordinary estimates with a covariance that allows any dependence within clusters.

    CR2 with an independent working model and Satterthwaite df per coefficient (Bell & McCaffrey 2002);
    joint tests by the approximate Hotelling T² of Pustejovsky & Tipton (2018). Clusters may be a group
    level, the series or the sites.
    """

    kind: CR = "CR2"
    df: ClusterDf = "satterthwaite"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "cluster-robust"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = KNOWN
    source: ClassVar[str] = "bell-mccaffrey-2002"

    @property
    def name(self) -> str:
        return f"cluster-robust, by {self.at}" if self.at else "cluster-robust"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> ClusterReady:
        positive_m(design)
        part = clusters(design, self.at)
        names, W = reported(design)
        power = self.kind if self.kind in ("CR2", "CR3") else "CR0"
        weights = sandwich.adjust(design.scores(part), W, power)
        df, unusable = judged(weights, part, names, self.at, self.df)
        return ClusterReady(
            design,
            names,
            W,
            df,
            CLUSTER_RULES[self.df],
            unusable,
            rank_note(part, design.p),
            kind=self.kind,
            at=self.at,
            part=part,
            weights=weights,
            own_df=self.df == "satterthwaite",
        )

    def conventions(self) -> tuple[tuple[str, ClusterRobust], ...]:
        return (
            ("CR0 with a normal quantile", replace(self, kind="CR0", df="normal")),
            ("CR1, factor G/(G − 1), t with G − 1 df", replace(self, kind="CR1", df="clusters")),
            (
                "CR1 with the further factor (n − 1)/(n − p), t with G − 1 df",
                replace(self, kind="CR1S", df="clusters"),
            ),
            ("CR1 with both factors and a normal quantile", replace(self, kind="CR1S", df="normal")),
            ("CR2 with G − 1 df", replace(self, kind="CR2", df="clusters")),
            ("CR3 with G − 1 df", replace(self, kind="CR3", df="clusters")),
        )


def judged(
    weights: sandwich.Adjusted,
    part: Partition,
    names: tuple[str, ...],
    at: str,
    rule: ClusterDf,
    refused: Mapping[str, Refusal] | None = None,
) -> tuple[Array, dict[str, Refusal]]:
    """df (k, 1) of rows whose contrasts are adjusted per cluster, and which of them cannot be served.

    refused : rows that are known not to be. Raises NotSupported when not one is left.
    """
    if rule == "satterthwaite":
        df = sandwich.cluster_df(weights.a, weights.b)
    else:
        df = np.full(len(names), part.count - 1.0 if rule == "clusters" else np.inf)
    unusable = {**few_df(names, df), **decided_by_one(weights, part, names, at), **(refused or {})}
    stop_if_none_left(names, unusable)
    return df[:, None], unusable


def decided_by_one(
    weights: sandwich.Adjusted, part: Partition, names: tuple[str, ...], at: str
) -> dict[str, Refusal]:
    """Rows that a single cluster decides, so that its scores say nothing of how clusters differ."""
    return {
        name: Refusal(
            f"{at} {part.labels[weights.at[j]]} alone decides it, so how it would differ between clusters "
            "cannot be seen",
            f"A second {at} of that kind would be needed.",
        )
        for j, name in enumerate(names)
        if weights.lost[j] > 1e-8
    }
