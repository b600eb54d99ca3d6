"""Currents: units, directions in the plane, and scalar units."""

import numpy as np
import pytest
import rasterio
from layer_files import (
    HOURS,
    LAT,
    LON,
    current,
    geotiff,
    nodes_km,
    origin,
    read,
    rectangular,
    saved,
)

from trackfit.frame import Plane, geodesic_bearing_deg, geodesic_km
from trackfit.layers import Box

FAR_LON = np.arange(15.0, 25.0, 0.25)
FAR_LAT = np.arange(58.0, 62.0, 0.25)
FAR_PLANE = Plane.centred_on([-3.0], [56.0])
FAR_BOX = Box(1200.0, 400.0, 1350.0, 550.0)


def moved(layer, plane, hours=1e-3):
    """Ground bearing (degrees) and speed (km/h) that the plane's velocity at each node means."""
    start = nodes_km(layer)[layer.covered]
    end = start + hours * layer.values[0][layer.covered]
    ground = (*plane.to_lonlat(start), *plane.to_lonlat(end))
    return geodesic_bearing_deg(*ground), geodesic_km(*ground) / hours


@pytest.mark.parametrize(("east", "north", "bearing"), [(0, 1, 0), (1, 0, 90), (3, 4, 36.869898)])
def test_a_current_far_from_the_middle_keeps_its_true_bearing(east, north, bearing, tmp_path):
    """The geodesic of the plane's displacement is the independent reference."""
    file = saved(current(east, north, FAR_LON, FAR_LAT), tmp_path)
    layer = read(file, FAR_PLANE, FAR_BOX, east="u", north="v")
    assert layer.unit == "km/h"
    found, speed = moved(layer, FAR_PLANE)
    turned = (found - bearing + 180) % 360 - 180
    # 3.6 m (18 m for 5 m/s) of way, positions good to about a millimetre
    assert np.abs(turned).max() < 0.05
    assert np.abs(speed - 3.6 * np.hypot(east, north)).max() < 0.005


def test_true_north_arrives_turned_by_the_convergence(tmp_path):
    layer = read(
        saved(current(0, 1, FAR_LON, FAR_LAT), tmp_path), FAR_PLANE, FAR_BOX, east="u", north="v"
    )
    x, y = layer.values[0][layer.covered].T
    lon, lat = FAR_PLANE.to_lonlat(nodes_km(layer)[layer.covered])
    ahead = FAR_PLANE.to_plane(lon, lat + 1e-4) - FAR_PLANE.to_plane(lon, lat)
    convergence = np.arctan2(ahead[:, 0], ahead[:, 1])
    assert np.degrees(np.abs(convergence)).min() > 10
    assert np.allclose(np.arctan2(x, y), convergence, rtol=0, atol=1e-4)  # differences over 11 m


@pytest.mark.parametrize(
    ("unit", "kmh"),
    [("m s-1", 3.6), ("m/s", 3.6), ("cm s-1", 0.036), ("knots", 1.852), ("km h-1", 1.0),
     ("meter second-1", 3.6), ("0.01 m s-1", 0.036), ("m s**-1", 3.6)],
)  # fmt: skip
def test_speeds_become_kmh(unit, kmh, tmp_path):
    file = saved(current(1.0, 0.0, units=unit), tmp_path)
    plane = Plane.centred_on([-3.0], [56.0])
    _, speed = moved(read(file, plane, east="u", north="v"), plane)
    assert speed == pytest.approx(kmh, rel=1e-3)  # way of metres, positions to a millimetre


def test_the_study_overrides_the_unit_and_the_factor_multiplies(tmp_path):
    file = saved(current(1.0, 2.0, units="furlongs"), tmp_path)
    base = read(saved(current(1.0, 2.0), tmp_path, "NETCDF3_64BIT"), east="u", north="v")
    layer = read(file, east="u", north="v", unit="cm/s", factor=50.0)
    assert np.allclose(layer.values, base.values / 2, rtol=0, atol=1e-12)


def test_components_in_different_units(tmp_path):
    both = current(1.0, 200.0)
    base = read(saved(current(1.0, 2.0), tmp_path, "NETCDF3_64BIT"), east="u", north="v")
    both["v"].attrs["units"] = "cm s-1"
    layer = read(saved(both, tmp_path), east="u", north="v")
    assert np.allclose(layer.values, base.values, rtol=0, atol=1e-12)


def test_a_cell_missing_in_one_component_is_missing(tmp_path):
    both = current(1.0, 2.0)
    both["v"][10, 20] = np.nan
    layer = read(saved(both, tmp_path), east="u", north="v")
    assert layer.filled.any()
    assert layer.share_filled > 0


def test_x_velocity_on_axes_of_degrees_is_east(tmp_path):
    named = read(saved(current(1, 2, names=("x", "y")), tmp_path), east="u", north="v")
    plain = read(saved(current(1, 2), tmp_path, "NETCDF3_64BIT"), east="u", north="v")
    assert np.array_equal(named.values, plain.values)


@pytest.mark.parametrize("names", [("1", "2"), ("east", "north")])
def test_a_current_in_the_bands_of_a_geotiff(names, tmp_path):
    values = np.ones((2, LAT.size, LON.size)) * [[[1.0]], [[2.0]]]
    file = geotiff(tmp_path / "c.tif", values, origin(LON[0] - 0.05, 57.05, 0.1, 0.1))
    with rasterio.open(file, "r+") as data:
        data.descriptions = ("east", "north")
    plain = read(saved(current(1, 2), tmp_path), east="u", north="v")
    layer = read(file, east=names[0], north=names[1], unit="m/s")
    assert np.allclose(layer.values, plain.values, rtol=0, atol=1e-8)


@pytest.mark.parametrize(
    ("value", "unit", "to_unit", "expected"),
    [
        (0.0, "degC", "K", 273.15),
        (273.15, "K", "degC", 0.0),
        (300.0, "kelvin", "degree_Celsius", 26.85),
        (50.0, "degF", "degC", 10.0),
        (1500.0, "m", "km", 1.5),
        (35.0, "1e-3", "1", 0.035),
        (3.0, "mg m-3", "g m-3", 0.003),
        (250.0, "%", "1", 2.5),
        (7.0, "level of my own", None, 7.0),
    ],
)
def test_scalar_units(value, unit, to_unit, expected, tmp_path):
    file = saved(rectangular(values=np.full((LAT.size, LON.size), value), units=unit), tmp_path)
    layer = read(file, to_unit=to_unit)
    assert layer.unit == (to_unit or unit)
    assert np.allclose(layer.values, expected, rtol=1e-12, atol=1e-10)


def test_the_factor_comes_after_the_unit(tmp_path):
    file = saved(rectangular(values=np.full((LAT.size, LON.size), -1500.0)), tmp_path)
    layer = read(file, to_unit="km", factor=-1.0)
    assert np.allclose(layer.values, 1.5, rtol=0, atol=1e-12)
    assert layer.covers_time(np.array(HOURS)).all()
