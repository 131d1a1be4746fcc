"""Ordinary least squares with a few large regions of the map as clusters."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np
import numpy.typing as npt
from scipy.spatial.distance import cdist

from clingstone.design.design import Design
from clingstone.maths import sandwich
from clingstone.maths.once import Array, frozen, kept
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.linear import few_df, reported, stop_if_none_left
from clingstone.remedies.places import OnMap, enough_sites, length
from clingstone.remedies.remedy import PLACED, Account, Estimand
from clingstone.remedies.sandwich import ClusterReady
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

COUNTS = (12, 8, 6, 4)  # of regions, the most first
STARTS, ROUNDS = 20, 60
SAMPLE = 5000  # sites that place the centres
SHARE = 1 / 3  # of an even share of the rows that every region must hold


@dataclass(frozen=True, eq=False)
class Regions:
    """Sites in compact regions. codes (S,). radius : of a disc as spread out as a region, median."""

    codes: npt.NDArray[np.int32]
    count: int
    radius: float


@dataclass(frozen=True, eq=False, kw_only=True)
class RegionReady(ClusterReady):
    """regions : the clusters on the map. reach : practical range of the fitted covariance, or NaN."""

    regions: Regions
    reach: float
    unit: str

    def account(self, fits: Fits) -> Account:
        found = super().account(fits)
        own = (
            ("regions", f"{self.regions.count}, compact and of like size"),
            ("radius of a region", length(self.regions.radius, self.unit)),
            ("practical range of the fitted dependence", length(self.reach, self.unit)),
        )
        return replace(found, items=(*own, *found.items[1:]), source="bester-conley-hansen-2011")


@dataclass(frozen=True)
class RegionCluster(OnMap):
    """Cluster-robust over a few large regions, factor G/(G − 1), t with G − 1 df.

    Regions are taken as independent, which holds only where the dependence fades well inside one:
    the practical range must not exceed half of a region's radius. The largest of 12, 8, 6 and 4 that
    meets this is used (Bester, Conley & Hansen 2011).
    """

    at: str = ""
    limits: Limits = field(default_factory=Limits)
    count: int | None = None
    id: ClassVar[str] = "region-cluster"
    name: ClassVar[str] = "cluster-robust, by region of the map"
    covers: ClassVar[frozenset[Family]] = frozenset({"spatial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = PLACED
    source: ClassVar[str] = "bester-conley-hansen-2011"

    def covering(self, fits: Fits) -> frozenset[Family]:
        """Also groups and series that lie within one place each."""
        design = fits.design
        out: set[Family] = {"spatial"}
        if design.spatial is not None:
            part = design.spatial.part
            if design.group is not None and all(
                part.relation(g) in ("same", "nests") for g in design.group.levels
            ):
                out.add("group")
            if design.serial is not None and part.relation(design.serial.part) in ("same", "nests"):
                out.add("serial")
        return frozenset(out)

    def prepare(self, design: Design, working: ErrorModel | None = None) -> RegionReady:
        sites = enough_sites(design, self.limits.sites_estimate, "regions need")
        reach = _reach(working)
        regions = self._chosen(sites, reach)
        names, W = reported(design)
        codes = regions.codes[sites.part.codes]
        labels = tuple(f"region {g + 1}" for g in range(regions.count))
        part = Partition(f"region:{regions.count}", frozen(codes), labels)
        weights = kept(
            design,
            ("region weights", regions.count),
            lambda: sandwich.adjust(design.scores(part), W, "CR0"),
        )
        df = np.full(len(names), part.count - 1.0)
        unusable = few_df(names, df)
        stop_if_none_left(names, unusable)
        return RegionReady(
            design,
            names,
            W,
            df[:, None],
            "regions − 1",
            unusable,
            kind="CR1",
            at="region",
            part=part,
            weights=weights,
            own_df=False,
            regions=regions,
            reach=reach,
            unit=sites.unit,
        )

    def _chosen(self, sites: Sites, reach: float) -> Regions:
        smallest = None
        for count in COUNTS if self.count is None else (self.count,):
            found = _regions(sites, count)
            if found is None:
                continue
            if self.count is not None or np.isnan(reach) or reach <= found.radius / 2:
                return found
            smallest = found
        if smallest is None:
            raise NotSupported(
                "the places cannot be cut into four regions of like size",
                "Use spatial-gls or spatial-components.",
            )
        raise NotSupported(
            f"the dependence reaches {length(reach, sites.unit, 2)}, and four regions have a radius of "
            f"{length(smallest.radius, sites.unit, 2)}: they would not be independent",
            "Use spatial-gls or spatial-components, or a wider map.",
        )

    def conventions(self) -> tuple[tuple[str, RegionCluster], ...]:
        return tuple((f"{count} regions, whatever the range", replace(self, count=count)) for count in COUNTS)


def _reach(working: ErrorModel | None) -> float:
    """Practical range along the surface; NaN where no dependence between places was fitted."""
    if working is None or "spatial.range" not in working.shape:
        return float("nan")
    return float(working.shape["spatial.range"][0])


def _regions(sites: Sites, count: int) -> Regions | None:
    """Regions by k-means, the best of 20 starts in which each holds a third of an even share of rows."""
    return kept(sites, ("regions", count), lambda: _partitioned(sites, count))


def _partitioned(sites: Sites, count: int) -> Regions | None:
    rng = np.random.default_rng(0)
    points, rows = sites.points, sites.part.sizes.astype(float)
    some = np.arange(sites.count)
    if sites.count > SAMPLE:
        some = np.sort(rng.choice(sites.count, SAMPLE, replace=False))
    best: tuple[float, npt.NDArray[np.int32]] | None = None
    for _ in range(STARTS):
        centres = _settled(points[some], _spread_out(points[some], count, rng))
        apart = cdist(points, centres)
        codes = apart.argmin(axis=1).astype(np.int32)
        held = np.bincount(codes, rows, count)
        if held.min() < SHARE * rows.sum() / count:
            continue
        inertia = float(rows @ apart[np.arange(sites.count), codes] ** 2)
        if best is None or inertia < best[0]:
            best = inertia, codes
    if best is None:
        return None
    codes = best[1]
    return Regions(codes, count, float(sites.along(np.asarray(_radius(points, codes, count)))))


def _radius(points: Array, codes: npt.NDArray[np.int32], count: int) -> float:
    """A disc of radius r has a root mean square distance of r/√2 from its centre."""
    out = []
    for g in range(count):
        own = points[codes == g]
        out.append(np.sqrt(2 * np.mean(np.sum((own - own.mean(axis=0)) ** 2, axis=1))))
    return float(np.median(out))


def _spread_out(points: Array, count: int, rng: np.random.Generator) -> Array:
    """Starting centres far from one another (k-means++)."""
    centres = points[[int(rng.integers(len(points)))]]
    while len(centres) < count:
        near = cdist(points, centres).min(axis=1) ** 2
        centres = np.vstack([centres, points[int(rng.choice(len(points), p=near / near.sum()))]])
    return centres


def _settled(points: Array, centres: Array) -> Array:
    """Lloyd's rounds: each centre moves to the mean of the sites nearest to it."""
    for _ in range(ROUNDS):
        codes = cdist(points, centres).argmin(axis=1)
        held = np.maximum(np.bincount(codes, minlength=len(centres)), 1)
        moved = np.column_stack([np.bincount(codes, x, len(centres)) / held for x in points.T])
        if np.allclose(moved, centres):
            break
        centres = moved
    return centres
