"""Where a source grid's cells lie, and which of them a study's box needs."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple, Protocol, runtime_checkable

import numpy as np
import pyproj
from jaxtyping import Bool, Float, Int

from trackfit.faults import LayerError
from trackfit.frame import Plane
from trackfit.layers.lattice import HALF_CELL, clamped, invert_axis
from trackfit.layers.layer import Box, LayerRequest

MARGIN_CELLS = 18
TURN_DEG = 360.0
# The share of a cell by which rounding may push a node out of the outermost half cell.
EDGE_SLACK = 1e-6


class Located(NamedTuple):
    """Fractional (row, col) brought into the window; whether the point lay in the source."""

    at: Float[np.ndarray, "n 2"]
    inside: Bool[np.ndarray, " n"]


@dataclass(frozen=True)
class View:
    """What a study looks at: a box of its plane."""

    plane: Plane
    box: Box

    @cached_property
    def lattice_lonlat(self) -> tuple[np.ndarray, np.ndarray]:
        """Degrees of a lattice over the box."""
        return self.plane.to_lonlat(self.box.lattice_km())

    @cached_property
    def centre_lonlat(self) -> tuple[float, float]:
        """Degrees of the middle of the box."""
        lon, lat = self.plane.to_lonlat(self.box.centre_km)
        return float(lon[0]), float(lat[0])

    @property
    def extent(self) -> str:
        """The box in degrees, in words."""
        return extent_words(*self.lattice_lonlat)


@runtime_checkable
class Window(Protocol):
    """The part of a source grid near the box: rows and columns to load, in this order."""

    @property
    def rows(self) -> Int[np.ndarray, " rows"]:
        """Rows of the file."""

    @property
    def cols(self) -> Int[np.ndarray, " cols"]:
        """Columns of the file."""

    @property
    def absent(self) -> Bool[np.ndarray, "rows cols"]:
        """Cells that have no coordinates."""

    def locate(self, xy_km: Float[np.ndarray, "n 2"]) -> Located:
        """Find points of the plane in the window."""

    def centres_km(self, row: np.ndarray, col: np.ndarray) -> Float[np.ndarray, "n 2"]:
        """Return the plane positions of cells."""


@runtime_checkable
class Grid(Protocol):
    """A whole source grid."""

    def window(self, view: View, request: LayerRequest, margin: int = MARGIN_CELLS) -> Window:
        """Cut out what the box needs, `margin` cells more on each side."""


def shown_km(plane: Plane, lon: np.ndarray, lat: np.ndarray) -> Float[np.ndarray, "n 2"]:
    """Project cells, also far and missing ones, which the plane itself refuses: they become NaN."""
    transformer = pyproj.Transformer.from_crs(4326, plane.crs, always_xy=True)
    xy = np.column_stack(transformer.transform(lon, lat)) / 1000.0
    return np.where(np.isfinite(xy), xy, np.nan)


def extent_words(lon: np.ndarray, lat: np.ndarray) -> str:
    """Say an area in degrees; longitudes run eastwards and may pass 180."""
    lon, lat = np.ravel(lon), np.ravel(lat)
    good = np.isfinite(lon) & np.isfinite(lat)
    turned = np.unique(lon[good] % TURN_DEG)
    gaps = np.diff(turned, append=turned[0] + TURN_DEG)
    west = turned[(int(np.argmax(gaps)) + 1) % turned.size]
    west = west - TURN_DEG if west >= TURN_DEG / 2 else west
    east = west + TURN_DEG - gaps.max()
    return (
        f"lon {west:.2f} to {east:.2f}, lat {lat[good].min():.2f} to {lat[good].max():.2f} degrees"
    )


def separate(extent: str, view: View, request: LayerRequest) -> LayerError:
    """Return the error for a source that lies elsewhere."""
    return request.fault(
        f"covers {extent}, the study needs {view.extent}: they do not touch; take another file or "
        "check the signs and order of the coordinates"
    )


@dataclass(frozen=True)
class RectGrid:
    """Cells on straight axes: degrees, or metres of a projection.

    Attributes
    ----------
    x, y
        Cell centres in the file's order, degrees or metres.
    crs
        What x and y are in; None for WGS 84 longitude and latitude.
    """

    x: Float[np.ndarray, " cols"]
    y: Float[np.ndarray, " rows"]
    crs: pyproj.CRS | None = None

    @property
    def geographic(self) -> bool:
        """Whether the axes are longitude and latitude."""
        return self.crs is None or self.crs.is_geographic

    def from_lonlat(self, lon: np.ndarray, lat: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Turn WGS 84 degrees into the axes' coordinates (inf where there are none)."""
        if self.crs is None:
            return lon, lat
        return pyproj.Transformer.from_crs(4326, self.crs, always_xy=True).transform(lon, lat)

    def to_lonlat(self, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Turn the axes' coordinates into WGS 84 degrees."""
        if self.crs is None:
            return x, y
        return pyproj.Transformer.from_crs(self.crs, 4326, always_xy=True).transform(x, y)

    def window(self, view: View, request: LayerRequest, margin: int = MARGIN_CELLS) -> RectWindow:
        """Cut out what the box needs."""
        x, y = (np.asarray(part) for part in self.from_lonlat(*view.lattice_lonlat))
        good = np.isfinite(x) & np.isfinite(y)
        centre = view.centre_lonlat[0]
        if self.geographic:
            cols, xs = _turning_axis(self.x, centre, margin, request)
        else:
            cols, xs = _straight_axis(self.x, "x", request)
        rows, ys = _straight_axis(self.y, "latitude" if self.geographic else "y", request)
        whole = RectWindow(rows, cols, xs, ys, self, view.plane)
        across = invert_axis(xs, whole.near(x[good]))
        up = invert_axis(ys, y[good])
        if not (_touches(across, xs.size) & _touches(up, ys.size)).any() and not self._inside(
            whole, view
        ):
            raise separate(self._extent(), view, request)
        keep_cols, keep_rows = cell_span(across, xs.size, margin), cell_span(up, ys.size, margin)
        return RectWindow(
            rows[keep_rows], cols[keep_cols], xs[keep_cols], ys[keep_rows], self, view.plane
        )

    def _inside(self, whole: RectWindow, view: View) -> bool:
        """Tell whether a source smaller than the lattice's meshes lies in the box."""
        row, col = _sampled_cells(whole.rows.size, whole.cols.size)
        return bool(view.box.holds(whole.centres_km(row, col)).any())

    def _extent(self) -> str:
        row, col = _sampled_cells(self.y.size, self.x.size)
        return extent_words(*self.to_lonlat(self.x[col], self.y[row]))


@dataclass(frozen=True)
class RectWindow:
    """Part of a RectGrid; xs and ys rise, longitudes without a jump."""

    rows: Int[np.ndarray, " rows"]
    cols: Int[np.ndarray, " cols"]
    xs: Float[np.ndarray, " cols"]
    ys: Float[np.ndarray, " rows"]
    grid: RectGrid
    plane: Plane

    @property
    def absent(self) -> Bool[np.ndarray, "rows cols"]:
        """No cell lacks coordinates."""
        return np.zeros((self.rows.size, self.cols.size), bool)

    def near(self, x: np.ndarray) -> np.ndarray:
        """Turn longitudes by whole turns to where the window's axis is."""
        if not self.grid.geographic:
            return x
        middle = (self.xs[0] + self.xs[-1]) / 2
        return (x - middle + TURN_DEG / 2) % TURN_DEG - TURN_DEG / 2 + middle

    def locate(self, xy_km: Float[np.ndarray, "n 2"]) -> Located:
        """Find points of the plane in the window."""
        x, y = self.grid.from_lonlat(*self.plane.to_lonlat(xy_km))
        good = np.isfinite(x) & np.isfinite(y)
        x, y = np.where(good, x, self.xs[0]), np.where(good, y, self.ys[0])
        raw = np.column_stack([invert_axis(self.ys, y), invert_axis(self.xs, self.near(x))])
        index = clamped(raw, (self.ys.size, self.xs.size))
        return Located(index, good & (np.abs(raw - index) < EDGE_SLACK).all(axis=1))

    def centres_km(self, row: np.ndarray, col: np.ndarray) -> Float[np.ndarray, "n 2"]:
        """Return the plane positions of cells."""
        return shown_km(self.plane, *self.grid.to_lonlat(self.xs[col], self.ys[row]))


def _sampled_cells(rows: int, cols: int, most: int = 200) -> tuple[np.ndarray, np.ndarray]:
    row = np.unique(np.linspace(0, rows - 1, most).astype(int))
    col = np.unique(np.linspace(0, cols - 1, most).astype(int))
    grid = np.meshgrid(row, col, indexing="ij")
    return grid[0].ravel(), grid[1].ravel()


def _touches(index: np.ndarray, count: int) -> np.ndarray:
    return (index > -HALF_CELL) & (index < count - 1 + HALF_CELL)


def cell_span(index: np.ndarray, count: int, margin: int) -> slice:
    """Return the cells from the smallest to the largest index and `margin` more, at least two."""
    first = min(max(int(np.floor(index.min())) - margin, 0), count - 2)
    last = max(min(int(np.ceil(index.max())) + margin, count - 1), first + 1)
    return slice(first, last + 1)


def _straight_axis(
    values: np.ndarray, what: str, request: LayerRequest
) -> tuple[Int[np.ndarray, " n"], Float[np.ndarray, " n"]]:
    """Return the order that makes an axis rise, and the risen axis."""
    _check_axis(values, what, request)
    steps = np.diff(values)
    if not ((steps > 0).all() or (steps < 0).all()):
        raise request.fault(f"its {what} neither rises nor falls throughout; sort the grid")
    if what == "latitude" and np.abs(values).max() > 90 + 1e-6:
        worst = values[np.argmax(np.abs(values))]
        raise request.fault(
            f"latitude {worst:g} is outside -90 to 90; are the axes in metres or swapped?"
        )
    order = np.arange(values.size)[:: 1 if steps[0] > 0 else -1]
    return order, values[order]


def _turning_axis(
    lon: np.ndarray, centre: float, margin: int, request: LayerRequest
) -> tuple[Int[np.ndarray, " n"], Float[np.ndarray, " n"]]:
    """Return the order in which longitudes run eastwards through the study, and them, unwrapped.

    The seam goes into the widest gap; an axis that goes once round is cut opposite the study and
    continued by `margin` repeated columns, so that a box about a pole has no seam either.
    """
    _check_axis(lon, "longitude", request)
    if np.abs(lon).max() > 2 * TURN_DEG:
        raise request.fault(
            f"longitude {lon[np.argmax(np.abs(lon))]:g} is no degree; are the axes in metres?"
        )
    turned = np.round(lon % TURN_DEG, 9) % TURN_DEG
    order = np.argsort(turned, kind="stable")
    repeats = np.diff(turned[order]) < 1e-6
    if repeats.sum() > 1 or (repeats.any() and abs(lon[0] - lon[-1]) < TURN_DEG / 2):
        at = turned[order][int(np.argmax(repeats))]
        raise request.fault(f"longitude {at:g} stands twice; every column needs its own")
    order = order[np.append(True, ~repeats)]
    if order.size < 2:
        raise request.fault("it has one column only; a layer needs at least 2 x 2 cells")
    turned = turned[order]
    gaps = np.diff(turned, append=turned[0] + TURN_DEG)
    if gaps.max() > 1.5 * np.median(gaps):
        start, extra = (int(np.argmax(gaps)) + 1) % order.size, 0
    else:
        start = int(np.searchsorted(turned, (centre - TURN_DEG / 2) % TURN_DEG)) % order.size
        extra = min(margin, order.size)
    steps = np.arange(start - extra, start + order.size + extra)
    xs = turned[steps % order.size] + TURN_DEG * (steps // order.size)
    return order[steps % order.size], xs


def _check_axis(values: np.ndarray, what: str, request: LayerRequest) -> None:
    if values.size < 2:
        raise request.fault(
            f"its {what} has {values.size} value only; a layer needs at least 2 x 2 cells"
        )
    if not np.isfinite(values).all():
        raise request.fault(f"its {what} has missing values")
