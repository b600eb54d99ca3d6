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
from trackfit.inference.predicted import Predicted, error_mixture
from trackfit.inference.process import linear_steps
from trackfit.inference.sites import determinant, inverse_2x2


class OneStepAhead(Predicted):
    """Every fix against its prediction from the fixes before it; the first from its vague prior."""


def one_step_ahead(found: Approximation) -> OneStepAhead:
    """Predict every fix from the earlier ones at the parameters of an approximation.

    Fixes of one moment are taken in their order. With heavy tails the filter keeps the first two
    moments after each fix (assumed density filtering; Maybeck 1982, chapter 12).
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

    The filter runs in deviations from the fitted states, so that nothing is lost to rounding.
    """
    problem, states = found.problem, found.mode.states
    observations = problem.observations
    errors = problem.error_parameters(found.theta)
    error_km2 = observations.covariance_km2 * np.exp(2.0 * errors[0])
    weights, log_mass = error_mixture(float(errors[1]) if observations.heavy else None)
    jacobian, residual, noise, mean, spread = _linearised(found)
    offset, covariance = np.empty_like(observations.at_km), np.empty_like(error_km2)
    order = np.argsort(observations.state, kind="stable")
    at = np.searchsorted(observations.state[order], np.arange(problem.n_states + 1))
    for i in range(problem.n_states):
        if i > 0:
            mean = jacobian[i - 1] @ mean - residual[i - 1]
            spread = jacobian[i - 1] @ spread @ jacobian[i - 1].T + noise[i - 1]
        for k in order[at[i] : at[i + 1]]:
            offset[k] = observations.at_km[k] - states[i, :2] - mean[:2]
            covariance[k] = spread[:2, :2]
            gain, less = _update(offset[k], covariance[k], error_km2[k], weights, log_mass)
            across = spread[:, :2]
            mean = mean + across @ gain
            spread = spread - across @ less @ across.T
            spread = 0.5 * (spread + spread.T)
    return offset, covariance


def _update(
    offset_km: Float[np.ndarray, " 2"],
    covariance_km2: Float[np.ndarray, "2 2"],
    error_km2: Float[np.ndarray, "2 2"],
    weights: Float[np.ndarray, " nodes"],
    log_mass: Float[np.ndarray, " nodes"],
) -> tuple[Float[np.ndarray, " 2"], Float[np.ndarray, "2 2"]]:
    """G and D of the update: mean + P g and covariance - P D P', P the covariance with x.

    At weight w the precision of the innovation is A_w = inv(V + s^2 C / w), g_w = A_w r and D_w =
    A_w. The mixture's first two moments have g = <g_w> and D = <A_w> - cov(g_w).
    """
    precision = inverse_2x2(covariance_km2 + error_km2 / weights[:, None, None])
    pulls = precision @ offset_km
    log_share = log_mass + 0.5 * np.log(determinant(precision)) - 0.5 * pulls @ offset_km
    share = np.exp(log_share - log_share.max())
    share /= share.sum()
    gain = share @ pulls
    apart = pulls - gain
    return gain, np.einsum("w,wab->ab", share, precision) - (share[:, None] * apart).T @ apart


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
    problem, point = found.problem, found.mode.point
    count = problem.n_states - 1
    linear = linear_steps(
        problem.motion,
        problem.process_parameters(found.theta),
        point.z,
        point.basis,
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
