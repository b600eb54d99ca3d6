"""Filling missing cells: Laplace's equation and its properties."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from layer_files import BOX, LAT, LON, PLANE, on_cells, read, rectangular, saved

from trackfit.layers.fill import fill


def holed(seed, share, shape=(17, 23)):
    random = np.random.default_rng(seed)
    values = random.normal(size=(1, *shape))
    values[0][random.random(shape) < share] = np.nan
    values[0, 3, 4] = 0.5
    return values


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10_000), share=st.floats(0.05, 0.95))
def test_known_cells_stay_and_filled_ones_keep_to_the_range(seed, share):
    values = holed(seed, share)
    filled = fill(values)
    known = ~np.isnan(values)
    assert np.array_equal(filled[known], values[known])
    assert filled.min() >= values[known].min() - 1e-12
    assert filled.max() <= values[known].max() + 1e-12


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_every_filled_cell_is_the_mean_of_its_neighbours(seed):
    values = holed(seed, 0.6)
    filled = fill(values)[0]
    for row, col in np.argwhere(np.isnan(values[0])):
        around = [(row - 1, col), (row + 1, col), (row, col - 1), (row, col + 1)]
        there = [filled[i, j] for i, j in around if 0 <= i < 17 and 0 <= j < 23]
        assert filled[row, col] == pytest.approx(np.mean(there), abs=1e-10)


def test_a_linear_function_about_a_hole_is_restored():
    row, col = np.mgrid[0:20, 0:30]
    linear = 2.0 - 0.7 * row + 0.3 * col
    values = linear.copy()
    values[5:15, 8:20] = np.nan
    assert np.allclose(fill(values[None])[0], linear, rtol=0, atol=1e-10)


def test_a_harmonic_function_is_restored():
    """x^2 - y^2 solves the discrete equation too."""
    row, col = np.mgrid[0:20, 0:30].astype(float)
    values = (col**2 - row**2)[None].copy()
    values[0, 3:17, 3:27] = np.nan
    assert np.allclose(fill(values)[0], col**2 - row**2, rtol=0, atol=1e-9)


def test_slices_are_filled_each_by_its_own_mask():
    values = np.concatenate([holed(1, 0.3), holed(2, 0.5), 2 * holed(1, 0.3)])
    together = fill(values)
    for number, part in enumerate(values):
        assert np.allclose(together[number], fill(part[None])[0], rtol=0, atol=1e-12)


def test_an_empty_slice_stays_missing_and_a_whole_one_as_it_is():
    values = np.stack([np.full((4, 5), np.nan), np.arange(20.0).reshape(4, 5)])
    assert np.array_equal(fill(values), values, equal_nan=True)


def test_a_strided_array_is_filled_too():
    values = np.moveaxis(holed(3, 0.4), 1, 2)
    assert not np.isnan(fill(values)).any()


def test_the_share_counts_cells_in_the_box(tmp_path):
    """Land in the west half of the box; cells outside the box do not count."""
    field = on_cells(LON[None, :], LAT[:, None])
    field[:, LON < -3.001] = np.nan
    layer = read(saved(rectangular(values=field), tmp_path))
    lon, lat = np.meshgrid(LON, LAT)
    xy = PLANE.to_plane(lon.ravel(), lat.ravel())
    assert layer.share_filled == np.mean(lon.ravel()[BOX.holds(xy)] < -3.001)
    assert 0.4 < layer.share_filled < 0.5
    east = layer.x0_km + layer.spacing_km * np.arange(layer.filled.shape[1])
    # Half a cell of 6.2 km west of the column at the middle, and the slant of meridians (0.3 km).
    assert layer.filled[:, east < -3.6].all()
    assert not layer.filled[:, east > -2.6].any()
    assert np.isfinite(layer.values).all()
