import json
import sqlite3

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import pytest
import shapely
from results_standins import make_fixes, wandering_track
from shapely.geometry import shape as from_json

from trackfit.results import to_geodataframe, to_pandas, write_geojson, write_geopackage

LAYERS = {
    "positions": "POINT",
    "tracks": "MULTILINESTRING",
    "ellipses_50": "MULTIPOLYGON",
    "ellipses_95": "MULTIPOLYGON",
    "fixes_used": "POINT",
}


@pytest.fixture(scope="module")
def tracks():
    return [
        wandering_track(hours=30),
        wandering_track("Ωmega", start=(179.95, -40.0), hours=40, draws=0),
    ]


@pytest.fixture(scope="module")
def package(tracks, tmp_path_factory):
    path = tmp_path_factory.mktemp("gpkg") / "positions.gpkg"
    write_geopackage(path, tracks, make_fixes(tracks).table)
    return path


def rows(path, query):
    connection = sqlite3.connect(path)
    try:
        return connection.execute(query).fetchall()
    finally:
        connection.close()


# The constants of OGC 12-128 below: application id 'GPKG', the three mandatory reference systems
# and the blob magic 'GP' are from memory; the mandatory tables and the form of last_change (ISO
# 8601 ending in Z) are as the OGC's test suite documents them.


def test_geopackage_has_its_mandatory_parts(package):
    assert rows(package, "pragma application_id") == [(1196444487,)]
    assert rows(package, "pragma user_version") == [(10300,)]
    systems = {row[0] for row in rows(package, "select srs_id from gpkg_spatial_ref_sys")}
    assert {-1, 0, 4326} <= systems
    contents = rows(package, "select table_name, data_type, last_change, srs_id from gpkg_contents")
    assert {row[0] for row in contents} == set(LAYERS)
    assert {row[1] for row in contents} == {"features"}
    assert all(row[2].endswith("Z") and pd.Timestamp(row[2]).tz is not None for row in contents)
    assert {row[3] for row in contents} == {4326}
    assert rows(package, "pragma integrity_check") == [("ok",)]


def test_geopackage_layers_have_their_geometry_types_and_blobs(package):
    kinds = dict(rows(package, "select table_name, geometry_type_name from gpkg_geometry_columns"))
    assert kinds == LAYERS
    for layer in LAYERS:
        column = rows(
            package, f"select column_name from gpkg_geometry_columns where table_name='{layer}'"
        )[0][0]
        blobs = rows(package, f"select {column} from {layer}")
        assert blobs
        assert all(blob[:2] == b"GP" for (blob,) in blobs)


def test_geopackage_times_are_utc(package, tracks):
    stored = rows(package, "select time from positions order by fid")
    assert stored[0][0] == "2024-03-01T06:00:00.000Z"
    back = gpd.read_file(package, layer="positions")
    assert pd.to_datetime(back["time"], utc=True).tolist() == to_pandas(tracks)["time"].tolist()
    assert [row[0] for row in rows(package, "select tag from tracks")] == ["seal 7", "Ωmega"]


def test_geopackage_cuts_at_the_antimeridian(package):
    lines = gpd.read_file(package, layer="tracks")
    assert len(lines.geometry[1].geoms) > 1
    for layer in ("ellipses_50", "ellipses_95", "tracks"):
        parts = gpd.read_file(package, layer=layer).geometry.explode()
        assert (parts.bounds["maxx"] - parts.bounds["minx"]).max() < 5


def test_geopackage_of_one_position_has_no_line_but_every_layer(tmp_path):
    track = wandering_track(hours=1)
    write_geopackage(tmp_path / "one.gpkg", [track], make_fixes([track]).table)
    assert {row[0] for row in pyogrio.list_layers(tmp_path / "one.gpkg")} == set(LAYERS)
    assert rows(tmp_path / "one.gpkg", "select count(*) from tracks") == [(0,)]
    assert rows(tmp_path / "one.gpkg", "select count(*) from positions") == [(1,)]


@pytest.fixture(scope="module")
def collection(tracks, tmp_path_factory):
    path = tmp_path_factory.mktemp("json") / "positions.geojson"
    write_geojson(path, tracks)
    return json.loads(
        path.read_text(encoding="utf-8"), parse_constant=lambda name: pytest.fail(name)
    )


def signed_area(ring):
    """Shoelace formula; positive if the ring runs counter-clockwise."""
    x, y = np.array(ring).T
    return float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]) / 2)


def polygons(feature):
    geometry = feature["geometry"]
    return geometry["coordinates"] if geometry["type"] == "MultiPolygon" else []


def test_geojson_follows_rfc_7946(collection):
    assert collection["type"] == "FeatureCollection"
    assert "crs" not in collection
    for feature in collection["features"]:
        assert feature["type"] == "Feature"
        for polygon in polygons(feature):
            assert len(polygon) == 1
            ring = polygon[0]
            assert len(ring) >= 4
            assert ring[0] == ring[-1]
            assert signed_area(ring) > 0
            assert np.ptp([lon for lon, _ in ring]) < 5
        lonlat = shapely.get_coordinates(from_json(feature["geometry"]))
        assert np.all(np.abs(lonlat) <= [180, 90])


def test_geojson_holds_every_kind_for_every_position(collection, tracks):
    kinds = pd.Series([f["properties"]["kind"] for f in collection["features"]]).value_counts()
    assert kinds.to_dict() == {"position": 70, "ellipse50": 70, "ellipse95": 70, "track": 2}
    first = next(f for f in collection["features"] if f["properties"]["kind"] == "position")
    assert first["properties"]["tag"] == "seal 7"
    assert first["properties"]["time"] == "2024-03-01T06:00:00Z"
    assert first["geometry"]["coordinates"] == [-5.0, 56.0]


def test_geojson_is_read_by_an_independent_reader(tracks, tmp_path):
    write_geojson(tmp_path / "p.geojson", tracks)
    table = pyogrio.read_dataframe(tmp_path / "p.geojson")
    assert len(table) == 212
    assert table.crs.to_epsg() == 4326


def test_geojson_writes_unknown_as_null(tmp_path):
    track = wandering_track(hours=2)
    track.table.loc[0, "hours_to_fix"] = np.nan
    write_geojson(tmp_path / "p.geojson", [track])
    text = (tmp_path / "p.geojson").read_text()
    assert '"hours_to_fix":null' in text
    assert "NaN" not in text


def test_geodataframe_has_points_in_wgs84(tracks):
    table = to_geodataframe(tracks)
    assert table.crs.to_epsg() == 4326
    np.testing.assert_allclose(table.geometry.x, table["lon"], rtol=0)
    assert len(table) == 70
