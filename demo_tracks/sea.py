"""The invented sea around Tarrow Island, as formulas of plane position (km) and time (hours)."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from pyproj import Transformer
from scipy.optimize import brentq

INVENTED = "Invented island, invented animals, invented data: made for the demo of trackfit."
ISLAND_LON, ISLAND_LAT = -20.4, -38.6
COLONY_LONLAT = (-20.299, -38.642)
EPOCH = np.datetime64("2025-01-01T00:00:00")  # hour 0 of every formula
ISLET = (-12.0, 19.0)  # km east and north of the island's middle
PLANE = Transformer.from_crs(
    "EPSG:4326",
    f"+proj=laea +lat_0={ISLAND_LAT} +lon_0={ISLAND_LON} +datum=WGS84 +units=km",
    always_xy=True,
)
COLONY = np.array(PLANE.transform(*COLONY_LONLAT))  # km

Array = np.ndarray


def to_lonlat(xy_km: Array) -> Array:
    """Plane km to degrees, (n, 2)."""
    return np.column_stack(PLANE.transform(xy_km[:, 0], xy_km[:, 1], direction="INVERSE"))


def depth_m(x: Array, y: Array) -> Array:
    """Depth in metres, positive down, at plane positions in km; negative on land."""
    r, th = np.hypot(x, y), np.arctan2(y, x)
    wavy = 0.2 * np.cos(2 * th - 0.9) + 0.1 * np.cos(3 * th + 1.1) + 0.05 * np.cos(5 * th - 0.7)
    offshore = r - 10.5 * (1 + wavy + 0.02 * np.cos(9 * th + 2.0))
    shore = np.maximum(offshore, -3.0)  # keeps the formula tame inland, where nobody swims
    tau = 14.0 + 2.5 * np.cos(th - 2.6)
    q = shore / tau
    shelf = 350.0 * (1 - np.exp(-shore / 6.0))
    slope = 3300.0 * (1 - (1 + q + q * q / 2) * np.exp(-q))
    far = 1 - np.exp(-((r / 45.0) ** 4))
    c, s = np.cos(0.35), np.sin(0.35)
    along, across = x * c + y * s, y * c - x * s
    canyon = 800.0 * np.exp(-((across - 3 * np.sin(along / 9)) ** 2) / 50.0)
    canyon *= np.exp(-(((along - 38.0) / 18.0) ** 4))
    mount = 2850.0 * np.exp(-((x + 88) ** 2 / 420.0 + (y - 58) ** 2 / 300.0))
    knoll = 900.0 * np.exp(-((x - 120) ** 2 + (y - 75) ** 2) / 700.0)
    ridge = 620.0 * np.exp(-(((y + 130 - 0.4 * x + 18 * np.sin(x / 31)) / 26.0) ** 2))
    hills = 110 * np.sin(x / 21 + 0.8 * np.sin(y / 37)) * np.cos(y / 26 + np.sin(x / 45))
    swell = 170 * np.sin((x + 0.6 * y) / 83 + 1) + 0.9 * y
    main = shelf + slope + canyon - mount - knoll - far * (ridge - hills - swell)
    off_islet = np.hypot(x - ISLET[0], y - ISLET[1]) - 1.9
    islet = 60.0 * off_islet + 14.0 * off_islet**2
    return -25.0 * np.logaddexp(-main / 25.0, -islet / 25.0)  # a smooth minimum


def _front_km(x: Array, t: Array) -> Array:
    """Northing of the front, km, at easting `x` and hour `t`: two meanders, one each way."""
    east = 2 * np.pi * (x / 230.0 - t / 430.0)
    west = 2 * np.pi * (x / 125.0 + t / 290.0 + 0.3)
    return -24.0 + 0.28 * x + 24.0 * np.sin(east) + 8.0 * np.sin(west)


def _warm_eddy(x: Array, y: Array, t: Array) -> Array:
    return np.exp(-((x - 88 + 0.055 * t) ** 2 + (y + 52 - 0.015 * t) ** 2) / (2 * 36.0**2))


def temperature_c(x: Array, y: Array, t: Array) -> Array:
    """Surface temperature, degrees Celsius: a meandering front, a warm eddy, a slow warming."""
    step = 2.4 * np.tanh((y - _front_km(x, t)) / 26.0)
    return 11.3 + step + 0.9 * _warm_eddy(x, y, t) + 0.004 * y + 0.012 * t / 24.0


def _open_stream(x: Array, y: Array, t: Array) -> Array:
    jet = -18.0 * np.tanh((y - _front_km(x, t)) / 30.0)
    cold = np.exp(-((x + 95 - 0.03 * t) ** 2 + (y - 62) ** 2) / (2 * 40.0**2))
    day = 2 * np.pi * t / 24.07
    tide = -0.18 * np.cos(day) * y + 0.11 * np.sin(day) * x
    return jet + 95.0 * _warm_eddy(x, y, t) - 75.0 * cold - 0.2 * y + tide


def stream_km2_h(x: Array, y: Array, t: Array) -> Array:
    """Stream function of the water, km^2/h: velocity = (-d/dy, d/dx), free of divergence.

    It flattens towards the island's middle, so that the water goes round the island.
    """
    zero = np.zeros_like(x)
    round_island = 1 - np.exp(-(((x**2 + y**2) / 15.0**2) ** 2))
    return (_open_stream(x, y, t) - _open_stream(zero, zero, t)) * round_island


def gradient(f: Callable[..., Array], x: Array, y: Array, *t: Array) -> tuple[Array, Array]:
    """Central differences over 2 m: the formulas bend over kilometres, so about 1e-9 is lost."""
    d = 1e-3
    xs, ys = np.stack([x + d, x - d, x, x]), np.stack([y, y, y + d, y - d])
    v = f(xs, ys, *t)
    return (v[0] - v[1]) / (2 * d), (v[2] - v[3]) / (2 * d)


def shore_km(bearing_deg: float) -> float:
    """Distance from the island's middle to its shore on a bearing, km."""
    e, n = np.sin(np.radians(bearing_deg)), np.cos(np.radians(bearing_deg))
    return float(brentq(lambda r: float(depth_m(np.float64(r * e), np.float64(r * n))), 3.0, 17.0))


def offshore(bearing_deg: float, km: float) -> Array:
    """Plane position `km` off the shore on a bearing from the island's middle."""
    a = np.radians(bearing_deg)
    return (shore_km(bearing_deg) + km) * np.array([np.sin(a), np.cos(a)])
