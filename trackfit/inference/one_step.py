"""What the fixes before each fix say of it: one-step-ahead residuals.

The process is linearised along the fitted path (z' = J z + e) and filtered forwards through the
fixes (Kalman 1960, J. Basic Eng. 82:35), parameters held. In front of each fix stands its
prediction from all earlier ones. Where the model is linear and normal the residuals are the
standardised innovations: independent and standard normal if the model is true (Durbin & Koopman
2012, section 2.12), and their log scores add up to the marginal likelihood.
"""

from __future__ import annotations

import numpy as np
from jaxtyping import Float

from trackfit.inference.marginal import Approximation
from trackfit.inference.predicted import Predicted
from trackfit.inference.process import linear_steps


class OneStepAhead(Predicted):
    """Every fix against its prediction from the fixes before it; the first from its vague prior."""


def one_step_ahead(found: Approximation) -> OneStepAhead:
    """Predict every fix from the earlier ones at the parameters of an approximation.

    Fixes of one moment are taken in their order. Heavy-tailed errors pass through the filter as the
    sites of the approximation.
    """
    observations = found.problem.observations
    errors = found.problem.error_parameters(found.theta)
    offset, covariance = _filtered(found)
    return OneStepAhead.of(
        offset_km=offset,
        covariance_km2=covariance,
        error_km2=observations.covariance_km2 * np.exp(2.0 * errors[0]),
        log_nu=float(errors[1]) if observations.heavy else None,
    )


def _filtered(
    found: Approximation,
) -> tuple[Float[np.ndarray, "fixes 2"], Float[np.ndarray, "fixes 2 2"]]:
    """Reported less predicted position, and the covariance of the prediction, for every fix.

    The filter runs in deviations d from the fitted states, so that nothing is lost to rounding.
    """
    problem, states = found.problem, found.mode.states
    observations, sites = problem.observations, found.mode.sites
    jacobian, residual, noise, mean, spread = _linearised(found)
    offset, covariance = np.empty_like(observations.at_km), np.empty_like(sites.precision)
    order = np.argsort(observations.state, kind="stable")
    at = np.searchsorted(observations.state[order], np.arange(problem.n_states + 1))
    for i in range(problem.n_states):
        if i > 0:
            mean = jacobian[i - 1] @ mean - residual[i - 1]
            spread = jacobian[i - 1] @ spread @ jacobian[i - 1].T + noise[i - 1]
        for k in order[at[i] : at[i + 1]]:
            apart = states[i, :2] + mean[:2] - observations.at_km[k]
            offset[k], covariance[k] = -apart, spread[:2, :2]
            precision = sites.precision[k]
            # inv(1 + L P) L and inv(1 + L P) times the site's pull: no inverse of a weak site
            right = np.column_stack([precision, sites.pull[k] - precision @ apart])
            gain = np.linalg.solve(np.eye(2) + precision @ spread[:2, :2], right)
            mean = mean + spread[:, :2] @ gain[:, 2]
            spread = spread - spread[:, :2] @ gain[:, :2] @ spread[:2]
            spread = 0.5 * (spread + spread.T)
    return offset, covariance


def _linearised(
    found: Approximation,
) -> tuple[
    Float[np.ndarray, "steps dim dim"],
    Float[np.ndarray, "steps dim"],
    Float[np.ndarray, "steps dim dim"],
    Float[np.ndarray, " dim"],
    Float[np.ndarray, "dim dim"],
]:
    """Jacobians, residuals and noise of all steps; mean (as deviation) and covariance of z_0."""
    problem = found.problem
    z, count = problem.padded_states(found.mode.states), problem.n_states - 1
    linear = linear_steps(
        problem.motion,
        problem.process_parameters(found.theta),
        z,
        problem.basis(z, order=2),
        problem.track,
    )
    jacobian, residual, weight = (
        np.moveaxis(np.asarray(part), -1, 0)[:count]
        for part in (linear.jacobian, linear.residual, linear.weight)
    )
    spread = np.linalg.inv(np.asarray(linear.start_precision))
    return (
        jacobian,
        residual,
        np.linalg.inv(weight),
        -spread @ np.asarray(linear.start_gradient),
        spread,
    )
