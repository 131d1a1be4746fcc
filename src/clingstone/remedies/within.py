"""What varies within groups alone: the levels of one or two groupings are absorbed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.derived import onto, sweep
from clingstone.design.design import Design
from clingstone.maths import sandwich
from clingstone.maths.estimable import Reduced, reduced
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal, memory
from clingstone.remedies.clusters import clusters, covered, group_levels
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.linear import few_df, stop_if_none_left
from clingstone.remedies.means import means
from clingstone.remedies.remedy import Account, Estimand, Estimates, rows
from clingstone.remedies.sandwich import CR, ClusterReady, decided_by_one

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel

EXPLICIT = 150  # cells of the second way, which are columns of the model, at the most
GROUPED = Needs(parts=frozenset({"group"}), known_design=True)


@dataclass(frozen=True, eq=False, kw_only=True)
class WithinReady(ClusterReady):
    """A cluster-robust fit on a design of its own. inner : that design. told : rows with an estimate."""

    inner: Design
    told: tuple[bool, ...]
    absorbed: Partition | None
    second: Partition | None
    factor: float

    @property
    def _scale(self) -> float:
        return self.factor

    def carry(self, fits: Fits) -> Fits:
        """The same y over the inner design."""
        response = (
            onto(fits.response, self.inner)
            if self.absorbed is None
            else sweep(fits.response, self.inner, self.absorbed)
        )
        return Fits(response, fits.run)

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
            items.append((f"cells of {self.second.key}, as columns", f"{self.second.count}"))
        ways = [part.key for part in (self.absorbed, self.second) if part is not None]
        return replace(
            found,
            estimator=f"least squares within {' and '.join(ways)}",
            items=tuple(items),
            source=f"{found.source}, mundlak-1978",
        )


# ---- fixed-effects ---------------------------------------------------------------------------


@dataclass(frozen=True)
class FixedEffects:
    """Every group has a level of its own (one or two groupings), swept out before the fit.

    Only what varies within groups is estimated, free of whatever is constant there. CR2 by the absorbed
    grouping with its Satterthwaite df: absorbed means that lie within clusters leave both unchanged
    (Pustejovsky & Tipton 2018). Of two crossed groupings the first is absorbed and clustered by; the cells
    of the second are columns of the model, so that CR2 and df know of them.
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
            TOGETHER.join((a.key, b.key) if b.count <= max(EXPLICIT, a.count) else (b.key, a.key))
            for i, a in enumerate(parts)
            for b in parts[i + 1 :]
            if a.relation(b) == "crossed"
        ]
        return (*keys, *pairs)

    def covering(self, fits: Fits) -> frozenset[Family]:
        return covered(fits.design, clusters(fits.design, self.at.split(TOGETHER)[0]))

    def working(self, fits: Fits) -> ErrorModel | None:
        return None

    def prepare(self, design: Design, working: ErrorModel | None = None) -> WithinReady:
        part, *more = (clusters(design, key) for key in self.at.split(TOGETHER))
        second = more[0] if more else None
        names, C = rows(design)
        X = design.Q @ design.basis.R
        length = np.linalg.norm(design.basis.R, axis=0)
        if second is not None:
            dummies = _dummies(design, second)
            X, length = np.hstack([X, dummies]), np.append(length, np.linalg.norm(dummies, axis=0))
            C = np.hstack([C, np.zeros((len(C), dummies.shape[1]))])
        found = reduced(_swept(design, part, X), length, C)
        inner = inner_design(design, found, part.count)
        unusable = self._untold(design, names, found)
        stop_if_none_left(names, unusable)
        if inner.m < 1:
            raise NotSupported(
                f"{design.n} rows less {part.count} means of {part.key} and {len(found.kept)} columns leave "
                "no residual degrees of freedom",
                "More rows in each group would be needed.",
            )
        ready = within_ready(design, inner, part, names, found.W, unusable, self.kind, part, second)
        return ready if second is None else replace(ready, notes=(_one_way(part, second),))

    def _untold(self, design: Design, names: tuple[str, ...], found: Reduced) -> dict[str, Refusal]:
        where = self.at.replace(TOGETHER, " and ")
        out = {}
        for j, (name, told) in enumerate(zip(names, found.told, strict=True)):
            if not told:
                flat = j < design.p and found.empty[j]
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


def within_ready(
    design: Design,
    inner: Design,
    part: Partition,
    names: tuple[str, ...],
    W: Array,
    unusable: Mapping[str, Refusal],
    kind: CR,
    absorbed: Partition | None,
    second: Partition | None,
) -> WithinReady:
    told = tuple(name not in unusable for name in names)
    weights = sandwich.adjust(inner.scores(part), W, kind if kind in ("CR2", "CR3") else "CR0")
    own = kind in ("CR2", "CR3")
    df = sandwich.cluster_df(weights.a, weights.b) if own else np.full(len(names), part.count - 1.0)
    unusable = {**few_df(names, df), **decided_by_one(weights, part, names, part.key), **unusable}
    stop_if_none_left(names, unusable)
    return WithinReady(
        design,
        names,
        W,
        df[:, None],
        "Satterthwaite" if own else "clusters − 1",
        unusable,
        kind=kind,
        at=part.key,
        part=part,
        weights=weights,
        own_df=own,
        inner=inner,
        told=told,
        absorbed=absorbed,
        second=second,
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


def _swept(design: Design, part: Partition, X: Array) -> Array:
    """Columns, on the scale of the basis, less their (weighted) cell means."""
    held = means(design, part, X)[part.codes]
    return np.asarray(X - (held if design.root is None else design.root[:, None] * held))


def _dummies(design: Design, part: Partition) -> Array:
    """(n, cells − 1) indicators of the second way, on the scale of the basis."""
    if part.count > EXPLICIT:
        raise NotSupported(
            f"{part.key} has {part.count} cells, and as a second absorbed grouping it may have {EXPLICIT}",
            "Absorb the other grouping alone, or use multiway-cluster.",
        )
    memory(8.0 * design.n * part.count * 4, f"{part.count} indicator columns of {part.key}")
    out = np.zeros((design.n, part.count))
    out[np.arange(design.n), part.codes] = 1.0 if design.root is None else design.root
    return out[:, 1:]
