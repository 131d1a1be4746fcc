"""Tests of dependence and of what can be taken for it."""

from __future__ import annotations

from clingstone.evidence.finding import About, Curve, Evidence, Finding, Reading, Test
from clingstone.evidence.gather import Columns, Item, gather, read_column, read_columns
from clingstone.evidence.judge import VERDICTS
from clingstone.evidence.registry import TESTS, by_id

__all__ = [
    "TESTS",
    "VERDICTS",
    "About",
    "Columns",
    "Curve",
    "Evidence",
    "Finding",
    "Item",
    "Reading",
    "Test",
    "by_id",
    "gather",
    "read_column",
    "read_columns",
]
