"""Fixes against their predictions: leave-one-out and one step ahead."""

import dataclasses

import numpy as np
import pytest
import scipy.stats
from engine_standins import (
    approximation_of,
    covariance_of,
    isotropic,
    problem_of,
    random_covariances,
    start_prior,
)

from trackfit.inference.leave_one_out import leave_one_out
from trackfit.inference.one_step import one_step_ahead
from trackfit.motion import Diffusive, Persistent

MOTIONS = {"diffusive": (Diffusive(), [0.3]), "persistent": (Persistent(), [0.2, 0.9])}
SCALE = 1.3


def walk(kind, seed=1, fixes=12):
    """Fixes with turned ellipses, two of one moment; a linear model, so that all is exact."""
    rng = np.random.default_rng(seed)
    motion, first = MOTIONS[kind]
    hours = np.sort(np.round(rng.uniform(0, 24, fixes), 1))
    hours[5] = hours[4]
    problem = problem_of(
        hours,
        np.cumsum(rng.normal(size=(fixes, 2)), axis=0),
        random_covariances(rng, fixes, 0.4),
        hours=np.union1d(hours, np.arange(np.ceil(hours[0]), hours[-1])),
        start=start_prior(sd_km=20.0),
        motion=motion,
    )
    return problem, np.array([*first, np.log(SCALE)]), hours


def predicted_from(problem, theta, hours, keep, state):
    """Mean and covariance of the position at a state, from some of the fixes."""
    seen = problem.observations
    some = dataclasses.replace(
        seen,
        state=seen.state[keep],
        at_km=seen.at_km[keep],
        covariance_km2=seen.covariance_km2[keep],
    )
    found = approximation_of(dataclasses.replace(problem, observations=some), theta, hours[keep])
    return found.mode.states[state, :2], covariance_of(found)[state, :2, :2]


@pytest.mark.parametrize("kind", MOTIONS)
def test_leave_one_out_against_leaving_one_out(kind):
    problem, theta, hours = walk(kind)
    seen = problem.observations
    made = leave_one_out(approximation_of(problem, theta, hours))
    for k in range(len(hours)):
        keep = np.delete(np.arange(len(hours)), k)
        mean, V = predicted_from(problem, theta, hours, keep, seen.state[k])
        whole = V + SCALE**2 * seen.covariance_km2[k]
        offset = seen.at_km[k] - mean
        assert np.allclose(made.offset_km[k], offset, rtol=0, atol=1e-8)
        assert np.allclose(made.covariance_km2[k], whole, rtol=0, atol=1e-8)
        squared = offset @ np.linalg.solve(whole, offset)
        assert made.p_value[k] == pytest.approx(np.exp(-0.5 * squared), abs=1e-8)
        density = scipy.stats.multivariate_normal(mean, whole).logpdf(seen.at_km[k])
        assert made.log_density[k] == pytest.approx(density, abs=1e-8)
        assert made.residual[k] == pytest.approx(
            np.linalg.solve(np.linalg.cholesky(whole), offset), abs=1e-7
        )


@pytest.mark.parametrize("kind", MOTIONS)
def test_one_step_ahead_against_the_fixes_before(kind):
    """And the log scores add up to the marginal likelihood."""
    problem, theta, hours = walk(kind)
    seen = problem.observations
    found = approximation_of(problem, theta, hours)
    made = one_step_ahead(found)
    for k in range(1, len(hours)):
        mean, V = predicted_from(problem, theta, hours, np.arange(k), seen.state[k])
        assert np.allclose(made.offset_km[k], seen.at_km[k] - mean, rtol=0, atol=1e-8)
        whole = V + SCALE**2 * seen.covariance_km2[k]
        assert np.allclose(made.covariance_km2[k], whole, rtol=0, atol=1e-8)
    assert made.log_density.sum() == pytest.approx(-found.negative_log_marginal, abs=1e-7)


@pytest.mark.parametrize("nu", [None, 4.0], ids=["normal", "t4"])
def test_p_values_are_uniform_where_the_model_is_true(nu):
    """One fix of each of 300 tracks, all circles: Kolmogorov and Smirnov's test at 0.1 %.

    With tails the cavities are EP's, an approximation that this test would have to notice.
    """
    rng = np.random.default_rng(7)
    hours = 2.0 * np.arange(9)
    left_out, ahead = [], []
    log_nu = [] if nu is None else [np.log(nu)]
    for _ in range(300):
        truth = np.cumsum(rng.normal(size=(9, 2)) * np.sqrt(2.0), axis=0)
        error = rng.normal(size=(9, 2))
        if nu is not None:
            error /= np.sqrt(rng.chisquare(nu, (9, 1)) / nu)
        problem = problem_of(hours, truth + error, isotropic(np.ones(9)), heavy=nu is not None)
        found = approximation_of(problem, [0.0, 0.0, *log_nu], hours, 1e-8, 1e-6)
        left_out.append(leave_one_out(found).p_value[4])
        ahead.append(one_step_ahead(found).p_value[4])
    for values in (left_out, ahead):
        assert scipy.stats.kstest(values, "uniform").pvalue > 1e-3
    # and the test can fail: errors of another size are noticed
    assert scipy.stats.kstest(np.array(left_out) ** 1.5, "uniform").pvalue < 1e-3


def test_the_log_score_of_a_t_is_its_density():
    """A certain prediction leaves the t itself: scipy's bivariate t4 at (1, -1)."""
    from trackfit.inference.predicted import Predicted

    C = np.array([[[4.0, 1.0], [1.0, 2.0]]])
    made = Predicted.of(np.array([[1.0, -1.0]]), 1e-14 * np.eye(2)[None], C, np.log(4.0))
    # steps of 0.4 in log w leave 1e-7 of a t4's mass
    assert made.log_density[0] == pytest.approx(-3.5647754258, abs=2e-7)
    squared = np.array([1.0, -1.0]) @ np.linalg.solve(C[0], [1.0, -1.0])
    # P(r^2 > q) = (1 + q/nu)^(-nu/2)
    assert made.p_value[0] == pytest.approx((1 + squared / 4.0) ** -2.0, abs=2e-7)
    radius = np.linalg.norm(made.residual[0])
    assert np.exp(-0.5 * radius**2) == pytest.approx(made.p_value[0], rel=1e-12)
