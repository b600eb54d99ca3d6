"""Longitude and latitude of one tag against time, with their bands."""

import matplotlib.dates as mdates
import numpy as np
import pandas as pd
from jaxtyping import Bool, Float
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator
from scipy.special import ndtri

from trackfit.frame import covariance_from_ellipse
from trackfit.report import style
from trackfit.report.map_panel import ASIDE_MARKS, fix_marks
from trackfit.report.scene import FixPoints
from trackfit.results.inputs import TrackLike

_A_M, _E2 = 6378137.0, 6.69437999014e-3  # WGS 84
_BANDS = ((0.95, 0.22), (0.50, 0.40))
_HOUR = 1 / 24  # time axes count days


def draw_time_panels(
    lon_axes: Axes, lat_axes: Axes, track: TrackLike, used: FixPoints, aside: FixPoints
) -> None:
    """Draw longitude above, latitude below, on one axis of time (UTC).

    Longitude runs on across the antimeridian; its tick labels stay in [-180, 180).
    """
    time = days_since_1970(pd.DatetimeIndex(track.table["time"]))
    lon = np.unwrap(track.table["lon"].to_numpy(float), period=360)
    lat = track.table["lat"].to_numpy(float)
    sd_lon, sd_lat = _sd_deg(track.table)
    near_used = _beside(used, time, lon)
    near_aside = _beside(aside, time, lon)
    in_gap = track.table["in_gap"].to_numpy(bool)
    for axes, mean, sd, of_used, of_aside in (
        (lon_axes, lon, sd_lon, near_used, near_aside),
        (lat_axes, lat, sd_lat, used.lonlat[:, 1], aside.lonlat[:, 1]),
    ):
        shade_gaps(axes, time, in_gap)
        _draw_bands(axes, time, mean, sd)
        _draw_marks(
            axes, days_since_1970(used.time), of_used, days_since_1970(aside.time), of_aside
        )
    _dress(lon_axes, lat_axes, time)


def _sd_deg(table: pd.DataFrame) -> tuple[Float[np.ndarray, " n"], Float[np.ndarray, " n"]]:
    """Return the standard deviations of longitude and latitude in degrees.

    The 95 % ellipse gives the covariance on the ground; a degree there is pi/180 times the radius
    of curvature, N cos(lat) along the parallel and M along the meridian (WGS 84). Beside a pole a
    longitude may be quite unknown: its deviation stops at 180 degrees.
    """
    major, minor = (table[f"ellipse95_{name}_m"].to_numpy(float) for name in ("major", "minor"))
    bearing = table["ellipse_bearing_deg"].to_numpy(float)
    cov = covariance_from_ellipse(major, minor, bearing, 0.95)
    lat = np.radians(table["lat"].to_numpy(float))
    root = np.sqrt(1 - _E2 * np.sin(lat) ** 2)
    parallel_m = np.maximum(_A_M / root * np.cos(lat), 1.0)
    meridian_m = _A_M * (1 - _E2) / root**3
    sd_lon = np.degrees(np.sqrt(cov[:, 0, 0]) / parallel_m)
    return np.minimum(sd_lon, 180.0), np.degrees(np.sqrt(cov[:, 1, 1]) / meridian_m)


def _beside(
    points: FixPoints, time: Float[np.ndarray, " n"], lon: Float[np.ndarray, " n"]
) -> Float[np.ndarray, " m"]:
    """Return the fixes' longitudes, whole turns added to come next to the path's."""
    at = np.interp(days_since_1970(points.time), time, lon)
    return points.lonlat[:, 0] + 360 * np.round((at - points.lonlat[:, 0]) / 360)


def days_since_1970(time: pd.DatetimeIndex) -> Float[np.ndarray, " n"]:
    """Return times as matplotlib counts them: days since 1970 in UTC."""
    return np.asarray(time.as_unit("ns").asi8 / 86_400e9)


def shade_gaps(axes: Axes, time: Float[np.ndarray, " n"], in_gap: Bool[np.ndarray, " n"]) -> None:
    """Shade the gaps of a track; times as matplotlib counts them."""
    label = "gap"
    edges = np.flatnonzero(np.diff(np.concatenate([[False], in_gap, [False]])))
    for first, after in edges.reshape(-1, 2):
        end = time[min(after, len(time) - 1)]
        start = time[max(first - 1, 0)]
        axes.axvspan(start, end, color=style.GAP, linewidth=0, zorder=0, label=label)
        label = "_gap"


def _draw_bands(
    axes: Axes,
    time: Float[np.ndarray, " n"],
    mean: Float[np.ndarray, " n"],
    sd: Float[np.ndarray, " n"],
) -> None:
    if len(time) == 1:  # a band needs two times: one position is widened by half an hour
        time = time[0] + np.array([-0.5, 0.5]) * _HOUR
        mean, sd = np.repeat(mean, 2), np.repeat(sd, 2)
    seen = 0.0
    for probability, alpha in _BANDS:
        half = ndtri((1 + probability) / 2) * sd
        band = axes.fill_between(time, mean - half, mean + half, color=style.BLUE, alpha=alpha)
        label = f"{100 * probability:.0f} % band"
        band.set(linewidth=0, zorder=2, label="_" + label)
        # bands lie over each other: the legend shows the colours that are seen
        seen = 1 - (1 - seen) * (1 - alpha)
        axes.fill_between([], [], color=style.BLUE, alpha=seen, linewidth=0, label=label)
    axes.plot(time, mean, color=style.BLUE, linewidth=1.1, zorder=3)
    low, high = float((mean - 2.2 * sd).min()), float((mean + 2.2 * sd).max())
    axes.set_ylim(low - 0.04 * (high - low), high + 0.04 * (high - low))


def _draw_marks(
    axes: Axes,
    used_time: Float[np.ndarray, " k"],
    used: Float[np.ndarray, " n"],
    aside_time: Float[np.ndarray, " k"],
    aside: Float[np.ndarray, " m"],
) -> None:
    """Mark the fixes; those in use widen the panel, those set aside do not."""
    if len(used):
        low, high = axes.get_ylim()
        room = 0.04 * (high - low)
        axes.set_ylim(min(low, used.min() - room), max(high, used.max() + room))
        axes.scatter(used_time, used, zorder=4, **fix_marks(len(used)))
    limits = axes.get_ylim()
    shown = (aside >= limits[0]) & (aside <= limits[1])
    if shown.any():
        axes.scatter(
            aside_time[shown], aside[shown], zorder=4, label="fix set aside", **ASIDE_MARKS
        )


def _dress(lon_axes: Axes, lat_axes: Axes, time: Float[np.ndarray, " n"]) -> None:
    margin = max(0.02 * (time[-1] - time[0]), _HOUR / 2 if len(time) > 1 else _HOUR)
    lon_axes.set_xlim(time[0] - margin, time[-1] + margin)
    share_time_axis(lon_axes, lat_axes)
    lon_axes.set(title="Longitude and latitude against time")
    lon_axes.set(ylabel="longitude (degrees east)")
    lat_axes.set(ylabel="latitude (degrees north)")
    for axes in (lon_axes, lat_axes):
        axes.yaxis.set_major_locator(MaxNLocator(6))
        axes.ticklabel_format(axis="y", useOffset=False)
    south, north = lat_axes.get_ylim()
    lat_axes.set_ylim(max(south, -90.0), min(north, 90.0))
    if lon_axes.get_ylim()[1] >= 180 or lon_axes.get_ylim()[0] < -180:
        lon_axes.yaxis.set_major_formatter(FuncFormatter(wrapped_degrees))


def share_time_axis(upper: Axes, lower: Axes) -> None:
    """Write dates below the lower of two panels that share their time axis."""
    locator = mdates.AutoDateLocator(minticks=3, maxticks=7, tz="UTC")
    lower.xaxis.set_major_locator(locator)
    lower.xaxis.set_major_formatter(mdates.ConciseDateFormatter(locator, tz="UTC"))
    upper.tick_params(axis="x", labelbottom=False)
    lower.set_xlabel("time (UTC)")


def wrapped_degrees(value: float, position: int | None = None) -> str:
    """Return a longitude that ran on as one in [-180, 180), as text.

    Examples
    --------
    >>> wrapped_degrees(180.5), wrapped_degrees(-190.0), wrapped_degrees(12.25)
    ('−179.5', '170', '12.25')
    """
    return f"{round((value + 180) % 360 - 180, 6):g}".replace("-", "\N{MINUS SIGN}")
