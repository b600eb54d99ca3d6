"""Filled tracks as tables, geographic tables and CF data sets in memory."""

from collections.abc import Mapping, Sequence

import geopandas as gpd
import pandas as pd
import shapely

from trackfit.results.geometry import cut_line, ellipse_polygons
from trackfit.results.inputs import TrackLike
from trackfit.results.tables import OF_THE_TAG, positions_table

WGS84_CRS = "EPSG:4326"


def to_pandas(tracks: Sequence[TrackLike]) -> pd.DataFrame:
    """Return the positions of all tracks in one table: tag, fit_status, a track's columns."""
    return positions_table(tracks)


def to_geodataframe(tracks: Sequence[TrackLike]) -> gpd.GeoDataFrame:
    """Return the positions of all tracks as points in WGS 84 degrees, with every column."""
    return as_points(positions_table(tracks))


def as_points(table: pd.DataFrame) -> gpd.GeoDataFrame:
    """Return a table with columns lon and lat (degrees) with its points."""
    points = shapely.points(table["lon"].to_numpy(float), table["lat"].to_numpy(float))
    return gpd.GeoDataFrame(table, geometry=points, crs=WGS84_CRS)


def track_lines(tracks: Sequence[TrackLike]) -> gpd.GeoDataFrame:
    """Return one line a tag, cut at the antimeridian; a tag with one position has no line."""
    rows = [_line_row(t) for t in tracks if len(t.table) > 1]
    columns = ["tag", "fit_status", "start", "end", "positions", "geometry"]
    lines = gpd.GeoDataFrame(rows, columns=columns, geometry="geometry", crs=WGS84_CRS)
    return lines if rows else lines.astype({"tag": str, "fit_status": str, "positions": int})


def _line_row(track: TrackLike) -> Mapping[str, object]:
    table = track.table
    time = table["time"]
    return {
        "tag": track.tag,
        "fit_status": track.fit_status.name,
        "start": time.iloc[0],
        "end": time.iloc[-1],
        "positions": len(table),
        "geometry": cut_line(table["lon"].to_numpy(float), table["lat"].to_numpy(float)),
    }


def ellipses(tracks: Sequence[TrackLike], percent: int) -> gpd.GeoDataFrame:
    """Return the 50 or 95 % ellipses of all positions as polygons cut at the antimeridian."""
    table = positions_table(tracks)
    major, minor = f"ellipse{percent}_major_m", f"ellipse{percent}_minor_m"
    names = ["lon", "lat", major, minor, "ellipse_bearing_deg"]
    shapes = ellipse_polygons(*(table[name].to_numpy(float) for name in names))
    kept = table[[*OF_THE_TAG, "time", major, minor, "ellipse_bearing_deg", "in_gap"]]
    return gpd.GeoDataFrame(kept, geometry=shapes, crs=WGS84_CRS)
