"""Models compared, and fixes hidden and foretold: from study files, without layers."""

import json
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from made_tracks import cruise, fitted, made, model_of, part, seen, times, walk

import trackfit
from trackfit.criticism.compare import Outcome, _outcome, sum_sd, variants
from trackfit.criticism.hidden_fixes import ALL_TAGS, hidden_blocks, p_values, share_sd
from trackfit.faults import StudyError
from trackfit.inference.fit import FitStatus, fit_track
from trackfit.inference.grid import nearest_state
from trackfit.inference.task import FitSettings, TrackData
from trackfit.results import read_results
from trackfit.results.tables import read_table

FIXES = 150
EXTRA = """
[[preference]]
name = "home"
point = { lon = -4.0, lat = 60.0 }
shape = "distance"
"""


def study_of(folder, tracks, more=""):
    """A study of tracks in plane km, laid round a point; errors of 0.5 km stated as default."""
    plane = trackfit.Plane.centred_on(np.array([-4.0]), np.array([60.0]))
    parts = []
    for tag, data in tracks.items():
        lon, lat = plane.to_lonlat(data.at_km)
        time = pd.Timestamp("2024-05-01", tz="UTC") + pd.to_timedelta(data.hours, unit="h")
        parts.append(pd.DataFrame({"tag": tag, "time": time.floor("s"), "lon": lon, "lat": lat}))
    folder.mkdir(parents=True, exist_ok=True)
    pd.concat(parts).to_csv(folder / "fixes.csv", index=False)
    path = folder / "study.toml"
    path.write_text(
        '[study]\nname = "made"\n[fixes]\nfiles = ["fixes.csv"]\n[errors]\ndefault_sd_m = 500.0\n'
        "[motion]\nstep_hours = 1.0\n[fit]\npoints = 0\n[paths]\ndraws = 0\n" + more
    )
    return trackfit.prepare(trackfit.read_study(path))


def two_tracks():
    rng = np.random.default_rng(7)
    found = {}
    for tag, path in (("cruiser", cruise), ("walker", walk)):
        hours = times(rng, FIXES)
        found[tag] = seen(rng, hours, path(rng, hours), 0.5, tag=tag)
    return found


@pytest.fixture(scope="module")
def compared(tmp_path_factory):
    prepared = study_of(tmp_path_factory.mktemp("compared"), two_tracks(), EXTRA)
    fits = trackfit.fit_tags(prepared)
    rows = trackfit.compare_models(prepared, fits, motions=True, terms=True)
    return prepared, fits, {(row.tag, row.model): row for row in rows}


# Comparison ---------------------------------------------------------------------------------------


def test_the_true_motion_wins_where_the_track_can_tell(compared):
    _, _, rows = compared
    cruiser = rows["cruiser", "persistent motion"]
    assert cruiser.outcome is Outcome.BETTER
    assert cruiser.aic_difference < -20.0
    assert cruiser.leave_one_out_difference > 3.0 * cruiser.difference_sd > 0.0
    assert "With persistent motion the track is described better (AIC" in cruiser.sentence
    # diffusive motion is persistent motion of no persistence: one more parameter, no more gain
    walker = rows["walker", "persistent motion"]
    assert walker.outcome in (Outcome.ALIKE, Outcome.WORSE)


def test_every_tag_has_its_own_model_first_and_every_variant_after(compared):
    _, _, rows = compared
    models = ["as in the study", "persistent motion", "without home"]
    assert list(rows) == [(tag, model) for tag in ("cruiser", "walker") for model in models]


def test_differences_are_those_of_the_scores_and_from_the_study_s_own(compared):
    _, fits, rows = compared
    for (tag, _), row in rows.items():
        own = rows[tag, "as in the study"]
        assert row.aic_difference == pytest.approx(row.scores.aic - own.scores.aic)
        assert row.leave_one_out_difference == pytest.approx(
            row.scores.leave_one_out - own.scores.leave_one_out
        )
    assert own.scores.log_marginal == pytest.approx(fits[1].log_marginal)
    assert own.outcome is Outcome.OWN
    less = rows["walker", "without home"].scores
    assert less.estimated == own.scores.estimated - 1


def test_a_term_that_does_nothing_can_be_left_out(compared):
    row = compared[2]["walker", "without home"]
    assert row.outcome is Outcome.ALIKE
    assert "Without home the track is described as well" in row.sentence


def test_a_comparison_is_what_fitting_the_other_study_gives(compared, tmp_path):
    _, _, rows = compared
    study_of(tmp_path, two_tracks())
    (tmp_path / "study.toml").write_text(
        (tmp_path / "study.toml").read_text().replace("[motion]", '[motion]\nkind = "persistent"')
        + EXTRA
    )
    fits = trackfit.fit_tags(trackfit.prepare(trackfit.read_study(tmp_path / "study.toml")))
    for fit in fits:
        row = rows[fit.tag, "persistent motion"]
        assert row.scores.log_marginal == pytest.approx(fit.log_marginal, abs=1e-6)


def test_the_other_motion_of_a_persistent_study_is_the_diffusive_one(tmp_path):
    prepared = study_of(tmp_path, {"t": made("diffusive", 1, fixes=10)})
    motion = prepared.study.motion.model_copy(update={"kind": "persistent"})
    study = prepared.study.model_copy(update={"motion": motion})
    (variant,) = variants(study, motions=True, terms=True)
    assert (variant.model, variant.study.motion.kind) == ("diffusive motion", "diffusive")
    assert variant.study.path == prepared.study.path


def test_a_tag_with_too_few_fixes_is_compared_to_nothing(tmp_path):
    prepared = study_of(tmp_path, {"short": part(made("diffusive", 1), slice(0, 2))})
    own, other = trackfit.compare_models(prepared, trackfit.fit_tags(prepared))
    assert own.scores is None
    assert other.outcome is Outcome.NOT_FITTED
    assert np.isnan(other.aic_difference)
    assert other.sentence.endswith(FitStatus.TOO_FEW_FIXES.sentence)


@pytest.mark.parametrize(
    ("aic", "gain", "sd", "outcome"),
    [
        (-10.0, 5.0, 1.0, Outcome.BETTER),
        (-10.0, 1.0, 1.0, Outcome.BETTER),
        (10.0, 1.0, 1.0, Outcome.WORSE),
        (-1.0, 1.0, 1.0, Outcome.ALIKE),
        (1.5, -9.0, 1.0, Outcome.WORSE),
        (-10.0, -5.0, 1.0, Outcome.DIVIDED),
        (0.0, 0.0, 0.0, Outcome.ALIKE),
    ],
)
def test_both_scores_have_a_say(aic, gain, sd, outcome):
    assert _outcome(aic, gain, sd) is outcome


def test_the_sd_of_a_sum_of_neighbours_that_are_alike():
    rng = np.random.default_rng(1)
    e = rng.normal(size=(400, 300))
    independent = [sum_sd(row) for row in e]
    assert np.mean(independent) == pytest.approx(np.sqrt(300), rel=0.03)
    alike = e[:, 1:] + e[:, :-1]  # sums of 299 of these: variance about 4 * 299
    wanted = float(np.std(alike.sum(axis=1)))
    # rel 0.12: the kernel's bias at 5 lags, and 3.5 % of Monte Carlo
    assert np.mean([sum_sd(row) for row in alike]) == pytest.approx(wanted, rel=0.12)
    assert sum_sd(np.zeros(5)) == 0.0
    assert sum_sd(np.array([1.0])) == 0.0


# Which fixes are hidden ---------------------------------------------------------------------------


@given(
    fixes=st.integers(2, 60),
    share=st.floats(0.01, 0.5),
    block_hours=st.one_of(st.none(), st.floats(0.1, 30.0)),
    seed=st.integers(0, 1000),
)
def test_ends_are_kept_blocks_are_apart_and_enough_is_left(fixes, share, block_hours, seed):
    rng = np.random.default_rng(seed)
    hours = np.sort(rng.uniform(0.0, 50.0, fixes))
    block = hidden_blocks(hours, share, block_hours, rng)
    hidden = block >= 0
    assert not hidden[[0, -1]].any()
    assert np.sum(~hidden) >= min(3, fixes)
    if block_hours is None:
        assert hidden.sum() == min(max(1, round(share * fixes)), max(fixes - 3, 0))
        return
    for number in set(block[hidden]):
        at = np.flatnonzero(block == number)
        assert (np.diff(at) == 1).all()
        assert hours[at[-1]] - hours[at[0]] < block_hours <= hours[at[-1] + 1] - hours[at[0]]
        assert (block[[at[0] - 1, at[-1] + 1]] < 0).all()


def test_hiding_is_repeatable_and_reaches_the_share():
    hours = np.arange(200.0)
    one, same, other = (hidden_blocks(hours, 0.2, 6.0, np.random.default_rng(s)) for s in (1, 1, 2))
    np.testing.assert_array_equal(one, same)
    assert (one != other).any()
    assert 40 <= np.sum(one >= 0) <= 45  # the last block of six may go over


def test_the_sd_of_a_share_of_single_fixes_is_the_binomial_one_but_for_one_degree_of_freedom():
    inside = np.arange(40) % 4 == 0
    assert share_sd(inside, np.arange(40)) == pytest.approx(np.sqrt(0.25 * 0.75 / 39.0))
    # blocks that are all in or all out: as few independent numbers as blocks
    assert share_sd(np.repeat([True, False], 20), np.repeat([0, 1], 20)) == pytest.approx(0.5)
    assert np.isnan(share_sd(np.array([True, True]), np.array([3, 3])))


# Foretelling --------------------------------------------------------------------------------------


def coverage(kind, seeds, *, fixes, sd_km, points=0, nu=None):
    """p-values of hidden fixes of made tracks, and of the positions that they report."""
    reported, true = [], []
    for seed in seeds:
        rng = np.random.default_rng(seed)
        hours = times(rng, fixes)
        path = {"diffusive": walk, "persistent": cruise}[kind](rng, hours)
        data = seen(rng, hours, path, sd_km)
        if nu is not None:
            wider = np.sqrt(rng.gamma(0.5 * nu, 2.0 / nu, fixes))[:, None]
            far = path + (data.at_km - path) / wider
            data = TrackData("t", hours, far, data.covariance_km2)
        block = hidden_blocks(hours, 0.2, None, rng)
        kept, hidden = part(data, block < 0), part(data, block >= 0)
        settings = FitSettings(step_hours=1.0, points=points)
        # the search tries parameters that have no likelihood
        with np.errstate(invalid="ignore"):
            fit = fit_track(kept, model_of(kind, nu=nu), settings, hidden.hours)
        at = nearest_state(fit.states.problem.hours, hidden.hours)
        reported.append(p_values(fit.states, at, hidden))
        exact = TrackData("t", hidden.hours, hidden.at_km, 1e-12 * hidden.covariance_km2)
        true.append(p_values(fit.states, at, exact))
    return np.concatenate(reported), np.concatenate(true)


def held(p, probability):
    return np.mean(p >= 1.0 - probability)


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
def test_regions_hold_hidden_fixes_as_often_as_they_say_their_own_errors_counted(kind):
    p, without = coverage(kind, range(30), fixes=100, sd_km=1.5)
    # 600 hidden fixes: sds of 0.009 and 0.02 where independent
    assert held(p, 0.95) == pytest.approx(0.95, abs=0.03)
    assert held(p, 0.50) == pytest.approx(0.50, abs=0.06)
    # what the fix's own error is for: without it regions would look far too narrow
    assert held(without, 0.95) < 0.85


@pytest.mark.slow
def test_heavy_tails_of_hidden_fixes_are_counted():
    p, _ = coverage("diffusive", range(20), fixes=100, sd_km=1.0, nu=3.0)
    assert held(p, 0.95) == pytest.approx(0.95, abs=0.035)
    assert held(p, 0.50) == pytest.approx(0.50, abs=0.08)


def test_weighted_points_make_little_difference_where_parameters_are_known_well():
    plain, _ = coverage("diffusive", [1], fixes=150, sd_km=0.5)
    averaged, _ = coverage("diffusive", [1], fixes=150, sd_km=0.5, points=32)
    np.testing.assert_allclose(averaged, plain, atol=0.03)


@pytest.fixture(scope="module")
def trial(tmp_path_factory):
    tracks = two_tracks() | {"short": part(made("diffusive", 3), slice(0, 3))}
    prepared = study_of(tmp_path_factory.mktemp("trial"), tracks)
    return prepared, trackfit.hold_out(prepared, share=0.2)


def test_hold_out_reports_every_tag_and_all_together(trial):
    _, found = trial
    assert [row.tag for row in found.tags] == ["cruiser", "short", "walker"]
    cruiser, short, walker = found.tags
    assert (cruiser.hidden, cruiser.kept) == (30, FIXES - 30)
    assert found.pooled.tag == ALL_TAGS
    assert found.pooled.hidden == len(found.fixes) == 60
    assert found.pooled.inside95 == pytest.approx((cruiser.inside95 + walker.inside95) / 2.0)
    assert (short.hidden, short.status) == (0, None)
    assert np.isnan(short.inside95)
    assert short.sentence.startswith("Nothing hidden: too few fixes (3)")
    assert f"Of {cruiser.hidden} hidden fixes, 50 % regions hold" in cruiser.sentence


def test_hidden_fixes_are_rows_of_the_data_and_their_summary_follows(trial):
    prepared, found = trial
    one = found.fixes[found.fixes["tag"] == "cruiser"]
    table = prepared.fixes.of("cruiser").set_index("time")
    same = table.loc[one["time"]]
    # 1e-9: there and back through the plane
    np.testing.assert_allclose(same["lon"].to_numpy(), one["lon"].to_numpy(), atol=1e-9)
    assert (one["hours_to_fix"] > 0.0).all()
    cruiser = found.tags[0]
    assert cruiser.inside50 == np.mean(one["p_value"] >= 0.5)
    assert cruiser.error_median_km == pytest.approx(one["error_km"].median())
    assert cruiser.linear_95_km == pytest.approx(one["linear_error_km"].quantile(0.95))


def test_other_tags_and_other_runs_change_no_tag_s_outcome(trial, tmp_path):
    _, found = trial
    alone = study_of(tmp_path, {"walker": two_tracks()["walker"]})
    again = trackfit.hold_out(alone, share=0.2)
    one = found.fixes[found.fixes["tag"] == "walker"].reset_index(drop=True)
    pd.testing.assert_series_equal(again.fixes["time"], one["time"])
    # 1e-3: the plane is centred on other fixes
    np.testing.assert_allclose(again.fixes["error_km"], one["error_km"], atol=1e-3)


def test_with_a_coast_hidden_fixes_are_set_against_positions_at_sea(tmp_path):
    rng = np.random.default_rng(8)
    hours = np.arange(60.0)
    shoreline = np.column_stack([-np.abs(walk(rng, hours, 1.0)[:, 0]) - 0.1, 2.0 * hours])
    data = seen(rng, hours, shoreline, 0.5, tag="coaster")
    study_of(tmp_path, {"coaster": data})
    plane = trackfit.Plane.centred_on(np.array([-4.0]), np.array([60.0]))
    corners = np.array([[0.0, -50.0], [60.0, -50.0], [60.0, 200.0], [0.0, 200.0], [0.0, -50.0]])
    ring = np.column_stack(plane.to_lonlat(corners)).tolist()
    land = {"type": "Polygon", "coordinates": [ring]}
    (tmp_path / "land.geojson").write_text(
        json.dumps({"type": "FeatureCollection", "features": [
            {"type": "Feature", "properties": {}, "geometry": land}]})
    )  # fmt: skip
    path = tmp_path / "study.toml"
    path.write_text(path.read_text() + '[coast]\nfile = "land.geojson"\n')
    prepared = trackfit.prepare(trackfit.read_study(path))
    found = trackfit.hold_out(prepared, share=0.4, block_hours=4.0).fixes
    filled = plane.to_plane(found["filled_lon"].to_numpy(), found["filled_lat"].to_numpy())
    assert (filled[:, 0] < 0.0).all()
    free = prepared.study.paths.model_copy(update={"keep_at_sea": False})
    loose = replace(prepared, study=prepared.study.model_copy(update={"paths": free}))
    unkept = trackfit.hold_out(loose, share=0.4, block_hours=4.0).fixes
    pd.testing.assert_series_equal(found["time"], unkept["time"])
    near = unkept["filled_lon"].idxmax()
    assert found["filled_lon"][near] < unkept["filled_lon"][near] - 1e-4
    assert held(found["p_value"], 0.95) > 0.85


# In the study file and in the results -------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("[hold_out]\nshare = 0.0\n", "hold_out.share: must be greater than 0"),
        ("[hold_out]\nshare = 0.6\n", "hold_out.share: must be at most 0.5"),
        ("[hold_out]\nblock_hours = -1.0\n", "hold_out.block_hours: must be greater than 0"),
        ("[hold_out]\nblocks = 3.0\n", "hold_out.blocks: unknown key"),
        ('[compare]\nmotions = "both"\n', "compare.motions: must be true or false"),
        ("[compare]\nterm = true\n", 'compare.term: unknown key; did you mean "terms"?'),
    ],
)
def test_a_wrong_trial_is_refused_with_its_line(tmp_path, text, told):
    with pytest.raises(StudyError, match=r"study\.toml:14: ") as fault:
        study_of(tmp_path, {"t": made("diffusive", 1, fixes=5)}, text)
    assert told in str(fault.value)


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    folder = tmp_path_factory.mktemp("written")
    tracks = two_tracks() | {"short": part(made("diffusive", 3), slice(0, 2))}
    prepared = study_of(folder, tracks, "[compare]\n[hold_out]\nblock_hours = 5.0\n")
    fits = trackfit.fit_tags(prepared)
    judged = trackfit.judge_fits(prepared, fits)
    out = trackfit.write_results(
        folder / "results", prepared, fits, trackfit.fill_tracks(prepared, fits), judged=judged
    )
    return out, judged


def test_every_verdict_and_number_stands_in_a_table(written):
    folder, judged = written
    verdicts = read_table(folder / "verdicts.csv")
    assert list(verdicts["sentence"]) == [v.sentence for v in judged.verdicts]
    assert list(verdicts["concern"]) == [v.finding.concern for v in judged.verdicts]
    measures = read_table(folder / "fit/measures.csv").set_index(["tag", "measure"])
    for criticism in judged.criticisms:
        aic = measures.loc[(criticism.tag, "aic"), "value"]
        assert aic == pytest.approx(criticism.scores.aic, nan_ok=True)
    cruiser = judged.criticisms[0]
    assert measures.loc[("cruiser", "kurtosis"), "expected"] == pytest.approx(
        cruiser.residuals.kurtosis.expected
    )
    residuals = read_table(folder / "fit/residuals.csv")
    np.testing.assert_allclose(
        residuals.loc[residuals["tag"] == "cruiser", "left_out_x"],
        cruiser.residuals.left_out.residual[:, 0],
        atol=1e-8,
    )
    lags = read_table(folder / "fit/autocorrelation.csv")
    assert set(lags["residuals"]) == {"left out", "ahead"}
    for name in ("quantiles", "correlations", "effects", "error_sizes"):
        assert set(read_table(folder / f"fit/{name}.csv")["tag"]) <= {"cruiser", "walker"}


def test_comparison_and_hidden_fixes_stand_in_tables_and_in_the_record(written):
    folder, judged = written
    comparison = read_table(folder / "comparison.csv")
    assert len(comparison) == 6
    assert list(comparison["outcome"]) == [row.outcome.value for row in judged.comparison]
    held_out = read_table(folder / "hold_out.csv").set_index("tag")
    assert list(held_out.index) == ["cruiser", "short", "walker", ALL_TAGS]
    assert held_out.loc[ALL_TAGS, "inside95"] == pytest.approx(judged.trial.pooled.inside95)
    hidden = read_table(folder / "hold_out_fixes.csv")
    assert len(hidden) == judged.trial.pooled.hidden
    record = json.loads((folder / "results.json").read_text())["findings"]
    assert record["hold_out"]["all_tags"]["sentence"] == judged.trial.pooled.sentence
    assert record["tags"]["short"]["verdicts"][0]["finding"] == "not fitted"
    assert len(record["comparison"]) == 6
    assert (folder / "figures/residuals_cruiser.png").stat().st_size > 20_000
    assert not (folder / "figures/residuals_short.png").exists()
    assert read_results(folder).record["findings"] == record


def test_without_being_asked_nothing_is_compared_or_hidden(tmp_path):
    prepared = study_of(tmp_path, {"t": made("diffusive", 1, fixes=20)})
    folder = trackfit.write_results(tmp_path / "results", prepared, trackfit.fit_tags(prepared), [])
    assert (folder / "verdicts.csv").exists()
    assert not list(folder.glob("comparison*"))
    assert not list(folder.glob("hold_out*"))
    assert "comparison" not in json.loads((folder / "results.json").read_text())["findings"]


def test_a_fit_from_python_and_one_from_the_study_are_judged_alike(tmp_path):
    data = made("diffusive", 5, fixes=60)
    prepared = study_of(tmp_path, {"t": data})
    (criticism,) = trackfit.criticise_fits(prepared, trackfit.fit_tags(prepared))
    direct = fitted(data, model_of("diffusive"))
    # 0.05: another plane, times to the second, another prior
    assert criticism.scores.log_marginal == pytest.approx(direct.log_marginal, abs=0.05)
