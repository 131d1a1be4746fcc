"""Ordinary estimates with the jackknife over clusters: each cluster left out in turn."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import sandwich
from clingstone.maths.once import Array
from clingstone.needs import Family, Limits, Needs
from clingstone.remedies.clusters import OverClusters, clusters, rank_note
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import KNOWN, Account, Estimand
from clingstone.remedies.sandwich import CLUSTER_RULES, ClusterReady, judged

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

_FACTOR = {
    "full": "(G − 1)/G · Σ(β₍g₎ − β)², deviations from the estimate of all clusters",
    "mean": "(G − 1)/G · Σ(β₍g₎ − β̄)², deviations from the mean of the leave-out estimates",
    "CR3": "Σ(β₍g₎ − β)², without (G − 1)/G",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class JackknifeReady(ClusterReady):
    """centre : from what the leave-out estimates are measured, or "CR3" for no factor."""

    centre: str

    @property
    def _scale(self) -> float:
        return 1.0 if self.centre == "CR3" else (self.part.count - 1) / self.part.count

    def moves(self, response: Response, rows: tuple[int, ...]) -> Array:
        """(k, G, B) by how much each cluster, put back, moves a row: θ̂ − θ̂₍g₎ = a_g's_g."""
        a = self.weights.a[list(rows)]
        return np.asarray(np.einsum("kgp,gpb->kgb", a, response.scores(self.part)))

    def variance(self, response: Response) -> Array:
        if self.centre != "mean":
            return super().variance(response)
        each = [self.block(response, (j,))[0, 0] for j in range(len(self.names))]
        return np.stack(each)

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        if self.centre != "mean":
            return super().block(response, columns)
        z = self.moves(response, columns)
        z = z - z.mean(axis=1, keepdims=True)
        return np.asarray(self._scale * np.einsum("sgb,tgb->stb", z, z))

    def account(self, fits: Fits) -> Account:
        rows = tuple(j for j, name in enumerate(self.names) if name not in self.unusable)
        moves = self.moves(fits.response, rows)[:, :, 0]
        se = np.sqrt(self.variance(fits.response)[list(rows), 0])
        against = np.abs(moves) / np.where(se > 0, se, np.inf)[:, None]
        k, g = np.unravel_index(int(np.argmax(against)), against.shape)
        found = super().account(fits)
        largest = (
            f"{self.names[rows[k]]} by {-moves[k, g]:+.4g}, {against[k, g]:.2g} standard errors "
            f"({self.part.labels[g]} left out)"
        )
        return replace(
            found,
            covariance=f"jackknife over clusters of {self.at}",
            factor=_FACTOR[self.centre],
            items=(*found.items, ("largest move when one cluster is left out", largest)),
            source="mackinnon-nielsen-webb-2023, bell-mccaffrey-2002, satterthwaite-1946",
        )


@dataclass(frozen=True)
class ClusterJackknife(OverClusters):
    """Ordinary estimates; variance from leaving out one cluster at a time, with its Satterthwaite df.

    Equal to CR3 times (G − 1)/G (Bell & McCaffrey 2002; MacKinnon, Nielsen & Webb 2023). The df are those
    of that quadratic form under independent errors of one variance.
    """

    centre: Literal["full", "mean", "CR3"] = "full"
    df: Literal["satterthwaite", "clusters"] = "satterthwaite"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "cluster-jackknife"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = KNOWN
    source: ClassVar[str] = "mackinnon-nielsen-webb-2023"

    @property
    def name(self) -> str:
        return f"cluster jackknife, by {self.at}" if self.at else "cluster jackknife"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> JackknifeReady:
        positive_m(design)
        part = clusters(design, self.at)
        names, W = reported(design)
        weights = sandwich.adjust(design.scores(part), W, "CR3")
        df, unusable = judged(weights, part, names, self.at, self.df)
        return JackknifeReady(
            design,
            names,
            W,
            df,
            CLUSTER_RULES[self.df],
            unusable,
            rank_note(part, design.p),
            kind="CR3",
            at=self.at,
            part=part,
            weights=weights,
            own_df=self.df == "satterthwaite",
            centre=self.centre,
        )

    def conventions(self) -> tuple[tuple[str, ClusterJackknife], ...]:
        return (
            ("t with G − 1 df", replace(self, df="clusters")),
            (
                "about the mean of the leave-out estimates, G − 1 df",
                replace(self, centre="mean", df="clusters"),
            ),
            ("CR3, without the factor (G − 1)/G", replace(self, centre="CR3")),
            ("CR3 with G − 1 df", replace(self, centre="CR3", df="clusters")),
        )
