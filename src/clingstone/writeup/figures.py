"""The two figures that answer: the interval ladder and the share bar. Both draw only what Results hold."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from clingstone.display import Cell, Column, Table, number, percent, percent_span, span, times, wrapped
from clingstone.ledger.ledger import Share
from clingstone.results import Results
from clingstone.writeup import tables
from clingstone.writeup.look import LIGHT, mark
from clingstone.writeup.plate import SMALL, TEXT, Plate, axes, blank, clip, few_ticks, say
from clingstone.writeup.read import advised, decimals, distinct, level_percent, ordinary, row_of, served

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

PANELS = 6  # focus rows drawn on the first screen; the rest stand in the tables
RUNGS = 6  # refits drawn for each row on the first screen, where there are few rows
FEW = 3
PHONE = 480.0  # narrower than this, labels go above their rungs
FAR = 4.0


@dataclass(frozen=True)
class Rung:
    """One interval of the ladder, ready to be drawn."""

    label: str
    figures: str
    estimate: float
    low: float
    high: float
    kind: str  # "advised", "ordinary", "other"


def ladder(results: Results) -> Plate | None:
    """Per focus row, one rung per leading refit on one shared axis; None when nothing was fitted."""
    names = [n for n in served(results) if rungs_of(results, n)][:PANELS]
    if not names:
        return None
    most = RUNGS if len(names) <= FEW else 3  # advised, ordinary and one more
    drawn = [(name, rungs_of(results, name)[:most]) for name in names]
    return _ladder(results, "intervals", f"{level_percent(results)} intervals under each refit", drawn)


def ladders(results: Results) -> tuple[Plate, ...]:
    """For each focus row a ladder of every refit, each short enough for a page of paper.

    Empty when the ladder of the first screen has room for them all.
    """
    drawn = [(n, rungs) for n in served(results)[:PANELS] if (rungs := rungs_of(results, n))]
    first = ladder(results)
    if first is None or sum(len(rungs) for _, rungs in drawn) <= len(first.table.rows):
        return ()
    level = level_percent(results)
    return tuple(
        _ladder(results, f"intervals-all-{k}", f"{level} intervals for {name} under every refit", [one])
        for k, one in enumerate(drawn, 1)
        for name in one[:1]
    )


def _ladder(results: Results, stem: str, caption: str, drawn: Sequence[tuple[str, list[Rung]]]) -> Plate:
    return Plate(
        stem,
        caption,
        _ladder_alt(results, [name for name, _ in drawn]),
        _ladder_table(results, drawn),
        lambda width: _paint_ladder(drawn, width),
    )


def rungs_of(results: Results, name: str) -> list[Rung]:
    """The intervals of one row, one for each distinct refit, advised first."""
    places = decimals(results, name)
    best, base = advised(results), ordinary(results)
    out = []
    for fit in distinct(results, name):
        row = row_of(fit, name)
        assert row is not None
        kind = "advised" if fit is best else "ordinary" if fit is base else "other"
        figures = f"{number(row.estimate, places)}  ({span(row.low, row.high, places)})"
        label = f"advised: {fit.name}" if kind == "advised" else fit.name
        out.append(Rung(label, figures, row.estimate, row.low, row.high, kind))
    return out


def _ladder_table(results: Results, drawn: Sequence[tuple[str, list[Rung]]]) -> Table:
    columns = (
        Column("term", "row"),
        Column("refit", "refit"),
        Column("estimate", "estimate", "right"),
        Column("low", "low", "right"),
        Column("high", "high", "right"),
    )
    rows = [
        [
            Cell(name, name),
            Cell(r.label, r.label),
            *(Cell(number(v, decimals(results, name)), v) for v in (r.estimate, r.low, r.high)),
        ]
        for name, rungs in drawn
        for r in rungs
    ]
    return Table.of("Intervals as drawn", columns, rows)


def _ladder_alt(results: Results, names: Sequence[str]) -> str:
    words = []
    for name in names:
        best, base = row_of(advised(results), name), row_of(ordinary(results), name)
        places = decimals(results, name)
        if best is not None and base is not None and best is not base:
            ratio = times(tables.wider(results, name))
            words.append(
                f"{name}: the advised interval runs from {span(best.low, best.high, places)}, the ordinary "
                f"one from {span(base.low, base.high, places)}; the advised one is {ratio}."
            )
        else:
            row = best or base
            if row is not None:
                words.append(f"{name}: the interval runs from {span(row.low, row.high, places)}.")
    return " ".join(words)


def _paint_ladder(drawn: Sequence[tuple[str, list[Rung]]], width: float) -> Figure:
    plan = _plan([r for _, rungs in drawn for r in rungs], width)
    head, foot = 34.0, 40.0
    figure = blank(width, sum(head + sum(_heights(rungs, plan)) + foot for _, rungs in drawn))
    top = 0.0
    for name, rungs in drawn:
        say(figure, 0, top + 14, clip(name, width - 10, 14.5), fontsize=14.5, fontweight="bold")
        _panel(figure, rungs, top + head, plan)
        top += head + sum(_heights(rungs, plan)) + foot
    return figure


@dataclass(frozen=True)
class Plan:
    """Where things stand in a ladder, in pixels; on a phone words stand above their rung."""

    width: float
    phone: bool
    left: float
    right: float
    rung: float
    words: int  # lines of words above a rung (phone), or at most beside it


LETTER = 0.6 * (SMALL + 1)  # a wide guess of the mean letter, since the page's font is not known here


def _plan(rungs: Sequence[Rung], width: float) -> Plan:
    figures = max(len(r.figures) for r in rungs) * LETTER + 4
    label = max(len(r.label) for r in rungs) * LETTER * 1.08
    if width < PHONE:
        one = label + figures < width
        return Plan(width, True, 18.0, 16.0, 46.0 if one else 64.0, 1 if one else 2)
    room = width - figures - 24
    left = min(label + 12, max(0.5 * room, room - 220))
    return Plan(width, False, left, figures + 12, 29.0, 3)


def _heights(rungs: Sequence[Rung], plan: Plan) -> list[float]:
    """Pixels of each rung: taller where its label needs more lines."""
    if plan.phone:
        return [plan.rung] * len(rungs)
    return [plan.rung + 13.0 * (len(_label_lines(r, plan.left)) - 1) for r in rungs]


def _label_lines(r: Rung, left: float) -> list[str]:
    """The label of a rung in lines that fit beside it; what four lines cannot hold is cut."""
    most = max(12, int((left - 8) / (LETTER * (1.08 if r.kind == "advised" else 1))))
    lines = wrapped(r.label, most)
    return lines if len(lines) <= 4 else [*lines[:3], f"{lines[3][: most - 1].rstrip()}…"]


def _panel(figure: Figure, rungs: list[Rung], top: float, plan: Plan) -> None:
    heights = _heights(rungs, plan)
    tall = sum(heights)
    panel = axes(figure, plan.left, top, plan.width - plan.left - plan.right, tall)
    low, high = reach(rungs)
    panel.set_xlim(low, high)
    panel.set_ylim(tall, 0)  # in pixels
    panel.set_yticks([])
    few_ticks(panel)
    at = 0.0
    for r, height in zip(rungs, heights, strict=True):
        line = at + (height - 16 if plan.phone else height / 2)
        if low <= 0 <= high and (plan.phone or not at):
            tick = (line - 9, line + 9) if plan.phone else (0, tall)
            panel.plot([0, 0], tick, color=LIGHT.faint, linewidth=1.2, zorder=0)
        draw_rung(panel, r, line, low, high)
        _rung_words(figure, r, top + at, height, plan)
        at += height
    if not low <= 0 <= high:
        side, words = (plan.left, "← zero") if low > 0 else (plan.width - plan.right, "zero →")
        y = top + tall + 29
        say(figure, side, y, words, ha="left" if low > 0 else "right", fontsize=SMALL, color=LIGHT.muted)


def _rung_words(figure: Figure, r: Rung, top: float, height: float, plan: Plan) -> None:
    chosen = r.kind == "advised"
    style = {"fontsize": SMALL + 1, "fontweight": "bold" if chosen else "normal"}
    style["color"] = LIGHT.accent if chosen else LIGHT.ink
    if plan.phone:
        say(
            figure,
            0,
            top + 9,
            clip(r.label, plan.width if plan.words == 2 else plan.width - 130, SMALL + 1),
            **style,
        )
        x, y = (0.0, top + 27) if plan.words == 2 else (plan.width, top + 9)
        say(figure, x, y, r.figures, ha="left" if plan.words == 2 else "right", **style)
        return
    lines = _label_lines(r, plan.left)
    middle = top + height / 2
    for k, line in enumerate(lines):
        say(figure, 0, middle + 14 * (k - (len(lines) - 1) / 2), line, **style)
    say(figure, plan.width, middle, r.figures, ha="right", **style)


def reach(rungs: Sequence[Rung]) -> tuple[float, float]:
    """Axis ends: the ends of the intervals, and zero unless it lies more than twice their length away.

    An interval more than FAR times as long as the advised and the ordinary one runs out of the panel, so
    that those two can be seen.
    """
    lead = max((r.high - r.low for r in rungs if r.kind != "other"), default=0.0)
    lead = lead if math.isfinite(lead) else 0.0
    near = [r for r in rungs if r.kind != "other" or not lead or r.high - r.low <= FAR * lead]
    ends = [v for r in near for v in (r.low, r.high, r.estimate) if math.isfinite(v)]
    ends += [r.estimate for r in rungs if math.isfinite(r.estimate)]
    low, high = min(ends), max(ends)
    length = high - low or abs(high) or 1.0
    if low > 0 and low <= 2 * length:
        low = 0.0
    elif high < 0 and -high <= 2 * length:
        high = 0.0
    margin = 0.04 * (high - low or length)
    return low - margin, high + margin


def draw_rung(panel: Axes, r: Rung, line: float, low: float, high: float) -> None:
    """Ordinary hollow and dashed, advised solid and heavy, the others thin: told apart without colour."""
    ends = [max(r.low, low), min(r.high, high)]
    style = {
        "advised": {"color": LIGHT.accent, "linewidth": 3.4},
        "ordinary": {"color": LIGHT.ink, "linewidth": 1.3, "linestyle": (0, (4, 2))},
        "other": {"color": LIGHT.muted, "linewidth": 1.1},
    }[r.kind]
    panel.plot(ends, [line, line], solid_capstyle="butt", **style)  # type: ignore[arg-type]
    for gone, end, arrow in ((r.low < low, low, "<"), (r.high > high, high, ">")):
        if gone:  # the interval goes on beyond the panel
            panel.plot([end], [line], arrow, markersize=5, color=style["color"], clip_on=False)
    face = {"advised": LIGHT.accent, "ordinary": LIGHT.paper, "other": LIGHT.muted}[r.kind]
    edge = {"advised": LIGHT.accent, "ordinary": LIGHT.ink, "other": LIGHT.muted}[r.kind]
    size = {"advised": 8.5, "ordinary": 7.0, "other": 4.5}[r.kind]
    panel.plot([r.estimate], [line], "o", markersize=size, markerfacecolor=face, markeredgecolor=edge)


def share_bar(results: Results) -> Plate | None:
    """What is left over, split by structure; each share's interval as a whisker below the bar."""
    parts = [s for s in tables.shares_told(results) if math.isfinite(s.share)]
    if not parts:
        return None
    told = ", ".join(
        f"{s.label} {percent(s.share)}"
        + (f" ({percent_span(s.low, s.high)})" if math.isfinite(s.low + s.high) else "")
        for s in parts
    )
    return Plate(
        "shares",
        tables.shares_caption(results),
        f"Shares of the residual variance: {told}.",
        tables.shares(results),
        lambda width: _paint_shares(parts, width),
    )


def _paint_shares(parts: Sequence[Share], width: float) -> Figure:
    phone = width < PHONE
    row = 38.0 if phone else 29.0
    height = 44 + row * len(parts) + 30
    figure = blank(width, height)
    longest = max(len(_share_figures(s)) for s in parts) * LETTER + 16
    left, right = (0.41 * width, 14.0) if phone else (0.34 * width, max(0.27 * width, longest))
    bar = axes(figure, 0 if phone else left, 6, width - (0 if phone else left + right), 26)
    bar.axis("off")
    bar.set_xlim(0, 1)
    bar.set_ylim(0, 1)
    total = sum(max(0.0, s.share) for s in parts) or 1.0
    at = 0.0
    for s in parts:
        part = max(0.0, s.share) / total
        m = mark(s.structure)
        face = getattr(LIGHT, m.role)
        bar.barh([0.5], [part], 1, left=at, facecolor=face, edgecolor=LIGHT.paper, hatch=m.hatch, linewidth=1)
        at += part
    panel = axes(figure, left, 42, width - left - right, row * len(parts))
    panel.set_xlim(0, 1)
    panel.set_ylim(len(parts), 0)
    panel.set_yticks([])
    middle = width - left - right > 110
    panel.set_xticks([0, 0.5, 1], ["0 %", "50 %" if middle else "", "100 %"])
    sides: tuple[Literal["left", "center", "right"], ...] = ("left", "center", "right")
    for label, side in zip(panel.get_xticklabels(), sides, strict=True):
        label.set_horizontalalignment(side)
    for i, s in enumerate(parts):
        _draw_share(figure, panel, s, i, 42 + row * (i + 0.5), (left, right, width, phone))
    return figure


def _share_figures(s: Share) -> str:
    known = math.isfinite(s.low + s.high)
    text = percent(s.share) + (f"  ({percent_span(s.low, s.high)})" if known else "")
    return text.replace("more than ", "> ")  # beside a bar there is little room


def _draw_share(
    figure: Figure,
    panel: Axes,
    s: Share,
    i: int,
    y: float,
    room: tuple[float, float, float, bool],
) -> None:
    left, _, width, phone = room
    draw_whisker(panel, s, i + 0.5)
    label, figures = s.label, _share_figures(s)
    if phone:
        say(figure, 0, y - 8, clip(label, left - 6, SMALL), fontsize=SMALL)
        say(figure, 0, y + 8, figures, fontsize=SMALL - 0.5, color=LIGHT.muted)
    else:
        say(figure, 0, y, clip(label, left - 10, TEXT - 0.5), fontsize=TEXT - 0.5)
        say(figure, width, y, figures, ha="right", fontsize=TEXT - 0.5)


def draw_whisker(panel: Axes, s: Share, line: float) -> None:
    """One share by the mark of its structure, with its interval."""
    m = mark(s.structure)
    if math.isfinite(s.low + s.high):
        panel.plot([s.low, s.high], [line] * 2, color=LIGHT.ink, linewidth=1.2, zorder=1)
    style = {"markersize": 9, "markerfacecolor": getattr(LIGHT, m.role), "markeredgecolor": LIGHT.ink}
    panel.plot([s.share], [line], m.marker, zorder=2, clip_on=False, **style)
