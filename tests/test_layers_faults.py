"""Broken rasters and impossible requests: each gets its own sentence, none a foreign traceback."""

# ruff: noqa: E501  (tables of messages)

import re
from pathlib import Path

import numpy as np
import pytest
import rasterio
import xarray as xr
from layer_files import (
    BOX,
    HOURS,
    LAT,
    LON,
    PLANE,
    current,
    geotiff,
    on_cells,
    origin,
    read,
    rectangular,
    saved,
    timed,
)

from trackfit.faults import LayerError
from trackfit.layers import Box, LayerRequest, read_layer

FIELD = on_cells(LON[None, :], LAT[:, None])
TWICE = np.stack([FIELD, FIELD])


def changed(**values):
    """The plain data set with one coordinate replaced, attributes kept."""

    def build():
        dataset = rectangular()
        for name, new in values.items():
            dataset = dataset.assign_coords(
                {name: (name, new(dataset[name].values), dataset[name].attrs)}
            )
        return dataset

    return build


def times(hours, **attributes):
    return lambda: timed(hours, np.broadcast_to(FIELD, (len(hours), *FIELD.shape)), **attributes)


def values(change):
    return lambda: rectangular(values=change(FIELD.copy()))


def some_infinite(field):
    field[9:11, 18] = np.inf
    return field


def staggered():
    both = current(0.5, 0.1)
    north = both[["v"]].assign_coords(lat=("lat", LAT + 0.05, both.lat.attrs)).rename(lat="lat_v")
    return both[["u"]].merge(north)


def grid_relative():
    row, col = np.mgrid[-20:21, -20:21]
    one = {"units": "m s-1"}
    return xr.Dataset(
        {
            "u": (("y", "x"), 0.0 * row, one | {"standard_name": "sea_water_x_velocity"}),
            "v": (("y", "x"), 0.0 * row, one | {"standard_name": "sea_water_y_velocity"}),
        },
        {
            "lon": (("y", "x"), -3 + 0.1 * col + 0.02 * row, {"units": "degrees_east"}),
            "lat": (("y", "x"), 56 + 0.1 * row, {"units": "degrees_north"}),
        },
    )


def mesh():
    points = np.arange(50.0)
    return xr.Dataset(
        {"depth": (("node", "copy"), np.zeros((50, 2)), {"units": "m"})},
        {
            "lon": ("node", -3 + points / 50, {"units": "degrees_east"}),
            "lat": ("node", 56 + points / 50, {"units": "degrees_north"}),
        },
    )


def without_unit(build=rectangular):
    def bare():
        dataset = build()
        for values in dataset.data_vars.values():
            values.attrs.pop("units", None)
        return dataset

    return bare


def of_text():
    return rectangular().assign(sort=(("lat", "lon"), np.full(FIELD.shape, "sand")))


def levels():
    return rectangular().expand_dims(level=[0.5, 10.0, 50.0])


BROKEN = {
    "wrong name": (
        rectangular,
        {"variable": "dpeth"},
        r"'dpeth' is not in the file; there are depth; did you mean 'depth'\?",
    ),
    "several variables": (
        lambda: current(1, 1),
        {},
        r"2 gridded variables \(u, v\); set layers.depth.variable",
    ),
    "text variable": (of_text, {"variable": "sort"}, r"'sort' holds .* values, not numbers"),
    "further dimension": (
        levels,
        {},
        r"further dimension 'level' of 3 \(values 0.5 to 50\); set layers.depth.select.level",
    ),
    "unknown select": (
        rectangular,
        {"select": {"level": 1.0}},
        r"select.level: variable 'depth' has no such dimension; there are lat, lon",
    ),
    "far select": (
        levels,
        {"select": {"level": 900.0}},
        r"select.level = 900 is far from all of its values, 0.5 to 50",
    ),
    "no longitude": (
        lambda: rectangular().drop_vars("lon"),
        {},
        r"has no longitude: no coordinate on \(lat, lon\) has units 'degrees_east'",
    ),
    "metres as degrees": (
        changed(lon=lambda x: x * 1e5),
        {},
        r"longitude -500000 is no degree; are the axes in metres\?",
    ),
    "latitude of 95": (
        changed(lat=lambda y: y + 40),
        {},
        r"latitude 97 is outside -90 to 90; are the axes in metres or swapped\?",
    ),
    "latitudes shuffled": (
        changed(lat=lambda y: np.roll(y, 5)),
        {},
        r"latitude neither rises nor falls throughout",
    ),
    "longitude twice": (
        changed(lon=lambda x: np.r_[x[:1], x[:-1]]),
        {},
        r"longitude 355 stands twice",
    ),
    "longitude missing": (
        changed(lon=lambda x: np.r_[np.nan, x[1:]]),
        {},
        r"longitude has missing values",
    ),
    "one row": (
        lambda: rectangular().isel(lat=[10]),
        {},
        r"latitude has 1 value only; a layer needs at least 2 x 2 cells",
    ),
    "elsewhere": (
        changed(lon=lambda x: x + 40),
        {},
        r"covers lon 35.00 to 39.00, lat 55.00 to 57.00 degrees, the study needs lon -3.6\d to -2.3\d, lat 55.7\d to 56.2\d degrees: they do not touch",
    ),
    "a mesh": (
        mesh,
        {},
        r"longitude \('node',\) and latitude \('node',\) make no grid of rows and columns",
    ),
    "all missing": (
        values(lambda f: f * np.nan),
        {},
        r"all of its values in the study area are missing",
    ),
    "one time missing": (
        lambda: timed(HOURS, np.stack([FIELD, np.nan * FIELD])),
        {},
        r"missing at 1 of 2 times, the first at hour 438010 since 1970",
    ),
    "infinite": (values(some_infinite), {}, r"2 of its values are infinite"),
    "no unit to convert from": (
        without_unit(),
        {"to_unit": "m"},
        r"the file gives no unit, so values cannot become m; set layers.depth.unit",
    ),
    "unknown unit": (
        lambda: rectangular(units="bananas"),
        {"to_unit": "m"},
        r"unit 'bananas' is not understood; set layers.depth.unit",
    ),
    "unknown to_unit": (
        rectangular,
        {"to_unit": "ells of old"},
        r"unit 'ells of old' is not understood; set layers.depth.to_unit",
    ),
    "other kind of unit": (
        rectangular,
        {"to_unit": "degC"},
        r"unit 'm' cannot become 'degC': another kind of unit",
    ),
    "current without unit": (
        without_unit(lambda: current(1, 1)),
        {"east": "u", "north": "v"},
        r"the file gives no unit, so values cannot become km/h; set layers.depth.unit to the unit they have \(for example 'm s-1'\)",
    ),
    "current in degrees": (
        lambda: current(1, 1, units="degC"),
        {"east": "u", "north": "v"},
        r"unit 'degC' cannot become 'km/h'",
    ),
    "half a current": (
        lambda: current(1, 1),
        {"east": "u"},
        r"a current needs both east and north",
    ),
    "current and variable": (
        lambda: current(1, 1),
        {"east": "u", "north": "v", "variable": "u"},
        r"either variable, or east and north",
    ),
    "current with to_unit": (
        lambda: current(1, 1),
        {"east": "u", "north": "v", "to_unit": "m/s"},
        r"currents always become km/h; leave out to_unit",
    ),
    "staggered current": (
        staggered,
        {"east": "u", "north": "v"},
        r"'u' and 'v' stand on different grids",
    ),
    "grid-relative current": (
        grid_relative,
        {"east": "u", "north": "v"},
        r"'u' is sea_water_x_velocity, a velocity along the grid's own axes",
    ),
    "factor 0": (rectangular, {"factor": 0.0}, r"factor is 0.0; it must be a number other than 0"),
    "resolution below 0": (
        rectangular,
        {"resolution_km": -1.0},
        r"resolution_km is -1.0; it must be above 0",
    ),
    "too fine": (
        rectangular,
        {"resolution_km": 0.01},
        r"a grid of 0.01 km over the study area has 48.0 million nodes, more than 4 million; set layers.depth.resolution_km to 0.0\d or more",
    ),
    "times unsorted": (
        times([HOURS[0], HOURS[1], HOURS[0] + 1]),
        {},
        r"times are out of order: 2019-12-20T01:00:00Z comes after 2019-12-20T10:00:00Z",
    ),
    "time twice": (times([HOURS[0], HOURS[0]]), {}, r"time 2019-12-20T00:00:00Z stands twice"),
    "time missing": (times([HOURS[0], np.nan]), {}, r"a time is missing"),
    "time without unit": (
        times([0, 1], units="level"),
        {},
        r"time unit 'level' \(calendar 'standard'\) is not understood",
    ),
    "time unit nonsense": (
        times([0, 1], units="fortnights since 1970-01-01"),
        {},
        r"time unit 'fortnights since 1970-01-01'",
    ),
    "30 February": (
        times([59.0, 60.0], units="days since 2019-01-01", calendar="360_day"),
        {},
        r"date 2019-02-30T00:00:00 of calendar '360_day' is no real date",
    ),
    "other years": (
        times([0.0, 1.0]),
        {},
        r"times run from 1970-01-01T00:00:00Z to 1970-01-01T01:00:00Z, the fixes from 2019-12-20T00:00:00Z .*: they have no time in common",
    ),
}


@pytest.mark.parametrize("name", BROKEN)
def test_broken_netcdf(name, tmp_path):
    build, request, message = BROKEN[name]
    file = saved(build(), tmp_path)
    with pytest.raises(LayerError, match=message) as caught:
        read(file, **request)
    assert str(caught.value).startswith(f"layer 'depth' ({file}): ")


def test_different_times_of_a_current(tmp_path):
    first = timed(HOURS, TWICE).rename(sst="u")
    other = timed(np.array(HOURS) + 1, TWICE).rename(sst="v", time="time_v")
    file = saved(first.merge(other), tmp_path)
    with pytest.raises(LayerError, match=r"'u' and 'v' have different times"):
        read(file, east="u", north="v")


def write(file: Path, content: bytes) -> Path:
    file.write_bytes(content)
    return file


def test_files_that_are_no_rasters(tmp_path):
    with pytest.raises(LayerError, match=r"there is no such file; check the path"):
        read(tmp_path / "none.nc")
    with pytest.raises(LayerError, match=r"this is a folder; name a file in it"):
        read(tmp_path)
    with pytest.raises(LayerError, match=r"the file is empty \(0 bytes\)"):
        read(write(tmp_path / "empty.nc", b""))
    with pytest.raises(LayerError, match=r"is neither NetCDF nor GeoTIFF"):
        read(write(tmp_path / "page.nc", b"<html>Please log in</html>"))
    with pytest.raises(LayerError, match=r"CDF-5 kind; convert it \(nccopy -k nc4 IN OUT\)"):
        read(write(tmp_path / "five.nc", b"CDF\x05" + bytes(60)))


@pytest.mark.parametrize("kind", ["NETCDF4", "NETCDF3_64BIT"])
@pytest.mark.parametrize("share", [0.02, 0.3, 0.6, 0.95])
def test_truncated_netcdf(kind, share, tmp_path):
    whole = saved(rectangular(), tmp_path, kind).read_bytes()
    file = write(tmp_path / "cut.nc", whole[: int(len(whole) * share)])
    with pytest.raises(LayerError, match=re.escape(f"layer 'depth' ({file}): ")):
        read(file)


def raster(tmp_path, values=FIELD[None], transform=None, **profile):
    transform = transform or origin(LON[0] - 0.05, 57.05, 0.1, 0.1)
    return geotiff(tmp_path / "r.tif", values, transform, **profile)


TURNED = rasterio.Affine(0.1, 0.02, -5.0, 0.02, -0.1, 57.0)
RASTERS = {
    "no such band": ({}, {"band": 3}, r"band 3 is asked for; the file has bands 1 to 1"),
    "a variable": ({}, {"variable": "z"}, r"variable 'z' is asked for, but a GeoTIFF has bands"),
    "a level": ({}, {"select": {"z": 1.0}}, r"select needs a NetCDF file"),
    "no projection": ({"crs": None}, {}, r"no coordinate reference system"),
    "turned": (
        {"transform": TURNED},
        {},
        r"turned against its axes; make it straight with gdalwarp",
    ),
    "complex": (
        {"values": FIELD[None] + 0j},
        {},
        r"band 1 holds complex128 values, not plain numbers",
    ),
    "elsewhere": (
        {"transform": origin(60.0, 20.0, 0.1, 0.1)},
        {},
        r"covers lon 60.05 to 64.05, lat 17.95 to 19.95 degrees",
    ),
    "only nodata": (
        {"values": FIELD[None] * 0 - 9, "nodata": -9.0},
        {},
        r"all of its values in the study area are missing",
    ),
    "component": ({}, {"east": "1", "north": "2"}, r"band '2' is not in the file; there are 1"),
    "local axes": (
        {"crs": 'LOCAL_CS["harbour",UNIT["metre",1]]'},
        {},
        r"is Engineering CRS, not a place on earth",
    ),
}


@pytest.mark.parametrize("name", RASTERS)
def test_broken_geotiff(name, tmp_path):
    profile, request, message = RASTERS[name]
    with pytest.raises(LayerError, match=message):
        read(raster(tmp_path, **profile), **request)


@pytest.mark.parametrize("share", [0.02, 0.5, 0.9])
def test_truncated_geotiff(share, tmp_path):
    whole = raster(tmp_path, compress="deflate").read_bytes()
    file = write(tmp_path / "cut.tif", whole[: int(len(whole) * share)])
    with pytest.raises(LayerError, match=r"is the file whole and of the kind it says\?"):
        read(file)


def test_a_box_without_area():
    with pytest.raises(LayerError, match=r"study area .* km is empty"):
        Box(0.0, 0.0, 0.0, 1.0)


def test_too_many_values_are_not_loaded(tmp_path, monkeypatch):
    monkeypatch.setattr("trackfit.layers.source.MAX_VALUES", 100)
    with pytest.raises(LayerError, match=r"cut the file to the study's months, or make a coarser"):
        read(saved(rectangular(), tmp_path))


def test_too_many_nodes_over_time(tmp_path, monkeypatch):
    monkeypatch.setattr("trackfit.layers.read.MAX_VALUES", 100)
    request = LayerRequest("sst", saved(timed(HOURS, TWICE), tmp_path))
    with pytest.raises(LayerError, match=r"nodes at 2 times .* layers.sst.resolution_km above"):
        read_layer(request, PLANE, BOX, HOURS)
