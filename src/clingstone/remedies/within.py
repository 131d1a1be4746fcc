"""What varies within groups alone: the levels of one or two groupings are absorbed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.derived import onto, sweep, whole
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import sandwich
from clingstone.maths.absorb import TwoWay
from clingstone.maths.estimable import Reduced, reduced
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal, memory
from clingstone.remedies.clusters import clusters, covered, group_levels
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.linear import stop_if_none_left
from clingstone.remedies.means import means
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Plain, rows
from clingstone.remedies.sandwich import CLUSTER_RULES, CR, ClusterDf, ClusterReady, judged

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel

DENSE = 3000  # cells of a second grouping, whose normal equations are that large
WORK = 5e8  # clusters × columns³ up to which matrices per cluster are decomposed


@dataclass(frozen=True, eq=False, kw_only=True)
class WithinReady(ClusterReady):
    """A cluster-robust fit on a design of its own. inner : that design. told : rows with an estimate."""

    inner: Design
    told: tuple[bool, ...]
    absorbed: Partition | None
    factor: float
    second: Partition | None = None
    both: TwoWay | None = None

    @property
    def _scale(self) -> float:
        return self.factor

    def carry(self, fits: Fits) -> Fits:
        """The same y over the inner design."""
        if self.both is not None:
            Y = self.both.sweep(whole(fits.response))
            e = self.inner.basis.project(Y)
            ss = np.einsum("ij,ij->j", e, e)
            return Fits(Response(self.inner, self.inner.Q.T @ Y, e, ss), fits.run)
        if self.absorbed is not None:
            return Fits(sweep(fits.response, self.inner, self.absorbed), fits.run)
        return Fits(onto(fits.response, self.inner), fits.run)

    def fit(self, fits: Fits) -> Estimates:
        found = super().fit(self.carry(fits))
        estimate = np.where(np.array(self.told)[:, None], found.estimate, np.nan)
        return replace(found, estimate=estimate)

    def account(self, fits: Fits) -> Account:
        found = super().account(fits)
        items = list(found.items)
        if self.absorbed is not None:
            items.append((f"means absorbed of {self.absorbed.key}", f"{self.absorbed.count}"))
        if self.second is not None:
            how = "as columns" if self.both is None else "absorbed too"
            items.append((f"cells of {self.second.key}, {how}", f"{self.second.count}"))
        ways = [part.key for part in (self.absorbed, self.second) if part is not None]
        return replace(
            found,
            estimator=f"least squares within {' and '.join(ways)}",
            items=tuple(items),
            source=f"{found.source}, mundlak-1978",
        )


# ---- fixed-effects ---------------------------------------------------------------------------


@dataclass(frozen=True)
class FixedEffects(Plain):
    """Every group has a level of its own (one or two groupings), swept out before the fit.

    Only what varies within groups is estimated, free of whatever is constant there. CR2 by the absorbed
    grouping with its Satterthwaite df: absorbed means that lie within clusters leave both unchanged
    (Pustejovsky & Tipton 2018). Of two crossed groupings the first is absorbed and clustered by; the cells
    of the second are columns of the model, so that CR2 and df know of them; where that would cost too
    much both are swept out and CR1 with G − 1 df is given.
    """

    kind: CR = "CR2"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "fixed-effects"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "within"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "pustejovsky-tipton-2018"

    @property
    def name(self) -> str:
        return f"within {self.at.replace(TOGETHER, ' and ')}" if self.at else "within groups"

    def abouts(self, design: Design) -> tuple[str, ...]:
        """Group levels, and pairs of them that cross."""
        keys = group_levels(design)
        parts = [design.partitions[key] for key in keys]
        pairs = [
            TOGETHER.join((a.key, b.key) if b.count <= max(DENSE, a.count) else (b.key, a.key))
            for i, a in enumerate(parts)
            for b in parts[i + 1 :]
            if a.relation(b) == "crossed"
        ]
        return (*keys, *pairs)

    def covering(self, fits: Fits) -> frozenset[Family]:
        return covered(fits.design, clusters(fits.design, self.at.split(TOGETHER)[0]))

    def prepare(self, design: Design, working: ErrorModel | None = None) -> WithinReady:
        part, *more = (clusters(design, key) for key in self.at.split(TOGETHER))
        names, C = rows(design)
        if not more:
            return self._one(design, part, names, C)
        columns = design.p + more[0].count
        if part.count * float(columns) ** 3 <= WORK:
            return self._explicit(design, part, more[0], names, C)
        return self._swept(design, part, more[0], names, C)

    def _one(self, design: Design, part: Partition, names: tuple[str, ...], C: Array) -> WithinReady:
        """One grouping: its means swept out."""
        X = less_means(design, part, design.Q @ design.basis.R)
        found = reduced(X, np.linalg.norm(design.basis.R, axis=0), C)
        inner = inner_design(design, found, part.count)
        unusable = self._untold(design, names, found)
        _stop(names, unusable, inner)
        weights = adjusted(inner, part, found.W, self.kind)
        return within_ready(design, inner, part, names, found.W, weights, unusable, self.kind, part)

    def _explicit(
        self, design: Design, part: Partition, second: Partition, names: tuple[str, ...], C: Array
    ) -> WithinReady:
        """Two groupings, the second as columns, so that matrices and df per cluster know of it."""
        memory(8.0 * design.n * second.count * 4, f"{second.count} indicator columns of {second.key}")
        cells = np.zeros((design.n, second.count))
        cells[np.arange(design.n), second.codes] = 1.0 if design.root is None else design.root
        X = np.hstack([cells, design.Q @ design.basis.R])  # cells first: where aliased, they are kept
        C = np.hstack([np.zeros((len(C), second.count)), C])
        found = reduced(less_means(design, part, X), np.linalg.norm(X, axis=0), C)
        inner = inner_design(design, found, part.count)
        unusable = self._untold(design, names, found, second.count)
        _stop(names, unusable, inner)
        weights = adjusted(inner, part, found.W, self.kind)
        ready = within_ready(design, inner, part, names, found.W, weights, unusable, self.kind, part)
        return replace(ready, second=second, notes=(_one_way(part, second),))

    def _swept(
        self, design: Design, part: Partition, second: Partition, names: tuple[str, ...], C: Array
    ) -> WithinReady:
        """Two groupings, both swept out: CR1, for the second is then not seen cluster by cluster."""
        if second.count > DENSE:
            raise NotSupported(
                f"{second.key} has {second.count:,} cells; a second absorbed grouping may have {DENSE:,}",
                "Absorb the other grouping alone, or use multiway-cluster.",
            )
        both = TwoWay(part, second, design.root)
        X = both.sweep(design.Q @ design.basis.R)
        found = reduced(X, np.linalg.norm(design.basis.R, axis=0), C)
        inner = inner_design(design, found, both.rank)
        unusable = self._untold(design, names, found)
        _stop(names, unusable, inner)
        kind: CR = self.kind if self.kind in ("CR0", "CR1") else "CR1S"
        weights = adjusted(inner, part, found.W, kind)
        ready = within_ready(design, inner, part, names, found.W, weights, unusable, kind, part)
        columns = inner.p + both.rank - part.count
        notes: tuple[str, ...] = (_one_way(part, second),)
        if kind != self.kind:
            notes += (
                f"{self.kind} for {part.count:,} clusters and {columns:,} columns would cost too much; CR1 "
                f"and t with {part.count - 1:,} df are given.",
            )
        factor = sandwich.cluster_factor(kind, part.count, design.n, columns)
        return replace(ready, second=second, both=both, factor=factor, notes=notes)

    def _untold(
        self, design: Design, names: tuple[str, ...], found: Reduced, before: int = 0
    ) -> dict[str, Refusal]:
        """before : columns that stand in front of those of the design."""
        where = self.at.replace(TOGETHER, " and ")
        out = {}
        for j, (name, told) in enumerate(zip(names, found.told, strict=True)):
            if not told:
                flat = j < design.p and found.empty[before + j]
                reason = "it does not vary within" if flat else "other terms span what varies of it within"
                out[name] = Refusal(
                    f"{reason} {where}, whose levels are absorbed",
                    "within-between, cluster-robust or mixed-intercept estimate it.",
                )
        return out

    def conventions(self) -> tuple[tuple[str, FixedEffects], ...]:
        return (
            ("CR1, factor G/(G − 1) · (n − 1)/(n − p), absorbed levels not in p", replace(self, kind="CR1S")),
            ("CR1, factor G/(G − 1)", replace(self, kind="CR1")),
            ("CR3 with its own Satterthwaite df", replace(self, kind="CR3")),
        )


def _one_way(part: Partition, second: Partition) -> str:
    return (
        f"Clusters are those of {part.key}: beyond a common level of each {second.key}, dependence between "
        f"rows of one {second.key} is not covered."
    )


def adjusted(inner: Design, part: Partition, W: Array, kind: CR) -> sandwich.Adjusted:
    """Contrasts W (q, k) in the inner basis, adjusted cluster by cluster as the kind asks."""
    return sandwich.adjust(sandwich.grams(inner.Q, part), W, kind if kind in ("CR2", "CR3") else "CR0")


def within_ready(
    design: Design,
    inner: Design,
    part: Partition,
    names: tuple[str, ...],
    W: Array,
    weights: sandwich.Adjusted,
    unusable: Mapping[str, Refusal],
    kind: CR,
    absorbed: Partition | None,
) -> WithinReady:
    told = tuple(name not in unusable for name in names)
    own = kind in ("CR2", "CR3")
    rule: ClusterDf = "satterthwaite" if own else "clusters"
    df, unusable = judged(weights, part, names, part.key, rule, unusable)
    return WithinReady(
        design,
        names,
        W,
        df,
        CLUSTER_RULES[rule],
        unusable,
        kind=kind,
        at=part.key,
        part=part,
        weights=weights,
        own_df=own,
        inner=inner,
        told=told,
        absorbed=absorbed,
        factor=sandwich.cluster_factor(kind, part.count, design.n, inner.p),
    )


def inner_design(design: Design, found: Reduced, swept: int) -> Design:
    """A design of the reduced columns; it has no terms, for rows are named outside."""
    return replace(
        design,
        basis=found.basis,
        names=tuple(f"column {j + 1}" for j in found.kept),
        terms=(),
        contrasts=(),
        swept=design.swept + swept,
    )


def less_means(design: Design, part: Partition, X: Array) -> Array:
    """Columns, on the scale of the basis, less their (weighted) cell means."""
    held = means(design, part, X)[part.codes]
    return np.asarray(X - (held if design.root is None else design.root[:, None] * held))


def _stop(names: tuple[str, ...], unusable: Mapping[str, Refusal], inner: Design) -> None:
    stop_if_none_left(names, unusable)
    if inner.m < 1:
        raise NotSupported(
            f"{inner.n} rows less {inner.swept} absorbed means and {inner.p} columns leave no residual "
            "degrees of freedom",
            "More rows in each group would be needed.",
        )
