"""Ordinary least squares with a variance over the periods that several series share."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.maths.longrun import Grid
from clingstone.maths.once import frozen
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.kernel import Bandwidth, KernelReady
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import Estimand, Plain
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel


@dataclass(frozen=True)
class PanelHac(Plain):
    """Ordinary estimates with scores summed over series in each period, then a kernel along time.

    Allows any dependence between rows of one period and dependence that fades along time (Driscoll &
    Kraay 1998); the number of series does not matter, the number of periods does. t is referred to its
    fixed-b law (Vogelsang 2012).
    """

    law: Literal["fixed-b", "normal"] = "fixed-b"
    bandwidth: Bandwidth = "wide"
    corrected: bool = True
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "panel-hac"
    name: ClassVar[str] = "robust to shocks that series share and to dependence along time"
    covers: ClassVar[frozenset[Family]] = frozenset({"serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"serial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "driscoll-kraay-1998"

    def abouts(self, design: Design) -> tuple[str, ...]:
        several = design.serial is not None and design.serial.part.count > 1
        return ("",) if several else ()

    def prepare(self, design: Design, working: ErrorModel | None) -> KernelReady:
        positive_m(design)
        part, grid = shared(design.serial, self.limits.periods_estimate)
        names, W = reported(design)
        notes: tuple[str, ...] = (
            "What a series keeps throughout is not covered; give each series its own level, or use "
            "cluster-robust by series.",
        )
        if part.count < self.limits.periods_easy:
            notes += (f"{part.count} periods are few for a variance along time.",)
        return KernelReady.made(
            design,
            names,
            W,
            grid,
            part=part,
            notes=notes,
            lags=self.bandwidth,
            fixed=self.law == "fixed-b",
            corrected=self.corrected,
            what="long-run variance of the scores summed in each period, Bartlett kernel",
            source="driscoll-kraay-1998",
        )

    def conventions(self) -> tuple[tuple[str, PanelHac], ...]:
        return (
            (
                "⌊4(T/100)^(2/9)⌋ lags, no factor, normal quantile",
                replace(self, bandwidth="textbook", corrected=False, law="normal"),
            ),
            (
                "⌊T^(1/4)⌋ lags, no factor, normal quantile",
                replace(self, bandwidth="quarter", corrected=False, law="normal"),
            ),
            (
                "⌊T^(1/4)⌋ lags, factor n/(n − p), normal quantile",
                replace(self, bandwidth="quarter", law="normal"),
            ),
        )


def shared(serial: Series | None, least: int) -> tuple[Partition, Grid]:
    """Rows by period, and the periods on the steps between the first and the last."""
    if serial is None:
        raise NotSupported("no serial structure was declared", "Name the time column with time=.")
    if serial.tick is None:
        raise NotSupported(
            "the times are irregularly spaced, so series share no periods",
            "Use cluster-robust by series, or by a column of periods.",
        )
    ticks, codes = np.unique(serial.tick, return_inverse=True)
    if len(ticks) < least:
        raise NotSupported(
            f"{len(ticks)} periods; a variance along time that all series share needs {least}",
            "With few periods and many series use cluster-robust by series.",
        )
    if int(np.bincount(codes).max()) < 2:
        raise NotSupported("no period holds rows of two series", "Use hac, which takes each series alone.")
    part = Partition("period", frozen(codes.astype(np.int32).ravel()), tuple(str(t) for t in ticks))
    return part, Grid.of(np.zeros(len(ticks), dtype=np.int32), ticks)
