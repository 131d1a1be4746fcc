"""The plot of the validation page: coverage of the advised and of the ordinary interval, by world."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import matplotlib as mpl
from matplotlib.figure import Figure

from clingstone.writeup.look import LIGHT
from tests.validation.tally import Tally

ROW = 0.185  # inches of one world
NOMINAL = 0.95
STYLE = {"svg.fonttype": "none", "svg.hashsalt": "validation", "font.family": "sans-serif", "font.size": 8}


def coverage_plot(families: Mapping[str, Sequence[Tally]], path: Path) -> None:
    """Writes an SVG: a row for each world, in the order of the page."""
    lines: list[tuple[float, Tally]] = []
    heads: list[tuple[float, str]] = []
    at = 0.0
    for name, found in families.items():
        heads.append((at, name))
        for one in found:
            at += 1
            lines.append((at, one))
        at += 1.6
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(8.2, ROW * (at + 4)), facecolor=LIGHT.paper)
        axes = figure.add_axes((0.47, 0.02, 0.51, 0.95), facecolor=LIGHT.paper)
        axes.axvline(NOMINAL, color=LIGHT.faint, linewidth=1)
        rows = [(y, one) for y, one in lines if one.advised.n]
        axes.errorbar(
            [one.advised.value for _, one in rows],
            [y for y, _ in rows],
            xerr=[2 * one.advised.error for _, one in rows],
            fmt="o",
            color=LIGHT.accent,
            markersize=4,
            linewidth=1,
            label="advised, ± 2 Monte-Carlo errors",
        )
        axes.plot(
            [one.ordinary.value for _, one in lines],
            [y for y, _ in lines],
            "D",
            color=LIGHT.muted,
            markerfacecolor="none",
            markersize=3.5,
            label="ordinary",
        )
        for y, name in heads:
            axes.text(
                -0.02, y, name, transform=axes.get_yaxis_transform(), ha="right", va="center", weight="bold"
            )
        axes.set_yticks([y for y, _ in lines], [one.world.name for _, one in lines])
        axes.set_ylim(at - 1, -1.2)
        axes.set_xlim(min(0.5, *(one.ordinary.value for _, one in lines)) - 0.02, 1.01)
        axes.xaxis.tick_top()
        axes.tick_params(colors=LIGHT.ink, length=0)
        for side in ("left", "right", "bottom", "top"):
            axes.spines[side].set_visible(False)
        axes.grid(axis="x", color=LIGHT.wash, linewidth=0.8)
        axes.set_axisbelow(True)
        figure.legend(loc="upper left", frameon=False, bbox_to_anchor=(0.0, 1.0))
        figure.savefig(path, metadata={"Date": None})
