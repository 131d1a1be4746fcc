"""From columns of y to frequencies, coverages and widths, with their Monte-Carlo errors."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from tests.validation.oracle import power
from tests.validation.worlds import SLOPE, World

Z = 1.959963984540054  # the oracle knows its variance: normal quantile
POWERED = 4  # designs that the power is measured on, each by 2,000 draws
Line = Mapping[str, Any]


@dataclass(frozen=True)
class Share:
    """k of n, from designs of their own: of each, how many and of how many."""

    parts: tuple[tuple[int, int], ...]

    @property
    def k(self) -> int:
        return sum(k for k, _ in self.parts)

    @property
    def n(self) -> int:
        return sum(n for _, n in self.parts)

    @property
    def value(self) -> float:
        return self.k / self.n if self.n else float("nan")

    @property
    def error(self) -> float:
        """Monte-Carlo standard error: that of independent draws (at 0 and at n of half a count more or
        less), or that of the designs as clusters where it is larger."""
        if not self.n:
            return float("nan")
        p = (self.k + 0.5) / (self.n + 1)
        return max(float(np.sqrt(p * (1 - p) / self.n)), self._between)

    @property
    def _between(self) -> float:
        """The standard error of a share over clusters: designs differ in what their columns share."""
        D = len(self.parts)
        if D < 2:
            return 0.0
        apart = sum((k - self.value * n) ** 2 for k, n in self.parts)
        return float(np.sqrt(D / (D - 1) * apart) / self.n)

    def below(self, wanted: float, errors: float = 2.0) -> bool:
        """Clearly below: by more than ``errors`` Monte-Carlo errors."""
        return bool(self.n) and self.value < wanted - errors * self.error


@dataclass(frozen=True)
class Tally:
    """What a study found in one world. Coverages and widths are those of the interval of x.

    exact, false, missed : of the families judged present against those that are there. power : of the
    oracle's tests of all of them, the mean over the first few designs. doubted : a missing part of the mean
    is named or in doubt. refused : no interval is advised. agreed : columns on which the batch and the front
    door say the same.
    """

    world: World
    n: int
    designs: int
    faults: tuple[str, ...]
    states: Mapping[str, int]
    remedies: Mapping[str, int]
    structures: Mapping[str, int]
    exact: Share
    false: Share
    missed: Share
    power: float
    doubted: Share
    refused: Share
    advised: Share
    ordinary: Share
    oracle: Share
    width: float  # median of advised over ordinary
    widest: float  # its 95 % quantile
    against_oracle: float  # median of advised over oracle
    by_remedy: Mapping[str, Share]  # coverage where it was the one advised
    factor: float  # median of the ledger's estimate
    true_factor: float
    factor_held: Share  # true factor inside the ledger's interval
    agreed: Share
    seconds: float  # of a column


def tally(world: World, lines: Iterable[Line]) -> Tally:
    """The designs of one world."""
    lines = list(lines)
    good = [line for line in lines if "error" not in line]
    columns = [one for line in good for one in line["columns"]]
    corrected = [(line, one) for line in good for one in line["columns"] if one["advised"] is not None]

    def share(of: Callable[[Line], bool | None]) -> Share:
        return _share([[of(one) for one in line["columns"]] for line in good])

    width = [length(one["advised"]) / length(one["ordinary"]) for _, one in corrected]
    against = [length(one["advised"]) / (2 * Z * line["oracle"]["se"]) for line, one in corrected]
    held = [
        [
            None if one["factor"] is None else inside(one["factor"], line["oracle"]["factor"])
            for one in line["columns"]
        ]
        for line in good
    ]
    names = {named(one) for _, one in corrected}
    checked = [[line["agreed"]] for line in good if line["agreed"] is not None]
    return Tally(
        world=world,
        n=len(columns),
        designs=len(lines),
        faults=tuple(line["error"] for line in lines if "error" in line),
        states=Counter(one["state"] for one in columns),
        remedies=Counter(one["remedy"] or "none" for one in columns),
        structures=Counter("+".join(one["structures"]) or "none" for one in columns),
        exact=share(lambda one: set(one["structures"]) == world.holds),
        false=share(lambda one: not set(one["structures"]) <= world.holds),
        missed=share(lambda one: not set(one["structures"]) >= world.holds),
        power=float(np.mean([power(world.design(d)[0], world.holds) for d in range(POWERED)])),
        doubted=share(lambda one: one["doubt"] or one["state"] == "mean first"),
        refused=share(lambda one: one["state"] == "not correctable"),
        advised=share(lambda one: holds(one["advised"])),
        ordinary=share(lambda one: holds(one["ordinary"])),
        oracle=_share(
            [
                [abs(b - SLOPE) <= Z * line["oracle"]["se"] for b in line["oracle"]["estimates"]]
                for line in good
            ]
        ),
        width=_quantile(width, 0.5),
        widest=_quantile(width, 0.95),
        against_oracle=_quantile(against, 0.5),
        by_remedy={
            name: share(lambda one, name=name: holds(one["advised"]) if named(one) == name else None)
            for name in sorted(names)
        },
        factor=_quantile([one["factor"][1] for one in columns if one["factor"] is not None], 0.5),
        true_factor=_quantile([line["oracle"]["factor"] for line in good], 0.5),
        factor_held=_share(held),
        agreed=_share(checked),
        seconds=sum(line["seconds"] for line in good) / max(len(columns), 1),
    )


def named(one: Line) -> str:
    return f"{one['remedy']} {one['at']}".strip()


def length(interval: tuple[float, float]) -> float:
    return interval[1] - interval[0]


def holds(interval: tuple[float, float] | None) -> bool | None:
    """Whether an interval holds the true coefficient; None where there is no interval."""
    return None if interval is None else bool(interval[0] <= SLOPE <= interval[1])


def inside(factor: tuple[float, float, float], true: float) -> bool:
    return bool(factor[0] - 1e-9 <= true <= factor[2] + 1e-9)


def _share(designs: Iterable[Iterable[bool | None]]) -> Share:
    """Of the answers that are not None, how many are yes; designs without one are left out."""
    told = ([one for one in answers if one is not None] for answers in designs)
    return Share(tuple((sum(one), len(one)) for one in told if one))


def _quantile(values: list[float], q: float) -> float:
    return float(np.quantile(values, q)) if values else float("nan")
