"""What a rehearsal adds to the write-up: sentences, one table, one figure."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from clingstone.advice.entries import Score
from clingstone.display import Cell, Column, Table, count, number, percent, sentence
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.results import Results
from clingstone.writeup.look import LIGHT
from clingstone.writeup.naming import remedy_words
from clingstone.writeup.plate import SMALL, Plate, axes, blank, clip, few_ticks, say
from clingstone.writeup.read import advised, ordinary

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

NAMED = 12  # remedies drawn; the table holds all


def covered(score: Score) -> str:
    """ "94.6 % (± 0.7)": smallest coverage over the truths, with twice its Monte-Carlo error."""
    return f"{number(100 * score.coverage, 1)}\u00a0% (±\u00a0{number(200 * score.mcse, 1)})"


def sure(results: Results) -> Iterable[str]:
    """What the rehearsal says of the advised and the ordinary interval, in the box "How sure"."""
    found = results.rehearsal
    if found is None:
        return
    best, base = _score(results, advised(results)), _score(results, ordinary(results))
    if best is not None:
        words = f"Rehearsed on this design, the advised interval covers {covered(best)} at the least"
        if base is not None and base is not best:
            words += f", the ordinary one {covered(base)}"
        yield f"{words}; {number(100 * found.confidence, 0)}\u00a0% is promised."
    for walk in found.walks:
        yield (
            f"Choosing by these data as well, the whole path covers {percent(walk.coverage)} "
            f"(±\u00a0{number(200 * walk.mcse, 1)}) for {walk.term}."
        )


def methods_words(results: Results) -> Iterable[str]:
    """The rehearsal in a methods text: what was simulated, how often, and what was seen."""
    found = results.rehearsal
    if found is None:
        return
    truths = "; ".join(f"({k}) {t.words}" for k, t in enumerate(found.truths, start=1))
    truths = truths if len(found.truths) > 1 else truths.removeprefix("(1) ")
    yield (
        f"The refits were rehearsed on {count(found.replicates, 'simulated response')} of this design under "
        f"each of {count(len(found.truths), 'error model')} ({truths})."
    )
    told = [
        f"{remedy_words(results, s.remedy, s.at)} {covered(s)}"
        for s in _ordered(results)[:NAMED]
        if s.coverage == s.coverage
    ]
    if told:
        yield f"The smallest coverage over these was: {'; '.join(told)}."
    yield "A rehearsal cannot see a wrong mean, nor predictors that go with the errors."


def table(results: Results) -> Table | None:
    """Coverage and width of every remedy that was rehearsed, advised first."""
    found = results.rehearsal
    if found is None or not found.scores.rows:
        return None
    best = _score(results, advised(results))
    rows = [
        [
            Cell(remedy_words(results, s.remedy, s.at) + (" (advised)" if s is best else ""), s.remedy),
            Cell(covered(s), s.coverage),
            Cell(number(s.width, 2), s.width),
            Cell(_held(found, s)),
        ]
        for s in _ordered(results)
    ]
    columns = (
        Column("remedy", "refit"),
        Column("coverage", "smallest coverage (± 2 Monte-Carlo errors)", "right"),
        Column("width", "width over the ordinary", "decimal"),
        Column("adequate", f"holds the promised {number(100 * found.confidence, 0)}\u00a0%"),
    )
    left = [
        sentence(f"{remedy_words(results, x.remedy, x.at)} was not rehearsed: {x.reason}")
        for x in found.left_out
    ]
    caption = f"Rehearsed with {count(found.replicates, 'replicate')} under each error model"
    return Table.of(caption, columns, rows, " ".join(left))


def _held(found: Rehearsal, s: Score) -> str:
    return {True: "yes", False: "no", None: "not known"}[found.scores.adequate(s.remedy, s.at)]


def _score(results: Results, fit: object) -> Score | None:
    if results.rehearsal is None or fit is None:
        return None
    return results.rehearsal.scores.get(fit.remedy, fit.at)  # type: ignore[attr-defined]


def _ordered(results: Results) -> list[Score]:
    """Advised, ordinary, then by width; what has no interval comes last."""
    assert results.rehearsal is not None
    lead = [_score(results, advised(results)), _score(results, ordinary(results))]
    first = [s for s in lead if s is not None]
    rest = [s for s in results.rehearsal.scores.rows if s not in first]
    return [*dict.fromkeys(first), *sorted(rest, key=lambda s: (s.width != s.width, s.width))]


# ---- the figure ------------------------------------------------------------------------------


@dataclass(frozen=True)
class Point:
    label: str
    coverage: float
    mcse: float
    width: float
    kind: str  # "advised", "ordinary", "other"


def plate(results: Results) -> Plate | None:
    """Coverage against width, a point for each remedy with its Monte-Carlo error."""
    found, shown = results.rehearsal, table(results)
    if found is None or shown is None:
        return None
    best, base = _score(results, advised(results)), _score(results, ordinary(results))
    points = [
        Point(
            remedy_words(results, s.remedy, s.at),
            s.coverage,
            s.mcse,
            s.width,
            "advised" if s is best else "ordinary" if s is base else "other",
        )
        for s in _ordered(results)[:NAMED]
        if s.coverage == s.coverage and s.width == s.width
    ]
    if not points:
        return None
    told = "; ".join(
        f"{p.label} covers {number(100 * p.coverage, 1)} % at {number(p.width, 2)} times the width"
        for p in points
    )
    return Plate(
        "rehearsal",
        "Rehearsed: smallest coverage, and width over the ordinary interval",
        f"Of the ordinary width, on simulated data: {told}.",
        shown,
        lambda width: _paint(points, found.confidence, width),
    )


def _paint(points: Sequence[Point], nominal: float, width: float) -> Figure:
    row, top = 29.0, 30.0
    figure = blank(width, top + row * len(points) + 52)
    phone = width < 480
    left, right = (0.42 * width, 52.0) if phone else (0.36 * width, 74.0)
    panel = axes(figure, left, top, width - left - right, row * len(points))
    low = min([p.coverage - 2 * p.mcse for p in points] + [nominal - 0.1])
    panel.set_xlim(100 * max(0.0, low - 0.02), 100.5)
    panel.set_ylim(len(points), 0)
    panel.set_yticks([])
    held = 100 * (nominal - 0.01)
    panel.axvspan(held, 100.5, facecolor="none", edgecolor=LIGHT.faint, hatch="///", linewidth=0)
    panel.axvline(100 * nominal, color=LIGHT.faint, linewidth=1.2)
    for k, p in enumerate(points):
        _point(panel, p, k + 0.5)
        style = {"color": LIGHT.accent, "fontweight": "bold"} if p.kind == "advised" else {}
        y = top + row * (k + 0.5)
        say(figure, 0, y, clip(p.label, left - 6, SMALL + 1), fontsize=SMALL + 1, **style)
        say(figure, width, y, f"{number(p.width, 2)} ×", ha="right", fontsize=SMALL + 1, **style)
    few_ticks(panel, "x", 4 if phone else 6)
    say(figure, width, 12, "width", ha="right", fontsize=SMALL, color=LIGHT.muted)
    foot = f"smallest coverage in %; line: the promised {100 * nominal:g} %; hatched: adequate"
    y = top + row * len(points) + 40
    say(figure, width, y, foot, ha="right", fontsize=SMALL - 0.5, color=LIGHT.muted)
    return figure


def _point(panel: Axes, p: Point, y: float) -> None:
    color = {"advised": LIGHT.accent, "ordinary": LIGHT.ink, "other": LIGHT.muted}[p.kind]
    face = LIGHT.paper if p.kind == "ordinary" else color
    ends = [100 * (p.coverage - 2 * p.mcse), 100 * (p.coverage + 2 * p.mcse)]
    panel.plot(ends, [y, y], color=color, linewidth=2.4 if p.kind == "advised" else 1.2)
    size = 8.0 if p.kind == "advised" else 6.0
    panel.plot([100 * p.coverage], [y], "o", markersize=size, markerfacecolor=face, markeredgecolor=color)
