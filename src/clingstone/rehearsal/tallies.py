"""What a rehearsal says: plain numbers, each with its Monte-Carlo error, and the words for them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from clingstone.advice.entries import Score, Scores
from clingstone.display import Cell, Column, Table, count, number
from clingstone.rehearsal.study import FIELDS, Counts, Study
from clingstone.rehearsal.truths import DIFFERENT, Truth


@dataclass(frozen=True)
class Tally:
    """One remedy, one focus row, one truth.

    coverage, width, bias and rejection each with the Monte-Carlo standard error (mcse). width is the mean
    width of the interval; relative is it over that of the ordinary interval under the same truth. bias is
    the mean error of the estimate in its own standard deviations. rejection is how often p fell below
    1 − confidence although the true value was zero. failures : replicates without an interval. boundary :
    share of replicates with a dependence parameter at the end of its range.
    """

    remedy: str
    at: str
    term: str
    truth: str
    replicates: int
    coverage: float
    coverage_mcse: float
    width: float
    width_mcse: float
    relative: float
    bias: float
    bias_mcse: float
    rejection: float
    rejection_mcse: float
    failures: int
    boundary: float
    unsettled: float


@dataclass(frozen=True)
class Pair:
    """Two remedies on the same replicates: how often one interval held the true value and the other did not.

    difference is coverage of the first minus that of the second, over all truths, with its own mcse.
    """

    first: tuple[str, str]
    second: tuple[str, str]
    term: str
    only_first: int
    only_second: int
    difference: float
    mcse: float


@dataclass(frozen=True)
class Left:
    """A remedy that was not rehearsed, and why."""

    remedy: str
    at: str
    reason: str


@dataclass(frozen=True)
class Chosen:
    """How often the whole path ended in one remedy ("" for none), and its coverage there."""

    remedy: str
    at: str
    share: float
    coverage: float
    mcse: float


@dataclass(frozen=True)
class Walk:
    """The whole path inside each replicate: detect, advise, refit, then the advised interval.

    coverage and relative width (over the ordinary interval) are over all truths together.
    """

    replicates: int
    term: str
    coverage: float
    mcse: float
    relative: float
    chosen: tuple[Chosen, ...]


@dataclass(frozen=True)
class Rehearsal:
    """How each remedy did on replicates of the user's own design; plain.

    truths : what y was simulated from. tallies : remedy × term × truth. pairs : remedies side by side.
    scores : smallest coverage over truths and terms, for the advice. walks : the whole path per focus term,
    empty when it was not walked. left_out : remedies not rehearsed. stopped : where it stopped, in words.
    """

    truths: tuple[Truth, ...]
    tallies: tuple[Tally, ...]
    pairs: tuple[Pair, ...]
    scores: Scores
    walks: tuple[Walk, ...]
    left_out: tuple[Left, ...]
    replicates: int  # per truth
    confidence: float
    seed: int
    stopped: str

    def of(self, remedy: str, at: str = "") -> tuple[Tally, ...]:
        """All tallies of one remedy."""
        return tuple(t for t in self.tallies if (t.remedy, t.at) == (remedy, at))

    def table(self) -> Table:
        """Smallest coverage and mean width of every remedy, for a person."""
        columns = (
            Column("remedy", "remedy"),
            Column("at", "at"),
            Column("coverage", "smallest coverage (± 2 Monte-Carlo errors)", "right"),
            Column("width", "width over the ordinary", "decimal"),
        )
        rows = [
            [
                Cell(s.remedy, s.remedy),
                Cell(s.at, s.at),
                Cell(f"{number(100 * s.coverage, 1)} % (± {number(200 * s.mcse, 1)})", s.coverage),
                Cell(number(s.width, 2), s.width),
            ]
            for s in self.scores.rows
        ]
        words = f"Rehearsed with {count(self.replicates, 'replicate')} under each of "
        words += f"{count(len(self.truths), 'error model')}; {100 * self.confidence:g} % is promised"
        return Table.of(words, columns, rows, self.stopped).without_empty()

    def _repr_html_(self) -> str:
        return self.table().to_html()

    def to_frame(self) -> Any:
        """A pandas table of the tallies."""
        import pandas as pd

        return pd.DataFrame([vars(t) for t in self.tallies])


def tallies(study: Study, counts: Mapping[int, Counts]) -> tuple[Tally, ...]:
    """Per contender, focus row and truth."""
    ordinary = _widths_of_ordinary(study, counts)
    return tuple(
        _tally(study, c, k, t, found, ordinary.get((k, t), float("nan")))
        for c in range(len(study.contenders))
        for k in range(len(study.terms))
        for t, found in counts.items()
        if study.contenders[c].pick[k] >= 0
    )


def _widths_of_ordinary(study: Study, counts: Mapping[int, Counts]) -> dict[tuple[int, int], float]:
    place = next((i for i, c in enumerate(study.contenders) if c.remedy.id == "ordinary"), None)
    if place is None:
        return {}
    return {
        (k, t): found.sums[place, k, 3] / found.sums[place, k, 0]
        for t, found in counts.items()
        for k in range(len(study.terms))
        if found.sums[place, k, 0] > 0
    }


def _tally(study: Study, c: int, k: int, t: int, found: Counts, ordinary: float) -> Tally:
    seen = dict(zip(FIELDS, found.sums[c, k].tolist(), strict=True))
    n = max(seen["held"], 1.0)
    # An interval that was not had did not cover: failures count against coverage.
    coverage, rejection = seen["covered"] / found.size, seen["rejected"] / n
    width, mean = seen["width"] / n, seen["estimate"] / n
    spread = np.sqrt(max(seen["estimate²"] / n - mean**2, 0.0))
    width_sd = np.sqrt(max(seen["width²"] / n - width**2, 0.0))
    remedy = study.contenders[c].remedy
    none = seen["held"] == 0
    return Tally(
        remedy=remedy.id,
        at=remedy.at,
        term=study.terms[k],
        truth=study.truths[t].name,
        replicates=found.size,
        coverage=coverage,
        coverage_mcse=binomial(coverage, found.size),
        width=float("nan") if none else width,
        width_mcse=float(width_sd / np.sqrt(n)),
        relative=width / ordinary if not none and ordinary > 0 else float("nan"),
        bias=float(mean / spread) if spread > 0 else 0.0,
        bias_mcse=float(1 / np.sqrt(n)),
        rejection=rejection,
        rejection_mcse=binomial(rejection, int(n)),
        failures=int(found.size - seen["held"]),
        boundary=seen["boundary"] / n,
        unsettled=seen["unsettled"] / n,
    )


def binomial(share: float, count: int) -> float:
    """√(c(1 − c)/B), two of each kind added so that 0 and 1 keep an error (Agresti & Coull 1998)."""
    held = (share * count + 2) / (count + 4)
    return float(np.sqrt(held * (1 - held) / (count + 4)))


def pairs(study: Study, counts: Mapping[int, Counts]) -> tuple[Pair, ...]:
    """Every two contenders on every focus row, over all truths."""

    def made() -> Iterator[Pair]:
        names = [(c.remedy.id, c.remedy.at) for c in study.contenders]
        apart = sum((found.apart for found in counts.values()), start=study.empty().apart)
        B = sum(found.size for found in counts.values())
        for a in range(len(names)):
            for b in range(a + 1, len(names)):
                for k, term in enumerate(study.terms):
                    if min(study.contenders[a].pick[k], study.contenders[b].pick[k]) < 0:
                        continue
                    more, fewer = float(apart[a, b, k]), float(apart[b, a, k])
                    gap = (more - fewer) / B
                    mcse = float(np.sqrt(max((more + fewer) / B - gap**2, 0.0) / B))
                    yield Pair(names[a], names[b], term, int(more), int(fewer), gap, mcse)

    return tuple(made())


def scores(rows: tuple[Tally, ...], confidence: float) -> Scores:
    """Smallest coverage over truths and focus rows; width is the mean, relative to the ordinary interval."""
    out = []
    for remedy, at in dict.fromkeys((t.remedy, t.at) for t in rows):
        own = [t for t in rows if (t.remedy, t.at) == (remedy, at)]
        worst = min(own, key=lambda t: t.coverage)
        widths = [t.relative for t in own]
        fitted = min((t.coverage for t in own if t.truth not in DIFFERENT), default=float("nan"))
        width = float(np.mean(widths))
        out.append(Score(remedy, at, worst.coverage, worst.coverage_mcse, width, fitted, worst.truth))
    return Scores(tuple(out), confidence)
