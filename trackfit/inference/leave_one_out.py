"""What all other fixes say of each fix: leave-one-out residuals, p-values and log scores.

Taking a fix's own site out of the marginal of its state leaves the cavity N(m, V): the prediction
of the position from the other fixes, parameters held. Nothing is fitted again.

Residuals of neighbouring fixes are not independent, not even where the model is true: two fixes
close in time pull each other's predictions.
"""

from __future__ import annotations

import numpy as np

from trackfit.inference.marginal import Approximation, less_square
from trackfit.inference.predicted import Predicted
from trackfit.inference.sites import Cavity, cavities


class LeaveOneOut(Predicted):
    """Every fix against its prediction from all other fixes, before and after it."""


def leave_one_out(found: Approximation) -> LeaveOneOut:
    """Predict every fix from all others at the parameters of an approximation."""
    observations = found.problem.observations
    cavity = found.cavity if found.cavity is not None else _gaussian_cavity(found)
    errors = found.problem.error_parameters(found.theta)
    return LeaveOneOut.of(
        offset_km=-cavity.mean_km,
        covariance_km2=cavity.covariance_km2,
        error_km2=observations.covariance_km2 * np.exp(2.0 * errors[0]),
        log_nu=float(errors[1]) if observations.heavy else None,
    )


def _gaussian_cavity(found: Approximation) -> Cavity:
    observations, spread = found.problem.observations, found.spread
    own = spread.adjoint[observations.state, :2]
    covariance = less_square(spread.covariance_at(observations.state), own)
    mean = observations.offset(found.mode.states) + own
    return cavities(found.mode.sites, mean, covariance)
