"""Fast questions to a coast: is this step clear of land, how far off is it."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import shapely
from jaxtyping import Bool, Float
from rasterio.features import rasterize
from rasterio.transform import Affine
from scipy.ndimage import distance_transform_edt, gaussian_filter
from scipy.spatial import cKDTree
from scipy.special import ndtr
from shapely.geometry.base import BaseGeometry

from trackfit.layers.layer import Box, Coast

CLEARANCE_KM = 0.01
"""Paths keep so far off land: straight lines in the plane, straight lines in degrees and rounded
coordinates differ by less. Straits narrower than twice this are closed."""

CELLS = 512
LEAST_CELL_KM = 0.005
EXACT_CELLS = 9.0

LEAST_SPREAD_CELLS = 2.0
"""Steps that spread by less than so many cells see a straight shore."""


def widened(coast: Coast) -> BaseGeometry:
    """Land widened by `CLEARANCE_KM`, prepared for many questions."""
    land = shapely.buffer(coast.land, CLEARANCE_KM, quad_segs=2)
    shapely.prepare(land)
    return land


@dataclass(frozen=True)
class Shore:
    """Land with a raster over a box, which answers all but the close cases in nanoseconds.

    Attributes
    ----------
    land
        Land widened by `CLEARANCE_KM`, prepared.
    x0_km, y0_km, cell_km
        Centre of cell [0, 0] and the side of a cell; rows go up y, columns up x.
    room_km
        How far every point of a cell is from land at least; 0 where the cell may touch the shore,
        -1 where it lies inside land.
    offing_km
        Distance of the cells' centres to the shore, negative inland: exact within `EXACT_CELLS`
        of it, to about a third of a cell beyond.
    """

    land: BaseGeometry
    x0_km: float
    y0_km: float
    cell_km: float
    room_km: Float[np.ndarray, "ny nx"]
    offing_km: Float[np.ndarray, "ny nx"]
    _shares: dict[int, Float[np.ndarray, "ny nx"]] = field(default_factory=dict, repr=False)

    @classmethod
    def over(cls, land: BaseGeometry, box: Box) -> Shore:
        """Lay the raster over a box; land outside it is known all the same, only more slowly.

        `land` is what `widened` makes of a coast.
        """
        cell = max(box.x_max - box.x_min, box.y_max - box.y_min) / CELLS
        cell = max(cell, LEAST_CELL_KM)
        shape = tuple(
            int(np.ceil(side / cell)) + 1 for side in (box.y_max - box.y_min, box.x_max - box.x_min)
        )
        corner = Affine(cell, 0.0, box.x_min - cell / 2, 0.0, cell, box.y_min - cell / 2)
        touched = _burnt(land, shape, corner, touched=True)
        edge = _burnt(shapely.boundary(land), shape, corner, touched=True)
        inside = _burnt(land, shape, corner, touched=False)
        # a point lies half a diagonal from its cell's centre at most, and so does the land
        room = np.maximum((_cells_to(touched) - np.sqrt(2.0)) * cell, 0.0)
        room[touched & ~edge] = -1.0
        # the outermost cells also stand for all that lies outside the box
        room[[0, -1]], room[:, [0, -1]] = 0.0, 0.0
        offing = (_cells_to(inside) - _cells_to(~inside)) * cell
        close = np.nonzero(np.abs(offing) < (EXACT_CELLS + 1.0) * cell)
        centres = np.column_stack([close[1], close[0]]) * cell + [box.x_min, box.y_min]
        offing[close] = np.copysign(_to_outline(land, centres, cell), offing[close])
        return cls(land, box.x_min, box.y_min, cell, room, offing)

    def room_at(self, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, " n"]:
        """`room_km` at points; 0 (not known) outside the box."""
        ny, nx = self.room_km.shape
        column = np.clip((xy_km[:, 0] - self.x0_km) / self.cell_km + 0.5, 0, nx - 1)
        row = np.clip((xy_km[:, 1] - self.y0_km) / self.cell_km + 0.5, 0, ny - 1)
        return self.room_km.ravel()[row.astype(np.intp) * nx + column.astype(np.intp)]

    def clear(
        self, start_km: Float[np.ndarray, "n 2"], end_km: Float[np.ndarray, "n 2"]
    ) -> Bool[np.ndarray, " n"]:
        """Tell which straight lines stay at sea, both ends included."""
        before, after = self.room_at(start_km), self.room_at(end_km)
        length = np.hypot(*(end_km - start_km).T)
        clear = (before > 0) & (after > 0) & (before + after > length)
        unsure = np.flatnonzero(~clear & (before >= 0) & (after >= 0))
        if unsure.size:
            ends = np.stack([start_km[unsure], end_km[unsure]], axis=1)
            clear[unsure] = ~shapely.intersects(self.land, shapely.linestrings(ends))
        return clear

    def afloat(self, xy_km: Float[np.ndarray, "n 2"]) -> Bool[np.ndarray, " n"]:
        """Tell which points are at sea."""
        room = self.room_at(xy_km)
        afloat = room > 0
        unsure = np.flatnonzero(room == 0)
        if unsure.size:
            afloat[unsure] = ~shapely.intersects_xy(self.land, *xy_km[unsure].T)
        return afloat

    def offing_at(self, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, " n"]:
        """Distance to the shore, between cells by bilinear interpolation; the box's edge beyond."""
        return self._between_cells(self.offing_km, xy_km)

    def share_at_sea(
        self, xy_km: Float[np.ndarray, "n 2"], sd_km: Float[np.ndarray, " n"]
    ) -> Float[np.ndarray, " n"]:
        """Share of normal steps from points, of some sd along either axis, that end at sea.

        From rasters of the sea smoothed by that sd, between rasters a factor sqrt(2) apart by
        interpolation; for short steps and far inland Phi(offing / sd), as for a straight shore.
        """
        share = ndtr(self.offing_at(xy_km) / sd_km)
        level = np.maximum(2.0 * np.log2(sd_km / (LEAST_SPREAD_CELLS * self.cell_km)), -1.0)
        lower = np.floor(level).astype(int)
        for k in np.unique(lower[lower >= 0]):
            at = np.flatnonzero(lower == k)
            low, high = (self._between_cells(self._share(int(k) + j), xy_km[at]) for j in (0, 1))
            found = low + (level[at] - k) * (high - low)
            share[at] = np.where(found > 0.01, found, np.minimum(share[at], 0.01))
        return share

    def _share(self, level: int) -> Float[np.ndarray, "ny nx"]:
        """The sea, smoothed; a cell on the shore counts by the part of it that is sea."""
        if level not in self._shares:
            sea = np.clip(self.offing_km / self.cell_km + 0.5, 0.0, 1.0)
            spread = LEAST_SPREAD_CELLS * 2.0 ** (level / 2.0)
            self._shares[level] = gaussian_filter(sea, spread, mode="nearest")
        return self._shares[level]

    def _between_cells(
        self, raster: Float[np.ndarray, "ny nx"], xy_km: Float[np.ndarray, "n 2"]
    ) -> Float[np.ndarray, " n"]:
        ny, nx = raster.shape
        column = np.clip((xy_km[:, 0] - self.x0_km) / self.cell_km, 0, nx - 1.001)
        row = np.clip((xy_km[:, 1] - self.y0_km) / self.cell_km, 0, ny - 1.001)
        left, low = column.astype(np.intp), row.astype(np.intp)
        right, up = column - left, row - low
        corner, flat = low * nx + left, raster.ravel()
        below = flat[corner] * (1.0 - right) + flat[corner + 1] * right
        above = flat[corner + nx] * (1.0 - right) + flat[corner + nx + 1] * right
        return below * (1.0 - up) + above * up


def _burnt(
    shape_km: BaseGeometry, shape: tuple[int, ...], corner: Affine, *, touched: bool
) -> Bool[np.ndarray, "ny nx"]:
    """Cells that a shape touches, or whose centres it holds."""
    cells = rasterize([shape_km], out_shape=shape, transform=corner, all_touched=touched)
    return cells.astype(bool)


def _cells_to(cells: Bool[np.ndarray, "ny nx"]) -> Float[np.ndarray, "ny nx"]:
    """Distance between centres from every cell to the nearest of some cells, in cells."""
    if not cells.any():
        return np.full(cells.shape, float(sum(cells.shape)))
    return distance_transform_edt(~cells)


def _to_outline(
    land: BaseGeometry, xy_km: Float[np.ndarray, "n 2"], cell_km: float
) -> Float[np.ndarray, " n"]:
    """Distance to the outline of land, by points an eighth of a cell apart on it."""
    if not len(xy_km):
        return np.zeros(0)
    frame = shapely.box(*(xy_km.min(axis=0) - 3 * cell_km), *(xy_km.max(axis=0) + 3 * cell_km))
    outline = shapely.intersection(shapely.boundary(land), frame)
    points = shapely.get_coordinates(shapely.segmentize(outline, cell_km / 8.0))
    return cKDTree(points).query(xy_km)[0] if len(points) else np.full(len(xy_km), np.inf)
