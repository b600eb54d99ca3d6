"""The layer files: the sea's formulas sampled on grids of degrees, and the coast's outline."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import rasterio
import xarray as xr
from scipy.optimize import brentq
from trackfit_demo.sea import (
    INVENTED,
    ISLET,
    PLANE,
    Array,
    depth_m,
    gradient,
    stream_km2_h,
    temperature_c,
    to_lonlat,
)

WEST, EAST, SOUTH, NORTH = -23.0, -17.6, -40.6, -36.8  # the layers' area, degrees
LAYER_HOURS = 30 * 24


def grid(step_deg: float) -> tuple[Array, Array, Array, Array]:
    """Longitudes, latitudes (descending) of cell centres and their plane positions."""
    lon = np.arange(WEST + step_deg / 2, EAST, step_deg).round(6)
    lat = np.arange(NORTH - step_deg / 2, SOUTH, -step_deg).round(6)
    x, y = PLANE.transform(*np.meshgrid(lon, lat))
    return lon, lat, x, y


def write_depth(file: Path) -> None:
    """Depth as a GeoTIFF of whole metres; land is nodata."""
    step = 0.025
    lon, lat, x, y = grid(step)
    deep = depth_m(x, y)
    cells = np.where(deep > 0, np.maximum(deep.round(), 1), -32768).astype("int16")
    profile = {"driver": "GTiff", "dtype": "int16", "count": 1, "nodata": -32768}
    profile |= {"height": len(lat), "width": len(lon), "crs": "EPSG:4326"}
    profile |= {"compress": "deflate", "predictor": 2}
    corner = rasterio.Affine(step, 0.0, WEST, 0.0, -step, NORTH)
    with rasterio.open(file, "w", transform=corner, **profile) as out:
        out.write(cells, 1)
        out.set_band_description(1, "depth below the surface, positive down")
        out.set_band_unit(1, "m")
        out.update_tags(TITLE="Depth around Tarrow Island", COMMENT=INVENTED)


def ground_velocity(lon: Array, lat: Array, vx: Array, vy: Array) -> tuple[Array, Array]:
    """Plane velocity to (east, north) on the ground: solve J v_ground = v_plane (WGS 84)."""
    a, e2, d = 6378.137, 0.0066943799901413165, 1e-4
    phi = np.radians(lat)
    w = np.sqrt(1 - e2 * np.sin(phi) ** 2)
    per_east = 2 * np.radians(d) * a / w * np.cos(phi)  # km on the ground across 2 d degrees
    per_north = 2 * np.radians(d) * a * (1 - e2) / w**3
    x1, y1 = PLANE.transform(lon + d, lat)
    x0, y0 = PLANE.transform(lon - d, lat)
    x3, y3 = PLANE.transform(lon, lat + d)
    x2, y2 = PLANE.transform(lon, lat - d)
    xe, ye = (x1 - x0) / per_east, (y1 - y0) / per_east
    xn, yn = (x3 - x2) / per_north, (y3 - y2) / per_north
    det = xe * yn - xn * ye
    return (yn * vx - xn * vy) / det, (xe * vy - ye * vx) / det


def _dataset(lon: Array, lat: Array, hours: Array, title: str) -> xr.Dataset:
    about = {
        "Conventions": "CF-1.8",
        "title": f"{title} around Tarrow Island (invented)",
        "institution": "none: an invented place",
        "source": "formulas of demo_tracks/make.py",
        "history": "written by demo_tracks/make.py",
        "references": "demo_tracks/README.md",
        "comment": INVENTED,
    }
    axes = {
        "time": ("time", hours, {"standard_name": "time", "axis": "T"}),
        "lat": ("lat", lat, {"standard_name": "latitude", "units": "degrees_north", "axis": "Y"}),
        "lon": ("lon", lon, {"standard_name": "longitude", "units": "degrees_east", "axis": "X"}),
    }
    axes["time"][2].update(units="hours since 2025-01-01T00:00:00Z", calendar="standard")
    return xr.Dataset(coords=axes, attrs=about)


def _write_netcdf(data: xr.Dataset, file: Path, packing: tuple[float, float]) -> None:
    scale, offset = packing
    packed = {"dtype": "int16", "scale_factor": scale, "add_offset": offset, "_FillValue": -32768}
    encoding = {str(v): packed | {"zlib": True, "complevel": 9} for v in data.data_vars}
    encoding |= {str(c): {"_FillValue": None} for c in data.coords}
    data.to_netcdf(file, engine="h5netcdf", encoding=encoding)


def write_temperature(file: Path) -> None:
    """Daily temperature in kelvin, packed; longitudes 0..360, latitudes north to south."""
    lon, lat, x, y = grid(0.05)
    hours = np.arange(0.0, LAYER_HOURS + 1, 24.0)
    kelvin = 273.15 + np.stack([temperature_c(x, y, np.full_like(x, t)) for t in hours])
    data = _dataset(lon + 360, lat, hours, "Sea surface temperature")
    names = {"standard_name": "sea_surface_temperature", "units": "K"}
    wet = np.where(depth_m(x, y) > 0, kelvin, np.nan)
    data["sst"] = (("time", "lat", "lon"), wet, names | {"long_name": "surface temperature"})
    _write_netcdf(data, file, (0.001, 285.0))


def write_currents(file: Path) -> None:
    """Write the water's velocity in m s-1 every six hours."""
    lon, lat, x, y = grid(0.1)
    hours = np.arange(0.0, LAYER_HOURS + 1, 6.0)
    wet, east, north = depth_m(x, y) > 0, [], []
    lons, lats = np.meshgrid(lon, lat)
    for t in hours:
        px, py = gradient(stream_km2_h, x, y, np.full_like(x, t))
        ve, vn = ground_velocity(lons, lats, -py, px)
        east.append(np.where(wet, ve / 3.6, np.nan))
        north.append(np.where(wet, vn / 3.6, np.nan))
    data = _dataset(lon, lat, hours, "Surface currents")
    for name, values, word in (("u_east", east, "eastward"), ("v_north", north, "northward")):
        names = {"standard_name": f"{word}_sea_water_velocity", "units": "m s-1"}
        data[name] = (("time", "lat", "lon"), np.stack(values), names)
    _write_netcdf(data, file, (0.001, 0.0))


def _along_ray(r: float, x0: float, y0: float, c: float, s: float) -> float:
    return float(depth_m(np.float64(x0 + r * c), np.float64(y0 + r * s)))


def write_coast(file: Path) -> None:
    """Outlines of island and islet (RFC 7946: WGS 84, outer rings counter-clockwise)."""
    features = []
    rays = {"Tarrow Island": ((0.0, 0.0), 3.0, 17.0), "Tarrow Islet": (ISLET, 0.2, 4.0)}
    for name, ((x0, y0), near, far) in rays.items():
        ring = []
        for a in np.linspace(0, 2 * np.pi, 181)[:-1]:
            c, s = np.cos(a), np.sin(a)
            r = brentq(_along_ray, near, far, args=(x0, y0, c, s))
            ring.append((x0 + r * c, y0 + r * s))
        lonlat = to_lonlat(np.array([*ring, ring[0]])).round(5).tolist()
        shape = {"type": "Polygon", "coordinates": [lonlat]}
        about = {"name": name, "comment": INVENTED}
        features.append({"type": "Feature", "properties": about, "geometry": shape})
    body = {"type": "FeatureCollection", "features": features}
    file.write_text(json.dumps(body) + "\n", encoding="utf-8")
