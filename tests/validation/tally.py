"""From replicates to frequencies, coverages and widths, with their Monte-Carlo errors."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from tests.validation.worlds import SLOPE

NOMINAL = 0.95
Z = 1.959963984540054  # the oracle knows its variance: normal quantile
Line = Mapping[str, Any]


@dataclass(frozen=True)
class Share:
    """k of n."""

    k: int
    n: int

    @property
    def value(self) -> float:
        return self.k / self.n if self.n else float("nan")

    @property
    def error(self) -> float:
        """Monte-Carlo standard error; at 0 and at n that of half a count more or less."""
        if not self.n:
            return float("nan")
        p = (self.k + 0.5) / (self.n + 1)
        return float(np.sqrt(p * (1 - p) / self.n))

    def below(self, nominal: float, errors: float = 2.0) -> bool:
        """Clearly below: by more than ``errors`` Monte-Carlo errors at the nominal value."""
        return bool(self.n and self.value < nominal - errors * np.sqrt(nominal * (1 - nominal) / self.n))


@dataclass(frozen=True)
class Tally:
    """What a study found in one world. Coverages and widths are those of the interval of x."""

    world: str
    n: int
    errors: tuple[str, ...]
    states: Mapping[str, int]
    remedies: Mapping[str, int]
    structures: Mapping[str, int]
    cautions: Mapping[str, int]
    advised: Share
    ordinary: Share
    oracle: Share
    width: float  # median of advised over ordinary
    widest: float  # its 95 % quantile
    against_oracle: float  # median of advised over oracle
    by_remedy: Mapping[str, tuple[Share, float]]  # coverage and median width over ordinary
    factor: float  # median of the ledger's estimate
    true_factor: float
    factor_held: Share  # true factor inside the ledger's interval


def read(path: Path) -> dict[str, list[Line]]:
    """Replicates by world, in the order of the file."""
    out: dict[str, list[Line]] = {}
    for line in path.read_text(encoding="utf-8").splitlines():
        one = json.loads(line)
        out.setdefault(one["world"], []).append(one)
    return out


def holds(row: Iterable[Any]) -> bool:
    _, _, _, _, _, low, high, _ = row
    return bool(low <= SLOPE <= high)


def tally(world: str, lines: list[Line]) -> Tally:
    good = [line for line in lines if "error" not in line]
    advised, width, against = [], [], []
    rows: dict[str, list[tuple[bool, float]]] = {}
    ordinary, oracle, held = [], [], []
    for line in good:
        by = {(row[0], row[1]): row for row in line["rows"]}
        base = by["ordinary", ""]
        wide = base[6] - base[5]
        truth = line["oracle"]
        ordinary.append(holds(base))
        oracle.append(abs(truth["estimate"] - SLOPE) <= Z * truth["se"])
        for (remedy, at), row in by.items():
            rows.setdefault(f"{remedy} {at}".strip(), []).append((holds(row), (row[6] - row[5]) / wide))
        if line["factor"] is not None:
            low, _, high = line["factor"]
            held.append(low - 1e-9 <= truth["factor"] <= high + 1e-9)
        row = by.get((line["remedy"], line["at"]))
        if row is not None:
            advised.append(holds(row))
            width.append((row[6] - row[5]) / wide)
            against.append((row[6] - row[5]) / (2 * Z * truth["se"]))
    factors = [line["factor"][1] for line in good if line["factor"] is not None]
    return Tally(
        world=world,
        n=len(lines),
        errors=tuple(line["error"] for line in lines if "error" in line),
        states=Counter(line["state"] for line in good),
        remedies=Counter(line["remedy"] or "none" for line in good),
        structures=Counter("+".join(line["structures"]) or "none" for line in good),
        cautions=Counter(rule for line in good for rule in line["cautions"]),
        advised=Share(sum(advised), len(advised)),
        ordinary=Share(sum(ordinary), len(ordinary)),
        oracle=Share(sum(oracle), len(oracle)),
        width=_quantile(width, 0.5),
        widest=_quantile(width, 0.95),
        against_oracle=_quantile(against, 0.5),
        by_remedy={
            k: (Share(sum(h for h, _ in v), len(v)), _quantile([w for _, w in v], 0.5))
            for k, v in rows.items()
        },
        factor=_quantile(factors, 0.5),
        true_factor=_quantile([line["oracle"]["factor"] for line in good], 0.5),
        factor_held=Share(sum(held), len(held)),
    )


def _quantile(values: list[float], q: float) -> float:
    return float(np.quantile(values, q)) if values else float("nan")
