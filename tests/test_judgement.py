"""The model's own judgement of every fix: against a dense Gaussian, and with a known fault."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from pyproj import Geod
from results_standins import make_fixes, wandering_track
from scipy.linalg import block_diag
from test_figures import assert_tidy, outer_texts, plane_of, surroundings

import trackfit
from trackfit.frame import Plane
from trackfit.judgement import FixJudgement, judge_fixes
from trackfit.report import Scene, figure_writers, house_style, judgement_figure
from trackfit.report.judgement_figure import LEAST_P_VALUE
from trackfit.results.inputs import JUDGEMENT_COLUMNS

GEOD = Geod(ellps="WGS84")
START_SD_KM = 1000.0
WILD_ROW = 20


def write_study(folder: Path, more: str = "", fixes: int = 45) -> Path:
    """A diffusing animal of 1.5 km/sqrt(h), round errors of 400 m, one fix 25 km to the north-east.

    A second tag has two fixes, too few to fit.
    """
    rng = np.random.default_rng(11)
    hours = np.cumsum(rng.uniform(0.3, 3.0, fixes))
    steps = rng.normal(0, 1.5, (fixes, 2)) * np.sqrt(np.diff(hours, prepend=0.0))[:, None]
    xy_km = np.cumsum(steps, axis=0) + rng.normal(0, 0.4, (fixes, 2))
    xy_km[WILD_ROW] += 25.0 / np.sqrt(2.0)
    lon, lat = Plane.centred_on([178.9], [-44.0]).to_lonlat(xy_km + np.array([80.0, 0.0]))
    times = pd.Timestamp("2024-05-01T00:00Z") + pd.to_timedelta(np.round(hours * 3600), unit="s")
    rows = pd.DataFrame({"tag": "a", "time": times, "lon": lon, "lat": lat})
    rows = pd.concat([rows, rows.iloc[:2].assign(tag="b")])
    rows.assign(time=rows["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")).to_csv(
        folder / "fixes.csv", index=False, float_format="%.7f"
    )
    path = folder / "study.toml"
    path.write_text(
        '[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n[fit]\npoints = 0\n'
        "[paths]\ndraws = 0\n[motion]\nstep_hours = 1.0\n"
        f'[output]\nformats = ["csv"]\n{more}\n',
        encoding="utf-8",
    )
    return path


@pytest.fixture(scope="module")
def fitted(tmp_path_factory):
    folder = tmp_path_factory.mktemp("judged")
    prepared = trackfit.prepare(
        trackfit.read_study(write_study(folder, "[errors]\ndefault_sd_m = 400"))
    )
    return prepared, trackfit.fit_tags(prepared)


def test_predictions_are_those_of_the_dense_gaussian_without_the_fix(fitted):
    prepared, fits = fitted
    judged = trackfit.fix_judgements(prepared, fits)[0]
    data = prepared.tracks["a"]
    sigma = np.exp(fits[0].states.approximation.theta[0])
    elapsed = data.hours - data.hours[0]
    # positions and errors of all fixes as one normal vector (x1, y1, x2, y2, ...)
    walk = np.kron(START_SD_KM**2 + sigma**2 * np.minimum.outer(elapsed, elapsed), np.eye(2))
    seen = walk + block_diag(*data.covariance_km2)
    centred = (data.at_km - data.at_km[0]).ravel()  # the prior of the start stands at the first fix
    predicted = np.zeros((len(elapsed), 2))
    distance, expected_sd = np.zeros((2, len(elapsed)))
    for k in range(len(elapsed)):
        own, others = np.split(np.roll(np.arange(seen.shape[0]), -2 * k), [2])
        gain = np.linalg.solve(seen[np.ix_(others, others)], walk[np.ix_(others, own)]).T
        predicted[k] = gain @ centred[others] + data.at_km[0]
        covariance = seen[np.ix_(own, own)] - gain @ walk[np.ix_(others, own)]
        offset = data.at_km[k] - predicted[k]
        distance[k] = np.sqrt(offset @ np.linalg.solve(covariance, offset))
        expected_sd[k] = 1000.0 * np.sqrt(np.trace(covariance) / 2.0)
    # 1e-7: beside a prior variance of 1e6 km^2 the dense solution keeps nine digits or so
    np.testing.assert_allclose(judged.table["distance_sd"], distance, rtol=1e-7)
    np.testing.assert_allclose(judged.table["p_value"], np.exp(-0.5 * distance**2), rtol=1e-6)
    # 1e-4: on the ground, and the plane stretches by so much at most
    np.testing.assert_allclose(judged.table["expected_sd_m"], expected_sd, rtol=1e-4)
    lon, lat = prepared.plane.to_lonlat(predicted)
    _, _, off_m = GEOD.inv(lon, lat, judged.table["predicted_lon"], judged.table["predicted_lat"])
    assert np.max(off_m) < 0.01  # metres


def test_distance_and_bearing_lead_from_the_predicted_to_the_reported_place(fitted):
    table = trackfit.fix_judgements(*fitted)[0].table
    lon, lat, _ = GEOD.fwd(
        table["predicted_lon"], table["predicted_lat"], table["bearing_deg"], table["offset_m"]
    )
    away = GEOD.inv(lon, lat, table["lon"], table["lat"])[2]
    assert np.max(away) < 1e-3  # PROJ's inverse projection is good to a millimetre
    assert table["bearing_deg"].between(0, 360, inclusive="left").all()
    assert (table["lon"].min(), table["lon"].max()) > (-180.0, 0.0)  # across the antimeridian
    assert table["lon"].min() < 0 < table["lon"].max()


def test_the_wild_fix_is_flagged_with_its_direction(fitted):
    prepared, fits = fitted
    judged = trackfit.fix_judgements(prepared, fits)[0]
    # it also casts doubt on the neighbour it stands beside in time
    flagged = np.flatnonzero(judged.table["flagged"])
    assert set(flagged) <= {WILD_ROW - 1, WILD_ROW, WILD_ROW + 1}
    assert judged.table["p_value"].idxmin() == WILD_ROW
    assert judged.n_flagged == len(flagged)
    wild = judged.table.iloc[WILD_ROW]
    # thrown 25 km to the north-east; its neighbours are known to a few km
    assert wild["offset_m"] == pytest.approx(25_000, abs=5_000)
    assert wild["bearing_deg"] == pytest.approx(45, abs=15)
    assert (judged.table["flagged"] == (judged.table["p_value"] < 0.001)).all()
    pd.testing.assert_frame_equal(
        judged.table[["time", "lon", "lat"]], prepared.fixes.of("a")[["time", "lon", "lat"]]
    )
    assert list(judged.table.columns) == list(JUDGEMENT_COLUMNS)


def test_a_tag_that_was_not_fitted_has_its_fixes_and_no_figures(fitted):
    prepared, fits = fitted
    judged = trackfit.fix_judgements(prepared, fits)[1]
    assert isinstance(judged, FixJudgement)
    assert judged.tag == "b"
    assert judged.table[["predicted_lon", "offset_m", "p_value"]].isna().all(axis=None)
    assert not judged.table["flagged"].any()
    assert len(judged.table) == 2


def test_a_prediction_that_is_no_place_on_earth_is_missing_not_a_fault(fitted, monkeypatch):
    prepared, fits = fitted
    from trackfit import judgement

    found = judgement.leave_one_out(fits[0].states.approximation)
    found.offset_km[3] = [2.0e4, 0.0]  # the plane's disc ends at 12 742 km
    monkeypatch.setattr(judgement, "leave_one_out", lambda _: found)
    table = judge_fixes(fits[0], prepared.fixes.of("a"), prepared.plane, flag_p_value=0.001).table
    lost = table[["predicted_lon", "offset_m", "bearing_deg"]].isna()
    assert lost.all(axis=1).to_numpy().nonzero()[0].tolist() == [3]
    assert lost.any(axis=1).sum() == 1


def test_sound_fixes_are_flagged_as_rarely_as_promised(tmp_path):
    # 2000 p-values of the model itself: uniform, so that 1 % lie below 0.01 (sd 0.22 %)
    rng = np.random.default_rng(2)
    rows = []
    for tag in range(10):
        hours = np.cumsum(rng.exponential(2.0, 200))
        xy = np.cumsum(rng.normal(0, 2, (200, 2)) * np.sqrt(np.diff(hours, prepend=0))[:, None], 0)
        lon, lat = Plane.centred_on([0.0], [10.0]).to_lonlat(xy + rng.normal(0, 1, (200, 2)))
        times = pd.Timestamp("2024-01-01T00:00Z") + pd.to_timedelta(hours, unit="h").round("s")
        rows.append(pd.DataFrame({"tag": f"t{tag}", "time": times, "lon": lon, "lat": lat}))
    table = pd.concat(rows).assign(gps_sd_m=1000.0)
    table.assign(time=table["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")).to_csv(
        tmp_path / "fixes.csv", index=False
    )
    (tmp_path / "study.toml").write_text(
        '[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n[screening]\nflag_p_value = 0.01\n'
        "[fit]\npoints = 0\n[motion]\nstep_hours = 6\n[paths]\ninterval_hours = 6\n",
        encoding="utf-8",
    )
    prepared = trackfit.prepare(trackfit.read_study(tmp_path / "study.toml"))
    judged = trackfit.fix_judgements(prepared, trackfit.fit_tags(prepared))
    assert all(j.flag_p_value == 0.01 for j in judged)
    count = sum(len(j.table) for j in judged)
    assert count == 2000
    share = sum(j.n_flagged for j in judged) / count
    # neighbouring judgements are alike, so the bound is 4 and not 3 standard errors
    assert share == pytest.approx(0.01, abs=4 * np.sqrt(0.01 * 0.99 / count))


# With heavy tails, nothing screened ---------------------------------------------------------------

OFF = '[screening]\ninvalid_classes = []\n[errors]\ndefault_sd_m = 400\ntails = "heavy"'


def test_a_study_with_screening_off_and_heavy_tails_works_and_writes_its_judgement(tmp_path):
    study = trackfit.read_study(write_study(tmp_path, f"figures = true\n{OFF}"))
    prepared = trackfit.prepare(study)
    assert len(prepared.fixes.set_aside) == 0
    fits = trackfit.fit_tags(prepared)
    assert fits[0].status.ok, fits[0].status
    tracks = trackfit.fill_tracks(prepared, fits)
    folder = trackfit.write_results(tmp_path / "results", prepared, fits, tracks)
    results = trackfit.read_results(folder)
    judged = trackfit.fix_judgements(prepared, fits)
    read = results.fix_judgement
    assert read["tag"].tolist() == ["a"] * 45 + ["b"] * 2
    assert read["flagged"].dtype == bool
    table = judged[0].table
    of_a = read[read["tag"] == "a"].reset_index(drop=True)
    np.testing.assert_allclose(of_a["offset_m"], table["offset_m"], atol=0.05)  # decimetres kept
    np.testing.assert_allclose(of_a["p_value"], table["p_value"], rtol=5.1e-3)  # three digits kept
    assert (of_a["time"] == table["time"]).all()
    assert of_a["distance_sd"].idxmax() == WILD_ROW
    assert read.loc[read["tag"] == "b", "offset_m"].isna().all()
    assert {p.name for p in (folder / "figures").iterdir()} >= {"fixes_a.png", "track_a.png"}
    # the path passes the wild fix by: at its time it is nearer to the neighbours' line
    at = tracks[0].table["time"].searchsorted(table["time"][WILD_ROW])
    row = tracks[0].table.iloc[at]
    wild = table.iloc[WILD_ROW]
    assert GEOD.inv(row["lon"], row["lat"], wild["lon"], wild["lat"])[2] > 15_000


def test_without_filled_tracks_the_judgement_is_written_and_not_drawn(fitted, tmp_path):
    prepared, fits = fitted
    folder = trackfit.write_results(tmp_path / "results", prepared, fits, [])
    assert (folder / "fix_judgement.csv").exists()
    assert not (folder / "figures").exists()


# The figure ---------------------------------------------------------------------------------------


def judged_track(track, flagged=(), missing=()) -> FixJudgement:
    table = make_fixes([track]).table[["time", "lon", "lat"]]
    rng = np.random.default_rng(1)
    p_value = rng.uniform(0.002, 1.0, len(table))
    predicted = table[["lon", "lat"]] + rng.normal(0, 0.003, (len(table), 2))
    offset_m = rng.rayleigh(1000.0, len(table))
    for row in flagged:
        p_value[row], offset_m[row] = 1e-40, 9e4
        table.loc[row, "lat"] = np.clip(table["lat"][row] + 0.2, -90, 90)
    table = table.assign(
        predicted_lon=predicted["lon"],
        predicted_lat=predicted["lat"].clip(-90, 90),
        offset_m=offset_m,
        bearing_deg=0.0,
        distance_sd=1.0,
        p_value=p_value,
        expected_sd_m=900.0,
        flagged=p_value < 0.001,
    )
    table.loc[list(missing), ["predicted_lon", "predicted_lat", "offset_m", "bearing_deg"]] = np.nan
    return FixJudgement(track.tag, table, 0.001)


CASES = {
    "none flagged": ({}, ()),
    "two flagged": ({}, (3, 8)),
    "many flagged": ({"hours": 200}, range(0, 60, 3)),
    "a single fix": ({"hours": 1}, ()),
    "a single fix, flagged": ({"hours": 1}, (0,)),
    "antimeridian": ({"start": (179.95, -17.0)}, (5,)),
    "north pole": ({"start": (30.0, 89.6), "hours": 80}, (5,)),
    "a dollar tag": ({"tag": "a$b$_^{\\x", "hours": 20}, (2,)),
    "four months": ({"hours": 2900}, (100, 700)),
}


@pytest.mark.parametrize("case", CASES)
def test_the_figure_is_tidy_and_shows_what_is_flagged(case):
    track_settings, flagged = CASES[case]
    track = wandering_track(**track_settings)
    judgement = judged_track(track, flagged)
    with house_style():
        figure = judgement_figure(judgement, track, Scene(plane_of(track)))
        figure.canvas.draw()
    assert_tidy(figure)
    _, p_axes, offset_axes = figure.axes
    assert (p_axes.get_ylabel(), offset_axes.get_ylabel()) == ("p-value", "distance (km)")
    assert offset_axes.get_xlabel() == "time (UTC)"
    assert p_axes.get_yscale() == offset_axes.get_yscale() == "log"
    for axes in figure.axes:
        diamonds = [c for c in axes.collections if c.get_label() == "flagged fix"]
        assert sum(len(c.get_offsets()) for c in diamonds) == len(flagged)
        numbers = [text.get_text() for text in axes.texts if text.get_text().isdigit()]
        assert numbers == ([str(i + 1) for i in range(len(flagged))] if len(flagged) < 13 else [])
    assert f"{len(flagged)} of {len(judgement.table)} flagged" in figure._suptitle.get_text()
    low, high = p_axes.get_ylim()
    assert low < (LEAST_P_VALUE if len(flagged) else 0.001) < high


def test_a_full_scene_tells_of_flagged_fixes_beyond_the_map():
    track = wandering_track(hours=60)
    judgement = judged_track(track, (4,), missing=(6,))
    judgement.table.loc[4, "lat"] += 5.0
    with house_style():
        figure = judgement_figure(judgement, track, surroundings(track))
        figure.canvas.draw()
    assert_tidy(figure)
    words = [text.get_text() for text in outer_texts(figure)]
    assert "1 flagged fix beyond the map" in words
    assert {"depth (m)", "land", "mean path", "fix", "flagged fix", "flagged below"} <= set(words)


def test_every_judged_and_filled_tag_has_its_page(tmp_path):
    tracks = [wandering_track(tag=tag, hours=30) for tag in ("a", "b")]
    judgements = [judged_track(tracks[0], (1,)), judged_track(wandering_track(tag="unfilled"))]
    writers = figure_writers(
        tracks, make_fixes(tracks), [], Scene(plane_of(tracks[0])), judgements=judgements
    )
    assert set(writers) == {"figures/track_a.png", "figures/track_b.png", "figures/fixes_a.png"}
    writers["figures/fixes_a.png"](tmp_path / "fixes_a.png")
    assert (tmp_path / "fixes_a.png").stat().st_size > 10_000
