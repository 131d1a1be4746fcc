"""Neighbours that the user gives: shapes that touch, or a file of pairs."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed
from clingstone.maths.once import Array
from clingstone.needs import InputError
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    import pandas as pd

Edges = tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]


def touching(sites: Sites, shapes: pd.Series[Any] | None, rook: bool) -> Edges:
    """Both directions of every pair of places whose shapes share a point (or, ``rook``, an edge).

    shapes : (n,) of the rows, the first row of each site standing for it.
    """
    if shapes is None or bool((shapes.geom_type == "Point").all()):
        raise InputError(
            "neighbours by touching shapes were asked for, and the places are points",
            "Give a geographic data frame with polygons, or use neighbours='knn:6'.",
        )
    import geopandas as gpd
    from libpysal.graph import Graph

    own = gpd.GeoSeries(shapes.to_numpy()[sites.part.first], index=np.arange(sites.count))
    if sites.kind == "lonlat":
        own = own.transform(_once_round)
    graph: Any = Graph.build_contiguity(own, rook=rook)
    found = graph.sparse.tocoo()
    focal, neighbour = found.row.astype(np.int64), found.col.astype(np.int64)
    apart = focal != neighbour
    if not apart.any():
        raise InputError(
            f"none of the {sites.count:,} shapes shares {'an edge' if rook else 'a point'} with another",
            "Shapes that overlap, or leave slivers between them, share no corner: mend their borders, or use "
            "neighbours='knn:6'.",
        )
    return focal[apart], neighbour[apart]


def _once_round(corners: Array) -> Array:
    """Corners (k, 2) in degrees with one pair of numbers for each point of the globe.

    Shapes touch by the corners they share: those on both sides of the antimeridian, and all at a pole.
    """
    lon, lat = corners.T
    return np.column_stack([np.where(np.abs(lat) >= 90.0, 0.0, lon % 360.0), lat])


def pairs(
    file: Path, sites: Sites, column: Callable[[str], pd.Series[Any]] | None
) -> tuple[Edges, Array | None]:
    """Pairs of places from a file with a header: two columns of ids, and a third of weights or none.

    The first column bears the name of the data's column of place ids. Each pair counts both ways; a
    pair listed in both directions keeps the larger weight.

    Raises
    ------
    InputError : a file that cannot be read, ids that the data do not have, an id at two places, a
        place that is its own neighbour, weights that are not positive numbers.
    """
    table = _table(file)
    name = str(table.columns[0])
    if column is None:
        raise InputError(
            f"the pairs of {file.name} name places by ‘{name}’, and no table was given",
            "Give the data as a table with that column.",
        )
    place = _places(column(name), sites, name)
    ends = [_numbers(table.iloc[:, j], place, file.name, name) for j in (0, 1)]
    own = np.flatnonzero(ends[0] == ends[1])
    if len(own):
        raise InputError(
            f"{file.name} makes a place its own neighbour (row {int(own[0]) + 2}: {table.iloc[own[0], 0]})",
            "Leave such rows out.",
        )
    weight = np.ones(len(table)) if table.shape[1] < 3 else _weights(table.iloc[:, 2], file.name)
    return _both_ways(ends[0], ends[1], weight, sites.count, table.shape[1] > 2)


def _table(file: Path) -> pd.DataFrame:
    import pandas as pd

    try:
        with file.open(encoding="utf-8-sig") as lines:
            head = lines.readline()
        mark = max(",;\t", key=head.count)
        table = pd.read_csv(file, dtype=str, sep=mark, skipinitialspace=True, encoding="utf-8-sig")
    except (OSError, ValueError) as error:
        raise InputError(f"the file of pairs {file} cannot be read: {error}", "Give its path.") from error
    if table.shape[1] < 2 or not len(table):
        raise InputError(
            f"{file.name} holds {count(len(table), 'row')} and {count(table.shape[1], 'column')}",
            "A file of pairs has two columns of ids (and one of weights), with a header.",
        )
    return table


def _text(values: pd.Series[Any]) -> pd.Series[str]:
    """Ids as text; whole numbers without a decimal point, whatever they were read as."""
    return values.astype(str).str.strip().str.replace(r"^(-?\d+)\.0+$", r"\1", regex=True)


def _places(ids: pd.Series[Any], sites: Sites, name: str) -> dict[str, int]:
    text = _text(ids).to_numpy()
    place: dict[str, int] = {}
    for label, site in dict.fromkeys(zip(text.tolist(), sites.part.codes.tolist(), strict=True)):
        if label in place:
            raise InputError(
                f"{name} {label} lies at two places or more", "An id of a file of pairs stands for one place."
            )
        place[label] = site
    return place


def _numbers(column: pd.Series[Any], place: dict[str, int], file: str, name: str) -> npt.NDArray[np.int64]:
    text = _text(column)
    unknown = [v for v in dict.fromkeys(text.tolist()) if v not in place]
    if unknown:
        raise InputError(
            f"{file} names {count(len(unknown), 'id')} that no row of the data has as its {name}: "
            f"{listed(unknown, most=4)}",
            f"Mend the file, or its first heading, which says that ids are those of ‘{name}’.",
        )
    return np.array([place[v] for v in text.tolist()], dtype=np.int64)


def _weights(column: pd.Series[Any], file: str) -> Array:
    import pandas as pd

    weight = pd.to_numeric(column, errors="coerce").to_numpy(dtype=float)
    bad = np.flatnonzero(~(np.isfinite(weight) & (weight > 0)))
    if len(bad):
        raise InputError(
            f"{count(len(bad), 'weight')} of {file} "
            f"{'is no positive number' if len(bad) == 1 else 'are no positive numbers'} "
            f"(row {int(bad[0]) + 2}: {column.iloc[int(bad[0])]})",
            "Weights say how close two places are; leave out pairs that are not neighbours.",
        )
    return weight


def _both_ways(
    a: npt.NDArray[np.int64], b: npt.NDArray[np.int64], weight: Array, S: int, weighted: bool
) -> tuple[Edges, Array | None]:
    focal, neighbour, w = np.r_[a, b], np.r_[b, a], np.r_[weight, weight]
    order = np.lexsort((-w, neighbour, focal))
    code = (focal * S + neighbour)[order]
    first = order[np.r_[True, code[1:] != code[:-1]]]
    return (focal[first], neighbour[first]), (w[first] if weighted else None)
