"""What arrives in practice, and the answer that each of it must get: one row of a table for each.

A row gives the data (a frame, or a file written into a folder), the options, and either the words with
which the work stops, or words among the notes and facts of the case that is made.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import polars as pl
import pyreadstat
import pytest
import shapely
import statsmodels.formula.api as smf

Made = Callable[[Path], Any]


@dataclass(frozen=True)
class Row:
    """what : arrives. data : made in a folder. options : of ``examine``.

    stops, hint : words of the error, where the work must stop. says : words among the notes. facts :
    of the summary, by their path ("serial.gaps").
    """

    what: str
    data: Made
    options: Mapping[str, Any] = field(default_factory=dict)
    stops: str = ""
    hint: str = ""
    says: tuple[str, ...] = ()
    facts: Mapping[str, Any] = field(default_factory=dict)
    model: str = "y ~ x"


def frame(n: int = 24, **changed: Any) -> pd.DataFrame:
    rng = np.random.default_rng(5)
    made: dict[str, Any] = {
        "y": rng.normal(10, 1, n).round(3),
        "x": rng.normal(0, 1, n).round(3),
        "farm": np.repeat([f"f{i}" for i in range(n // 4)], 4),
        "cow": np.tile(["a", "b", "c", "d"], n // 4),
        "day": np.tile([1, 2, 3, 4], n // 4),
    }
    return pd.DataFrame(made | {k: v for k, v in changed.items() if v is not None})


def of(**changed: Any) -> Made:
    return lambda folder: frame(**changed)


def put(column: str, place: int | list[int], value: Any, **changed: Any) -> Made:
    """The usual frame with some values of a column replaced."""

    def make(folder: Path) -> pd.DataFrame:
        made = frame(**changed).astype({column: object})
        made.loc[place, column] = value
        return made.infer_objects()

    return make


def text(content: str | bytes, name: str = "t.csv") -> Made:
    def make(folder: Path) -> Path:
        (folder / name).write_bytes(content.encode() if isinstance(content, str) else content)
        return folder / name

    return make


def csv(sep: str = ",", decimal: str = ".", change: Callable[[str], str] = str, **changed: Any) -> Made:
    """The usual frame as text, changed by hand."""

    def make(folder: Path) -> Path:
        body = frame(**changed).to_csv(index=False, sep=sep, decimal=decimal)
        return text(change(body))(folder)

    return make


def one(column: str, place: int, word: str) -> Made:
    """A CSV file in which one value is another word."""
    return lambda folder: csv(
        change=lambda _: frame().astype(str).pipe(_set, column, place, word).to_csv(index=False)
    )(folder)


def _set(made: pd.DataFrame, column: str, place: int, word: str) -> pd.DataFrame:
    made.loc[place, column] = word
    return made


def book(**sheets: list[list[Any]]) -> Made:
    """A workbook, sheet by sheet, row by row."""

    def make(folder: Path) -> Path:
        with pd.ExcelWriter(folder / "book.xlsx") as out:
            for name, rows in sheets.items():
                pd.DataFrame(rows).to_excel(out, sheet_name=name, index=False, header=False)
        return folder / "book.xlsx"

    return make


def sheet(**changed: Any) -> list[list[Any]]:
    made = frame(**changed)
    return [list(made.columns), *made.astype(object).to_numpy().tolist()]


def spss(folder: Path) -> Path:
    made = frame().assign(
        arm=np.tile([1.0, 2.0], 12),
        mood=np.tile([1.0, 2, 3, 2, 1, 3], 4),
        age=[99.0, *range(30, 53)],
    )
    labels = {
        "arm": {1: "usual", 2: "visits"},
        "mood": {1: "low", 2: "fair", 3: "high"},
        "age": {99: "not known"},
    }
    pyreadstat.write_sav(made, folder / "s.sav", variable_value_labels=labels)
    return folder / "s.sav"


def blood(folder: Path) -> pd.DataFrame:
    rng = np.random.default_rng(2)
    made = pd.DataFrame(rng.normal(120, 9, (20, 3)).round(), columns=["bp_0", "bp_3", "bp_12"])
    return made.assign(patient=np.arange(20), arm=np.tile(["usual", "visits"], 10))


def plots(crs: Any = 3035, suffix: str = "gpkg") -> Made:
    """A row of four by six square fields of one hectare, two of them apart from all others."""

    def make(folder: Path) -> Path:
        boxes = [
            shapely.box(100 * i, 100 * j, 100 * (i + 1), 100 * (j + 1)) for i in range(6) for j in range(4)
        ]
        made = gpd.GeoDataFrame(frame(), geometry=boxes, crs=crs)
        made.to_file(folder / f"plots.{suffix}")
        return folder / f"plots.{suffix}"

    return make


def points(folder: Path) -> gpd.GeoDataFrame:
    places = gpd.GeoSeries.from_xy(7 + np.arange(24) / 10, 46 + np.tile([0, 0.1], 12), crs=4326)
    return gpd.GeoDataFrame(frame(), geometry=places)


def hours(zone: str | None) -> list[str]:
    """24 hours of the night on which clocks went back in Vienna, 2021-10-31, as local times."""
    stamps = pd.date_range("2021-10-30 20:00", periods=24, freq="h", tz="UTC").tz_convert("Europe/Vienna")
    return [s.isoformat() if zone else s.tz_localize(None).isoformat() for s in stamps]


def fitted(folder: Path) -> Any:
    return smf.ols("y ~ x", frame().assign(y=lambda d: d["y"].where(d.index != 3))).fit()


FARM: dict[str, Any] = {"group": "farm"}
DAY: dict[str, Any] = {"group": "farm", "time": "day"}
EAST: dict[str, Any] = {"coords": ("east_km", "north_km")}
GLOBE: dict[str, Any] = {"coords": ("lon", "lat")}


def at(x: Any, y: Any, names: tuple[str, str]) -> Made:
    return of(**{names[0]: x, names[1]: y})


LON, LAT = 7 + np.arange(24) / 10, 46 + np.tile([0.0, 0.1], 12)

TABLE = (
    # ---- delimited text
    Row("semicolons and decimal commas", csv(";", ","), facts={"origin.decimal mark": "comma"}),
    Row(
        "a mark before the text",
        csv(change=lambda t: "\ufeff" + t),
        facts={"origin.encoding": "utf-8 with a mark"},
    ),
    Row("tabs", csv("\t"), facts={"origin.separator": "tab"}),
    Row(
        "thousands marks",
        one("x", 2, "1.234,5"),
        stops="x holds text where numbers are needed: row 3 has ‘1.234,5’",
        hint="C(x)",
    ),
    Row(
        "thousands marks in the response",
        one("y", 2, "1 234"),
        stops="y holds text where numbers are needed: row 3 has ‘1 234’",
        hint="Mend these values",
    ),
    Row("NA", one("y", 2, "NA"), facts={"dropped": {"missing y (response)": 1}}),
    Row(
        "a point for missing",
        one("y", 2, "."),
        says=("‘.’ in y is read as missing (1 row).",),
        facts={"dropped": {"missing y (response)": 1}},
    ),
    Row(
        "−999 for missing", put("x", [4, 9], -999.0), says=("x is −999 in 2 rows, far from all other values",)
    ),
    Row(
        "values below a limit",
        one("y", 2, "<0.1"),
        stops="y holds text where numbers are needed: row 3 has ‘<0.1’",
    ),
    Row(
        "rows of unequal length",
        csv(change=lambda t: t + "1,2\n"),
        stops="another number of fields than the header's 5: row 25 has 2",
    ),
    # ---- workbooks, packages, frames
    Row("a workbook of two sheets", book(herd=sheet(), old=sheet()), says=("‘herd’, the first, is read",)),
    Row("a sheet by name", book(old=[["y"], [1]], herd=sheet()), {"sheet": "herd"}, facts={"n": 24}),
    Row(
        "merged cells above the names",
        book(herd=[["Our herd", None, None, None, None], *sheet()]),
        stops="leaves 4 columns of 5 without a name",
        hint="one row of names",
    ),
    Row(
        "dates in cells",
        book(herd=sheet(date=[dt.datetime(2021, 1 + i % 4, 1) for i in range(24)])),
        {"group": "farm", "time": "date"},
        facts={"serial.unit": "month", "serial.first": "2021-01-01"},
    ),
    Row(
        "dates as the day counts of a spreadsheet",
        of(date=np.tile([43831, 43862, 43891, 43922], 6)),
        {"group": "farm", "time": "date"},
        says=("date holds day counts of a spreadsheet: 43831 is 2020-01-01.",),
        facts={"serial.unit": "month"},
    ),
    Row("value labels", spss, model="y ~ arm", facts={"coefficients": ("constant", "arm: visits")}),
    Row(
        "a response with value labels",
        spss,
        model="mood ~ x",
        says=("mood has value labels and is used by its codes here (1 ‘low’, 2 ‘fair’ and 3 ‘high’).",),
    ),
    Row(
        "a code with a label in a column of numbers",
        spss,
        model="y ~ age",
        says=("age has labels for 1 of its 24 values only (99 ‘not known’), so it is kept as numbers.",),
        facts={"n": 24},
    ),
    Row(
        "an index of two levels", lambda _: frame().set_index(["farm", "day"]), DAY, facts={"serial.count": 6}
    ),
    Row("an index of one level", lambda _: frame().set_index("farm"), FARM, facts={"n": 24}),
    Row("polars", lambda _: pl.from_pandas(frame()), DAY, facts={"serial.count": 6}),
    # ---- wide form
    Row(
        "one measure side by side",
        blood,
        model="bp_3 ~ arm",
        stops="bp_0, bp_3 and bp_12 look like one measure at several times, side by side",
        hint="With wide='bp' they are put under each other",
    ),
    Row(
        "one measure side by side, by its stem",
        blood,
        model="bp ~ arm",
        stops="and there is no column ‘bp’",
        hint="group='row' and time='occasion'",
    ),
    Row(
        "one measure side by side, put under each other",
        blood,
        {"wide": "bp", "group": "patient", "time": "occasion"},
        model="bp ~ arm + occasion",
        says=("20 rows stand for 60: bp_0, bp_3 and bp_12 are put under each other.",),
        facts={"n": 60, "serial.count": 20, "serial.last": "12"},
    ),
    Row(
        "numbered columns that are no such thing",
        blood,
        {"wide": "none"},
        model="bp_3 ~ arm",
        facts={"n": 20},
    ),
    Row(
        "numbered columns in rows already long",
        of(score_1=np.arange(24.0), score_2=np.arange(24.0), score_3=np.tile([1.0, 2.5, 7.1, 3.3], 6)),
        FARM,
        model="score_3 ~ x",
        says=("score_3 alone is used. To put them under each other, give wide='score'.",),
    ),
    # ---- maps
    Row(
        "shapes",
        plots(),
        says=("24 shapes of a median area of 10,000 m²", "by a point inside each of them"),
        facts={"spatial.sites": 24, "spatial.unit": "m"},
    ),
    Row("shapes that touch", plots(), {"neighbours": "contiguity"}, facts={"spatial.islands": 0}),
    Row("a shapefile", plots(suffix="shp"), facts={"spatial.sites": 24}),
    Row("GeoJSON", plots(4326, "geojson"), stops="is no longitude and latitude"),
    Row(
        "no reference system",
        lambda _: frame().pipe(lambda d: gpd.GeoDataFrame(d, geometry=gpd.points_from_xy(LON, LAT))),
        stops="may be coordinates in a plane or longitude and latitude",
        hint="lonlat=False or lonlat=True",
    ),
    Row(
        "Web Mercator",
        lambda f: points(f).to_crs(3857),
        says=("Web Mercator stretches distances, so the places are turned to longitude and latitude.",),
        facts={"spatial.kind": "lonlat"},
    ),
    # ---- a fitted model, missing values
    Row("a fitted model", fitted, FARM, model="", facts={"dropped": {"not used by the fit": 1}}),
    Row(
        "missing response and predictor",
        lambda f: put("x", 5, np.nan)(f).assign(y=lambda d: d["y"].where(d.index > 1)),
        facts={"dropped": {"missing y (response)": 2, "missing x (predictor)": 1}},
    ),
    Row(
        "a missing id",
        put("farm", [2, 7], None),
        FARM,
        stops="missing: farm in 2 rows (rows 3 and 8)",
        hint="missing='own-group'",
    ),
    Row(
        "a missing id of its own",
        put("farm", [2, 7], None),
        {"missing": "own-group", **FARM},
        facts={"n": 24},
    ),
    Row("a missing time", put("day", 2, np.nan), DAY, stops="missing: day in 1 row (row 3)"),
    # ---- rows that are alike
    Row(
        "copies of rows",
        lambda _: pd.concat([frame(), frame().iloc[[3, 4]]], ignore_index=True),
        says=("2 rows equal another row in every column used (rows 25 and 26); they are kept.",),
        facts={"n": 26},
    ),
    Row(
        "several rows at one time",
        put("day", 1, 1),
        DAY,
        stops="day is not unique within farm: 1 row shares series and time with an earlier row",
        hint="ties='replicate'",
    ),
    Row("replicates", put("day", 1, 1), {"ties": "replicate", **DAY}, facts={"serial.ties": 1}),
    # ---- ids
    Row(
        "ids that look alike",
        put("farm", [0, 5], ["F0 ", "F1"]),
        FARM,
        says=("Some labels of farm differ only by blanks, case or leading zeros",),
        facts={"group.0.count": 8},
    ),
    Row(
        "leading zeros",
        text("y,x,farm\n" + "".join(f"{i * i % 7},{i % 5}.5,0{i // 4}\n" for i in range(24))),
        FARM,
        says=("farm has leading zeros (‘00’ and 5 more), so it is kept as text.",),
        facts={"group.0.labels": ("00", "01", "02", "03", "04", "05")},
    ),
    Row(
        "inner labels used again",
        of(),
        {"group": "farm/cow"},
        says=("Labels of cow recur in several groups of farm (‘a’, ‘b’, ‘c’ and ‘d’)",),
    ),
    Row("an id of its own for each row", of(id=np.arange(24)), {"group": "id"}, says=("no rows share one",)),
    Row("one group", of(herd="h"), {"group": "herd"}, says=("holds no grouping information",)),
    Row(
        "singletons and uneven groups",
        of(farm=["a"] * 12 + ["b"] * 9 + list("cde")),
        FARM,
        says=("3 of 5 groups of farm hold one row each",),
        facts={"group.0.singletons": 3, "group.0.effective": pytest.approx(24**2 / (144 + 81 + 3))},
    ),
    # ---- times
    Row(
        "years",
        of(year=np.tile([2001, 2002, 2003, 2004], 6)),
        {"group": "farm", "time": "year"},
        facts={"serial.unit": "year"},
    ),
    Row(
        "quarters",
        of(q=np.tile(["2021Q1", "2021Q2", "2021Q3", "2021Q4"], 6)),
        {"group": "farm", "time": "q"},
        facts={"serial.unit": "quarter", "serial.spacing": "regular"},
    ),
    Row(
        "a month or a day",
        of(when=np.tile(["Mar-19", "Apr-19", "May-19", "Jun-19"], 6)),
        {"group": "farm", "time": "when"},
        stops="may be a month of a year or a day of a month",
    ),
    Row(
        "day and month in doubt",
        of(when=np.tile(["03/04/2021", "04/04/2021", "05/04/2021", "06/04/2021"], 6)),
        {"group": "farm", "time": "when"},
        stops="may be day/month or month/day: none has a number over 12",
    ),
    Row(
        "days first",
        of(when=np.tile(["13/04/2021", "14/04/2021", "15/04/2021", "16/04/2021"], 6)),
        {"group": "farm", "time": "when"},
        says=("when is read as day/month/year",),
    ),
    Row(
        "zones",
        of(when=hours("zone"), herd="h"),
        {"time": "when"},
        facts={"serial.step": 1.0, "serial.unit": "hour"},
    ),
    Row(
        "some times with a zone",
        of(when=[*hours("zone")[:23], "2021-10-31T23:00"]),
        {"time": "when"},
        stops="when gives a zone in some rows and none in 1 distinct time",
    ),
    Row(
        "the hour that a clock repeats in autumn",
        of(when=hours(None)),
        {"time": "when"},
        stops="shares series and time with an earlier row",
        hint="repeat an hour in autumn: give times with their zone",
    ),
    Row(
        "missing steps",
        lambda _: frame().drop([1, 6]),
        DAY,
        says=("with 2 missing steps",),
        facts={"serial.spacing": "regular with gaps", "serial.gaps": 2},
    ),
    Row(
        "irregular visits",
        of(day=np.tile([0.0, 3.1, 4.7, 11.9], 6)),
        DAY,
        says=("day is irregular",),
        facts={"serial.spacing": "irregular"},
    ),
    Row(
        "rows out of order",
        lambda _: frame().sample(frac=1, random_state=1),
        DAY,
        facts={"serial.spacing": "regular"},
    ),
    Row(
        "waves",
        of(wave=np.tile([1, 2, 3, 4], 6)),
        {"group": "farm", "time": "wave"},
        says=("wave counts occasions: they are taken as equally far apart",),
    ),
    # ---- places
    Row("longitude and latitude", at(LON, LAT, ("lon", "lat")), GLOBE, facts={"spatial.unit": "km"}),
    Row(
        "latitude first",
        at(LON, LAT, ("lon", "lat")),
        {"coords": ("lat", "lon")},
        stops="names the latitude first",
        hint="coords=('lon', 'lat')",
    ),
    Row("the two swapped", at(LAT, LON + 100, ("lon", "lat")), GLOBE, stops="the two look swapped"),
    Row(
        "zero, zero",
        at(np.where(np.arange(24) == 3, 0, LON), np.where(np.arange(24) == 3, 0, LAT), ("lon", "lat")),
        GLOBE,
        says=("1 row lies exactly at 0, 0",),
    ),
    Row(
        "a field grid",
        at(np.repeat(np.arange(6.0), 4), np.tile(np.arange(4.0), 6), ("row", "column")),
        {"coords": ("column", "row")},
        facts={"spatial.kind": "planar", "spatial.sites": 24},
    ),
    Row(
        "co-located points",
        at(np.repeat(np.arange(6.0), 4), np.repeat(np.arange(6.0) ** 2, 4), EAST["coords"]),
        EAST,
        says=("24 rows lie at 6 sites; rows at one place are one site.",),
        facts={"spatial.rows_per_site": 4.0},
    ),
    Row("one place", at(np.ones(24), np.ones(24), EAST["coords"]), EAST, says=("All rows share one place",)),
    # ---- weights, columns of the model
    Row(
        "survey weights",
        of(w=2.0),
        {"weights": "w", "weights_kind": "survey"},
        stops="survey weights are not supported",
    ),
    Row(
        "counts and times",
        of(w=2),
        {"weights": "w", "weights_kind": "frequency", **DAY},
        stops="their copies would look like perfect dependence",
    ),
    Row(
        "collinear columns",
        lambda _: frame().assign(z=lambda d: 2 * d["x"]),
        model="y ~ x + z",
        stops="z follows exactly from x",
        hint="Drop ‘z’",
    ),
    Row("a factor of one level", of(arm="usual"), model="y ~ x + arm", stops="the factor arm has one level"),
    Row(
        "a predictor of whole farms",
        of(size=np.repeat(np.arange(6.0) ** 2, 4)),
        FARM,
        model="y ~ x + size",
        facts={"varies": {"constant": "all rows", "x": "row", "size": "farm"}},
    ),
    Row(
        "two values of the response", of(y=np.tile([0, 1, 1], 8)), says=("y takes two values only (0 and 1)",)
    ),
)
