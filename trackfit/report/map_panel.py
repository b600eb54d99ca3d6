"""The map of one tag, in the plane's kilometres."""

from dataclasses import dataclass
from typing import Any

import matplotlib.patheffects as effects
import numpy as np
from jaxtyping import Bool, Float
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection
from matplotlib.contour import ContourSet
from matplotlib.lines import Line2D
from matplotlib.patches import PathPatch
from matplotlib.path import Path as Outline
from matplotlib.text import Text
from matplotlib.ticker import MaxNLocator
from scipy.spatial import cKDTree
from shapely import Polygon, box, get_parts, intersection
from shapely.geometry.base import BaseGeometry

from trackfit.frame import Plane
from trackfit.layers.layer import Layer
from trackfit.report import style
from trackfit.report.scene import Scene
from trackfit.results.geometry import ellipse_rings
from trackfit.results.inputs import TrackLike

ELLIPSES_SHOWN = 24
"""At most so many 95 % ellipses are drawn, evenly in time."""
_DRAWS_SHOWN = 20
_EDGED_FIXES = 400
_MARGIN = 0.07
_LEAST_SIDE_KM = 0.5
_LABELLED_SHARE = 0.12  # contours shorter than this share of the map get no label
_LABEL_ROOM = 0.035
_SHAPES = (0.7, 1.5)  # narrowest and widest map, width over height
HALO: list[Any] = [effects.withStroke(linewidth=2.2, foreground="white")]
"""A white rim that keeps small texts readable over anything."""


@dataclass(frozen=True)
class Frame:
    """Edges of a map in plane km."""

    x_min: float
    y_min: float
    x_max: float
    y_max: float

    @property
    def width(self) -> float:
        """Width in km."""
        return self.x_max - self.x_min

    @property
    def height(self) -> float:
        """Height in km."""
        return self.y_max - self.y_min

    def holds(self, xy_km: Float[np.ndarray, "n 2"]) -> Bool[np.ndarray, " n"]:
        """Tell which points lie on the map."""
        low, high = (self.x_min, self.y_min), (self.x_max, self.y_max)
        return np.asarray(((xy_km >= low) & (xy_km <= high)).all(axis=1))


def frame_of(
    track: TrackLike,
    fixes_lonlat: Float[np.ndarray, "n 2"],
    plane: Plane,
    colony_lonlat: tuple[float, float] | None,
) -> Frame:
    """Return a frame with room for the path, its ellipses, the fixes and the colony.

    A long narrow track gets room at its sides, so that the map stays readable.
    """
    rings = _rings_km(track, np.arange(len(track.table)), plane).reshape(-1, 2)
    marks = np.vstack([fixes_lonlat, np.reshape(colony_lonlat or [], (-1, 2))])
    points = np.vstack([rings, plane.to_plane(marks[:, 0], marks[:, 1])])
    low, high = points.min(axis=0), points.max(axis=0)
    middle = (low + high) / 2
    side = np.maximum((high - low) * (1 + 2 * _MARGIN), _LEAST_SIDE_KM)
    side = np.maximum(side, [_SHAPES[0] * side[1], side[0] / _SHAPES[1]])
    (x_min, y_min), (x_max, y_max) = middle - side / 2, middle + side / 2
    return Frame(float(x_min), float(y_min), float(x_max), float(y_max))


def draw_map(
    axes: Axes,
    frame: Frame,
    track: TrackLike,
    used_lonlat: Float[np.ndarray, "n 2"],
    aside_lonlat: Float[np.ndarray, "m 2"],
    scene: Scene,
) -> int:
    """Draw the map; return how many of the fixes set aside lie outside of it."""
    plane = scene.plane
    path = plane.to_plane(track.table["lon"].to_numpy(float), track.table["lat"].to_numpy(float))
    used = plane.to_plane(used_lonlat[:, 0], used_lonlat[:, 1])
    draw_ground(axes, frame, scene, path)
    _draw_drawn_paths(axes, track, plane)
    _draw_ellipses(axes, track, plane)
    draw_path(axes, path, track.table["in_gap"].to_numpy(bool))
    _draw_fixes(axes, used)
    shown = _draw_set_aside(axes, frame, aside_lonlat, plane)
    _draw_ends(axes, path, scene)
    draw_scale_bar(axes, frame, np.vstack([path, used]))
    return len(aside_lonlat) - shown


def draw_ground(axes: Axes, frame: Frame, scene: Scene, busy_km: Float[np.ndarray, "n 2"]) -> None:
    """Set up an empty map: its edges and axes, contours and land; labels keep off busy places."""
    axes.set(xlim=(frame.x_min, frame.x_max), ylim=(frame.y_min, frame.y_max))
    axes.set_aspect("equal", adjustable="box")
    axes.set(title="Map in the local plane (north is up at its centre)")
    axes.set(xlabel="east (km)", ylabel="north (km)")
    axes.xaxis.set_major_locator(MaxNLocator(6))
    axes.yaxis.set_major_locator(MaxNLocator(7))
    if scene.depth is not None:
        _draw_contours(axes, frame, scene.depth, busy_km)
    if scene.coast is not None:
        _draw_land(axes, frame, scene.coast.land)


def _rings_km(track: TrackLike, rows: np.ndarray, plane: Plane) -> Float[np.ndarray, "n v 2"]:
    names = ("lon", "lat", "ellipse95_major_m", "ellipse95_minor_m", "ellipse_bearing_deg")
    rings = ellipse_rings(*(track.table[name].to_numpy(float)[rows] for name in names))
    flat = plane.to_plane(rings[..., 0].ravel(), rings[..., 1].ravel())
    return flat.reshape(rings.shape)


def _draw_contours(
    axes: Axes, frame: Frame, layer: Layer, busy_km: Float[np.ndarray, "n 2"]
) -> None:
    """Draw labelled contours of the part of a layer that lies on the map and has data."""
    _, rows, columns, _ = layer.values.shape
    x = layer.x0_km + layer.spacing_km * np.arange(columns)
    y = layer.y0_km + layer.spacing_km * np.arange(rows)
    on_x = (x >= frame.x_min - layer.spacing_km) & (x <= frame.x_max + layer.spacing_km)
    on_y = (y >= frame.y_min - layer.spacing_km) & (y <= frame.y_max + layer.spacing_km)
    part = np.ix_(on_y, on_x)
    values = np.ma.masked_where(
        (layer.filled | ~layer.covered)[part], layer.values[0, ..., 0][part]
    )
    if min(values.shape) < 2 or values.count() < 4:
        return
    ticks = MaxNLocator(7).tick_values(float(values.min()), float(values.max()))
    levels = ticks[(ticks > values.min()) & (ticks < values.max())]
    if not len(levels):
        return
    lines = axes.contour(
        x[on_x], y[on_y], values, levels, colors=style.CONTOUR, linewidths=0.7,
        linestyles="solid", zorder=1,
    )  # fmt: skip
    labels = axes.clabel(
        lines, fontsize=7, fmt="%g", colors="#4F6B7A", inline_spacing=3, zorder=5.5,
        manual=_quiet_places(lines, frame, busy_km),
    )  # fmt: skip
    for label in labels:
        label.set_path_effects(HALO)
    text = style.with_unit(layer.name, layer.unit)
    axes.add_line(Line2D([], [], color=style.CONTOUR, linewidth=0.9, label=text))


def _quiet_places(
    lines: ContourSet, frame: Frame, busy_km: Float[np.ndarray, "n 2"]
) -> list[tuple[float, float]]:
    """A place for a label on each long contour, furthest from what is busy and from the others."""
    low, size = np.array([frame.x_min, frame.y_min]), np.array([frame.width, frame.height])
    taken = cKDTree(busy_km)
    places: list[np.ndarray] = []
    for contour in (line for level in lines.allsegs for line in level):
        at = (contour - low) / size
        inside = contour[((at > 0.05) & (at < 0.95)).all(axis=1)]
        if len(inside) < 2 or np.ptp(inside, axis=0).max() < _LABELLED_SHARE * frame.width:
            continue
        room = taken.query(inside)[0]
        if places:
            room = np.minimum(room, cKDTree(np.array(places)).query(inside)[0])
        best = int(np.argmax(room))
        if room[best] > _LABEL_ROOM * frame.width:
            places.append(inside[best])
    return [(float(x), float(y)) for x, y in places]


def _draw_land(axes: Axes, frame: Frame, land: BaseGeometry) -> None:
    view = box(frame.x_min, frame.y_min, frame.x_max, frame.y_max)
    parts = get_parts(intersection(land, view.buffer(0.05 * frame.width)))
    label = "land"
    for part in (p for p in parts if p.geom_type == "Polygon"):
        patch = PathPatch(_outline(part), facecolor=style.LAND, edgecolor=style.SHORE)
        patch.set(linewidth=0.5, zorder=2, label=label)
        axes.add_patch(patch)
        label = "_land"


def _outline(polygon: Polygon) -> Outline:
    rings = [polygon.exterior, *polygon.interiors]
    paths = [Outline(np.asarray(ring.coords)[:, :2], closed=True) for ring in rings]
    return Outline.make_compound_path(*paths)


def _draw_drawn_paths(axes: Axes, track: TrackLike, plane: Plane) -> None:
    if len(track.table) < 2:
        return
    label = "paths drawn"
    for draw in track.draws_lonlat[:_DRAWS_SHOWN]:
        x, y = plane.to_plane(draw[:, 0], draw[:, 1]).T
        axes.plot(x, y, color=style.GREY, linewidth=0.45, alpha=0.4, zorder=3, label=label)
        label = "_paths drawn"


def _draw_ellipses(axes: Axes, track: TrackLike, plane: Plane) -> None:
    count = len(track.table)
    rows = np.unique(np.linspace(0, count - 1, min(count, ELLIPSES_SHOWN)).round().astype(int))
    rings = PolyCollection(list(_rings_km(track, rows, plane)), facecolors="none")
    rings.set(edgecolor=style.BLUE, linewidth=0.7, alpha=0.65, zorder=4)
    axes.add_collection(rings, autolim=False)
    word = "95 % ellipse" if len(rows) == count else "95 % ellipse (some times)"
    axes.add_line(Line2D([], [], color=style.BLUE, linewidth=0.7, alpha=0.8, label=word))


def draw_path(axes: Axes, path: Float[np.ndarray, "n 2"], in_gap: Bool[np.ndarray, " n"]) -> None:
    """Draw the mean path; every step that begins or ends in a gap is dashed."""
    dashed = in_gap[1:] | in_gap[:-1]
    turns = np.flatnonzero(np.diff(dashed)) + 1
    labelled: set[str] = set()
    for run in np.split(np.arange(len(dashed)), turns):
        if not len(run):
            continue
        kind = "mean path in a gap" if dashed[run[0]] else "mean path"
        x, y = path[run[0] : run[-1] + 2].T
        line = axes.plot(x, y, color=style.BLUE, linewidth=1.5, zorder=6)[0]
        line.set(linestyle=(0, (3, 2)) if dashed[run[0]] else "-")
        line.set_label(kind if kind not in labelled else "_" + kind)
        labelled.add(kind)


def _draw_fixes(axes: Axes, used: Float[np.ndarray, "n 2"]) -> None:
    if len(used):
        axes.scatter(used[:, 0], used[:, 1], zorder=7, label="fix in use", **fix_marks(len(used)))


def fix_marks(count: int) -> dict[str, Any]:
    """Return how fixes are marked: the more there are, the smaller and fainter."""
    size = float(np.clip(1200 / max(count, 1), 2.5, 14))
    alpha = float(np.clip(60 / max(count, 1), 0.35, 0.9))
    edge = {"edgecolors": style.FIX_EDGE, "linewidths": 0.4 if count <= _EDGED_FIXES else 0.0}
    return {"s": size, "alpha": alpha, "facecolors": style.ORANGE, **edge}


def _draw_set_aside(
    axes: Axes, frame: Frame, lonlat: Float[np.ndarray, "m 2"], plane: Plane
) -> int:
    """Mark the fixes set aside that lie on the map; return how many do."""
    near = _near(lonlat, plane)
    points = plane.to_plane(near[:, 0], near[:, 1])
    shown = points[frame.holds(points)]
    if len(shown):
        axes.scatter(*shown.T, zorder=5, label="fix set aside", **ASIDE_MARKS)
    return len(shown)


ASIDE_MARKS: dict[str, Any] = {
    "marker": "x", "s": 22, "color": style.BLACK, "linewidths": 0.9, "alpha": 0.8,
}  # fmt: skip


def _near(lonlat: Float[np.ndarray, "m 2"], plane: Plane) -> Float[np.ndarray, "k 2"]:
    """Keep points the plane can show: a wild fix may lie on the far side of the globe."""
    centre = plane.to_lonlat(np.zeros((1, 2)))
    lon, lat = np.radians(lonlat).T
    lon0, lat0 = np.radians([float(np.ravel(part)[0]) for part in centre])
    cosine = np.sin(lat) * np.sin(lat0) + np.cos(lat) * np.cos(lat0) * np.cos(lon - lon0)
    return lonlat[cosine > 0]


def _draw_ends(axes: Axes, path: Float[np.ndarray, "n 2"], scene: Scene) -> None:
    edge: dict[str, Any] = {"edgecolors": style.BLACK, "linewidths": 1.0, "zorder": 8}
    word = "start" if len(path) > 1 else "position"
    axes.scatter(path[:1, 0], path[:1, 1], marker="o", s=46, color="white", label=word, **edge)
    if len(path) > 1:
        axes.scatter(
            path[-1:, 0], path[-1:, 1], marker="s", s=40, color=style.BLACK, label="end", **edge
        )
    if scene.colony_lonlat is not None:
        lon, lat = (np.array([value]) for value in scene.colony_lonlat)
        x, y = scene.plane.to_plane(lon, lat)[0]
        label = style.as_plain_text(scene.colony_name)
        axes.scatter(x, y, marker="^", s=64, color=style.ORANGE, label=label, **edge)


def draw_scale_bar(axes: Axes, frame: Frame, busy: Float[np.ndarray, "n 2"]) -> None:
    """Draw a bar of a round length in the emptiest corner."""
    length = round_length_km(frame.width * 0.24)
    share = length / frame.width
    labels = [text.get_position() for text in axes.texts if type(text) is Text]
    busy = np.vstack([busy, np.reshape(np.array(labels), (-1, 2))])
    at = (busy - [frame.x_min, frame.y_min]) / [frame.width, frame.height]
    corners = [(0.04, 0.04), (0.96 - share, 0.04), (0.04, 0.93), (0.96 - share, 0.93)]
    x, y = min(corners, key=lambda corner: _crowd(at, corner, share))
    bar: dict[str, Any] = {"transform": axes.transAxes, "color": style.BLACK, "zorder": 9}
    axes.plot(
        [x, x + share], [y, y], linewidth=2.4, solid_capstyle="butt", path_effects=HALO, **bar
    )
    words = f"{length:g} km" if length >= 1 else f"{1000 * length:g} m"
    text = axes.text(x + share / 2, y + 0.012, words, ha="center", va="bottom", fontsize=8, **bar)
    text.set_path_effects(HALO)


def _crowd(at: Float[np.ndarray, "n 2"], corner: tuple[float, float], share: float) -> int:
    low = np.array(corner) - 0.03
    high = np.array([corner[0] + share + 0.03, corner[1] + 0.09])
    return int(((at >= low) & (at <= high)).all(axis=1).sum())


def round_length_km(longest_km: float) -> float:
    """Return the longest of 1, 2, 5 times a power of ten that is not over the given length.

    Examples
    --------
    >>> round_length_km(34.0), round_length_km(0.7)
    (20.0, 0.5)
    """
    power = 10.0 ** np.floor(np.log10(longest_km))
    return float(max(step * power for step in (1, 2, 5) if step * power <= longest_km * 1.000001))
