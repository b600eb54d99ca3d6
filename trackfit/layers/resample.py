"""A source grid brought onto a square grid of the plane, once."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from jaxtyping import Bool, Float

from trackfit.faults import LayerError
from trackfit.layers.grids import Located, View, Window
from trackfit.layers.lattice import IndexSpline
from trackfit.layers.layer import Box, LayerRequest

MAX_NODES = 4_000_000
MIN_NODES = 4


@dataclass(frozen=True)
class Nodes:
    """A square grid of the plane and where each node lies in the source.

    Attributes
    ----------
    xy_km
        (ny * nx, 2), x running fastest.
    cells_km
        Height and width of the source's cells near the middle, km.
    """

    x0_km: float
    y0_km: float
    spacing_km: float
    shape: tuple[int, int]
    xy_km: Float[np.ndarray, "nodes 2"]
    located: Located
    cells_km: tuple[float, float]

    @property
    def inside(self) -> Bool[np.ndarray, "ny nx"]:
        """Node lies inside the source's area."""
        return self.located.inside.reshape(self.shape)


def plane_nodes(window: Window, view: View, request: LayerRequest) -> Nodes:
    """Lay a square grid over what the box and the source share.

    The spacing is the shorter side of the source's cells near the middle of the box, or the
    resolution asked for.

    Raises
    ------
    LayerError
        If there would be more than 4 million nodes.
    """
    lattice = view.box.lattice_km()
    inside = window.locate(lattice).inside
    cells_km = _cells_km(window, lattice[inside] if inside.any() else lattice, view)
    spacing = request.resolution_km or min(cells_km)
    area = _shared_area(window, view, lattice[inside])
    xs = _axis(area.x_min, area.x_max, spacing)
    ys = _axis(area.y_min, area.y_max, spacing)
    if xs.count * ys.count > MAX_NODES:
        raise _too_many(xs.count * ys.count, spacing, area, request)
    return _cropped(window, _laid(window, xs, ys, spacing, cells_km))


def resampled(
    values: Float[np.ndarray, "slices rows cols"], nodes: Nodes
) -> Float[np.ndarray, "slices ny nx"]:
    """Sample complete source slices at the nodes by cubic splines over the source's index.

    Where the nodes are further apart than the source's cells, the source is first smoothed by a
    Gaussian of standard deviation sqrt(s^2 - c^2) / 2 (s the nodes' distance, c the cells'), so
    that detail finer than the nodes is averaged and not picked by chance.
    """
    ratio = nodes.spacing_km / np.array(nodes.cells_km)
    blur = tuple(0.5 * np.sqrt(np.maximum(ratio**2 - 1, 0)))
    index = nodes.located.at
    return np.array([IndexSpline(part, blur)(index).reshape(nodes.shape) for part in values])


def nearest(mask: Bool[np.ndarray, "rows cols"], nodes: Nodes) -> Bool[np.ndarray, "ny nx"]:
    """Return what a mask of the source says of each node's nearest cell."""
    row, col = np.clip(np.rint(nodes.located.at), 0, np.array(mask.shape) - 1).astype(int).T
    return mask[row, col].reshape(nodes.shape)


@dataclass(frozen=True)
class _Axis:
    start: float
    count: int
    spacing: float

    @property
    def at(self) -> np.ndarray:
        return self.start + self.spacing * np.arange(self.count)


def _axis(low: float, high: float, spacing: float) -> _Axis:
    """Return nodes from `low` to `high` or just beyond, at least four, centred on the stretch."""
    count = max(int(np.ceil((high - low) / spacing - 1e-9)) + 1, MIN_NODES)
    return _Axis((low + high - (count - 1) * spacing) / 2, count, spacing)


def _cells_km(window: Window, points: np.ndarray, view: View) -> tuple[float, float]:
    """Height and width of the source cell at the point nearest to the middle of the box."""
    middle = points[np.argmin(np.linalg.norm(points - view.box.centre_km, axis=1))]
    index = window.locate(middle[None]).at[0]
    top = np.array([window.rows.size, window.cols.size]) - 2
    row, col = np.clip(np.floor(index), 0, top).astype(int)
    corner, up, right = window.centres_km(
        np.array([row, row + 1, row]), np.array([col, col, col + 1])
    )
    return float(np.linalg.norm(up - corner)), float(np.linalg.norm(right - corner))


def _shared_area(window: Window, view: View, inside: np.ndarray) -> Box:
    """Bound what box and source share, from lattice points and source cells, with room to spare."""
    row, col = np.divmod(np.arange(window.rows.size * window.cols.size), window.cols.size)
    cells = window.centres_km(row, col)
    points = np.concatenate([inside, cells[view.box.holds(cells)]])
    steps = view.box.lattice_km(1)[-1] - view.box.lattice_km(1)[0]
    low, high = points.min(axis=0) - steps / 64, points.max(axis=0) + steps / 64
    return Box(*low, *high).clipped(view.box)


def _laid(
    window: Window, xs: _Axis, ys: _Axis, spacing: float, cells_km: tuple[float, float]
) -> Nodes:
    grid_x, grid_y = np.meshgrid(xs.at, ys.at)
    xy = np.column_stack([grid_x.ravel(), grid_y.ravel()])
    shape = (ys.count, xs.count)
    return Nodes(xs.start, ys.start, spacing, shape, xy, window.locate(xy), cells_km)


def _cropped(window: Window, nodes: Nodes) -> Nodes:
    """Leave out rows and columns that lie wholly outside the source."""
    rows = _kept(np.any(nodes.inside, axis=1))
    cols = _kept(np.any(nodes.inside, axis=0))
    part = np.arange(len(nodes.xy_km)).reshape(nodes.shape)[rows, cols]
    kept = part.ravel()
    return replace(
        nodes,
        x0_km=nodes.x0_km + cols.start * nodes.spacing_km,
        y0_km=nodes.y0_km + rows.start * nodes.spacing_km,
        shape=(part.shape[0], part.shape[1]),
        xy_km=nodes.xy_km[kept],
        located=Located(nodes.located.at[kept], nodes.located.inside[kept]),
    )


def _kept(used: np.ndarray) -> slice:
    at = np.flatnonzero(used)
    if not at.size:
        return slice(0, used.size)
    last = max(int(at[-1]) + 1, min(int(at[0]) + MIN_NODES, used.size))
    return slice(min(int(at[0]), last - MIN_NODES), last)


def _too_many(count: int, spacing: float, area: Box, request: LayerRequest) -> LayerError:
    enough = np.sqrt((area.x_max - area.x_min) * (area.y_max - area.y_min) / MAX_NODES)
    return request.fault(
        f"a grid of {spacing:.3g} km over the study area has {count / 1e6:.1f} million nodes, more "
        f"than {MAX_NODES / 1e6:.0f} million; set layers.{request.name}.resolution_km to "
        f"{np.ceil(enough * 110) / 100:.2f} or more"
    )
