"""The whole rule table, in the order in which it is read."""

from __future__ import annotations

from clingstone.advice.cautions import CAVEATS
from clingstone.advice.decisions import PREFER
from clingstone.advice.rule import Rule, Then
from clingstone.advice.states import NO_REMEDY, NOTHING, STATES

__all__ = ["CAVEATS", "NOTHING", "NO_REMEDY", "PREFER", "RULES", "STATES", "Rule", "Then", "rule_table"]

RULES: tuple[Rule, ...] = (*STATES, NO_REMEDY, *PREFER, *CAVEATS)


def rule_table() -> tuple[tuple[str, str, str, str, str, str], ...]:
    """Rows for the documentation: id, when, then, because, source, strength."""
    return tuple((r.id, str(r.when), str(r.then), r.because, r.source, r.strength) for r in RULES)
