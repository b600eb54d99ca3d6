"""Land from any polygon file, in the plane."""

from __future__ import annotations

from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import pyproj
import shapely
from jaxtyping import Float
from shapely import affinity
from shapely.geometry.base import BaseGeometry

from trackfit.faults import LayerError
from trackfit.frame import Plane
from trackfit.layers.border import check_file, foreign
from trackfit.layers.layer import Box, Coast

# Straight edges in degrees bend in the plane; pieces this short stay within metres.
LONGEST_EDGE_DEG = 0.25
TURN_DEG = 360.0
POLYGONS = ("Polygon", "MultiPolygon")


def read_coast(file: Path, plane: Plane, box_km: Box) -> Coast:
    """Read polygons of land (GeoPackage, GeoJSON, Shapefile, ...) and clip them to the box.

    Rings that jump across the antimeridian are taken to cross it. Land outside the box is not
    kept, so distances are to land in the box.

    Raises
    ------
    LayerError
        If the file cannot be read, has no polygons, holds other shapes, or has no projection.
    """
    place = f"coast ({file})"
    check_file(place, file)
    with foreign(place, "read it as a vector file"):
        table = geopandas.read_file(file, layer=_layer(file, place))
    parts = _polygons(table, place)
    if table.crs is None:
        raise LayerError(
            f"{place}: it has no coordinate reference system; a .prj file may be missing"
        )
    if table.crs.is_geographic:
        near = _near_in_degrees(parts, table.crs, plane, box_km)
    else:
        near = _near_in_projection(parts, table.crs, plane, box_km)
    frame = shapely.box(box_km.x_min, box_km.y_min, box_km.x_max, box_km.y_max)
    land = shapely.intersection(shapely.union_all(shapely.make_valid(near)), frame)
    return Coast(_only_polygons(land), str(file))


def _layer(file: Path, place: str) -> str:
    """Return the only layer of the file, or its only layer of polygons."""
    layers = pyogrio.list_layers(file)
    names = [str(name) for name, _ in layers]
    if len(names) == 1:
        return names[0]
    polygons = [str(name) for name, kind in layers if str(kind).split(" ")[0] in POLYGONS]
    if len(polygons) != 1:
        raise LayerError(
            f"{place}: it has layers {', '.join(names)}, of which {len(polygons)} hold polygons; "
            "save the land as a file of one layer"
        )
    return polygons[0]


def _polygons(table: geopandas.GeoDataFrame, place: str) -> np.ndarray:
    """Return every single polygon; anything else is an error, nothing is dropped."""
    shapes = np.asarray(table.geometry.values) if "geometry" in table else np.array([])
    shapes = np.array([shape for shape in shapes if shape is not None and not shape.is_empty])
    kinds = sorted({str(shape.geom_type) for shape in shapes} - set(POLYGONS))
    if kinds:
        raise LayerError(
            f"{place}: it holds {', '.join(kinds)}, and a coast needs polygons of land; "
            "take a land file instead of a coastline, or close the lines to polygons"
        )
    if not shapes.size:
        raise LayerError(f"{place}: it holds no polygons")
    return shapely.get_parts(shapes)


def _near_in_projection(parts: np.ndarray, crs: pyproj.CRS, plane: Plane, box: Box) -> np.ndarray:
    """Cut in the file's own projection, then transform to the plane."""
    there = pyproj.Transformer.from_crs(plane.crs, crs, always_xy=True)
    x, y = (np.asarray(axis) for axis in there.transform(*(box.lattice_km() * 1000).T))
    good = np.isfinite(x) & np.isfinite(y)
    if not good.any():
        return np.array([], object)
    frame = _frame(x[good], y[good])
    back = pyproj.Transformer.from_crs(crs, plane.crs, always_xy=True)
    edge = max(frame.bounds[2] - frame.bounds[0], frame.bounds[3] - frame.bounds[1]) / 256
    cut = shapely.segmentize(_cut(parts, frame), edge)
    return shapely.transform(cut, lambda xy: np.column_stack(back.transform(*xy.T)) / 1000)


def _near_in_degrees(parts: np.ndarray, crs: pyproj.CRS, plane: Plane, box: Box) -> np.ndarray:
    """Cut in degrees about the study's own longitudes, one turn west and east included."""
    lon, lat = plane.to_lonlat(box.lattice_km())
    middle = float(plane.to_lonlat(box.centre_km)[0][0])
    lon = (lon - middle + TURN_DEG / 2) % TURN_DEG - TURN_DEG / 2 + middle
    parts = np.array([_unwrapped(part) for part in parts])
    back = pyproj.Transformer.from_crs(crs, plane.crs, always_xy=True)
    frame = _frame(lon, lat, -90.0, 90.0)
    near = []
    for turns in (-2, -1, 0, 1, 2):
        shift = np.array([turns * TURN_DEG, 0.0])
        cut = _cut(parts, affinity.translate(frame, *-shift))
        near.append(shapely.transform(cut, lambda xy, shift=shift: xy + shift))
    # Joined in degrees, where the edges along a seam match exactly.
    land = shapely.union_all(np.concatenate(near))
    halves = np.array([shapely.intersection(land, half) for half in _halves(frame)])
    return shapely.transform(
        shapely.segmentize(halves, LONGEST_EDGE_DEG),
        lambda xy: np.column_stack(back.transform(*xy.T)) / 1000,
    )


def _halves(frame: BaseGeometry) -> list[BaseGeometry]:
    """Cut a frame that goes round a pole into two that overlap, each plain when projected."""
    west, south, east, north = frame.bounds
    if east - west <= TURN_DEG / 2:
        return [frame]
    middle, lap = (west + east) / 2, (east - west) / 64
    return [
        shapely.box(west, south, middle + lap, north),
        shapely.box(middle - lap, south, east, north),
    ]


def _frame(
    x: np.ndarray, y: np.ndarray, lowest: float = -np.inf, highest: float = np.inf
) -> BaseGeometry:
    """Return the rectangle about a lattice, wider by what may hide between its points."""
    margin_x, margin_y = np.ptp(x) / 32, np.ptp(y) / 32
    return shapely.box(
        x.min() - margin_x,
        max(y.min() - margin_y, lowest),
        x.max() + margin_x,
        min(y.max() + margin_y, highest),
    )


def _cut(parts: np.ndarray, frame: BaseGeometry) -> np.ndarray:
    """Choose by bounds first: making the whole world valid would take many seconds."""
    bounds = shapely.bounds(parts)
    west, south, east, north = frame.bounds
    near = parts[
        (bounds[:, 0] <= east)
        & (bounds[:, 2] >= west)
        & (bounds[:, 1] <= north)
        & (bounds[:, 3] >= south)
    ]
    return shapely.intersection(shapely.make_valid(near), frame)


def _unwrapped(polygon: shapely.Polygon) -> BaseGeometry:
    """Let rings that jump by more than half a turn run on beyond 180 degrees instead.

    An edge from exactly -180 to 180 is a real edge along a parallel (of a polar cap, say).
    """
    if np.ptp(shapely.bounds(polygon)[[0, 2]]) <= TURN_DEG / 2:
        return polygon
    rings = [shapely.get_coordinates(ring) for ring in (polygon.exterior, *polygon.interiors)]
    jumps = [np.abs(np.diff(ring[:, 0])) for ring in rings]
    if not any(((jump > TURN_DEG / 2) & (jump < TURN_DEG)).any() for jump in jumps):
        return polygon
    shell, *holes = (_run_on(ring) for ring in rings)
    centre = np.mean(shell[:, 0])
    return shapely.Polygon(shell, [_turned_to(hole, centre) for hole in holes])


def _run_on(ring: Float[np.ndarray, "points 2"]) -> Float[np.ndarray, "closed 2"]:
    lon = np.unwrap(ring[:, 0], period=TURN_DEG)
    run = np.column_stack([lon, ring[:, 1]])
    if abs(lon[-1] - lon[0]) < TURN_DEG / 2:
        return run
    # The ring goes once round the earth: it encloses the pole on its own side.
    pole = np.copysign(90.0, np.mean(ring[:, 1]))
    return np.vstack([run, [lon[-1], pole], [lon[0], pole], run[:1]])


def _turned_to(ring: Float[np.ndarray, "points 2"], lon: float) -> Float[np.ndarray, "points 2"]:
    turns = np.round((np.mean(ring[:, 0]) - lon) / TURN_DEG)
    return ring - [turns * TURN_DEG, 0.0]


def _only_polygons(land: BaseGeometry) -> BaseGeometry:
    """Leave out points and lines where land only touches the box."""
    parts = shapely.get_parts(land)
    parts = np.concatenate([shapely.get_parts(part) for part in parts]) if len(parts) else parts
    return shapely.union_all(parts[shapely.area(parts) > 0])
