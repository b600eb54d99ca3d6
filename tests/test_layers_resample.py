"""The plane grid: convergence, spacing, coverage, smoothing, curved grids."""

import numpy as np
import pytest
import xarray as xr
from layer_files import (
    BOX,
    PLANE,
    geotiff,
    nodes_km,
    on_cells,
    origin,
    read,
    rectangular,
    saved,
    worst,
)

from trackfit.layers import Box
from trackfit.layers.lattice import IndexSpline, invert_axis


def wave(xy_km):
    return np.sin(xy_km[..., 0] / 12) * np.cos(xy_km[..., 1] / 9)


def test_cubic_sampling_converges_with_the_fourth_power(tmp_path):
    errors = []
    for step in (0.08, 0.04, 0.02):
        lon, lat = np.arange(-4.5, -1.5, step), np.arange(55.2, 56.8, step)
        values = on_cells(lon[None, :], lat[:, None], field=wave)
        file = saved(rectangular(lon, lat, values), tmp_path)
        errors.append(worst(read(file, resolution_km=1.0), wave))
    # resolution_km under the cells' size: no smoothing, only the spline's error h^4
    assert np.log2(np.array(errors[:-1]) / errors[1:]) == pytest.approx(4.0, abs=0.4)


def test_the_spacing_is_the_shorter_side_of_a_cell_at_the_middle(tmp_path):
    layer = read(saved(rectangular(), tmp_path))
    # 0.1 degree of longitude at 56 N on WGS 84, by the radius of the parallel
    e2, lat = 0.00669437999014, np.radians(56.0)
    parallel = 6378.137 * np.cos(lat) / np.sqrt(1 - e2 * np.sin(lat) ** 2)
    assert layer.spacing_km == pytest.approx(np.radians(0.1) * parallel, rel=2e-3)  # cell beside it
    assert read(saved(rectangular(), tmp_path), resolution_km=3.0).spacing_km == 3.0


def test_coarse_nodes_average_fine_detail(tmp_path):
    """A chequered fine raster must not leave its squares in a coarse layer."""
    row, col = np.mgrid[0:400, 0:400]
    cells = np.where((row + col) % 2 == 0, 1.0, -1.0)
    file = geotiff(tmp_path / "f.tif", cells[None], origin(-4.0, 57.0, 0.005, 0.005))
    layer = read(file, resolution_km=4.0)
    assert np.abs(layer.values).max() < 1e-6  # exp(-pi^2 sigma^2), sigma > 3 cells


def test_smoothing_keeps_linear_functions(tmp_path):
    lon, lat = np.arange(-4.2, -1.8, 0.01), np.arange(55.3, 56.7, 0.01)
    values = on_cells(lon[None, :], lat[:, None])
    layer = read(saved(rectangular(lon, lat, values), tmp_path), resolution_km=5.0)
    # Smoothing over sigma = 2.5 km adds slope * tan(lat) / R * sigma^2 / 2 = 1.5e-4.
    assert worst(layer) < 3e-4


@pytest.mark.parametrize("kind", ["degrees", "curved"])
def test_a_source_that_ends_in_the_box(kind, tmp_path):
    lon, lat = np.arange(-3.0, -1.0, 0.1), np.arange(55.0, 56.05, 0.1)
    if kind == "degrees":
        dataset = rectangular(lon, lat)
    else:
        cells = np.meshgrid(lon, lat)
        dataset = xr.Dataset(
            {"depth": (("j", "i"), on_cells(*cells), {"units": "m"})},
            {
                "lon": (("j", "i"), cells[0], {"units": "degrees_east"}),
                "lat": (("j", "i"), cells[1], {"units": "degrees_north"}),
            },
        )
    layer = read(saved(dataset, tmp_path))
    # The area ends half a cell past the outermost centres: lon -3.05, lat 56.05.
    inside_lon, inside_lat = np.meshgrid([-3.045, -3.055, -2.8], [56.045, 56.055, 55.9])
    xy = PLANE.to_plane(inside_lon.ravel(), inside_lat.ravel())
    x, y = nodes_km(layer)[layer.covered].T
    node_lon, node_lat = PLANE.to_lonlat(np.column_stack([x, y]))
    assert node_lon.min() >= -3.05 - 1e-6
    assert node_lat.max() <= 56.05 + 1e-6
    assert not layer.covers(xy[[1, 3, 4, 5]]).any()
    assert layer.covers(xy[[8]]).all()
    assert np.isfinite(layer.values).all()
    assert worst(layer) < 1e-3  # in the outermost half cell the field's bend is not known
    assert layer.x0_km > -10.0  # nodes wholly outside are not kept


@pytest.mark.parametrize("repeats", [0, 1, 2])
@pytest.mark.parametrize("start", [-180.0, -4.0, 73.5])
def test_a_curved_grid_round_the_earth(start, repeats, tmp_path):
    """Wherever the seam lies and however many columns stand twice, the study is whole."""
    row, col = np.mgrid[0:40, 0 : 720 + repeats]
    lon = (start + 0.5 * col + 180) % 360 - 180
    lat = 46 + 0.5 * row + 0.4 * np.sin(np.radians(lon))
    near = np.abs(lon + 3) < 30
    values = np.where(near, on_cells(np.where(near, lon, -3.0), lat), 0.0)
    dataset = xr.Dataset(
        {"depth": (("j", "i"), values, {"units": "m"})},
        {
            "lon": (("j", "i"), lon, {"units": "degrees_east"}),
            "lat": (("j", "i"), lat, {"units": "degrees_north"}),
        },
    )
    layer = read(saved(dataset, tmp_path))
    assert layer.covers(BOX.lattice_km()).all()
    assert worst(layer) < 1e-6  # splines of 18 cells about the box see nothing of the zeros


def test_nodes_outside_take_the_nearest_value(tmp_path):
    """A turned grid in a large box: the corners are outside and must not run away."""
    row, col = np.mgrid[-10:11, -10:11]
    lon, lat = -3 + 0.04 * (col - row), 56 + 0.02 * (col + row)
    dataset = xr.Dataset(
        {"depth": (("j", "i"), on_cells(lon, lat), {"units": "m"})},
        {
            "lon": (("j", "i"), lon, {"units": "degrees_east"}),
            "lat": (("j", "i"), lat, {"units": "degrees_north"}),
        },
    )
    layer = read(saved(dataset, tmp_path), box=Box(-100.0, -100.0, 100.0, 100.0))
    values = layer.values[0, ..., 0]
    assert 0.3 < layer.covered.mean() < 0.7  # a lozenge fills half of its rectangle
    # Coordinates are splined like values: a linear function comes back to rounding.
    assert worst(layer) < 1e-11
    cells = on_cells(lon, lat)
    slope = 0.3 * 4 + 0.2 * 4  # half a cell further on
    assert values.min() > cells.min() - slope
    assert values.max() < cells.max() + slope


def test_a_source_smaller_than_the_meshes_of_the_search(tmp_path):
    lon, lat = -3 + 0.001 * np.arange(5), 56 + 0.001 * np.arange(5)
    layer = read(saved(rectangular(lon, lat), tmp_path), box=Box(-500.0, -400.0, 510.0, 420.0))
    assert layer.covered.sum() >= 9
    assert worst(layer) < 1e-6


def test_only_cells_near_the_box_are_asked_of_the_file(tmp_path, monkeypatch):
    seen = []
    monkeypatch.setattr(
        "trackfit.layers.netcdf.check_size", lambda times, rows, cols, _: seen.append((rows, cols))
    )
    lon, lat = np.arange(-180.0, 180.0, 0.5), np.arange(-90.0, 90.1, 0.5)
    values = np.zeros((lat.size, lon.size))
    read(saved(rectangular(lon, lat, values), tmp_path))
    assert max(seen[0]) < 50


def test_uneven_axes_are_inverted_exactly():
    axis = np.cumsum(1 + 0.4 * np.sin(np.arange(40) / 4))
    index = np.linspace(-0.49, 39.49, 500)
    at = IndexSpline(axis)(index[:, None])
    assert np.allclose(invert_axis(axis, at), index, rtol=0, atol=1e-8)
    far = invert_axis(axis, np.array([-100.0, 1000.0]))
    assert far[0] < -0.5
    assert far[1] > 39.5


def test_the_least_grid_has_two_by_two_cells(tmp_path):
    lon, lat = np.array([-4.0, -2.0]), np.array([55.0, 57.0])
    layer = read(saved(rectangular(lon, lat), tmp_path))
    assert min(layer.covered.shape) >= 2
    assert layer.covers(np.array([[0.0, 0.0]])).all()
    # Two degrees wide, the plane bends: 0.5 of a range of 24 is right in kind, not in detail.
    assert worst(layer) < 0.6
