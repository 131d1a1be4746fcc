"""Places: distinct sites, their distances and extent."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.spatial import cKDTree

from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition

EARTH_RADIUS_KM = 6371.0088  # mean radius, IUGG


@dataclass(frozen=True, eq=False)
class Sites:
    """Distinct places of the rows.

    part : rows → site (key "site").
    xy : (S, 2) coordinates as given: planar, or longitude and latitude in degrees.
    kind : "planar" or "lonlat".
    unit : "km" for lonlat; otherwise the unit of the coordinates ("" when not known).
    """

    part: Partition
    xy: Array
    kind: Literal["planar", "lonlat"]
    unit: str = ""
    names: tuple[str, str] = ("x", "y")
    notes: tuple[str, ...] = ()

    @property
    def count(self) -> int:
        return self.part.count

    @property
    @once
    def points(self) -> Array:
        """(S, 2) planar, or (S, 3) geocentric in km: Euclid between them is the plane or the chord.

        Any covariance valid in three dimensions is valid in the chord (Gneiting 2013), so kernels
        use it; what is printed is the great circle.
        """
        if self.kind == "planar":
            return self.xy
        lon, lat = np.radians(self.xy).T
        unit = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=1)
        return np.asarray(EARTH_RADIUS_KM * unit)

    @property
    @once
    def tree(self) -> cKDTree:
        return cKDTree(self.points)

    def along(self, straight: Array) -> Array:
        """Great-circle distance in km of a chord in km; the same number in the plane."""
        if self.kind == "planar":
            return straight
        half = np.clip(straight / (2 * EARTH_RADIUS_KM), 0.0, 1.0)
        return np.asarray(2 * EARTH_RADIUS_KM * np.arcsin(half))

    @property
    @once
    def extent(self) -> float:
        """Largest straight distance between two sites (diagonal of the box when S > 3000)."""
        if self.count > 3000:
            return float(np.linalg.norm(np.ptp(self.points, axis=0)))
        from scipy.spatial.distance import pdist

        return float(pdist(self.points).max()) if self.count > 1 else 0.0
