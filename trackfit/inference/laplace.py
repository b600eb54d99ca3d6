"""The Laplace approximation of a track: mode of the states, marginal likelihood, exact gradient.

For parameters theta and states z with negative log joint density f(z; theta),

    -log p(y | theta) = f(m) + 1/2 log det H(m) - (n/2) log 2 pi,    m(theta) = argmin_z f,

(Tierney & Kadane 1986, J. Am. Stat. Assoc. 81:82), exact where f is quadratic in z. Its gradient,
through the mode, needs only the blocks V of inv(H) inside the band and one more solve:

    d/d theta = f_theta + 1/2 <V, H_theta> + a' g_theta,      H a = -gradient_z(1/2 <V, H>),

with g the gradient of f in z (the implicit-function form of Skaug & Fournier 2006, Comput. Stat.
Data Anal. 51:699). The adjoint a has a meaning of its own: to first order m + a is the posterior
mean of the states (Tierney, Kass & Kadane 1989, J. Am. Stat. Assoc. 84:710).
"""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.banded import Cholesky, NotPositiveDefinite, factor, reversed_band
from trackfit.inference.derivatives import (
    StepSpread,
    gradient_sensitivity,
    parameter_gradient,
    step_spread,
    trace_gradient,
)
from trackfit.inference.observations import Sites
from trackfit.inference.problem import Point, TrackProblem, evaluate_at
from trackfit.inference.process import ProcessParameters
from trackfit.motion.velocity import Basis

MAX_NEWTON = 60
DECREMENT_TOLERANCE = 1e-8
"""Newton stops where the decrement g' inv(H) g (twice the gain still to be had) is below.

The states are then a ten-thousandth of their joint standard deviation from the mode.
"""

MAX_HALVINGS = 25
MODE_HALVINGS = 150
"""Halvings of Newton steps after which a mode is given up: searches that find one need some ten."""


class ModeNotFound(Exception):
    """No mode of the states was found at these parameters; the step that asked is rejected."""


class Patience:
    """How often the steps towards one mode may still be halved."""

    def __init__(self, halvings: int = MODE_HALVINGS) -> None:
        self.left = halvings

    def spend(self) -> None:
        """Take one halving from what is left."""
        self.left -= 1
        if self.left < 0:
            raise ModeNotFound(f"steps were halved more than {MODE_HALVINGS} times")


@dataclass(frozen=True)
class Mode:
    """The most probable states at fixed parameters and sites, with the factored Hessian there."""

    theta: Float[np.ndarray, " parameters"]
    point: Point
    sites: Sites
    band: Float[np.ndarray, "states dim 2*dim"]
    cholesky: Cholesky
    newton_steps: int

    @property
    def states(self) -> Float[np.ndarray, "states dim"]:
        """The most probable states."""
        return self.point.states


@dataclass(frozen=True)
class Spread:
    """What surrounds a mode: blocks of the inverse Hessian, and the adjoint.

    `mode + adjoint` is the posterior mean to first order.
    """

    steps: StepSpread
    adjoint: Float[np.ndarray, "states dim"]

    def covariance_at(self, states: Int[np.ndarray, " n"]) -> Float[np.ndarray, "n 2 2"]:
        """Covariance of the position at some states."""
        return np.moveaxis(np.asarray(self.steps.covariance)[:2, :2, states], -1, 0)


def find_mode(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    sites: Sites,
    start: Float[np.ndarray, "states dim"],
    tolerance: float = DECREMENT_TOLERANCE,
    basis: Basis | None = None,
) -> Mode:
    """Newton's method with a line search; Gauss-Newton where the Hessian is not positive definite.

    `basis` is the field's at the start, where it is known.

    Raises
    ------
    ModeNotFound
        The density is not finite, the line search fails or the Hessian at the end is indefinite.
    """
    point = evaluate_at(problem, theta, start, basis)
    if not np.isfinite(point.value):
        raise ModeNotFound("the density is not finite at the start")
    patience = Patience()
    for iteration in range(MAX_NEWTON):
        band, cholesky, exact = factored(problem, point, sites)
        gradient = point.full_gradient(problem, sites)
        step = -cholesky.solve(gradient.reshape(-1)).reshape(gradient.shape)
        decrement = -float(np.sum(gradient * step))
        if not np.isfinite(decrement):
            raise ModeNotFound("the Newton step is not finite")
        if decrement < tolerance:
            if not exact:
                raise ModeNotFound("the Hessian is indefinite where the gradient vanishes")
            return Mode(theta, point, sites, band, cholesky, iteration)
        point = line_search(problem, theta, sites, point, step, decrement, patience)
    raise ModeNotFound(f"Newton's method did not settle in {MAX_NEWTON} steps")


def factored(
    problem: TrackProblem, point: Point, sites: Sites
) -> tuple[Float[np.ndarray, "states dim 2*dim"], Cholesky, bool]:
    """Factor the Hessian at a point; a failure is a mode not found."""
    try:
        return point.factored(problem, sites)
    except NotPositiveDefinite:
        raise ModeNotFound("the Hessian is not finite or not positive definite") from None


def line_search(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    sites: Sites,
    point: Point,
    step: Float[np.ndarray, "states dim"],
    decrement: float,
    patience: Patience,
) -> Point:
    """Walk along a Newton step until the density has fallen enough (Armijo's rule)."""
    value = point.density(problem, sites)
    # below this the values of f differ by rounding only
    noise = 1e-12 * (1.0 + abs(value))
    length = 1.0
    for _ in range(MAX_HALVINGS):
        trial = evaluate_at(problem, theta, point.states + length * step)
        if trial.density(problem, sites) <= value - 1e-4 * length * decrement + noise:
            return trial
        patience.spend()
        length *= 0.5
    raise ModeNotFound("no step downhill was found")


def spread_around(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    point: Point,
    band: Float[np.ndarray, "states dim 2*dim"],
    cholesky: Cholesky,
) -> Spread:
    """Covariance blocks and adjoint at a point where the Hessian is factored."""
    try:
        backward = factor(reversed_band(band))
    except NotPositiveDefinite:
        raise ModeNotFound("the Hessian cannot be factored in reverse") from None
    process = problem.process_parameters(theta)
    common = (problem.motion, process, point.z, point.basis, problem.track)
    columns = cholesky.storage.T.reshape(band.shape)
    columns_back = backward.storage.T.reshape(band.shape)[::-1]
    steps = step_spread(*common, _padded(problem, columns), _padded(problem, columns_back))
    if problem.track.field.n_amplitudes == 0:
        return Spread(steps, np.zeros_like(point.states))
    pull = trace_gradient(*common, steps)
    flat = np.asarray(pull)[: problem.n_states].reshape(-1)
    return Spread(steps, -cholesky.solve(flat).reshape(point.states.shape))


def _padded(problem: TrackProblem, columns: Float[np.ndarray, "states dim width"]) -> jnp.ndarray:
    """Banded columns with an identity for the states of the padding."""
    padded = np.zeros((problem.padded, *columns.shape[1:]))
    padded[: problem.n_states] = columns
    padded[problem.n_states :, :, 0] = 1.0
    return jnp.asarray(padded)


def process_gradient(problem: TrackProblem, mode: Mode, spread: Spread) -> ProcessParameters:
    """Gradient of the Laplace marginal likelihood (negative log) in the process parameters."""
    adjoint = np.zeros((problem.dim, problem.padded))
    adjoint[:, : problem.n_states] = spread.adjoint.T
    return parameter_gradient(
        problem.motion,
        problem.process_parameters(mode.theta),
        mode.point.z,
        mode.point.basis,
        problem.track,
        spread.steps,
        jnp.asarray(adjoint),
    )


def mode_sensitivity(
    problem: TrackProblem, mode: Mode
) -> Float[np.ndarray, "states dim parameters"]:
    """Derivative of the most probable states in the parameters: -inv(H) dg/dtheta.

    Sites of heavy-tailed errors are held.
    """
    process = np.asarray(
        gradient_sensitivity(
            problem.motion,
            problem.process_parameters(mode.theta),
            mode.point.z,
            mode.point.basis,
            problem.track,
        )
    )
    slope = np.zeros((problem.n_states, problem.dim, problem.n_parameters))
    slope[..., : problem.n_process] = process[: problem.n_states, :, : problem.n_process]
    if problem.pace is not None:
        by_pace = process[: problem.n_states, :, problem.n_process :]
        slope[..., -problem.pace.spells :] = by_pace @ problem.pace.root
    if not problem.observations.heavy:
        by_scale = problem.observations.scale_sensitivity(mode.sites, mode.states)
        slope[:, :2, problem.n_process] = by_scale
    flat = slope.reshape(problem.n_states * problem.dim, -1)
    return -mode.cholesky.solve(flat).reshape(slope.shape)
