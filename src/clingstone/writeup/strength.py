"""How strong a dependence is, in figures: digits that follow the interval, and no length beyond the data.

A half-life of a million steps cannot be told from one of a billion by a hundred rows: what lies far beyond
the data is told as more than the data can hold.
"""

from __future__ import annotations

import math

from clingstone.display import decimals_for, number, significant
from clingstone.ledger.ledger import Parameter
from clingstone.results import Results

BEYOND = 10.0  # times the length of the data, or the width of the map
LENGTHS = ("half-life", "practical range")
LONG_TAIL = 3.0


def most(results: Results, p: Parameter) -> float:
    """The largest value of a parameter that is told; no bound for what is not a length."""
    serial, spatial = results.case.serial, results.case.spatial
    if p.name == "half-life" and serial is not None and serial.step > 0:
        return BEYOND * serial.longest * serial.step
    if p.name == "practical range" and spatial is not None and spatial.extent > 0:
        return BEYOND * spatial.extent
    return math.inf


def places(results: Results, p: Parameter) -> int:
    """Figures that follow the interval: two digits of half its length. Correlations have two decimals."""
    if p.name in ("intraclass correlation", "ρ"):
        return 2
    return min(4, max(0, decimals_for((min(p.high, most(results, p)) - p.low) / 2)))


def figure(results: Results, p: Parameter, value: float) -> str:
    """One value: "2.9", "more than 690".

    A length whose interval has a long tail has two digits of its own at each end: "2.0 (0.94 to 22)".
    """
    top = most(results, p)
    if value > top:
        return f"more than {significant(top)}"
    skew = p.name in LENGTHS and p.low > 0 and p.high > LONG_TAIL * p.low
    return significant(value) if skew else number(value, places(results, p))


def interval(results: Results, p: Parameter) -> str:
    """ "1.4 to 5.2", "3.1 to more than 690"; "" where an end is not known."""
    if math.isnan(p.low + p.high):
        return ""
    if p.low > most(results, p):
        return figure(results, p, p.low)
    if not math.isfinite(min(p.high, most(results, p))):
        return ""
    return f"{figure(results, p, p.low)} to {figure(results, p, p.high)}"
