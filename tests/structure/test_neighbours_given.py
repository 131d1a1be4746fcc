"""Neighbours by triangles, by shapes, by inverse distance, and from a file of pairs."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.spatial.distance import pdist, squareform

from clingstone.maths.once import Array
from clingstone.needs import InputError, NotSupported
from clingstone.structure import neighbours, spatial, triangles
from clingstone.structure.spatial import Sites


def sites(xy: Any, lonlat: bool = False) -> Sites:
    xy = np.asarray(xy, dtype=float)
    return spatial.build(xy[:, 0], xy[:, 1], ("x", "y"), lonlat)


def links(found: neighbours.Neighbours) -> Array:
    return np.asarray(found.W.toarray() > 0)


def test_gabriel_equals_the_obvious_loop() -> None:
    rng = np.random.default_rng(1)
    made = sites(rng.uniform(size=(40, 2)))
    found = links(neighbours.build(made, "gabriel")[0])
    D = squareform(pdist(made.xy)) ** 2
    for i in range(40):
        for j in range(i):
            inside = any(D[i, k] + D[j, k] < D[i, j] * (1 - 1e-12) for k in range(40) if k not in (i, j))
            assert found[i, j] == (not inside)
    assert np.array_equal(found, found.T)


def test_delaunay_is_libpysals_but_for_long_edges() -> None:
    # libpysal 4.14, Graph.build_triangulation(method="delaunay")
    from libpysal.graph import Graph

    rng = np.random.default_rng(2)
    made = sites(rng.uniform(size=(60, 2)))
    found = links(neighbours.build(made, "delaunay")[0])
    theirs: Any = Graph.build_triangulation(made.xy, method="delaunay")
    theirs = theirs.sparse.toarray() > 0
    assert not np.any(found & ~theirs)
    gone = np.argwhere(theirs & ~found)
    D = squareform(pdist(made.xy))
    middle = np.array([np.median(D[i][theirs[i]]) for i in range(60)])
    assert all(D[i, j] > 2.9 * max(middle[i], middle[j]) for i, j in gone)
    assert found.sum() > 0.9 * theirs.sum()


def test_sites_on_a_line_have_no_triangles() -> None:
    with pytest.raises(NotSupported, match="one line"):
        neighbours.build(sites([[i, 2 * i] for i in range(10)]), "delaunay")


def test_triangles_across_the_antimeridian_and_near_a_pole() -> None:
    rng = np.random.default_rng(3)
    lon, lat = rng.uniform(-8, 8, 40), rng.uniform(-60, -50, 40)
    plain = links(neighbours.build(sites(np.column_stack([lon, lat]), True), "gabriel")[0])
    moved = sites(np.column_stack([(lon + 360) % 360 - 180, lat]), True)
    order = np.lexsort((moved.xy[:, 1], (moved.xy[:, 0] + 360) % 360 - 180))
    assert np.array_equal(links(neighbours.build(moved, "gabriel")[0])[order][:, order], plain)
    polar = sites(np.column_stack([rng.uniform(-180, 180, 30), rng.uniform(80, 89, 30)]), True)
    flat = triangles.plane(polar)
    # Equal area about the middle: near it, distances on the map are distances on the globe.
    true = squareform(pdist(polar.points))
    assert np.abs(squareform(pdist(flat)) / np.where(true > 0, true, 1) - (true > 0)).max() < 0.03


def test_too_wide_a_globe_is_refused() -> None:
    wide = sites([[lon, 0] for lon in range(-170, 180, 20)], True)
    with pytest.raises(NotSupported, match="more than 60 degrees"):
        neighbours.build(wide, "gabriel")


def test_inverse_distance_by_hand() -> None:
    made = sites([[0, 0], [1, 0], [3, 0], [3.5, 0]])
    found = neighbours.build(made, "inverse:2")[0]
    assert found.links is not None
    table = found.links.toarray()
    # nearest distances 1, 1, 0.5, 0.5: floor 0.075; weight ((d + 0.075)/0.075)^−2
    assert table[0, 1] == pytest.approx((1.075 / 0.075) ** -2)
    assert table[2, 3] == pytest.approx((0.575 / 0.075) ** -2)
    np.testing.assert_allclose(found.W.sum(axis=1), 1.0)
    np.testing.assert_allclose(table, table.T)
    assert np.array_equal(found.table.toarray(), table)
    plain = neighbours.build(made, "knn:1")[0]
    assert set(np.unique(plain.table.toarray())) == {0.0, 1.0}


def test_contiguity_of_a_grid_of_squares() -> None:
    import geopandas as gpd
    from shapely.geometry import box

    squares = [box(i, j, i + 1, j + 1) for i in range(4) for j in range(3)]
    shapes = gpd.GeoSeries([*squares, squares[0]])  # the first place has two rows
    centre = shapes.centroid
    made = spatial.build(centre.x.to_numpy(), centre.y.to_numpy(), ("x", "y"), False)
    for spec, corner, middle in (("rook", 2, 4), ("contiguity", 3, 8)):
        found = neighbours.build(made, spec, shapes)[0]
        degree = links(found).sum(axis=1)
        place = {tuple(xy): d for xy, d in zip(made.xy.tolist(), degree.tolist(), strict=True)}
        assert place[0.5, 0.5] == corner
        assert place[1.5, 1.5] == middle
    with pytest.raises(InputError, match="the places are points"):
        neighbours.build(made, "rook", centre)
    with pytest.raises(InputError, match="the places are points"):
        neighbours.build(made, "rook")


@pytest.fixture
def wells() -> tuple[Sites, Any]:
    xy = np.array([[0.0, 0], [1, 0], [2, 5], [9, 9], [1, 0]])
    made = sites(xy)
    frame = pd.DataFrame({"well": [10, 20, 30, 40, 20]})
    return made, lambda name: frame[name]


def written(path: Path, text: str) -> str:
    file = path / "near.csv"
    file.write_text(text)
    return f"pairs:{file}"


def test_pairs_of_a_file_count_both_ways(tmp_path: Path, wells: tuple[Sites, Any]) -> None:
    made, column = wells
    spec = written(tmp_path, "well,next\n10,20\n20,30\n30,20\n")
    found = neighbours.build(made, spec, column=column)[0]
    code = {10: made.part.codes[0], 20: made.part.codes[1], 30: made.part.codes[2], 40: made.part.codes[3]}
    expected = np.zeros((4, 4), dtype=bool)
    for a, b in ((10, 20), (20, 30)):
        expected[code[a], code[b]] = expected[code[b], code[a]] = True
    assert np.array_equal(links(found), expected)
    assert found.islands == 1
    assert found.about == "the pairs of near.csv"
    weighted = neighbours.build(
        made, written(tmp_path, "well;next;km\n10;20;2\n20;30;6\n30;20;5\n"), column=column
    )[0]
    assert weighted.table.toarray()[code[20], code[30]] == 6
    assert weighted.W.toarray()[code[20], code[10]] == pytest.approx(0.25)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("well,next\n10,99\n", "near.csv names 1 id that no row of the data has as its well: 99"),
        ("well,next\n10,10\n", r"its own neighbour \(row 2: 10\)"),
        ("well,next,w\n10,20,-1\n", r"1 weight of near.csv is no positive number \(row 2: -1\)"),
        ("well\n10\n", "1 row and 1 column"),
    ],
)
def test_bad_pairs_are_named(tmp_path: Path, wells: tuple[Sites, Any], text: str, said: str) -> None:
    made, column = wells
    with pytest.raises(InputError, match=said):
        neighbours.build(made, written(tmp_path, text), column=column)


def test_an_id_at_two_places_stands_for_none(tmp_path: Path, wells: tuple[Sites, Any]) -> None:
    made, _ = wells
    frame = pd.DataFrame({"well": [10, 20, 30, 10, 20]})
    with pytest.raises(InputError, match="well 10 lies at two places"):
        neighbours.build(made, written(tmp_path, "well,next\n10,20\n"), column=lambda name: frame[name])


@pytest.mark.parametrize("spec", ["delaunay:3", "pairs", "pairs:", "inverse:-1", "queen", "rook:2"])
def test_what_is_no_neighbourhood(spec: str) -> None:
    with pytest.raises(InputError, match="is no neighbourhood"):
        neighbours.build(sites(np.random.default_rng(4).uniform(size=(9, 2))), spec)


def test_shapes_touch_across_the_antimeridian_and_at_a_pole() -> None:
    import geopandas as gpd
    from shapely.geometry import Polygon, box

    turned = [(lon + 180) % 360 - 180 for lon in (179.0, 179.5, 180.0, 180.5)]
    shapes = gpd.GeoSeries([box(lon, j, lon + 0.5, j + 1) for lon in turned for j in range(3)])
    centre = shapes.centroid
    made = spatial.build(centre.x.to_numpy(), centre.y.to_numpy(), ("lon", "lat"))
    found = neighbours.build(made, "rook", shapes)[0]
    assert found.components == 1
    assert sorted(links(found).sum(axis=1).tolist()) == [2] * 4 + [3] * 6 + [4] * 2
    caps = gpd.GeoSeries([Polygon([(a, 80), (a + 60, 80), (a + 30, 90)]) for a in range(-180, 180, 60)])
    inside = caps.representative_point()
    polar = spatial.build(inside.x.to_numpy(), inside.y.to_numpy(), ("lon", "lat"))
    assert links(neighbours.build(polar, "contiguity", caps)[0]).sum() == 6 * 5  # all meet at the pole


def test_an_island_has_no_link_at_all() -> None:
    import geopandas as gpd
    from shapely.geometry import box

    shapes = gpd.GeoSeries([box(i, 0, i + 1, 1) for i in (0, 1, 2, 9)])
    centre = shapes.centroid
    made = spatial.build(centre.x.to_numpy(), centre.y.to_numpy(), ("x", "y"), False)
    found = neighbours.build(made, "contiguity", shapes)[0]
    assert found.islands == 1
    assert np.diff(found.W.indptr).tolist() == [1, 2, 1, 0]
