"""Places: distinct sites, their distances and extent."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
from scipy.spatial import cKDTree

from clingstone.display import count, rows, significant
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition
from clingstone.needs import InputError, memory

EARTH_RADIUS_KM = 6371.0088  # mean radius, IUGG
MAP_UNITS = "map units"  # of coordinates whose unit nobody said


@dataclass(frozen=True, eq=False)
class Sites:
    """Distinct places of the rows.

    part : rows → site (key "site").
    xy : (S, 2) coordinates as given: planar, or longitude and latitude in degrees.
    kind : "planar" or "lonlat".
    unit : "km" for lonlat; otherwise the unit of the coordinates, "map units" when not known.
    """

    part: Partition
    xy: Array
    kind: Literal["planar", "lonlat"]
    unit: str = MAP_UNITS
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
    def distances(self) -> Array:
        """(S, S) straight distances, for places few enough to be factored. Raises NotSupported."""
        from scipy.spatial.distance import pdist, squareform

        memory(5 * 8.0 * self.count**2, f"a covariance of {self.count:,} places")
        return frozen(squareform(pdist(self.points)))

    @property
    @once
    def extent(self) -> float:
        """Largest straight distance between two sites (diagonal of the box when S > 3000)."""
        if self.count > 3000:
            return float(np.linalg.norm(np.ptp(self.points, axis=0)))
        from scipy.spatial.distance import pdist

        return float(pdist(self.points).max()) if self.count > 1 else 0.0

    def take(self, rows: npt.NDArray[Any]) -> Sites:
        """The same places in another order of rows. Every site must keep a row."""
        codes = self.part.codes[rows]
        if len(np.unique(codes)) != self.count:
            raise ValueError("some sites would lose all their rows; build the sites of these rows instead")
        return replace(self, part=Partition(self.part.key, frozen(codes), self.part.labels))


_LON = re.compile(r"(?:.*[^a-z])?(lon|long|lng|longitude)(?:[^a-z].*)?", re.IGNORECASE)
_LAT = re.compile(r"(?:.*[^a-z])?(lat|latitude)(?:[^a-z].*)?", re.IGNORECASE)
_PLANE = re.compile(
    r"(?:.*[^a-z])?(easting|northing|utm|utmx|utmy|row|col|column|plot|km|m|metres?|meters?|feet|ft)(?:[^a-z].*)?",
    re.IGNORECASE,
)
_METRES = re.compile(r"(?:.*[^a-z])?(easting|utm|utmx|m|metres?|meters?)(?:[^a-z].*)?", re.IGNORECASE)
FAR_OUT = 10_000.0  # of a coordinate beside ones that could be degrees: no map in one unit
_UNITS = {
    "km": "km",
    "m": "m",
    "metre": "m",
    "metres": "m",
    "meter": "m",
    "meters": "m",
    "ft": "ft",
    "feet": "ft",
}


def build(
    x: Array,
    y: Array,
    names: tuple[str, str] = ("x", "y"),
    lonlat: bool | None = None,
    unit: str = "",
    places: npt.NDArray[np.int64] | None = None,
) -> Sites:
    """Distinct places from two finite coordinates per row.

    Parameters
    ----------
    x, y : (n,) planar coordinates, or longitude and latitude in degrees.
    lonlat : True or False where known (a coordinate reference system says so). None decides from
        names and values, and stops where both readings are possible.
    unit : of planar coordinates, where known.

    Notes
    -----
    Rows share a site when their coordinates agree after rounding to 1e-9 of the diagonal of the
    box (planar) or 1e-7 degree. Sites are sorted by coordinate, so shuffling the rows changes
    nothing. Longitudes are taken round the circle: 350 and −10 are one.

    Raises
    ------
    InputError : out of range, swapped, or ambiguous.
    """
    x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    places = np.arange(len(x)) if places is None else places
    kind, notes = _decide(x, y, names, lonlat, places)
    if kind == "lonlat":
        x = np.where(np.abs(y) >= 90.0 - 1e-7, 0.0, (x + 180.0) % 360.0 - 180.0)
        null = int(np.sum((x == 0) & (y == 0)))
        if null:
            notes.append(
                f"{count(null, 'row')} {'lies' if null == 1 else 'lie'} exactly at 0, 0, in the "
                "ocean off Africa: "
                "often a sign of missing coordinates."
            )
        if np.abs(y).max() > 85:
            notes.append(
                "Some sites lie within 5 degrees of a pole; distances are right there, maps are stretched."
            )
    part, xy = _collapse(x, y, kind)
    if part.count == 1:
        notes.append("All rows share one place, so nothing can be said of likeness between places.")
    elif part.count < part.n:
        notes.append(f"{part.n:,} rows lie at {count(part.count, 'site')}; rows at one place are one site.")
    else:
        notes.append(
            "Every row has a place of its own, so noise of a place and noise of a row cannot be told apart."
        )
    sites = Sites(part, frozen(xy), kind, "km" if kind == "lonlat" else unit or _unit(names), names)
    if part.count > 1:
        notes.append(span(sites))
    return replace(sites, notes=tuple(notes))


def span(sites: Sites) -> str:
    """The extent in a sentence, with its unit."""
    across = float(sites.along(np.asarray(sites.extent)))
    how = "along the great circle" if sites.kind == "lonlat" else "in the plane"
    return f"The sites span {significant(across, 3)} {sites.unit} {how}."


def _decide(
    x: Array, y: Array, names: tuple[str, str], lonlat: bool | None, places: npt.NDArray[np.int64]
) -> tuple[Literal["planar", "lonlat"], list[str]]:
    """Plane or globe, with the evidence as a note."""
    nx, ny = names
    if _LAT.fullmatch(nx) and _LON.fullmatch(ny) and lonlat is not False:
        raise InputError(
            f"coords=({nx!r}, {ny!r}) names the latitude first, and the order is longitude, latitude",
            f"Give coords=({ny!r}, {nx!r}).",
        )
    named = bool(_LON.fullmatch(nx) and _LAT.fullmatch(ny))
    fits = bool(np.all(np.abs(y) <= 90) and np.all(x >= -180) and np.all(x <= 360))
    if lonlat or (lonlat is None and named):
        if not fits:
            raise _out_of_range(x, y, names, places)
        why = "as declared" if lonlat else "by their names and range"
        return "lonlat", [f"{nx} and {ny} are longitude and latitude in degrees, {why}."]
    if lonlat is False:
        warn = [f"{nx} and {ny} look like degrees, but are used as a plane, as declared."] if named else []
        return "planar", warn
    if _PLANE.fullmatch(nx) or _PLANE.fullmatch(ny):
        said = f"{nx} and {ny} are coordinates in a plane, by their names."
        if fits and _METRES.fullmatch(nx) and np.any(x % 1 != 0):
            said += " All of them could be degrees: if they are longitude and latitude, say lonlat=True."
        return "planar", [said]
    if not fits:
        _mixed(x, y, names, places)
        return "planar", [f"{nx} and {ny} are coordinates in a plane: as degrees they would be out of range."]
    raise _ambiguous(x, y, names)


def _out_of_range(x: Array, y: Array, names: tuple[str, str], places: npt.NDArray[np.int64]) -> InputError:
    nx, ny = names
    if np.all(np.abs(x) <= 90) and np.any(np.abs(y) > 90) and np.all(np.abs(y) <= 360):
        return InputError(
            f"{ny} goes up to {np.abs(y).max():g} in {rows(places[np.abs(y) > 90], 3)}, and no "
            "latitude exceeds 90; "
            f"{nx} stays within 90, so the two look swapped",
            f"If {ny} holds the longitude, rename the two columns.",
        )
    bad = np.flatnonzero((np.abs(y) > 90) | (x < -180) | (x > 360))
    i = int(bad[0])
    return InputError(
        f"{nx} = {x[i]:g}, {ny} = {y[i]:g} in row {int(places[i]) + 1} is no longitude and latitude "
        f"({count(len(bad), 'row')} out of range)",
        "Mend these rows, or use lonlat=False if these are coordinates in a plane.",
    )


def _mixed(x: Array, y: Array, names: tuple[str, str], places: npt.NDArray[np.int64]) -> None:
    """Raises InputError where some rows could be degrees and the others lie too far out for one map."""
    degrees = (np.abs(x) <= 360) & (np.abs(y) <= 90)
    far = (np.abs(x) >= FAR_OUT) & (np.abs(y) >= FAR_OUT)
    if degrees.any() and far.any() and bool(np.all(degrees | far)):
        fewer = degrees if degrees.sum() < far.sum() else far
        i = int(np.flatnonzero(fewer)[0])
        nx, ny = names
        raise InputError(
            f"{nx} and {ny} mix two kinds of coordinates: {count(int(degrees.sum()), 'row')} could be "
            f"degrees, {count(int(far.sum()), 'row')} could not ({nx} = {x[i]:g}, {ny} = {y[i]:g} in row "
            f"{int(places[i]) + 1})",
            "Bring all rows to one reference system, or use lonlat=False if this is one plane.",
        )


def _ambiguous(x: Array, y: Array, names: tuple[str, str]) -> InputError:
    part, xy = _collapse(x, y, "planar")
    plane = span(Sites(part, xy, "planar", MAP_UNITS, names))
    globe = span(Sites(part, xy, "lonlat", "km", names))
    return InputError(
        f"{names[0]} and {names[1]} may be coordinates in a plane or longitude and latitude. "
        f"As a plane: {plane[0].lower()}{plane[1:]} As degrees: {globe[0].lower()}{globe[1:]}",
        "Say which with lonlat=False or lonlat=True.",
    )


def _collapse(x: Array, y: Array, kind: str) -> tuple[Partition, Array]:
    """Rows → sites sorted by coordinate, and the (S, 2) coordinates of each."""
    xy = np.stack([x, y], axis=1)
    low = xy.min(axis=0)
    grain = 1e-7 if kind == "lonlat" else 1e-9 * float(np.linalg.norm(np.ptp(xy, axis=0)))
    cell = np.round((xy - low) / grain) if grain > 0 else np.zeros_like(xy)
    distinct, codes = np.unique(cell, axis=0, return_inverse=True)
    place = np.full((len(distinct), 2), np.inf)
    np.minimum.at(place, codes.ravel(), xy)
    labels = tuple(f"{a:.10g}, {b:.10g}" for a, b in place)
    return Partition("site", frozen(codes.ravel().astype(np.int32)), labels), place


def _unit(names: tuple[str, str]) -> str:
    """A unit that both column names end with ("x_km", "y_km"), else map units."""
    ends = {re.split(r"[^A-Za-z]", name)[-1].casefold() for name in names}
    return _UNITS.get(ends.pop(), MAP_UNITS) if len(ends) == 1 else MAP_UNITS
