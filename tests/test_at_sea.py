"""Paths that keep to the sea: geometry, the law they follow, and what they do to the results."""

import time
from functools import cache

import numpy as np
import pandas as pd
import pytest
import shapely
from scipy.stats import norm

import trackfit
from trackfit.faults import StudyError
from trackfit.frame import Plane
from trackfit.inference.banded import dense, factor
from trackfit.inference.confined import Paths, mend, put_through, sweep
from trackfit.inference.fit import fit_track
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.layers.layer import Box, Coast
from trackfit.layers.shore import CLEARANCE_KM, EXACT_CELLS, Shore, widened
from trackfit.motion import Diffusive, Persistent, VelocityField
from trackfit.paths import fill_track
from trackfit.sea.bounds import SeaBounds, Strides
from trackfit.sea.route import SeaGraph, led_by_sea, spread_along

PLANE = Plane.centred_on(np.array([-5.0]), np.array([56.0]))
FIRST_HOUR = 472_000.0
SOUTH = shapely.box(-200, -200, 200, 0)
"""A straight coast: land south of y = 0."""

PLACES = {
    "island": shapely.Point(0, 3).buffer(2.0),
    "thin spit": shapely.union(SOUTH, shapely.box(-0.05, -1, 0.05, 7)),
    "strait": shapely.union(shapely.box(-0.2, -30, 0.2, 2.9), shapely.box(-0.2, 3.1, 0.2, 30)),
    "bay": SOUTH.difference(shapely.Point(0, 0).buffer(4)).union(shapely.box(-9, 6, 9, 7)),
    "archipelago": shapely.union_all(
        [shapely.Point(x, y).buffer(0.7) for x in range(-8, 9, 2) for y in range(-8, 13, 2)]
    ),
}
MOTIONS = {"diffusive": Diffusive(), "persistent": Persistent()}


def model(motion):
    parameters = [
        Parameter(p.name, p.unit, True, 0.0, 0.0, 0.5, 1.0) for p in MOTIONS[motion].parameters
    ]
    scale = Parameter("error_scale", "1", True, 0.0, 0.0, 1.0, 1.0, fixed=True)
    field = VelocityField((), None)
    return Model(MOTIONS[motion], field, ((), None), ParameterSet((*parameters, scale)))


def fitted(hours, at_km, sd_km, motion="diffusive", points=0):
    at_km = np.asarray(at_km, float)
    covariance = np.broadcast_to(np.eye(2) * sd_km**2, (len(hours), 2, 2)).copy()
    data = TrackData("seal", FIRST_HOUR + np.asarray(hours, float), at_km, covariance)
    settings = FitSettings(step_hours=0.5, points=points)
    report = np.arange(FIRST_HOUR, FIRST_HOUR + max(hours) + 1)
    return fit_track(data, model(motion), settings, report), data


@cache
def crossing(motion, points=0):
    """Fixes left and right of x = 0 in turn, two to six hours apart."""
    hours = np.array([0, 3, 5, 8, 12, 18, 21, 24, 30, 33, 36])
    x = np.where(np.arange(len(hours)) % 2, 2.5, -2.5) + 0.2 * np.sin(hours)
    y = 3.0 + np.cos(hours)
    return fitted(hours, np.stack([x, y], axis=1), 0.4, motion, points)


def filled(fit, data, land, **keys):
    settings = {"interval_hours": 1.0, "gap_hours": 12.0, "draws": 10, "seed": 1} | keys
    coast = None if land is None else Coast(land, "coast.gpkg")
    return fill_track(fit, PLANE, data.hours, coast=coast, **settings)


def in_degrees(land):
    """Land as a user's file holds it; its edges are cut short, for lines bend when projected."""
    fine = shapely.segmentize(shapely.intersection(land, shapely.box(-60, -60, 60, 60)), 0.5)
    return shapely.transform(fine, lambda xy: np.column_stack(PLANE.to_lonlat(xy)))


def on_land(track, land):
    """Drawn lines that meet land in degrees, and positions on land."""
    there = in_degrees(land)
    lines = shapely.linestrings(track.draws_lonlat)
    return (
        int(shapely.intersects(there, lines).sum()),
        int(shapely.intersects_xy(there, track.table["lon"], track.table["lat"]).sum()),
    )


# The law --------------------------------------------------------------------------------------


def walk(n, dt_hours, sigma, ends_km, end_sd_km):
    """A random walk seen at both ends: its precision in banded storage, and its mean."""
    band, pull = np.zeros((n, 2, 4)), np.zeros((n, 2))
    information = 1.0 / (sigma**2 * dt_hours)
    band[:, :, 0] = 2.0 * information
    band[[0, -1], :, 0] = information + end_sd_km**-2.0
    band[:-1, [0, 1], 2] = -information
    pull[[0, -1]] = np.asarray(ends_km) / end_sd_km**2
    return band, np.linalg.solve(dense(band), pull.ravel()).reshape(n, 2)


def confined(band, mean, sea, count, sweeps, rng):
    noise = rng.standard_normal((mean.size, count))
    free = factor(band).solve_transposed_factor(noise).T.reshape(count, *mean.shape)
    centre = np.broadcast_to(mean, free.shape)
    paths = Paths(band[None], np.zeros(count, int), centre, free, (False, False), len(mean))
    mend(paths, sea, rng)
    paths = paths.some(np.flatnonzero(paths.all_clear(sea)))
    for _ in range(sweeps):
        sweep(paths, sea, rng)
    return paths


@pytest.mark.parametrize("weighted", [False, True])
def test_confined_paths_follow_the_law_that_rejection_gives(weighted):
    # straight coast and an island in the way: two ways round
    land = shapely.union(shapely.box(-50, -50, 50, -0.2), shapely.Point(0.3, 0.9).buffer(0.5))
    shore = Shore.over(widened(Coast(land, "")), Box(-8, -4, 8, 8))
    n, rng = 9, np.random.default_rng(1)
    band, mean = walk(n, 1.0, 1.0, [(-2.0, 0.3), (2.0, 0.4)], 0.3)
    sea = SeaBounds(shore, Strides(np.zeros(n - 1), np.ones(n - 1)) if weighted else None)
    free = np.linalg.cholesky(np.linalg.inv(dense(band))) @ rng.standard_normal((2 * n, 300_000))
    exact = mean + free.T.reshape(-1, n, 2)
    clear = shore.clear(exact[:, :-1].reshape(-1, 2), exact[:, 1:].reshape(-1, 2))
    exact = exact[clear.reshape(-1, n - 1).all(axis=1)]
    states = np.tile(np.arange(n), len(exact))
    weight = np.exp(sea.log_weight(exact.reshape(-1, 2), states).reshape(-1, n).sum(axis=1))
    weight /= weight.sum()
    true_mean = np.einsum("p,pni->ni", weight, exact)
    true_sd = np.sqrt(np.einsum("p,pni->ni", weight, (exact - true_mean) ** 2))
    assert 1.0 / np.sum(weight**2) > 10_000
    assert np.abs(true_mean - mean).max() > 0.9  # the coast matters here

    found = confined(band, mean, sea, 2000, 15, rng).xy_km
    assert len(found) > 1990
    # 36 comparisons, each of some 2000 independent paths: four standard errors
    assert np.abs(found.mean(axis=0) - true_mean).max() < 4.0 * (true_sd / 2000**0.5).max()
    assert np.abs(found.std(axis=0) / true_sd - 1.0).max() < 4.0 / (2.0 * 2000) ** 0.5


@pytest.mark.parametrize(("weighted", "off_km"), [(True, 0.45), (False, None)])
def test_an_animal_reflected_by_a_straight_coast_is_where_images_say(weighted, off_km):
    """24 h between two places half a km off a straight coast; method of images for the truth."""
    sigma, hours, dt = 1.2, 24.0, 0.5
    y = np.linspace(0.0, 40.0, 40_001)
    spread = sigma * (hours / 2.0) ** 0.5
    half_way = (norm.pdf(y, 0.5, spread) + norm.pdf(y, -0.5, spread)) ** 2
    truth = np.sum(y * half_way) / half_way.sum()  # 2.36 km
    n, rng = int(hours / dt) + 1, np.random.default_rng(2)
    shore = Shore.over(widened(Coast(SOUTH, "")), Box(-25, -2, 25, 25))
    sea = SeaBounds(
        shore, Strides(np.zeros(n - 1), np.full(n - 1, sigma * dt**0.5)) if weighted else None
    )
    band, mean = walk(n, dt, sigma, [(-2.0, 0.5), (2.0, 0.5)], 0.01)
    found = confined(band, mean, sea, 300, 30, rng).xy_km[:, n // 2, 1].mean()
    if weighted:
        # a step of 0.85 km does not feel the shore as a continuous path does: 0.2 km (measured),
        # and the mean of 300 paths is known to 0.1
        assert abs(found - truth) < off_km
    else:
        # never touching land pushes paths off it: why steps are weighted
        assert found - truth > 1.5


def test_a_path_put_through_given_places_takes_the_mean_of_all_else():
    fit, _ = crossing("persistent")
    band = fit.states.approximation.mode.band
    n = len(band)
    paths = Paths(
        band[None], np.zeros(2, int), np.zeros((2, n, 4)), np.zeros((2, n, 4)), (False, False), n
    )
    places = np.random.default_rng(3).normal(size=(n, 2))
    put_through(paths, 1, places)
    np.testing.assert_array_equal(paths.deviation[0], 0.0)
    np.testing.assert_array_equal(paths.deviation[1, :, :2], places)
    full = dense(band)
    at = np.arange(n * 4).reshape(n, 4)
    position, velocity = at[:, :2].ravel(), at[:, 2:].ravel()
    given = -np.linalg.solve(
        full[np.ix_(velocity, velocity)], full[np.ix_(velocity, position)] @ places.ravel()
    )
    # the two solvers round differently where short steps make the precision steep
    np.testing.assert_allclose(paths.deviation[1, :, 2:].ravel(), given, rtol=1e-6, atol=1e-7)


# Fast questions and ways by sea ------------------------------------------------------------------


@pytest.mark.parametrize("place", PLACES)
def test_the_raster_changes_no_answer(place):
    land = widened(Coast(PLACES[place], ""))
    shore = Shore.over(land, Box(-12, -6, 12, 14))
    rng = np.random.default_rng(4)
    # some start or end outside the raster
    start = rng.uniform([-13, -8], [13, 16], (20_000, 2))
    end = start + rng.normal(size=start.shape) * rng.choice([0.05, 1.0, 5.0], (20_000, 1))
    lines = shapely.linestrings(np.stack([start, end], axis=1))
    clear = shore.clear(start, end)
    np.testing.assert_array_equal(clear, ~shapely.intersects(land, lines))
    assert 0.1 < clear.mean() < 0.98
    np.testing.assert_array_equal(shore.afloat(start), ~shapely.intersects_xy(land, *start.T))
    inside = start[(np.abs(start[:, 0]) < 11.9) & (start[:, 1] > -5.9) & (start[:, 1] < 13.9)]
    exact = shapely.distance(shapely.boundary(land), shapely.points(inside))
    exact *= np.where(shapely.contains_xy(land, *inside.T), -1.0, 1.0)
    off = np.abs(shore.offing_at(inside) - exact) / shore.cell_km
    near = np.abs(exact) < EXACT_CELLS * shore.cell_km
    # bilinear between cells of 47 m, whose side it may miss where the shore has a corner; far off
    # the distance is between centres of cells
    assert np.median(off[near]) < 0.01
    assert np.median(off[~near]) < 0.6
    assert off.max() < 1.0


def test_the_way_round_a_spit_is_near_the_shortest():
    shore = Shore.over(widened(Coast(PLACES["thin spit"], "")), Box(-12, -6, 12, 14))
    graph = SeaGraph.over(shore, Box(-12, -6, 12, 14))
    way = graph.way(np.array([-2.0, 1.0]), np.array([2.0, 1.0]))
    length = np.hypot(*np.diff(way, axis=0).T).sum()
    around = 2.0 * np.hypot(2.0 - 0.05, 6.0) + 0.1
    # nodes off the shore and on a lattice: near the shortest way, not on it
    assert around < length < 1.02 * around
    assert shore.clear(way[:-1], way[1:]).all()
    path = np.array([[-2.0, 1.0]] * 6 + [[2.0, 1.0]] * 6)
    led = led_by_sea(path, (True, True), graph)
    assert shore.clear(led[:-1], led[1:]).all()
    np.testing.assert_array_equal(led[[0, -1]], path[[0, -1]])


def test_a_lake_has_no_way_to_the_sea_and_a_beach_has():
    ring = shapely.Point(0, 0).buffer(5).difference(shapely.Point(0, 0).buffer(3))
    shore = Shore.over(widened(Coast(ring, "")), Box(-9, -9, 9, 9))
    graph = SeaGraph.over(shore, Box(-9, -9, 9, 9))
    assert graph.way(np.array([0.0, 0.0]), np.array([8.0, 0.0])) is None
    path = np.linspace([0.0, 0.0], [8.0, 0.0], 30)
    assert led_by_sea(path, (True, True), graph) is None
    ashore = np.linspace([4.5, 0.0], [8.0, 3.0], 10)
    assert led_by_sea(ashore, (True, True), graph) is None
    led = led_by_sea(ashore, (False, True), graph)
    assert shore.afloat(led).all()
    assert np.hypot(*(led[0] - ashore[0])) < 0.75


def test_points_along_a_way_keep_its_corners():
    corners = np.array([[0.0, 0.0], [0.0, 4.0], [2.0, 4.0]])
    for count in (1, 2, 5, 11):
        inside = spread_along(corners, count)
        assert len(inside) == count
        assert (inside == corners[1]).all(axis=1).any()
    np.testing.assert_allclose(spread_along(corners, 5), [[0, 1], [0, 2], [0, 3], [0, 4], [1, 4]])


# Filled tracks -----------------------------------------------------------------------------------


@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("place", PLACES)
def test_no_draw_touches_land_and_no_position_stands_on_it(place, motion):
    fit, data = crossing(motion)
    land = PLACES[place]
    assert on_land(filled(fit, data, None), land)[0] >= 4
    track = filled(fit, data, land)
    assert track.draws_lonlat.shape[0] == 10
    assert on_land(track, land) == (0, 0)
    assert track.table["coast_adjusted"].any()
    assert not any("no way by sea" in warning for warning in track.warnings)


def test_weighted_points_of_the_parameters_keep_to_the_sea_too():
    fit, data = crossing("diffusive", points=32)
    # three quarters of the points asked for are drawn ones
    assert len(fit.states.points.at) == 24
    assert on_land(filled(fit, data, PLACES["thin spit"]), PLACES["thin spit"]) == (0, 0)


def test_an_animal_that_starts_on_the_beach_with_fixes_ashore_swims():
    hours = np.arange(0, 40, 2.0)
    at = np.stack([0.3 * hours, -0.4 + 0.1 * hours], axis=1)
    fit, data = fitted(hours, at, 0.5)
    assert (SOUTH.contains(shapely.points(at))).sum() == 2
    track = filled(fit, data, SOUTH)
    assert on_land(track, SOUTH) == (0, 0)
    assert track.warnings == ()


def test_coarse_report_times_get_vertices_where_lines_would_cross():
    fit, data = crossing("diffusive")
    land = PLACES["island"]
    track = filled(fit, data, land, interval_hours=6.0)
    assert len(track.draw_times) == track.draws_lonlat.shape[1] > len(track.table)
    assert set(track.table["time"]) < set(track.draw_times)
    assert track.draw_times.is_monotonic_increasing
    assert on_land(track, land) == (0, 0)


def test_nothing_changes_where_no_land_is_near():
    fit, data = crossing("diffusive")
    free = filled(fit, data, None)
    far = filled(fit, data, shapely.box(60, 60, 90, 90))
    pd.testing.assert_frame_equal(far.table, free.table, check_exact=True)
    np.testing.assert_array_equal(far.draws_lonlat, free.draws_lonlat)
    assert not far.table["coast_adjusted"].any()
    assert far.draw_times.equals(pd.DatetimeIndex(far.table["time"]))


def test_land_at_one_end_leaves_the_other_alone_and_shows_no_seam():
    hours = np.arange(0, 120, 3.0)
    at = np.stack([0.4 * hours, 1.0 + 0.15 * hours], axis=1)
    fit, data = fitted(hours, at, 0.5)
    free, track = filled(fit, data, None), filled(fit, data, SOUTH)
    adjusted = track.table["coast_adjusted"].to_numpy()
    assert adjusted[:5].all()
    assert not adjusted[-60:].any()
    pd.testing.assert_frame_equal(
        track.table[~adjusted], free.table[~adjusted], check_exact=True, obj="rows not adjusted"
    )
    north = (track.table["lat"] - free.table["lat"]) * 111_200 / free.table["sd_m"]
    wider = track.table["sd_m"] / free.table["sd_m"]
    edge = np.flatnonzero(np.diff(adjusted.astype(int)))
    # hour to hour, where rows begin to be adjusted, by a few hundredths of an sd
    assert np.abs(np.diff(north))[edge].max() < 0.06
    assert np.abs(np.diff(wider))[edge].max() < 0.06


def test_the_same_seed_gives_the_same_and_draws_do_not_move_positions():
    fit, data = crossing("diffusive")
    land = shapely.box(-200, -200, 200, 2.0)
    one, again = filled(fit, data, land), filled(fit, data, land)
    pd.testing.assert_frame_equal(one.table, again.table, check_exact=True)
    np.testing.assert_array_equal(one.draws_lonlat, again.draws_lonlat)
    none = filled(fit, data, land, draws=0)
    pd.testing.assert_frame_equal(one.table, none.table, check_exact=True)
    assert none.draws_lonlat.shape[0] == 0
    other = filled(fit, data, land, seed=2)
    assert not np.allclose(other.draws_lonlat[:, 0], one.draws_lonlat[:, 0])
    # another seed moves positions by little: they rest on 128 paths, averaged over sweeps
    off = np.abs(other.table["lat"] - one.table["lat"]) * 111_200 / one.table["sd_m"]
    assert 0.0 < off.median() < 0.1


def test_fixes_on_two_sides_of_land_without_a_way_are_told():
    hours = np.arange(0, 24, 2.0)
    x = np.where(hours < 12, -4.0, 4.0)
    fit, data = fitted(hours, np.stack([x, 0.0 * x], axis=1), 0.3)
    # a ring of sea around an island with a lake: the fixes of the first half lie in the lake
    lake = shapely.Point(-4, 0).buffer(2.0)
    land = shapely.Point(-4, 0).buffer(4.5).difference(lake)
    track = filled(fit, data, land)
    assert any(
        w.startswith("tag seal: between 2023-11-06 ") and "no way by sea was found" in w
        for w in track.warnings
    )


def test_good_fixes_far_inland_are_told_and_the_position_stays_at_sea():
    hours = np.arange(0, 48, 2.0)
    y = np.where((hours > 20) & (hours < 28), -3.0, 3.0)
    fit, data = fitted(hours, np.stack([0.2 * hours, y], axis=1), 0.2)
    track = filled(fit, data, SOUTH)
    assert on_land(track, SOUTH) == (0, 0)
    assert any("the fixes put the animal ashore" in warning for warning in track.warnings)


def test_the_mean_inside_an_island_gives_way_to_a_place_at_sea():
    hours = np.array([0.0, 1.0, 2.0, 26.0, 27.0, 28.0])
    x = np.array([-8.0, -7.9, -7.8, 7.8, 7.9, 8.0])
    fit, data = fitted(hours, np.stack([x, 0.0 * x], axis=1), 0.1)
    island = shapely.Point(0, 0).buffer(1.5)
    free, track = filled(fit, data, None), filled(fit, data, island)
    assert on_land(free, island)[1] > 0
    assert on_land(track, island) == (0, 0)
    # the region stays about the paths on both sides
    middle = track.table["hours_to_fix"].idxmax()
    assert track.table["sd_m"][middle] > 0.8 * free.table["sd_m"][middle]


def swum(rng, hours, radius_km, sigma):
    """An animal in a round bay that takes another step when one would end ashore; minutes."""
    xy = np.zeros((round(hours * 60) + 1, 2))
    for i in range(len(xy) - 1):
        while True:
            step = xy[i] + sigma / 60**0.5 * rng.standard_normal(2)
            if np.hypot(*step) < radius_km:
                break
        xy[i + 1] = step
    return xy


@pytest.mark.slow
def test_an_animal_confined_to_a_bay_is_found_where_it_was():
    """Bias and coverage over six animals, half of the time in gaps of a day."""
    bay = shapely.box(-60, -60, 60, 60).difference(shapely.Point(0, 0).buffer(6.0, quad_segs=64))
    errors = {"free": [], "kept": []}
    inside, nearer = [], {"free": [], "kept": []}
    for seed in range(6):
        rng = np.random.default_rng(seed)
        truth = swum(rng, 96, 6.0, 1.2)
        hours = np.concatenate([np.arange(0, 24, 2.0), np.arange(48, 72, 2.0), [95.0]])
        at = truth[(60 * hours).astype(int)]
        fit, data = fitted(hours, at + 0.5 * rng.standard_normal(at.shape), 0.5)
        for name, land in (("free", None), ("kept", bay)):
            table = filled(fit, data, land, draws=0).table
            xy = PLANE.to_plane(table["lon"], table["lat"])
            minute = (table["time"].to_numpy("M8[m]").astype(int) - FIRST_HOUR * 60).astype(int)
            off = truth[minute] - xy
            errors[name].append(np.sum(off**2, axis=1))
            nearer[name].append(np.hypot(*xy.T) - np.hypot(*truth[minute].T))
            if name == "kept":
                major, minor = table["ellipse95_major_m"], table["ellipse95_minor_m"]
                turn = np.radians(table["ellipse_bearing_deg"])
                along = off[:, 0] * np.sin(turn) + off[:, 1] * np.cos(turn)
                across = off[:, 0] * np.cos(turn) - off[:, 1] * np.sin(turn)
                inside.append((along / major) ** 2 + (across / minor) ** 2 < 1e-6)
                assert not bay.contains(shapely.points(xy)).any()
    rms = {name: np.sqrt(np.mean(np.concatenate(e))) for name, e in errors.items()}
    assert rms["kept"] < rms["free"]
    # 6 animals; the mean distance to the middle of the bay is known to some 0.3 km
    assert abs(np.mean(np.concatenate(nearer["kept"]))) < 1.0
    assert np.mean(np.concatenate(inside)) > 0.85


# The study ---------------------------------------------------------------------------------------


def a_study(folder, extra=""):
    rows = ["tag,time,lon,lat,gps_sd_m"]
    for i in range(12):
        x = 2.5 if i % 2 else -2.5
        lon, lat = PLANE.to_lonlat(np.array([[x, 3.0]]))
        rows.append(f"seal,2024-05-01T{2 * i:02d}:00:00Z,{lon[0]:.6f},{lat[0]:.6f},300")
    (folder / "fixes.csv").write_text("\n".join(rows) + "\n")
    text = '[study]\nname = "spit"\n[fixes]\nfiles = ["fixes.csv"]\n[fit]\npoints = 0\n'
    (folder / "study.toml").write_text(text + extra)
    return folder / "study.toml"


@pytest.fixture
def spit_file(tmp_path):
    import geopandas

    land = in_degrees(PLACES["thin spit"])
    geopandas.GeoSeries([land], crs="EPSG:4326").to_file(tmp_path / "coast.gpkg")
    return tmp_path


@pytest.mark.parametrize(("key", "kept"), [("", True), ("keep_at_sea = false", False)])
def test_a_coast_keeps_a_study_at_sea_unless_told_otherwise(spit_file, key, kept):
    extra = f'[coast]\nfile = "coast.gpkg"\n[paths]\ndraws = 3\n{key}\n'
    prepared = trackfit.prepare(trackfit.read_study(a_study(spit_file, extra)))
    (track,) = trackfit.fill_tracks(prepared, trackfit.fit_tags(prepared))
    assert (on_land(track, PLACES["thin spit"])[0] == 0) == kept
    assert track.table["coast_adjusted"].any() == kept


def test_keeping_at_sea_needs_a_coast(tmp_path):
    path = a_study(tmp_path, "[paths]\nkeep_at_sea = true\n")
    with pytest.raises(StudyError, match=r"paths\.keep_at_sea: needs \[coast\]"):
        trackfit.read_study(path)


@pytest.mark.slow
def test_the_demonstration_is_fast(tmp_path):
    """All six tags in less than ten seconds of computing; its animals keep off the coast."""
    from pathlib import Path

    from trackfit_demo import __file__ as demo

    text = (Path(demo).parent / "study.toml").read_text()
    for name in ("penguins.csv", "seals.csv", "coast.geojson", "layers"):
        (tmp_path / name).symlink_to(Path(demo).parent / name)
    (tmp_path / "study.toml").write_text(text + "\n[fit]\npoints = 0\n")
    prepared = trackfit.prepare(trackfit.read_study(tmp_path / "study.toml"))
    fits = trackfit.fit_tags(prepared)
    begun = time.process_time()
    tracks = trackfit.fill_tracks(prepared, fits)
    assert time.process_time() - begun < 10.0
    land = prepared.coast.land
    for track in tracks:
        xy = prepared.plane.to_plane(*track.draws_lonlat.reshape(-1, 2).T)
        lines = shapely.linestrings(xy.reshape(track.draws_lonlat.shape))
        assert not shapely.intersects(land, lines).any()
    assert CLEARANCE_KM == 0.01
