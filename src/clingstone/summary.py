"""What was read and declared, as plain numbers and words: the case as a reader sees it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.maths.partition import Partition

MOST_LABELS = 40
MOST_SITES = 2000
MOST_TREE = 600


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
    labels: tuple[str, ...] = ()  # at most 40
    sizes: tuple[int, ...] = ()  # of those labels
    effective: float = float("nan")  # (Σ n_g)²/Σ n_g²: as many groups of equal size
    tree: tuple[int, ...] = ()  # sizes of all groups, under their parents; () beyond 600 groups
    tree_labels: tuple[str, ...] = ()  # of those, where there are at most 40


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


def group_summaries(design: Design) -> tuple[GroupSummary, ...]:
    if design.group is None:
        return ()
    levels = design.group.levels
    nested = design.group.arrangement == "nested"
    out, above = [], np.zeros(design.n, dtype=np.int64)
    for i, level in enumerate(levels):
        order = np.lexsort((-level.sizes, above[level.first]))
        rank = np.empty(level.count, dtype=np.int64)
        rank[order] = np.arange(level.count)
        if nested:
            above = rank[level.codes]
        out.append(_group(level, levels[i - 1].key if nested and i else "", order))
    return tuple(out)


def _group(level: Partition, parent: str, order: npt.NDArray[np.int64]) -> GroupSummary:
    """order : of the groups in a tree, those of one parent next to each other."""
    sizes = level.sizes
    return GroupSummary(
        key=level.key,
        count=level.count,
        smallest=int(sizes.min()),
        median=float(np.median(sizes)),
        largest=int(sizes.max()),
        cv=float(np.std(sizes, ddof=1) / np.mean(sizes)) if level.count > 1 else 0.0,
        singletons=int(np.sum(sizes == 1)),
        parent=parent,
        labels=level.labels[:MOST_LABELS],
        sizes=tuple(int(s) for s in sizes[:MOST_LABELS]),
        effective=float(sizes.sum() ** 2 / np.sum(sizes.astype(float) ** 2)),
        tree=tuple(int(s) for s in sizes[order]) if level.count <= MOST_TREE else (),
        tree_labels=tuple(level.labels[g] for g in order) if level.count <= MOST_LABELS else (),
    )


def serial_summary(design: Design) -> SerialSummary | None:
    serial = design.serial
    if serial is None:
        return None
    return SerialSummary(
        time=serial.name,
        series=serial.part.key,
        count=serial.part.count,
        shortest=int(serial.part.sizes.min()),
        longest=int(serial.part.sizes.max()),
        spacing=serial.spacing,
        step=float(serial.step),
        unit=serial.unit,
        gaps=serial.gaps,
        ties=serial.ties,
        first=serial.first,
        last=serial.last,
    )


def spatial_summary(design: Design) -> SpatialSummary | None:
    sites = design.spatial
    if sites is None:
        return None
    shown = sites.xy[:: max(1, -(-sites.count // MOST_SITES))]
    return SpatialSummary(
        names=sites.names,
        kind=sites.kind,
        sites=sites.count,
        rows_per_site=design.n / sites.count,
        extent=float(sites.along(np.asarray(sites.extent))),
        unit=sites.unit,
        neighbours=tuple(graph.about for graph in design.neighbours),
        islands=design.neighbours[0].islands if design.neighbours else 0,
        x=tuple(float(v) for v in shown[:, 0]),
        y=tuple(float(v) for v in shown[:, 1]),
    )
