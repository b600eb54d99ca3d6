"""The ways in which CF files and GeoTIFFs say the same thing."""

import numpy as np
import pyproj
import pytest
import rasterio
import xarray as xr
from layer_files import (
    BOX,
    HOURS,
    LAT,
    LON,
    geotiff,
    nodes_km,
    on_cells,
    origin,
    plane_field,
    read,
    rectangular,
    saved,
    timed,
    worst,
)

from trackfit.frame import Plane
from trackfit.layers import Box
from trackfit.layers.layer import Layer

# A plane's straight line bends in degrees: splines of 0.1 degree cells follow it to about a
# millionth of the field's range (24).
BENT = 2e-6
FIELD = on_cells(LON[None, :], LAT[:, None])


def plain():
    return rectangular()


def without_attributes():
    dataset = rectangular()
    dataset.lon.attrs, dataset.lat.attrs = {}, {}
    return dataset


def renamed(**attributes):
    def build():
        dataset = rectangular().rename(lon="easting_deg", lat="northing_deg")
        dataset["easting_deg"].attrs = {k: v[0] for k, v in attributes.items()}
        dataset["northing_deg"].attrs = {k: v[1] for k, v in attributes.items()}
        return dataset

    return build


def falling_latitudes():
    return rectangular().isel(lat=slice(None, None, -1))


def other_order():
    return rectangular().transpose("lon", "lat")


def longitudes_to_360():
    dataset = rectangular()
    return dataset.assign_coords(lon=("lon", LON % 360, dataset.lon.attrs))


def seam_inside():
    """Longitudes 0..360 of a whole turn whose seam is not where the study is, cut at -3."""
    lon = np.arange(0.0, 360.0, 0.5)
    lat = np.arange(54.0, 58.1, 0.5)
    near = (lon[None, :] + 180) % 360 - 180
    far = np.abs(near + 3) > 20
    values = np.where(far, 0.0, on_cells(np.where(far, 0.0, near), lat[:, None]))
    return rectangular(lon, lat, values)


def length_one_dimensions():
    return rectangular().expand_dims(depth_level=[0.5], time=[0.0])


def curved():
    """A grid turned by 30 degrees about the study."""
    row, col = np.mgrid[-30:31, -40:41]
    turn = np.radians(30)
    lon = -3 + 0.08 * (col * np.cos(turn) - row * np.sin(turn))
    lat = 56 + 0.05 * (col * np.sin(turn) + row * np.cos(turn)) + 1e-5 * row**2
    return xr.Dataset(
        {"depth": (("j", "i"), on_cells(lon, lat), {"units": "m", "coordinates": "lat2 lon2"})},
        {
            "lon2": (("j", "i"), lon, {"units": "degrees_east"}),
            "lat2": (("j", "i"), lat, {"units": "degrees_north"}),
        },
    )


def curved_other_order():
    return curved().transpose("i", "j")


def curved_with_gaps():
    """Some models give no coordinates where they have no sea: here in a far corner."""
    dataset = curved()
    hole = {"i": slice(0, 5), "j": slice(0, 5)}
    for name in ("lon2", "lat2"):
        dataset[name][hole] = np.nan
    return dataset


def uneven_latitudes():
    lat = 56 + np.sinh(np.linspace(-1.2, 1.2, 41))
    return rectangular(LON, lat)


def projected():
    """Metres of a polar stereographic map with a grid_mapping, x in km."""
    crs = pyproj.CRS(3995)
    to_map = pyproj.Transformer.from_crs(4326, crs, always_xy=True)
    x0, y0 = to_map.transform(-3.0, 56.0)
    x, y = x0 + np.arange(-120e3, 120e3, 5e3), y0 + np.arange(120e3, -120e3, -5e3)
    lon, lat = to_map.transform(*np.meshgrid(x, y), direction="INVERSE")
    mapping = {k: v for k, v in crs.to_cf().items() if not isinstance(v, (list, tuple))}
    return xr.Dataset(
        {
            "depth": (("y", "x"), on_cells(lon, lat), {"units": "m", "grid_mapping": "polar"}),
            "polar": ((), 0, mapping),
        },
        {
            "x": ("x", x / 1e3, {"standard_name": "projection_x_coordinate", "units": "km"}),
            "y": ("y", y, {"standard_name": "projection_y_coordinate", "units": "m"}),
        },
    )


def turned_pole():
    """Degrees about a pole at 162 W, 39.25 N, turned by spherical trigonometry here."""
    pole = np.radians(39.25)
    x, y = np.arange(-14.0, -9.0, 0.08), np.arange(4.5, 9.5, 0.08)
    turned_lon, turned_lat = np.radians(np.meshgrid(x, y))
    up = np.sin(turned_lat) * np.sin(pole) + np.cos(turned_lat) * np.cos(pole) * np.cos(turned_lon)
    east = np.cos(turned_lat) * np.sin(turned_lon)
    ahead = np.cos(turned_lat) * np.cos(turned_lon) * np.sin(pole) - np.sin(turned_lat) * np.cos(
        pole
    )
    lon, lat = 18 + np.degrees(np.arctan2(east, ahead)), np.degrees(np.arcsin(up))
    shift = {"grid_mapping_name": "rotated_latitude_longitude"}
    shift |= {"grid_north_pole_latitude": 39.25, "grid_north_pole_longitude": -162.0}
    return xr.Dataset(
        {
            "depth": (("rlat", "rlon"), on_cells(lon, lat), {"units": "m", "grid_mapping": "pole"}),
            "pole": ((), 0, shift),
        },
        {
            "rlon": ("rlon", x, {"standard_name": "grid_longitude", "units": "degrees"}),
            "rlat": ("rlat", y, {"standard_name": "grid_latitude", "units": "degrees"}),
        },
    )


VARIANTS = {
    "plain": plain,
    "no attributes": without_attributes,
    "units only": renamed(units=("degrees_east", "degrees_north")),
    "units in another spelling": renamed(units=("degree_E", "degreeN")),
    "standard names only": renamed(standard_name=("longitude", "latitude")),
    "falling latitudes": falling_latitudes,
    "lon before lat": other_order,
    "longitudes 0..360": longitudes_to_360,
    "whole turn, seam at the study": seam_inside,
    "length-one dimensions": length_one_dimensions,
    "curved": curved,
    "curved, other order": curved_other_order,
    "curved, cells without coordinates": curved_with_gaps,
    "uneven latitudes": uneven_latitudes,
    "projected axes": projected,
    "turned pole": turned_pole,
}


@pytest.mark.parametrize("kind", ["NETCDF4", "NETCDF3_64BIT"])
@pytest.mark.parametrize("name", VARIANTS)
def test_every_variant_gives_the_same_field(name, kind, tmp_path):
    layer = read(saved(VARIANTS[name](), tmp_path, kind))
    assert layer.fixed
    assert layer.unit == "m"
    assert layer.covers(BOX.lattice_km()).all()
    assert worst(layer) < (2e-4 if "seam" in name else BENT)  # cells of 0.5 degrees: 5^4 coarser


@pytest.mark.parametrize("packed", ["int16", "float32"])
def test_packed_values_and_fill_values_are_decoded(packed, tmp_path):
    encoding = {"dtype": packed, "_FillValue": -9999}
    if packed == "int16":
        encoding |= {"scale_factor": 0.001, "add_offset": 5.0}
    dataset = rectangular()
    dataset["depth"][8:10, 18:20] = np.nan
    layer = read(saved(dataset, tmp_path, encoding={"depth": encoding}))
    # The hole of 2 x 2 cells is filled to within the bend of the field; int16 adds 0.0005.
    assert worst(layer) < 5e-3
    assert layer.share_filled > 0
    assert layer.filled.any()


def test_values_outside_the_valid_range_are_missing(tmp_path):
    dataset = rectangular(valid_min=-1000.0, valid_max=1000.0)
    dataset["depth"][9, 19] = 1e20
    layer = read(saved(dataset, tmp_path))
    assert layer.filled.sum() > 0
    assert worst(layer) < 1e-2  # the filled cell is the mean of its neighbours


@pytest.mark.parametrize(
    "bounds",
    [
        {"valid_range": np.array([-100, 100], "int16")},
        {"valid_min": np.int16(-100), "valid_max": np.int16(100)},
        {"valid_range": np.array([4.0, 6.0])},
        {"valid_max": 6.0},
    ],
)
def test_bounds_of_packed_values_in_either_unit(bounds, tmp_path):
    """Whole numbers bound the packed values (scale 0.01, offset 5), fractions the unpacked."""
    dataset = rectangular(values=np.full((LAT.size, LON.size), 6.0), **bounds)
    dataset["depth"][9, 19] = 6.5
    packing = {"dtype": "int16", "scale_factor": 0.01, "add_offset": 5.0, "_FillValue": -32768}
    layer = read(saved(dataset, tmp_path, encoding={"depth": packing}))
    assert layer.filled.any()
    assert not layer.filled.all()
    assert np.allclose(layer.values, 6.0, rtol=0, atol=1e-6)  # single precision


def test_a_level_is_selected_and_the_nearest_taken(tmp_path):
    levels = np.array([0.5, 10.0, 50.0])
    dataset = rectangular().expand_dims(level=levels) * xr.DataArray(levels, dims="level")
    dataset["depth"].attrs = {"units": "m"}
    layer = read(saved(dataset, tmp_path), select={"level": 12.0})
    assert worst(layer, lambda xy: 10 * plane_field(xy)) < 10 * BENT


def test_the_only_gridded_variable_need_not_be_named(tmp_path):
    file = saved(rectangular(), tmp_path)
    assert np.array_equal(read(file).values, read(file, variable="depth").values)


@pytest.mark.parametrize("offset", [0.0, 360.0])
def test_a_study_across_the_antimeridian(offset, tmp_path):
    plane = Plane.centred_on([180.0], [-17.0])
    lon = np.concatenate([np.arange(-180.0, -177.0, 0.1), np.arange(177.0, 180.0, 0.1)])
    lon = np.sort(lon % 360) if offset else lon
    lat = np.arange(-18.0, -16.0, 0.1)
    values = on_cells(lon[None, :], lat[:, None], plane)
    layer = read(saved(rectangular(lon, lat, values), tmp_path), plane=plane)
    assert layer.covers(BOX.lattice_km()).all()
    assert worst(layer) < BENT


def test_a_study_about_the_pole_has_no_seam(tmp_path):
    plane = Plane.centred_on([0.0, 90.0, 180.0, -90.0], [89.0] * 4)
    lon, lat = np.arange(0.0, 360.0, 3.0), np.arange(80.0, 90.01, 0.25)
    values = on_cells(lon[None, :], lat[:, None], plane)
    layer = read(
        saved(rectangular(lon, lat, values), tmp_path), plane, Box(-90.0, -90.0, 90.0, 90.0)
    )
    away = np.linalg.norm(nodes_km(layer), axis=-1) > 30
    assert layer.covered[away].all()
    error = np.abs(layer.values[0, ..., 0] - plane_field(nodes_km(layer)))
    assert error[away].max() < 2e-3  # cells of 3 degrees of longitude bend strongly near the pole


def raster(tmp_path, step=0.1, **profile):
    lat = np.arange(57.0, 54.99, -step)
    values = on_cells(LON[None, :], lat[:, None])[None]
    transform = origin(LON[0] - 0.05, 57.0 + step / 2, 0.1, step)
    return geotiff(tmp_path / "depth.tif", values, transform, **profile)


def test_a_geotiff_in_degrees(tmp_path):
    layer = read(raster(tmp_path), unit="m")
    assert layer.unit == "m"
    assert worst(layer) < BENT


@pytest.mark.parametrize("crs", ["EPSG:32630", "EPSG:3995", "EPSG:4258"])
def test_a_geotiff_of_any_projection(crs, tmp_path):
    to_map = pyproj.Transformer.from_crs(4326, crs, always_xy=True)
    x0, y0 = to_map.transform(-3.0, 56.0)
    step = 0.05 if crs == "EPSG:4258" else 4000.0
    x, y = x0 + step * np.arange(-30, 31), y0 + step * np.arange(30, -31, -1)
    lon, lat = to_map.transform(*np.meshgrid(x, y), direction="INVERSE")
    transform = origin(x[0] - step / 2, y[0] + step / 2, step, step)
    file = geotiff(tmp_path / "d.tif", on_cells(lon, lat)[None], transform, crs)
    assert worst(read(file)) < BENT


def test_bands_nodata_scale_and_unit_of_a_geotiff(tmp_path):
    lat = np.arange(57.0, 54.99, -0.1)
    values = np.rint(100 * on_cells(LON[None, :], lat[:, None])).astype("int16")
    values[9:11, 15:17] = -32768
    transform = origin(LON[0] - 0.05, 57.05, 0.1, 0.1)
    file = geotiff(tmp_path / "d.tif", np.stack([0 * values, values]), transform, nodata=-32768)
    with rasterio.open(file, "r+") as data:
        data.scales, data.offsets, data.units = (1.0, 0.01), (0.0, 0.0), ("", "m")
    layer = read(file, band=2, to_unit="cm")
    assert layer.unit == "cm"
    assert layer.filled.sum() >= 4
    # Whole hundredths: rounding gives up to 0.005 m, the filled hole a little.
    assert worst(layer, lambda xy: 100 * plane_field(xy)) < 1.0


def test_times_that_bracket_the_span_are_delivered(tmp_path):
    hours = HOURS[0] + np.arange(-48.0, 72.0, 6.0)
    values = FIELD[None] + hours[:, None, None] - HOURS[0]
    layer = read(saved(timed(hours, values), tmp_path), hours=(HOURS[0] + 1, HOURS[0] + 10))
    assert layer.hours.tolist() == [HOURS[0], HOURS[0] + 6, HOURS[0] + 12]
    assert not layer.fixed
    steps = np.diff(layer.values[..., 0], axis=0)
    assert np.allclose(steps, 6.0, rtol=0, atol=1e-8)
    assert layer.covers_time(HOURS[0] + np.array([0.0, 12.0, 12.1])).tolist() == [True, True, False]


@pytest.mark.parametrize("at", [-48.0, 0.0, 66.0])
def test_one_moment_still_gets_two_slices(at, tmp_path):
    hours = HOURS[0] + np.arange(-48.0, 72.0, 6.0)
    file = saved(timed(hours, np.broadcast_to(FIELD, (20, *FIELD.shape))), tmp_path)
    layer = read(file, hours=(HOURS[0] + at, HOURS[0] + at))
    assert layer.hours.size == 2
    assert layer.covers_time(np.array([HOURS[0] + at])).all()


@pytest.mark.parametrize(
    ("number", "attributes"),
    [
        # 15634.75 days = 2012-10-21T18:00:00Z = 1350842400 s: recomputed with datetime and cftime.
        (15634.75, {"units": "days since 1970-01-01"}),
        (15634.75 * 24, {"units": "hours since 1970-01-01 00:00:00"}),
        (1350842400.0, {"units": "seconds since 1970-01-01T00:00:00Z", "calendar": "gregorian"}),
        (15634.75 + 1 / 24, {"units": "days since 1970-01-01 00:00:00 +01:00"}),
        # 42 years to 2012 without 10 leap days, and 29 February 2012 before October.
        (15634.75 - 11, {"units": "days since 1970-01-01", "calendar": "noleap"}),
        # 1 January 1970 of the Julian calendar is the real 14 January.
        (15634.75 - 13, {"units": "days since 1970-01-01", "calendar": "julian"}),
    ],
)
def test_time_units_and_calendars(number, attributes, tmp_path):
    hour = 1350842400 / 3600
    unit = {"days": 1.0, "hours": 24.0, "seconds": 86400.0}[attributes["units"].split()[0]]
    dataset = timed([number, number + unit], np.stack([FIELD, FIELD]), **attributes)
    layer = read(saved(dataset, tmp_path), hours=(hour, hour + 24))
    assert layer.hours == pytest.approx([hour, hour + 24], abs=1e-6)  # cftime counts microseconds


def test_covers_needs_all_four_nodes():
    covered = np.ones((4, 5), bool)
    covered[0, 0] = False
    layer = Layer(
        "a", "m", 10.0, 20.0, 2.0, np.zeros(1), np.zeros((1, 4, 5, 1)), covered, ~covered, 0.0, "f"
    )
    points = np.array([[11, 21], [12, 22], [13, 21], [18, 26], [18.1, 26], [9, 21], [np.nan, 20]])
    assert layer.covers(points).tolist() == [False, True, True, True, False, False, False]
    assert layer.covers(np.empty((0, 2))).tolist() == []
