"""From fitted states to positions: hours, credible ellipses and drawn paths on the ground."""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.frame import Ellipses, Plane, ellipse_from_covariance, ellipse_scale
from trackfit.inference.fit import Fit
from trackfit.inference.grid import nearest_state

HOUR_NS = 3_600_000_000_000


@dataclass(frozen=True)
class FilledTrack:
    """The positions of one tag at the report times and at its fixes.

    Attributes
    ----------
    table
        One row a time: time (UTC), lon, lat (degrees, WGS 84), sd_m (root mean square of the two
        axes' standard deviations), ellipse_bearing_deg (of the major axis, clockwise from true
        north), ellipse50_major_m, ellipse50_minor_m, ellipse95_major_m, ellipse95_minor_m (half
        axes), hours_to_fix (to the nearest used fix), in_gap, at_fix.
    draws_lonlat
        Paths drawn from the joint posterior, parameter uncertainty included, degrees.
    """

    tag: str
    table: pd.DataFrame
    draws_lonlat: Float[np.ndarray, "draws times 2"]


def hours_since_1970(times: pd.Series | pd.DatetimeIndex) -> Float[np.ndarray, " n"]:
    """Moments as hours since 1970-01-01T00:00Z."""
    utc = pd.DatetimeIndex(times).tz_convert("UTC").tz_localize(None)
    return utc.to_numpy().astype("datetime64[ns]").astype(np.int64) / HOUR_NS


def times_utc(hours: Float[np.ndarray, " n"]) -> pd.DatetimeIndex:
    """Hours since 1970-01-01T00:00Z as moments, to the nearest microsecond."""
    microseconds = np.rint(np.asarray(hours) * 3.6e9).astype("int64")
    return pd.DatetimeIndex(
        microseconds.astype("datetime64[us]").astype("datetime64[ns]"), tz="UTC"
    )


def report_hours(
    first_hours: float, last_hours: float, interval_hours: float
) -> Float[np.ndarray, " n"]:
    """Whole multiples of the interval since 1970 from the first to the last moment."""
    low, high = np.ceil(first_hours / interval_hours), np.floor(last_hours / interval_hours)
    return np.arange(low, high + 1) * interval_hours


def fill_track(
    fit: Fit,
    plane: Plane,
    fix_hours: Float[np.ndarray, " fixes"],
    *,
    interval_hours: float,
    gap_hours: float,
    draws: int,
    seed: int,
) -> FilledTrack:
    """Positions with credible ellipses at every report time and fix of a fitted track.

    Ellipses hold parameter uncertainty. Draws depend on the seed and the tag's name only, so that
    other tags of a study do not change them.

    Raises
    ------
    ValueError
        The fit has no states.
    """
    if fit.states is None:
        raise ValueError(f"tag {fit.tag}: nothing was fitted, so there is no path")
    grid = fit.states.problem.hours
    wanted = np.concatenate([report_hours(grid[0], grid[-1], interval_hours), fix_hours])
    at = np.unique(nearest_state(grid, wanted))
    xy_km = fit.states.positions_km()[at]
    covariance = fit.states.position_covariance_km2()[at]
    lon, lat = plane.to_lonlat(xy_km)
    to_ground = np.linalg.inv(plane.ground_to_plane(lon, lat))
    ground_m2 = 1e6 * to_ground @ covariance @ np.swapaxes(to_ground, 1, 2)
    half = _region(fit, at, ground_m2, 0.50)
    most = _region(fit, at, ground_m2, 0.95)
    from_fix, width = _around(grid[at], fix_hours)
    table = pd.DataFrame(
        {
            "time": times_utc(grid[at]),
            "lon": lon,
            "lat": lat,
            "sd_m": np.sqrt(np.trace(ground_m2, axis1=1, axis2=2) / 2.0),
            "ellipse_bearing_deg": most.bearing_deg,
            "ellipse50_major_m": half.major_m,
            "ellipse50_minor_m": half.minor_m,
            "ellipse95_major_m": most.major_m,
            "ellipse95_minor_m": most.minor_m,
            "hours_to_fix": from_fix,
            "in_gap": (width > gap_hours) & (from_fix > 0.0),
            "at_fix": np.isin(at, nearest_state(grid, fix_hours)),
        }
    )
    return FilledTrack(fit.tag, table, _draws(fit, plane, at, draws, seed))


def _region(
    fit: Fit, at: np.ndarray, ground_m2: Float[np.ndarray, "n 2 2"], probability: float
) -> Ellipses:
    """Ellipses that hold a probability, by the size that the posterior has at each state."""
    assert fit.states is not None
    plain = ellipse_from_covariance(ground_m2, probability)
    wider = np.sqrt(fit.states.squared_radius(probability)[at]) / ellipse_scale(probability)
    return Ellipses(plain.major_m * wider, plain.minor_m * wider, plain.bearing_deg)


def _around(
    hours: Float[np.ndarray, " n"], fix_hours: Float[np.ndarray, " fixes"]
) -> tuple[Float[np.ndarray, " n"], Float[np.ndarray, " n"]]:
    """Hours to the nearest fix, and between the fixes on both sides (zero at the ends)."""
    fixes = np.sort(fix_hours)
    # times on the grid differ from the fixes' own by the half second within which they are one
    before = np.clip(np.searchsorted(fixes, hours + 1e-9, side="right") - 1, 0, len(fixes) - 1)
    after = np.clip(before + 1, 0, len(fixes) - 1)
    distance = np.minimum(np.abs(hours - fixes[before]), np.abs(fixes[after] - hours))
    distance[distance < 0.5 / 3600.0] = 0.0
    return distance, fixes[after] - fixes[before]


def _draws(
    fit: Fit, plane: Plane, at: np.ndarray, draws: int, seed: int
) -> Float[np.ndarray, "draws times 2"]:
    assert fit.states is not None
    if draws == 0:
        return np.zeros((0, len(at), 2))
    rng = np.random.default_rng([seed, zlib.crc32(fit.tag.encode())])
    xy_km = fit.states.draw(draws, rng)[:, at, :2]
    lon, lat = plane.to_lonlat(xy_km.reshape(-1, 2))
    return np.stack([lon, lat], axis=1).reshape(draws, len(at), 2)
