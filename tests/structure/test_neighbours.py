"""Neighbour graphs over sites: sets, weights, islands, the globe."""

from __future__ import annotations

import geopandas as gpd
import libpysal
import numpy as np
import numpy.typing as npt
import pytest

from clingstone.needs import InputError, NotSupported
from clingstone.structure import neighbours, spatial
from clingstone.structure.neighbours import Neighbours, build
from clingstone.structure.spatial import Sites


def plane(x: npt.ArrayLike, y: npt.ArrayLike) -> Sites:
    return spatial.build(np.asarray(x, dtype=float), np.asarray(y, dtype=float), ("x", "y"), lonlat=False)


def globe(lon: npt.ArrayLike, lat: npt.ArrayLike) -> Sites:
    return spatial.build(np.asarray(lon, dtype=float), np.asarray(lat, dtype=float), ("lon", "lat"))


def sets(graph: Neighbours) -> list[set[int]]:
    return [set(graph.W[[i]].nonzero()[1].tolist()) for i in range(graph.W.shape[0])]


def test_five_sites_by_hand() -> None:
    sites = plane([0, 1, 3, 6, 10], [0, 0, 0, 0, 0])
    nearest = build(sites, "knn:2")[0]
    assert (nearest.key, nearest.about) == ("knn:2", "2 nearest sites")
    assert sets(nearest) == [{1, 2}, {0, 2}, {0, 1}, {1, 2} ^ {1, 4}, {2, 3}]
    assert nearest.W.sum(axis=1).tolist() == [1.0] * 5
    band = build(sites, "band:3")[0]
    assert sets(band) == [{1, 2}, {0, 2}, {0, 1, 3}, {2}, set()]
    assert (band.islands, band.components) == (1, 2)
    assert band.W.toarray()[2].tolist() == pytest.approx([1 / 3, 1 / 3, 0, 1 / 3, 0])
    assert band.W.toarray()[4].tolist() == [0] * 5
    assert band.about == "sites within 3.00 map units"


def test_the_default_is_six_nearest_then_a_band_from_the_data() -> None:
    rng = np.random.default_rng(5)
    sites = plane(rng.uniform(0, 10, 60), rng.uniform(0, 10, 60))
    first, second = build(sites)
    assert first.key == "knn:6"
    fourth = np.sort(np.linalg.norm(sites.xy[:, None] - sites.xy[None], axis=2), axis=1)[:, 4]
    d = float(second.key.removeprefix("band:"))
    assert d == pytest.approx(np.quantile(fourth, 0.9), rel=1e-5)
    assert second.islands == 0


def test_a_lone_site_is_joined_to_its_nearest_and_this_is_said() -> None:
    x = np.r_[np.arange(12.0), 100.0]
    second = build(plane(x, np.zeros(13)))[1]
    assert second.islands == 0
    assert sets(second)[12] == {11}
    assert 12 in sets(second)[11]
    assert second.about.endswith("(1 lone site joined to the nearest)")


def test_few_sites_have_fewer_neighbours() -> None:
    assert build(plane([0, 1], [0, 0])) == ()
    assert build(plane(np.arange(9), np.zeros(9)))[0].key == "knn:2"
    assert build(plane([0, 1, 5], [0, 0, 0]))[0].key == "knn:1"


def test_a_named_graph_comes_first_and_the_other_kind_second() -> None:
    sites = plane(np.arange(30), np.zeros(30))
    assert [g.key.split(":")[0] for g in build(sites, "knn:3")] == ["knn", "band"]
    assert [g.key.split(":")[0] for g in build(sites, "band")] == ["band", "knn"]
    assert [g.key for g in build(sites, "band:2")] == ["band:2", "knn:6"]


def test_sets_agree_with_libpysal_on_columbus() -> None:
    # libpysal.graph.Graph.build_knn and build_distance_band on the same points (columbus, 49 areas).
    frame = gpd.read_file(libpysal.examples.get_path("columbus.shp"))
    sites = spatial.build(frame["X"].to_numpy(), frame["Y"].to_numpy(), ("X", "Y"), lonlat=False)
    points = gpd.GeoSeries(gpd.points_from_xy(sites.xy[:, 0], sites.xy[:, 1]))
    theirs = libpysal.graph.Graph.build_knn(points, k=6)
    ours = build(sites, "knn:6")[0]
    assert sets(ours) == [set(theirs[i].index) for i in range(49)]
    theirs = libpysal.graph.Graph.build_distance_band(points, threshold=4.0)
    assert sets(build(sites, "band:4")[0]) == [set(theirs[i].index) - {i} for i in range(49)]


def test_neighbours_across_the_antimeridian_and_the_pole() -> None:
    sites = globe([179.9, -179.9, 170, 160, 150], [0, 0, 0, 0, 0])
    a, b = (int(np.flatnonzero(np.isclose(sites.xy[:, 0], lon))[0]) for lon in (179.9, -179.9))
    assert sets(build(sites, "knn:1")[0])[a] == {b}
    # 0.2 degrees of the equator are 22.24 km.
    assert sets(build(sites, "band:22.3")[0])[a] == {b}
    with pytest.raises(InputError, match=r"no two sites lie within 22\.2 km"):
        build(sites, "band:22.2")
    polar = globe([0, 180, 90, 0], [89, 89, 80, 60])
    i, j = (
        int(np.flatnonzero((polar.xy[:, 1] == 89) & (np.abs(polar.xy[:, 0]) == lon))[0]) for lon in (0, 180)
    )
    assert sets(build(polar, "knn:1")[0])[i] == {j}


def test_turning_the_globe_changes_nothing() -> None:
    rng = np.random.default_rng(6)
    lon, lat = rng.uniform(-180, 180, 50), rng.uniform(-80, 80, 50)
    plain, turned = globe(lon, lat), globe((lon + 77) % 360, lat)
    row, moved = plain.part.first, turned.part.first  # one row per site: site → row
    for spec in ("knn:5", "band:2500"):
        one, other = sets(build(plain, spec)[0]), sets(build(turned, spec)[0])
        by_row = {int(row[i]): {int(row[j]) for j in s} for i, s in enumerate(one)}
        assert by_row == {int(moved[i]): {int(moved[j]) for j in s} for i, s in enumerate(other)}


def test_co_located_rows_are_never_neighbours_of_themselves() -> None:
    rng = np.random.default_rng(7)
    x, y = np.repeat(rng.uniform(0, 9, 20), 3), np.repeat(rng.uniform(0, 9, 20), 3)
    for graph in build(plane(x, y)):
        assert graph.W.shape == (20, 20)
        assert not graph.W.diagonal().any()


def test_ties_on_a_grid_do_not_depend_on_the_order_of_rows() -> None:
    x, y = (a.ravel() for a in np.meshgrid(np.arange(6.0), np.arange(6.0)))
    order = np.random.default_rng(8).permutation(36)
    assert sets(build(plane(x, y))[0]) == sets(build(plane(x[order], y[order]))[0])


@pytest.mark.parametrize("spec", ["queen", "knn:0", "knn:2.5", "knn:x", "band:-1", "band:inf"])
def test_specifications_that_cannot_be_read(spec: str) -> None:
    with pytest.raises(InputError):
        build(plane(np.arange(9), np.zeros(9)), spec)


def test_too_many_neighbours_asked_for() -> None:
    with pytest.raises(
        InputError, match="9 nearest sites were asked for, and each of the 9 sites has 8 others"
    ):
        build(plane(np.arange(9), np.zeros(9)), "knn:9")


def test_a_band_that_joins_nearly_all_pairs_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(9)
    sites = plane(rng.uniform(0, 1, 1200), rng.uniform(0, 1, 1200))
    assert neighbours.build(sites, "band:0.05")[0].W.nnz < 50 * 1200
    with pytest.raises(NotSupported, match="too many for a sparse graph"):
        build(sites, "band:1.5")
