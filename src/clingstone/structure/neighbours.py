"""Neighbour graphs over distinct sites."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from clingstone.display import count, significant
from clingstone.maths.once import Array
from clingstone.needs import InputError, NotSupported
from clingstone.structure import given, triangles
from clingstone.structure.spatial import EARTH_RADIUS_KM, Sites

if TYPE_CHECKING:
    import pandas as pd

NEAREST = 6
KINDS = ("knn", "band", "delaunay", "gabriel", "inverse", "contiguity", "rook", "pairs")
Edges = tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]


@dataclass(frozen=True, eq=False)
class Neighbours:
    """A neighbour graph.

    key : e.g. "knn:6"; about : how a sentence names it, e.g. "6 nearest sites".
    W : (S, S) row-standardised weights; rows of islands are zero.
    islands : sites without a neighbour. components : connected parts.
    links : (S, S) the weights before they were divided by their row sums; None where all are equal.
    """

    key: str
    about: str
    W: sparse.csr_array
    islands: int = 0
    components: int = 1
    links: sparse.csr_array | None = None

    @property
    def table(self) -> sparse.csr_array:
        """Weights before standardisation; ones where all are equal."""
        if self.links is not None:
            return self.links
        return sparse.csr_array((np.ones(self.W.nnz), self.W.indices, self.W.indptr), self.W.shape)


def build(
    sites: Sites,
    spec: str | None = None,
    shapes: pd.Series[Any] | None = None,
    column: Callable[[str], pd.Series[Any]] | None = None,
) -> tuple[Neighbours, ...]:
    """Neighbour graphs over sites, the primary one first; none where there are fewer than 3 sites.

    Parameters
    ----------
    spec : "knn" or "knn:8", "band" or "band:12.5" (in the sites' unit; kilometres along the great
        circle for longitude and latitude), "delaunay", "gabriel", "inverse" or "inverse:2" (a power of
        distance, over the band chosen from the data), "contiguity" or "rook" (shapes that share a
        point, or an edge), "pairs:FILE" (see ``structure.given``). Default: 6 nearest sites (at most a
        quarter of the others, at least 1), then a distance band chosen from the data. A named graph
        comes first and the default of another kind second.
    shapes : (n,) shapes of the rows, for contiguity. column : a column of the user's table, rows as
        those of the sites, for a file of pairs.

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
    if kind == "knn":
        chosen = _chosen_band(sites)
        return (nearest, chosen) if chosen is not None else (nearest,)
    named = _named(sites, kind, size, spec or "", shapes, column)
    return (named, nearest) if named is not None else (nearest,)


def _named(
    sites: Sites,
    kind: str,
    size: float | None,
    spec: str,
    shapes: pd.Series[Any] | None,
    column: Callable[[str], pd.Series[Any]] | None,
) -> Neighbours | None:
    if kind == "band":
        return _chosen_band(sites) if size is None else _band(sites, size)
    if kind in ("delaunay", "gabriel"):
        edges = triangles.edges(sites, kind == "gabriel")
        return _graph(kind, f"neighbours in a {kind.capitalize()} graph", edges, sites.count)
    if kind == "inverse":
        return _inverse(sites, 1.0 if size is None else size)
    if kind == "pairs":
        name = spec.partition(":")[2]
        edges, weight = given.pairs(Path(name), sites, column)
        about = f"the pairs of {Path(name).name}"
        return _graph(f"pairs:{Path(name).name}", about, edges, sites.count, weight)
    edges = given.touching(sites, shapes, kind == "rook")
    about = "places that share an edge" if kind == "rook" else "places that touch"
    return _graph(kind, about, edges, sites.count)


def _read(spec: str | None) -> tuple[str, float | None]:
    kind, _, size = (spec or "knn").partition(":")
    if kind == "pairs" and size:
        return kind, None
    try:
        value = float(size) if size else None
    except ValueError:
        value = -1.0
    bare = kind in ("delaunay", "gabriel", "contiguity", "rook") and value is not None
    if kind not in KINDS or kind == "pairs" or bare or (value is not None and not 0 < value < np.inf):
        raise InputError(
            f"neighbours={spec!r} is no neighbourhood",
            "Write neighbours='knn:6' for the 6 nearest sites, 'band:12.5' for all within 12.5, 'delaunay', "
            "'gabriel', 'inverse:1', 'contiguity' or 'rook' (with shapes), or 'pairs:FILE'.",
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
            f"no two sites lie within {along:g} {sites.unit}",
            "Use a longer band; the default is chosen from the data.",
        )
    return _graph(f"band:{along:.6g}", _within(along, sites.unit), edges, sites.count)


def _within(along: float, unit: str) -> str:
    return f"sites within {significant(along, 3)} {unit}"


def _chosen_band(sites: Sites) -> Neighbours | None:
    """The band chosen from the data; None where it would join nearly all sites, or too many."""
    found = _chosen_edges(sites)
    if found is None:
        return None
    edges, straight, alone = found
    along = float(sites.along(np.asarray(straight)))
    about = _within(along, sites.unit)
    if alone:
        about += f" ({count(alone, 'lone site')} joined to the nearest)"
    return _graph(f"band:{along:.6g}", about, edges, sites.count)


def _chosen_edges(sites: Sites) -> tuple[Edges, float, int] | None:
    """Edges of the band chosen from the data, its straight length, and the lone sites joined to it."""
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
    return (focal, neighbour), straight, len(alone)


def _inverse(sites: Sites, power: float) -> Neighbours | None:
    """(d + d₀)^−α over the band chosen from the data, d along the surface.

    d₀, a tenth of the median distance to the nearest site, keeps two sites that almost coincide from
    holding most of the weight.
    """
    found = _chosen_edges(sites)
    if found is None:
        return None
    edges, _, _ = found
    near = np.asarray(sites.tree.query(sites.points, k=2)[0])[:, 1]
    floor = 0.1 * float(np.median(sites.along(near)))
    apart = np.linalg.norm(sites.points[edges[0]] - sites.points[edges[1]], axis=1)
    weight = (sites.along(apart) / floor + 1.0) ** -power
    which = "inverse distance" if power == 1 else f"inverse distance to the power {power:g}"
    return _graph(f"inverse:{power:g}", f"near sites by {which}", edges, sites.count, weight)


def _graph(key: str, about: str, edges: Edges, size: int, weight: Array | None = None) -> Neighbours:
    """Row-standardised weights, with their islands and connected parts."""
    links = sparse.csr_array(
        (np.ones(len(edges[0])) if weight is None else weight, edges), shape=(size, size)
    )
    total: Array = np.asarray(links.sum(axis=1)).ravel()
    W = links.copy()
    W.data /= np.repeat(total, np.diff(W.indptr))
    parts = int(sparse.csgraph.connected_components(links, directed=True, connection="weak")[0])
    raw = None if weight is None else links
    return Neighbours(key, about, W, int(np.sum(total == 0)), parts, raw)
