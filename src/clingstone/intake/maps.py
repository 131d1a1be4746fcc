"""Geographic files: GeoPackage, GeoJSON, shapefile, Parquet with shapes."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from clingstone.intake.opened import Source, chosen, missing_reader, unreadable

if TYPE_CHECKING:
    import pandas as pd


def opened(path: Path, layer: str | None, origin: dict[str, str]) -> Source:
    """Shapes at once, as the places of the rows; other columns when asked for."""
    try:
        import geopandas
        import pyogrio
    except ImportError as error:
        raise missing_reader(path, "geopandas", "geo") from error
    try:
        layers = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
        name, notes = chosen(layer, layers, path, "layer")
        names = tuple(str(f) for f in pyogrio.read_info(path, layer=name)["fields"])
        shapes = geopandas.read_file(path, layer=name, columns=[])
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError) as error:
        raise unreadable(path, origin["format"], error) from error
    if origin["format"] == "GeoPackage":
        origin = origin | {"layer": name}

    def read(columns: Collection[str]) -> tuple[pd.DataFrame, list[str]]:
        wanted = [n for n in names if n in columns]
        return geopandas.read_file(path, layer=name, columns=wanted, ignore_geometry=True), []

    geometry = shapes if isinstance(shapes, geopandas.GeoDataFrame) else None
    return Source(names, len(shapes), read, _with_system(origin, geometry), tuple(notes), geometry)


def of_parquet(path: Path, found: Source, primary: str) -> Source:
    """The same source with the shapes of its column ``primary``."""
    try:
        import geopandas
    except ImportError as error:
        raise missing_reader(path, "geopandas", "geo") from error
    try:
        shapes = geopandas.read_parquet(path, columns=[primary])
    except (ValueError, TypeError, OSError) as error:
        raise unreadable(path, "Parquet", error) from error
    names = tuple(n for n in found.names if n != primary)
    return replace(found, names=names, origin=_with_system(dict(found.origin), shapes), geometry=shapes)


def _with_system(origin: dict[str, str], shapes: pd.DataFrame | None) -> dict[str, str]:
    """The coordinate reference system, by its short name where it has one."""
    crs = getattr(shapes, "crs", None)
    return origin if crs is None else origin | {"coordinates": str(crs.to_string())[:80]}
