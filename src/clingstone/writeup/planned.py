"""The figure of a plan: expected width against the number of units, a line for each number of rows."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from clingstone.display import number, significant
from clingstone.rehearsal.plan import Plan, Scenario, rows_of_each
from clingstone.writeup.look import LIGHT
from clingstone.writeup.plate import SMALL, Plate, axes, blank, few_ticks, say
from clingstone.writeup.strokes import LINES

if TYPE_CHECKING:
    from matplotlib.figure import Figure

NEAR = 0.02  # rows of one line agree within so much: groups of unequal size are enlarged to the next row
APART = 15.0  # pixels between the names of two lines


def plate(plan: Plan) -> Plate:
    """Expected width against the units; against rows where there is one unit. A ring: the size at hand."""
    first = plan.scenarios[0]
    single = len({s.units for s in plan.scenarios}) == 1
    lines = [list(plan.scenarios)] if single else _lines(plan.scenarios)
    least = min(plan.scenarios, key=lambda s: s.width)
    level = f"{100 * plan.confidence:g} % interval"
    alt = (
        f"At {_size(plan, first)} the {level} of {plan.term} is expected to be {significant(first.width, 3)} "
        f"wide; the narrowest of these, at {_size(plan, least)}, {significant(least.width, 3)}. {plan.better}"
    )
    return Plate(
        "plan",
        f"Expected width of the {level} of {plan.term}",
        alt.strip(),
        plan.table(),
        lambda width: _paint(plan, lines, single, width),
        note=" ".join(plan.assumptions),
    )


def _size(plan: Plan, s: Scenario) -> str:
    return f"{s.units:,} {plan.unit} of {rows_of_each(s)} rows"


def _lines(scenarios: Sequence[Scenario]) -> list[list[Scenario]]:
    """Scenarios of about the same rows of each, in the order of the rows."""
    out: list[list[Scenario]] = []
    for s in sorted(scenarios, key=lambda s: s.rows):
        if out and abs(s.rows / out[-1][0].rows - 1) < NEAR:
            out[-1].append(s)
        else:
            out.append([s])
    return out


def _paint(plan: Plan, lines: list[list[Scenario]], single: bool, width: float) -> Figure:
    phone = width < 480
    left, top, right, tall = 46.0, 22.0, 30.0 if single else 78.0, 220.0
    figure = blank(width, top + tall + 46)
    panel = axes(figure, left, top, width - left - right, tall)
    most = max(s.width for s in plan.scenarios)
    panel.set_ylim(0, 1.06 * most)
    ends = []
    for k, line in enumerate(lines):
        points = sorted((s.rows if single else s.units, s.width) for s in line)
        x, y = zip(*points, strict=True)
        panel.plot(x, y, color=LIGHT.ink, linewidth=1.8, linestyle=LINES[k % len(LINES)][1])
        panel.plot(x, y, "o", color=LIGHT.ink, markersize=4)
        ends.append((top + tall * (1 - y[-1] / (1.06 * most)), f"{rows_of_each(line[0])} rows"))
    first = plan.scenarios[0]
    at = first.rows if single else first.units
    panel.plot([at], [first.width], "o", markersize=11, markerfacecolor="none", markeredgecolor=LIGHT.accent)
    if not single:
        for down, words in _spaced(ends):
            say(figure, width - right + 8, down, words, fontsize=SMALL, color=LIGHT.muted)
    few_ticks(panel, "x", 4 if phone else 6)
    few_ticks(panel, "y", 4)
    say(figure, 0, 8, "expected width", fontsize=SMALL, color=LIGHT.muted)
    name = "rows" if single else plan.unit
    said = f"{name}; ring: the first size, {number(first.width, 2)} wide"
    say(figure, width - right, top + tall + 36, said, ha="right", fontsize=SMALL, color=LIGHT.muted)
    return figure


def _spaced(ends: list[tuple[float, str]]) -> list[tuple[float, str]]:
    """The names of the lines, from the top, none over another."""
    out: list[tuple[float, str]] = []
    for y, words in sorted(ends):
        out.append((max(y, out[-1][0] + APART) if out else y, words))
    return out
