"""Whether the stated sizes of the errors fit the track.

A fixed error scale is put to the score test (Rao 1948, Proc. Camb. Phil. Soc. 44:50): the slope of
the log marginal likelihood in the logarithm of the scale, beside its spread when all estimated
parameters follow. Where the slope is steep and errors are normal the scale is set free and the
track fitted again, so that the factor reported is an estimate, and the residuals of that fit tell
whether the motion is at fault, too.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from jaxtyping import Float
from scipy.optimize import minimize_scalar
from scipy.stats import norm

from trackfit.inference.estimates import NORMAL_95
from trackfit.inference.fit import Fit, fit_track
from trackfit.inference.laplace import ModeNotFound
from trackfit.inference.marginal import approximate
from trackfit.inference.predicted import Predicted
from trackfit.inference.task import FitSettings, TrackData

SUSPECT_Z = 2.576
"""A slope this many standard deviations steep (1 % by chance) has the scale set free."""

SCALE_PRIOR_LOG_SD = 1.0
STEP = 0.05
"""Step in the log scale for the curvature, by central differences of the exact gradient."""

LARGEST_FACTOR = 100.0

NOTHING_KNOWN = (0.0, 3.0)
"""Log factor and its sd where neither a step nor a second fit tells anything."""


class Basis(Enum):
    """What a factor rests on."""

    ESTIMATED = "estimated with the other parameters"
    FREED = "estimated by a second fit with the error scale free"
    ONE_STEP = "one Newton step from the stated sizes"


@dataclass(frozen=True)
class ErrorSize:
    """The factor by which error sizes should be multiplied, and its 95 % interval.

    It is of the sizes that the fit worked with; of the stated ones where the fit estimated their
    scale itself. `p_value` is that of a factor of one: the larger of the score test's and the
    second fit's, where there was one. `freed` is
    that fit.
    """

    factor: float
    lower95: float
    upper95: float
    p_value: float
    basis: Basis
    freed: Fit | None = None


def error_size(fit: Fit, data: TrackData) -> ErrorSize | None:
    """Judge the stated error sizes of a fitted track; None where nothing was fitted."""
    if fit.states is None:
        return None
    place = fit.states.problem.n_process
    free_at = list(fit.states.free_at)
    if place in free_at:
        at = free_at.index(place)
        sd = float(np.sqrt(fit.states.theta_covariance[at, at]))
        return _sized(float(fit.states.theta[at]), sd, Basis.ESTIMATED)
    curved = _newton_step(fit, place)
    step, sd = curved or NOTHING_KNOWN
    # with heavy tails a second fit is dear, and scale and tails go half for the same thing
    if (curved is not None and abs(step) < SUSPECT_Z * sd) or fit.model.heavy:
        return _sized(step, sd, Basis.ONE_STEP)
    freed = _with_scale_free(fit, data, place)
    if freed.states is None or not freed.status.ok:
        return _sized(step, sd, Basis.ONE_STEP)
    at = list(freed.states.free_at).index(place)
    change = float(freed.states.theta[at] - fit.states.approximation.theta[place])
    size = _sized(change, float(np.sqrt(freed.states.theta_covariance[at, at])), Basis.FREED)
    if curved is not None:
        size = replace(size, p_value=max(size.p_value, _p_value(step / sd)))
    return replace(size, freed=freed)


def _sized(log_factor: float, sd: float, basis: Basis) -> ErrorSize:
    limit = np.log(LARGEST_FACTOR)
    ends = log_factor + np.array([0.0, -NORMAL_95, NORMAL_95]) * sd
    factor, low, high = (float(x) for x in np.exp(np.clip(ends, -limit, limit)))
    return ErrorSize(factor, low, high, _p_value(log_factor / sd), basis)


def _p_value(z: float) -> float:
    return float(2.0 * norm.sf(abs(z)))


def _newton_step(fit: Fit, place: int) -> tuple[float, float] | None:
    """Step in the log scale to the top of the likelihood, all free parameters following; its sd.

    With g the gradient of the negative log posterior and H its Hessian, the step is -g_s / c with
    c = H_ss - H_sf inv(H_ff) H_fs. None where c is not positive: the curvature then says nothing.
    """
    states = fit.states
    assert states is not None
    found, theta = states.approximation, states.approximation.theta
    shift = STEP * np.eye(len(theta))[place]
    try:
        up, down = (
            approximate(states.problem, theta + sign * shift, found.warm).gradient()
            for sign in (1.0, -1.0)
        )
    except ModeNotFound:
        return None
    column = (up - down) / (2.0 * STEP)
    across = column[states.free_at]
    curvature = float(column[place] - across @ states.theta_covariance @ across)
    slope = float(found.gradient()[place])
    if not np.isfinite(curvature) or curvature <= 0.0:
        return None
    return -slope / curvature, curvature**-0.5


def _with_scale_free(fit: Fit, data: TrackData, place: int) -> Fit:
    """Fit again from the estimates with the error scale estimated under its weak prior."""
    assert fit.states is not None
    theta = fit.states.approximation.theta
    parameters = [replace(p, start=float(theta[i])) for i, p in enumerate(fit.model.parameters.all)]
    parameters[place] = replace(
        parameters[place], fixed=False, prior_mean=0.0, prior_sd=SCALE_PRIOR_LOG_SD
    )
    model = replace(fit.model, parameters=replace(fit.model.parameters, all=tuple(parameters)))
    return fit_track(
        data, model, FitSettings(step_hours=fit.step_hours, coarse_factor=1), np.zeros(0)
    )


def factor_of_kind(
    offset_km: Float[np.ndarray, "fixes 2"],
    prediction_km2: Float[np.ndarray, "fixes 2 2"],
    error_km2: Float[np.ndarray, "fixes 2 2"],
    log_nu: float | None,
) -> float:
    """Factor for some fixes' error sizes that makes their leave-one-out predictions likeliest.

    The predictions themselves are held: a first estimate, good where fixes of other kinds or a
    steady path make them.
    """

    def loss(log_factor: float) -> float:
        scaled = error_km2 * np.exp(2.0 * log_factor)
        return -float(Predicted.of(offset_km, prediction_km2, scaled, log_nu).log_density.sum())

    limit = float(np.log(LARGEST_FACTOR))
    return float(np.exp(minimize_scalar(loss, bounds=(-limit, limit), method="bounded").x))
