"""What a layer, a request for one, a box of the plane and a coast are."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path

import numpy as np
import shapely
from jaxtyping import Bool, Float
from shapely.geometry.base import BaseGeometry

from trackfit.faults import LayerError


@dataclass(frozen=True)
class Box:
    """A rectangle of the plane, in km.

    Raises
    ------
    LayerError
        If it has no area or a bound is not finite.
    """

    x_min: float
    y_min: float
    x_max: float
    y_max: float

    def __post_init__(self) -> None:
        bounds = (self.x_min, self.y_min, self.x_max, self.y_max)
        if not (np.isfinite(bounds).all() and self.x_min < self.x_max and self.y_min < self.y_max):
            raise LayerError(
                f"the study area {bounds} km is empty: it needs x_min < x_max, y_min < y_max"
            )

    @property
    def centre_km(self) -> Float[np.ndarray, "1 2"]:
        """The middle of the box."""
        return np.array([[(self.x_min + self.x_max) / 2, (self.y_min + self.y_max) / 2]])

    def lattice_km(self, steps: int = 64) -> Float[np.ndarray, "n 2"]:
        """Return (steps + 1)^2 evenly spaced points of the box, its edges included."""
        x = np.linspace(self.x_min, self.x_max, steps + 1)
        y = np.linspace(self.y_min, self.y_max, steps + 1)
        return np.column_stack([part.ravel() for part in np.meshgrid(x, y)])

    def holds(self, xy_km: Float[np.ndarray, "n 2"]) -> Bool[np.ndarray, " n"]:
        """Tell which points lie in the box, edges included."""
        x, y = np.asarray(xy_km, float).T
        return (x >= self.x_min) & (x <= self.x_max) & (y >= self.y_min) & (y <= self.y_max)

    def clipped(self, other: Box) -> Box:
        """Return the part of this box that lies in the other."""
        return Box(
            max(self.x_min, other.x_min),
            max(self.y_min, other.y_min),
            min(self.x_max, other.x_max),
            min(self.y_max, other.y_max),
        )


@dataclass(frozen=True)
class LayerRequest:
    """Which part of which file becomes a layer.

    Attributes
    ----------
    name
        The layer's name in the study; messages use it.
    file
        A NetCDF or GeoTIFF file.
    variable
        The scalar variable of a NetCDF file; may be left out where there is only one.
    east, north
        The two components of a current: NetCDF variables, or band numbers of a GeoTIFF.
    unit
        The unit the file's values have, where the file says none or a wrong one.
    to_unit
        The unit a scalar layer is converted to; currents always become km/h.
    factor
        Multiplies the values after conversion (-1 turns heights into depths).
    resolution_km
        Spacing of the plane grid; the source's own spacing if None.
    band
        Band of a GeoTIFF for a scalar layer, from 1.
    select
        For each further dimension (a depth level), the value at which to take it.
    """

    name: str
    file: Path
    variable: str | None = None
    east: str | None = None
    north: str | None = None
    unit: str | None = None
    to_unit: str | None = None
    factor: float = 1.0
    resolution_km: float | None = None
    band: int = 1
    select: Mapping[str, float] = field(default_factory=dict)

    @property
    def is_current(self) -> bool:
        """Whether the layer has an east and a north component."""
        return self.east is not None or self.north is not None

    @property
    def place(self) -> str:
        """How messages begin: the layer and its file."""
        return f"layer '{self.name}' ({self.file})"

    def fault(self, text: str) -> LayerError:
        """Return the error that says what is wrong with this layer."""
        return LayerError(f"{self.place}: {text}")


@dataclass(frozen=True)
class Layer:
    """A variable on a square grid of the plane, fixed or at several times.

    Attributes
    ----------
    x0_km, y0_km, spacing_km
        Position of node [0, 0] and the distance between nodes; rows go up y, columns up x.
    hours
        Hours since 1970-01-01T00:00Z, rising, one entry for a fixed layer.
    values
        (times, ny, nx, components), finite; one component, or the current's plane x and y in km/h.
    covered
        Node lies inside the source's area; elsewhere values repeat the source's edge.
    filled
        Node's nearest source cell was missing at one of the times at least.
    share_filled
        Share of the source's cells in the box (over all times) that were missing.
    source_hours
        First and last time that the source has, read or not.
    """

    name: str
    unit: str
    x0_km: float
    y0_km: float
    spacing_km: float
    hours: Float[np.ndarray, " times"]
    values: Float[np.ndarray, "times ny nx components"]
    covered: Bool[np.ndarray, "ny nx"]
    filled: Bool[np.ndarray, "ny nx"]
    share_filled: float
    source: str
    source_hours: tuple[float, float] | None = None

    @property
    def own_span_hours(self) -> tuple[float, float]:
        """First and last time of the source, of which `hours` may be a part."""
        return self.source_hours or (float(self.hours[0]), float(self.hours[-1]))

    @property
    def fixed(self) -> bool:
        """Whether the layer does not change in time."""
        return self.hours.size == 1

    def covers(self, xy_km: Float[np.ndarray, "n 2"]) -> Bool[np.ndarray, " n"]:
        """Tell for which points all nodes of the surrounding square are covered."""
        at = (np.asarray(xy_km, float) - [self.x0_km, self.y0_km]) / self.spacing_km
        ny, nx = self.covered.shape
        # A point on the last row or column belongs to the last square.
        inside = np.all((at >= 0) & (at <= [nx - 1, ny - 1]), axis=1)
        col, row = np.clip(np.where(inside[:, None], at, 0), 0, [nx - 2, ny - 2]).astype(int).T
        squares = (
            self.covered[:-1, :-1]
            & self.covered[1:, :-1]
            & self.covered[:-1, 1:]
            & self.covered[1:, 1:]
        )
        return inside & squares[row, col]

    def covers_time(self, hours: Float[np.ndarray, " n"]) -> Bool[np.ndarray, " n"]:
        """Tell which times (hours since 1970) lie between the layer's first and last."""
        hours = np.asarray(hours, float)
        if self.fixed:
            return np.ones(hours.shape, bool)
        return (hours >= self.hours[0]) & (hours <= self.hours[-1])


@dataclass(frozen=True)
class Coast:
    """Land in the plane (km), as far as the box it was read for: land beyond it is not seen.

    Attributes
    ----------
    land
        A valid polygon or multipolygon, empty where there is no land in the box.
    """

    land: BaseGeometry
    source: str

    @cached_property
    def _prepared(self) -> BaseGeometry:
        shapely.prepare(self.land)
        return self.land

    @cached_property
    def _shore(self) -> shapely.STRtree:
        """Every segment of the outline: far faster to search than one long outline."""
        rings = shapely.get_rings(shapely.get_parts(self.land))
        points, ring = shapely.get_coordinates(rings, return_index=True)
        joined = ring[:-1] == ring[1:]
        pairs = np.stack([points[:-1][joined], points[1:][joined]], axis=1)
        return shapely.STRtree(shapely.linestrings(pairs))

    def contains(self, xy_km: Float[np.ndarray, "n 2"]) -> Bool[np.ndarray, " n"]:
        """Tell which points lie on land."""
        x, y = np.asarray(xy_km, float).T
        return np.asarray(shapely.contains_xy(self._prepared, x, y))

    def distance_km(self, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, " n"]:
        """Return the plane distance to the nearest land: 0 on land, inf where there is none."""
        xy = np.asarray(xy_km, float)
        return np.where(self.contains(xy), 0.0, self._outline_km(xy))

    def inland_km(self, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, " n"]:
        """Return how far inside land each point lies (plane distance to its edge); 0 at sea.

        The edge of the box counts as an edge of land: further inland than the box reaches, the
        distance is a lower bound.
        """
        xy = np.asarray(xy_km, float)
        return np.where(self.contains(xy), self._outline_km(xy), 0.0)

    def _outline_km(self, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, " n"]:
        distance = np.full(len(xy_km), np.inf)
        if self.land.is_empty or not len(xy_km):
            return distance
        index, found = self._shore.query_nearest(
            shapely.points(xy_km), return_distance=True, all_matches=False
        )
        distance[index[0]] = found
        return distance
