"""Ellipses and lines on the ground, cut where maps are cut: at the antimeridian.

Everything here is WGS 84: lengths are geodesic metres, bearings are clockwise from true north.
"""

from collections.abc import Sequence

import numpy as np
import shapely
from jaxtyping import Float
from pyproj import Geod

WGS84 = Geod(ellps="WGS84")
VERTICES = 72
"""Vertices of an ellipse that is drawn; the polygon then holds 0.9987 of the ellipse's area."""
POLYGON_VERTICES = 36
"""Vertices of an ellipse in a file: it is widened by a quarter of a percent to the right area."""
POLAR_VERTICES = 720
"""Vertices where meridians converge, so that no side spans many degrees of longitude."""
_WIDE_SIDE_DEG = 10.0
_LEAST_AXIS_M = 0.01
_WORLD = shapely.box(-180.0, -90.0, 180.0, 90.0)


def ellipse_rings(
    lon: Float[np.ndarray, " n"],
    lat: Float[np.ndarray, " n"],
    major_m: Float[np.ndarray, " n"],
    minor_m: Float[np.ndarray, " n"],
    bearing_deg: Float[np.ndarray, " n"],
    *,
    vertices: int = VERTICES,
    widened: float = 1.0,
) -> Float[np.ndarray, "n v 2"]:
    """Vertices (lon, lat in degrees) of ellipses laid on the ground, counter-clockwise, not closed.

    The vertex at angle f stands at the end of the geodesic that leaves the centre with length
    r = hypot(M cos f, m sin f) and azimuth bearing - atan2(m sin f, M cos f): the direct problem
    of Karney (2013), J. Geod. 87:43-55. Semi-axes under 1 cm are drawn as 1 cm; both are then made
    `widened` times as long.
    """
    angle = 2 * np.pi * np.arange(vertices) / vertices
    along = widened * np.maximum(major_m, _LEAST_AXIS_M)[:, None] * np.cos(angle)
    across = widened * np.maximum(minor_m, _LEAST_AXIS_M)[:, None] * np.sin(angle)
    azimuth = np.asarray(bearing_deg)[:, None] - np.degrees(np.arctan2(across, along))
    lons, lats = (np.broadcast_to(np.asarray(a)[:, None], along.shape) for a in (lon, lat))
    ring_lon, ring_lat, _ = WGS84.fwd(lons, lats, azimuth, np.hypot(along, across))
    return np.stack([ring_lon, ring_lat], axis=-1)


def equal_area_factor(vertices: int) -> float:
    """How much longer axes must be for the polygon to have the ellipse's area.

    The vertices cut the ellipse into triangles of area a b sin(2 pi / v) / 2.
    """
    return float(np.sqrt(2 * np.pi / (vertices * np.sin(2 * np.pi / vertices))))


def ellipse_polygons(
    lon: Float[np.ndarray, " n"],
    lat: Float[np.ndarray, " n"],
    major_m: Float[np.ndarray, " n"],
    minor_m: Float[np.ndarray, " n"],
    bearing_deg: Float[np.ndarray, " n"],
) -> np.ndarray:
    """Ellipses on the ground as an (n,) object array of `shapely.MultiPolygon`, in degrees.

    They are cut at the antimeridian; one that holds a pole reaches along the whole parallel up
    (or down) to the pole. Outer rings are counter-clockwise. Each has its ellipse's area.

    Examples
    --------
    >>> import numpy as np
    >>> one = np.array([1000.0])
    >>> shape = ellipse_polygons(np.array([179.999]), np.array([-17.0]), one, one / 2, one * 0)
    >>> len(shape[0].geoms)
    2
    """
    axes = [np.asarray(a, dtype=float) for a in (lon, lat, major_m, minor_m, bearing_deg)]
    if not len(axes[0]):
        return np.empty(0, dtype=object)
    rings = _area_true(axes, POLYGON_VERTICES)
    whole = shapely.multipolygons(shapely.polygons(rings)[:, None])
    step = np.abs(np.diff(rings[..., 0], axis=1, append=rings[:, :1, 0]))
    side = np.minimum(step, 360 - step).max(axis=1)
    for i in np.flatnonzero((step.max(axis=1) > 180) | (side > _WIDE_SIDE_DEG)):
        n = POLAR_VERTICES if side[i] > _WIDE_SIDE_DEG else POLYGON_VERTICES
        whole[i] = cut_ring(_area_true([a[i : i + 1] for a in axes], n)[0])
    return whole


def _area_true(axes: Sequence[np.ndarray], vertices: int) -> Float[np.ndarray, "n v 2"]:
    return ellipse_rings(*axes, vertices=vertices, widened=equal_area_factor(vertices))


def cut_ring(ring: Float[np.ndarray, "v 2"]) -> shapely.MultiPolygon:
    """Return the region to the left of a ring in degrees (not closed), cut at the antimeridian."""
    lon = np.unwrap(np.append(ring[:, 0], ring[0, 0]), period=360)
    lat = np.append(ring[:, 1], ring[0, 1])
    turn = round((lon[-1] - lon[0]) / 360)
    outline = np.column_stack([lon, lat]) if not turn else _round_the_pole(lon, lat, turn)
    shape = shapely.make_valid(shapely.Polygon(outline))
    middle = 360 * round(lon.mean() / 360)
    shifts = (middle,) if turn else (middle - 360, middle, middle + 360)
    return _polygons_only([shapely.intersection(_moved(shape, -s), _WORLD) for s in shifts])


def _round_the_pole(
    lon: Float[np.ndarray, " v"], lat: Float[np.ndarray, " v"], turn: int
) -> Float[np.ndarray, "w 2"]:
    """Close a curve that goes once round the globe along the pole it holds.

    A curve running east with the region at its left holds the north pole, one running west the
    south pole. Three copies side by side cover every cut of the world.
    """
    pole = 90.0 * np.sign(turn)
    copies = np.concatenate(
        [lon[:-1] + 360 * turn * k for k in (-1, 0, 1)] + [lon[-1:] + 360 * turn]
    )
    curve = np.column_stack([copies, np.append(np.tile(lat[:-1], 3), lat[-1])])
    return np.vstack([curve, [[copies[-1], pole], [copies[0], pole]]])


def _moved(shape: shapely.Geometry, degrees: float) -> shapely.Geometry:
    return shapely.transform(shape, lambda xy: xy + np.array([degrees, 0.0]))


def _polygons_only(shapes: Sequence[shapely.Geometry]) -> shapely.MultiPolygon:
    """Drop the points and lines a cut may leave; turn outer rings counter-clockwise."""
    pieces = [p for s in shapes for p in getattr(s, "geoms", [s])]
    parts = [p for p in pieces if p.geom_type == "Polygon" and p.area > 0]
    return shapely.orient_polygons(shapely.MultiPolygon(parts), exterior_cw=False)


def cut_line(lon: Float[np.ndarray, " n"], lat: Float[np.ndarray, " n"]) -> shapely.MultiLineString:
    """Line through points in degrees, cut at the antimeridian; empty for fewer than two points.

    Each step goes the short way round. Where it crosses, both pieces end at the latitude found
    by linear interpolation (RFC 7946, section 3.1.9).
    """
    if len(lon) < 2:
        return shapely.MultiLineString()
    east = np.unwrap(np.asarray(lon, dtype=float), period=360)
    world = np.floor((east + 180) / 360)
    pieces: list[np.ndarray] = []
    start = np.empty((0, 2))
    first = 0
    for i in np.flatnonzero(np.diff(world)).tolist():
        edge = 360 * max(world[i], world[i + 1]) - 180
        share = (edge - east[i]) / (east[i + 1] - east[i])
        at = lat[i] + share * (lat[i + 1] - lat[i])
        piece = _in_world(east[first : i + 1], lat[first : i + 1], world[i])
        pieces.append(np.vstack([start, piece, [[edge - 360 * world[i], at]]]))
        start = np.array([[edge - 360 * world[i + 1], at]])
        first = i + 1
    pieces.append(np.vstack([start, _in_world(east[first:], lat[first:], world[-1])]))
    return shapely.MultiLineString([p for p in pieces if _has_length(p)])


def _in_world(
    east: Float[np.ndarray, " n"], lat: Float[np.ndarray, " n"], world: float
) -> Float[np.ndarray, "n 2"]:
    return np.column_stack([east - 360 * world, lat])


def _has_length(piece: Float[np.ndarray, "n 2"]) -> bool:
    return len(piece) > 1 and bool(np.any(piece != piece[0]))
