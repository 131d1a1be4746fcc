"""The plain bundle of an examination: the keys of results.json, in order."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from clingstone.advice.choose import Advice
from clingstone.evidence.finding import Finding
from clingstone.ledger.ledger import Ledger
from clingstone.remedies.remedy import Refit

SCHEMA = 1


@dataclass(frozen=True)
class GroupSummary:
    """One group level as declared."""

    key: str
    count: int
    smallest: int
    median: float
    largest: int
    cv: float
    singletons: int
    parent: str = ""
    labels: tuple[str, ...] = ()  # at most 40, for a tree
    sizes: tuple[int, ...] = ()  # of those labels


@dataclass(frozen=True)
class SerialSummary:
    """Order in time as declared."""

    time: str
    series: str
    count: int
    shortest: int
    longest: int
    spacing: str
    step: float
    unit: str
    gaps: int
    ties: int
    first: str
    last: str


@dataclass(frozen=True)
class SpatialSummary:
    """Places as declared."""

    names: tuple[str, str]
    kind: str
    sites: int
    rows_per_site: float
    extent: float
    unit: str
    neighbours: tuple[str, ...]
    islands: int
    x: tuple[float, ...] = ()  # at most 2,000 sites, for a map
    y: tuple[float, ...] = ()


@dataclass(frozen=True)
class CaseSummary:
    """What was read, dropped and declared."""

    name: str
    n: int
    p: int
    response: str
    formula: str
    terms: tuple[str, ...]
    coefficients: tuple[str, ...]
    focus: tuple[str, ...]
    varies: Mapping[str, str]  # term → level at which it varies
    group: tuple[GroupSummary, ...]
    arrangement: str
    serial: SerialSummary | None
    spatial: SpatialSummary | None
    assigned: Mapping[str, str]
    sampled: str
    dropped: Mapping[str, int]
    rows_read: int
    notes: tuple[str, ...]
    origin: Mapping[str, str]  # file, encoding, separator, decimal mark, fingerprint …
    transformed: str = ""  # "log" when the response is a log, so effects are also ratios


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
