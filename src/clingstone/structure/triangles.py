"""Neighbours by triangles: Delaunay and Gabriel graphs of the sites, in a plane."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.spatial import Delaunay, QhullError

from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.structure.spatial import EARTH_RADIUS_KM, Sites

LONG = 3.0  # an edge so many times the median of the edges at both its ends is no neighbourhood
WIDEST = 60.0  # degrees from the middle of the map beyond which a plane distorts too much

Edges = tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]


def edges(sites: Sites, gabriel: bool) -> Edges:
    """Both directions of every edge.

    Delaunay: circles through three joined sites hold no other; edges longer than three times the
    median edge at both their ends are dropped, since on the rim far sites are joined across empty
    ground. Gabriel (Gabriel & Sokal 1969): of these, edges whose own circle holds no other site.

    Raises
    ------
    NotSupported : sites on one line, or too wide a part of the globe for a plane.
    """
    flat = plane(sites)
    try:
        triangles = Delaunay(flat).simplices
    except QhullError as error:
        raise NotSupported(
            "the sites lie on one line, so they make no triangles",
            "Use the nearest sites with neighbours='knn:2'.",
        ) from error
    pairs = np.sort(np.vstack([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [0, 2]]]), axis=1)
    once = np.unique(pairs, axis=0).astype(np.int64)
    kept = _empty_circles(flat, once) if gabriel else _short(flat, once)
    return np.r_[kept[:, 0], kept[:, 1]], np.r_[kept[:, 1], kept[:, 0]]


def _short(flat: Array, pairs: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    length = np.linalg.norm(flat[pairs[:, 0]] - flat[pairs[:, 1]], axis=1)
    end, both = pairs.T.ravel(), np.r_[length, length]
    order = np.lexsort((both, end))
    start = np.searchsorted(end[order], np.arange(len(flat) + 1))
    ordered = both[order]
    # The lower median of the edges at each site; every site has at least one.
    middle = ordered[(start[:-1] + start[1:] - 1) // 2]
    keep = length <= LONG * np.maximum(middle[pairs[:, 0]], middle[pairs[:, 1]])
    return np.asarray(pairs[keep])


def _empty_circles(flat: Array, pairs: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    """A circle on an edge is empty when no site is nearer to its centre than its ends are."""
    from scipy.spatial import cKDTree

    centre = 0.5 * (flat[pairs[:, 0]] + flat[pairs[:, 1]])
    half = 0.5 * np.linalg.norm(flat[pairs[:, 0]] - flat[pairs[:, 1]], axis=1)
    nearest = np.asarray(cKDTree(flat).query(centre, k=1)[0])
    return np.asarray(pairs[nearest >= half * (1 - 1e-9)])


def plane(sites: Sites) -> Array:
    """(S, 2) the sites in a plane: as they are, or azimuthal equal-area about their mean direction, in km."""
    if sites.kind == "planar":
        return sites.points
    unit = sites.points / EARTH_RADIUS_KM
    mean = unit.mean(axis=0)
    size = float(np.linalg.norm(mean))
    middle = mean / size if size > 0.1 else unit[0]
    cosine = unit @ middle
    if size <= 0.1 or float(cosine.min()) < np.cos(np.radians(WIDEST)):
        raise NotSupported(
            f"the sites spread more than {WIDEST:g} degrees from their middle, and no plane map holds them",
            "Use the nearest sites with neighbours='knn:6', which works on the globe.",
        )
    east = np.cross([0.0, 0.0, 1.0], middle)
    # At a pole every direction is as good as another.
    east = np.array([1.0, 0.0, 0.0]) if np.linalg.norm(east) < 1e-9 else east / np.linalg.norm(east)
    north = np.cross(middle, east)
    scale = EARTH_RADIUS_KM * np.sqrt(2 / (1 + cosine))
    return np.asarray(np.column_stack([unit @ east, unit @ north]) * scale[:, None])
