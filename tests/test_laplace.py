"""The Laplace engine against exact Gaussians, a dense twin of its own, and published series."""

import itertools

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg
import scipy.stats
import statsmodels.api
from engine_standins import (
    STILL,
    bumpy_layer,
    distance_term,
    field_layer,
    isotropic,
    layer_term,
    mode_of,
    problem_of,
    random_covariances,
    start_prior,
)
from engine_twin import THETA, TWIN_FIELD, TWIN_LAYERS, Twin
from hypothesis import given
from hypothesis import strategies as st

from trackfit.inference import laplace
from trackfit.inference.banded import dense
from trackfit.inference.grid import (
    SAME_MOMENT_HOURS,
    START_SD_KM,
    interpolated_start,
    nearest_state,
    padded_size,
    time_grid,
)
from trackfit.inference.laplace import (
    ModeNotFound,
    find_mode,
    marginal_gradient,
    mode_sensitivity,
)
from trackfit.layers.splines import fit_spline
from trackfit.motion import VelocityField


@pytest.fixture(scope="module")
def nile():
    """Annual flow of the Nile at Aswan, 1871-1970 (statsmodels.datasets.nile)."""
    flow = statsmodels.api.datasets.nile.load_pandas().data["volume"].to_numpy()
    assert (len(flow), flow.sum()) == (100, 91935.0)
    return flow


NILE_THETA = np.array([0.5 * np.log(1469.1), 0.0])
"""Durbin & Koopman 2012, section 2.2.5: level variance 1469.1, error variance 15099."""


def nile_problem(flow, start_variance, *, seen=slice(None), extra_hours=()):
    """Both axes hold the series, so every log-likelihood is twice the published one."""
    years = np.arange(100.0)
    return (
        problem_of(
            years[seen],
            np.stack([flow, flow], axis=1)[seen],
            isotropic(np.full(100, 15099.0**0.5))[seen],
            hours=np.union1d(years, extra_hours),
            start=start_prior(sd_km=start_variance**0.5),
        ),
        years[seen],
    )


def covariance_of(problem, mode):
    """Covariance blocks of the states (states, 2, 2)."""
    blocks = marginal_gradient(problem, mode).inverse.covariance
    return np.moveaxis(np.asarray(blocks), -1, 0)[: problem.n_states]


# --- exact where the density is Gaussian -----------------------------------------------------


@pytest.mark.parametrize(
    ("start_variance", "published"),
    [
        # a proper prior N(0, P1) of the first level and no value left out; the first is published,
        # the second recomputed with statsmodels for this project (both to five decimals)
        (1e7, -641.58558),
        (1e6, -640.98975),
    ],
)
def test_the_likelihood_of_the_nile(nile, start_variance, published):
    problem, years = nile_problem(nile, start_variance)
    mode = mode_of(problem, NILE_THETA, years)
    assert -mode.negative_log_marginal / 2 == pytest.approx(published, abs=6e-6)


def test_grid_times_between_the_fixes_change_nothing(nile):
    plain = mode_of(*with_theta(nile_problem(nile, 1e7)))
    finer = mode_of(*with_theta(nile_problem(nile, 1e7, extra_hours=np.arange(0, 99, 0.125))))
    assert finer.negative_log_marginal == pytest.approx(plain.negative_log_marginal, rel=1e-12)
    assert np.allclose(finer.states[::8], plain.states, rtol=0, atol=1e-8)


def with_theta(made):
    problem, years = made
    return problem, NILE_THETA, years


def diffuse_log_likelihood(flow, seen=slice(None)):
    """The exact diffuse likelihood as the limit of vague priors: log p + 1/2 log(2 pi P1).

    What a prior of variance P1 leaves out falls as 1/P1: extrapolated from two variances.
    """
    values = []
    for variance in (1e8, 1e9):
        mode = mode_of(*with_theta(nile_problem(flow, variance, seen=seen)))
        values.append(-mode.negative_log_marginal / 2 + 0.5 * np.log(variance))
    return values[1] + (values[1] - values[0]) / 9.0


def test_the_likelihood_of_the_nile_with_a_diffuse_start(nile):
    """-633.46456: statsmodels' exact diffuse likelihood (constant n/2 log 2 pi)."""
    # log p at 1e9 carries 1e-16 times a sum of squares near 1e5 and more: 1e-5 remains
    assert diffuse_log_likelihood(nile) == pytest.approx(-633.46456, abs=2e-5)


GAPS = np.r_[0:20, 40:60, 80:100]


def test_the_nile_with_gaps(nile):
    """Durbin & Koopman section 2.7: years 21-40 and 61-80 missing; statsmodels' figures."""
    assert diffuse_log_likelihood(nile, GAPS) == pytest.approx(-381.506001, abs=2e-5)
    problem, years = nile_problem(nile, 1e10, seen=GAPS)
    mode = mode_of(problem, NILE_THETA, years)
    variance = covariance_of(problem, mode)[:, 0, 0]
    for t, mean, spread in ((30, 903.421103, 9715.005902), (70, 837.177324, 9715.005549)):
        # a prior of sd 1e5 instead of a diffuse one moves the second digit after the point by
        # 1e4 / 1e10 of the values: 1e-3 at most near the start, far less inside
        assert mode.states[t - 1] == pytest.approx(mean, abs=2e-5)
        assert variance[t - 1] == pytest.approx(spread, abs=2e-4)


def test_the_smoothed_nile(nile):
    """statsmodels' smoother with a diffuse start, recomputed for this project."""
    problem, years = nile_problem(nile, 1e10)
    mode = mode_of(problem, NILE_THETA, years)
    # a prior N(0, 1e10) draws the first level by 1100 * 4032 / 1e10 = 4e-4; further on by less
    assert mode.states[0] == pytest.approx(1111.66832, abs=6e-4)
    assert mode.states[1] == pytest.approx(1110.85766, abs=6e-4)
    assert mode.states[2] == pytest.approx(1105.26557, abs=4e-4)
    assert mode.states[-1] == pytest.approx(798.37029, abs=1e-5)
    assert np.allclose(mode.states[:, 0], mode.states[:, 1], rtol=0, atol=1e-9)
    covariance = covariance_of(problem, mode)
    assert covariance[-1, 0, 0] == pytest.approx(4032.15794, abs=1e-5)
    assert np.allclose(covariance[:, 0, 1], 0.0, atol=1e-9)


ORACLE = {
    "hours": np.array([0.0, 1.5, 2.0, 5.0, 9.0]),
    "sd": np.array([1.0, 2.0, 0.5, 3.0, 1.0]),
    "seen": np.array([0.3, 1.0, -2.0, 4.0, 7.0]),
}


@pytest.mark.parametrize("step_hours", [None, 1.0, 0.25, 0.01])
def test_irregular_times_against_a_dense_normal(step_hours):
    """x0 ~ N(0, 10^2), sigma = 2: log p = -14.2552821374 (scipy, dense covariance)."""
    hours = ORACLE["hours"]
    grid = hours if step_hours is None else time_grid(hours, step_hours, np.zeros(0))
    problem = problem_of(
        hours,
        np.stack([ORACLE["seen"]] * 2, axis=1),
        isotropic(ORACLE["sd"]),
        hours=grid,
        start=start_prior(sd_km=10.0),
    )
    mode = mode_of(problem, [np.log(2.0), 0.0], hours)
    assert -mode.negative_log_marginal / 2 == pytest.approx(-14.2552821374, abs=1e-9)
    assert mode.newton_steps == 1


def bridge(first_km, last_km, sd_km):
    problem = problem_of(
        [0.0, 60.0],
        [[first_km, 10.0], [last_km, 2.0]],
        isotropic(sd_km),
        hours=np.arange(61.0),
        start=start_prior(sd_km=1e7),
    )
    mode = mode_of(problem, [np.log(10.0), 0.0], [0.0, 60.0])
    return mode.states[15], covariance_of(problem, mode)[15]


def test_inside_a_gap_the_path_is_a_brownian_bridge():
    """T a (1-a) s2 + (1-a)^2 da^2 + a^2 db^2 = 1142.125 (Horne et al. 2007, Ecology 88:2354).

    T = 60, a = 1/4, s2 = 100, da = 5, db = 7: the first part is the variance between known ends,
    the weights of the others are how the mean follows its ends.
    """
    mean, between = bridge(0.0, 8.0, [1e-4, 1e-4])
    # errors of 0.1 m at the ends are left: 1e-8 km^2
    assert between == pytest.approx(1125.0 * np.eye(2), abs=1e-7)
    weight_first = bridge(1.0, 8.0, [1e-4, 1e-4])[0][0] - mean[0]
    weight_last = bridge(0.0, 9.0, [1e-4, 1e-4])[0][0] - mean[0]
    known_ends = between[0, 0] + weight_first**2 * 25.0 + weight_last**2 * 49.0
    assert known_ends == pytest.approx(1142.125, abs=1e-6)


def test_between_two_uncertain_fixes_each_tells_of_the_other():
    """With ends from fixes the posterior is a little narrower: v - v^2 / (25 + 6000 + 49)."""
    spread = 25.0 + 100.0 * 15.0
    mean, found = bridge(0.0, 8.0, [5.0, 7.0])
    # the start's sd of 1e7 km leaves 25^2 / 1e14 of the mean
    assert found == pytest.approx((spread - spread**2 / 6074.0) * np.eye(2), abs=1e-7)
    assert mean[0] == pytest.approx(8.0 * spread / 6074.0, abs=1e-9)


# --- linear drift: exact layers, dense normals, stationary laws ------------------------------

X_LAYER = field_layer(lambda x, y, t: x)
Y_LAYER = field_layer(lambda x, y, t: y)
ROTATION = field_layer(lambda x, y, t: -y, lambda x, y, t: x)
LINEAR_FIELD = VelocityField(
    (layer_term(X_LAYER, humped=True), layer_term(Y_LAYER, humped=True)), fit_spline(ROTATION)
)
LINEAR_LAYERS = ((X_LAYER, Y_LAYER), ROTATION)


def linear_theta(sigma, pull_x, pull_y, turn, push=(0.0, 0.0)):
    """u = push - (pull_x x, pull_y y) + turn (-y, x), from h = push z - pull/2 z^2."""
    return np.array([np.log(sigma), push[0], -0.5 * pull_x, push[1], -0.5 * pull_y, turn, 0.0])


def euler_normal(hours, A, push, sigma, start_mean, start_variance):
    """Mean and covariance of all states stacked, by the recursion written out densely."""
    n = len(hours)
    mean = [np.asarray(start_mean, float)]
    cov = np.zeros((2 * n, 2 * n))
    cov[:2, :2] = start_variance * np.eye(2)
    for i, dt in enumerate(np.diff(hours)):
        step = np.eye(2) + dt * A
        mean.append(step @ mean[-1] + dt * np.asarray(push))
        here, after = slice(2 * i, 2 * i + 2), slice(2 * i + 2, 2 * i + 4)
        cov[after, : 2 * i + 2] = step @ cov[here, : 2 * i + 2]
        cov[: 2 * i + 2, after] = cov[after, : 2 * i + 2].T
        cov[after, after] = step @ cov[here, here] @ step.T + sigma**2 * dt * np.eye(2)
    return np.concatenate(mean), cov


def test_linear_drift_against_a_dense_normal():
    """Preference, current, push, error ellipses and scale: all at once, from scipy's density."""
    rng = np.random.default_rng(3)
    fix_hours = np.sort(rng.uniform(0, 12, 14))
    hours = time_grid(fix_hours, 0.25, np.zeros(0))
    covariance = random_covariances(rng, 14)
    seen = rng.normal(size=(14, 2)) * 4
    A, push = np.array([[-0.3, -0.8], [0.8, -0.9]]), (0.7, -0.4)
    problem = problem_of(
        fix_hours,
        seen,
        covariance,
        hours=hours,
        field=LINEAR_FIELD,
        layers=LINEAR_LAYERS,
        start=start_prior(1.0, -2.0, 3.0),
    )
    theta = linear_theta(1.2, 0.3, 0.9, 0.8, push)
    theta[-1] = np.log(1.3)
    mode = mode_of(problem, theta, fix_hours)
    mean, cov = euler_normal(hours, A, push, 1.2, [1.0, -2.0], 9.0)
    at = nearest_state(hours, fix_hours)
    rows = (2 * at[:, None] + [0, 1]).ravel()
    noise = scipy.linalg.block_diag(*(1.3**2 * covariance))
    seen_cov = cov[np.ix_(rows, rows)] + noise
    expected = scipy.stats.multivariate_normal(mean[rows], seen_cov).logpdf(seen.ravel())
    # the layers reach 80 km where splines round at 1e-14
    assert -mode.negative_log_marginal == pytest.approx(expected, abs=1e-8)
    gain = cov[:, rows] @ np.linalg.inv(seen_cov)
    assert np.allclose(
        mode.states.ravel(), mean + gain @ (seen.ravel() - mean[rows]), rtol=0, atol=1e-8
    )
    after = cov - gain @ cov[rows]
    found = covariance_of(problem, mode)
    for i in range(len(hours)):
        block = after[2 * i : 2 * i + 2, 2 * i : 2 * i + 2]
        assert np.allclose(found[i], block, rtol=0, atol=1e-9)


def prior_covariance(theta, step_hours, last_hour):
    """Covariance of a late state where the fixes say nothing (sd 1e7 km)."""
    ends = np.array([0.0, last_hour])
    problem = problem_of(
        ends,
        np.zeros((2, 2)),
        isotropic([1e7, 1e7]),
        hours=np.arange(round(last_hour / step_hours) + 1) * step_hours,
        field=LINEAR_FIELD,
        layers=LINEAR_LAYERS,
        start=start_prior(sd_km=1.0),
    )
    return covariance_of(problem, mode_of(problem, theta, ends))[-1]


def test_eulers_stationary_variance():
    """s2 dt / (1 - (1 - a dt)^2) = 1.745454545 for a = 0.5, s = 1.2, dt = 0.7."""
    found = prior_covariance(linear_theta(1.2, 0.5, 0.5, 0.0), 0.7, 140.0)
    assert found == pytest.approx(1.745454545454545 * np.eye(2), abs=1e-9)


@pytest.mark.parametrize(
    ("pulls", "turn", "continuous"),
    [
        # Lyapunov: A S + S A' = -s2 I (scipy.linalg.solve_continuous_lyapunov)
        ((0.3, 0.9), 0.8, [[1.55604396, 0.31648352], [0.31648352, 1.08131868]]),
        # a rotation about the peak of a round preference leaves S = s2 / (2 a) I
        ((0.5, 0.5), 0.8, [[1.44, 0.0], [0.0, 1.44]]),
    ],
)
def test_preference_and_rotating_current_settle_to_their_law(pulls, turn, continuous):
    theta = linear_theta(1.2, *pulls, turn)
    A = np.array([[-pulls[0], -turn], [turn, -pulls[1]]])
    steps = 0.1 / 2.0 ** np.arange(4)
    found = []
    for step in steps:
        found.append(prior_covariance(theta, step, 30.0))
        discrete = scipy.linalg.solve_discrete_lyapunov(
            np.eye(2) + step * A, 1.44 * step * np.eye(2)
        )
        # exp(-2 * 0.5 * 30) = 1e-13 of the start is left, and 1e-14 for the fixes
        assert found[-1] == pytest.approx(discrete, abs=1e-9)
    # Euler's bias is a geometric series in step |A|^2 / trace A; three extrapolations leave its
    # fourth power, 0.9^4 times the product of the steps: 1e-6
    for power in range(1, len(steps)):
        found = [
            (2**power * fine - coarse) / (2**power - 1)
            for coarse, fine in itertools.pairwise(found)
        ]
    assert found[0] == pytest.approx(np.array(continuous), abs=3e-6)


# --- a dense twin of the whole engine (engine_twin.py) ---------------------------------------


@pytest.fixture(scope="module")
def twin():
    return Twin()


@pytest.fixture(scope="module")
def twin_mode(twin):
    return mode_of(twin.problem, THETA, twin.fix_hours)


def test_the_twin_is_hard_enough(twin, twin_mode):
    """Its Hessian bends: without the curvature of the drift the marginal is another one."""
    assert np.abs(np.asarray(twin_mode.evaluation.curvature)).max() > 0.05
    assert len(np.unique(twin.state)) == len(twin.state) - 1
    assert twin_mode.newton_steps > 2


def test_the_mode_and_the_marginal_likelihood(twin, twin_mode):
    flat = twin.mode(jnp.asarray(THETA), twin_mode.states)
    assert np.allclose(flat, twin_mode.states.ravel(), rtol=0, atol=1e-8)
    expected = float(twin.negative_log_marginal(jnp.asarray(THETA), flat))
    assert twin_mode.negative_log_marginal == pytest.approx(expected, abs=1e-8)


def test_gradient_and_hessian_of_the_states_away_from_the_mode(twin):
    rng = np.random.default_rng(9)
    states = np.cumsum(rng.normal(size=(twin.problem.n_states, 2)), axis=0)
    sightings, _ = twin.problem.observations.gathered(THETA[-1], twin.problem.padded)
    at = laplace._evaluate(twin.problem, jnp.asarray(THETA[:-1]), states, sightings)
    n = twin.problem.n_states
    flat, theta = jnp.asarray(states.ravel()), jnp.asarray(THETA)
    gradient, hessian = twin.gradient(flat, theta), twin.hessian(flat, theta)
    scale = float(jnp.abs(hessian).max())
    assert np.allclose(np.asarray(at.gradient)[:n].ravel(), gradient, rtol=0, atol=1e-9 * scale)
    assert np.allclose(dense(np.asarray(at.band)[:n]), hessian, rtol=0, atol=1e-9 * scale)


def test_the_gradient_of_the_marginal_likelihood_is_exact(twin, twin_mode):
    found = marginal_gradient(twin.problem, twin_mode).gradient
    expected = twin.marginal_gradient(jnp.asarray(THETA), jnp.asarray(twin_mode.states.ravel()))
    assert np.allclose(found, expected, rtol=1e-8, atol=1e-8)


def test_how_the_mode_moves_with_the_parameters(twin, twin_mode):
    found = mode_sensitivity(twin.problem, twin_mode)
    expected = twin.sensitivity(jnp.asarray(THETA), jnp.asarray(twin_mode.states.ravel()))
    assert np.allclose(found.reshape(expected.shape), expected, rtol=1e-8, atol=1e-8)


def test_the_covariance_of_the_states(twin, twin_mode):
    inverse = np.linalg.inv(twin.hessian(jnp.asarray(twin_mode.states.ravel()), jnp.asarray(THETA)))
    n = twin.problem.n_states
    expected = inverse.reshape(n, 2, n, 2)[np.arange(n), :, np.arange(n)]
    assert np.allclose(covariance_of(twin.problem, twin_mode), expected, rtol=0, atol=1e-10)


# --- finite differences on rough layers ------------------------------------------------------


@pytest.fixture(scope="module")
def full():
    """Two layers (one humped, one changing), a distance, a current, a scale, turned ellipses."""
    layers = (bumpy_layer(1), bumpy_layer(2, times=12), None)
    water = bumpy_layer(3, times=12, components=2)
    field = VelocityField(
        (
            layer_term(layers[0], centre=0.1, scale=0.9, humped=True),
            layer_term(layers[1]),
            distance_term(1.0, 2.0),
        ),
        fit_spline(water),
    )
    rng = np.random.default_rng(1)
    fix_hours = np.sort(rng.random(60) * 290)
    at_km = np.cumsum(rng.normal(size=(60, 2)) * 4, axis=0)
    problem = problem_of(
        fix_hours,
        at_km,
        random_covariances(rng, 60, 0.3),
        hours=time_grid(fix_hours, 0.5, np.arange(300.0)),
        field=field,
        layers=(layers, water),
    )
    theta = np.array([np.log(1.5), 20.0, -8.0, 15.0, -0.5, 0.7, 0.2])
    return problem, theta, mode_of(problem, theta, fix_hours)


NAMES = ["diffusion", "z", "z^2", "changing", "distance", "drift", "scale"]


def cells_of(states):
    """The layers' cell of every state; layers and current share one grid."""
    return np.floor((states + 118.0) / 4.0)


def quiet_step(full, j):
    """The longest step of 1e-3, 1e-3/4, ... over which no state leaves its cell.

    Third derivatives jump from cell to cell and the Hessian with them, so that the marginal
    likelihood has tiny steps; its gradient is the one between them.
    """
    _, theta, mode = full
    step = 1e-3 * max(1.0, abs(theta[j]))
    while True:
        moved = [find_moved(full, j, multiple * step).states for multiple in (-2, 2)]
        if all(np.array_equal(cells_of(m), cells_of(mode.states)) for m in moved):
            return step
        step /= 4.0


def find_moved(full, j, change):
    problem, theta, mode = full
    moved = theta.copy()
    moved[j] += change
    # a decrement of 1e-16: states to 1e-8, values to rounding
    return find_mode(problem, moved, mode.states, 1e-16)


@pytest.mark.parametrize("j", range(7), ids=NAMES)
def test_the_gradient_against_differences_of_the_marginal_likelihood(full, j):
    problem, _, mode = full
    step = quiet_step(full, j)
    v = {m: find_moved(full, j, m * step).negative_log_marginal for m in (-2, -1, 1, 2)}
    slope = (8.0 * (v[1] - v[-1]) - (v[2] - v[-2])) / (12.0 * step)
    # values near 1e3 round at 2e-13: over the step that is the rest of the tolerance
    assert marginal_gradient(problem, mode).gradient[j] == pytest.approx(
        slope, rel=1e-5, abs=1e-12 / step
    )


@pytest.mark.parametrize("j", range(7), ids=NAMES)
def test_the_sensitivity_against_differences_of_the_mode(full, j):
    problem, _, mode = full
    step = quiet_step(full, j)
    slope = (find_moved(full, j, step).states - find_moved(full, j, -step).states) / (2.0 * step)
    found = mode_sensitivity(problem, mode)[..., j]
    # the modes' own precision over the step
    assert np.abs(found - slope).max() < 1e-4 * np.abs(slope).max()


# --- fixes, padding, fallbacks ---------------------------------------------------------------


def test_fixes_of_one_moment_are_one_fix_of_their_joint_information():
    """The same problem with the duplicates a second apart and no diffusion to speak of."""
    rng = np.random.default_rng(5)
    hours = np.array([0.0, 1.0, 1.0, 1.0, 2.0])
    seen, covariance = rng.normal(size=(5, 2)), random_covariances(rng, 5)
    shared = problem_of(hours, seen, covariance, hours=[0.0, 1.0, 2.0], start=start_prior())
    theta = np.array([0.3, 0.2])
    mode = mode_of(shared, theta, hours)
    mean, cov = euler_normal([0.0, 1.0, 2.0], np.zeros((2, 2)), (0, 0), np.exp(0.3), [0, 0], 100.0)
    rows = (2 * np.array([0, 1, 1, 1, 2])[:, None] + [0, 1]).ravel()
    noise = np.exp(0.4) * scipy.linalg.block_diag(*covariance)
    expected = scipy.stats.multivariate_normal(mean[rows], cov[np.ix_(rows, rows)] + noise).logpdf(
        seen.ravel()
    )
    assert -mode.negative_log_marginal == pytest.approx(expected, abs=1e-9)


def test_the_order_of_the_fixes_does_not_matter(twin, twin_mode):
    order = np.random.default_rng(0).permutation(len(twin.fix_hours))
    turned = problem_of(
        twin.fix_hours[order],
        twin.at_km[order],
        twin.covariance[order],
        hours=twin.hours,
        field=TWIN_FIELD,
        layers=TWIN_LAYERS,
        start=twin.start,
    )
    mode = mode_of(turned, THETA, twin.fix_hours[order])
    assert mode.negative_log_marginal == pytest.approx(twin_mode.negative_log_marginal, abs=1e-9)
    assert np.allclose(
        marginal_gradient(turned, mode).gradient,
        marginal_gradient(twin.problem, twin_mode).gradient,
        rtol=0,
        atol=1e-8,
    )


def test_the_default_start_is_vague_around_the_earliest_fix():
    hours = np.array([2.0, 0.0, 1.0])
    problem = problem_of(hours, [[5, 5], [1, 2], [3, 3]], isotropic([1, 1, 1]), hours=[0, 1, 2])
    assert np.array_equal(problem.track.start.mean_km, [1.0, 2.0])
    assert float(problem.track.start.sd_km) == START_SD_KM


@pytest.mark.parametrize("states", [1023, 1024, 1025])
def test_padding_changes_nothing(states):
    """Around a compiled size: the same series with hours left out of the grid."""
    fix_hours = np.array([0.0, 10.0, states - 1.0])
    seen = np.array([[0.0, 1.0], [4.0, -3.0], [9.0, 2.0]])
    theta = np.array([0.1, 0.0])
    whole = problem_of(fix_hours, seen, isotropic([1, 2, 1]), hours=np.arange(float(states)))
    bare = problem_of(fix_hours, seen, isotropic([1, 2, 1]))
    modes = [mode_of(p, theta, fix_hours) for p in (whole, bare)]
    gradients = [
        marginal_gradient(p, m).gradient for p, m in zip((whole, bare), modes, strict=True)
    ]
    assert modes[0].negative_log_marginal == pytest.approx(
        modes[1].negative_log_marginal, rel=1e-11
    )
    assert gradients[0] == pytest.approx(gradients[1], rel=1e-9)
    assert whole.padded >= states


def ridge(strength=60.0, wave_km=3.0):
    """A steep wavy preference between fixes far apart: H is indefinite on the straight line."""
    layer = field_layer(
        lambda x, y, t: np.sin(x / wave_km) * np.cos(y / wave_km), nodes=201, spacing_km=0.5
    )
    return VelocityField((layer_term(layer),), None), ((layer,), None), strength


def test_gauss_newton_takes_over_where_the_hessian_is_indefinite(monkeypatch):
    field, layers, strength = ridge()
    fix_hours = np.array([0.0, 4.0, 8.0])
    problem = problem_of(
        fix_hours,
        [[-6.0, -5.0], [1.0, 3.0], [8.0, -2.0]],
        isotropic([0.5, 0.5, 0.5]),
        hours=np.arange(0, 8.01, 0.1),
        field=field,
        layers=layers,
    )
    fell_back = []
    plain = laplace._factor_guarded

    def watched(problem, at):
        made = plain(problem, at)
        fell_back.append(not made[2])
        return made

    monkeypatch.setattr(laplace, "_factor_guarded", watched)
    mode = mode_of(problem, [np.log(2.0), strength, 0.0], fix_hours)
    assert any(fell_back)
    assert not fell_back[-1]
    gradient = np.asarray(mode.evaluation.gradient)[: problem.n_states]
    # a decrement of 1e-12 with curvatures up to 1e3
    assert np.abs(gradient).max() < 1e-4
    assert np.linalg.eigvalsh(dense(mode.band)).min() > 0


@pytest.mark.parametrize(
    ("theta", "message"),
    [
        ([np.nan, 0.0], "not finite"),
        ([-800.0, 0.0], "not finite"),
        ([0.0, -400.0], "not finite|not settle|no step downhill"),
    ],
)
def test_no_mode_at_impossible_parameters(theta, message):
    hours = np.arange(4.0)
    problem = problem_of(hours, np.eye(4)[:, :2], isotropic(np.ones(4)))
    with pytest.raises(ModeNotFound, match=message), np.errstate(all="ignore"):
        mode_of(problem, theta, hours)


def test_no_mode_where_newton_may_not_iterate(monkeypatch, full):
    problem, theta, mode = full
    monkeypatch.setattr(laplace, "MAX_NEWTON", 1)
    with pytest.raises(ModeNotFound, match="did not settle in 1 steps"):
        find_mode(problem, theta, mode.states + 3.0)


# --- the grid of times -----------------------------------------------------------------------

hour_lists = st.lists(st.floats(0.0, 50.0), min_size=1, max_size=12)


@given(hour_lists, st.sampled_from([0.1, 0.25, 0.5, 1.0, 7.0]), hour_lists)
def test_the_grid_is_the_union_of_fixes_steps_and_reports(fixes, step_hours, reports):
    fixes, reports = 4e5 + np.array(fixes), 4e5 + np.array(reports)
    grid = time_grid(fixes, step_hours, reports)
    assert (np.diff(grid) > SAME_MOMENT_HOURS).all()
    assert grid[0] == fixes.min()
    assert fixes.max() - SAME_MOMENT_HOURS <= grid[-1] <= fixes.max()
    whole = np.arange(np.ceil(grid[0] / step_hours), grid[-1] / step_hours) * step_hours
    inside = reports[(reports >= grid[0]) & (reports <= grid[-1])]
    wanted = np.concatenate([fixes, whole, inside])
    assert np.diff(grid).max(initial=0.0) <= step_hours + SAME_MOMENT_HOURS
    apart = np.abs(wanted[:, None] - grid[None]).min(axis=1)
    assert apart.max() <= SAME_MOMENT_HOURS
    assert np.abs(grid[:, None] - wanted[None]).min(axis=1).max() == 0.0
    near = grid[nearest_state(grid, wanted)]
    assert np.allclose(np.abs(near - wanted), apart, rtol=0, atol=1e-12)


def test_many_fixes_a_second_are_not_one_moment():
    """Fixes 0.3 s apart for a minute: each within half a second of its own state."""
    fixes = 4e5 + np.arange(200) * 0.3 / 3600
    grid = time_grid(fixes, 0.5, np.zeros(0))
    apart = np.abs(grid[nearest_state(grid, fixes)] - fixes)
    assert apart.max() <= SAME_MOMENT_HOURS


def test_nearest_states():
    grid = np.array([0.0, 1.0, 3.0])
    times = np.array([-5.0, 0.4, 0.6, 1.9, 2.1, 9.0])
    assert nearest_state(grid, times).tolist() == [0, 0, 1, 1, 2, 2]
    assert nearest_state(np.array([7.0]), times).tolist() == [0] * 6


def test_compiled_sizes_are_few_and_close():
    sizes = {padded_size(n) for n in range(1, 300_001, 7)}
    assert len(sizes) < 32
    for n in (1, 1023, 1024, 1025, 5000, 8192, 8193, 26_000, 260_000):
        assert n <= padded_size(n) <= max(1024, 2.0 * n if n <= 8192 else 1.2 * n)


def test_the_first_guess_joins_the_fixes():
    hours = np.array([0.0, 0.5, 1.0, 2.0, 3.0])
    found = interpolated_start(
        hours, np.array([3.0, 0.0, 1.0]), np.array([[8.0, 0.0], [0.0, 0.0], [4.0, 2.0]]), 4
    )
    assert np.allclose(found[:, 0], [0, 2, 4, 6, 8])
    assert np.allclose(found[:, 1], [0, 1, 2, 1, 0])
    assert np.allclose(found[:, 2:], np.gradient(found[:, :2], hours, axis=0))


def test_a_field_without_amplitudes_is_no_parameter():
    problem = problem_of([0.0, 1.0, 2.0], np.eye(3)[:, :2], isotropic(np.ones(3)))
    assert problem.track.field is STILL
    assert problem.n_parameters == 2
    assert (problem.n_states, problem.dim, problem.padded) == (3, 2, 1024)
