"""The Laplace approximation of a track: mode of the states, marginal likelihood, exact gradient.

For parameters theta and states z with negative log joint density f(z; theta),

    -log p(y | theta) = f(m) + 1/2 log det H(m) - (n/2) log 2 pi,    m(theta) = argmin_z f,

(Tierney & Kadane 1986, J. Am. Stat. Assoc. 81:82), exact where f is quadratic in z. Its gradient,
through the mode, needs only the blocks V of inv(H) inside the band and one more solve:

    d/d theta = f_theta + 1/2 <V, H_theta> + a' g_theta,      H a = -gradient_z(1/2 <V, H>),

with g the gradient of f in z (the implicit-function form of Skaug & Fournier 2006, Comput. Stat.
Data Anal. 51:699).
"""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float

from trackfit.inference.banded import (
    BandInverse,
    Cholesky,
    NotPositiveDefinite,
    band_inverse,
    factor,
)
from trackfit.inference.observations import Observations
from trackfit.inference.process import (
    Evaluation,
    Sightings,
    Track,
    evaluate,
    gradient_sensitivity,
    parameter_gradient,
    trace_gradient,
)
from trackfit.motion import Motion
from trackfit.motion.velocity import Basis, evaluate_basis

MAX_NEWTON = 60
DECREMENT_TOLERANCE = 1e-9
"""Newton stops where the decrement g' inv(H) g (twice the gain still to be had) is below."""

MAX_HALVINGS = 25


class ModeNotFound(Exception):
    """No mode of the states was found at these parameters; the step that asked is rejected."""


@dataclass(frozen=True)
class TrackProblem:
    """One track on its time grid, ready for the engine.

    The parameter vector is [log motion parameters, amplitudes of the field, log error scale].
    """

    motion: Motion
    track: Track
    observations: Observations
    hours: Float[np.ndarray, " states"]

    @property
    def n_states(self) -> int:
        """States on the time grid, padding left out."""
        return len(self.hours)

    @property
    def padded(self) -> int:
        """States with padding: the size of all compiled arrays."""
        return self.track.steps.dt_hours.shape[0] + 1

    @property
    def dim(self) -> int:
        """Size of one state."""
        return 2 * self.motion.k

    @property
    def n_parameters(self) -> int:
        """Length of the parameter vector."""
        return len(self.motion.parameters) + self.track.field.n_amplitudes + 1


@dataclass(frozen=True)
class Mode:
    """The most probable states at fixed parameters, with the factored Hessian there."""

    theta: Float[np.ndarray, " parameters"]
    states: Float[np.ndarray, "states dim"]
    evaluation: Evaluation
    band: Float[np.ndarray, "states dim 2*dim"]
    cholesky: Cholesky
    observation_constant: float
    newton_steps: int

    @property
    def negative_log_marginal(self) -> float:
        """-log p(y | theta) by the Laplace approximation; factors of 2 pi of the states cancel."""
        return (
            float(self.evaluation.value) + self.observation_constant + 0.5 * self.cholesky.log_det
        )


def find_mode(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    start: Float[np.ndarray, "states dim"],
    tolerance: float = DECREMENT_TOLERANCE,
) -> Mode:
    """Newton's method with a line search; Gauss-Newton where the Hessian is not positive definite.

    Raises
    ------
    ModeNotFound
        The density is not finite, the line search fails or the Hessian at the end is indefinite.
    """
    sightings, constant = problem.observations.gathered(theta[-1], problem.padded)
    process_theta = jnp.asarray(theta[:-1])
    states = start
    at = _evaluate(problem, process_theta, states, sightings)
    if not np.isfinite(at.value):
        raise ModeNotFound("the density is not finite at the start")
    for iteration in range(MAX_NEWTON):
        gradient = np.asarray(at.gradient)[: problem.n_states]
        band, cholesky, exact = _factor_guarded(problem, at)
        step = -cholesky.solve(gradient.reshape(-1)).reshape(gradient.shape)
        decrement = -float(np.sum(gradient * step))
        if not np.isfinite(decrement):
            raise ModeNotFound("the Newton step is not finite")
        if decrement < tolerance:
            if not exact:
                raise ModeNotFound("the Hessian is indefinite where the gradient vanishes")
            return Mode(theta, states, at, band, cholesky, constant, iteration)
        states, at = _line_search(problem, process_theta, sightings, states, at, step, decrement)
    raise ModeNotFound(f"Newton's method did not settle in {MAX_NEWTON} steps")


def _evaluate(
    problem: TrackProblem, process_theta: jnp.ndarray, states: np.ndarray, sightings: Sightings
) -> Evaluation:
    z = padded_states(problem, states)
    basis = _basis(problem, z, order=2)
    return evaluate(problem.motion, process_theta, z, basis, problem.track, sightings)


def _basis(problem: TrackProblem, z: jnp.ndarray, order: int) -> Basis:
    return evaluate_basis(problem.track.field, problem.track.times, z[0], z[1], order)


def _factor_guarded(problem: TrackProblem, at: Evaluation) -> tuple[np.ndarray, Cholesky, bool]:
    """Factor the Hessian, or else the Gauss-Newton one; says whether it is the exact one."""
    band = np.asarray(at.band)[: problem.n_states]
    try:
        return band, factor(band), True
    except NotPositiveDefinite:
        curvature = np.asarray(at.curvature)[: problem.n_states]
        band = band.copy()
        band[:, 0, 0] += curvature[:, 0]
        band[:, 0, 1] += curvature[:, 1]
        band[:, 1, 0] += curvature[:, 2]
    try:
        return band, factor(band), False
    except NotPositiveDefinite:
        raise ModeNotFound("the Hessian is not finite") from None


def _line_search(
    problem: TrackProblem,
    process_theta: jnp.ndarray,
    sightings: Sightings,
    states: np.ndarray,
    at: Evaluation,
    step: np.ndarray,
    decrement: float,
) -> tuple[np.ndarray, Evaluation]:
    value = float(at.value)
    # below this the values of f differ by rounding only
    noise = 1e-12 * (1.0 + abs(value))
    length = 1.0
    for _ in range(MAX_HALVINGS):
        trial_states = states + length * step
        trial = _evaluate(problem, process_theta, trial_states, sightings)
        if float(trial.value) <= value - 1e-4 * length * decrement + noise:
            return trial_states, trial
        length *= 0.5
    raise ModeNotFound("no step downhill was found")


@dataclass(frozen=True)
class MarginalGradient:
    """Exact gradient of -log p(y | theta) and the covariance blocks it was made from."""

    gradient: Float[np.ndarray, " parameters"]
    inverse: BandInverse


def marginal_gradient(problem: TrackProblem, mode: Mode) -> MarginalGradient:
    """Gradient of the negative log marginal likelihood at a mode, in all parameters."""
    inverse = band_inverse(mode.band, mode.cholesky, problem.padded)
    process_theta = jnp.asarray(mode.theta[:-1])
    z = padded_states(problem, mode.states)
    basis = _basis(problem, z, order=3)
    common = (problem.motion, process_theta, z, basis, problem.track)
    pull = np.asarray(trace_gradient(*common, *inverse))[: problem.n_states]
    adjoint = -mode.cholesky.solve(pull.reshape(-1)).reshape(pull.shape)
    padded_adjoint = jnp.zeros_like(z).at[:, : problem.n_states].set(adjoint.T)
    process = parameter_gradient(*common, *inverse, padded_adjoint)
    covariance = np.moveaxis(np.asarray(inverse.covariance[:2, :2]), -1, 0)
    scale = problem.observations.scale_gradient(
        mode.theta[-1], mode.states[:, :2], covariance, adjoint[:, :2]
    )
    return MarginalGradient(np.append(np.asarray(process), scale), inverse)


def mode_sensitivity(
    problem: TrackProblem, mode: Mode
) -> Float[np.ndarray, "states dim parameters"]:
    """Derivative of the most probable states in the parameters: -inv(H) dg/dtheta."""
    z = padded_states(problem, mode.states)
    process = gradient_sensitivity(
        problem.motion, jnp.asarray(mode.theta[:-1]), z, _basis(problem, z, order=2), problem.track
    )
    slope = np.zeros((problem.n_states, problem.dim, problem.n_parameters))
    slope[..., :-1] = np.asarray(process)[: problem.n_states]
    slope[:, :2, -1] = problem.observations.scale_sensitivity(mode.theta[-1], mode.states[:, :2])
    flat = slope.reshape(problem.n_states * problem.dim, -1)
    return -mode.cholesky.solve(flat).reshape(slope.shape)


def padded_states(problem: TrackProblem, states: Float[np.ndarray, "states dim"]) -> jnp.ndarray:
    """States as the compiled functions take them: quantities first, the last state repeated."""
    extra = problem.padded - problem.n_states
    return jnp.asarray(np.pad(states, ((0, extra), (0, 0)), mode="edge").T)
