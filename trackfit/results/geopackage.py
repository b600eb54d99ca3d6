"""GeoPackage 1.3 (OGC 12-128r17): positions, tracks, ellipses and the fixes used."""

from collections.abc import Sequence
from pathlib import Path

import geopandas as gpd
import pandas as pd

from trackfit.results import convert
from trackfit.results.inputs import TrackLike


def write_geopackage(path: Path, tracks: Sequence[TrackLike], fixes: pd.DataFrame) -> None:
    """Write one GeoPackage in WGS 84 with times in UTC.

    Parameters
    ----------
    path
        A file that does not exist yet.
    tracks
        Filled tracks: layers positions (points), tracks (lines), ellipses_50 and ellipses_95
        (polygons on the ground); lines and polygons are cut at the antimeridian.
    fixes
        Table of the fixes in use: layer fixes_used (points).
    """
    _layer(path, "positions", convert.to_geodataframe(tracks), "Point")
    _layer(path, "tracks", convert.track_lines(tracks), "MultiLineString")
    for percent in (50, 95):
        _layer(path, f"ellipses_{percent}", convert.ellipses(tracks, percent), "MultiPolygon")
    _layer(path, "fixes_used", convert.as_points(fixes), "Point")


def _layer(path: Path, name: str, table: gpd.GeoDataFrame, geometry_type: str) -> None:
    table.to_file(
        path,
        driver="GPKG",
        engine="pyogrio",
        layer=name,
        mode="a" if path.exists() else "w",
        geometry_type=geometry_type,
        index=False,
        dataset_options={} if path.exists() else {"VERSION": "1.3"},
    )
