"""Persistent motion: its exact step, its limits, and a linear field against dense normals."""

import itertools

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats
from engine_standins import (
    approximation_of,
    bumpy_layer,
    covariance_of,
    field_layer,
    isotropic,
    layer_term,
    problem_of,
    random_covariances,
    start_prior,
)
from scipy.linalg import block_diag, expm, inv

from trackfit.inference.grid import PacePrior, nearest_state, time_grid
from trackfit.motion import Diffusive, Persistent, VelocityField
from trackfit.motion.persistent import SERIES_BELOW, position_growth

RATIOS = [1e-6, 1e-5, 1e-4, 1e-3, 0.01, 0.0999, 0.1, 0.1001, 0.5, 1.0, 3.0, 10.0, 100.0, 1e3]


def transition(speed, tau, dt):
    """F, G, Q of one step and log det Q, as numpy."""
    F, G, W, log_det = Persistent().transition(
        jnp.log(jnp.asarray([speed, tau])), jnp.asarray([float(dt)])
    )
    F, W = (np.array([[np.ravel(e + jnp.zeros(1))[0] for e in row] for row in m]) for m in (F, W))
    return F, np.array([g[0] for g in G]), inv(W), W, float(log_det[0])


def van_loan(speed, tau, dt):
    """F, G and Q by the matrix exponential (Van Loan 1978, IEEE Trans. Autom. Control 23:395).

    In units of tau and w tau, where the exponential is well scaled; u is a third, constant state.
    """
    A = np.array([[0.0, 1.0], [0.0, -1.0]])
    noise = np.diag([0.0, 1.0])
    d = dt / tau
    both = expm(d * np.block([[-A, noise], [np.zeros((2, 2)), A.T]]))
    F = both[2:, 2:].T
    carried = expm(d * np.array([[0.0, 1.0, 0.0], [0.0, -1.0, 1.0], [0.0, 0.0, 0.0]]))
    unit = np.diag([speed * tau, speed])
    turn = np.diag([tau, 1.0])
    Q = F @ both[:2, 2:]
    return turn @ F @ inv(turn), turn @ carried[:2, 2], unit @ Q @ unit


@pytest.mark.parametrize("ratio", [r for r in RATIOS if r <= 10.0])
def test_the_step_is_the_matrix_exponential(ratio):
    speed, tau = 1.7, 2.3
    F, G, Q, W, log_det = transition(speed, tau, ratio * tau)
    expected_F, expected_G, expected_Q = van_loan(speed, tau, ratio * tau)
    assert np.allclose(F, expected_F, rtol=1e-12, atol=0)
    # dt - tau (1 - e^-d) cancels: 1e-16 of tau is left of d^2 tau / 2
    assert np.allclose(G, expected_G, rtol=1e-12, atol=1e-15 * tau)
    assert G[1] == pytest.approx(expected_G[1], rel=1e-10)
    # scipy's exponential forms q_xx ~ d^3/3 from numbers near d: 1e-16 / d^2 of it, relatively
    slack = 1e-11 + 1e-15 / ratio**2
    for i, j in ((0, 0), (0, 1), (1, 1)):
        assert Q[i, j] == pytest.approx(expected_Q[i, j], rel=slack)
    assert log_det == pytest.approx(np.log(Q[0, 0] * Q[1, 1] - Q[0, 1] ** 2), abs=1e-9)
    assert W[0, 1] == W[1, 0]


def noise_by_quadrature(speed, tau, dt):
    """Q as the integral of what noise leaves at the end: no cancellation at any step."""
    nodes, weights = np.polynomial.legendre.leggauss(60)
    # most of the velocity's variance comes from the last few tau: cut there
    edges = np.unique(np.clip(np.array([0, 1, 3, 10, 40, 1e9]) * tau, 0.0, dt))
    Q = np.zeros((2, 2))
    for low, high in itertools.pairwise(edges):
        back = 0.5 * (high + low) + 0.5 * (high - low) * nodes
        reach = np.stack([-tau * np.expm1(-back / tau), np.exp(-back / tau)])
        Q += (reach * weights * 0.5 * (high - low) * speed**2 / tau) @ reach.T
    return Q


@pytest.mark.parametrize("ratio", RATIOS)
def test_the_noise_of_a_step_from_a_millionth_to_a_thousand_persistence_times(ratio):
    speed, tau = 1.7, 2.3
    _, _, Q, W, log_det = transition(speed, tau, ratio * tau)
    expected = noise_by_quadrature(speed, tau, ratio * tau)
    assert np.allclose(Q, expected, rtol=1e-10, atol=0)
    scale = np.sqrt(np.diag(expected))
    unit = expected / np.outer(scale, scale)
    assert np.allclose(W * np.outer(scale, scale), inv(unit), rtol=1e-10, atol=0)
    assert log_det == pytest.approx(np.linalg.slogdet(unit)[1] + 2 * np.log(scale).sum(), abs=1e-10)


def test_the_two_forms_of_the_growth_meet():
    near = SERIES_BELOW * (1.0 + np.array([-1e-9, 1e-9]))
    below, above = np.asarray(position_growth(jnp.asarray(near)))
    # the closed form cancels to 1e-16 / 3e-4; over the gap the growth itself moves by 6e-9
    assert above / below - 1.0 == pytest.approx(3 * 2e-9, rel=0.1)


@pytest.mark.parametrize("tau", [1e-2, 1e-4, 1e-6])
def test_without_persistence_the_motion_is_diffusive(tau):
    """w sqrt(tau) = sigma fixed: position steps of variance sigma^2 dt, less 3/2 tau of it."""
    sigma, dt = 1.3, 0.5
    F, G, Q, _, _ = transition(sigma / np.sqrt(tau), tau, dt)
    diffusive = Diffusive().transition(jnp.log(jnp.asarray([sigma])), jnp.asarray([dt]))
    assert Q[0, 0] == pytest.approx((1 - 1.5 * tau / dt) / float(diffusive.W[0][0][0]), rel=1e-9)
    assert G[0] == pytest.approx(float(diffusive.G[0][0]) - tau, rel=1e-9)
    assert F[0, 0] == 1.0
    assert F[0, 1] == pytest.approx(tau)


def test_without_persistence_the_likelihood_is_the_diffusive_one():
    rng = np.random.default_rng(1)
    hours = np.sort(rng.uniform(0, 30, 20))
    seen = np.cumsum(rng.normal(size=(20, 2)), axis=0)
    covariance = random_covariances(rng, 20)
    apart = []
    for tau in (1e-3, 1e-4):
        args = (hours, seen, covariance)
        plain = approximation_of(problem_of(*args), [np.log(1.3), 0.1], hours)
        theta = [np.log(1.3 / np.sqrt(tau)), np.log(tau), 0.1]
        swift = approximation_of(problem_of(*args, motion=Persistent()), theta, hours)
        apart.append(swift.negative_log_marginal - plain.negative_log_marginal)
    # the difference is of the order of tau over the steps
    assert abs(apart[1]) < 5e-3
    assert apart[1] == pytest.approx(apart[0] / 10.0, rel=0.1)


# --- a linear field against a dense normal ----------------------------------------------------

X_LAYER = field_layer(lambda x, y, t: x)
Y_LAYER = field_layer(lambda x, y, t: y)
FIELD = VelocityField(tuple(layer_term(part, humped=True) for part in (X_LAYER, Y_LAYER)), None)
PULL, PUSH = np.array([0.3, 0.9]), np.array([0.7, -0.4])
SPEED, TAU, SCALE = 1.4, 2.5, 1.3
PACE = PacePrior(0.6, 5.0, 10.0)
SPELLS = np.array([0.8, -1.2, 0.5])


def dense_normal(hours, pace):
    """Mean and covariance of all states stacked (x, y, vx, vy), the start included.

    The first position is N((1, -2), 3^2); the first velocity spreads around the field there by
    w^2/2 an axis, times the square of the first spell's pace.
    """
    n = len(hours)
    pull, push = np.diag(PULL), PUSH
    lift = np.vstack([np.eye(2), -pull])
    mean = [np.concatenate([[1.0, -2.0], push - pull @ [1.0, -2.0]])]
    cov = np.zeros((4 * n, 4 * n))
    own = block_diag(np.zeros((2, 2)), 0.5 * SPEED**2 * pace[0] ** 2 * np.eye(2))
    cov[:4, :4] = 9.0 * lift @ lift.T + own
    for i, dt in enumerate(np.diff(hours)):
        F, G, _ = van_loan(SPEED, TAU, dt)
        Q = noise_by_quadrature(SPEED, TAU, dt) * pace[i] ** 2
        F, Q, G = np.kron(F, np.eye(2)), np.kron(Q, np.eye(2)), np.kron(G[:, None], np.eye(2))
        step = F - G @ np.hstack([pull, np.zeros((2, 2))])
        mean.append(step @ mean[-1] + G @ push)
        here, after = slice(4 * i, 4 * i + 4), slice(4 * i + 4, 4 * i + 8)
        cov[after, : 4 * i + 4] = step @ cov[here, : 4 * i + 4]
        cov[: 4 * i + 4, after] = cov[after, : 4 * i + 4].T
        cov[after, after] = step @ cov[here, here] @ step.T + Q
    return np.concatenate(mean), cov


@pytest.mark.parametrize("paced", [False, True])
def test_a_linear_field_against_a_dense_normal(paced):
    """Pull, push, error ellipses, scale, spells and the start: all from scipy's density."""
    rng = np.random.default_rng(3)
    fix_hours = np.sort(np.round(rng.uniform(0, 12, 14), 1))
    fix_hours[-1] = 12.0
    hours = time_grid(fix_hours, 0.25, np.zeros(0), Persistent.same_moment_hours)
    covariance = random_covariances(rng, 14)
    seen = rng.normal(size=(14, 2)) * 4
    problem = problem_of(
        fix_hours,
        seen,
        covariance,
        hours=hours,
        field=FIELD,
        layers=((X_LAYER, Y_LAYER), None),
        start=start_prior(1.0, -2.0, 3.0),
        motion=Persistent(),
        pace=PACE if paced else None,
    )
    amplitudes = [PUSH[0], -0.5 * PULL[0], PUSH[1], -0.5 * PULL[1]]
    theta = [np.log(SPEED), np.log(TAU), *amplitudes, np.log(SCALE)]
    pace = np.ones(len(hours) - 1)
    if paced:
        theta += SPELLS.tolist()
        apart = PACE.spell_hours * np.abs(np.subtract.outer(np.arange(3), np.arange(3)))
        prior = PACE.log_sd**2 * np.exp(-apart / PACE.alike_hours)
        spell = ((0.5 * (hours[1:] + hours[:-1]) - hours[0]) // 5.0).astype(int)
        assert set(spell) == {0, 1, 2}
        pace = np.exp(np.linalg.cholesky(prior) @ SPELLS)[spell]
    found = approximation_of(problem, theta, fix_hours)
    mean, cov = dense_normal(hours, pace)
    at = nearest_state(hours, fix_hours)
    rows = (4 * at[:, None] + [0, 1]).ravel()
    seen_cov = cov[np.ix_(rows, rows)] + block_diag(*(SCALE**2 * covariance))
    expected = scipy.stats.multivariate_normal(mean[rows], seen_cov).logpdf(seen.ravel())
    # steps of 0.05 h: precisions near 1e5, values round at 1e-11 of them
    assert -found.negative_log_marginal == pytest.approx(expected, abs=1e-8)
    gain = cov[:, rows] @ inv(seen_cov)
    smoothed = mean + gain @ (seen.ravel() - mean[rows])
    assert np.allclose(found.mode.states.ravel(), smoothed, rtol=0, atol=1e-8)
    after = cov - gain @ cov[rows]
    blocks = after.reshape(len(hours), 4, len(hours), 4)
    i = np.arange(len(hours))
    assert np.allclose(covariance_of(found), blocks[i, :, i], rtol=0, atol=1e-9)


def test_the_start_of_a_track_swims_with_the_field():
    """Two vague fixes: the velocity's prior mean is the field, its variance w^2/2 an axis."""
    flat = field_layer(lambda x, y, t: 0.6 * x - 0.2 * y)
    problem = problem_of(
        [0.0, 1.0],
        np.zeros((2, 2)),
        isotropic([1e6, 1e6]),
        field=VelocityField((layer_term(flat),), None),
        layers=((flat,), None),
        start=start_prior(sd_km=1.0),
        motion=Persistent(),
    )
    found = approximation_of(problem, [np.log(1.8), np.log(3.0), 2.0, 0.0], [0.0, 1.0])
    assert np.allclose(found.mode.states[0], [0.0, 0.0, 1.2, -0.4], atol=1e-8)
    assert covariance_of(found)[0] == pytest.approx(np.diag([1.0, 1.0, 1.62, 1.62]), abs=1e-8)


def test_a_step_of_five_seconds_is_still_a_number():
    """The shortest step the grid allows, between hours: values, gradients, covariances."""
    layer = bumpy_layer(1)
    least = Persistent.same_moment_hours
    fix_hours = np.array([0.0, 5.0, 5.0 + 1.001 * least, 20.0])
    hours = time_grid(fix_hours, 0.5, np.arange(20.0), least)
    assert np.diff(hours).min() == pytest.approx(1.001 * least, rel=1e-6)
    problem = problem_of(
        fix_hours,
        [[0, 0], [4, 3], [4.1, 3.1], [9, -2]],
        isotropic(np.full(4, 0.3)),
        hours=hours,
        field=VelocityField((layer_term(layer),), None),
        layers=((layer,), None),
        motion=Persistent(),
    )
    theta = np.array([np.log(1.2), np.log(2.0), 5.0, 0.1])
    found = approximation_of(problem, theta, fix_hours)
    slopes = found.gradient()
    for j in range(4):
        step = np.zeros(4)
        step[j] = 0.01
        ahead, behind = (
            approximation_of(problem, theta + sign * step, fix_hours).negative_log_marginal
            for sign in (1, -1)
        )
        # values round at 1e-6 over so short a step, and differences are of second order
        assert slopes[j] == pytest.approx((ahead - behind) / 0.02, rel=1e-3, abs=1e-3)
    assert np.linalg.eigvalsh(covariance_of(found)).min() > 0.0
