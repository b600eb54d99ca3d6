"""GeoJSON (RFC 7946): WGS 84 degrees, no crs member, right-hand rule, cut at the antimeridian."""

import json
from collections.abc import Iterator, Sequence
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from shapely.geometry import mapping

from trackfit.results import convert
from trackfit.results.inputs import TrackLike
from trackfit.results.tables import iso_times

_DECIMALS = 6
"""Eleven centimetres on the ground, as RFC 7946 (section 11.2) advises: more is only longer."""


def write_geojson(path: Path, tracks: Sequence[TrackLike]) -> None:
    """Write one feature collection for the study.

    Property `kind` says what a feature is: position (all columns of the filled track), track,
    ellipse50 or ellipse95. Times are ISO 8601 in UTC; a value that is not known is null.
    """
    with path.open("w", encoding="utf-8", newline="\n") as out:
        out.write('{"type": "FeatureCollection", "features": [')
        for number, feature in enumerate(_features(tracks)):
            out.write(",\n" if number else "\n")
            text = json.dumps(feature, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
            out.write(text)
        out.write("\n]}\n")


def _features(tracks: Sequence[TrackLike]) -> Iterator[dict[str, object]]:
    yield from _of_kind("track", convert.track_lines(tracks))
    yield from _of_kind("ellipse95", convert.ellipses(tracks, 95))
    yield from _of_kind("ellipse50", convert.ellipses(tracks, 50))
    points = convert.to_geodataframe(tracks).drop(columns=["lon", "lat"])
    yield from _of_kind("position", points)


def _of_kind(kind: str, table: gpd.GeoDataFrame) -> Iterator[dict[str, object]]:
    columns = [str(name) for name in table.columns if name != "geometry"]
    values = [_plain(table[name]) for name in columns]
    shapes = shapely.transform(table.geometry.to_numpy(), lambda xy: np.round(xy, _DECIMALS))
    for i, shape in enumerate(shapes):
        properties = {"kind": kind, **{n: v[i] for n, v in zip(columns, values, strict=True)}}
        yield {"type": "Feature", "geometry": mapping(shape), "properties": properties}


def _plain(column: pd.Series) -> list[object]:
    """Return the values of a column as JSON knows them."""
    if isinstance(column.dtype, pd.DatetimeTZDtype):
        return [text or None for text in iso_times(column)]
    if pd.api.types.is_float_dtype(column.dtype):
        return [round(v, 4) if np.isfinite(v) else None for v in column.tolist()]
    return column.tolist()
