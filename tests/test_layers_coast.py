"""Coasts: land from polygon files, in the plane."""

import json

import geopandas
import numpy as np
import pytest
import shapely
from layer_files import BOX, PLANE
from pyproj import Geod

from trackfit.faults import LayerError
from trackfit.frame import Plane, geodesic_km
from trackfit.layers import Box, read_coast

ISLAND = shapely.Polygon([(-3.2, 55.9), (-2.8, 55.9), (-2.8, 56.1), (-3.2, 56.1)])
LINE = shapely.LineString(ISLAND.exterior.coords)
FAR = shapely.box(20, 0, 30, 10)
PACIFIC = Plane.centred_on([180.0], [-17.0])


def written(tmp_path, shapes, name="land.gpkg", crs=4326):
    geopandas.GeoDataFrame(geometry=list(shapes), crs=crs).to_file(tmp_path / name)
    return tmp_path / name


def raw(tmp_path, *rings):
    """GeoJSON just as given, not cut or turned by a writer."""
    shapes = [{"type": "Polygon", "coordinates": [list(map(list, ring))]} for ring in rings]
    features = [{"type": "Feature", "properties": {}, "geometry": shape} for shape in shapes]
    file = tmp_path / "raw.geojson"
    file.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    return file


def on_land(coast, plane, *places):
    lon, lat = np.array(places, float).T
    return coast.contains(plane.to_plane(lon, lat)).tolist()


@pytest.mark.parametrize(
    ("name", "crs"),
    [("land.geojson", 4326)]
    + [(f"land.{e}", c) for e in ("gpkg", "shp") for c in (4326, 32630, 3857)],
)
def test_every_format_and_projection(name, crs, tmp_path):
    shapes = geopandas.GeoSeries([ISLAND, FAR], crs=4326).segmentize(0.01).to_crs(crs)
    coast = read_coast(written(tmp_path, shapes, name, crs), PLANE, BOX)
    assert on_land(coast, PLANE, (-3, 56), (-3.3, 56), (-3, 56.2)) == [True, False, False]
    # Area of the quadrangle on the WGS 84 ellipsoid: an equal-area plane must keep it. Edges of
    # 0.25 degrees bend by metres.

    area, _ = Geod(ellps="WGS84").geometry_area_perimeter(ISLAND.segmentize(0.01))
    assert coast.land.area == pytest.approx(area / 1e6, rel=1e-4)


def test_distances_to_the_shore(tmp_path):
    coast = read_coast(written(tmp_path, [ISLAND]), PLANE, BOX)
    lon, lat = np.array([-3.0, -3.5, -3.0]), np.array([56.0, 56.0, 56.15])
    found = coast.distance_km(PLANE.to_plane(lon, lat))
    expected = geodesic_km(lon[1:], lat[1:], [-3.2, -3.0], [56.0, 56.1])
    assert found[0] == 0.0
    assert found[1:] == pytest.approx(expected, rel=1e-3)  # the shore bends, the plane stretches


def test_the_search_of_segments_agrees_with_the_whole_outline(tmp_path):
    hole = shapely.Polygon(ISLAND.exterior, [shapely.box(-3.05, 55.97, -2.95, 56.03).exterior])
    islet = shapely.Point(-2.6, 55.85).buffer(0.05)
    coast = read_coast(written(tmp_path, [hole, islet]), PLANE, BOX)
    xy = np.random.default_rng(1).uniform([-40, -30], [40, 30], (500, 2))
    assert np.allclose(
        coast.distance_km(xy), shapely.distance(shapely.points(xy), coast.land), rtol=0, atol=1e-10
    )
    assert np.array_equal(coast.distance_km(xy) == 0, coast.contains(xy))
    assert on_land(coast, PLANE, (-3, 56), (-2.6, 55.85)) == [False, True]


def test_land_is_cut_to_the_box_and_open_sea_is_no_error(tmp_path):
    land = read_coast(written(tmp_path, [shapely.box(-10, 50, 10, 56)]), PLANE, BOX).land
    frame = shapely.box(BOX.x_min, BOX.y_min, BOX.x_max, BOX.y_max)
    assert frame.buffer(1e-9).covers(land)
    assert land.area == pytest.approx(frame.area / 2, rel=0.02)  # the parallel of 56 N bends
    sea = read_coast(written(tmp_path, [FAR], "sea.gpkg"), PLANE, BOX)
    assert sea.land.is_empty
    assert on_land(sea, PLANE, (-3, 56)) == [False]
    assert np.isinf(sea.distance_km(np.zeros((2, 2)))).all()


@pytest.mark.parametrize(
    "rings",
    [
        # cut at 180 as RFC 7946 asks
        [[(179.9, -17.1), (180, -17.1), (180, -16.9), (179.9, -16.9), (179.9, -17.1)],
         [(-180, -17.1), (-179.9, -17.1), (-179.9, -16.9), (-180, -16.9), (-180, -17.1)]],
        # jumping from 179.9 to -179.9
        [[(179.9, -17.1), (-179.9, -17.1), (-179.9, -16.9), (179.9, -16.9), (179.9, -17.1)]],
        # longitudes 0..360
        [[(179.9, -17.1), (180.1, -17.1), (180.1, -16.9), (179.9, -16.9), (179.9, -17.1)]],
        # longitudes below -180
        [[(-180.1, -17.1), (-179.9, -17.1), (-179.9, -16.9), (-180.1, -16.9), (-180.1, -17.1)]],
    ],
)  # fmt: skip
def test_an_island_on_the_antimeridian(rings, tmp_path):
    coast = read_coast(raw(tmp_path, *rings), PACIFIC, BOX)
    places = [(180, -17), (179.95, -17), (-179.95, -17), (179.85, -17), (-179.85, -17)]
    assert on_land(coast, PACIFIC, *places) == [True, True, True, False, False]
    assert coast.land.geom_type == "Polygon"


def test_a_cap_about_the_pole(tmp_path):
    plane = Plane.centred_on([0.0, 90.0, 180.0, -90.0], [-88.0] * 4)
    box = Box(-600.0, -600.0, 600.0, 600.0)
    lon = np.r_[np.arange(-175.0, 180.0, 10.0), -175.0]
    open_ring = np.column_stack([lon, np.full(lon.size, -87.0)])
    closed_by_pole = [(-180, -87), (180, -87), (180, -90), (-180, -90), (-180, -87)]
    for ring in (open_ring.tolist(), closed_by_pole):
        coast = read_coast(raw(tmp_path, ring), plane, box)
        places = [(10, -89.9), (-170, -88), (180, -87.5), (95, -87.2), (0, -86.5), (180, -86.5)]
        assert on_land(coast, plane, *places) == [True] * 4 + [False] * 2


def test_an_invalid_polygon_is_made_valid(tmp_path):
    bow = [(-3.2, 55.9), (-2.8, 56.1), (-2.8, 55.9), (-3.2, 56.1), (-3.2, 55.9)]
    coast = read_coast(raw(tmp_path, bow), PLANE, BOX)
    assert coast.land.is_valid
    assert on_land(coast, PLANE, (-3.15, 56), (-2.85, 56), (-3, 56.05)) == [True, True, False]


def test_faults_of_coasts(tmp_path):
    with pytest.raises(LayerError, match=r"holds LineString, and a coast needs polygons of land"):
        read_coast(written(tmp_path, [LINE], "line.gpkg"), PLANE, BOX)
    with pytest.raises(LayerError, match=r"holds Point, and a coast needs polygons"):
        read_coast(written(tmp_path, [ISLAND, shapely.Point(0, 0)], "mixed.gpkg"), PLANE, BOX)
    with pytest.raises(LayerError, match=r"there is no such file"):
        read_coast(tmp_path / "none.gpkg", PLANE, BOX)
    (tmp_path / "text.gpkg").write_text("no database")
    with pytest.raises(LayerError, match=r"cannot read it as a vector file"):
        read_coast(tmp_path / "text.gpkg", PLANE, BOX)
    (tmp_path / "empty.geojson").write_text('{"type": "FeatureCollection", "features": []}')
    with pytest.raises(LayerError, match=r"it holds no polygons"):
        read_coast(tmp_path / "empty.geojson", PLANE, BOX)
    shape = written(tmp_path, [ISLAND], "bare.shp")
    shape.with_suffix(".prj").unlink()
    with pytest.raises(
        LayerError, match=r"no coordinate reference system; a .prj file may be missing"
    ):
        read_coast(shape, PLANE, BOX)


def test_a_file_of_several_layers(tmp_path):
    file = tmp_path / "both.gpkg"
    frames = [geopandas.GeoDataFrame(geometry=[s], crs=4326) for s in (ISLAND, LINE)]
    frames[0].to_file(file, layer="land")
    frames[1].to_file(file, layer="line")
    assert on_land(read_coast(file, PLANE, BOX), PLANE, (-3, 56)) == [True]
    frames[0].to_file(file, layer="lakes")
    with pytest.raises(LayerError, match=r"it has layers lakes, land, line|land, line, lakes"):
        read_coast(file, PLANE, BOX)
