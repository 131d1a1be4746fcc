"""Figures of places: the variogram, residuals on the map, where likeness sits, likeness by direction."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from clingstone.display import Cell, Column, Table, count, number, significant
from clingstone.evidence.finding import Curve
from clingstone.maths.once import Array
from clingstone.results import Results
from clingstone.writeup.look import LIGHT, mark
from clingstone.writeup.plate import SMALL, Plate, axes, blank, few_ticks, many, say
from clingstone.writeup.strokes import band, ends, foot, line_words, lines, room

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


def paint_variogram(curve: Curve, structure: str, width: float) -> Figure:
    """Half mean squared differences, the envelope of independence, named lines, pairs by size."""
    name = curve.y_name or "half mean squared difference"
    note = "larger: more pairs; shaded: no dependence" if curve.low else "larger: more pairs"
    along = foot(curve, "distance")
    up, down = room(width, name, line_words(curve)), room(width, note, along)
    figure = blank(width, 290 + up + down)
    panel = axes(figure, 48, 26 + up, width - 60, 206)
    hue = getattr(LIGHT, mark(structure).role)
    band(panel, curve, np.array(curve.x))
    ends(figure, 10, name, lines(panel, curve, hue))
    size = np.array(curve.size or [1.0] * len(curve.x))
    area = 14 + 60 * size / size.max()
    panel.scatter(
        curve.x, curve.y, s=area, marker=mark(structure).marker, color=hue, edgecolor=LIGHT.paper, zorder=3
    )
    panel.set_xlim(0, 1.04 * max(curve.x))
    panel.set_ylim(bottom=0)
    few_ticks(panel)
    few_ticks(panel, "y")
    ends(figure, 279 + up, note, along)
    return figure


# ---- maps ------------------------------------------------------------------------------------


def _ground(curve: Curve, width: float, lonlat: bool, below: float) -> tuple[Figure, Axes, float]:
    """A figure with a map of true shape and room below it, its axes, and how tall the map is."""
    x, y = np.array(curve.x), np.array(curve.y)
    stretch = 1 / max(0.1, math.cos(math.radians(float(y.mean())))) if lonlat else 1.0
    broad, high = float(np.ptp(x)) or 1.0, float(np.ptp(y)) * stretch or 1.0
    tall = min(1.2 * width, max(0.35 * width, (width - 24) * high / broad))
    figure = blank(width, tall + 36 + below)
    panel = axes(figure, 12, 8, width - 24, tall)
    panel.axis("off")
    panel.set_aspect(stretch, adjustable="datalim")
    return figure, panel, tall


def _settle(figure: Figure, panel: Axes, curve: Curve, tall: float, lonlat: bool) -> None:
    """Margins, the scale bar, and north where it is known."""
    panel.margins(0.05)
    _scale_bar(figure, panel, tall + 24, curve, lonlat, float(np.mean(curve.y)))
    if lonlat:
        width = float(figure.get_size_inches()[0]) * 72
        say(figure, width, tall + 24, "north ↑", ha="right", fontsize=SMALL, color=LIGHT.muted)


def sites(results: Results) -> Plate | None:
    """Where the places lie, with nothing but that; None where no places are known."""
    p = results.case.spatial
    if p is None or not p.x:
        return None
    across, along = p.names
    curve = Curve("map", p.x, p.y, x_name=across, y_name=along, unit=p.unit)
    rows = [[Cell(f"{u:g}", u), Cell(f"{v:g}", v)] for u, v in zip(p.x, p.y, strict=True)]
    columns = (Column(across, across, "right"), Column(along, along, "right"))
    far = f"{significant(p.extent, 3)} {many(p.unit)}".rstrip()
    drawn = len(p.x)
    return Plate(
        "sites",
        "Where the places lie",
        f"{count(p.sites, 'site')}, at most {far} apart.",
        Table.of("Places as drawn", columns, rows),
        lambda width: _paint_sites(curve, width, p.kind == "lonlat"),
        note=f"{number(drawn, 0)} of {number(p.sites, 0)} sites are drawn" if drawn < p.sites else "",
    )


def _paint_sites(curve: Curve, width: float, lonlat: bool) -> Figure:
    figure, panel, tall = _ground(curve, width, lonlat, 0)
    small = 5.0 if len(curve.x) <= 200 else 2.5
    panel.plot(curve.x, curve.y, mark("spatial").marker, color=LIGHT.spatial, markersize=small)
    _settle(figure, panel, curve, tall, lonlat)
    return figure


def paint_map(curve: Curve, structure: str, width: float, lonlat: bool = False) -> Figure:
    """Sites with their mean residual: filled above the fit, hollow below, area by size. ``curve.size``
    holds the residual."""
    x, y, value = (np.array(v, dtype=float) for v in (curve.x, curve.y, curve.size))
    figure, panel, tall = _ground(curve, width, lonlat, 28)
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
        joined = np.array(curve.links)
        across = np.column_stack([x[joined], np.full(len(joined), np.nan)]).ravel()
        along = np.column_stack([y[joined], np.full(len(joined), np.nan)]).ravel()
        panel.plot(across, along, color=LIGHT.faint, linewidth=0.8, zorder=0)
    _settle(figure, panel, curve, tall, lonlat)
    words = f"filled: above the fit; hollow: below; area: size{'; lines: neighbours' if curve.links else ''}"
    say(figure, 0, tall + 52, words, fontsize=SMALL - 0.5, color=LIGHT.muted)
    return figure


def paint_local(curve: Curve, structure: str, width: float, lonlat: bool = False) -> Figure:
    """Sites that stand out as large marks, the others as dots.

    Filled lies above the fit, hollow below. The mark of places: like its neighbours; a diamond: unlike them.
    """
    x, y = np.array(curve.x), np.array(curve.y)
    kinds = [words for words in dict.fromkeys(sorted(curve.labels)) if words]
    figure, panel, tall = _ground(curve, width, lonlat, 12 + 20.0 * (len(kinds) + 1))
    label = np.array(curve.labels)
    plain = label == ""
    panel.plot(x[plain], y[plain], "o", color=LIGHT.muted, markersize=2.5, zorder=1)
    line = tall + 52
    for words in kinds:
        chosen = label == words
        style = _stands_out(words, structure)
        panel.plot(x[chosen], y[chosen], linestyle="none", zorder=3, **style)  # type: ignore[arg-type]
        _key(figure, line, f"{words}: {count(int(chosen.sum()), 'site')}", style)
        line += 20
    if plain.any():
        dot = {"marker": "o", "color": LIGHT.muted, "markersize": 2.5}
        _key(figure, line, f"not told from independent data: {count(int(plain.sum()), 'site')}", dot)
    _settle(figure, panel, curve, tall, lonlat)
    return figure


def _stands_out(words: str, structure: str) -> dict[str, object]:
    """Shape by likeness to the neighbours, face by the side of the fit: told apart without colour."""
    above, unlike = words.startswith("above"), "among" in words
    own = mark(structure)
    hue = LIGHT.ink if unlike else getattr(LIGHT, own.role)
    return {
        "marker": "D" if unlike else own.marker,
        "markersize": 7 if unlike else 9,
        "markerfacecolor": hue if above else LIGHT.paper,
        "markeredgecolor": hue,
        "markeredgewidth": 1.4,
    }


def _key(figure: Figure, y: float, words: str, style: dict[str, object]) -> None:
    """A mark and what it stands for, at the left below a map."""
    from matplotlib.lines import Line2D

    whole = figure.get_size_inches() * 72
    dot = Line2D([8 / whole[0]], [1 - y / whole[1]], linestyle="none", **style)  # type: ignore[arg-type]
    figure.add_artist(dot)
    say(figure, 20, y, words, fontsize=SMALL, color=LIGHT.muted)


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


# ---- directions ------------------------------------------------------------------------------

AXIS = 44.0  # pixels of one axis


def paint_directions(curve: Curve, structure: str, width: float) -> Figure:
    """Likeness along each axis, the axis itself drawn at the left, its band of independent data shaded."""
    several = len(curve.x)
    figure = blank(width, 26 + AXIS * several + 50)
    left, right = 96.0, 64.0
    panel = axes(figure, left, 26, width - left - right, AXIS * several)
    own = mark(structure)
    hue = getattr(LIGHT, own.role)
    panel.set_ylim(several, 0)
    panel.set_yticks([])
    panel.axvline(0, color=LIGHT.faint, linewidth=1)
    for k, (angle, value) in enumerate(zip(curve.x, curve.y, strict=True)):
        middle = k + 0.5
        if curve.low and curve.high:
            panel.barh([middle], [curve.high[k] - curve.low[k]], 0.56, left=curve.low[k],
                       facecolor=LIGHT.wash, edgecolor=LIGHT.faint, linewidth=0.8)  # fmt: skip
        panel.plot([0, value], [middle] * 2, color=hue, linewidth=2)
        panel.plot([value], [middle], own.marker, color=hue, markersize=7)
        y = 26 + AXIS * middle
        _needle(figure, 22, y, angle, hue)
        say(figure, 46, y, f"{number(angle, 0)}°", fontsize=SMALL)
        say(figure, width, y, number(value, 2), ha="right", fontsize=SMALL)
    few_ticks(panel)
    say(figure, 0, 10, curve.y_name or "likeness", fontsize=SMALL, color=LIGHT.muted)
    note = "shaded: where independent data lie" if curve.low else ""
    say(figure, 0, 26 + AXIS * several + 38, note, fontsize=SMALL, color=LIGHT.muted)
    return figure


def _needle(figure: Figure, x: float, y: float, degrees: float, color: str) -> None:
    """A line at an angle, counter-clockwise from the horizontal, with its middle at (x, y)."""
    from matplotlib.lines import Line2D

    whole = figure.get_size_inches() * 72
    turn = math.radians(degrees)
    across, up = 15 * math.cos(turn), 15 * math.sin(turn)
    xs: Array = np.array([x - across, x + across]) / whole[0]
    ys: Array = 1 - np.array([y + up, y - up]) / whole[1]
    figure.add_artist(Line2D(xs, ys, color=color, linewidth=3))
