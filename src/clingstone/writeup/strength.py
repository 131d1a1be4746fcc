"""How strong a dependence is, in figures: digits that follow the interval, and no length beyond the data.

A half-life of a million steps cannot be told from one of a billion by a hundred rows: what lies far beyond
the data is told as more than the data can hold.
"""

from __future__ import annotations

import math

from clingstone.display import decimals_for, number, significant, span
from clingstone.ledger.ledger import Parameter
from clingstone.results import Results

BEYOND = 10.0  # times the length of the data, or the width of the map


def most(results: Results, p: Parameter) -> float:
    """The largest value of a parameter that is told; no bound for what is not a length."""
    serial, spatial = results.case.serial, results.case.spatial
    if p.name == "half-life" and serial is not None and serial.step > 0:
        return BEYOND * serial.longest * serial.step
    if p.name == "practical range" and spatial is not None and spatial.extent > 0:
        return BEYOND * spatial.extent
    return math.inf


def places(results: Results, p: Parameter) -> int:
    """Figures that follow the interval: two digits of half its length, and one of the distance to its lower
    end, which is far nearer where a length has a long tail. Correlations have two decimals."""
    if p.name in ("intraclass correlation", "ρ"):
        return 2
    top = min(p.high, most(results, p))
    near = decimals_for(p.estimate - p.low, 1) if p.estimate > p.low else 0
    return min(4, max(0, near, decimals_for((top - p.low) / 2)))


def figure(results: Results, p: Parameter, value: float) -> str:
    """One value: "2.9", "more than 690"."""
    top = most(results, p)
    return f"more than {significant(top)}" if value > top else number(value, places(results, p))


def interval(results: Results, p: Parameter) -> str:
    """ "1.4 to 5.2", "3.1 to more than 690"; "" where an end is not known."""
    if math.isnan(p.low + p.high):
        return ""
    top = most(results, p)
    if p.low > top:
        return figure(results, p, p.low)
    if p.high > top:
        return f"{figure(results, p, p.low)} to {figure(results, p, p.high)}"
    return span(p.low, p.high, places(results, p)) if math.isfinite(p.low + p.high) else ""
