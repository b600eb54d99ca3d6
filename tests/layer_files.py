"""Small raster files with known contents, for the tests of layers."""

from pathlib import Path

import numpy as np
import rasterio
import xarray as xr

from trackfit.frame import Plane
from trackfit.layers import Box, Layer, LayerRequest, read_layer

PLANE = Plane.centred_on([-3.0], [56.0])
BOX = Box(-40.0, -30.0, 40.0, 30.0)
HOURS = (438_000.0, 438_010.0)
LON = np.round(np.arange(-5.0, -1.0 + 1e-9, 0.1), 6)
LAT = np.round(np.arange(55.0, 57.0 + 1e-9, 0.1), 6)


def plane_field(xy_km):
    """A linear function of the plane: what every reader must give back."""
    return 5.0 + 0.3 * xy_km[..., 0] - 0.2 * xy_km[..., 1]


def on_cells(lon, lat, plane=PLANE, field=plane_field):
    """The field on cells given by degrees of any shape."""
    lon, lat = np.broadcast_arrays(lon, lat)
    return field(plane.to_plane(lon.ravel(), lat.ravel()).reshape(*lon.shape, 2))


def rectangular(lon=LON, lat=LAT, values=None, name="depth", units="m", **attributes):
    """A data set on axes of degrees, tagged the CF way."""
    values = on_cells(lon[None, :], lat[:, None]) if values is None else values
    return xr.Dataset(
        {name: (("lat", "lon"), values, {"units": units, **attributes})},
        {
            "lat": ("lat", lat, {"units": "degrees_north", "standard_name": "latitude"}),
            "lon": ("lon", lon, {"units": "degrees_east", "standard_name": "longitude"}),
        },
    )


def timed(hours, values, **attributes):
    """A data set on the standard axes that changes in time."""
    still = rectangular(values=np.zeros((LAT.size, LON.size)))
    units = {"units": "hours since 1970-01-01", **attributes}
    return xr.Dataset(
        {"sst": (("time", "lat", "lon"), values, {"units": "degC"})},
        {"time": ("time", np.asarray(hours, float), units), "lat": still.lat, "lon": still.lon},
    )


def current(east, north, lon=LON, lat=LAT, units="m s-1", names=("eastward", "northward")):
    """A current of the same velocity everywhere."""
    shape = (lat.size, lon.size)
    parts = [
        rectangular(lon, lat, np.full(shape, value), name, units, standard_name=f"{long}_velocity")
        for value, name, long in (
            (east, "u", names[0] + "_sea_water"),
            (north, "v", names[1] + "_sea_water"),
        )
    ]
    return xr.merge(parts)


def saved(dataset, folder: Path, kind: str = "NETCDF4", encoding=None) -> Path:
    """Write NetCDF-4 or NetCDF-3."""
    file = folder / f"{kind}.nc"
    engine = "h5netcdf" if kind == "NETCDF4" else "scipy"
    dataset.to_netcdf(file, engine=engine, format=kind, encoding=encoding)
    return file


def origin(west, north, width, height):
    """The transform of a north-up raster from its corner and the size of its cells."""
    return rasterio.Affine(width, 0.0, west, 0.0, -height, north)


def geotiff(file: Path, values, transform, crs="EPSG:4326", **profile) -> Path:
    """Write bands (bands, rows, cols) from the north down."""
    values = np.asarray(values)
    bands, height, width = values.shape
    with rasterio.open(
        file, "w", driver="GTiff", width=width, height=height, count=bands, dtype=values.dtype,
        crs=crs, transform=transform, **profile,
    ) as out:  # fmt: skip
        out.write(values)
    return file


def read(file: Path, plane=PLANE, box=BOX, hours=HOURS, **request) -> Layer:
    """Read a layer called depth."""
    return read_layer(LayerRequest("depth", Path(file), **request), plane, box, hours)


def nodes_km(layer: Layer):
    """The plane positions (ny, nx, 2) of a layer's nodes."""
    ny, nx = layer.covered.shape
    x = layer.x0_km + layer.spacing_km * np.arange(nx)
    y = layer.y0_km + layer.spacing_km * np.arange(ny)
    return np.stack(np.meshgrid(x, y), axis=-1)


def worst(layer: Layer, field=plane_field) -> float:
    """The largest error of a fixed scalar layer at its covered nodes."""
    error = layer.values[0, ..., 0] - field(nodes_km(layer))
    return float(np.abs(error[layer.covered]).max())
