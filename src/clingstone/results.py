"""The plain bundle of an examination: the keys of results.json, in order."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from clingstone.advice.choose import Advice
from clingstone.case import CaseSummary
from clingstone.evidence.finding import Finding
from clingstone.ledger.ledger import Ledger
from clingstone.remedies.remedy import Refit

SCHEMA = 1


@dataclass(frozen=True)
class Reference:
    """A source, as it will stand in references.bib."""

    key: str
    bibtex: str
    text: str


@dataclass(frozen=True)
class Results:
    """Everything that an examination says, as numbers and words."""

    clingstone: str
    schema: int
    case: CaseSummary
    evidence: tuple[Finding, ...]
    ledger: Ledger
    advice: Advice
    refits: tuple[Refit, ...]
    rehearsal: Mapping[str, Any] | None
    methods: str
    references: tuple[Reference, ...]
    settings: Mapping[str, Any]
    versions: Mapping[str, str] = field(default_factory=dict)
