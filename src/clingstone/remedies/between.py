"""Each predictor parted into deviations from its group means and the means, both in one model."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference, sandwich
from clingstone.maths.estimable import reduced
from clingstone.maths.once import Array, once
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import OverGroups, clusters
from clingstone.remedies.joint import Joint, hotelling_joint, wald_joint
from clingstone.remedies.linear import stop_if_none_left
from clingstone.remedies.means import ordinary, varies
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates
from clingstone.remedies.sandwich import CR, ClusterReady
from clingstone.remedies.split import Split
from clingstone.remedies.within import WithinReady, adjusted, inner_design, within_ready

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits


@dataclass(frozen=True, eq=False, kw_only=True)
class BetweenReady(WithinReady):
    """differences : contrasts within less between, adjusted; wholes : joint tests by name."""

    differences: sandwich.Adjusted | None
    apart: Array  # (q, d) their weights in the inner basis
    wholes: Mapping[str, tuple[int, ...]]
    inverse: Array  # (p, k) the rows in the pooled fit, for comparison
    coefficients: int

    @property
    def own(self) -> tuple[int, ...]:
        return tuple(range(self.coefficients))

    def fit(self, fits: Fits) -> Estimates:
        return replace(super().fit(fits), names=self.names, ordinary=ordinary(fits.response, self.inverse))

    def joints(self, response: Response, estimate: Array) -> dict[str, Joint]:
        found = {name: self.joint_of(rows, response, estimate) for name, rows in self.wholes.items()}
        found["within against between"] = self.hausman(response)
        return {name: made for name, made in found.items() if made is not None}

    def hausman(self, response: Response) -> Joint | None:
        """Joint test that every within coefficient equals its between coefficient, cluster-robust."""
        if self.differences is None:
            return None
        a = self.differences.a
        V = self.factor * sandwich.cluster_covariance(a, response.scores(self.part))
        wald, q = reference.wald(self.apart.T @ response.coef, V), len(a)
        if np.all(np.isnan(wald)):
            return None
        if not self.own_df:
            return wald_joint(wald, q, self.part.count - 1.0)
        return hotelling_joint(wald, q, self._apart_df)

    @property
    @once
    def _apart_df(self) -> float:
        assert self.differences is not None
        return sandwich.cluster_joint_df(self.differences.a, self.differences.b)

    def account(self, fits: Fits) -> Account:
        found = ClusterReady.account(self, fits)
        test = self.hausman(self.carry(fits).response)
        items = list(found.items)
        if test is not None:
            F, q, df, p = test
            df2 = float(np.ravel(df)[0])
            words = f"F = {float(F[0]):.4g} on {q:g} and {df2:.4g} df, p = {float(p[0]):.3g}"
            items.append(("within against between, jointly", words))
        return replace(
            found,
            estimator=f"ordinary least squares on deviations from, and means of, each {self.at}",
            items=tuple(items),
            source=f"mundlak-1978, bell-jones-2015, {found.source}",
        )


@dataclass(frozen=True)
class WithinBetween(OverGroups):
    """Each predictor that varies within groups is split into its deviations and its group means.

    Mundlak (1978). Rows are "x [within]" and "x [between]"; columns that are constant within groups keep
    their names. CR2 by the same groups with Satterthwaite df. That all within coefficients equal their
    between coefficients is tested jointly: a Hausman test that unequal spread and any dependence inside
    groups leave valid.
    """

    kind: CR = "CR2"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "within-between"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "within"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "mundlak-1978"

    @property
    def name(self) -> str:
        return f"within and between {self.at}" if self.at else "within and between groups"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> BetweenReady:
        part = clusters(design, self.at)
        inside = varies(design, part)
        if not inside.any():
            raise NotSupported(
                f"no column varies within {self.at}, so there is nothing to split",
                "cluster-robust or means of groups serve columns that vary between groups only.",
            )
        split = Split.of(design, part, inside)
        names, C, old = split.rows(design)
        apart = split.differences()
        found = reduced(split.X, split.length, np.vstack([C, apart]))
        k = len(names)
        inner = inner_design(design, found, 0)
        unusable = {
            name: Refusal(
                f"its part {'within' if name.endswith('[within]') else 'between'} {self.at} cannot be told "
                "from the other columns",
                "The pooled coefficient, by cluster-robust, is still possible.",
            )
            for name, told in zip(names, found.told[:k], strict=True)
            if not told
        }
        stop_if_none_left(names, unusable)
        pick = k + np.flatnonzero(found.told[k:])
        both = adjusted(inner, part, found.W[:, [*range(k), *pick]], self.kind)
        W = found.W[:, :k]
        own = both.some(slice(k))
        base = within_ready(design, inner, part, names, W, own, unusable, self.kind, None)
        inherited = {f: getattr(base, f) for f in WithinReady.__dataclass_fields__}
        return BetweenReady(
            **inherited,
            differences=both.some(slice(k, None)) if len(pick) else None,
            apart=found.W[:, pick],
            wholes=split.wholes(design, base.unusable),
            inverse=design.basis.contrast(old),
            coefficients=split.coefficients,
        )

    def conventions(self) -> tuple[tuple[str, WithinBetween], ...]:
        return (
            ("CR1, factor G/(G − 1) · (n − 1)/(n − p), t with G − 1 df", replace(self, kind="CR1S")),
            ("CR3 with its own Satterthwaite df", replace(self, kind="CR3")),
        )
