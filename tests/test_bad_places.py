"""Places that go wrong, from the front door, in Python and from the shell."""

from __future__ import annotations

import shlex
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone import cli
from clingstone.needs import InputError, NotSupported

gpd = pytest.importorskip("geopandas")

RNG = np.random.default_rng(5)
LON, LAT = RNG.uniform(6, 9, 40), RNG.uniform(45, 47, 40)
Shell = Callable[[str], tuple[int, str]]


def table(x: Any, y: Any, names: tuple[str, str] = ("x", "y")) -> pd.DataFrame:
    rng = np.random.default_rng(6)
    n = len(x)
    dose = rng.standard_normal(n)
    return pd.DataFrame({"yield": 1 + dose + rng.standard_normal(n), "dose": dose, names[0]: x, names[1]: y})


@pytest.fixture
def shell(capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Shell:
    """Exit status and standard error of ``examine data.csv …``, on one line."""
    monkeypatch.chdir(tmp_path)

    def call(options: str) -> tuple[int, str]:
        with pytest.raises(SystemExit) as stopped:
            cli.main(["examine", "data.csv", "--model", "yield ~ dose", *shlex.split(options)])
        return int(stopped.value.code or 0), " ".join(capsys.readouterr().err.split())

    return call


def examined(data: Any, **options: Any) -> clingstone.Examination:
    return clingstone.examine(data, model="yield ~ dose", rehearsal="none", **options)


def moran(found: clingstone.Examination, key: str) -> Any:
    return next(f for f in found.results.evidence if f.test == "moran" and f.about == key and not f.given)


MIXED_X, MIXED_Y = LON.copy(), LAT.copy()
MIXED_X[:4], MIXED_Y[:4] = LON[:4] * 111_195, LAT[:4] * 111_195

STOPS = {
    "degrees or metres": (table(LON, LAT), "x y", "may be coordinates in a plane or longitude and latitude"),
    "metres as degrees": (
        table(LON * 1e4, LAT * 1e4, ("lon", "lat")),
        "lon lat",
        "is no longitude and latitude (40 rows out of range)",
    ),
    "names swapped": (table(LAT, LON, ("lat", "lon")), "lat lon", "names the latitude first"),
    "columns swapped": (table(LAT, LON + 100, ("lon", "lat")), "lon lat", "so the two look swapped"),
    "two systems": (table(MIXED_X, MIXED_Y), "x y", "36 rows could be degrees, 4 rows could not"),
    "two systems by name": (table(MIXED_X, MIXED_Y, ("lon", "lat")), "lon lat", "(4 rows out of range)"),
}


@pytest.mark.parametrize("what", STOPS)
def test_what_cannot_be_a_map_stops_with_the_reason(what: str, shell: Shell) -> None:
    data, coords, said = STOPS[what]
    with pytest.raises(InputError) as stopped:
        examined(data, coords=tuple(coords.split()))
    assert said in str(stopped.value)
    assert stopped.value.hint
    data.to_csv("data.csv", index=False)
    status, error = shell(f"--coords {coords}")
    assert status == 2
    assert said.removeprefix("coords=") in error


def test_degrees_under_names_of_metres_are_pointed_out() -> None:
    case = clingstone.Case.from_formula(
        table(LON, LAT, ("easting", "northing")), "yield ~ dose", coords=("easting", "northing")
    )
    assert any("if they are longitude and latitude, say lonlat=True" in note for note in case.notes)
    plots = clingstone.Case.from_formula(
        table(np.arange(40) % 8, np.arange(40) // 8, ("row", "col")), "yield ~ dose", coords=("row", "col")
    )
    assert not any("lonlat" in note for note in plots.notes)


def test_a_frame_without_a_reference_system_stops_and_web_mercator_is_turned() -> None:
    data = table(LON, LAT)[["yield", "dose"]]
    bare = gpd.GeoDataFrame(data, geometry=gpd.points_from_xy(LON, LAT))
    with pytest.raises(InputError, match="may be coordinates in a plane"):
        examined(bare)
    stretched = bare.set_crs(4326).to_crs(3857)
    case = clingstone.Case.from_formula(stretched, "yield ~ dose")
    assert any("Web Mercator stretches distances" in note for note in case.notes)


def test_all_rows_at_one_place_leave_nothing_to_say_of_places() -> None:
    found = examined(table(np.full(40, 3.0), np.full(40, 4.0)), coords=("x", "y"), lonlat=False)
    assert any(note.startswith("All rows share one place") for note in found.case.notes)
    assert found.advice.state == "nothing found"


def test_sites_on_a_line_are_examined_without_directions() -> None:
    found = examined(table(np.arange(40.0), 2 * np.arange(40.0)), coords=("x", "y"), lonlat=False)
    assert np.isfinite(moran(found, "knn:6").p)
    (one,) = [f for f in found.results.evidence if f.test == "direction" and not f.given]
    assert "all neighbours lie along one axis" in one.sentence
    with pytest.raises(NotSupported, match="one line"):
        examined(
            table(np.arange(40.0), 2 * np.arange(40.0)),
            coords=("x", "y"),
            lonlat=False,
            neighbours="delaunay",
        )


def test_fewer_than_ten_sites_are_no_ground_for_a_verdict() -> None:
    rng = np.random.default_rng(7)
    xy = np.repeat(rng.uniform(0, 100, (9, 2)), 6, axis=0)
    found = examined(table(*xy.T), coords=("x", "y"), lonlat=False)
    assert any("too few for a verdict" in caveat for caveat in moran(found, "knn:2").caveats)
    few = examined(table(*np.repeat(xy[::6][:5], 10, axis=0).T), coords=("x", "y"), lonlat=False)
    assert not any(f.test == "moran" and np.isfinite(f.p) for f in few.results.evidence)


def squares(places: list[tuple[float, float]]) -> Any:
    from shapely.geometry import box

    data = table(np.zeros(len(places)), np.zeros(len(places)))[["yield", "dose"]]
    return gpd.GeoDataFrame(data, geometry=[box(i, j, i + 1, j + 1) for i, j in places], crs=32632)


GRID = [(float(i), float(j)) for i in range(6) for j in range(6)]


def test_a_shape_that_comes_twice_is_one_place() -> None:
    found = examined(squares([*GRID, *GRID[:6]]), neighbours="rook")
    assert any("42 rows lie at 36 sites" in note for note in found.case.notes)
    W = found.case.design.neighbours[0].W
    assert W.shape == (36, 36)
    assert W.diagonal().sum() == 0


def test_islands_are_counted_and_separate_parts_told() -> None:
    apart = [*GRID[:30], (100.0, 0.0), (103.0, 0.0), (200.0, 0.0), (200.0, 1.0)]
    caveats = moran(examined(squares(apart), neighbours="contiguity"), "contiguity").caveats
    assert "2 of 34 sites have no neighbour." in caveats
    assert any("fall into 2 parts without a link between them" in caveat for caveat in caveats)


def test_shapes_that_share_nothing_stop() -> None:
    with pytest.raises(InputError, match="none of the 30 shapes shares a point with another") as stopped:
        examined(squares([(3.0 * i, 0.0) for i in range(30)]), neighbours="contiguity")
    assert "slivers" in str(stopped.value.hint)


def test_a_file_of_pairs_that_names_a_stranger(shell: Shell) -> None:
    data = table(LON * 1e4, LAT * 1e4).assign(well=np.arange(40))
    data.to_csv("data.csv", index=False)
    Path("near.csv").write_text("well,next\n0,1\n1,99\n")
    status, error = shell("--coords x y --no-lonlat --neighbours pairs:near.csv")
    assert status == 2
    assert "names 1 id that no row of the data has as its well: 99" in error
    with pytest.raises(InputError, match="no row of the data has as its well: 99"):
        examined(data, coords=("x", "y"), lonlat=False, neighbours="pairs:near.csv")
