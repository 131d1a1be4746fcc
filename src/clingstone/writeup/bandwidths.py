"""How a standard error by a kernel changes with the bandwidth: a figure for each refit that tells it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from clingstone.display import Cell, Column, Table, amount, significant
from clingstone.remedies.remedy import Refit
from clingstone.results import Results
from clingstone.writeup.look import LIGHT
from clingstone.writeup.naming import named
from clingstone.writeup.plate import SMALL, Plate, axes, blank, few_ticks, say
from clingstone.writeup.read import ordered, ordinary, row_of, served
from clingstone.writeup.strokes import ends, room

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class Sweep:
    """Standard errors of one row of one refit, by bandwidth as it is written."""

    fit: str
    remedy: str
    term: str
    what: str  # "lags", "cutoff (km)"
    at: tuple[str, ...]
    se: tuple[float, ...]
    plain: float  # of the ordinary fit


def plates(results: Results) -> tuple[Plate, ...]:
    """For the first focus row, a figure for each refit that tells its standard errors by bandwidth."""
    base = ordinary(results)
    out: list[Sweep] = []
    for name in served(results)[:1]:
        plain = row_of(base, name)
        for fit in ordered(results):
            found = sweep(fit, name, plain.se if plain is not None else float("nan"))
            if found is not None and all(found.se != other.se for other in out):
                out.append(found)
    return tuple(_plate(s) for s in out)


def sweep(fit: Refit, term: str, plain: float) -> Sweep | None:
    """What the account of a refit says of the standard error of a row by lags or by cutoff, or None."""
    told = next((b for b in fit.account.bandwidths if b.term == term and len(b.at) > 1), None)
    if told is None:
        return None
    what = f"{told.what} ({told.unit})" if told.unit else told.what
    at = tuple(amount(x) for x in told.at)
    return Sweep(fit.name, fit.remedy, term, what, at, told.se, plain)


def _plate(s: Sweep) -> Plate:
    low, high = min(s.se), max(s.se)
    columns = (Column("at", s.what), Column("se", "standard error", "right"))
    rows = [[Cell(at, at), Cell(significant(se, 3), se)] for at, se in zip(s.at, s.se, strict=True)]
    told = [f"{significant(v, 3)} at {s.at[s.se.index(v)]}" for v in (low, high)]
    plain = f"; the ordinary one is {significant(s.plain, 3)}" if s.plain == s.plain else ""
    return Plate(
        f"bandwidths-{s.remedy}",
        f"Standard error of {named(s.term)} by {s.what.partition(' ')[0]}: {s.fit}",
        f"By {s.what.partition(' ')[0]} the standard error runs from {told[0]} to {told[1]}{plain}.",
        Table.of("Numbers behind the figure", columns, rows),
        lambda width: _paint(s, width),
    )


def _paint(s: Sweep, width: float) -> Figure:
    """Standard errors at bandwidths that stand apart evenly; the ordinary one as a dashed line."""
    words = "dashed: ordinary fit" if s.plain == s.plain else ""
    up = room(width, "standard error", words)
    figure = blank(width, 224 + up)
    panel = axes(figure, 52, 26 + up, width - 66, 150)
    places = range(len(s.at))
    panel.plot(places, s.se, color=LIGHT.ink, linewidth=1.6, marker="o", markersize=5)
    if words:
        panel.axhline(s.plain, color=LIGHT.muted, linewidth=1.2, linestyle=(0, (4, 2)))
    panel.set_ylim(0, 1.12 * max(*s.se, s.plain if words else 0.0))
    panel.set_xticks(list(places), list(s.at))
    few_ticks(panel, "y", 4)
    ends(figure, 10, "standard error", words)
    say(figure, width, 214 + up, s.what, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure
