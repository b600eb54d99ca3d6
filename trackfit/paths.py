"""From fitted states to positions: hours, credible ellipses and drawn paths on the ground."""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np
import pandas as pd
import shapely
from jaxtyping import Float

from trackfit.frame import Ellipses, Plane, ellipse_from_covariance, ellipse_scale
from trackfit.inference.fit import Fit, FitStatus
from trackfit.inference.grid import nearest_state
from trackfit.layers.layer import Coast
from trackfit.sea.at_sea import Kept, Trouble, keep_at_sea

NO_COAST = Coast(shapely.MultiPolygon(), "none")
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
        axes), hours_to_fix (to the nearest used fix), in_gap, at_fix, coast_adjusted (the coast
        moved the position or its ellipses).
    draws_lonlat
        Paths drawn from the joint posterior, parameter uncertainty included, degrees.
    draw_times
        Times of the drawn paths: those of the table, and more where straight lines between those
        would cross land.
    fit_status
        How the fit ended; positions of a fit that is not `ok` are there to be looked at.
    warnings
        Sentences on where fixes and coast do not go together.
    """

    tag: str
    table: pd.DataFrame
    draws_lonlat: Float[np.ndarray, "draws times 2"]
    draw_times: pd.DatetimeIndex
    fit_status: FitStatus
    warnings: tuple[str, ...] = ()


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
    coast: Coast | None = None,
) -> FilledTrack:
    """Positions with credible ellipses at every report time and fix of a fitted track.

    Ellipses hold parameter uncertainty. Draws depend on the seed and the tag's name only, so that
    other tags of a study do not change them. With a coast, positions, ellipses and draws are those
    of paths that keep to the sea (`trackfit.sea.at_sea`).

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
    key = [seed, zlib.crc32(fit.tag.encode())]
    drawn = fit.states.drawn(draws, np.random.default_rng(key)) if draws else []
    kept = keep_at_sea(fit.states, coast or NO_COAST, drawn, key)
    lon, lat = plane.to_lonlat(kept.xy_km[at])
    to_ground = np.linalg.inv(plane.ground_to_plane(lon, lat))
    ground_m2 = 1e6 * to_ground @ kept.covariance_km2[at] @ np.swapaxes(to_ground, 1, 2)
    half = _region(kept, at, ground_m2, 0.50)
    most = _region(kept, at, ground_m2, 0.95)
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
            "coast_adjusted": kept.adjusted[at],
        }
    )
    vertices = np.union1d(at, _around_land(kept, at, plane))
    return FilledTrack(
        tag=fit.tag,
        table=table,
        draws_lonlat=_lonlat(plane, kept.draws_km[:, vertices]),
        draw_times=times_utc(grid[vertices]),
        fit_status=fit.status,
        warnings=tuple(_warning(fit.tag, trouble, grid) for trouble in kept.troubles),
    )


def _region(
    kept: Kept, at: np.ndarray, ground_m2: Float[np.ndarray, "n 2 2"], probability: float
) -> Ellipses:
    """Ellipses that hold a probability, by the size that the posterior has at each state."""
    plain = ellipse_from_covariance(ground_m2, probability)
    wider = np.sqrt(kept.squared_radius[probability][at]) / ellipse_scale(probability)
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


def _lonlat(
    plane: Plane, xy_km: Float[np.ndarray, "draws times 2"]
) -> Float[np.ndarray, "draws times 2"]:
    lon, lat = plane.to_lonlat(xy_km.reshape(-1, 2))
    return np.stack([lon, lat], axis=1).reshape(xy_km.shape)


def _around_land(kept: Kept, at: np.ndarray, plane: Plane) -> np.ndarray:
    """States between the reported ones without which a straight line in degrees meets land."""
    long = np.flatnonzero(np.diff(at) > 1)
    if not len(kept.draws_km) or kept.land.is_empty or not len(long):
        return np.zeros(0, int)
    start, end = kept.draws_km[:, at[long]], kept.draws_km[:, at[long + 1]]
    first, last = _lonlat(plane, start), _lonlat(plane, end)
    turn = np.rint((first[..., 0] - last[..., 0]) / 360.0) * 360.0
    middle = (first + last + np.stack([turn, np.zeros_like(turn)], axis=-1)) / 2.0
    middle = plane.to_plane(*middle.reshape(-1, 2).T).reshape(start.shape)
    lines = shapely.linestrings(np.stack([start, middle, end], axis=2))
    met = long[shapely.intersects(kept.land, lines).any(axis=0)]
    return np.concatenate([np.zeros(0, int), *(np.arange(at[k] + 1, at[k + 1]) for k in met)])


def _warning(tag: str, trouble: Trouble, grid: Float[np.ndarray, " states"]) -> str:
    first, last = times_utc(grid[[trouble.first, trouble.last]])
    when = f"tag {tag}: between {first:%Y-%m-%d %H:%M} and {last:%Y-%m-%d %H:%M} UTC"
    if trouble.crosses:
        return (
            f"{when} no way by sea was found for every path, and what was found none for crosses "
            "land; check the coast there, or set paths.keep_at_sea = false if this animal walks "
            "or flies"
        )
    return (
        f"{when} the fixes put the animal ashore and the coast keeps it at sea; the positions are "
        "the coast's. Check the errors of those fixes and the coast there"
    )
