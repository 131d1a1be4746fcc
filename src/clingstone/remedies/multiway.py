"""Ordinary estimates with a covariance robust to clusters that cross each other."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import listed
from clingstone.maths import sandwich
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import clusters, covered, few_treated, group_levels
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.joint import Joint, wald_joint
from clingstone.remedies.linear import LinearReady, positive_m, reported, stop_if_none_left
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Plain
from clingstone.remedies.sandwich import decided_by_one

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

Factor = Literal["smallest", "own", "none"]
Repair = Literal["clip", "sum", "none"]
MOST = 3  # ways: seven pieces
SOME = 25  # clusters in the smaller way below which the published advice is to be wary


@dataclass(frozen=True, eq=False, kw_only=True)
class MultiwayReady(LinearReady):
    """ways : the crossed partitions. pieces : (sign, factor, partition) of the sum."""

    ways: tuple[Partition, ...]
    pieces: tuple[tuple[int, float, Partition], ...]
    factor: Factor
    repair: Repair

    def raw(self, response: Response) -> Array:
        """(p, p, B) the meat as the signed sum of its pieces, in the basis."""
        out = np.zeros((self.design.p, self.design.p, response.B))
        for sign, factor, part in self.pieces:
            S = response.scores(part) if part.count < self.design.n else None
            if S is not None:
                out += sign * factor * np.einsum("gpb,gqb->pqb", S, S)
            else:  # every cell holds one row
                out += sign * factor * sandwich.row_meat(self.design.Q, response.residual)
        return out

    def meat(self, response: Response) -> Array:
        return sandwich.clipped(self.raw(response))[0] if self.repair == "clip" else self.raw(response)

    def variance(self, response: Response) -> Array:
        found = np.einsum("pk,pqb,qk->kb", self.W, self.meat(response), self.W)
        return np.where(found > 0, found, np.nan)

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        W = self.W[:, list(columns)]
        return np.asarray(np.einsum("ps,pqb,qt->stb", W, self.meat(response), W))

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        q, least = len(columns), min(part.count for part in self.ways)
        if q >= least:
            return None
        return wald_joint(wald, q, float(self.df[0, 0]))

    def fit(self, fits: Fits) -> Estimates:
        found = super().fit(fits)
        return replace(found, notes=self._found(fits.response))

    def _found(self, response: Response) -> tuple[str, ...]:
        negative = int(np.sum(sandwich.clipped(self.raw(response.column(0)))[1][:, 0] < 0))
        if not negative or self.repair == "sum":
            return ()
        done = (
            "set to zero, which makes it a covariance again and every interval no narrower"
            if self.repair == "clip"
            else "left as they are"
        )
        each = "eigenvalue is" if negative == 1 else "eigenvalues are"
        return (f"The signed sum of the clusterings is no covariance: {negative} {each} negative, {done}.",)

    def account(self, fits: Fits) -> Account:
        raw = self.raw(fits.response.column(0))
        values = sandwich.clipped(raw)[1][:, 0]
        names = [part.key for part in self.ways]
        least = min(part.count for part in self.ways)
        factor = {
            "smallest": f"G/(G − 1) · (n − 1)/(n − p) with G = {least} for every piece",
            "own": "G/(G − 1) · (n − 1)/(n − p), each piece with its own G",
            "none": "none",
        }[self.factor]
        repair = {
            "clip": "negative eigenvalues set to zero" if values[0] < 0 else "not needed",
            "sum": "the intersections are not subtracted",
            "none": "none",
        }[self.repair]
        items = [(f"clusters of {part.key}", f"{part.count}") for part in self.ways]
        items += [
            ("pieces", " ".join(f"{'+' if s > 0 else '−'} {p.key}" for s, _, p in self.pieces)),
            ("smallest eigenvalue over the largest", f"{values[0] / values[-1]:.3g}"),
            ("repair", repair),
        ]
        return Account(
            estimator="ordinary least squares",
            covariance=f"sandwich with scores by {' and '.join(names)}, less what they share",
            factor=factor,
            df_rule=self.rule,
            reference="t" if np.isfinite(self.df).all() else "normal",
            items=tuple(items),
            source="cameron-gelbach-miller-2011",
        )


@dataclass(frozen=True)
class MultiwayCluster(Plain):
    """Ordinary estimates with a covariance that allows dependence within each of several crossed groupings.

    Cameron, Gelbach & Miller (2011): the sum of the one-way sandwiches less those of the intersections.
    factor : "smallest" uses the smallest number of clusters in every piece. repair : the sum need not
    be a covariance; "clip" sets negative eigenvalues of its meat in the basis Q to zero, which does not
    depend on the units or the coding of X; "sum" leaves out the subtraction. t with min G − 1 df.
    """

    factor: Factor = "smallest"
    repair: Repair = "clip"
    normal: bool = False
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "multiway-cluster"
    covers: ClassVar[frozenset[Family]] = frozenset({"group"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "cameron-gelbach-miller-2011"

    @property
    def name(self) -> str:
        by = self.at.replace(TOGETHER, " and ")
        return f"cluster-robust, by {by}" if self.at else "cluster-robust, several ways"

    def abouts(self, design: Design) -> tuple[str, ...]:
        """All crossed group levels together, then pairs; none when no two cross."""
        keys = group_levels(design)
        parts = {key: design.partitions[key] for key in keys}
        sets = [
            some
            for size in range(min(len(keys), MOST), 1, -1)
            for some in itertools.combinations(keys, size)
            if all(parts[a].relation(parts[b]) == "crossed" for a, b in itertools.combinations(some, 2))
        ]
        return tuple(TOGETHER.join(some) for some in sets)

    def lacking(self, design: Design) -> Refusal:
        keys = group_levels(design)
        found = f"{listed(keys)} {'does' if len(keys) == 1 else 'do'} not" if keys else "no level can serve"
        return Refusal(
            f"two groupings that cross each other are needed; {found}",
            "Use cluster-robust, or declare crossed groups side by side with group=.",
        )

    def covering(self, fits: Fits) -> frozenset[Family]:
        ways = [fits.design.partitions[key] for key in self.at.split(TOGETHER)]
        return frozenset().union(*(covered(fits.design, part) for part in ways))

    def prepare(self, design: Design, working: ErrorModel | None = None) -> MultiwayReady:
        positive_m(design)
        keys = self.at.split(TOGETHER)
        if len(keys) < 2:
            raise NotSupported(
                f"{self.at} is one way of clustering", "Use cluster-robust, or name crossed groups."
            )
        ways = tuple(clusters(design, key) for key in keys)
        least = min(ways, key=lambda part: part.count)
        names, W = reported(design)
        unusable, notes = _few(design, ways, names, W, self.limits)
        stop_if_none_left(names, unusable)
        if least.count < SOME:
            notes += (
                f"{least.key} has {least.count} clusters: below about {SOME} in the smaller way, intervals "
                "of this kind tend to be too narrow.",
            )
        if least.count <= design.p:
            notes += (
                f"{least.count} clusters of {least.key} cannot carry the covariance of {design.p} "
                f"coefficients at once; joint tests of {least.count} or more are not given.",
            )
        df = np.full((len(names), 1), np.inf if self.normal else least.count - 1.0)
        return MultiwayReady(
            design,
            names,
            W,
            df,
            "normal quantile" if self.normal else "smallest number of clusters − 1",
            unusable,
            notes,
            ways=ways,
            pieces=self._pieces(design, ways, least.count),
            factor=self.factor,
            repair=self.repair,
        )

    def _pieces(
        self, design: Design, ways: tuple[Partition, ...], least: int
    ) -> tuple[tuple[int, float, Partition], ...]:
        out = []
        for size in range(1, 2 if self.repair == "sum" else len(ways) + 1):
            for some in itertools.combinations(ways, size):
                part = some[0]
                for other in some[1:]:
                    part = other.within(part, f"{part.key} × {other.key}")
                G = least if self.factor == "smallest" else part.count
                kind = "CR0" if self.factor == "none" else "CR1S"
                out.append(
                    (1 if size % 2 else -1, sandwich.cluster_factor(kind, G, design.n, design.p), part)
                )
        return tuple(out)

    def conventions(self) -> tuple[tuple[str, MultiwayCluster], ...]:
        return (
            ("each piece with its own number of clusters", replace(self, factor="own", repair="none")),
            ("the smallest number of clusters, without repair", replace(self, repair="none")),
            (
                "no small-sample factor, a normal quantile",
                replace(self, factor="none", repair="none", normal=True),
            ),
            ("the intersections not subtracted", replace(self, repair="sum")),
        )


def _few(
    design: Design, ways: tuple[Partition, ...], names: tuple[str, ...], W: Array, limits: Limits
) -> tuple[dict[str, Refusal], tuple[str, ...]]:
    """Rows that one cluster of some way decides, or that too few clusters carry."""
    unusable: dict[str, Refusal] = {}
    notes: tuple[str, ...] = ()
    for part in ways:
        found = sandwich.adjust(design.scores(part), W, "CR0")
        refused, some = few_treated(design, part, part.key, limits)
        unusable = {**refused, **decided_by_one(found, part, names, part.key), **unusable}
        notes += some
    return unusable, notes
