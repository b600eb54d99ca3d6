"""A fit judged: residuals beside what is expected, error sizes, scores, effects, and the words."""

from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pytest
from made_tracks import fitted, made, model_of, parameter, part, seen, times, walk
from scipy import stats

from trackfit.criticism.criticism import (
    criticise,
    information_criterion,
    scores_of,
)
from trackfit.criticism.error_sizes import Basis, error_size, factor_of_kind
from trackfit.criticism.residuals import (
    autocorrelation,
    beside,
    kurtosis,
    quantiles_beside,
    share_far,
    white_autocorrelation,
)
from trackfit.criticism.verdicts import Finding, verdicts_of
from trackfit.errors import ErrorRules, error_kinds
from trackfit.inference.fit import FitStatus
from trackfit.inference.grid import PacePrior
from trackfit.inference.marginal import approximate
from trackfit.inference.task import TrackData
from trackfit.motion import DistanceTerm, VelocityField
from trackfit.motion.terms import TermName


def judged(data, model, kinds=None, names=(), seed=1):
    fit = fitted(data, model)
    return criticise(fit, data, kinds or ["GPS"] * len(data.hours), names, seed)


def findings(criticism):
    return {v.about: v.finding for v in verdicts_of(criticism)}


def sentence(criticism, about):
    return next(v.sentence for v in verdicts_of(criticism) if v.about == about)


# Numbers beside their distribution ----------------------------------------------------------------


def test_a_number_beside_draws_of_it():
    drawn = np.arange(1.0, 100.0)
    middle = beside(50.0, drawn)
    assert (middle.value, middle.expected, middle.p_value) == (50.0, 50.0, 1.0)
    far = beside(1000.0, drawn)
    assert far.p_value == pytest.approx(2.0 / 100.0)  # more extreme than all 99 draws
    assert far.high
    assert not beside(-1.0, drawn).high
    assert np.isnan(beside(np.nan, drawn).p_value)


def test_p_values_of_a_true_model_are_uniform():
    rng = np.random.default_rng(1)
    drawn = rng.normal(size=(200, 199))
    p = [beside(value, row).p_value for value, row in zip(rng.normal(size=200), drawn, strict=True)]
    assert stats.kstest(p, "uniform").pvalue > 0.01


def test_share_and_kurtosis_of_a_few_numbers():
    residual = np.array([[0.0, 1.0], [-3.0, 2.0]])
    assert share_far(residual) == 0.25
    # squares 0, 1, 9, 4: mean 14/4; fourth powers 0, 1, 81, 16: mean 98/4
    assert kurtosis(residual) == pytest.approx((98 / 4) / (14 / 4) ** 2)
    assert np.isnan(kurtosis(np.zeros((3, 2))))


def test_autocorrelation_by_hand_and_its_band_by_simulation():
    residual = np.array([[1.0, 0.0], [2.0, 1.0], [-1.0, 1.0]])
    # products one apart: 1*2 + 0*1 + 2*(-1) + 1*1 = 1; squares: 1 + 4 + 1 + 1 + 1 = 8
    assert autocorrelation(residual, 1) == pytest.approx(1.0 / 8.0)
    assert autocorrelation(residual, 2) == pytest.approx(-1.0 / 8.0)
    rng = np.random.default_rng(2)
    found = [white_autocorrelation(rng.normal(size=(80, 2))) for _ in range(400)]
    inside = np.mean([(f.value > f.lower95) & (f.value < f.upper95) for f in found], axis=0)
    # sd of a share of 400 near 0.95 is 0.011; the band is that of large samples
    assert (np.abs(inside - 0.95) < 0.045).all()
    assert np.mean(inside) == pytest.approx(0.95, abs=0.01)


@pytest.mark.parametrize("fixes", [5, 40, 400])
def test_the_quantile_band_of_all_points_holds_all_of_them_with_95_percent(fixes):
    rng = np.random.default_rng(3)
    drawn = rng.normal(size=(999, fixes, 2))
    inside = [quantiles_beside(rng.normal(size=(fixes, 2)), drawn).outside == 0 for _ in range(300)]
    # sd of a share of 300 near 0.95 is 0.0126, and the band itself rests on 999 draws
    assert np.mean(inside) == pytest.approx(0.95, abs=0.045)


def test_quantiles_are_those_of_the_residuals():
    residual = np.random.default_rng(4).normal(size=(30, 2))
    found = quantiles_beside(residual, np.random.default_rng(5).normal(size=(199, 30, 2)))
    np.testing.assert_array_equal(found.residual, np.sort(residual.ravel()))
    np.testing.assert_allclose(stats.norm.cdf(found.normal), (np.arange(60) + 0.5) / 60)
    assert (found.lower95_all <= found.lower95).all()
    assert (found.upper95_all >= found.upper95).all()
    heavy = quantiles_beside(residual * 2.0, np.random.default_rng(5).normal(size=(199, 30, 2)))
    assert heavy.outside > 10


# Scores -------------------------------------------------------------------------------------------


def test_the_corrected_criterion_is_that_of_the_published_example():
    # Holmes, Scheuerell & Ward, Applied time series analysis, section 9.3: log-likelihood
    # -637.7569, 4 parameters, 100 values; printed as AIC 1283.514, AICc 1283.935
    assert information_criterion(-637.7569, 4) == pytest.approx(1283.514, abs=5e-4)
    assert information_criterion(-637.7569, 4, 100) == pytest.approx(1283.935, abs=5e-4)


@pytest.mark.parametrize(("size", "defined"), [(3, False), (4, False), (5, False), (6, True)])
def test_without_more_fixes_than_parameters_there_is_no_corrected_criterion(size, defined):
    assert np.isfinite(information_criterion(-10.0, 4, size)) == defined


def test_scores_count_fixes_and_estimated_parameters():
    data = made("persistent", 1, fixes=40)
    for scale, k in (("fixed", 2), ("estimated", 3)):
        criticism = judged(data, model_of("persistent", scale=scale))
        scores = criticism.scores
        assert (scores.fixes, scores.estimated) == (40, k)
        assert scores.aic == pytest.approx(2 * k - 2 * scores.log_marginal)
        assert scores.aicc == pytest.approx(scores.aic + 2 * k * (k + 1) / (40 - k - 1))
        densities = criticism.residuals.left_out.log_density
        assert scores.leave_one_out == pytest.approx(densities.sum())


def test_a_varying_pace_is_averaged_over():
    data = made("diffusive", 2, fixes=60, sd_km=0.2)
    model = replace(model_of("diffusive"), pace=PacePrior(0.5, 1e4, 2e4))  # one spell: one number
    fit = fitted(data, model)
    states = fit.states
    assert states.problem.pace.spells == 1
    grid = np.linspace(-4.0, 4.0, 161) * np.sqrt(states.theta_covariance[-1, -1]) + states.theta[-1]
    theta = np.tile(states.approximation.theta, (161, 1))
    theta[:, -1] = grid
    log = [
        -approximate(states.problem, t, states.approximation.warm).negative_log_marginal
        for t in theta
    ]
    joint = np.exp(np.array(log) + stats.norm.logpdf(grid) - fit.log_marginal)
    average = fit.log_marginal + np.log(np.trapezoid(joint, grid))
    scores = scores_of(fit, 0.0)
    # 0.03: Laplace's method against the integral
    assert scores.log_marginal == pytest.approx(average, abs=0.03)
    assert scores.estimated == 1


# Error sizes --------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
@pytest.mark.parametrize("factor", [0.6, 1.6])
def test_error_sizes_that_are_off_are_found_with_their_factor(kind, factor):
    data = made(kind, 11, sd_km=1.0, factor=factor)
    size = error_size(fitted(data, model_of(kind)), data)
    assert size.basis is Basis.FREED
    assert size.lower95 < factor < size.upper95
    assert size.upper95 / size.lower95 < 1.4
    assert size.p_value < 1e-6


def test_error_sizes_as_stated_need_no_second_fit():
    data = made("diffusive", 12, sd_km=1.0)
    size = error_size(fitted(data, model_of("diffusive")), data)
    assert size.basis is Basis.ONE_STEP
    assert size.freed is None
    assert size.lower95 < 1.0 < size.upper95


def test_one_step_and_second_fit_agree_where_both_are_near():
    data = made("persistent", 13, sd_km=1.0)
    one = error_size(fitted(data, model_of("persistent")), data)
    free = error_size(fitted(data, model_of("persistent", scale="estimated")), data)
    assert free.basis is Basis.ESTIMATED
    # one Newton step from one, and the prior of the free scale
    assert one.factor == pytest.approx(free.factor, rel=0.02)
    assert one.upper95 == pytest.approx(free.upper95, rel=0.02)


def test_chance_findings_of_wrong_sizes_are_as_rare_as_they_say():
    p = []
    for seed in range(60):
        data = made("diffusive", 1000 + seed, fixes=80, sd_km=1.0)
        p.append(error_size(fitted(data, model_of("diffusive")), data).p_value)
    assert stats.kstest(p, "uniform").pvalue > 0.01


def test_a_kind_of_fix_that_is_off_is_told_apart():
    rng = np.random.default_rng(14)
    hours = times(rng, 300)
    good, bad = (seen(rng, hours, np.zeros((300, 2)), 0.4, f).at_km for f in (1.0, 2.5))
    worse = np.arange(300) % 2 == 0
    path = walk(rng, hours, diffusion=0.3)
    data = TrackData("t", hours, path + np.where(worse[:, None], bad, good),
                     np.tile(0.16 * np.eye(2), (300, 1, 1)))  # fmt: skip
    criticism = judged(data, model_of("diffusive"), ["class B" if w else "GPS" for w in worse])
    assert criticism.kind_factors["class B"] == pytest.approx(2.5, rel=0.2)
    assert findings(criticism)["errors of class B"] is Finding.ERRORS_TOO_SMALL
    assert sentence(criticism, "errors of class B").startswith(
        "By its 150 fixes of this kind alone, the sd of class B looks too small by a factor of "
    )


def test_the_factor_of_a_kind_is_the_maximum_likelihood_one_where_predictions_are_sharp():
    rng = np.random.default_rng(15)
    offset = 3.0 * rng.normal(size=(200, 2))
    sharp, stated = np.tile(1e-8 * np.eye(2), (200, 1, 1)), np.tile(np.eye(2), (200, 1, 1))
    # for normal errors alone: the root mean square of all coordinates. 1e-4: the bounded search
    assert factor_of_kind(offset, sharp, stated, None) == pytest.approx(
        np.sqrt(np.mean(offset**2)), rel=1e-4
    )


def test_what_describes_a_fix_is_named(fix_table):
    rules = ErrorRules(default_sd_m=1000.0)
    assert error_kinds(fix_table, rules) == ["ellipse", "GPS", "class B", "default", "default"]


@pytest.fixture
def fix_table():
    import pandas as pd

    ellipse = [900.0, np.nan, np.nan, np.nan, np.nan]
    return pd.DataFrame(
        {
            "gps_sd_m": [30.0, 30.0, np.nan, np.nan, np.nan],
            "error_class": ["3", "3", "B", "X", None],
            "ellipse_major_m": ellipse,
            "ellipse_minor_m": ellipse,
            "ellipse_bearing_deg": ellipse,
        }
    )


# Verdicts -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
def test_nothing_is_found_against_the_true_model(kind):
    assert findings(judged(made(kind, 21), model_of(kind))) == {
        "errors": Finding.ERRORS_AS_STATED,
        "tails": Finding.TAILS_AS_EXPECTED,
        "motion": Finding.MOTION_FITS,
    }


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
def test_false_alarms_are_rare(kind):
    alarms = 0
    for seed in range(100):
        criticism = judged(made(kind, 5000 + seed, fixes=120, sd_km=0.7), model_of(kind))
        alarms += sum(
            v.finding.concern and v.finding is not Finding.CORRELATED
            for v in verdicts_of(criticism)
        )
    # three judgements at 1 % each make 3 in 100 at most; 9 or more of 100 have a chance of 0.4 %
    assert alarms < 9


def test_a_cruise_fitted_as_diffusive_says_that_the_motion_is_too_rough():
    criticism = judged(made("persistent", 22), model_of("diffusive"))
    assert findings(criticism)["motion"] is Finding.MOTION_TOO_ROUGH
    assert 'try motion.kind = "persistent"' in sentence(criticism, "motion")
    assert criticism.early_lags.value > 0.1


def test_too_small_errors_are_not_put_down_to_the_motion():
    criticism = judged(made("diffusive", 23, sd_km=1.0, factor=1.6), model_of("diffusive"))
    found = findings(criticism)
    assert found["errors"] is Finding.ERRORS_TOO_SMALL
    # as fitted, steps are undone by the next; with the errors set free they are not
    assert criticism.residuals.first_lag.p_value < 0.001
    assert criticism.residuals.first_lag.value < 0.0
    assert found["motion"] is Finding.MOTION_FITS
    words = sentence(criticism, "errors")
    assert words.startswith("The GPS sds look too small by a factor of about 1.")
    assert words.endswith('set errors.scale = "estimated".')


def test_an_estimated_scale_is_told_and_needs_nothing_done():
    data = made("diffusive", 24, sd_km=1.0, factor=1.6)
    criticism = judged(data, model_of("diffusive", scale="estimated"), ["ellipse"] * 300)
    assert sentence(criticism, "errors").startswith("The error ellipses look too small by")
    assert sentence(criticism, "errors").endswith("; the fit has allowed for it.")


def thrown(seed, share=0.05, far_km=15.0):
    data = made("diffusive", seed, sd_km=0.5)
    rng = np.random.default_rng(seed)
    off = far_km * rng.normal(size=data.at_km.shape) * (rng.random(300) < share)[:, None]
    return replace(data, at_km=data.at_km + off)


def test_fixes_far_off_are_a_matter_of_tails():
    criticism = judged(thrown(25), model_of("diffusive"))
    assert findings(criticism)["tails"] is Finding.TAILS_TOO_HEAVY
    assert 'set errors.tails = "heavy"' in sentence(criticism, "tails")
    assert "Far-off fixes may be behind it" in sentence(criticism, "errors")


def test_heavy_tails_leave_nothing_to_be_said_of_tails():
    criticism = judged(thrown(25), model_of("diffusive", nu=4.0))
    assert criticism.heavy
    assert findings(criticism)["tails"] is Finding.TAILS_AS_EXPECTED
    assert findings(criticism)["motion"] is Finding.MOTION_FITS


def test_speed_and_persistence_that_cannot_be_told_apart_are_said_to_be_correlated():
    criticism = judged(made("diffusive", 26), model_of("persistent"))
    assert findings(criticism)["speed and persistence"] is Finding.CORRELATED
    words = sentence(criticism, "speed and persistence")
    assert words.startswith("speed and persistence are strongly correlated (-0.9")
    assert "long-run diffusion" in words


@pytest.mark.parametrize("fixes", [3, 4, 5, 9])
@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
def test_few_fixes_are_not_judged_but_scored(kind, fixes):
    data = part(made(kind, 27), slice(0, fixes))
    criticism = judged(data, model_of(kind))
    assert findings(criticism)["residuals"] is Finding.UNTOLD
    assert f"{fixes} fixes are too few" in sentence(criticism, "residuals")
    assert np.isfinite(criticism.scores.leave_one_out)
    estimated = {"diffusive": 1, "persistent": 2}[kind]
    assert np.isfinite(criticism.scores.aicc) == (fixes > estimated + 1)


def test_a_tag_that_was_not_fitted_says_so_and_nothing_else():
    data = part(made("diffusive", 28), slice(0, 2))
    criticism = judged(data, model_of("diffusive"))
    assert criticism.residuals is None
    verdicts = verdicts_of(criticism)
    assert [v.finding for v in verdicts] == [Finding.NOT_FITTED]
    assert verdicts[0].sentence == FitStatus.TOO_FEW_FIXES.sentence


def test_a_fit_that_did_not_converge_says_so_and_nothing_else():
    criticism = judged(made("diffusive", 29), model_of("diffusive"))
    failed = replace(criticism, status=FitStatus.NOT_CONVERGED)
    assert [v.finding for v in verdicts_of(failed)] == [Finding.NOT_CONVERGED]


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
@pytest.mark.parametrize("nu", [None, 4.0])
def test_an_animal_that_never_moves_is_not_judged(kind, nu):
    data = replace(made(kind, 30, fixes=40), at_km=np.zeros((40, 2)))
    criticism = judged(data, model_of(kind, nu=nu))
    assert "all fixes are at one place" in sentence(criticism, "residuals")


def test_the_same_seed_gives_the_same_bands():
    data = made("diffusive", 31, fixes=40)
    one, same, other = (judged(data, model_of("diffusive"), seed=s) for s in (1, 1, 2))
    assert one.residuals.mean_square == same.residuals.mean_square
    assert one.residuals.mean_square != other.residuals.mean_square
    assert one.residuals.first_lag == other.residuals.first_lag  # no draws in it


# Effects of terms ---------------------------------------------------------------------------------


def homing(pull, seed=41):
    """A walk drawn to the origin at `pull` km/h; exact in the limit of its short steps."""
    rng = np.random.default_rng(seed)
    x, dt, steps = np.array([20.0, 0.0]), 0.02, 15_000
    path = np.empty((steps, 2))
    for i in range(steps):
        path[i] = x
        away = x / np.sqrt(x @ x + 1.0)
        x = x - pull * away * dt + 1.5 * np.sqrt(dt) * rng.normal(size=2)
    at = np.arange(0, steps, 50)
    return seen(rng, at * dt, path[at], 0.1)


def homing_model():
    field = VelocityField((DistanceTerm(jnp.zeros(2)),), None)
    amplitude = parameter("preference.home.distance", sd=2.0, positive=False)
    return model_of("diffusive", field=field, layers=((None,), None), amplitudes=[amplitude])


HOME = (TermName("home", "distance", "km"),)


def test_a_pull_that_is_there_is_found_with_its_strength():
    criticism = judged(homing(0.8), homing_model(), names=HOME)
    (effect,) = criticism.effects
    z = effect.amplitudes[0] / effect.sd[0]
    assert effect.statistic == pytest.approx(z**2)
    assert effect.p_value == pytest.approx(2.0 * stats.norm.sf(abs(z)))
    assert effect.found
    assert effect.amplitudes[0] == pytest.approx(-0.8, abs=3.0 * effect.sd[0])
    assert sentence(criticism, "preference.home").startswith("The animal is drawn to home, at 0.")


def test_a_pull_that_is_not_there_is_not_distinguishable_from_none():
    criticism = judged(homing(0.0, seed=42), homing_model(), names=HOME)
    assert findings(criticism)["preference.home"] is Finding.NO_EFFECT
    assert sentence(criticism, "preference.home").startswith(
        "The preference for home is not distinguishable from none (p = 0."
    )
