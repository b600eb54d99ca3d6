"""Tags that share a response: the joint posterior of all of them, tag by tag."""

import dataclasses
from functools import cached_property

import numpy as np
import pandas as pd
import pytest
import rasterio
import scipy.optimize
from engine_standins import distance_term, field_layer, isotropic, layer_term
from rasterio.transform import Affine

import trackfit
from trackfit.analysis import fit_tracks
from trackfit.criticism.criticism import effects_of
from trackfit.faults import StudyError
from trackfit.inference.fit import FitStatus, fit_track
from trackfit.inference.grid import build_problem, interpolated_start, time_grid
from trackfit.inference.marginal import Warm, approximate
from trackfit.inference.parameters import JointNormal, Parameter, ParameterSet
from trackfit.inference.shared import Task, _inverse, _Site, fit_shared
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.motion import Diffusive, VelocityField
from trackfit.results import read_results

SLOPE = np.array([0.3, -0.2])
"""Gradient of the layer's standardised values, per km."""
AMPLITUDE, PULL = 0.8, -0.5
HILL = field_layer(lambda x, y, t: SLOPE[0] * x + SLOPE[1] * y, nodes=60, spacing_km=4.0)
FIELD = VelocityField((layer_term(HILL), distance_term(0.0, 0.0)), None)
SHARED = [1, 2]
"""Places of the two amplitudes; diffusion comes before, the error scale after them."""


def drift(at_km, amplitude=AMPLITUDE, pull=PULL):
    """Up the hill, and to the origin at `pull` km/h; the tip of the cone is rounded at 1 km."""
    away = at_km / np.sqrt(np.sum(at_km**2) + 1.0)
    return amplitude * SLOPE + pull * away


def track(tag, fixes, seed, *, diffusion=1.5, error_km=0.3, amplitude=AMPLITUDE, pull=PULL):
    """Diffusive motion in steps of 0.05 h, a fix an hour."""
    rng = np.random.default_rng(seed)
    at, path = rng.normal(size=2) * 3.0, []
    for step in range(20 * fixes):
        if step % 20 == 0:
            path.append(at)
        noise = diffusion * np.sqrt(0.05) * rng.normal(size=2)
        at = at + 0.05 * drift(at, amplitude, pull) + noise
    seen = np.array(path) + error_km * rng.normal(size=(fixes, 2))
    return TrackData(tag, np.arange(float(fixes)), seen, isotropic(np.full(fixes, error_km)))


def model_of(*, prior_sd=5.0, shared=True, start=0.0, reach=2.0):
    def amplitude(name):
        return Parameter(name, "1", False, start, 0.1, prior_sd, reach, shared=shared)

    def positive(name, sd):
        return Parameter(name, "1", True, 0.0, 0.0, sd, 1.0)

    parameters = (
        positive("diffusion", 2.0),
        amplitude("hill"),
        amplitude("home"),
        positive("error_scale", 1.0),
    )
    return Model(Diffusive(), FIELD, ((HILL, None), None), ParameterSet(parameters))


PLAIN = FitSettings(step_hours=0.5, coarse_factor=2)


def tasks_of(tracks, model=None, settings=PLAIN):
    return [Task(data, model or model_of(), settings, np.zeros(0)) for data in tracks]


def shared_of(fit):
    """Mode and covariance of the shared parameters."""
    return fit.states.theta[SHARED], fit.states.theta_covariance[np.ix_(SHARED, SHARED)]


def rows(fit):
    return fit.parameters.set_index("parameter")


class Joint:
    """The negative log posterior of all tags, (own of the first, own of the second ..., shared)."""

    def __init__(self, tracks, model):
        self.parameters = model.parameters.all
        self.problems, self.starts = [], []
        for data in tracks:
            hours = time_grid(data.hours, PLAIN.step_hours, np.zeros(0), 1e-3)
            self.problems.append(
                build_problem(
                    motion=model.motion,
                    field=model.field,
                    layers=model.layers,
                    hours=hours,
                    fix_hours=data.hours,
                    fix_km=data.at_km,
                    covariance_km2=data.covariance_km2,
                )
            )
            self.starts.append(Warm(interpolated_start(hours, data.hours, data.at_km, 2)))
        self.own = [i for i in range(len(self.parameters)) if i not in SHARED]

    def split(self, x):
        for i, _ in enumerate(self.problems):
            at = np.arange(2 * i, 2 * i + 2)
            theta = np.empty(4)
            theta[self.own], theta[SHARED] = x[at], x[-2:]
            yield i, at, theta

    def __call__(self, x):
        mean = np.array([p.prior_mean for p in self.parameters])
        precision = np.array([p.prior_sd**-2.0 for p in self.parameters])
        apart = x[-2:] - mean[SHARED]
        value, slope = 0.5 * float(precision[SHARED] @ apart**2), np.zeros_like(x)
        slope[-2:] = precision[SHARED] * apart
        for i, at, theta in self.split(x):
            found = approximate(self.problems[i], theta, self.starts[i], 1e-12)
            own = (theta - mean)[self.own]
            value += found.negative_log_marginal + 0.5 * float(precision[self.own] @ own**2)
            gradient = found.gradient()
            slope[at] += gradient[self.own] + precision[self.own] * own
            slope[-2:] += gradient[SHARED]
        return value, slope

    def hessian(self, x, steps):
        columns = []
        for j, step in enumerate(steps):
            shift = step * np.eye(len(x))[j]
            columns.append((self(x + shift)[1] - self(x - shift)[1]) / (2.0 * step))
        return np.stack(columns)

    @cached_property
    def top(self):
        """Mode and covariance: a quasi-Newton search, then two Newton steps."""
        x = np.zeros(2 * len(self.problems) + 2)
        x = scipy.optimize.minimize(self, x, jac=True, method="BFGS", options={"gtol": 1e-3}).x
        for _ in range(2):
            hessian = self.hessian(x, np.full(len(x), 3e-3))
            x = x - np.linalg.solve(hessian, self(x)[1])
        return x, np.linalg.inv(hessian)


@dataclasses.dataclass
class Three:
    tracks: list
    joint: Joint
    fits: list


@pytest.fixture(scope="module")
def three():
    """Tags of 30, 80 and 150 fixes, of different diffusions."""
    tracks = [
        track("short", 30, 1, diffusion=1.0),
        track("middle", 80, 2, diffusion=2.0, error_km=0.6),
        track("long", 150, 3),
    ]
    return Three(tracks, Joint(tracks, model_of()), fit_shared(tasks_of(tracks)))


# The joint posterior ------------------------------------------------------------------------------


def test_the_mode_is_that_of_all_tags_together(three):
    """Own and shared parameters stand where a direct search over all of them ends."""
    x, covariance = three.joint.top
    assert [fit.status for fit in three.fits] == [FitStatus.CONVERGED] * 3
    sd = np.sqrt(np.diag(covariance))
    mean = rows(three.fits[0])["estimate"][["hill", "home"]]
    # sweeps end where the last move was below 0.02 sd, and contract a hundredfold or more
    assert np.abs((mean - x[-2:]) / sd[-2:]).max() < 2e-4
    for fit, (_, at, theta) in zip(three.fits, three.joint.split(x), strict=True):
        apart = np.abs(fit.states.theta - theta)
        assert (apart[[0, 3]] / sd[at]).max() < 1e-3
        assert (apart[SHARED] / sd[-2:]).max() < 2e-4


def test_the_covariance_is_that_of_all_tags_together(three):
    """Differences of the joint gradient, over other steps: half a percent."""
    x, covariance = three.joint.top
    for fit, (_, at, _) in zip(three.fits, three.joint.split(x), strict=True):
        order = [at[0], -2, -1, at[1]]
        expected = covariance[np.ix_(order, order)]
        sd = np.sqrt(np.diag(expected))
        found = fit.states.theta_covariance
        assert np.allclose(found, expected, rtol=0, atol=0.005 * np.outer(sd, sd))


def test_all_tags_tell_the_same(three):
    first = rows(three.fits[0]).loc[["hill", "home"]]
    assert (first["role"] == "shared").all()
    for fit in three.fits:
        table = rows(fit)
        pd.testing.assert_frame_equal(table.loc[["hill", "home"]], first)
        assert table.loc[["diffusion", "error_scale"], "role"].eq("estimated").all()
    assert rows(three.fits[0]).loc["diffusion", "estimate"] < 1.3
    assert rows(three.fits[1]).loc["diffusion", "estimate"] > 1.6


def test_the_order_of_the_tags_does_not_matter(three):
    other = fit_shared(tasks_of(three.tracks[::-1]))
    (mean, covariance), (again, again_covariance) = (shared_of(f[0]) for f in (three.fits, other))
    sd = np.sqrt(np.diag(covariance))
    assert np.abs((mean - again) / sd).max() < 5e-3  # each ends where its search does
    assert np.sqrt(np.diag(again_covariance)) == pytest.approx(sd, rel=0.02)


def test_one_tag_is_a_plain_fit(three):
    data = three.tracks[0]
    (fit,) = fit_shared(tasks_of([data]))
    plain = fit_track(data, model_of(shared=False), PLAIN, np.zeros(0))
    sd = np.sqrt(np.diag(plain.states.theta_covariance))
    assert fit.status is plain.status is FitStatus.CONVERGED
    assert np.abs((fit.states.theta - plain.states.theta) / sd).max() < 0.01  # two searches' ends
    assert np.allclose(
        fit.states.theta_covariance,
        plain.states.theta_covariance,
        rtol=0,
        atol=0.01 * np.outer(sd, sd),
    )


def test_nothing_shared_is_nothing_new(three):
    tasks = tasks_of(three.tracks[:2], model_of(shared=False))
    found = fit_shared(tasks)
    for fit, task in zip(found, tasks, strict=True):
        plain = fit_track(*task)
        pd.testing.assert_frame_equal(fit.parameters, plain.parameters)
    assert fit_shared([]) == []


def test_without_priors(three):
    """The sites alone: still the top of the joint likelihood."""
    flat = model_of(prior_sd=np.inf)
    fits = fit_shared(tasks_of(three.tracks, flat))
    x, covariance = Joint(three.tracks, flat).top
    mean, found = shared_of(fits[0])
    assert [fit.status for fit in fits] == [FitStatus.CONVERGED] * 3
    sd = np.sqrt(np.diag(covariance))[-2:]
    assert np.abs((mean - x[-2:]) / sd).max() < 5e-3
    assert np.sqrt(np.diag(found)) == pytest.approx(sd, rel=0.02)


def test_weighted_points_leave_the_shared_rows_alone(three):
    settings = dataclasses.replace(PLAIN, points=32)
    fits = fit_shared(tasks_of(three.tracks[:2], settings=settings))
    first, second = (rows(fit) for fit in fits)
    pd.testing.assert_frame_equal(first.loc[["hill", "home"]], second.loc[["hill", "home"]])
    assert all(fit.states.points is not None for fit in fits)


# Tags that fail -----------------------------------------------------------------------------------


def test_a_tag_of_too_few_fixes_takes_no_part(three):
    lone = TrackData("lone", np.arange(2.0), np.zeros((2, 2)), isotropic(np.full(2, 0.3)))
    fits = fit_shared(tasks_of([three.tracks[0], lone, *three.tracks[1:]]))
    assert [fit.status for fit in fits] == [
        FitStatus.CONVERGED, FitStatus.TOO_FEW_FIXES, FitStatus.CONVERGED, FitStatus.CONVERGED,
    ]  # fmt: skip
    assert fits[1].states is None
    assert rows(fits[1]).loc["hill", ["estimate", "sd"]].isna().all()
    pd.testing.assert_frame_equal(fits[0].parameters, three.fits[0].parameters)


def test_a_tag_that_does_not_know_its_own_takes_no_part(three):
    """Three fixes, no prior for diffusion and errors: the track leaves them open."""
    open_model = model_of()
    parameters = [
        dataclasses.replace(p, prior_sd=np.inf) if p.positive else p
        for p in open_model.parameters.all
    ]
    open_model = dataclasses.replace(open_model, parameters=ParameterSet(tuple(parameters)))
    few = track("few", 3, 9)
    fits = fit_shared([*tasks_of(three.tracks[1:]), *tasks_of([few], open_model)])
    without = fit_shared(tasks_of(three.tracks[1:]))
    assert not fits[2].status.ok
    assert fits[0].status is fits[1].status is FitStatus.CONVERGED
    pd.testing.assert_frame_equal(fits[0].parameters, without[0].parameters)


def test_all_tags_fail():
    lone = TrackData("lone", np.arange(2.0), np.zeros((2, 2)), isotropic(np.full(2, 0.3)))
    (fit,) = fit_shared(tasks_of([lone]))
    assert fit.status is FitStatus.TOO_FEW_FIXES


def test_sweeps_that_end_too_early_are_told(three):
    fits = fit_shared(tasks_of(three.tracks[:2]), max_sweeps=1)
    assert [fit.status for fit in fits] == [FitStatus.NOT_SETTLED] * 2
    assert not fits[0].status.ok


def test_tracks_that_share_different_things_are_refused(three):
    tasks = tasks_of(three.tracks[:1]) + tasks_of(three.tracks[1:2], model_of(shared=False))
    with pytest.raises(ValueError, match="do not share the same parameters"):
        fit_shared(tasks)


# Pieces -------------------------------------------------------------------------------------------


def test_priors_revised_between_sweeps(three):
    """A prior made tight after the first sweep is the prior of the result."""
    tight = model_of(prior_sd=0.05)
    told = []

    def revise(parameters, mean, covariance):
        told.append((mean, covariance))
        changed = (dataclasses.replace(p, prior_sd=0.05) if p.shared else p for p in parameters.all)
        return dataclasses.replace(parameters, all=tuple(changed))

    fits = fit_shared(tasks_of(three.tracks[:2]), revise=revise)
    expected = fit_shared(tasks_of(three.tracks[:2], tight))
    assert fits[0].status is FitStatus.CONVERGED
    (mean, covariance), (wanted, wanted_covariance) = (shared_of(f[0]) for f in (fits, expected))
    sd = np.sqrt(np.diag(wanted_covariance))
    assert np.abs((mean - wanted) / sd).max() < 0.01  # two roads to the same place
    assert np.sqrt(np.diag(covariance)) == pytest.approx(sd, rel=0.02)
    assert told[0][0].shape == (2,)
    assert told[0][1].shape == (2, 2)
    assert {p.prior_sd for p in fits[0].model.parameters.all if p.shared} == {0.05}


def test_a_joint_prior_is_used_in_place_of_the_independent_ones():
    parameters = model_of().parameters
    precision, mean = np.array([[2.0, 0.5], [0.5, 1.0]]), np.array([0.3, -0.2])
    joint = JointNormal(np.array(SHARED), precision, precision @ mean)
    both = dataclasses.replace(parameters, joint=joint)
    free, step = np.array([0.4, 1.0, 2.0, -0.3]), 1e-5
    apart = free[SHARED] - mean

    def expected(x):
        off = x[SHARED] - mean
        return 0.5 * off @ precision @ off + 0.5 * (x[0] / 2.0) ** 2 + 0.5 * x[3] ** 2

    constant = 0.5 * mean @ precision @ mean
    assert both.penalty(free)[0] == pytest.approx(expected(free) - constant, rel=1e-12)
    assert both.penalty(free)[1][SHARED] == pytest.approx(precision @ apart, rel=1e-12)
    for j, shift in enumerate(step * np.eye(4)):
        slope = (expected(free + shift) - expected(free - shift)) / (2.0 * step)
        assert both.penalty(free)[1][j] == pytest.approx(slope, rel=1e-8, abs=1e-9)
    assert both.with_spells(2).joint is joint


def test_parameters_fixed_before_the_joint_ones_do_not_shift_them():
    first, *others = model_of().parameters.all
    fixed = ParameterSet((dataclasses.replace(first, fixed=True), *others))
    joint = JointNormal(np.array(SHARED), np.eye(2), np.zeros(2))
    slope = dataclasses.replace(fixed, joint=joint).penalty(np.array([1.0, 2.0, 3.0]))[1]
    assert slope.tolist() == [1.0, 2.0, 3.0]


def test_a_site_that_is_not_concave_keeps_its_slope():
    """Its curvature upwards counts in the covariance, not in the cavities of others."""
    turn = np.array([[0.8, -0.6], [0.6, 0.8]])
    curvature = turn @ np.diag([3.0, -0.5]) @ turn.T
    at, slope, reach = np.array([1.0, -2.0]), np.array([0.4, 0.1]), np.ones(2)
    site = _Site.of(curvature, slope, at, reach)
    assert np.allclose(site.precision, turn @ np.diag([3.0, 0.0]) @ turn.T, atol=1e-14)
    assert np.allclose(site.precision @ at - site.shift, slope, atol=1e-14)
    assert site.curvature is curvature


def test_directions_of_which_nothing_is_known_are_left_where_they_are():
    """A flat prior and a track silent about the second parameter: its sd is 10,000 reaches."""
    precision, reach = np.diag([4.0, 0.0]), np.array([1.0, 3.0])
    inverse = _inverse(precision, reach)
    assert np.allclose(np.sqrt(np.diag(inverse)), [0.5, 3e4], rtol=1e-12)
    assert (inverse @ np.array([2.0, 0.0])).tolist() == [0.5, 0.0]


# A study ------------------------------------------------------------------------------------------

STUDY = """
[study]
name = "made"
[fixes]
files = ["fixes.csv"]
[layers.hill]
file = "hill.tif"
unit = "m"
[[preference]]
layer = "hill"
shape = "linear"
shared = true
[[preference]]
name = "home"
point = { lon = -4.0, lat = 60.0 }
shape = "distance"
[motion]
step_hours = 1.0
[errors]
default_sd_m = 300.0
[fit]
points = 0
[paths]
draws = 0
[output]
formats = ["csv"]
"""
PLACE = (-4.0, 60.0)


def study_of(folder, tracks, text=STUDY):
    """A study of tracks laid round a place, with the hill as a GeoTIFF in degrees."""
    plane = trackfit.Plane.centred_on(*np.transpose([PLACE]))
    parts = []
    for data in tracks:
        lon, lat = plane.to_lonlat(data.at_km)
        time = pd.Timestamp("2024-05-01", tz="UTC") + pd.to_timedelta(data.hours, unit="h")
        parts.append(pd.DataFrame({"tag": data.tag, "time": time, "lon": lon, "lat": lat}))
    folder.mkdir(parents=True, exist_ok=True)
    pd.concat(parts).to_csv(folder / "fixes.csv", index=False)
    lon, lat = PLACE[0] + np.linspace(-3.0, 3.0, 121), PLACE[1] + np.linspace(1.5, -1.5, 121)
    at_km = plane.to_plane(*(axis.ravel() for axis in np.meshgrid(lon, lat)))
    with rasterio.open(
        folder / "hill.tif", "w", driver="GTiff", height=121, width=121, count=1, dtype="float64",
        crs="EPSG:4326", transform=Affine(0.05, 0.0, lon[0] - 0.025, 0.0, -0.025, lat[0] + 0.0125),
    ) as file:  # fmt: skip
        file.write((at_km @ SLOPE).reshape(121, 121), 1)
    (folder / "study.toml").write_text(text)
    return trackfit.read_study(folder / "study.toml")


@dataclasses.dataclass
class Whole:
    prepared: object
    fits: list
    told: list
    out: object


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("shared")
    tracks = [track("a", 60, 31), track("b", 90, 32), track("c", 40, 33), track("few", 2, 34)]
    prepared = trackfit.prepare(study_of(folder, tracks))
    told = []
    fits = trackfit.fit_tags(prepared, progress=lambda *what: told.append(what))
    out = trackfit.write_results(
        folder / "out", prepared, fits, trackfit.fill_tracks(prepared, fits)
    )
    return Whole(prepared, fits, told, out)


def test_a_study_end_to_end(whole):
    assert [(fit.tag, fit.status.name) for fit in whole.fits] == [
        ("a", "CONVERGED"), ("b", "CONVERGED"), ("c", "CONVERGED"), ("few", "TOO_FEW_FIXES"),
    ]  # fmt: skip
    table = read_results(whole.out).parameters
    shared = table[table["role"] == "shared"]
    assert set(shared["parameter"]) == {"preference.hill.linear"}
    assert len(shared) == 4
    known = shared[shared["tag"] != "few"]
    assert known.groupby("parameter")[["estimate", "sd", "lower95"]].nunique().eq(1).all(axis=None)
    assert shared.loc[shared["tag"] == "few", "estimate"].isna().all()
    assert (
        table.loc[table["parameter"] == "preference.home.distance", "role"] == "estimated"
    ).all()


def test_slopes_of_all_tags_add_up_to_nothing(whole):
    """At the estimates, with the prior: the mode of all tags, in a study's own units."""
    fits = [fit for fit in whole.fits if fit.states is not None]
    (place,) = fits[0].model.parameters.shared_at
    parameter = fits[0].model.parameters.all[place]
    slopes = [fit.states.approximation.gradient()[place] for fit in fits]
    value = fits[0].states.approximation.theta[place]
    prior = (value - parameter.prior_mean) / parameter.prior_sd**2
    sd = rows(fits[0]).loc["preference.hill.linear", "sd"]
    assert abs(sum(slopes) + prior) * sd < 2e-3  # a step to the top of two thousandths of an sd
    assert max(np.abs(slopes)) * sd > 0.1  # or the tags would agree without sharing


def test_one_response_for_all_tags(whole):
    table = pd.read_csv(whole.out / "responses.csv")
    assert set(table.loc[table["term"] == "hill", "tag"]) == {"all tags"}
    assert set(table.loc[table["term"] == "home", "tag"]) == {"a", "b", "c"}
    found = trackfit.preference_responses(whole.prepared, whole.fits)
    (hill,) = (r for r in found if r.term == "hill")
    values = hill.at
    estimate = rows(whole.fits[0]).loc["preference.hill.linear"]
    standard = whole.prepared.model.standards["hill"]
    z = (values - standard.centre) / standard.scale
    assert hill.h == pytest.approx(estimate["estimate"] * z, rel=1e-6, abs=1e-9)
    half = 1.959963984540054 * estimate["sd"] * np.abs(z)
    assert hill.upper95 - hill.h == pytest.approx(half, rel=1e-6, abs=1e-9)
    there, made = whole.prepared.plane, trackfit.Plane.centred_on(*np.transpose([PLACE]))
    fitted = [fit.states.mean[:, :2] for fit in whole.fits if fit.states is not None]
    met = [made.to_plane(*there.to_lonlat(path)) @ SLOPE for path in fitted]
    low, high = min(values.min() for values in met), max(values.max() for values in met)
    # the layer is resampled to a grid of the plane: a per cent of its range
    assert (values[0], values[-1]) == pytest.approx((low, high), abs=0.01 * (high - low))
    assert list((whole.out / "figures").glob("response*"))


def test_progress_is_told_by_tag(whole):
    for tag in "abc":
        told = [(share, words) for name, share, words in whole.told if name == tag]
        done = [share for share, _ in told]
        sweep = [words for _, words in told].index("sweep 2 over all tags")
        assert max(done[:sweep]) <= 0.5 < done[sweep] <= 0.6
        assert told[-1] == (1.0, "done")


def test_verdicts_tell_whose_they_are(whole):
    judged = trackfit.judge_fits(whole.prepared, whole.fits)
    (sentence,) = (v.sentence for v in judged.of("a") if v.about == "preference.hill")
    assert "(all tags together: p " in sentence
    (own,) = (v.sentence for v in judged.of("a") if v.about == "preference.home")
    assert "all tags" not in own
    names = whole.prepared.model.names
    hill, home = effects_of(whole.fits[0], names)
    assert (hill.shared, home.shared) == (True, False)
    assert hill.p_value == effects_of(whole.fits[1], names)[0].p_value


def test_comparison_and_hidden_fixes_share_as_well(whole):
    fits = whole.fits
    compared = trackfit.compare_models(whole.prepared, fits, motions=False, terms=True)
    less = {row.tag: row for row in compared if row.model == "without hill"}
    assert set(less) == {"a", "b", "c", "few"}
    assert sum(less[tag].scores.log_marginal for tag in "abc") < sum(
        fit.log_marginal for fit in fits[:3]
    )
    (alone,) = fit_tracks(whole.prepared, [whole.prepared.tracks["a"]], [np.zeros(0)])
    other = {row.tag: row for row in compared if row.model == "without home"}
    assert other["a"].status is FitStatus.CONVERGED
    trial = trackfit.hold_out(whole.prepared, share=0.2)
    assert {row.tag: row.hidden for row in trial.tags} == {"a": 12, "b": 18, "c": 8, "few": 0}
    assert alone.parameters["sd"][1] > 1.2 * fits[0].parameters["sd"][1]


def test_a_smooth_response_of_all_tags(tmp_path):
    """Its spread stands where the joint posterior has its fixed point, tau^2 = b'b / edf."""
    text = STUDY.replace('"linear"', '"smooth"')
    tracks = [track("a", 60, 31), track("b", 90, 32), track("c", 40, 33)]
    prepared = trackfit.prepare(study_of(tmp_path, tracks, text))
    fits = trackfit.fit_tags(prepared)
    assert {fit.status for fit in fits} == {FitStatus.CONVERGED}
    told = [rows(fit).loc["preference.hill.bends", "estimate"] for fit in fits]
    assert told == pytest.approx([told[0]] * 3, rel=1e-9)
    states, parameters = fits[0].states, fits[0].model.parameters
    at = [i for i, p in enumerate(parameters.free) if p.smooth]
    tau = {parameters.free[i].prior_sd for i in at}
    assert tau == {p.prior_sd for fit in fits for p in fit.model.parameters.all if p.smooth}
    (tau,) = tau
    edf = len(at) - np.trace(states.theta_covariance[np.ix_(at, at)]) / tau**2
    wanted = np.sqrt(np.sum(states.theta[at] ** 2) / edf)
    # log tau has settled where it moves by less than 0.05
    assert abs(np.log(wanted / tau)) < 0.05
    (hill,) = (r for r in trackfit.preference_responses(prepared, fits) if r.term == "hill")
    assert hill.tag == "all tags"
    steep = np.ptp(hill.h) / np.ptp(hill.at)
    assert steep == pytest.approx(AMPLITUDE, abs=0.5)


def test_a_smooth_response_of_one_tag_is_its_own(tmp_path):
    """Two roads to the same spread: alone inside the fit, and between the sweeps."""
    text = STUDY.replace('"linear"', '"smooth"')
    fits = []
    for number, words in enumerate((text, text.replace("shared = true\n", ""))):
        prepared = trackfit.prepare(study_of(tmp_path / str(number), [track("b", 90, 32)], words))
        fits += trackfit.fit_tags(prepared)
    shared, plain = (rows(fit) for fit in fits)
    assert [fit.status for fit in fits] == [FitStatus.CONVERGED] * 2
    for name in ("preference.hill.linear", "preference.home.distance", "diffusion"):
        apart = shared.loc[name, "estimate"] - plain.loc[name, "estimate"]
        # spreads settle to 5 %
        assert abs(apart) < 0.1 * plain.loc[name, "sd"]
    bends = (table.loc["preference.hill.bends", "estimate"] for table in (shared, plain))
    assert next(bends) == pytest.approx(next(bends), abs=0.1)


def test_sharing_with_nobody_is_noted(tmp_path):
    text = STUDY.replace('name = "made"', 'name = "made"\ntags = ["a"]')
    prepared = trackfit.prepare(study_of(tmp_path, [track("a", 30, 1), track("b", 30, 2)], text))
    assert "preference.hill: shared by all tags, and the study has but one" in prepared.notes
    both = trackfit.prepare(study_of(tmp_path, [track("a", 30, 1), track("b", 30, 2)]))
    assert not any("shared" in note for note in both.notes)


def test_a_drift_that_is_given_cannot_be_shared(tmp_path):
    text = STUDY + '[layers.water]\nfile = "hill.tif"\neast = "1"\nnorth = "2"\n'
    text += '[current]\nlayer = "water"\ndrift = 1.0\nshared = true\n'
    with pytest.raises(
        StudyError, match=r"current\.shared: a drift that is given is the same for all tags already"
    ):
        study_of(tmp_path, [track("a", 30, 1)], text)
    (tmp_path / "study.toml").write_text(text.replace("drift = 1.0", 'drift = "estimated"'))
    assert trackfit.read_study(tmp_path / "study.toml").current.shared


# Recovery -----------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def six():
    return [track(f"tag_{i}", 60, 20 + i) for i in range(6)]


def test_six_tags_know_more_than_one(six):
    """Six alike: the sd is near that of one over the root of six, and the truth lies inside."""
    fits = fit_shared(tasks_of(six))
    assert {fit.status for fit in fits} == {FitStatus.CONVERGED}
    alone = [fit_track(data, model_of(shared=False), PLAIN, np.zeros(0)) for data in six]
    table = rows(fits[0])
    for name, truth in (("hill", AMPLITUDE), ("home", PULL)):
        sds = np.array([rows(fit).loc[name, "sd"] for fit in alone])
        assert table.loc[name, "sd"] < 0.6 * sds.min()
        # independent halves of what is known: precisions add up, but for the priors
        together = np.sum(sds**-2.0) ** -0.5
        assert table.loc[name, "sd"] == pytest.approx(together, rel=0.25)
        assert table.loc[name, "lower95"] < truth < table.loc[name, "upper95"]
