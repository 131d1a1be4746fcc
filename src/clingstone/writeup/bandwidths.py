"""How a standard error by a kernel changes with the bandwidth: a figure for each refit that tells it."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING

from clingstone.display import Cell, Column, Table, significant
from clingstone.remedies.remedy import Refit
from clingstone.results import Results
from clingstone.writeup.look import LIGHT
from clingstone.writeup.naming import named
from clingstone.writeup.plate import SMALL, Plate, axes, blank, few_ticks, say
from clingstone.writeup.read import ordered, ordinary, row_of, served
from clingstone.writeup.strokes import ends, room

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_AT = re.compile(r"([\d.]+(?:e[+-]?\d+)?) at (\d+)")
_REACH = re.compile(r"([\d.,]+)(?: (\S+))?")
_SE = re.compile(r"([\d.]+(?:e[+-]?\d+)?)(?: with .*)?")


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
    by_lags, by_reach = f"standard error of {term} by lags", f"standard error of {term} at "
    for key, value in fit.account.items:
        if key == by_lags:
            pairs = _AT.findall(value)
            at, se = tuple(lag for _, lag in pairs), tuple(float(v) for v, _ in pairs)
            return Sweep(fit.name, fit.remedy, term, "lags", at, se, plain) if len(pairs) > 1 else None
    found = [
        (reach, error)
        for key, value in fit.account.items
        if key.startswith(by_reach)
        and (reach := _REACH.fullmatch(key.removeprefix(by_reach)))
        and (error := _SE.fullmatch(value))
    ]
    if len(found) < 2:
        return None
    unit = found[0][0].group(2)
    what = f"cutoff ({unit})" if unit else "cutoff"
    at = tuple(reach.group(1) for reach, _ in found)
    se = tuple(float(error.group(1)) for _, error in found)
    return Sweep(fit.name, fit.remedy, term, what, at, se, plain)


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
