"""Fixes against their predictions: from all others, from those before, and from the true model."""

import jax.numpy as jnp
import numpy as np
import pytest
from made_tracks import approximated, made, part
from scipy import stats
from statsmodels.datasets import nile

from trackfit.inference.grid import time_grid
from trackfit.inference.leave_one_out import leave_one_out
from trackfit.inference.one_step import OneStepAhead, one_step_ahead
from trackfit.inference.predicted import Predicted, error_mixture
from trackfit.inference.process import Start
from trackfit.inference.replicates import leave_one_out_replicates
from trackfit.inference.task import TrackData

THETA = {
    "diffusive": np.log([1.4, 1.1]),
    "persistent": np.log([1.8, 2.5, 1.1]),
}
"""Logarithms of the motion's parameters, then of the error scale."""


# Against all others -------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", THETA)
@pytest.mark.parametrize("left", [0, 7, 24])
def test_leaving_a_fix_out_is_dropping_it(kind, left):
    data = made(kind, 3, fixes=25)
    whole = approximated(data, kind, THETA[kind])
    found = leave_one_out(whole)
    rest = approximated(part(data, np.arange(25) != left), kind, THETA[kind],
                        hours=whole.problem.hours, start=whole.problem.track.start)  # fmt: skip
    state = whole.problem.observations.state[left]
    spread = rest.spread.covariance_at(np.array([state]))[0]
    own = data.covariance_km2[left] * np.exp(2.0 * THETA[kind][-1])
    offset = data.at_km[left] - rest.mode.states[state, :2]
    # 1e-6: where only fixes on one side are left, the vague start cancels to so few digits
    np.testing.assert_allclose(found.offset_km[left], offset, rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(found.covariance_km2[left], spread + own, rtol=1e-6, atol=1e-8)
    law = stats.multivariate_normal(np.zeros(2), spread + own)
    assert found.log_density[left] == pytest.approx(law.logpdf(offset), rel=1e-6)


# Against those before -----------------------------------------------------------------------------


def nile_approximation(years):
    """The Nile's level as one coordinate, at rest in the other: 15099 and 1469.1 are the variances
    of error and step (Durbin & Koopman 2012, section 2.2.5)."""
    flow = nile.load_pandas().data["volume"].to_numpy(float)[:years]
    at = np.column_stack([flow, np.zeros(years)])
    data = TrackData(
        "nile", np.arange(years) * 1.0, at, np.tile(15099.0 * np.eye(2), (years, 1, 1))
    )
    start = Start(jnp.array([1000.0, 0.0]), jnp.asarray(1e6))
    return approximated(data, "diffusive", [0.5 * np.log(1469.1), 0.0], start=start)


NILE = {"S": -0.03055, "K": 3.0873, "N": 0.04687, "H": 0.61296, "Q": 8.84332}
"""Skewness, kurtosis, normality, heteroscedasticity over 33 and Ljung-Box statistic over 9 of the
one-step-ahead residuals. Printed by Durbin & Koopman 2012, section 2.12.3, to two digits (-0.03,
3.09, 0.05, 0.61, 8.84: from memory); to five by the state-space package of statsmodels."""


def diagnostics(e):
    n = len(e)
    lags = np.arange(1, 10)
    apart = e - e.mean()
    r = np.array([apart[lag:] @ apart[:-lag] for lag in lags]) / (apart @ apart)
    skew, kurtosis = stats.skew(e), stats.kurtosis(e, fisher=False)
    return {
        "S": skew,
        "K": kurtosis,
        "N": n * (skew**2 / 6.0 + (kurtosis - 3.0) ** 2 / 24.0),
        "H": np.sum(e[-33:] ** 2) / np.sum(e[:33] ** 2),
        "Q": n * (n + 2.0) * np.sum(r**2 / (n - lags)),
    }


def test_one_step_ahead_residuals_of_the_nile_are_those_of_the_textbook():
    residual = one_step_ahead(nile_approximation(100)).residual
    # 1e-4: the reference is printed to five digits
    assert diagnostics(residual[1:, 0]) == pytest.approx(NILE, abs=1e-4)
    np.testing.assert_allclose(residual[:, 1], 0.0, atol=1e-8)


def test_the_last_fix_of_each_prefix_left_out_is_one_step_ahead():
    whole = one_step_ahead(nile_approximation(100)).residual[:, 0]
    prefixes = [leave_one_out(nile_approximation(k)).residual[-1, 0] for k in range(2, 101)]
    # 1e-6: the vague start of 1e6 km against a step of 38 km
    np.testing.assert_allclose(prefixes, whole[1:], atol=1e-6)


@pytest.mark.parametrize("kind", THETA)
def test_one_step_ahead_scores_add_up_to_the_marginal_likelihood(kind):
    found = approximated(made(kind, 5, fixes=60), kind, THETA[kind])
    total = one_step_ahead(found).log_density.sum()
    assert total == pytest.approx(-found.negative_log_marginal, rel=1e-8)


def test_fixes_of_one_moment_are_taken_one_after_the_other():
    data = made("diffusive", 6, fixes=20)
    hours = data.hours.copy()
    hours[10] = hours[9]
    found = approximated(TrackData("twins", hours, data.at_km, data.covariance_km2), "diffusive",
                         THETA["diffusive"])  # fmt: skip
    ahead = one_step_ahead(found)
    assert ahead.log_density.sum() == pytest.approx(-found.negative_log_marginal, rel=1e-8)
    # the twin is foretold by the other one: no wider than both their errors
    assert ahead.covariance_km2[10].max() < 2.0 * 0.25 * np.exp(2.0 * THETA["diffusive"][1])


def test_the_states_between_fixes_change_no_prediction():
    data = made("persistent", 7, fixes=30)
    coarse, fine = (
        one_step_ahead(approximated(data, "persistent", THETA["persistent"], step_hours=step))
        for step in (24.0, 0.25)
    )
    # 1e-6: more states, more rounding
    np.testing.assert_allclose(fine.residual, coarse.residual, atol=1e-6)


@pytest.mark.parametrize("nu", [2.0, 5.0, 20.0, 100.0, 4e3])
def test_the_weights_of_heavy_tails_have_the_moments_of_their_law(nu):
    weights, log_mass = error_mixture(float(np.log(nu)))
    mass = np.exp(log_mass)
    # 1e-7: the spacing of the nodes, and at nu = 2 their reach down to weights of 1e-8
    assert mass.sum() == pytest.approx(1.0, abs=1e-7)
    assert mass @ weights == pytest.approx(1.0, abs=1e-7)
    assert mass @ weights**2 == pytest.approx(1.0 + 2.0 / nu, abs=3e-6)


def test_light_tails_are_normal_errors():
    data = made("persistent", 8, fixes=40)
    found = approximated(data, "persistent", THETA["persistent"])
    normal = one_step_ahead(found)
    light = OneStepAhead.of(
        normal.offset_km, normal.covariance_km2 - (own := _own(found)), own, float(np.log(1e6))
    )
    # of the order of squared residuals over the degrees of freedom; near zero a radius is the
    # square root of the masses' error of 1e-9
    np.testing.assert_allclose(light.residual, normal.residual, atol=1e-4)
    np.testing.assert_allclose(light.log_density, normal.log_density, atol=1e-4)


def _own(found):
    return found.problem.observations.covariance_km2 * np.exp(2.0 * found.theta[-1])


@pytest.mark.parametrize("kind", THETA)
def test_with_heavy_tails_a_fix_far_off_does_not_carry_the_next_prediction_away(kind):
    data = made(kind, 9, fixes=60)
    at = data.at_km.copy()
    at[30] += [80.0, -60.0]
    theta = np.append(THETA[kind], np.log(4.0))
    sound, wrong = (
        approximated(TrackData("t", data.hours, x, data.covariance_km2), kind, theta, heavy=True)
        for x in (data.at_km, at)
    )
    ahead = one_step_ahead(wrong)
    assert ahead.p_value[30] < 1e-4
    np.testing.assert_allclose(ahead.offset_km[:30], one_step_ahead(sound).offset_km[:30], atol=0.5)
    assert np.abs(ahead.offset_km[31:]).max() < 15.0


# The comparison itself ----------------------------------------------------------------------------


def test_heavy_tails_of_the_error_alone_are_a_bivariate_t():
    scale, nu = np.array([[4.0, 1.0], [1.0, 2.0]]), 4.0
    at = np.array([[1.0, -1.0], [30.0, 40.0], [0.0, 0.0]])
    nothing = np.tile(1e-18 * np.eye(2), (3, 1, 1))
    found = Predicted.of(at, nothing, np.tile(scale, (3, 1, 1)), float(np.log(nu)))
    law = stats.multivariate_t(shape=scale, df=nu)
    # -3.5647754258 at (1, -1): scipy. 1e-7: the quadrature at nu = 4
    assert found.log_density[0] == pytest.approx(-3.5647754258, abs=1e-7)
    np.testing.assert_allclose(found.log_density, law.logpdf(at), rtol=1e-7)
    squared = np.einsum("na,ab,nb->n", at, np.linalg.inv(scale), at)
    # the squared radius over two follows F(2, nu)
    np.testing.assert_allclose(found.p_value, stats.f(2, nu).sf(squared / 2.0), rtol=1e-7)
    np.testing.assert_allclose(
        np.exp(-0.5 * np.sum(found.residual**2, axis=1)), found.p_value, rtol=1e-8
    )


def test_a_fix_hopelessly_far_off_has_finite_scores():
    at = np.array([[1e6, 0.0]])
    one = np.eye(2)[None]
    for log_nu in (None, 0.0):
        found = Predicted.of(at, one, one, log_nu)
        assert np.isfinite(found.log_density).all()
        assert np.isfinite(found.residual).all()
        assert found.p_value[0] < 1e-5


# What the true model gives ------------------------------------------------------------------------


def residual_correlation(hours, errors, diffusion):
    """Correlation of the leave-one-out residuals of a walk seen with errors, one axis, dense.

    P = inv(cov y); residuals are (P y)_k / sqrt(P_kk).
    """
    covariance = 1e6 + diffusion**2 * np.minimum.outer(hours - hours[0], hours - hours[0])
    precision = np.linalg.inv(covariance + np.diag(errors))
    root = np.sqrt(np.diag(precision))
    return precision / np.outer(root, root)


def test_replicates_have_the_covariance_of_leave_one_out_residuals():
    rng = np.random.default_rng(1)
    hours, sd = np.array([0.0, 0.4, 2.0, 2.2, 7.0, 8.0]), np.array([0.3, 1.0, 0.5, 2.0, 0.2, 0.4])
    data = TrackData("t", hours, rng.normal(size=(6, 2)), (sd**2)[:, None, None] * np.eye(2))
    found = approximated(data, "diffusive", [np.log(1.3), 0.0])
    draws = leave_one_out_replicates(found, 40_000, np.random.default_rng(2))
    wanted = residual_correlation(hours, sd**2, 1.3)
    for axis in range(2):
        # sd of a covariance of 40 000 draws of unit variance is at most sqrt(2/40000) = 0.007
        np.testing.assert_allclose(np.cov(draws[..., axis].T), wanted, atol=0.03)
    assert np.abs(np.mean(draws[..., 0] * draws[..., 1], axis=0)).max() < 0.03
    # what makes them necessary: neighbours are far from independent
    assert wanted[2, 3] < -0.3


def test_replicates_of_a_cruise_are_what_simulated_cruises_give():
    kind, theta = "persistent", np.log([2.0, 3.0, 1.0])
    of_simulated = []
    for seed in range(40):
        residual = leave_one_out(approximated(made(kind, seed, fixes=60), kind, theta)).residual
        of_simulated.append(np.sum(residual[1:] * residual[:-1]) / 118.0)
    found = approximated(made(kind, 99, fixes=60), kind, theta)
    drawn = leave_one_out_replicates(found, 400, np.random.default_rng(3))
    of_drawn = np.sum(drawn[:, 1:] * drawn[:, :-1], axis=(1, 2)) / 118.0
    se = np.hypot(np.std(of_simulated) / 40**0.5, np.std(of_drawn) / 400**0.5)
    # times of the fixes differ from track to track, which adds a little
    assert abs(np.mean(of_simulated) - np.mean(of_drawn)) < 4.0 * se
    assert np.mean(of_drawn) < -0.2


def test_replicates_do_not_depend_on_the_time_grid():
    data = made("diffusive", 4, fixes=12)
    draws = []
    for step in (0.2, 50.0):
        hours = time_grid(data.hours, step, np.zeros(0), 1e-6)
        found = approximated(data, "diffusive", THETA["diffusive"], hours=hours)
        draws.append(leave_one_out_replicates(found, 20_000, np.random.default_rng(5)))
    fine, coarse = (np.cov(d[..., 0].T) for d in draws)
    # two Monte-Carlo errors of 0.007 each
    np.testing.assert_allclose(fine, coarse, atol=0.045)


def test_replicates_live_with_a_site_that_says_nothing():
    data = made("diffusive", 5, fixes=30)
    at = data.at_km.copy()
    at[12] += 1e4
    found = approximated(
        TrackData("t", data.hours, at, data.covariance_km2), "diffusive",
        np.append(THETA["diffusive"], np.log(3.0)), heavy=True,
    )  # fmt: skip
    draws = leave_one_out_replicates(found, 500, np.random.default_rng(6))
    assert np.isfinite(draws).all()
    assert np.mean(draws[:, np.arange(30) != 12] ** 2) == pytest.approx(1.0, abs=0.05)
