"""Figures for a notebook or a paper of one's own: whole, or drawn into axes that the user brings."""

from __future__ import annotations

from typing import TYPE_CHECKING

from clingstone.display import instead, number
from clingstone.needs import InputError
from clingstone.results import Results
from clingstone.writeup import figures
from clingstone.writeup.look import LIGHT
from clingstone.writeup.plate import WIDE, Plate, few_ticks
from clingstone.writeup.read import level_percent, served
from clingstone.writeup.save import plates
from clingstone.writeup.tables import shares_told

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


def names(results: Results) -> dict[str, str]:
    """Name → caption of every figure."""
    return {p.name: p.caption for p in plates(results)}


def plate(results: Results, name: str) -> Plate:
    """Raises InputError when there is no figure of that name."""
    found = {p.name: p for p in plates(results)}
    if name not in found:
        raise InputError(f"there is no figure ‘{name}’", instead(name, tuple(found)))
    return found[name]


def figure(results: Results, name: str, width: float = WIDE) -> Figure:
    """A figure of the report, ``width`` / 72 inches wide, whose axes (``.axes``) can be restyled."""
    return plate(results, name).drawn(width)


def draw_intervals(results: Results, ax: Axes, term: str | None = None) -> Axes:
    """The intervals of one row (the first in focus) under every refit, advised first, into given axes.

    Raises InputError when nothing was fitted, or not for that row.
    """
    have = served(results)
    if not have:
        raise InputError("no interval was fitted, so there is none to draw", "See .advice for the reason.")
    term = have[0] if term is None else term
    if term not in have:
        raise InputError(f"there is no interval for ‘{term}’", instead(term, have))
    rungs = figures.rungs_of(results, term)
    low, high = figures.reach(rungs)
    for k, r in enumerate(rungs):
        figures.draw_rung(ax, r, float(k), low, high)
    if low <= 0 <= high:
        ax.axvline(0, color=LIGHT.faint, linewidth=1.2, zorder=0)
    ax.set_xlim(low, high)
    ax.set_ylim(len(rungs) - 0.5, -0.5)
    ax.set_yticks(range(len(rungs)), [r.label for r in rungs])
    few_ticks(ax)
    ax.set_xlabel(f"{term}, {level_percent(results)} interval")
    return ax


def draw_shares(results: Results, ax: Axes) -> Axes:
    """What the model leaves over by structure, each share with its interval, into given axes.

    Raises InputError when no share was estimated.
    """
    parts = [s for s in shares_told(results) if s.share == s.share]
    if not parts:
        raise InputError("no share of the residual variance was estimated", "See .ledger.refused.")
    for k, s in enumerate(parts):
        figures.draw_whisker(ax, s, float(k))
    ax.set_xlim(0, 1)
    ax.set_ylim(len(parts) - 0.5, -0.5)
    ax.set_yticks(range(len(parts)), [s.label for s in parts])
    ax.set_xticks([0, 0.5, 1], [f"{number(100 * v, 0)} %" for v in (0, 0.5, 1)])
    ax.set_xlabel("share of the residual variance")
    return ax
