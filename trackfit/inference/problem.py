"""One track laid on its time grid, and the evaluation of its process at given states."""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float

from trackfit.inference.banded import Cholesky, NotPositiveDefinite, factor
from trackfit.inference.observations import Observations, Sites
from trackfit.inference.process import Evaluation, ProcessParameters, Track, evaluate
from trackfit.motion import Motion
from trackfit.motion.velocity import Basis, evaluate_basis

VELOCITY_ORDER = 3
"""Derivatives of the velocity in a basis: two for the Hessian, one more to differentiate that."""


@dataclass(frozen=True)
class Pace:
    """A pace that varies: spells of equal length whose log paces are normal and alike when near.

    `root` is a square root of their prior covariance: log pace = root u with u standard normal.
    """

    root: Float[np.ndarray, "spells spells"]

    @property
    def spells(self) -> int:
        """Number of spells."""
        return len(self.root)


@dataclass(frozen=True)
class TrackProblem:
    """One track on its time grid, ready for the engine.

    The parameter vector is [log motion parameters, amplitudes of the field, log error scale, log
    nu where errors have heavy tails, one standard normal number a spell where the pace varies].
    """

    motion: Motion
    track: Track
    observations: Observations
    hours: Float[np.ndarray, " states"]
    pace: Pace | None = None

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
    def n_process(self) -> int:
        """Parameters of the process: those of the motion, then the amplitudes."""
        return len(self.motion.parameters) + self.track.field.n_amplitudes

    @property
    def n_parameters(self) -> int:
        """Length of the parameter vector."""
        spells = 0 if self.pace is None else self.pace.spells
        return self.n_process + self.observations.n_parameters + spells

    def error_parameters(
        self, theta: Float[np.ndarray, " parameters"]
    ) -> Float[np.ndarray, " errors"]:
        """Log error scale, and log nu where errors have heavy tails."""
        return theta[self.n_process : self.n_process + self.observations.n_parameters]

    def process_parameters(self, theta: Float[np.ndarray, " parameters"]) -> ProcessParameters:
        """The process's share of the parameter vector."""
        n_motion = len(self.motion.parameters)
        log_pace = None
        if self.pace is not None:
            log_pace = self.pace.root @ theta[-self.pace.spells :]
        return ProcessParameters(theta[:n_motion], theta[n_motion : self.n_process], log_pace)

    def whole_gradient(
        self, process: ProcessParameters, errors: Float[np.ndarray, " errors"]
    ) -> Float[np.ndarray, " parameters"]:
        """Gradients of process and errors put together in the order of the parameter vector."""
        parts = [np.asarray(process.log_motion), np.asarray(process.amplitudes), errors]
        if self.pace is not None:
            parts.append(self.pace.root.T @ np.asarray(process.log_pace))
        return np.concatenate(parts)

    def padded_states(
        self, states: Float[np.ndarray, "states dim"]
    ) -> Float[np.ndarray, "dim padded"]:
        """States as the compiled functions take them: quantities first, the last one repeated."""
        padded = np.empty((self.dim, self.padded))
        padded[:, : self.n_states] = states.T
        padded[:, self.n_states :] = states[-1][:, None]
        return padded


@dataclass(frozen=True)
class Point:
    """The process evaluated at some states, without the fixes.

    `z` are the states as compiled functions take them; `basis` is the field's there, with the
    velocity's derivatives up to order three.
    """

    states: Float[np.ndarray, "states dim"]
    value: float
    gradient: Float[np.ndarray, "states dim"]
    evaluation: Evaluation
    z: jnp.ndarray
    basis: Basis

    def density(self, problem: TrackProblem, sites: Sites) -> float:
        """Negative log density, sites included."""
        return self.value + problem.observations.value(sites, self.states)

    def full_gradient(self, problem: TrackProblem, sites: Sites) -> Float[np.ndarray, "states dim"]:
        """Gradient of `density` in the states."""
        gradient = self.gradient.copy()
        problem.observations.add_gradient(sites, self.states, gradient)
        return gradient

    def band(
        self, problem: TrackProblem, sites: Sites, *, exact: bool = True
    ) -> Float[np.ndarray, "states dim 2*dim"]:
        """Hessian of `density`, or the Gauss-Newton one where not `exact`."""
        band = np.array(np.asarray(self.evaluation.band)[: problem.n_states])
        if not exact:
            curvature = np.asarray(self.evaluation.curvature)[: problem.n_states]
            band[:, 0, 0] += curvature[:, 0]
            band[:, 0, 1] += curvature[:, 1]
            band[:, 1, 0] += curvature[:, 2]
        problem.observations.add_information(sites, band)
        return band

    def factored(
        self, problem: TrackProblem, sites: Sites
    ) -> tuple[Float[np.ndarray, "states dim 2*dim"], Cholesky, bool]:
        """The Hessian and its factor, or else the Gauss-Newton ones; says whether exact.

        Raises
        ------
        NotPositiveDefinite
            Neither has a factor: a number is not finite, or a site's precision is too negative.
        """
        band = self.band(problem, sites)
        try:
            return band, factor(band), True
        except NotPositiveDefinite:
            band = self.band(problem, sites, exact=False)
            return band, factor(band), False


def evaluate_at(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    states: Float[np.ndarray, "states dim"],
    basis: Basis | None = None,
) -> Point:
    """Evaluate the process at some states; `basis` is the field's there where it is known."""
    padded = problem.padded_states(states)
    if basis is None:
        x_km, y_km = jnp.asarray(padded[0]), jnp.asarray(padded[1])
        basis = evaluate_basis(problem.track.field, problem.track.times, x_km, y_km, VELOCITY_ORDER)
    z = jnp.asarray(padded)
    evaluation = evaluate(
        problem.motion,
        problem.process_parameters(theta),
        z,
        basis,
        problem.track,
    )
    gradient = np.asarray(evaluation.gradient)[: problem.n_states]
    return Point(states, float(evaluation.value), gradient, evaluation, z, basis)
