"""Source grids whose cells each have their own longitude and latitude."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from jaxtyping import Bool, Float, Int
from scipy.spatial import cKDTree

from trackfit.frame import geodesic_km
from trackfit.layers.fill import fill
from trackfit.layers.grids import (
    EDGE_SLACK,
    MARGIN_CELLS,
    Located,
    View,
    cell_span,
    extent_words,
    separate,
    shown_km,
)
from trackfit.layers.lattice import invert_surface
from trackfit.layers.layer import LayerRequest

EARTH_KM = 6371.0


@dataclass(frozen=True)
class CurvedGrid:
    """Cells with a longitude and a latitude each (NaN where the model has no cell)."""

    lon: Float[np.ndarray, "rows cols"]
    lat: Float[np.ndarray, "rows cols"]

    def window(self, view: View, request: LayerRequest, margin: int = MARGIN_CELLS) -> CurvedWindow:
        """Cut out what the box needs."""
        self._check(request)
        away = self._away_km(view)
        row, col = np.unravel_index(int(np.nanargmin(away)), away.shape)
        order = self._column_order(int(col))
        cell = self._cell_km(int(row), int(col))
        near = away[:, order] <= _radius_km(view) + margin * cell
        if not near.any():
            raise separate(extent_words(self.lon, self.lat), view, request)
        rows = cell_span(np.flatnonzero(near.any(axis=1)), self.lon.shape[0], 1)
        cols = order[cell_span(np.flatnonzero(near.any(axis=0)), order.size, 1)]
        part = np.ix_(np.arange(self.lon.shape[0])[rows], cols)
        xy = shown_km(view.plane, self.lon[part].ravel(), self.lat[part].ravel())
        cells = xy.reshape(*self.lon[part].shape, 2)
        absent = ~np.isfinite(cells).all(axis=2)
        filled = fill(np.where(absent, np.nan, np.moveaxis(cells, -1, 0)))
        window = CurvedWindow(part[0].ravel(), cols, np.moveaxis(filled, 0, -1), absent)
        if not (view.box.holds(xy).any() or window.locate(view.box.lattice_km(16)).inside.any()):
            raise separate(extent_words(self.lon, self.lat), view, request)
        return window

    def _check(self, request: LayerRequest) -> None:
        if not (np.isfinite(self.lon) & np.isfinite(self.lat)).any():
            raise request.fault("its longitudes and latitudes are all missing")
        if np.nanmax(np.abs(self.lat)) > 90 + 1e-6:
            raise request.fault(
                f"latitude {np.nanmax(np.abs(self.lat)):g} (either sign) is outside -90 to 90"
            )

    def _away_km(self, view: View) -> Float[np.ndarray, "rows cols"]:
        """Great-circle distance of every cell from the middle of the box."""
        return EARTH_KM * 2 * np.arcsin(_chord(self.lon, self.lat, *view.centre_lonlat) / 2)

    def _cell_km(self, row: int, col: int) -> float:
        """Longest side of the cells about one cell."""
        rows = slice(max(row - 1, 0), row + 2)
        cols = slice(max(col - 1, 0), col + 2)
        lon, lat = self.lon[rows, cols], self.lat[rows, cols]
        sides = [
            geodesic_km(lon[1:].ravel(), lat[1:].ravel(), lon[:-1].ravel(), lat[:-1].ravel()),
            geodesic_km(
                lon[:, 1:].ravel(), lat[:, 1:].ravel(), lon[:, :-1].ravel(), lat[:, :-1].ravel()
            ),
        ]
        return float(np.nanmax(np.concatenate(sides)))

    def _column_order(self, middle: int) -> Int[np.ndarray, " cols"]:
        """Columns with the wanted one in the middle, if the grid goes once round the earth.

        Ocean models repeat a column or more at the seam; the repeats are left out.
        """
        count = self.lon.shape[1]
        repeats = self._repeated_columns()
        last, first, second = (self._column(at) for at in (count - 1, 0, 1))
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.nanmedian(_chord(*last, *first) / _chord(*second, *first))
        if not repeats and not 0.3 < ratio < 1.7:
            return np.arange(count)
        count -= repeats
        return (np.arange(count) + middle - count // 2) % count

    def _repeated_columns(self) -> int:
        """Return how many of the last columns stand at the beginning once more."""
        count = self.lon.shape[1]
        for repeats in range(1, min(5, count - 1)):
            away = _chord(*self._column(count - repeats), *self._column(0))
            if np.nanmedian(away) < 1e-6:  # radians; single precision
                return repeats
        return 0

    def _column(self, at: int) -> tuple[np.ndarray, np.ndarray]:
        return self.lon[:, at], self.lat[:, at]


@dataclass(frozen=True)
class CurvedWindow:
    """Part of a CurvedGrid; xy_cells (rows, cols, 2) km, guessed smoothly where absent."""

    rows: Int[np.ndarray, " rows"]
    cols: Int[np.ndarray, " cols"]
    xy_cells: Float[np.ndarray, "rows cols 2"]
    absent: Bool[np.ndarray, "rows cols"]

    def locate(self, xy_km: Float[np.ndarray, "n 2"]) -> Located:
        """Find points of the plane in the window."""
        nearest = self._tree.query(xy_km)[1]
        start = np.column_stack(np.unravel_index(nearest, self.xy_cells.shape[:2]))
        index, miss = invert_surface(self.xy_cells, np.asarray(xy_km), start.astype(float))
        return Located(index, miss < EDGE_SLACK)

    @cached_property
    def _tree(self) -> cKDTree:
        return cKDTree(self.xy_cells.reshape(-1, 2))

    def centres_km(self, row: np.ndarray, col: np.ndarray) -> Float[np.ndarray, "n 2"]:
        """Return the plane positions of cells."""
        return self.xy_cells[row, col]


def _chord(
    lon: np.ndarray, lat: np.ndarray, lon2: np.ndarray | float, lat2: np.ndarray | float
) -> np.ndarray:
    """Straight distance between points of the unit sphere."""
    first, second = (np.radians(np.asarray(part, float)) for part in (lon, lon2))
    up, up2 = (np.radians(np.asarray(part, float)) for part in (lat, lat2))
    flat = np.cos(up) * np.cos(up2) * np.sin((first - second) / 2) ** 2
    return 2 * np.sqrt(np.minimum(np.sin((up - up2) / 2) ** 2 + flat, 1.0))


def _radius_km(view: View) -> float:
    lon, lat = view.lattice_lonlat
    return float(EARTH_KM * 2 * np.arcsin(_chord(lon, lat, *view.centre_lonlat) / 2).max())
