"""What all other fixes say of each fix: leave-one-out residuals, p-values and log scores.

Taking a fix's own site out of the marginal of its state leaves the cavity N(m, V): the prediction
of the position from the other fixes, parameters held. The reported position then follows
N(m, V + s^2 C), or with heavy tails the mixture of N(m, V + s^2 C / w) over w (see
`trackfit.inference.tails`). Nothing is fitted again.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float
from scipy.special import gammaln, logsumexp

from trackfit.inference.marginal import Approximation, less_square
from trackfit.inference.observations import LOG_2PI
from trackfit.inference.sites import Cavity, cavities, determinant, inverse_2x2
from trackfit.inference.tails import LOG_WEIGHT_STEP, LOG_WEIGHTS


@dataclass(frozen=True)
class LeaveOneOut:
    """One entry a fix, in the order of the observations.

    Attributes
    ----------
    offset_km
        Reported position less the predicted one.
    covariance_km2
        Covariance of the prediction of the reported position at normal errors: V + s^2 C.
    p_value
        Probability of a reported position at least as far off. Exact for normal errors, and for
        heavy tails where V is proportional to C; else the ellipses of different w are averaged.
    log_density
        Log predictive density of the reported position, 1/km^2: the log score.
    residual
        Per axis, standard normal under the model: the offset in units of its prediction, both axes
        made independent (Cholesky); with heavy tails through the p-value's radius.
    """

    offset_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]
    p_value: Float[np.ndarray, " fixes"]
    log_density: Float[np.ndarray, " fixes"]
    residual: Float[np.ndarray, "fixes 2"]


def leave_one_out(found: Approximation) -> LeaveOneOut:
    """Predict every fix from all others at the parameters of an approximation."""
    observations = found.problem.observations
    cavity = found.cavity if found.cavity is not None else _gaussian_cavity(found)
    log_scale = found.theta[found.problem.n_process]
    own = observations.covariance_km2 * np.exp(2.0 * log_scale)
    offset = -cavity.mean_km
    if observations.heavy:
        weights, log_mass = np.exp(LOG_WEIGHTS), _log_mass(found.theta[-1])
    else:
        weights, log_mass = np.ones(1), np.zeros(1)
    misfit = np.empty((len(offset), len(weights)))
    log_density = np.empty_like(misfit)
    for j, weight in enumerate(weights):
        spread = cavity.covariance_km2 + own / weight
        misfit[:, j] = np.einsum("ka,kab,kb->k", offset, inverse_2x2(spread), offset)
        log_density[:, j] = -LOG_2PI - 0.5 * np.log(determinant(spread)) - 0.5 * misfit[:, j]
    p_value = np.exp(logsumexp(log_mass - 0.5 * misfit, axis=1))
    spread = cavity.covariance_km2 + own
    return LeaveOneOut(
        offset_km=offset,
        covariance_km2=spread,
        p_value=np.clip(p_value, 0.0, 1.0),
        log_density=logsumexp(log_mass + log_density, axis=1),
        residual=_residuals(offset, spread, p_value),
    )


def _gaussian_cavity(found: Approximation) -> Cavity:
    observations, spread = found.problem.observations, found.spread
    own = spread.adjoint[observations.state, :2]
    covariance = less_square(spread.covariance_at(observations.state), own)
    mean = observations.offset(found.mode.states) + own
    return cavities(found.mode.sites, mean, covariance)


def _log_mass(log_nu: float) -> Float[np.ndarray, " nodes"]:
    """Log of the quadrature weights of w ~ Gamma(nu/2, nu/2) at the nodes in log w."""
    half = 0.5 * np.exp(log_nu)
    return (
        np.log(LOG_WEIGHT_STEP)
        + half * np.log(half)
        - gammaln(half)
        + half * (LOG_WEIGHTS - np.exp(LOG_WEIGHTS))
    )


def _residuals(
    offset_km: Float[np.ndarray, "n 2"],
    covariance_km2: Float[np.ndarray, "n 2 2"],
    p_value: Float[np.ndarray, " n"],
) -> Float[np.ndarray, "n 2"]:
    """Independent standard normal residuals: direction from the offset, radius from the p-value.

    A radius r of two standard normals is exceeded with probability exp(-r^2/2).
    """
    root = np.linalg.cholesky(covariance_km2)
    turned = np.linalg.solve(root, offset_km[..., None])[..., 0]
    radius = np.sqrt(-2.0 * np.log(np.clip(p_value, 1e-300, 1.0)))
    length = np.linalg.norm(turned, axis=1)
    return (
        turned * np.where(length > 0.0, radius / np.where(length > 0.0, length, 1.0), 0.0)[:, None]
    )
