"""Figures of the evidence: what a finding's curve holds, drawn in the one look. Nothing is computed here
but positions on paper."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

import numpy as np

from clingstone.display import Cell, Column, Table, count, number, significant
from clingstone.evidence.finding import Curve, Finding
from clingstone.results import Results
from clingstone.writeup.look import LIGHT, mark
from clingstone.writeup.panels import paint_traces
from clingstone.writeup.plate import SMALL, Plate, axes, blank, clip, few_ticks, many, say, with_unit

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

LISTED = 40  # groups with a label each; beyond, ranks without labels
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
        for curve in f.curves:
            if curve.kind not in PAINTERS or not (curve.x or curve.lines):
                continue
            name = _name(curve, f.about, taken)
            taken.add(name)
            paint = _painter(curve, f.structure, lonlat)
            quiet = f.structure in ("mean", "lookalike") and f.verdict == "not detected"
            alt = _alt(curve, f)
            plate = Plate(name, _caption(curve, f), alt, curve_table(curve), paint, quiet, curve.note)
            out.setdefault(f.structure, []).append(plate)
    return out


def _alt(curve: Curve, f: Finding) -> str:
    """What a figure shows, in words: its finding; of residuals by time also what stands in the panels."""
    if curve.kind != "traces":
        return f.sentence
    return f"Residuals by {curve.x_name or 'time'} in {count(len(curve.lines), 'panel')}. {f.sentence}"


def _painter(curve: Curve, structure: str, lonlat: bool) -> Callable[[float], Figure]:
    if curve.kind == "map":
        return lambda width: paint_map(curve, structure, width, lonlat)
    paint = PAINTERS[curve.kind]
    return lambda width: paint(curve, structure, width)


def _name(curve: Curve, about: str, taken: set[str]) -> str:
    """A stem for files and ids; labels keep only letters, digits and hyphens."""
    stem = re.sub(r"[^a-z0-9]+", "-", f"{curve.kind} {about}".lower()).strip("-")[:40]
    name, k = stem, 2
    while name in taken:
        name, k = f"{stem}-{k}", k + 1
    return name


_CAPTIONS = {
    "autocorrelation": "Correlation of residuals by time apart",
    "group-means": "Mean residual of each group",
    "variogram": "Half the mean squared difference by distance",
    "map": "Residuals on the map",
    "function": "Residuals against a predictor",
    "traces": "Residuals by time, series by series",
}


def _caption(curve: Curve, f: Finding) -> str:
    words = _CAPTIONS[curve.kind]
    if curve.kind == "group-means" and curve.x_name:
        return f"Mean residual of each {curve.x_name}"
    if curve.kind == "function" and "residual" not in (curve.y_name or "residual"):
        return f"{curve.y_name} by {curve.x_name or f.about_words}"
    if curve.kind == "function" and (curve.x_name or f.about):
        start = "Partial residuals" if "partial" in curve.y_name else "Residuals"
        return f"{start} against {curve.x_name or f.about}"
    if curve.kind == "traces":
        return words if len(curve.lines) > 1 else "Residuals by time"
    return words if f.structure != "lookalike" else f"{words}: {f.about_words or f.test}"


def curve_table(curve: Curve) -> Table:
    """The marks of a curve, unrounded in a file."""
    if curve.kind == "traces":
        return _trace_table(curve)
    fields: list[tuple[str, str, Sequence[float | str]]] = []
    if curve.labels:
        fields.append(("label", curve.x_name or "label", curve.labels))
    if not curve.labels or curve.kind == "map":
        unit = curve.unit if curve.kind in ("autocorrelation", "variogram", "map", "function") else ""
        fields.append(("x", with_unit(curve.x_name or "x", unit), curve.x))
    fields.append(("y", curve.y_name or "y", curve.y))
    for key, values in (("low", curve.low), ("high", curve.high)):
        if values:
            fields.append((key, key, values))
    if curve.size:
        fields.append(("size", _SIZES.get(curve.kind, "rows"), curve.size))
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


_SIZES = {"autocorrelation": "pairs", "variogram": "pairs", "group-means": "rows", "map": "mean residual"}


def _band(panel: Axes, curve: Curve, x: np.ndarray) -> None:
    if curve.low and curve.high:
        panel.fill_between(
            x, curve.low, curve.high, facecolor=LIGHT.wash, edgecolor=LIGHT.faint, linewidth=0.8
        )


LINES: tuple[tuple[str, object], ...] = (("line", "-"), ("dashed", (0, (5, 2))), ("dotted", (0, (1, 1.5))))


def _lines(figure: Figure, panel: Axes, curve: Curve, color: str) -> None:
    """Named lines; their names stand above the panel at the right, instead of in a legend."""
    told = []
    for k, (name, (x, y)) in enumerate(curve.lines.items()):
        words, style = LINES[k % len(LINES)]
        hue = color if k == 0 else LIGHT.ink
        panel.plot(x, y, color=hue, linewidth=2, linestyle=style)
        told.append(f"{words}: {name}")
    width = figure.get_size_inches()[0] * 72
    say(figure, width, 10, "; ".join(told), ha="right", fontsize=SMALL, color=LIGHT.muted)


def paint_autocorrelation(curve: Curve, structure: str, width: float) -> Figure:
    """Correlations with their band above, the number of pairs behind each below."""
    figure = blank(width, 300)
    hue = getattr(LIGHT, mark(structure).role)
    x = np.array(curve.x)
    panel = axes(figure, 44, 24, width - 54, 180)
    _band(panel, curve, x)
    panel.axhline(0, color=LIGHT.faint, linewidth=1)
    panel.vlines(x, 0, curve.y, color=hue, linewidth=2)
    panel.plot(x, curve.y, mark(structure).marker, color=hue, markersize=5)
    few_ticks(panel, "y")
    panel.tick_params(axis="x", length=0, labelbottom=False)
    below = _pairs(figure, curve, x, width)
    margin = 0.7 * _gap(x)
    for each in (panel, below):
        each.set_xlim(min(0.0, float(x.min()) - margin), float(x.max()) + margin)
    few_ticks(below)
    foot = with_unit(curve.x_name or "time apart", curve.unit)
    say(figure, 0, 10, curve.y_name or "correlation", fontsize=SMALL, color=LIGHT.muted)
    say(figure, width, 290, foot, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def _pairs(figure: Figure, curve: Curve, x: np.ndarray, width: float) -> Axes:
    below = axes(figure, 44, 226, width - 54, 32)
    below.set_yticks([])
    if curve.size:
        below.bar(x, curve.size, width=0.6 * _gap(x), color=LIGHT.faint)
        words = f"pairs (at most {number(max(curve.size), 0)})"
        say(figure, 0, 216, words, fontsize=SMALL, color=LIGHT.muted)
    return below


def _gap(x: np.ndarray) -> float:
    steps = np.diff(np.unique(x))
    return float(steps.min()) if len(steps) else 1.0


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


def paint_variogram(curve: Curve, structure: str, width: float) -> Figure:
    """Half mean squared differences, the envelope of independence, the fitted curve, pairs by size."""
    figure = blank(width, 290)
    panel = axes(figure, 48, 26, width - 60, 206)
    hue = getattr(LIGHT, mark(structure).role)
    _band(panel, curve, np.array(curve.x))
    _lines(figure, panel, curve, hue)
    size = np.array(curve.size or [1.0] * len(curve.x))
    area = 14 + 60 * size / size.max()
    panel.scatter(
        curve.x, curve.y, s=area, marker=mark(structure).marker, color=hue, edgecolor=LIGHT.paper, zorder=3
    )
    panel.set_xlim(0, 1.04 * max(curve.x))
    panel.set_ylim(bottom=0)
    few_ticks(panel)
    few_ticks(panel, "y")
    say(figure, 0, 10, curve.y_name or "half mean squared difference", fontsize=SMALL, color=LIGHT.muted)
    note = "larger: more pairs; shaded: no dependence" if curve.low else "larger: more pairs"
    say(figure, 0, 279, note, fontsize=SMALL - 0.5, color=LIGHT.muted)
    say(
        figure,
        width,
        279,
        with_unit(curve.x_name or "distance", curve.unit),
        ha="right",
        fontsize=SMALL,
        color=LIGHT.muted,
    )
    return figure


def paint_map(curve: Curve, structure: str, width: float, lonlat: bool = False) -> Figure:
    """Sites with their mean residual: filled above the fit, hollow below, area by size. ``curve.size``
    holds the residual."""
    x, y, value = (np.array(v, dtype=float) for v in (curve.x, curve.y, curve.size))
    stretch = 1 / max(0.1, math.cos(math.radians(float(y.mean())))) if lonlat else 1.0
    broad, high = float(np.ptp(x)) or 1.0, float(np.ptp(y)) * stretch or 1.0
    tall = min(1.2 * width, max(0.35 * width, (width - 24) * high / broad))
    figure = blank(width, tall + 64)
    panel = axes(figure, 12, 8, width - 24, tall)
    panel.axis("off")
    panel.set_aspect(stretch, adjustable="datalim")
    hue = getattr(LIGHT, mark(structure).role)
    largest = float(np.abs(value).max()) or 1.0
    area = 10 + 110 * np.abs(value) / largest
    for above, face in ((True, hue), (False, LIGHT.paper)):
        which = (value >= 0) == above
        panel.scatter(
            x[which],
            y[which],
            s=area[which],
            marker=mark(structure).marker,
            facecolor=face,
            edgecolor=hue,
            linewidth=1.1,
            zorder=2 + above,
        )
    if curve.links:
        ends = np.array(curve.links)
        across = np.column_stack([x[ends], np.full(len(ends), np.nan)]).ravel()
        along = np.column_stack([y[ends], np.full(len(ends), np.nan)]).ravel()
        panel.plot(across, along, color=LIGHT.faint, linewidth=0.8, zorder=0)
    panel.margins(0.05)
    _scale_bar(figure, panel, tall + 24, curve, lonlat, float(y.mean()))
    say(
        figure,
        0,
        tall + 52,
        f"filled: above the fit; hollow: below; area: size{'; lines: neighbours' if curve.links else ''}",
        fontsize=SMALL - 0.5,
        color=LIGHT.muted,
    )
    if lonlat:
        say(figure, width, tall + 24, "north ↑", ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def _scale_bar(figure: Figure, panel: Axes, y: float, curve: Curve, lonlat: bool, latitude: float) -> None:
    """A round length of about a quarter of the map."""
    figure.draw_without_rendering()  # settles the limits that the equal aspect asks for
    low, high = panel.get_xlim()
    box = panel.get_window_extent()
    per_pixel = (high - low) / box.width
    unit = curve.unit
    if lonlat:
        per_pixel *= 111.195 * math.cos(math.radians(latitude))  # km in one degree of a great circle
        unit = "km"
    target = per_pixel * figure.get_size_inches()[0] * 72 / 4
    power = 10.0 ** math.floor(math.log10(target))
    length = max(m * power for m in (1, 2, 5) if m * power <= target)
    whole = figure.get_size_inches() * 72
    pixels = length / per_pixel * 72 / figure.dpi
    from matplotlib.lines import Line2D

    line = [12 / whole[0], (12 + pixels) / whole[0]]
    figure.add_artist(Line2D(line, [1 - y / whole[1]] * 2, color=LIGHT.ink, linewidth=2))
    say(figure, 18 + pixels, y, f"{significant(length, 1)} {many(unit)}".rstrip(), fontsize=SMALL)


def paint_function(curve: Curve, structure: str, width: float) -> Figure:
    """Partial residuals, with the fitted and the repaired curve."""
    figure = blank(width, 280)
    panel = axes(figure, 48, 24, width - 58, 200)
    if curve.low and curve.high:
        panel.vlines(curve.x, curve.low, curve.high, color=LIGHT.faint, linewidth=2)
    panel.plot(curve.x, curve.y, "o", color=LIGHT.muted, markersize=4 if len(curve.x) <= 60 else 2.5)
    _lines(figure, panel, curve, LIGHT.accent)
    few_ticks(panel)
    few_ticks(panel, "y")
    say(figure, 0, 10, curve.y_name or "partial residual", fontsize=SMALL, color=LIGHT.muted)
    say(
        figure,
        width,
        268,
        with_unit(curve.x_name or "predictor", curve.unit),
        ha="right",
        fontsize=SMALL,
        color=LIGHT.muted,
    )
    return figure


PAINTERS: dict[str, Paint] = {
    "autocorrelation": paint_autocorrelation,
    "group-means": paint_groups,
    "variogram": paint_variogram,
    "map": paint_map,
    "function": paint_function,
    "traces": paint_traces,
}
