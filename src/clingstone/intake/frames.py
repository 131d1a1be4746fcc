"""Any data frame as named columns: pandas, polars, Arrow, whatever narwhals takes, geographic frames."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, instead, rows, significant
from clingstone.intake.delimited import unique_names
from clingstone.intake.opened import Source
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

PLACE_X, PLACE_Y = "geometry x", "geometry y"


@dataclass(frozen=True, eq=False)
class Table:
    """Columns by name, fetched when asked for.

    index : row labels, where the frame has some that can identify rows. lonlat, unit : what the
    coordinate reference system of a geographic frame says of ``place``. picked : positions of the
    rows in the user's table, where only some are held. shapes : of a geographic frame. codes : column
    → value label → the number that it stands for. hold : names → the same table after those columns
    were read from their file in one go; None where all are in memory.
    """

    names: tuple[str, ...]
    rows: int
    fetch: Callable[[str], pd.Series] = field(repr=False)
    index: pd.Index | None = None
    place: tuple[str, str] | None = None
    lonlat: bool | None = None
    unit: str = ""
    notes: tuple[str, ...] = ()
    picked: npt.NDArray[np.int64] | None = None
    shapes: pd.Series[Any] | None = field(default=None, repr=False)
    codes: Mapping[str, Mapping[str, float]] = field(default_factory=dict, repr=False)
    hold: Callable[[Collection[str]], Table] | None = field(default=None, repr=False)

    def holding(self, names: Collection[str]) -> Table:
        """The same table with these columns read; what the reading tells stands in its notes."""
        return self if self.hold is None else self.hold(names)

    def __contains__(self, name: str) -> bool:
        return name in self.names

    @property
    def places(self) -> npt.NDArray[np.int64]:
        """(rows,) positions in the user's table."""
        return np.arange(self.rows) if self.picked is None else self.picked

    def take(self, places: npt.NDArray[np.int64]) -> Table:
        """The same columns on some rows, counted anew from 0."""
        fetch, hold = self.fetch, self.hold
        return replace(
            self,
            rows=len(places),
            fetch=lambda name: fetch(name).iloc[places].reset_index(drop=True),
            index=None if self.index is None else self.index[places],
            picked=self.places[places],
            shapes=None if self.shapes is None else self.shapes.iloc[places].reset_index(drop=True),
            hold=None if hold is None else lambda names: hold(names).take(places),
        )

    def column(self, name: str, used: str) -> pd.Series:
        """One column, rows counted from 0. ``used`` says for what, if it is not there."""
        if name not in self.names:
            raise InputError(
                f"there is no column ‘{name}’ ({used})",
                instead(name, [n for n in self.names if n not in (PLACE_X, PLACE_Y)]),
            )
        return self.fetch(name)


def table(data: Any) -> Table:
    """The columns of a data frame of any kind, or of a mapping of name → values.

    Named index levels of a pandas frame become columns. Raises InputError for what is no table,
    has no rows, or repeats a column name.
    """
    import pandas as pd

    if isinstance(data, Mapping):
        try:
            data = pd.DataFrame(dict(data))
        except ValueError as error:
            raise InputError(
                f"these columns make no table: {error}", "Give columns of equal length."
            ) from error
    found = _pandas(data) if isinstance(data, pd.DataFrame) else _narwhals(data)
    unique_names(list(found.names))
    if not found.rows:
        raise InputError("the table has no rows", "Give a table with at least one row.")
    return found


def of_source(source: Source) -> Table:
    """The columns of a file that was opened; those that nobody asks for are never read."""
    base = None if source.geometry is None else _pandas(source.geometry)
    own = () if base is None else tuple(n for n in base.names if n not in source.names)

    def held(names: Collection[str]) -> Table:
        frame, told = source.read([n for n in source.names if n in names])

        def fetch(name: str) -> pd.Series:
            if name in frame.columns:
                return frame[name]
            if base is not None and name in own:
                return base.fetch(name)
            return source.read([name])[0][name]  # asked for by another file, such as one of pairs

        return replace(opened, fetch=fetch, notes=(*opened.notes, *told))

    opened = Table(
        names=(*source.names, *own),
        rows=source.rows,
        fetch=lambda name: held([name]).fetch(name),
        notes=source.notes,
        codes=source.codes,
        hold=held,
    )
    if base is not None:
        opened = replace(
            opened,
            place=base.place,
            lonlat=base.lonlat,
            unit=base.unit,
            shapes=base.shapes,
            notes=(*source.notes, *base.notes),
        )
    return opened


def _pandas(frame: pd.DataFrame) -> Table:
    import pandas as pd

    if frame.columns.nlevels > 1:
        raise InputError(
            f"the column names have {frame.columns.nlevels} levels",
            "Join them into one name per column first.",
        )
    index = frame.index
    levels = {
        str(n): index.get_level_values(i)
        for i, n in enumerate(index.names)
        if n is not None and n not in frame.columns
    }
    columns = {str(c): i for i, c in enumerate(frame.columns)}
    names = [*levels, *(str(c) for c in frame.columns)]
    place = _geometry(frame)

    def fetch(name: str) -> pd.Series:
        if name in place.columns:
            return place.columns[name].reset_index(drop=True)
        if name in levels:
            return pd.Series(levels[name], name=name).reset_index(drop=True)
        return frame.iloc[:, columns[name]].reset_index(drop=True).rename(name)

    return Table(
        (*names, *place.columns),
        len(frame),
        fetch,
        index,
        place.names,
        place.lonlat,
        place.unit,
        place.notes,
        shapes=place.shapes,
    )


def _narwhals(data: Any) -> Table:
    import narwhals as nw

    try:
        frame = nw.from_native(data)
    except TypeError as error:
        raise InputError(
            f"{type(data).__name__} is no table that is known here",
            "Give a data frame (pandas, polars, Arrow …), a path to a file, or a fitted ordinary regression.",
        ) from error
    eager = frame.collect() if isinstance(frame, nw.LazyFrame) else frame
    return Table(tuple(eager.columns), len(eager), lambda name: _series(eager[name]))


def _series(column: Any) -> pd.Series:
    """A pandas column; by way of Python values where pyarrow is not installed."""
    import pandas as pd

    try:
        found: pd.Series = column.to_pandas()
    except ImportError:
        found = pd.Series(column.to_list(), name=column.name)
    return found.reset_index(drop=True)


@dataclass(frozen=True, eq=False)
class _Place:
    columns: Mapping[str, pd.Series] = field(default_factory=dict)
    names: tuple[str, str] | None = None
    lonlat: bool | None = None
    unit: str = ""
    notes: tuple[str, ...] = ()
    shapes: pd.Series[Any] | None = None


def _geometry(frame: pd.DataFrame) -> _Place:
    """Points, or a point inside each shape, of a geographic frame."""
    import pandas as pd

    name = getattr(frame, "_geometry_column_name", None)
    if name is None or name not in frame.columns or not hasattr(frame, "crs"):
        return _Place()
    shapes: Any = frame[name]
    notes = []
    crs: Any = shapes.crs
    plane = crs is not None and not (crs.is_geographic or crs.is_projected)
    if plane:  # a GeoPackage without a reference system says "Undefined Cartesian SRS"
        crs, shapes = None, shapes.set_crs(None, allow_override=True)
        notes.append(
            "The reference system of the shapes is undefined: their coordinates are used as a plane."
        )
    if crs is not None and crs.to_epsg() == 3857:
        shapes, crs = shapes.to_crs(4326), shapes.to_crs(4326).crs
        notes.append("Web Mercator stretches distances, so the places are turned to longitude and latitude.")
    there = shapes.notna() & ~shapes.is_empty
    invalid = ~shapes[there].is_valid
    if invalid.any():
        raise InputError(
            f"{rows(invalid.to_numpy().nonzero()[0])} of ‘{name}’ hold shapes that cross themselves",
            "Mend them, for instance with make_valid().",
        )
    points = shapes
    if not (shapes[there].geom_type == "Point").all():
        points = shapes.representative_point()
        notes.append(_areas(shapes[there]))
    blank = pd.Series(float("nan"), index=range(len(frame)))
    x, y = blank.copy(), blank.copy()
    x[there.to_numpy()], y[there.to_numpy()] = points[there].x.to_numpy(), points[there].y.to_numpy()
    lonlat = (False if plane else None) if crs is None else bool(crs.is_geographic)
    unit = "" if crs is None or lonlat else _axis_unit(crs)
    whole = shapes.reset_index(drop=True)
    return _Place({PLACE_X: x, PLACE_Y: y}, (PLACE_X, PLACE_Y), lonlat, unit, tuple(notes), whole)


def _areas(shapes: Any) -> str:
    """How many shapes and how large, by an equal-area map where the reference system is known."""
    flat = shapes if shapes.crs is None else shapes.to_crs("EPSG:6933")
    with np.errstate(invalid="ignore"):
        area, unit = np.sort(flat.area.to_numpy()), " square units"
    if not np.isfinite(area).all():  # places off the map, which are told where they are read
        return "Shapes are stood for by a point inside each of them."
    if shapes.crs is not None:
        area, unit = (area / 1e6, " km²") if area[-1] >= 1e5 else (area, " m²")
    size = significant(float(np.median(area)), 3) + unit
    return (
        f"{count(len(shapes), 'shape')} of a median area of {size} (from {significant(float(area[0]), 3)} to "
        f"{significant(float(area[-1]), 3)}) are stood for by a point inside each of them."
    )


def _axis_unit(crs: Any) -> str:
    named: Sequence[str] = [axis.unit_name for axis in crs.axis_info]
    return {"metre": "m", "kilometre": "km", "foot": "ft", "US survey foot": "ft"}.get(
        named[0] if named else "", ""
    )


def with_residual(residual: Any, data: Any) -> tuple[Table, str]:
    """The table with one more column of residuals, matched by row label, else by number."""
    import pandas as pd

    values = (
        residual if isinstance(residual, pd.Series) else pd.Series(np.asarray(residual, dtype=float).ravel())
    )
    name = "residual"
    if data is None:
        return table(pd.DataFrame({name: values})), name
    held = table(data)
    while name in held.names:
        name += " given"
    note: tuple[str, ...] = ()
    labelled = isinstance(residual, pd.Series) and held.index is not None
    if labelled and values.index.is_unique and held.index is not None and held.index.is_unique:
        lost = values.index.difference(held.index)
        if len(lost):
            raise InputError(
                f"{count(len(lost), 'residual')}, such as the one labelled ‘{lost[0]}’, "
                f"{'has' if len(lost) == 1 else 'have'} "
                "no row in the data",
                "Give residuals whose row labels are those of the data.",
            )
        values = values.reindex(held.index)
    elif len(values) == held.rows and not (labelled and not values.index.equals(held.index)):
        note = ("Residuals without row labels are matched to the rows by their number.",)
    else:
        raise InputError(
            f"{len(values):,} residuals cannot be matched to {held.rows:,} rows without row "
            "labels of their own",
            "Give them as a column of the data, or as a pandas Series with the row labels of the data.",
        )
    column, inner = values.reset_index(drop=True).rename(name), held.fetch
    return (
        replace(
            held,
            names=(*held.names, name),
            fetch=lambda n: column if n == name else inner(n),
            notes=(*held.notes, *note),
        ),
        name,
    )
