"""What an examination by partitions gives back: plain numbers and words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from clingstone.display import Column, Table, amount, p_value, significant
from clingstone.evidence.finding import Reading
from clingstone.needs import InputError, Refusal
from clingstone.remedies.remedy import Refit

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Sized:
    """One test of a table in partitions: the size of an effect before its p."""

    test: str
    about: str
    statistic: float
    df: float | None
    df2: float | None
    p: float
    p_method: str
    estimate: float
    low: float
    high: float
    estimate_name: str


def sized(test: str, about: str, r: Reading) -> Sized:
    def one(value: Any) -> float:
        return float("nan") if value is None else float(np.ravel(value)[0])

    return Sized(
        test,
        about,
        one(r.statistic),
        r.df,
        r.df2,
        one(r.p),
        r.p_method,
        one(r.estimate),
        one(r.low),
        one(r.high),
        r.estimate_name,
    )


@dataclass(frozen=True)
class Parts:
    """What ``examine_parts`` gives back: plain numbers and words.

    tests, refits : in reading order. refused : what was asked and not done, and why. rho : AR(1)
    correlation per step, NaN without time. dropped : rows left out, by reason.
    """

    n: int
    partitions: int
    groups: int
    tests: tuple[Sized, ...]
    refits: tuple[Refit, ...]
    refused: Mapping[str, Refusal]
    dropped: Mapping[str, int]
    rho: float = float("nan")

    @property
    def intervals(self) -> pd.DataFrame:
        """One row per term × remedy, the columns of ``Examination.intervals``."""
        import pandas as pd

        return pd.DataFrame([vars(row) for found in self.refits for row in found.intervals])

    @property
    def evidence(self) -> pd.DataFrame:
        """One row per test."""
        import pandas as pd

        return pd.DataFrame([vars(found) for found in self.tests])

    def refit(self, remedy: str) -> Refit:
        """The refit of a remedy. Raises InputError when there is none."""
        for found in self.refits:
            if found.remedy == remedy:
                return found
        have = ", ".join(found.remedy for found in self.refits)
        raise InputError(f"there is no refit {remedy!r} here", f"Choose one of {have}.")

    def table(self) -> Table:
        """Tests and intervals, for a person."""
        heads = ("what", "about", "estimate", "95 % interval or p", "df")
        rows = [
            (t.test, t.estimate_name, amount(t.estimate), p_value(t.p), "" if t.df is None else f"{t.df:g}")
            for t in self.tests
        ]
        rows += [
            (
                r.remedy,
                i.term,
                amount(i.estimate),
                f"{amount(i.low)} to {amount(i.high)}",
                significant(i.df, 3),
            )
            for r in self.refits
            for i in r.intervals
        ]
        caption = f"{self.n:,} rows in {self.partitions} partitions, {self.groups:,} groups"
        note = " ".join(f"{what}: {why.reason}." for what, why in self.refused.items())
        return Table.of(caption, [Column(h, h) for h in heads], rows, note)

    def __str__(self) -> str:
        return self.table().to_text()

    def _repr_html_(self) -> str:
        return self.table().to_html()
