"""What a track figure shows beside the track: its surroundings and its fixes."""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.frame import Plane
from trackfit.layers.layer import Coast, Layer


@dataclass(frozen=True)
class Scene:
    """What a track figure shows beside the track.

    Attributes
    ----------
    plane
        The study's local plane, the frame of the map.
    coast
        Land in plane km.
    depth
        A layer to draw as labelled contours; its first hour if it changes in time.
    colony_lonlat
        A point to mark, in degrees, and in `colony_name` what it is.
    """

    plane: Plane
    coast: Coast | None = None
    depth: Layer | None = None
    colony_lonlat: tuple[float, float] | None = None
    colony_name: str = "colony"


@dataclass(frozen=True)
class FixPoints:
    """Fixes as drawn: times in UTC and degrees."""

    time: pd.DatetimeIndex
    lonlat: Float[np.ndarray, "n 2"]

    @classmethod
    def used(cls, table: pd.DataFrame) -> "FixPoints":
        """Take the fixes in use."""
        time = pd.DatetimeIndex(pd.to_datetime(table["time"], utc=True))
        return cls(time, table[["lon", "lat"]].to_numpy(float))

    @classmethod
    def set_aside(cls, table: pd.DataFrame) -> "FixPoints":
        """Take those fixes set aside whose cells, kept as text, are a time and a position."""
        lon, lat = (pd.to_numeric(table[name], errors="coerce") for name in ("lon", "lat"))
        text = table["time"].astype(str)
        time = pd.to_datetime(text, utc=True, errors="coerce", format="ISO8601")
        fit = time.notna() & (lon.abs() <= 360) & (lat.abs() <= 90)
        return cls(pd.DatetimeIndex(time[fit]), np.column_stack([lon[fit], lat[fit]]).astype(float))
