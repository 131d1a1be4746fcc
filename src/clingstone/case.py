"""A case: the rows that a person brought, as a design and a response, and what happened on the way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.run import Settings


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


@dataclass(frozen=True, eq=False)
class Case:
    """A design, one column of y, and the way from the user's table to both.

    response : B = 1. kept : (n,) position in the user's table of each row of the design, in the
    design's own order (by series and time where time is declared). dropped : rows left out, by
    reason. notes : what a reader should know of the reading, one sentence each. origin : file,
    encoding, separator, decimal mark, fingerprint.
    """

    response: Response
    settings: Settings
    name: str
    formula: str
    response_name: str
    kept: npt.NDArray[np.int64]
    rows_read: int
    dropped: Mapping[str, int]
    notes: tuple[str, ...]
    origin: Mapping[str, str]
    transformed: str = ""

    @property
    def design(self) -> Design:
        return self.response.design
