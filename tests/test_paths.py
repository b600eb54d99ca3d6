"""From fitted states to positions: times, ellipses, gaps and drawn paths."""

import dataclasses

import numpy as np
import pandas as pd
import pytest
from engine_standins import (
    approximation_of,
    covariance_of,
    isotropic,
    problem_of,
    quick_fit,
    start_prior,
    still_model,
    walk,
)
from hypothesis import given
from hypothesis import strategies as st
from pyproj import Geod

from trackfit.frame import Plane
from trackfit.inference.fit import FitStatus
from trackfit.inference.grid import time_grid
from trackfit.inference.integrate import PathMixture, WeightedPoints
from trackfit.inference.laplace import mode_sensitivity
from trackfit.inference.states import States
from trackfit.inference.task import TrackData
from trackfit.motion import Diffusive
from trackfit.paths import (
    FilledTrack,
    fill_track,
    hours_since_1970,
    report_hours,
    times_utc,
)

PLANE = Plane.centred_on([-20.0], [-38.0])
EPOCH_H = 438_000.0
COLUMNS = [
    "time", "lon", "lat", "sd_m", "ellipse_bearing_deg", "ellipse50_major_m",
    "ellipse50_minor_m", "ellipse95_major_m", "ellipse95_minor_m", "hours_to_fix", "in_gap",
    "at_fix", "coast_adjusted",
]  # fmt: skip
FIX_HOURS = EPOCH_H + np.array([0.3, 1.0, 1.0, 2.0 + 0.3 / 3600, 5.4, 20.0, 20.5, 33.75])


def uneven(tag="walker"):
    """Eight fixes, two of one moment, one a third of a second after a whole hour, two gaps."""
    rng = np.random.default_rng(4)
    at_km = np.cumsum(rng.normal(size=(8, 2)) * 5, axis=0)
    root = rng.normal(size=(8, 2, 2))
    covariance = 0.2 * (root @ root.transpose(0, 2, 1) + 0.2 * np.eye(2))
    return TrackData(tag, FIX_HOURS, at_km, covariance)


def wanted_hours(data, interval_hours=1.0):
    return report_hours(data.hours[0], data.hours[-1], interval_hours)


def filled(fit, plane=PLANE, fix_hours=FIX_HOURS, **more) -> FilledTrack:
    asked = {"interval_hours": 1.0, "gap_hours": 12.0, "draws": 0, "seed": 1} | more
    return fill_track(fit, plane, fix_hours, **asked)


@pytest.fixture(scope="module")
def fit():
    data = uneven()
    made = quick_fit(
        data, still_model(weak=True, log_diffusion=1.0), step_hours=0.5,
        report_hours=wanted_hours(data),
    )  # fmt: skip
    assert made.status is FitStatus.CONVERGED
    return made


def sure_of(fit):
    """The same fit with nothing uncertain about its parameters."""
    covariance = 1e-20 * np.eye(len(fit.states.theta))
    return dataclasses.replace(
        fit, states=dataclasses.replace(fit.states, theta_covariance=covariance)
    )


def test_the_columns_and_their_types(fit):
    table = filled(fit).table
    assert table.columns.tolist() == COLUMNS
    assert table["time"].dtype == "datetime64[ns, UTC]"
    assert [table[c].dtype for c in COLUMNS[-3:]] == [np.dtype(bool)] * 3
    assert all(table[c].dtype == np.dtype(float) for c in COLUMNS[1:-3])
    assert not table.isna().any(axis=None)
    assert table["time"].is_monotonic_increasing
    assert table["time"].is_unique


def test_one_row_for_every_hour_and_every_fix(fit):
    hours = hours_since_1970(filled(fit).table["time"])
    # the fix a third of a second after two o'clock stands for both
    on_the_hour = np.r_[1.0, np.arange(3.0, 34.0)]
    expected = EPOCH_H + np.sort(np.r_[on_the_hour, 0.3, 2.0 + 0.3 / 3600, 5.4, 20.5, 33.75])
    assert np.allclose(hours, expected, rtol=0, atol=1e-9)


def test_hours_to_the_nearest_fix_gaps_and_fixes(fit):
    """All by looking at every fix for every row; moments within half a second are one."""
    table = filled(fit).table
    for hour, row in zip(hours_since_1970(table["time"]), table.itertuples(), strict=True):
        away = np.abs(FIX_HOURS - hour)
        at_fix = away.min() < 0.5 / 3600
        assert row.at_fix == at_fix
        assert row.hours_to_fix == pytest.approx(0.0 if at_fix else away.min(), abs=1e-6)
        before, after = FIX_HOURS[hour >= FIX_HOURS], FIX_HOURS[hour <= FIX_HOURS]
        wide = not at_fix and after.min() - before.max() > 12.0
        assert row.in_gap == wide
    assert table["at_fix"].sum() == 7
    # (5.4, 20.0) and (20.5, 33.75), whole hours inside
    assert table["in_gap"].sum() == 14 + 13


@pytest.mark.parametrize(("gap_hours", "rows"), [(14.6, 0), (14.5, 14), (13.25, 14), (13.2, 27)])
def test_a_gap_is_longer_than_the_stated_length(fit, gap_hours, rows):
    assert filled(fit, gap_hours=gap_hours).table["in_gap"].sum() == rows


def test_positions_and_ellipses_are_those_of_the_states(fit):
    """Near the plane's centre ground and plane agree to 1e-5."""
    table = filled(fit).table
    at = np.searchsorted(fit.states.problem.hours, hours_since_1970(table["time"]) - 1e-6)
    xy = PLANE.to_plane(table["lon"], table["lat"])
    assert np.allclose(xy, fit.states.mean[at], rtol=0, atol=1e-6)
    cov = fit.states.total_covariance()[at] * 1e6
    values, vectors = np.linalg.eigh(cov)
    # distances this near the centre are true to 1e-5
    assert np.allclose(table["sd_m"], np.sqrt(np.trace(cov, axis1=1, axis2=2) / 2), rtol=1e-4)
    for share, chi2 in ((50, 1.386294361), (95, 5.991464547)):  # quantiles, two degrees of freedom
        half_axes = np.sqrt(chi2 * values)
        assert np.allclose(table[f"ellipse{share}_major_m"], half_axes[:, 1], rtol=1e-4)
        assert np.allclose(table[f"ellipse{share}_minor_m"], half_axes[:, 0], rtol=1e-4)
    bearing = np.degrees(np.arctan2(vectors[:, 0, 1], vectors[:, 1, 1])) % 180
    apart = np.abs(table["ellipse_bearing_deg"] - bearing)
    elongated = values[:, 1] > 1.2 * values[:, 0]
    # convergence: 0.3 degrees of longitude at most, times sin(lat)
    assert np.minimum(apart, 180 - apart)[elongated].max() < 0.3
    assert elongated.sum() > 5


def test_ellipses_are_turned_to_true_north():
    """The same track 40 degrees of longitude off the plane's meridian: turned by the convergence.

    In a stereographic plane of the pole the meridian itself is the direction of north.
    """
    plane = Plane.from_crs("EPSG:3995")  # polar stereographic, north along -y at 0 E
    data = uneven()
    centre = plane.to_plane([50.0], [62.0])[0]
    stretched = np.tile(np.diag([9.0, 0.25]), (8, 1, 1))
    moved = TrackData("east", data.hours, centre + 0.1 * data.at_km, stretched)
    fit = sure_of(quick_fit(moved, still_model(), report_hours=wanted_hours(data)))
    table = filled(fit, plane).table
    geod = Geod(ellps="WGS84")
    for row in table.itertuples():
        # half an axis along the bearing must stay along the plane's x axis
        lon, lat, _ = geod.fwd(row.lon, row.lat, row.ellipse_bearing_deg, row.ellipse95_major_m)
        step = plane.to_plane([lon], [lat])[0] - plane.to_plane([row.lon], [row.lat])[0]
        # a geodesic of 5 km bends by less than 1e-3 in this plane
        assert abs(step[1]) < 1e-3 * abs(step[0])
    distortion = plane.distortion(table["lon"], table["lat"])
    assert distortion > 0.02
    cov = fit.states.total_covariance()
    at = np.searchsorted(fit.states.problem.hours, hours_since_1970(table["time"]) - 1e-6)
    plane_major = 1e3 * np.sqrt(5.991464547 * cov[at, 0, 0])
    stretch = plane_major / table["ellipse95_major_m"].to_numpy()
    # stereographic: conformal, so the ratio is one plus or minus the distortion
    assert np.allclose(np.abs(stretch - 1), distortion, rtol=0, atol=5e-4)


def test_parameter_uncertainty_widens_the_ellipses(fit):
    apart = filled(fit).table["sd_m"] - filled(sure_of(fit)).table["sd_m"]
    assert (apart > -1e-6).all()
    assert apart.max() > 1.0


def test_across_the_antimeridian_nothing_changes_but_the_longitude(fit):
    far = Plane.centred_on([180.0], [-38.0])
    here, there = filled(fit, draws=3), filled(fit, far, draws=3)
    assert there.table["lon"].min() < 0 < there.table["lon"].max()
    assert there.table["lon"].between(-180, 180, inclusive="left").all()
    assert np.allclose((there.table["lon"] - here.table["lon"]) % 360, 200.0, rtol=0, atol=1e-9)
    rest = [c for c in COLUMNS if c not in ("lon", "time")]
    pd.testing.assert_frame_equal(here.table[rest], there.table[rest], rtol=1e-8)
    assert np.allclose(
        (there.draws_lonlat[..., 0] - here.draws_lonlat[..., 0]) % 360, 200.0, rtol=0, atol=1e-9
    )


# --- drawn paths ------------------------------------------------------------------------------


def test_draws_depend_on_the_seed_and_the_tag_only(fit):
    first = filled(fit, draws=4).draws_lonlat
    assert first.shape == (4, len(filled(fit).table), 2)
    again = quick_fit(
        uneven(), still_model(weak=True, log_diffusion=1.0), step_hours=0.5,
        report_hours=wanted_hours(uneven()),
    )  # fmt: skip
    assert np.array_equal(filled(again, draws=4).draws_lonlat, first)
    assert not np.allclose(filled(fit, draws=4, seed=2).draws_lonlat, first)
    other = dataclasses.replace(fit, tag="other")
    assert not np.allclose(filled(other, draws=4).draws_lonlat, first)


def test_no_draws(fit):
    assert filled(fit).draws_lonlat.shape == (0, len(filled(fit).table), 2)


def mahalanobis(table, lon, lat):
    """Squared distance of places from the ellipses' centres, in standard deviations, by geodesics.

    The 95 % ellipse has half axes of sqrt(5.991464547) standard deviations.
    """
    geod = Geod(ellps="WGS84")
    azimuth, _, metres = geod.inv(table["lon"], table["lat"], lon, lat)
    turn = np.radians(azimuth - table["ellipse_bearing_deg"].to_numpy())
    along = metres * np.cos(turn) / table["ellipse95_major_m"].to_numpy()
    across = metres * np.sin(turn) / table["ellipse95_minor_m"].to_numpy()
    return 5.991464547 * (along**2 + across**2)


@pytest.mark.parametrize(("share", "chi2"), [(0.5, 1.386294361), (0.95, 5.991464547)])
def test_ellipses_hold_their_share_of_the_draws(fit, share, chi2):
    """2000 draws at every row; binomial 99.99 % band, draws being independent."""
    track = filled(fit, draws=2000)
    held = np.stack([mahalanobis(track.table, *draw.T) <= chi2 for draw in track.draws_lonlat])
    # 45 rows: one in 200 tests would fail by chance with another seed
    assert np.abs(held.mean(axis=0) - share).max() < 3.9 * np.sqrt(share * (1 - share) / 2000)


def known(data: TrackData, hours, theta) -> States:
    """States at known parameters: nothing of the parameters' uncertainty."""
    problem = problem_of(
        data.hours, data.at_km, data.covariance_km2, hours=hours, start=start_prior(sd_km=20.0)
    )
    found = approximation_of(problem, theta, data.hours)
    return States(
        approximation=found,
        covariance=covariance_of(found),
        sensitivity=mode_sensitivity(problem, found.mode)[..., :1],
        free_at=np.array([0]),
        theta=theta[:1],
        theta_covariance=1e-20 * np.eye(1),
    )


@pytest.mark.slow
def test_ellipses_cover_simulated_truth(fit):
    """1000 walks drawn from the prior, seen with turned errors, filled at the right parameters.

    At a fix, in the gap and between: binomial 99.9 % bands for n = 1000 (0.926-0.971 for 95 %).
    """
    rng = np.random.default_rng(6)
    data, theta = uneven(), np.array([np.log(1.7), np.log(1.2)])
    hours = time_grid(data.hours, 1.0, np.zeros(0), Diffusive.same_moment_hours)
    roots = 1.2 * np.linalg.cholesky(data.covariance_km2)
    at_fix = np.searchsorted(hours, data.hours - 1e-3)
    rows = None
    held = []
    for _ in range(1000):
        steps = 1.7 * np.sqrt(np.diff(hours))[:, None] * rng.normal(size=(len(hours) - 1, 2))
        truth = np.concatenate([20.0 * rng.normal(size=(1, 2)), steps]).cumsum(axis=0)
        noise = np.einsum("kab,kb->ka", roots, rng.normal(size=(8, 2)))
        seen = dataclasses.replace(data, at_km=truth[at_fix] + noise)
        known_fit = dataclasses.replace(fit, states=known(seen, hours, theta))
        table = filled(known_fit).table
        if rows is None:
            times = hours_since_1970(table["time"]) - EPOCH_H
            rows = [int(np.argmin(np.abs(times - t))) for t in (5.4, 12.0, 20.0, 27.0)]
            in_grid = np.searchsorted(hours - EPOCH_H, times - 1e-6)
        lonlat = PLANE.to_lonlat(truth[in_grid][rows])
        held.append(mahalanobis(table.iloc[rows], *lonlat))
    held = np.array(held)
    for column in held.T:
        assert 0.926 < np.mean(column <= 5.991464547) < 0.971
        assert 0.448 < np.mean(column <= 1.386294361) < 0.552


def test_a_mixture_of_parameters_widens_positions_and_ellipses(fit):
    """Two points of equal weight: one path moved by 3 km east, its covariance nine times as large.

    Region and centre are those of the mixture; the shape is that of its covariance.
    """
    states = fit.states
    means = np.stack([states.mean[:, :2], states.mean[:, :2] + [3.0, 0.0]])
    spread = states.covariance[:, :2, :2]
    mixture = PathMixture(np.array([0.5, 0.5]), means, np.stack([spread, 9.0 * spread]))
    points = WeightedPoints(np.zeros((2, 1)), np.array([0.5, 0.5]))
    mixed = dataclasses.replace(
        fit, states=dataclasses.replace(states, points=points, mixture=mixture)
    )
    table = filled(mixed).table
    at = np.searchsorted(states.problem.hours, hours_since_1970(table["time"]) - 1e-6)
    xy = PLANE.to_plane(table["lon"], table["lat"])
    assert np.allclose(xy, means.mean(axis=0)[at], rtol=0, atol=1e-6)
    cov = 5.0 * spread[at] + np.diag([2.25, 0.0])
    assert np.allclose(table["sd_m"], 1e3 * np.sqrt(np.trace(cov, axis1=1, axis2=2) / 2), rtol=1e-4)
    largest = np.linalg.eigvalsh(cov)[:, 1]
    for share in (50, 95):
        radius = np.sqrt(mixture.squared_radius(share / 100)[at])
        found = table[f"ellipse{share}_major_m"]
        assert np.allclose(found, 1e3 * radius * np.sqrt(largest), rtol=1e-4)
    plain = -2.0 * np.log(0.05)
    # heavier tails than a normal of the same covariance: 50 % sooner, 95 % later
    assert (mixture.squared_radius(0.95) > plain).any()
    assert (mixture.squared_radius(0.5) < 1.386294361).all()


# --- times ------------------------------------------------------------------------------------


@given(st.floats(3e5, 6e5), st.floats(0.0, 500.0), st.sampled_from([0.25, 0.1, 1.0, 6.0, 24.0]))
def test_report_times_are_whole_multiples_inside_the_track(first, length, interval):
    hours = report_hours(first, first + length, interval)
    assert len(hours) == np.floor((first + length) / interval) - np.ceil(first / interval) + 1
    multiples = hours / interval
    assert np.allclose(multiples, np.rint(multiples), rtol=0, atol=1e-6)
    if len(hours):
        assert first - 1e-6 < hours[0] < first + interval + 1e-6
        assert first + length - interval - 1e-6 < hours[-1] < first + length + 1e-6


@given(st.integers(-(10**15), 4 * 10**15))
def test_times_and_hours_go_back_and_forth(microseconds):
    """To the microsecond: hours since 1970 hold 2e-7 s in a double."""
    time = pd.DatetimeIndex(
        np.array([microseconds]).astype("datetime64[us]").astype("datetime64[ns]"), tz="UTC"
    )
    assert times_utc(hours_since_1970(time))[0] == time[0]


def test_an_hour_is_an_hour_in_any_zone():
    """15634.75 days after 1970 is 2012-10-21T18:00Z, and 20:00 in Oslo's summer."""
    oslo = pd.DatetimeIndex(["2012-10-21T20:00:00+02:00"]).tz_convert("Europe/Oslo")
    assert hours_since_1970(oslo)[0] == 15634.75 * 24


def test_nothing_fitted_has_no_path():
    data, _ = walk(1, 5)
    few = TrackData("lonely", data.hours[:1], data.at_km[:1], isotropic([1.0]))
    with pytest.raises(ValueError, match="tag lonely: nothing was fitted"):
        filled(quick_fit(few, still_model()))
