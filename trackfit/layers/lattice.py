"""Cubic splines over the whole-number index of a source grid: values and coordinates alike.

A grid is extended by its odd reflection (2 f(edge) - f(mirror)), so a linear function stays linear
at the edges. Because coordinates are splined in the same way as values, turning coordinates back
into an index reproduces every linear function of the coordinates exactly, on uneven and curved
grids too.
"""

from __future__ import annotations

import numpy as np
from jaxtyping import Float
from scipy import ndimage

# The influence of a spline's edge falls by 0.268 a cell: 16 cells leave less than 1e-9.
PAD_CELLS = 16
HALF_CELL = 0.5
_ITERATIONS = 30


def extended(values: np.ndarray, cells: int = PAD_CELLS) -> np.ndarray:
    """Return values with `cells` odd-reflected cells added at both ends of every axis."""
    return np.pad(values, cells, mode="reflect", reflect_type="odd")


class IndexSpline:
    """The cubic spline through values on a whole-number index, one axis or two.

    Parameters
    ----------
    values
        (rows,) or (rows, cols), finite.
    blur_cells
        Standard deviation of a Gaussian applied first, one for each axis; 0 for none.
    """

    def __init__(self, values: np.ndarray, blur_cells: tuple[float, ...] | None = None) -> None:
        blur = blur_cells or (0.0,) * values.ndim
        self._pad = PAD_CELLS + int(np.ceil(4 * max(blur)))
        padded = extended(np.asarray(values, float), self._pad)
        if max(blur) > 0:
            padded = ndimage.gaussian_filter(padded, blur, mode="nearest")
        self._coefficients = ndimage.spline_filter(padded, order=3, mode="mirror")

    def __call__(self, index: Float[np.ndarray, "n axes"]) -> Float[np.ndarray, " n"]:
        """Return the values at fractional indices, at most half a cell outside."""
        return ndimage.map_coordinates(
            self._coefficients,
            np.asarray(index).T + self._pad,
            order=3,
            mode="mirror",
            prefilter=False,
        )


def clamped(index: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
    """Bring fractional indices (n, axes) into the grid's area: half a cell past its centres."""
    return np.clip(index, -HALF_CELL, np.array(shape) - 1 + HALF_CELL)


def invert_axis(coordinates: Float[np.ndarray, " m"], at: Float[np.ndarray, " n"]) -> np.ndarray:
    """Return fractional indices where rising coordinates take the values `at`.

    Outside, the end spacings go on. Even spacing (to single precision) needs no spline.
    """
    count = coordinates.size
    step = (coordinates[-1] - coordinates[0]) / (count - 1)
    even = coordinates[0] + step * np.arange(count)
    if np.abs(coordinates - even).max() < 1e-3 * step:
        return (at - coordinates[0]) / step
    padded = extended(coordinates)
    rough = np.interp(at, padded, np.arange(padded.size) - PAD_CELLS)
    spline = IndexSpline(coordinates)
    slope = np.gradient(padded)
    index = clamped(rough[:, None], (count,))
    for _ in range(_ITERATIONS):
        residual = at - spline(index)
        move = residual / np.interp(index[:, 0] + PAD_CELLS, np.arange(padded.size), slope)
        new = clamped(index + move[:, None], (count,))
        done = np.abs(new - index).max() < 1e-11
        index = new
        if done:
            break
    outside = (rough < -HALF_CELL) | (rough > count - 1 + HALF_CELL)
    return np.where(outside, rough, index[:, 0])


def invert_surface(
    xy_cells: Float[np.ndarray, "rows cols 2"],
    at: Float[np.ndarray, "n 2"],
    start: Float[np.ndarray, "n 2"],
) -> tuple[Float[np.ndarray, "n 2"], Float[np.ndarray, " n"]]:
    """Return clamped fractional (row, col) of points in a curved grid, and how far each is missed.

    Newton's method from `start` with the Jacobian of central differences; the miss is in cells, 0
    inside the grid.
    """
    shape = xy_cells.shape[:2]
    splines = [IndexSpline(xy_cells[..., axis]) for axis in range(2)]
    # slopes[i, j]: d(x or y)_i / d(row or col)_j at every cell
    slopes = np.array([np.gradient(xy_cells[..., axis]) for axis in range(2)])
    index = clamped(start, shape)
    step = np.full_like(index, np.inf)
    for _ in range(_ITERATIONS):
        residual = at - np.column_stack([spline(index) for spline in splines])
        step = _solve_2x2(_sampled(slopes, index), residual)
        new = clamped(index + np.clip(step, -1, 1), shape)
        done = np.abs(new - index).max() < 1e-11
        index = new
        if done:
            break
    return index, np.abs(step).max(axis=1)


def _sampled(slopes: np.ndarray, index: np.ndarray) -> Float[np.ndarray, "n 2 2"]:
    sampled = [
        ndimage.map_coordinates(slopes[i, j], index.T, order=1, mode="nearest")
        for i in range(2)
        for j in range(2)
    ]
    return np.stack(sampled, axis=-1).reshape(-1, 2, 2)


def _solve_2x2(matrix: np.ndarray, right: np.ndarray) -> np.ndarray:
    """Solve many small systems; where one is singular (cells on one point) the answer is inf."""
    (a, b), (c, d) = np.moveaxis(matrix, 0, -1)
    determinant = a * d - b * c
    determinant = np.where(determinant == 0, np.nan, determinant)
    row = (d * right[:, 0] - b * right[:, 1]) / determinant
    col = (a * right[:, 1] - c * right[:, 0]) / determinant
    return np.nan_to_num(np.column_stack([row, col]), nan=np.inf)
