"""The mixed model's estimate with a covariance that does not trust its error model: clusters on top."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.covariance.components import declared
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference, reml, sandwich
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import covered, sizes_of
from clingstone.remedies.columns import FittedReady, apart
from clingstone.remedies.joint import Joint, f_joint, hotelling_joint
from clingstone.remedies.linear import blanked, positive_m, reported
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Flags, Plain, multi
from clingstone.remedies.sandwich import CLUSTER_RULES, ClusterDf, judged
from clingstone.remedies.words import bound_notes

if TYPE_CHECKING:
    from clingstone.covariance.algebras import Chosen
    from clingstone.covariance.fits import ErrorModel, Fits

Kind = Literal["CR0", "CR1", "CR2", "CR3"]
_FACTOR = {
    "CR0": "none",
    "CR1": "G/(G − 1)",
    "CR2": "each cluster's whitened residuals multiplied by (I − H_gg)^(−½)",
    "CR3": "each cluster's whitened residuals multiplied by (I − H_gg)^(−1)",
}


@dataclass(frozen=True, eq=False)
class Whitened:
    """One column of y under V̂: contrasts adjusted cluster by cluster, and the scores they meet.

    coef : (p,) in the basis. weights : of the k reported rows. scores (G, p).
    """

    coef: Array
    weights: sandwich.Adjusted
    scores: Array


@dataclass(frozen=True, eq=False, kw_only=True)
class MixedRobustReady(FittedReady):
    """GLS under random intercepts, its covariance from clusters that hold them whole."""

    remedy: MixedRobust
    part: Partition

    @property
    def _scale(self) -> float:
        return sandwich.cluster_factor(self.remedy.kind, self.part.count, self.design.n, self.design.p)

    def fit(self, fits: Fits) -> Estimates:
        node = self.remedy.node(fits)
        model, algebra = fits[node], fits.algebra(node)
        B = fits.response.B
        seen = [self.whitened(algebra, model, one, b) for b, one in enumerate(apart(fits.response))]
        gone = np.array([name in self.unusable for name in self.names])
        estimate = np.stack([self.W.T @ one.coef for one in seen], axis=1)
        se = np.sqrt(np.stack([self._variance(one) for one in seen], axis=1))
        df = np.stack([self._df(one) for one in seen], axis=1)
        se[gone], df[gone] = np.nan, np.nan
        joint = {t.name: self._joint(seen, t.columns) for t in multi(self.design)}
        return replace(
            Estimates.by_t(estimate, se, df, fits.run.settings.confidence),
            covariance=self._covariance(seen[0], gone) if B == 1 else None,
            joint={name: j for name, j in joint.items() if j is not None},
            boundary=np.asarray(np.any(model.at_bound, axis=0)),
            converged=np.asarray(model.converged, dtype=bool),
            notes=bound_notes(tuple(fits.component(k) for k in model.node), model) if B == 1 else (),
        )

    def _variance(self, one: Whitened) -> Array:
        found = sandwich.cluster_variance(one.weights.a, one.scores[:, :, None])
        return np.asarray(self._scale * found[:, 0])

    def _df(self, one: Whitened) -> Array:
        if self.remedy.df == "satterthwaite":
            return sandwich.cluster_df(one.weights.a, one.weights.b)
        return np.full(len(self.names), self.part.count - 1.0 if self.remedy.df == "clusters" else np.inf)

    def _covariance(self, one: Whitened, gone: Flags) -> Array:
        """(p, p) of the coefficients."""
        p = self.design.p
        block = self._scale * sandwich.cluster_covariance(one.weights.a[:p], one.scores[:, :, None])[:, :, 0]
        return blanked(np.asarray(block), gone[:p])

    def whitened(self, algebra: Chosen, model: ErrorModel, y: Response, b: int) -> Whitened:
        """Rows multiplied by V̂^{−½}, their QR, and the scores of the GLS residual."""
        theta = model.theta[:, b]
        delta = reml.reduced(algebra.gram(theta, y))[0][:, 0]
        rest = y.residual[:, :1] - self.design.Q @ delta[:, None]
        both = algebra.whiten(theta, np.hstack([self.design.Q, rest]))
        Q, R = np.linalg.qr(both[:, :-1])
        W = np.linalg.solve(R.T, self.W)
        power = self.remedy.kind if self.remedy.kind in ("CR2", "CR3") else "CR0"
        weights = sandwich.adjust(sandwich.grams(Q, self.part), W, power)
        return Whitened(y.coef[:, 0] + delta, weights, self.part.sums(Q * both[:, -1:]))

    def _joint(self, seen: list[Whitened], columns: tuple[int, ...]) -> Joint | None:
        pick, q = list(columns), len(columns)
        if any(self.design.names[j] in self.unusable for j in columns):
            return None
        F, df2 = np.full(len(seen), np.nan), np.full(len(seen), np.nan)
        for b, one in enumerate(seen):
            effect = (self.W[:, pick].T @ one.coef)[:, None]
            block = self._scale * sandwich.cluster_covariance(one.weights.a[pick], one.scores[:, :, None])
            wald = reference.wald(effect, block)
            if self.remedy.df != "satterthwaite":
                F[b] = wald[0] / q
                df2[b] = self.part.count - 1.0 if self.remedy.df == "clusters" else np.inf
                continue
            eta = sandwich.cluster_joint_df(one.weights.a[pick], one.weights.b[pick])
            found = hotelling_joint(wald, q, eta)
            if found is not None:
                F[b], df2[b] = float(found[0][0]), float(np.ravel(found[2])[0])
        if np.all(np.isnan(F)):
            return None
        return f_joint(F, q, df2)

    def account(self, fits: Fits) -> Account:
        model = fits[self.remedy.node(fits)]
        items = [
            (f"variance of {fits.component(key).label}", f"{float(model.variances[key][0]):.6g}")
            for key in model.node
        ]
        items += [
            ("variance of row noise", f"{float(model.variances['row'][0]):.6g}"),
            *sizes_of(self.part),
            ("working model", "the fitted random intercepts"),
        ]
        return Account(
            estimator="generalised least squares, error parameters by restricted maximum likelihood: "
            f"a random intercept of {' and '.join(fits.component(k).label for k in model.node)}",
            covariance=f"sandwich with one score per {self.remedy.at}, the rows whitened by the mixed model "
            f"({self.remedy.kind})",
            factor=_FACTOR[self.remedy.kind],
            df_rule=self.rule,
            reference="normal" if self.remedy.df == "normal" else "t",
            items=tuple(items),
            source="liang-zeger-1986, bell-mccaffrey-2002, pustejovsky-tipton-2018",
        )


@dataclass(frozen=True)
class MixedRobust(Plain):
    """The estimate of a random-intercept model, its covariance from clusters (Liang & Zeger 1986).

    The weights come from the mixed model, the uncertainty from how whole clusters scatter: CR2 on the rows
    whitened by V̂, with Satterthwaite df under V̂ (Bell & McCaffrey 2002, with V̂ as working model). Valid
    when the error model is wrong within clusters: slopes that vary, unequal spread, dependence in time.
    The symmetric root is taken in the whitened rows; other programs take it in the rows themselves, which
    gives other, equally unbiased CR2 values unless clusters are alike.
    """

    kind: Kind = "CR2"
    df: ClusterDf = "satterthwaite"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "mixed-robust"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "liang-zeger-1986"

    @property
    def name(self) -> str:
        return f"random intercept, cluster-robust by {self.at}" if self.at else "random intercept, robust"

    def abouts(self, design: Design) -> tuple[str, ...]:
        """Levels with an intercept that can be estimated, outermost first."""
        if design.group is None:
            return ()
        found, _ = declared(design, self.limits)
        keys = tuple(level.key for level in design.group.levels)
        return tuple(k for k in keys if f"group:{k}" in found) or keys[:1]

    def covering(self, fits: Fits) -> frozenset[Family]:
        return covered(fits.design, fits.design.partitions[self.at])

    def keys(self, design: Design) -> tuple[str, ...]:
        """Intercepts that lie within the clusters, the clusters' own first. Raises NotSupported."""
        found, refused = declared(design, self.limits)
        own = f"group:{self.at}"
        if own not in found or design.group is None:
            raise refused.get(own, Refusal(f"these data have no group level named {self.at}")).error()
        part = design.group[self.at]
        return tuple(
            f"group:{level.key}"
            for level in design.group.levels
            if f"group:{level.key}" in found and part.relation(level) in ("same", "nests")
        )

    def node(self, fits: Fits) -> frozenset[str]:
        return frozenset(self.keys(fits.design))

    def prepare(self, design: Design, working: ErrorModel | None = None) -> MixedRobustReady:
        positive_m(design)
        self.keys(design)
        assert design.group is not None
        part = design.group[self.at]
        names, W = reported(design)
        weights = sandwich.adjust(design.scores(part), W, "CR2")
        _, unusable = judged(weights, part, names, self.at, self.df)
        if part.count <= design.p:
            raise NotSupported(
                f"{part.count} clusters of {self.at} and {design.p} coefficients: the scatter of so few "
                "clusters leaves some combination of coefficients with no spread at all",
                "Use the random intercept with its own covariance, or a smaller model.",
            )
        return MixedRobustReady(design, names, W, CLUSTER_RULES[self.df], unusable, remedy=self, part=part)

    def conventions(self) -> tuple[tuple[str, MixedRobust], ...]:
        return (
            ("CR0 with a normal quantile", replace(self, kind="CR0", df="normal")),
            ("CR1, factor G/(G − 1), t with G − 1 df", replace(self, kind="CR1", df="clusters")),
            ("CR2 with G − 1 df", replace(self, kind="CR2", df="clusters")),
            ("CR3 with its own Satterthwaite df", replace(self, kind="CR3")),
        )
