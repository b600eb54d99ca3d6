"""Made-up tracks, fits, responses and fixes with the attributes the writers and figures ask for."""

import enum
from dataclasses import dataclass

import numpy as np
import pandas as pd

from trackfit.results.inputs import POSITION_COLUMNS


class Status(enum.Enum):
    converged = "The fit converged."
    stuck = "The fit did not converge: look at the fixes."

    @property
    def sentence(self):
        return self.value

    @property
    def ok(self):
        return self is Status.converged


@dataclass(frozen=True)
class Track:
    tag: str
    table: pd.DataFrame
    draws_lonlat: np.ndarray
    fit_status: Status = Status.converged

    @property
    def draw_times(self):
        return pd.DatetimeIndex(self.table["time"])


@dataclass(frozen=True)
class OneFit:
    tag: str
    status: Status
    parameters: pd.DataFrame
    log_marginal: float = -123.25
    n_fixes: int = 40
    n_states: int = 97
    step_hours: float = 0.5
    step_check: pd.DataFrame | None = None


@dataclass(frozen=True)
class OneResponse:
    tag: str
    term: str
    layer: str
    unit: str
    at: np.ndarray
    h: np.ndarray
    lower95: np.ndarray
    upper95: np.ndarray
    fit_status: Status = Status.converged


@dataclass(frozen=True)
class SomeFixes:
    table: pd.DataFrame
    set_aside: pd.DataFrame


def wandering_track(
    tag="seal 7",
    start=(-5.0, 56.0),
    hours=96,
    draws=5,
    seed=3,
    km_per_hour=3.0,
    fit_status=Status.converged,
):
    """A wandering track on the sphere with ellipses that swell in a gap in its middle."""
    rng = np.random.default_rng(seed)
    course = np.cumsum(rng.normal(0.0, 0.25, hours)) + 1.0
    north = np.cumsum(km_per_hour * np.cos(course)) / 111.2
    lat = np.clip(start[1] + north - north[0], -89.9, 89.9)
    east = np.cumsum(km_per_hour * np.sin(course) / (111.2 * np.cos(np.radians(lat))))
    lon = start[0] + east - east[0]
    gap = (np.arange(hours) > hours * 0.45) & (np.arange(hours) < hours * 0.65)
    swell = np.where(gap, np.sin(np.pi * np.clip(np.arange(hours) / hours - 0.45, 0, 0.2) / 0.2), 0)
    sd_major = 700.0 + 4000 * swell
    sd_minor = 0.6 * sd_major
    axes = {
        f"ellipse{p}_{w}_m": np.sqrt(-2 * np.log(1 - p / 100)) * sd
        for p in (50, 95)
        for w, sd in (("major", sd_major), ("minor", sd_minor))
    }
    table = pd.DataFrame(
        {
            "time": pd.date_range("2024-03-01T06:00", periods=hours, freq="h", tz="UTC").as_unit(
                "ns"
            ),
            "lon": wrap(lon),
            "lat": lat,
            "sd_m": np.sqrt((sd_major**2 + sd_minor**2) / 2),
            "ellipse_bearing_deg": np.degrees(course) % 180,
            "hours_to_fix": np.where(gap, 6.0 * swell, 0.25),
            "in_gap": gap,
            "at_fix": ~gap & (np.arange(hours) % 2 == 0),
            "coast_adjusted": np.arange(hours) % 5 == 1,
            **axes,
        }
    )
    noise = rng.normal(0, 1, (draws, hours, 2)) * (sd_minor / 111_200)[None, :, None]
    paths = np.stack([lon, lat], axis=-1) + noise
    paths[..., 0] = wrap(paths[..., 0])
    return Track(tag, table.loc[:, list(POSITION_COLUMNS)], paths, fit_status)


def wrap(lon):
    return (np.asarray(lon) + 180) % 360 - 180


def make_fit(tag="seal 7", status=Status.converged):
    rows = [
        ("sigma", "km h^-1/2", 1.8, 0.1, 1.6, 2.0, "estimated"),
        ("drift", "1", 0.9, float("nan"), float("nan"), float("nan"), "shared"),
    ]
    columns = ["parameter", "unit", "estimate", "sd", "lower95", "upper95", "role"]
    return OneFit(tag, status, pd.DataFrame(rows, columns=columns))


def make_response(
    tag="seal 7", term="depth, humped", layer="depth", unit="m", low=-200.0, high=0.0
):
    at = np.linspace(low, high, 41)
    middle, width = (low + high) / 2, (high - low) / 2
    shift = 0.15 * (sum(tag.encode()) % 5 - 2)
    h = 3.0 - 2.5 * ((at - middle) / width + shift) ** 2
    half = 0.4 + 0.5 * np.abs(at - middle) / width
    return OneResponse(tag, term, layer, unit, at, h, h - half, h + half)


def make_fixes(tracks, seed=5):
    rng = np.random.default_rng(seed)
    parts = []
    for track in tracks:
        rows = track.table[track.table["at_fix"]]
        metres = rng.normal(0, 700.0, (len(rows), 2)) / 111_200
        parts.append(
            pd.DataFrame(
                {
                    "tag": track.tag,
                    "time": rows["time"].to_numpy(),
                    "lon": wrap(
                        rows["lon"].to_numpy()
                        + metres[:, 0] / np.cos(np.radians(rows["lat"].to_numpy()))
                    ),
                    "lat": np.clip(rows["lat"].to_numpy() + metres[:, 1], -90, 90),
                    "gps_sd_m": np.nan,
                    "error_class": None,
                    "ellipse_major_m": 990.0,
                    "ellipse_minor_m": 600.0,
                    "ellipse_bearing_deg": 40.0,
                    "file": "fixes.csv",
                    "line": np.arange(2, 2 + len(rows)),
                }
            )
        )
    table = pd.concat(parts, ignore_index=True)
    table["time"] = pd.to_datetime(table["time"], utc=True)
    aside = [
        (
            "fixes.csv",
            3,
            tracks[0].tag,
            str(table["time"].iloc[-1]),
            str(table["lon"].iloc[-1] + 0.05),
            str(table["lat"].iloc[-1] - 0.04),
            "faster than 4 m/s from its neighbours",
        ),
        ("fixes.csv", 99, tracks[0].tag, "yesterday", "-5.1", "=91", "time is not a time"),
    ]
    columns = ["file", "line", "tag", "time", "lon", "lat", "reason"]
    return SomeFixes(table, pd.DataFrame(aside, columns=columns))
