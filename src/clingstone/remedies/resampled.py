"""The wild cluster bootstrap: ordinary estimates, their law by resampling the scores of clusters."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import resample, sandwich
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import OverClusters, called, clusters, few_treated, rank_note
from clingstone.remedies.joint import Joint
from clingstone.remedies.linear import LinearReady, positive_m, reported, stop_if_none_left
from clingstone.remedies.remedy import KNOWN, Account, Estimand, Estimates, Price, multi
from clingstone.remedies.sandwich import decided_by_one

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

Weights = Literal["auto", "signs", "webb"]
EVERY = 12  # clusters up to which all sign patterns are counted out: 2048 of them
FEW_SIGNS = 8  # clusters below which there are too few patterns for p, and six-point weights are drawn
LEAST = 5  # clusters: with four, even six-point weights say next to nothing
MANY = 9999
SIMULATED = 399  # resamples for each of many columns of y
SOME = 512  # sign patterns that are all counted there too
WORK = 1e9  # multiplications that one column of y may cost, before draws are cut
BLOCK = 6_000_000  # weights held at once


@dataclass(frozen=True, eq=False, kw_only=True)
class ResampledReady(LinearReady):
    """Ordinary estimates with CR1 standard errors, which studentise resamples. at, part : clusters."""

    at: str
    part: Partition

    @property
    def _scale(self) -> float:
        return sandwich.cluster_factor("CR1S", self.part.count, self.design.n, self.design.p)

    def variance(self, response: Response) -> Array:
        z = np.einsum("gpb,pk->kgb", response.scores(self.part), self.W)
        return np.asarray(self._scale * np.sum(z**2, axis=1))

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        z = np.einsum("gpb,pk->kgb", response.scores(self.part), self.W[:, list(columns)])
        return np.asarray(self._scale * np.einsum("sgb,tgb->stb", z, z))

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        return None  # joint tests are resampled too, in ``fit``

    def ends(self, low: Array, high: Array) -> tuple[str, ...]:
        """A sentence where an interval of the first column has no end."""
        rows = zip(self.names, low[:, 0], high[:, 0], strict=True)
        open_ = [name for name, a, b in rows if np.isinf(a) or np.isinf(b)]
        if not open_:
            return ()
        return (
            f"On one side no value of {', '.join(open_)} is rejected, however far from the estimate: the "
            f"interval has no end there, so {self.part.count} clusters do not bound it.",
        )


@dataclass(frozen=True, eq=False, kw_only=True)
class WildReady(ResampledReady):
    """kind : "signs" or "webb". every : all sign patterns are counted out. draws : else so many."""

    kind: str
    every: bool
    draws: int

    def _counted(self, fits: Fits) -> bool:
        """All patterns are used; of many columns of y only where they are few."""
        return self.every and (fits.response.B == 1 or 2 ** (self.part.count - 1) <= SOME)

    def weights(self, fits: Fits) -> Iterator[tuple[Array, Array | None]]:
        """Blocks of (d, G) weights, and their squares if not all one; the same for every row and column."""
        G = self.part.count
        if self._counted(fits):
            yield resample.every_sign(G), None
            return
        rng = fits.run.child(f"wild cluster bootstrap:{self.at}")
        left = self.draws if fits.response.B == 1 else min(self.draws, SIMULATED)
        while left > 0:
            d = min(left, max(1, BLOCK // G))
            left -= d
            V = resample.random_signs(rng, d, G) if self.kind == "signs" else resample.random_webb(rng, d, G)
            yield V, None if self.kind == "signs" else V**2

    def fit(self, fits: Fits) -> Estimates:
        plain = super().fit(fits)
        response, alpha = fits.response, 1 - fits.run.settings.confidence
        M, S = self.design.scores(self.part), response.scores(self.part)
        low, high, p = (np.full(plain.se.shape, np.nan) for _ in range(3))
        left_out = 0
        d = 2 ** (self.part.count - 1) if self.every else self.draws
        step = max(1, int(2e6 / (d * self.design.p)))  # columns of y at once, to bound the memory
        for start in range(0, response.B, step):
            some = slice(start, start + step)
            for j, curves in self._curves(fits, M, S[:, :, some]).items():
                theta = plain.estimate[j, some]
                below, above = curves.ends(alpha)
                low[j, some], high[j, some], p[j, some] = theta - below, theta + above, curves.p(theta)
                left_out = max(left_out, curves.left_out)
        joint = self._joints(fits, M, S, plain.estimate) if multi(self.design) else {}
        return replace(plain, low=low, high=high, p=p, joint=joint, notes=self._found(low, high, left_out))

    def _curves(self, fits: Fits, M: Array, S: Array) -> dict[int, resample.Curves]:
        """Curves of every usable row, all its resamples together."""
        found: dict[int, list[resample.Curves]] = {
            j: [] for j, name in enumerate(self.names) if name not in self.unusable
        }
        counted = self._counted(fits)
        for V, V2 in self.weights(fits):
            A0 = resample.wild_sums(V, S)
            for j, blocks in found.items():
                blocks.append(resample.wild(V, V2, M, S, self.W[:, j], A0, counted))
        return {j: resample.Curves.joined(blocks) for j, blocks in found.items()}

    def _joints(self, fits: Fits, M: Array, S: Array, estimate: Array) -> dict[str, Joint]:
        out: dict[str, Joint] = {}
        for term in multi(self.design):
            pick = list(term.columns)
            unfit = any(self.design.names[j] in self.unusable for j in pick)
            if unfit or len(pick) >= self.part.count:
                continue
            found = [
                resample.wild_joint(
                    (V for V, _ in self.weights(fits)),
                    M,
                    S[:, :, b],
                    self.W[:, pick],
                    estimate[pick, b],
                    self._counted(fits),
                )
                for b in range(fits.response.B)
            ]
            wald, p = np.array(found).T
            if np.isfinite(p).any():
                q = float(len(pick))
                out[term.name] = (wald / (q * self._scale), q, self.part.count - 1.0, p)
        return out

    def _found(self, low: Array, high: Array, left_out: int) -> tuple[str, ...]:
        out = self.ends(low, high)
        if left_out:
            out += (f"{left_out:,} resamples had no variance and were left out.",)
        return out

    def account(self, fits: Fits) -> Account:
        G = self.part.count
        d = 2 ** (G - 1) if self.every else self.draws
        kind = {"signs": "signs ±1 (Rademacher)", "webb": "six-point (Webb)"}[self.kind]
        how = f"all {d:,} distinct sign patterns" if self.every else f"{d:,} draws"
        return Account(
            estimator="ordinary least squares",
            covariance=f"sandwich with one score per {self.at} (CR1), which studentises each resample",
            factor="G/(G − 1) · (n − 1)/(n − p), in the shown standard error alone: it cancels in t",
            df_rule=self.rule,
            reference="the restricted wild cluster bootstrap of t, two-sided and symmetric",
            items=(
                ("clusters", f"{G}"),
                ("weights", kind),
                ("resamples", how),
                ("smallest p that can come out", f"{self.least:.2g}"),
                ("interval", "the values that are not rejected, found by inverting the test"),
            ),
            source="cameron-gelbach-miller-2008, roodman-2019, webb-2023, mackinnon-webb-2018",
        )

    @property
    def least(self) -> float:
        """The smallest p that these resamples can give."""
        G = min(self.part.count, 60)  # more than any number of draws
        patterns = 2.0 ** (G - 1) if self.kind == "signs" else 6.0**G / 2
        return 1 / patterns if self.every else max(1 / (self.draws + 1), 1 / patterns)


@dataclass(frozen=True)
class WildClusterBootstrap(OverClusters):
    """Ordinary estimates; p and interval by the restricted wild cluster bootstrap of the t statistic.

    Cameron, Gelbach & Miller (2008): the tested value is imposed, the scores of each cluster are multiplied
    by a random weight, and t is recomputed. Intervals hold the values that are not rejected. Up to 12
    clusters all sign patterns are counted out; below 8, where they are few, Webb's six-point weights are
    drawn.
    """

    kind: Weights = "auto"
    draws: int = MANY
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "wild-cluster-bootstrap"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = KNOWN
    source: ClassVar[str] = "cameron-gelbach-miller-2008"
    price: ClassVar[Price | None] = Price(1500.0, 10.0)

    @property
    def name(self) -> str:
        return f"wild cluster bootstrap, by {self.at}" if self.at else "wild cluster bootstrap"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> WildReady:
        positive_m(design)
        part = clusters(design, self.at)
        G = part.count
        if G < LEAST:
            raise NotSupported(
                f"there are {G} clusters of {called(design, self.at)}; resampling fewer than {LEAST} says "
                "next to nothing",
                f"{LEAST} clusters would be needed; with fewer, take them as a factor of the model.",
            )
        names, W = reported(design)
        refused, notes = few_treated(design, part, self.at, self.limits)
        alone = decided_by_one(sandwich.adjust(design.scores(part), W, "CR0"), part, names, self.at)
        unusable: Mapping[str, Refusal] = {**alone, **refused}
        stop_if_none_left(names, unusable)
        signs = self.kind == "signs" or (self.kind == "auto" and G >= FEW_SIGNS)
        every = signs and G <= EVERY
        return WildReady(
            design,
            names,
            W,
            np.full((len(names), 1), np.nan),
            "wild bootstrap",
            unusable,
            notes + rank_note(part, design.p) + _few_note(G),
            at=self.at,
            part=part,
            kind="signs" if signs else "webb",
            every=every,
            draws=_affordable(self.draws, G, design.p, len(names)),
        )

    def conventions(self) -> tuple[tuple[str, WildClusterBootstrap], ...]:
        return (
            ("signs ±1, all patterns where 12 clusters or fewer", replace(self, kind="signs")),
            ("six-point weights (Webb)", replace(self, kind="webb")),
            ("999 resamples", replace(self, draws=999)),
        )


def _few_note(G: int) -> tuple[str, ...]:
    """What few clusters leave of its promise, from equal and lopsided ones in tests/simulation/groups.py."""
    if not LEAST < G < FEW_SIGNS:
        return ()
    return (
        f"With {G} clusters the bootstrap is too sure of itself: in simulations with 6 and 7 its 95 % "
        "intervals held the truth in 91 to 93 % for a predictor of whole clusters, in 92 to 95 % for one of "
        "rows; those of cluster-robust in 94 to 97 %.",
    )


def _affordable(draws: int, G: int, p: int, k: int) -> int:
    """Draws that the work allows: never fewer than 399, and (draws + 1)·5 % a whole number."""
    most = WORK / (4.0 * G * p * k)
    return next((d for d in (draws, 9999, 4999, 1999, 999) if d <= draws and d <= most), min(draws, 399))
