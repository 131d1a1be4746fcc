"""Figures of the evidence: what a finding's curve holds, drawn in the one look. Nothing is computed here
but positions on paper."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from clingstone.display import Cell, Column, Table, count, listed, number, sentence, significant
from clingstone.evidence.finding import Curve, Finding
from clingstone.results import Results
from clingstone.writeup.leading import leading
from clingstone.writeup.look import LIGHT, mark
from clingstone.writeup.panels import paint_traces
from clingstone.writeup.places import paint_directions, paint_local, paint_map, paint_variogram
from clingstone.writeup.plate import SMALL, Plate, axes, blank, clip, few_ticks, say, with_unit
from clingstone.writeup.strokes import band, ends, foot, gap, line_words, lines, room

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

LISTED = 40  # groups with a label each; beyond, ranks without labels
SECOND_LOOKS = ("correlogram", "directions", "local-map")  # folded away where their test does not lead
TABLED = 400  # rows of a figure's table on the page; the file of the figure holds them all

Paint = Callable[[Curve, str, float], "Figure"]


def plates(results: Results) -> tuple[Plate, ...]:
    """One plate per curve of the evidence, in the order of the findings."""
    return tuple(p for each in plates_by_structure(results).values() for p in each)


def plates_by_structure(results: Results) -> dict[str, list[Plate]]:
    """The plates under the structure whose findings drew them."""
    out: dict[str, list[Plate]] = {}
    taken: set[str] = set()
    lonlat = results.case.spatial is not None and results.case.spatial.kind == "lonlat"
    for f in results.evidence:
        first = leading([g for g in results.evidence if g.structure == f.structure])
        stands = any((g.test, g.about) == (f.test, f.about) for g in first)
        for curve in f.curves:
            if not (curve.x or curve.lines):
                continue
            name = _name(curve, f.about, taken)
            taken.add(name)
            paint = _painter(curve, f.structure, lonlat)
            aside = f.structure in ("mean", "lookalike") or curve.kind in SECOND_LOOKS
            plate = Plate(
                name,
                _caption(curve, f),
                _alt(curve, f),
                curve_table(curve),
                paint,
                aside and not stands,
                curve.note,
            )
            out.setdefault(f.structure, []).append(plate)
    return out


def _alt(curve: Curve, f: Finding) -> str:
    """What a figure shows, in words: its finding, and where that says too little what is drawn."""
    if curve.kind == "traces":
        drawn = f"Residuals by {curve.x_name or 'time'} in {count(len(curve.lines), 'panel')}."
    elif curve.kind == "left-out":
        ends_at = f"{significant(min(curve.y), 3)} to {significant(max(curve.y), 3)}"
        whole = "".join(f"; {name}: {significant(y[0], 3)}" for name, (_, y) in curve.lines.items())
        what = curve.y_name.removesuffix(" without it")
        drawn = f"Without each {curve.x_name} in turn the {what} runs from {ends_at}{whole}."
    elif curve.kind == "directions":
        each = (f"{significant(v)} at {number(a, 0)} degrees" for a, v in zip(curve.x, curve.y, strict=True))
        drawn = f"{curve.y_name}: {listed(each)}."
    elif curve.kind == "local-map":
        kinds = (w for w in dict.fromkeys(sorted(curve.labels)) if w)
        drawn = sentence("; ".join(f"{count(curve.labels.count(w), 'site')} {w}" for w in kinds))
    else:
        drawn = ""
    return f"{drawn} {f.sentence}".strip()


def _painter(curve: Curve, structure: str, lonlat: bool) -> Callable[[float], Figure]:
    if curve.kind in MAPS:
        chart = MAPS[curve.kind]
        return lambda width: chart(curve, structure, width, lonlat)
    paint = PAINTERS[curve.kind]
    return lambda width: paint(curve, structure, width)


def _name(curve: Curve, about: str, taken: set[str]) -> str:
    """A stem for files and ids; labels keep only letters, digits and hyphens."""
    stem = re.sub(r"[^a-z0-9]+", "-", f"{curve.kind} {about}".lower()).strip("-")[:40]
    name, k = stem, 2
    while name in taken:
        name, k = f"{stem}-{k}", k + 1
    return name


CAPTIONS = {
    "autocorrelation": "Correlation of residuals by time apart",
    "group-means": "Mean residual of each group",
    "variogram": "Half the mean squared difference by distance",
    "map": "Residuals on the map",
    "function": "Residuals against a predictor",
    "traces": "Residuals by time, series by series",
    "correlogram": "Correlation of residuals by distance",
    "directions": "Likeness of neighbours by direction",
    "local-map": "Places that stand out from what independent data would give",
    "left-out": "A coefficient without each group in turn",
}


def _caption(curve: Curve, f: Finding) -> str:
    words = CAPTIONS[curve.kind]
    if curve.kind == "group-means" and curve.x_name:
        return f"Mean residual of each {curve.x_name}"
    if curve.kind == "left-out" and curve.y_name:
        what = curve.y_name.removesuffix(" without it")
        return f"{what[:1].upper()}{what[1:]} without each {curve.x_name} in turn"
    if curve.kind == "function" and "residual" not in (curve.y_name or "residual"):
        return f"{curve.y_name} by {curve.x_name or f.about_words}"
    if curve.kind == "function" and (curve.x_name or f.about):
        start = "Partial residuals" if "partial" in curve.y_name else "Residuals"
        return f"{start} against {curve.x_name or f.about}"
    if curve.kind == "traces":
        return words if len(curve.lines) > 1 else "Residuals by time"
    return words if f.structure != "lookalike" else f"{words}: {f.about_words or f.test}"


def curve_table(curve: Curve) -> Table:
    """The marks of a curve and its lines, unrounded in a file."""
    if curve.kind == "traces":
        return _trace_table(curve)
    fields: list[tuple[str, str, Sequence[float | str]]] = []
    placed = curve.kind in MAPS
    if curve.labels:
        fields.append(("label", "what stands out" if placed else curve.x_name or "label", curve.labels))
    if not curve.labels or placed:
        fields.append(("x", foot(curve, "x"), curve.x))
    fields.append(("y", curve.y_name or "y", curve.y))
    names = {"low": "adjusted p"} if curve.kind == "local-map" else {}
    for key, values in (("low", curve.low), ("high", curve.high)):
        if values:
            fields.append((key, names.get(key, key), values))
    if curve.size:
        fields.append(("size", _SIZES.get(curve.kind, "rows"), curve.size))
    # A line is told where it has a value for each mark.
    fields += [(name, name, y) for name, (x, y) in curve.lines.items() if x == curve.x]
    columns = [Column(key, head, "right" if j else "left") for j, (key, head, _) in enumerate(fields)]
    rows = [
        [v if isinstance(v, str) else Cell(_shown(float(v)), float(v)) for v in row]
        for row in zip(*(values for _, _, values in fields), strict=True)
    ]
    return Table.of("Numbers behind the figure", columns, rows)


def _trace_table(curve: Curve) -> Table:
    columns = (
        Column("series", "series"),
        Column("x", with_unit(curve.x_name or "time", curve.unit), "right"),
        Column("y", curve.y_name or "residual", "right"),
    )
    rows = [
        [Cell(name, name), Cell(_shown(a), a), Cell(_shown(b), b)]
        for name, (x, y) in curve.lines.items()
        for a, b in zip(x, y, strict=True)
    ]
    return Table.of("Numbers behind the figure", columns, rows)


def _shown(value: float) -> str:
    """Whole numbers as they are (counts, lags, ranks); others to three digits."""
    return number(value, 0) if value == round(value) and abs(value) < 1e7 else significant(value, 3)


_SIZES = {
    "autocorrelation": "pairs",
    "correlogram": "pairs",
    "directions": "weight of its links",
    "local-map": "mean residual",
    "map": "mean residual",
    "variogram": "pairs",
}


SEMI = "semivariance"  # a line on a scale of its own, so it gets a panel of its own
STEMS = 180.0


def paint_autocorrelation(curve: Curve, structure: str, width: float) -> Figure:
    """Correlations with their band above, the number of pairs behind each below; further lines as hollow
    marks, and a semivariance in a panel between."""
    own, x = mark(structure), np.array(curve.x)
    hue = getattr(LIGHT, own.role)
    said = curve.y_name or "correlation"
    hollow = [name for name in curve.lines if name != SEMI]
    words = f"hollow: {listed(hollow)}" if hollow else ""
    up = 24 + room(width, said, words)
    between = 100.0 if SEMI in curve.lines else 0.0
    figure = blank(width, up + STEMS + between + 96)
    panel = axes(figure, 44, up, width - 54, STEMS)
    band(panel, curve, x)
    panel.axhline(0, color=LIGHT.faint, linewidth=1)
    panel.vlines(x, 0, curve.y, color=hue, linewidth=2)
    panel.plot(x, curve.y, own.marker, color=hue, markersize=5)
    for name in hollow:
        panel.plot(*curve.lines[name], linestyle="none", marker=own.marker, markersize=5,
                   markerfacecolor="none", markeredgecolor=LIGHT.ink)  # fmt: skip
    ends(figure, 10, said, words)
    panels = [panel]
    if between:
        panels.append(_semivariance(figure, curve, up + STEMS + 30, width))
    panels.append(_pairs(figure, curve, up + STEMS + between + 12, width))
    margin = 0.7 * gap(x)
    reach = (min(0.0, float(x.min()) - margin), float(x.max()) + margin)
    for each in panels:
        each.set_xlim(*reach)
        each.tick_params(axis="x", length=0, labelbottom=False)
    for each in panels[:-1]:
        few_ticks(each, "y", 4)
    few_ticks(panels[-1])
    panels[-1].tick_params(axis="x", length=3, labelbottom=True)
    bottom = up + STEMS + between + 86
    say(figure, width, bottom, foot(curve, "time apart"), ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def _semivariance(figure: Figure, curve: Curve, top: float, width: float) -> Axes:
    panel = axes(figure, 44, top, width - 54, 66)
    panel.axhline(1, color=LIGHT.faint, linewidth=1)
    panel.plot(*curve.lines[SEMI], color=LIGHT.ink, linewidth=1.5, marker="o", markersize=3.5)
    panel.set_ylim(bottom=0)
    say(figure, 0, top - 14, "semivariance (1 without dependence)", fontsize=SMALL, color=LIGHT.muted)
    return panel


def _pairs(figure: Figure, curve: Curve, top: float, width: float) -> Axes:
    below = axes(figure, 44, top + 10, width - 54, 32)
    below.set_yticks([])
    if curve.size:
        x = np.array(curve.x)
        broad = max(0.6 * gap(x), 0.004 * float(np.ptp(x)))  # never thinner than can be seen
        below.bar(x, curve.size, width=broad, color=LIGHT.faint)
        words = f"pairs (at most {number(max(curve.size), 0)})"
        say(figure, 0, top, words, fontsize=SMALL, color=LIGHT.muted)
    return below


def paint_groups(curve: Curve, structure: str, width: float) -> Figure:
    """Groups sorted by their mean, intervals as lines, line width by the number of rows."""
    order = np.argsort(np.array(curve.y), kind="stable")
    count = len(order)
    labelled = len(curve.labels) > 0 and count <= LISTED
    row = 19.0 if labelled else max(1.2, min(8.0, 420 / count))
    left = min(150.0, 0.36 * width) if labelled else 8.0
    figure = blank(width, 20 + row * count + 44)
    panel = axes(figure, left, 12, width - left - 12, row * count + 6)
    hue = getattr(LIGHT, mark(structure).role)
    panel.set_ylim(count - 0.3, -0.7)
    panel.axvline(0, color=LIGHT.faint, linewidth=1)
    size = np.array(curve.size or [1.0] * count)
    weight = 1.0 + 3.5 * np.sqrt(size / size.max())
    for place, i in enumerate(order):
        if curve.low and math.isfinite(curve.low[i] + curve.high[i]):
            thick = min(weight[i], 0.8 * row)
            panel.plot([curve.low[i], curve.high[i]], [place] * 2, color=hue, linewidth=thick, alpha=0.55,
                       solid_capstyle="butt")  # fmt: skip
        panel.plot(
            [curve.y[i]], [place], mark(structure).marker, color=LIGHT.ink, markersize=min(5.0, 0.6 * row + 1)
        )
        if labelled:
            y = 12 + (row * count + 6) * (place + 0.7) / (count + 0.4)
            say(figure, left - 8, y, clip(curve.labels[i], left - 10, SMALL), ha="right", fontsize=SMALL)
    panel.set_yticks([])
    few_ticks(panel)
    foot = 20 + row * count + 36
    note = "thicker: more rows" if curve.size and size.min() < size.max() else ""
    say(figure, 0, foot, note, fontsize=SMALL, color=LIGHT.muted)
    say(
        figure,
        width,
        foot,
        with_unit(curve.y_name or "mean residual", curve.unit),
        ha="right",
        fontsize=SMALL,
        color=LIGHT.muted,
    )
    return figure


def paint_left_out(curve: Curve, structure: str, width: float) -> Figure:
    """One coefficient without each group in turn; the line is the coefficient with all of them."""
    several = len(curve.y)
    labelled = len(curve.labels) > 0 and several <= LISTED
    row = 19.0 if labelled else max(1.2, min(8.0, 420 / several))
    left = min(150.0, 0.36 * width) if labelled else 8.0
    note = "; ".join(f"line: {name}" for name in curve.lines)
    if curve.labels and not labelled:
        note += f"; top: {clip(curve.labels[0], 110, SMALL)}; bottom: {clip(curve.labels[-1], 110, SMALL)}"
    said = curve.y_name or "coefficient without the group"
    figure = blank(width, 58 + row * several + room(width, note, said))
    panel = axes(figure, left, 6, width - left - 12, row * several + 6)
    panel.set_ylim(several - 0.3, -0.7)
    own = mark("group")
    hue, size = getattr(LIGHT, own.role), min(6.0, 0.6 * row + 1)
    for _, y in curve.lines.values():
        panel.axvline(y[0], color=LIGHT.ink, linewidth=1.2)
        panel.hlines(range(several), y[0], curve.y, color=LIGHT.faint, linewidth=min(2.0, 0.7 * row))
    panel.plot(curve.y, range(several), own.marker, color=hue, markersize=size)
    for place in range(several if labelled else 0):
        y_at = 6 + (row * several + 6) * (place + 0.7) / (several + 0.4)
        words = clip(curve.labels[place], left - 10, SMALL)
        say(figure, left - 8, y_at, words, ha="right", fontsize=SMALL)
    panel.set_yticks([])
    few_ticks(panel)
    ends(figure, row * several + 46, note, said)
    return figure


def paint_function(curve: Curve, structure: str, width: float) -> Figure:
    """Partial residuals, with the fitted and the repaired curve."""
    said = curve.y_name or "partial residual"
    up = room(width, said, line_words(curve))
    figure = blank(width, 280 + up)
    panel = axes(figure, 48, 24 + up, width - 58, 200)
    if curve.low and curve.high:
        panel.vlines(curve.x, curve.low, curve.high, color=LIGHT.faint, linewidth=2)
    panel.plot(curve.x, curve.y, "o", color=LIGHT.muted, markersize=4 if len(curve.x) <= 60 else 2.5)
    ends(figure, 10, said, lines(panel, curve, LIGHT.accent))
    few_ticks(panel)
    few_ticks(panel, "y")
    along = foot(curve, "predictor")
    say(figure, width, 268 + up, along, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


PAINTERS: dict[str, Paint] = {
    "autocorrelation": paint_autocorrelation,
    "correlogram": paint_autocorrelation,
    "directions": paint_directions,
    "function": paint_function,
    "group-means": paint_groups,
    "left-out": paint_left_out,
    "traces": paint_traces,
    "variogram": paint_variogram,
}
MAPS: dict[str, Callable[[Curve, str, float, bool], Figure]] = {"map": paint_map, "local-map": paint_local}
KINDS = frozenset((*PAINTERS, *MAPS))
