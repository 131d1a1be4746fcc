"""From rules to advice: shortlist before the refits, one remedy after them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

State = Literal["supported", "supported with caveat", "mean first", "not correctable", "nothing found"]


@dataclass(frozen=True)
class Reason:
    """One sentence of advice with the rule that gave it, the facts that it read, and its source."""

    sentence: str
    rule: str
    facts: tuple[tuple[str, str], ...]
    source: str
    strength: str = ""


@dataclass(frozen=True)
class Choice:
    """A remedy at a level: the id, and "" or a group level, series or sites."""

    remedy: str
    at: str = ""
    because: str = ""


@dataclass(frozen=True)
class Advice:
    """What to report and why; the last step of an examination."""

    state: State
    headline: str
    structures: frozenset[str]  # families judged present
    levels: tuple[str, ...]  # group levels, series or sites that the advised remedy works at
    protected: frozenset[str]  # families covered though only plausible
    remedy: str  # id
    at: str
    mean_in_doubt: bool
    because: tuple[Reason, ...]
    cautions: tuple[Reason, ...]
    alternatives: tuple[Choice, ...]
    refused: tuple[tuple[str, str, str], ...]  # remedy, reason, what would be needed
