"""Neighbour graphs over distinct sites."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from clingstone.display import count, significant
from clingstone.needs import InputError, NotSupported
from clingstone.structure.spatial import EARTH_RADIUS_KM, Sites

NEAREST = 6
Edges = tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]


@dataclass(frozen=True, eq=False)
class Neighbours:
    """A neighbour graph.

    key : e.g. "knn:6"; about : how a sentence names it, e.g. "6 nearest sites".
    W : (S, S) row-standardised weights; rows of islands are zero.
    islands : sites without a neighbour. components : connected parts.
    """

    key: str
    about: str
    W: sparse.csr_array
    islands: int = 0
    components: int = 1


def build(sites: Sites, spec: str | None = None) -> tuple[Neighbours, ...]:
    """Neighbour graphs over sites, the primary one first; none where there are fewer than 3 sites.

    Parameters
    ----------
    spec : "knn" or "knn:8", "band" or "band:12.5" (in the sites' unit; kilometres along the great
        circle for longitude and latitude). Default: 6 nearest sites (at most a quarter of the
        others, at least 1), then a distance band chosen from the data. A named graph comes first
        and the default of the other kind second.

    Notes
    -----
    The band from the data is the 90th percentile of the distance to the fourth nearest site; a
    site left without a neighbour is joined to its nearest. (The largest nearest-neighbour distance
    would be set by one outlying site.) Distances on the globe are taken through its chord, so the
    antimeridian and the poles need no care. Equal distances are settled by the order of
    coordinates, which does not depend on the order of rows.

    Raises
    ------
    InputError : a specification that cannot be read. NotSupported : a band that joins so many
        pairs that the graph is no longer sparse (more than 50 S + 10⁶).
    """
    kind, size = _read(spec)
    if sites.count < 3:
        return ()
    nearest = _knn(sites, int(size) if kind == "knn" and size else _default_k(sites.count))
    if kind == "band" and size is not None:
        return (_band(sites, size), nearest)
    chosen = _chosen_band(sites)
    if kind == "band":
        return (chosen, nearest) if chosen is not None else (nearest,)
    return (nearest, chosen) if chosen is not None else (nearest,)


def _read(spec: str | None) -> tuple[str, float | None]:
    kind, _, size = (spec or "knn").partition(":")
    try:
        value = float(size) if size else None
    except ValueError:
        value = -1.0
    if kind not in ("knn", "band") or (value is not None and not 0 < value < np.inf):
        raise InputError(
            f"neighbours={spec!r} is no neighbourhood",
            "Write neighbours='knn:6' for the 6 nearest sites, or 'band:12.5' for all within 12.5.",
        )
    if kind == "knn" and value is not None and value != int(value):
        raise InputError(f"neighbours={spec!r} asks for {value:g} sites", "Give a whole number of sites.")
    return kind, value


def _default_k(count: int) -> int:
    return max(1, min(NEAREST, (count - 1) // 4))


def _knn(sites: Sites, k: int) -> Neighbours:
    if k > sites.count - 1:
        raise InputError(
            f"{k} nearest sites were asked for, and each of the {sites.count} sites has "
            f"{sites.count - 1} others",
            f"Use neighbours='knn:{_default_k(sites.count)}' or fewer.",
        )
    about = "nearest site" if k == 1 else f"{k} nearest sites"
    return _graph(f"knn:{k}", about, _nearest(sites, k), sites.count)


def _nearest(sites: Sites, k: int) -> Edges:
    """(focal, neighbour) of the k nearest, ties settled by site number."""
    reach = min(sites.count, 2 * k + 4)
    distance, found = (np.asarray(a) for a in sites.tree.query(sites.points, k=reach))
    own = found == np.arange(sites.count)[:, None]
    # Distances that agree to rounding count as equal, so that a rotated map keeps its ties.
    grain = 1e-9 * max(float(distance.max()), 1e-300)
    rank = np.where(own, np.inf, np.round(distance / grain))
    order = np.lexsort((found, rank), axis=1)[:, :k]
    focal = np.repeat(np.arange(sites.count, dtype=np.int64), k)
    return focal, np.take_along_axis(found, order, axis=1).ravel().astype(np.int64)


def _straight(sites: Sites, along: float) -> float:
    """The straight distance (the chord on the globe) of a distance along the surface."""
    if sites.kind == "planar":
        return along
    return 2 * EARTH_RADIUS_KM * float(np.sin(min(along / (2 * EARTH_RADIUS_KM), np.pi / 2)))


def _pairs(sites: Sites, straight: float) -> Edges:
    """Both directions of every pair of sites within a straight distance."""
    # A touch more than d, so that a pair at exactly d is in whatever the rounding.
    reach = straight * (1 + 1e-12)
    links = int(sites.tree.count_neighbors(sites.tree, reach)) - sites.count
    if links > 50 * sites.count + 1_000_000:
        raise NotSupported(
            f"the distance band joins {links:,} pairs of {sites.count:,} sites, too many for a sparse graph",
            "Use a shorter band, or the nearest sites with neighbours='knn:6'.",
        )
    pairs = sites.tree.query_pairs(reach, output_type="ndarray").astype(np.int64)
    return np.r_[pairs[:, 0], pairs[:, 1]], np.r_[pairs[:, 1], pairs[:, 0]]


def _band(sites: Sites, along: float) -> Neighbours:
    edges = _pairs(sites, _straight(sites, along))
    if not len(edges[0]):
        raise InputError(
            f"no two sites lie within {along:g} {sites.unit}".rstrip(),
            "Use a longer band; the default is chosen from the data.",
        )
    return _graph(f"band:{along:.6g}", _within(along, sites.unit), edges, sites.count)


def _within(along: float, unit: str) -> str:
    return f"sites within {significant(along, 3)}{' ' + unit if unit else ''}"


def _chosen_band(sites: Sites) -> Neighbours | None:
    """The band chosen from the data; None where it would join nearly all sites, or too many."""
    k = min(4, sites.count - 1)
    fourth = np.asarray(sites.tree.query(sites.points, k=k + 1)[0])[:, -1]
    straight = float(np.quantile(fourth, 0.9))
    try:
        focal, neighbour = _pairs(sites, straight)
    except NotSupported:
        return None
    alone = np.setdiff1d(np.arange(sites.count), focal)
    if len(alone):
        one, other = _nearest(sites, 1)
        joined = other[np.isin(one, alone)]
        focal, neighbour = np.r_[focal, alone, joined], np.r_[neighbour, joined, alone]
        edges = np.unique(np.stack([focal, neighbour], axis=1), axis=0)
        focal, neighbour = edges[:, 0], edges[:, 1]
    along = float(sites.along(np.asarray(straight)))
    about = _within(along, sites.unit)
    if len(alone):
        about += f" ({count(len(alone), 'lone site')} joined to the nearest)"
    return _graph(f"band:{along:.6g}", about, (focal, neighbour), sites.count)


def _graph(key: str, about: str, edges: Edges, size: int) -> Neighbours:
    """Row-standardised weights through libpysal, with its islands and our count of connected parts."""
    from libpysal.graph import Graph

    links = sparse.csr_array((np.ones(len(edges[0])), edges), shape=(size, size))
    graph: Any = Graph.from_sparse(links).transform("r")
    W = sparse.csr_array(graph.sparse)
    parts = int(sparse.csgraph.connected_components(links, directed=True, connection="weak")[0])
    return Neighbours(key, about, W, len(graph.isolates), parts)
