"""What an advice holds, and the scores that a rehearsal may bring. Plain numbers and words."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from clingstone.ledger.ledger import Parameter, Share, Standing

State = Literal["supported", "supported with caveat", "mean first", "not correctable", "nothing found"]
REPAIRED = "repaired-mean"


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
class Repair:
    """What a missing part of the mean does to the structures, when it is put in.

    what : "curve in day". goes, stays, appears : labels of structures that are no longer seen, that
    stay, and that show only then. remedy, at : the remedy behind the repaired refit. standing, shares,
    parameters : the ledger of the model with the part in.
    """

    what: str
    left: str
    goes: tuple[str, ...]
    stays: tuple[str, ...]
    appears: tuple[str, ...]
    remedy: str
    at: str
    standing: tuple[Standing, ...]
    shares: tuple[Share, ...]
    parameters: tuple[Parameter, ...]


@dataclass(frozen=True)
class Advice:
    """What to report and why; the last step of an examination."""

    state: State
    headline: str
    structures: frozenset[str]  # families judged present; where the mean comes first, with it mended
    levels: tuple[str, ...]  # group levels, series or sites that the advised remedy works at
    protected: frozenset[str]  # families covered though only plausible
    remedy: str  # id; "" when none can be advised
    at: str
    mean_in_doubt: bool
    because: tuple[Reason, ...]
    cautions: tuple[Reason, ...]
    alternatives: tuple[Choice, ...]
    refused: tuple[tuple[str, str, str], ...]  # remedy, reason, what would be needed
    repair: Repair | None = None  # set when a part of the mean seems to be missing


@dataclass(frozen=True)
class Score:
    """What a rehearsal found of one remedy: smallest coverage over the plausible set, its Monte-Carlo
    standard error, and the mean width relative to the ordinary interval, over the focus terms.

    fitted : smallest coverage over the truths that were fitted, without the different one. truth : the
    name of the truth with the smallest.
    """

    remedy: str
    at: str
    coverage: float
    mcse: float
    width: float
    fitted: float = float("nan")
    truth: str = ""


@dataclass(frozen=True)
class Scores:
    """The table that a rehearsal fills and the chooser reads."""

    rows: tuple[Score, ...]
    confidence: float = 0.95

    def adequate(self, remedy: str, at: str) -> bool | None:
        """Coverage not below nominal − 2·MCSE − 0.01; None for a remedy that was not rehearsed."""
        row = self.get(remedy, at)
        return None if row is None else row.coverage >= self.floor(row)

    def floor(self, row: Score) -> float:
        """The least coverage that is adequate for a remedy."""
        return self.confidence - 2 * row.mcse - 0.01

    def get(self, remedy: str, at: str) -> Score | None:
        return next((r for r in self.rows if (r.remedy, r.at) == (remedy, at)), None)
