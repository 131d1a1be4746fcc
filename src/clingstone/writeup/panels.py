"""Figures of many small parts: residuals of each series by time, when its rows were taken, and the levels of
the groups as strips."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from clingstone.display import Cell, Column, Table, count, number
from clingstone.evidence.finding import Curve
from clingstone.results import Results
from clingstone.summary import GroupSummary
from clingstone.writeup.look import LIGHT, mark
from clingstone.writeup.naming import noun
from clingstone.writeup.plate import SMALL, Plate, axes, blank, clip, few_ticks, say
from clingstone.writeup.strokes import ends, foot, room

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

PHONE = 480.0
TALL, GAP = 74.0, 34.0


def paint_traces(curve: Curve, structure: str, width: float) -> Figure:
    """A small panel for each series on common axes; behind each, where most rows of all series lie."""
    names = list(curve.lines)
    across = min(len(names), 2 if width < PHONE else 3)
    down = math.ceil(len(names) / across)
    left, gap = 40.0, 14.0
    each = (width - left - gap * (across - 1)) / across
    note = "shaded: the middle 8 of 10 rows of all series" if curve.low else ""
    said = curve.y_name or "residual"
    head = 26 + room(width, said, note)
    figure = blank(width, head + down * (TALL + GAP) + 26)
    ends(figure, 10, said, note)
    limits = _ends(curve)
    for k, name in enumerate(names):
        row, column = divmod(k, across)
        top = head + row * (TALL + GAP)
        panel = axes(figure, left + column * (each + gap), top + 16, each, TALL - 8)
        _trace(panel, curve, name, structure, limits)
        say(figure, left + column * (each + gap), top + 8, clip(name, each, SMALL), fontsize=SMALL)
        few_ticks(panel, "x", 4)
        few_ticks(panel, "y", 3)
        panel.tick_params(axis="y", length=0, labelleft=column == 0)
        panel.tick_params(axis="x", labelbottom=k + across >= len(names))
    along, bottom = foot(curve, "time"), head + down * (TALL + GAP) + 14
    say(figure, width, bottom, along, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def _ends(curve: Curve) -> tuple[float, float, float, float]:
    """Common ends of time and residual."""
    x = np.concatenate([curve.x, *(np.array(line[0]) for line in curve.lines.values())])
    y = np.concatenate([curve.low, curve.high, *(np.array(line[1]) for line in curve.lines.values())])
    across, up = float(np.ptp(x)) or 1.0, float(np.ptp(y)) or 1.0
    return (
        float(x.min()) - 0.03 * across,
        float(x.max()) + 0.03 * across,
        float(y.min()) - 0.06 * up,
        float(y.max()) + 0.06 * up,
    )


def _trace(
    panel: Axes, curve: Curve, name: str, structure: str, ends: tuple[float, float, float, float]
) -> None:
    x, y = curve.lines[name]
    m = mark(structure)
    hue = getattr(LIGHT, m.role)
    if curve.low:
        panel.fill_between(curve.x, curve.low, curve.high, facecolor=LIGHT.wash, edgecolor="none")
    panel.axhline(0, color=LIGHT.faint, linewidth=1)
    few = len(x) <= 30
    panel.plot(x, y, color=hue, linewidth=1.3 if few else 0.9, marker=m.marker if few else "", markersize=3)
    panel.set_xlim(ends[0], ends[1])
    panel.set_ylim(ends[2], ends[3])


def timeline(results: Results) -> Plate | None:
    """When the rows of each series were taken: a stroke for each. None where no time is known."""
    s = results.case.serial
    curves = (c for f in results.evidence for c in f.curves if c.kind == "traces")
    curve = next(curves, None)
    if s is None or curve is None:
        return None
    along = foot(curve, "time")
    columns = (
        Column("series", "series"),
        Column("rows", "rows drawn", "right"),
        Column("first", f"first {along}", "right"),
        Column("last", f"last {along}", "right"),
    )
    rows = [
        [Cell(name, name), Cell(number(len(x), 0), len(x)), *(Cell(f"{v:g}", v) for v in (min(x), max(x)))]
        for name, (x, _) in curve.lines.items()
    ]
    missing = f"; {count(s.gaps, 'step')} missing" if s.gaps else ""
    return Plate(
        "timeline",
        f"When the rows were taken: {s.first} to {s.last}",
        f"{count(s.count, 'series')} of {s.shortest} to {s.longest} rows, {s.spacing}{missing}.",
        Table.of("Series as drawn", columns, rows),
        lambda width: _paint_timeline(curve, along, width),
        note=curve.note,
    )


def _paint_timeline(curve: Curve, along: str, width: float) -> Figure:
    row, left = 20.0, 0.3 * width if len(curve.lines) > 1 else 8.0
    figure = blank(width, 6 + row * len(curve.lines) + 44)
    panel = axes(figure, left, 6, width - left - 8, row * len(curve.lines))
    panel.set_ylim(len(curve.lines) - 0.5, -0.5)
    panel.set_yticks([])
    for k, (name, (x, _)) in enumerate(curve.lines.items()):
        panel.plot([min(x), max(x)], [k, k], color=LIGHT.faint, linewidth=1, zorder=0)
        panel.vlines(x, k - 0.3, k + 0.3, color=LIGHT.serial, linewidth=1.4 if len(x) <= 60 else 0.7)
        if len(curve.lines) > 1:
            say(figure, 0, 6 + row * (k + 0.5), clip(name, left - 8, SMALL), fontsize=SMALL)
    few_ticks(panel)
    bottom = 6 + row * len(curve.lines) + 32
    say(figure, width, bottom, along, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def tree(results: Results) -> Plate | None:
    """The rows of every group level as strips, each group as wide as its share of the rows."""
    levels = [g for g in results.case.group if g.tree]
    if not levels:
        return None
    rows = [
        [
            Cell(g.key, g.key),
            Cell(g.tree_labels[k] if g.tree_labels else str(k + 1)),
            Cell(number(size, 0), size),
        ]
        for g in levels
        for k, size in enumerate(g.tree)
    ]
    columns = (Column("level", "level"), Column("group", "group"), Column("rows", "rows", "right"))
    told = [f"{count(g.count, noun(g))} of {g.smallest} to {g.largest} rows" for g in levels]
    nested = results.case.arrangement == "nested" and len(levels) > 1
    note = " Each stands under the group that it lies in." if nested else ""
    return Plate(
        "levels",
        "The rows by group" + (", level under level" if nested else ""),
        f"{count(results.case.n, 'row')}: {'; '.join(told)}.{note}",
        Table.of("Groups by level", columns, rows),
        lambda width: _paint_tree(levels, nested, width),
    )


def _paint_tree(levels: Sequence[GroupSummary], nested: bool, width: float) -> Figure:
    figure = blank(width, 6 + 52 * len(levels))
    above: Sequence[int] = ()
    for k, level in enumerate(levels):
        top = 52 * k
        words = f"{count(level.count, noun(level))}, widths by their rows"
        say(figure, 0, top + 8, clip(words, width, SMALL), fontsize=SMALL, color=LIGHT.muted)
        panel = axes(figure, 0, top + 18, width, 24)
        panel.axis("off")
        panel.set_xlim(0, sum(level.tree))
        panel.set_ylim(0, 1)
        _strip(figure, panel, level, top + 30, width)
        if above and nested:
            panel.vlines(np.cumsum(above)[:-1], 0, 1, color=LIGHT.ink, linewidth=1.6)
        above = level.tree
    return figure


def _strip(figure: Figure, panel: Axes, level: GroupSummary, middle: float, width: float) -> None:
    at, total = 0, sum(level.tree)
    thin = 0.8 if level.count <= 150 else 0.3
    for k, size in enumerate(level.tree):
        panel.barh([0.5], [size], 1, left=at, facecolor=LIGHT.wash, edgecolor=LIGHT.group, linewidth=thin)
        room = width * size / total - 6
        if level.tree_labels and room >= 0.62 * SMALL * min(len(level.tree_labels[k]), 4):
            text = clip(level.tree_labels[k].split("/")[-1], room, SMALL)
            x = width * (at + size / 2) / total
            say(figure, x, middle, text, ha="center", fontsize=SMALL - 1)
        at += size
