"""The Laplace engine against exact Gaussians, a dense twin of its own, and published series."""

import functools
import itertools

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg
import scipy.stats
import statsmodels.api
from engine_standins import (
    STILL,
    approximation_of,
    bumpy_layer,
    covariance_of,
    distance_term,
    field_layer,
    isotropic,
    layer_term,
    problem_of,
    random_covariances,
    start_prior,
)
from engine_twin import PACE, PERSISTENT_THETA, THETA, TWIN_FIELD, TWIN_LAYERS, Twin
from hypothesis import given
from hypothesis import strategies as st

from trackfit.inference import laplace
from trackfit.inference.banded import dense, factor
from trackfit.inference.grid import (
    CROWDED_SHARE,
    START_SD_KM,
    PacePrior,
    interpolated_start,
    nearest_state,
    padded_size,
    time_grid,
)
from trackfit.inference.laplace import ModeNotFound, find_mode, mode_sensitivity
from trackfit.inference.marginal import Warm, approximate
from trackfit.inference.problem import Point, evaluate_at
from trackfit.inference.process import linear_steps
from trackfit.layers.splines import fit_spline
from trackfit.motion import Diffusive, Persistent, VelocityField

SAME_MOMENT_HOURS = Diffusive.same_moment_hours


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
    found = approximation_of(problem, NILE_THETA, years)
    assert -found.negative_log_marginal / 2 == pytest.approx(published, abs=6e-6)


def test_grid_times_between_the_fixes_change_nothing(nile):
    plain = approximation_of(*with_theta(nile_problem(nile, 1e7)))
    finer = approximation_of(
        *with_theta(nile_problem(nile, 1e7, extra_hours=np.arange(0, 99, 0.125)))
    )
    assert finer.negative_log_marginal == pytest.approx(plain.negative_log_marginal, rel=1e-12)
    assert np.allclose(finer.mode.states[::8], plain.mode.states, rtol=0, atol=1e-8)


def with_theta(made):
    problem, years = made
    return problem, NILE_THETA, years


def diffuse_log_likelihood(flow, seen=slice(None)):
    """The exact diffuse likelihood as the limit of vague priors: log p + 1/2 log(2 pi P1).

    What a prior of variance P1 leaves out falls as 1/P1: extrapolated from two variances.
    """
    values = []
    for variance in (1e8, 1e9):
        found = approximation_of(*with_theta(nile_problem(flow, variance, seen=seen)))
        values.append(-found.negative_log_marginal / 2 + 0.5 * np.log(variance))
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
    found = approximation_of(problem, NILE_THETA, years)
    variance = covariance_of(found)[:, 0, 0]
    for t, mean, spread in ((30, 903.421103, 9715.005902), (70, 837.177324, 9715.005549)):
        # a prior of sd 1e5 instead of a diffuse one moves the second digit after the point by
        # 1e4 / 1e10 of the values: 1e-3 at most near the start, far less inside
        assert found.mode.states[t - 1] == pytest.approx(mean, abs=2e-5)
        assert variance[t - 1] == pytest.approx(spread, abs=2e-4)


def test_the_smoothed_nile(nile):
    """statsmodels' smoother with a diffuse start, recomputed for this project."""
    problem, years = nile_problem(nile, 1e10)
    found = approximation_of(problem, NILE_THETA, years)
    # a prior N(0, 1e10) draws the first level by 1100 * 4032 / 1e10 = 4e-4; further on by less
    assert found.mode.states[0] == pytest.approx(1111.66832, abs=6e-4)
    assert found.mode.states[1] == pytest.approx(1110.85766, abs=6e-4)
    assert found.mode.states[2] == pytest.approx(1105.26557, abs=4e-4)
    assert found.mode.states[-1] == pytest.approx(798.37029, abs=1e-5)
    assert np.allclose(found.mode.states[:, 0], found.mode.states[:, 1], rtol=0, atol=1e-9)
    covariance = covariance_of(found)
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
    grid = (
        hours
        if step_hours is None
        else time_grid(hours, step_hours, np.zeros(0), SAME_MOMENT_HOURS)
    )
    problem = problem_of(
        hours,
        np.stack([ORACLE["seen"]] * 2, axis=1),
        isotropic(ORACLE["sd"]),
        hours=grid,
        start=start_prior(sd_km=10.0),
    )
    found = approximation_of(problem, [np.log(2.0), 0.0], hours)
    assert -found.negative_log_marginal / 2 == pytest.approx(-14.2552821374, abs=1e-9)
    assert found.mode.newton_steps == 1


def bridge(first_km, last_km, sd_km):
    problem = problem_of(
        [0.0, 60.0],
        [[first_km, 10.0], [last_km, 2.0]],
        isotropic(sd_km),
        hours=np.arange(61.0),
        start=start_prior(sd_km=1e7),
    )
    found = approximation_of(problem, [np.log(10.0), 0.0], [0.0, 60.0])
    return found.mode.states[15], covariance_of(found)[15]


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
    hours = time_grid(fix_hours, 0.25, np.zeros(0), SAME_MOMENT_HOURS)
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
    found = approximation_of(problem, theta, fix_hours)
    mean, cov = euler_normal(hours, A, push, 1.2, [1.0, -2.0], 9.0)
    at = nearest_state(hours, fix_hours)
    rows = (2 * at[:, None] + [0, 1]).ravel()
    noise = scipy.linalg.block_diag(*(1.3**2 * covariance))
    seen_cov = cov[np.ix_(rows, rows)] + noise
    expected = scipy.stats.multivariate_normal(mean[rows], seen_cov).logpdf(seen.ravel())
    # the layers reach 80 km where splines round at 1e-14
    assert -found.negative_log_marginal == pytest.approx(expected, abs=1e-8)
    gain = cov[:, rows] @ np.linalg.inv(seen_cov)
    assert np.allclose(
        found.mode.states.ravel(), mean + gain @ (seen.ravel() - mean[rows]), rtol=0, atol=1e-8
    )
    after = cov - gain @ cov[rows]
    spread = covariance_of(found)
    for i in range(len(hours)):
        block = after[2 * i : 2 * i + 2, 2 * i : 2 * i + 2]
        assert np.allclose(spread[i], block, rtol=0, atol=1e-9)


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
    return covariance_of(approximation_of(problem, theta, ends))[-1]


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


@pytest.fixture(scope="module", params=["diffusive", "persistent"])
def twin(request):
    return Twin(persistent=request.param == "persistent")


@pytest.fixture(scope="module")
def theta(twin):
    return PERSISTENT_THETA if twin.persistent else THETA


@pytest.fixture(scope="module")
def twin_found(twin, theta):
    return approximation_of(twin.problem, theta, twin.fix_hours, 1e-16)


@pytest.fixture(scope="module")
def flat(twin, theta, twin_found):
    """The twin's own mode, by dense Newton steps from the engine's."""
    return twin.mode(jnp.asarray(theta), twin_found.mode.states)


def test_the_twin_is_hard_enough(twin, twin_found):
    """Its Hessian bends: without the curvature of the drift the marginal is another one."""
    mode = twin_found.mode
    plain = factor(mode.point.band(twin.problem, mode.sites, exact=False))
    # a million times the tolerances below
    assert abs(plain.log_det - mode.cholesky.log_det) > 0.01
    assert np.abs(np.asarray(mode.point.evaluation.curvature)).max() > 0.04
    assert len(np.unique(twin.state)) == len(twin.state) - 1
    assert twin_found.mode.newton_steps > 2
    if twin.persistent:
        assert set(twin.spell) == {0, 1, 2}
        assert np.array_equal(np.asarray(twin.problem.track.steps.spell)[: len(twin.spell)],
                              twin.spell)  # fmt: skip


def test_the_mode_and_the_marginal_likelihood(twin, theta, twin_found, flat):
    assert np.allclose(flat, twin_found.mode.states.ravel(), rtol=0, atol=1e-8)
    expected = float(twin.negative_log_marginal(jnp.asarray(theta), flat))
    assert twin_found.negative_log_marginal == pytest.approx(expected, abs=1e-8)


def test_gradient_and_hessian_of_the_states_away_from_the_mode(twin, theta):
    rng = np.random.default_rng(9)
    states = np.cumsum(rng.normal(size=(twin.problem.n_states, twin.problem.dim)), axis=0)
    sites = twin.problem.observations.gaussian_sites(twin.problem.error_parameters(theta)[0])
    point = evaluate_at(twin.problem, theta, states)
    flat, theta = jnp.asarray(states.ravel()), jnp.asarray(theta)
    gradient, hessian = twin.gradient(flat, theta), twin.hessian(flat, theta)
    scale = float(jnp.abs(hessian).max())
    found = point.full_gradient(twin.problem, sites).ravel()
    assert np.allclose(found, gradient, rtol=0, atol=1e-9 * scale)
    assert np.allclose(dense(point.band(twin.problem, sites)), hessian, rtol=0, atol=1e-9 * scale)


def test_the_gradient_of_the_marginal_likelihood_is_exact(twin, theta, twin_found, flat):
    expected = twin.marginal_gradient(jnp.asarray(theta), flat)
    assert np.allclose(twin_found.gradient(), expected, rtol=1e-8, atol=1e-8)


def test_how_the_mode_moves_with_the_parameters(twin, theta, twin_found, flat):
    found = mode_sensitivity(twin.problem, twin_found.mode)
    expected = twin.sensitivity(jnp.asarray(theta), flat)
    assert np.allclose(found.reshape(expected.shape), expected, rtol=1e-8, atol=1e-8)


def dense_covariances(twin, theta, flat):
    """The inverse Hessian, indexed [state, quantity, state, quantity]."""
    n, dim = twin.problem.n_states, twin.problem.dim
    return np.linalg.inv(twin.hessian(flat, jnp.asarray(theta))).reshape(n, dim, n, dim)


def test_the_covariance_of_the_states(twin, theta, twin_found, flat):
    n = np.arange(twin.problem.n_states)
    expected = dense_covariances(twin, theta, flat)[n, :, n]
    assert np.allclose(covariance_of(twin_found), expected, rtol=0, atol=1e-10)
    at = np.array([3, 0, 7])
    assert np.allclose(twin_found.spread.covariance_at(at), expected[at, :2, :2], atol=1e-10)


def test_the_covariance_of_the_linearised_residuals(twin, theta, twin_found, flat):
    """Of r = z' - J z with itself and with z, from neighbours in the dense inverse."""
    whole = dense_covariances(twin, theta, flat)
    problem, point = twin.problem, twin_found.mode.point
    linear = linear_steps(problem.motion, problem.process_parameters(theta), point.z, point.basis,
                          problem.track)  # fmt: skip
    steps = twin_found.spread.steps
    for i in range(problem.n_states - 1):
        J = np.asarray(linear.jacobian)[..., i]
        before, after = whole[i, :, i], whole[i + 1, :, i + 1]
        along = whole[i + 1, :, i]
        cross = along - J @ before
        residual = after - J @ along.T - along @ J.T + J @ before @ J.T
        assert np.allclose(steps.cross[..., i], cross, rtol=0, atol=1e-10)
        assert np.allclose(steps.residual[..., i], residual, rtol=0, atol=1e-10)


def test_the_adjoint_corrects_the_mode_to_the_mean(twin, theta, twin_found, flat):
    """-inv(H) times the gradient of 1/2 log det H in the states (Tierney, Kass & Kadane 1989)."""
    inverse = jnp.linalg.inv(twin.hessian(flat, jnp.asarray(theta)))
    slope = 0.5 * jnp.einsum("ij,ijk->k", inverse, twin.third(flat, jnp.asarray(theta))[0])
    assert float(jnp.abs(slope).max()) > 0.01
    expected = -(inverse @ slope).reshape(twin_found.spread.adjoint.shape)
    assert np.allclose(twin_found.spread.adjoint, expected, rtol=1e-8, atol=1e-9)


# --- finite differences on rough layers ------------------------------------------------------

FULL_THETA = {
    "diffusive": [np.log(1.5), 20.0, -8.0, 15.0, -0.5, 0.7, 0.2],
    "persistent": [np.log(1.5), np.log(3.0), 20.0, -8.0, 15.0, -0.5, 0.7, 0.2],
}
NAMES = ["z", "z^2", "changing", "distance", "drift", "scale"]
CHECKED = [
    *(("diffusive", i, name) for i, name in enumerate(["diffusion", *NAMES])),
    *(("persistent", i, name) for i, name in enumerate(["speed", "persistence", *NAMES])),
    *(("persistent", i, f"spell {i - 7}") for i in (8, 12, 21)),
]
EACH = pytest.mark.parametrize(
    ("kind", "j"), [c[:2] for c in CHECKED], ids=[f"{c[0]} {c[2]}" for c in CHECKED]
)


@functools.cache
def full(kind):
    """Two layers (one humped, one changing), a distance, a current, a scale, turned ellipses.

    Persistent motion has fourteen spells of a pace of their own besides.
    """
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
    # no step under 0.1 h: at one of 7 s persistent motion's values round at 2e-7, and their
    # differences say nothing
    fix_hours = np.sort(np.round(rng.random(60) * 290, 1))
    at_km = np.cumsum(rng.normal(size=(60, 2)) * 4, axis=0)
    persistent = kind == "persistent"
    motion = Persistent() if persistent else Diffusive()
    problem = problem_of(
        fix_hours,
        at_km,
        random_covariances(rng, 60, 0.3),
        hours=time_grid(fix_hours, 0.5, np.arange(300.0), motion.same_moment_hours),
        field=field,
        layers=(layers, water),
        motion=motion,
        pace=PacePrior(0.5, 20.0, 40.0) if persistent else None,
    )
    spells = problem.pace.spells if persistent else 0
    theta = np.concatenate([FULL_THETA[kind], rng.normal(size=spells)])
    assert len(theta) == problem.n_parameters
    return problem, theta, approximation_of(problem, theta, fix_hours, 1e-14)


def find_moved(kind, j, change):
    problem, theta, found = full(kind)
    moved = theta.copy()
    moved[j] += change
    # a decrement of 1e-16: states to 1e-8, values to rounding
    return approximate(problem, moved, Warm(found.mode.states), 1e-16)


def five_point(function, step):
    v = {m: function(m * step) for m in (-2, -1, 1, 2)}
    return (8.0 * (v[1] - v[-1]) - (v[2] - v[-2])) / (12.0 * step)


@EACH
def test_the_gradient_against_differences_of_the_marginal_likelihood(kind, j):
    """Everything at once; where a path crosses a cell only the second derivative jumps."""
    _, theta, found = full(kind)
    step = 1e-4 * max(1.0, abs(theta[j]))
    slope = five_point(lambda d: find_moved(kind, j, d).negative_log_marginal, step)
    # values near 1e3 round at 2e-13: over the step that is the rest of the tolerance
    assert found.gradient()[j] == pytest.approx(slope, rel=1e-6, abs=1e-12 / step)


@EACH
def test_the_sensitivity_against_differences_of_the_mode(kind, j):
    problem, theta, found = full(kind)
    step = 1e-3 * max(1.0, abs(theta[j]))
    slope = five_point(lambda d: find_moved(kind, j, d).mode.states, step)
    expected = mode_sensitivity(problem, found.mode)[..., j]
    # the modes' own precision over the step
    assert np.abs(expected - slope).max() < 1e-5 * np.abs(slope).max()


# --- fixes, padding, fallbacks ---------------------------------------------------------------


def test_fixes_of_one_moment_are_one_fix_of_their_joint_information():
    """The same problem with the duplicates a second apart and no diffusion to speak of."""
    rng = np.random.default_rng(5)
    hours = np.array([0.0, 1.0, 1.0, 1.0, 2.0])
    seen, covariance = rng.normal(size=(5, 2)), random_covariances(rng, 5)
    shared = problem_of(hours, seen, covariance, hours=[0.0, 1.0, 2.0], start=start_prior())
    theta = np.array([0.3, 0.2])
    found = approximation_of(shared, theta, hours)
    mean, cov = euler_normal([0.0, 1.0, 2.0], np.zeros((2, 2)), (0, 0), np.exp(0.3), [0, 0], 100.0)
    rows = (2 * np.array([0, 1, 1, 1, 2])[:, None] + [0, 1]).ravel()
    noise = np.exp(0.4) * scipy.linalg.block_diag(*covariance)
    expected = scipy.stats.multivariate_normal(mean[rows], cov[np.ix_(rows, rows)] + noise).logpdf(
        seen.ravel()
    )
    assert -found.negative_log_marginal == pytest.approx(expected, abs=1e-9)


def test_the_order_of_the_fixes_does_not_matter(twin, theta, twin_found):
    order = np.random.default_rng(0).permutation(len(twin.fix_hours))
    turned = problem_of(
        twin.fix_hours[order],
        twin.at_km[order],
        twin.covariance[order],
        hours=twin.hours,
        field=TWIN_FIELD,
        layers=TWIN_LAYERS,
        start=twin.start,
        motion=twin.motion,
        pace=PACE if twin.persistent else None,
    )
    found = approximation_of(turned, theta, twin.fix_hours[order], 1e-16)
    assert found.negative_log_marginal == pytest.approx(twin_found.negative_log_marginal, abs=1e-9)
    assert np.allclose(found.gradient(), twin_found.gradient(), rtol=0, atol=1e-8)


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
    one, other = (approximation_of(p, theta, fix_hours) for p in (whole, bare))
    assert one.negative_log_marginal == pytest.approx(other.negative_log_marginal, rel=1e-11)
    assert one.gradient() == pytest.approx(other.gradient(), rel=1e-9)
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
    plain = Point.factored

    def watched(point, problem, sites):
        made = plain(point, problem, sites)
        fell_back.append(not made[2])
        return made

    monkeypatch.setattr(Point, "factored", watched)
    found = approximation_of(problem, [np.log(2.0), strength, 0.0], fix_hours)
    assert any(fell_back)
    assert not fell_back[-1]
    gradient = found.mode.point.full_gradient(problem, found.mode.sites)
    # a decrement of 1e-12 with curvatures up to 1e3
    assert np.abs(gradient).max() < 1e-4
    assert np.linalg.eigvalsh(dense(found.mode.band)).min() > 0


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
        approximation_of(problem, theta, hours)


def test_no_mode_where_newton_may_not_iterate(monkeypatch):
    problem, theta, found = full("diffusive")
    monkeypatch.setattr(laplace, "MAX_NEWTON", 1)
    with pytest.raises(ModeNotFound, match="did not settle in 1 steps"):
        find_mode(problem, theta, found.mode.sites, found.mode.states + 3.0)


# --- the grid of times -----------------------------------------------------------------------

hour_lists = st.lists(st.floats(0.0, 50.0), min_size=1, max_size=12)
ROUNDING_HOURS = 1e-9
"""Hours since 1970 hold 6e-11 h."""


@given(
    hour_lists,
    st.sampled_from([0.1, 0.25, 0.5, 1.0, 7.0]),
    st.sampled_from([0.2, 1.0, 4.0]),
    st.sampled_from([Diffusive, Persistent]),
)
def test_the_grid_holds_fixes_and_reports_and_the_steps_that_do_not_crowd_them(
    fixes, step_hours, report_every, motion
):
    fixes = 4e5 + np.array(fixes)
    same = motion.same_moment_hours
    first, last = fixes.min(), fixes.max()
    reports = np.arange(np.ceil(first / report_every), last / report_every) * report_every
    grid = time_grid(fixes, step_hours, reports, same)
    crowded = max(CROWDED_SHARE * step_hours, same)
    steps = np.arange(np.ceil(first / step_hours), np.floor(last / step_hours) + 1) * step_hours
    assert (grid[0], grid[-1]) == (first, pytest.approx(last, abs=same))
    assert np.diff(grid).min(initial=np.inf) >= min(same, report_every) - ROUNDING_HOURS

    def away(times, others):
        return np.abs(np.subtract.outer(times, others)).min(axis=1, initial=np.inf)

    # nothing is made up; fixes and reports are there or a moment away
    assert away(grid, np.concatenate([fixes, reports, steps])).max() == 0.0
    assert away(fixes, grid).max() < same
    assert away(reports, grid).max(initial=0.0) < same
    # a report that is not there is at a fix; a step that is not there crowds a fix or a report
    missing = reports[away(reports, grid) > 0.0]
    assert away(missing, fixes).max(initial=0.0) < same
    left_out = steps[away(steps, grid) > 0.0]
    held = np.concatenate([fixes, reports])
    assert away(left_out, held).max(initial=0.0) < crowded + ROUNDING_HOURS
    # a step is left out on each side of two held times at most
    assert np.diff(grid).max(initial=0.0) < step_hours + 2.0 * crowded + ROUNDING_HOURS


def test_the_longest_step_is_one_and_a_fifth():
    """Held times just before and just after a step's two ends leave both ends out."""
    grid = time_grid(np.array([-0.09, 1.09]), 1.0, np.zeros(0), SAME_MOMENT_HOURS)
    assert grid.tolist() == [-0.09, 1.09]


def test_many_fixes_a_second_are_not_one_moment():
    """Fixes 0.3 s apart for a minute: each within half a second of its own state."""
    fixes = 4e5 + np.arange(200) * 0.3 / 3600
    grid = time_grid(fixes, 0.5, np.zeros(0), SAME_MOMENT_HOURS)
    apart = np.abs(grid[nearest_state(grid, fixes)] - fixes)
    assert apart.max() <= SAME_MOMENT_HOURS
    assert len(grid) == 100


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
