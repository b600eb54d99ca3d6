"""Fitting one track: the parameters' mode, their uncertainty, and the states given both.

The parameters maximise the Laplace marginal likelihood times their priors, first on a coarse time
grid, then on the asked one. Their covariance is the inverse Hessian there, by central differences
of the exact gradient. It is carried into the states to first order:

    cov(z) = V + J Sigma J',      J = dm/dtheta

(the law of total covariance, with the mode for the mean; Kass & Steffey 1989, J. Am. Stat. Assoc.
84:717).
"""

from __future__ import annotations

import zlib
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from enum import Enum

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.inference.estimates import parameter_table
from trackfit.inference.integrate import PathMixture, explore
from trackfit.inference.laplace import mode_sensitivity
from trackfit.inference.optimise import Minimum, Rejected, nearest_positive
from trackfit.inference.search import TOLERANCE, Search
from trackfit.inference.states import States
from trackfit.inference.task import FitSettings, Model, TrackData

MIN_FIXES = 3

LEAST_CURVATURE = 1e-2
"""Curvature of the log posterior in units of the parameters' reach below which a track is silent:
a standard error of ten times the longest step that the search would take."""


class FitStatus(Enum):
    """How a fit ended; the value is the sentence the user reads."""

    CONVERGED = "The fit converged."
    NOT_CONVERGED = (
        "The search stopped before the parameters settled; estimates and intervals are not to be "
        "trusted."
    )
    NOT_IDENTIFIED = (
        "The track does not determine every parameter; the intervals of those at fault are not to "
        "be trusted. Fix one, drop a term, or use the weak priors."
    )
    NO_MODE = (
        "No most probable path was found at the starting values; check the fixes and their errors, "
        "or use a shorter step."
    )
    TOO_FEW_FIXES = "The tag has too few usable fixes to fit; nothing was estimated."

    @property
    def sentence(self) -> str:
        """The sentence the user reads."""
        return self.value

    @property
    def ok(self) -> bool:
        """Whether estimates and intervals can be used."""
        return self is FitStatus.CONVERGED


@dataclass(frozen=True)
class Fit:
    """The fit of one tag.

    Attributes
    ----------
    parameters
        One row a parameter: parameter, unit, estimate, sd, lower95, upper95, role (estimated, fixed
        or derived from others).
    log_marginal
        Laplace log marginal likelihood of the fixes (in km) at the estimates, priors left out.
    step_check
        Change of each free parameter at half the step, in standard errors; None if not asked.
    states
        None when nothing could be fitted.
    """

    tag: str
    status: FitStatus
    parameters: pd.DataFrame
    log_marginal: float
    n_fixes: int
    n_states: int
    step_hours: float
    iterations: int
    evaluations: int
    step_check: pd.DataFrame | None
    model: Model
    states: States | None = field(repr=False)


Progress = Callable[[float, str], None]


def _silent(done: float, message: str) -> None:
    """Take no notice of progress."""


def fit_track(
    data: TrackData,
    model: Model,
    settings: FitSettings,
    report_hours: Float[np.ndarray, " n"],
    progress: Progress = _silent,
) -> Fit:
    """Fit a model to one track by the fast engine.

    Never raises for what the data do: the status says how it ended.
    """
    if len(data.hours) < MIN_FIXES:
        return _empty(data, model, settings, FitStatus.TOO_FEW_FIXES)
    coarse_step = settings.step_hours * settings.coarse_factor
    fine = Search(data, model, settings.step_hours, report_hours)
    free = fine.parameters.free
    start = np.array([p.start for p in free])
    metric = np.diag([p.reach**-2.0 for p in free])
    try:
        if settings.coarse_factor > 1:
            coarse = Search(data, model, coarse_step, np.zeros(0))
            found = coarse.run(start, metric, settings.max_iterations, _part(progress, 0.0, 0.3))
            start, metric = found.at, coarse.metric(found)
            fine.start_from(coarse)
        found = fine.run(start, metric, settings.max_iterations, _part(progress, 0.3, 0.6))
        progress(0.6, "uncertainty")
        hessian = fine.hessian(found)
    except Rejected:
        return _empty(data, model, settings, FitStatus.NO_MODE)
    fit = _conclude(data, model, settings, fine, found, hessian, progress)
    if settings.step_check and fit.states is not None:
        progress(0.8, "half the step")
        fit = _with_step_check(fit, data, settings, report_hours, hessian)
    progress(1.0, "done")
    return fit


def _part(progress: Progress, begin: float, end: float) -> Callable[[int, float], None]:
    def report(iteration: int, decrement: float) -> None:
        # the gain still to be had falls from some thousands to the tolerance: a rough clock
        left = np.clip(np.log10(max(decrement, TOLERANCE) / TOLERANCE) / 8.0, 0.0, 1.0)
        progress(begin + (end - begin) * (1.0 - float(left)), f"iteration {iteration + 1}")

    return report


def _conclude(
    data: TrackData,
    model: Model,
    settings: FitSettings,
    search: Search,
    found: Minimum,
    hessian: Float[np.ndarray, "free free"],
    progress: Progress,
) -> Fit:
    problem, parameters = search.problem, search.parameters
    free_at = parameters.free_at
    best = search.at(found.at)
    status = FitStatus.CONVERGED if found.converged else FitStatus.NOT_CONVERGED
    reach = np.array([p.reach for p in parameters.free])
    if np.linalg.eigvalsh(hessian * np.outer(reach, reach))[0] < LEAST_CURVATURE:
        status = FitStatus.NOT_IDENTIFIED if found.converged else status
        hessian = nearest_positive(hessian, reach**-2.0)
    covariance = np.linalg.inv(hessian)
    blocks = best.spread.steps.covariance
    states = States(
        approximation=best,
        covariance=np.moveaxis(np.asarray(blocks), -1, 0)[: problem.n_states],
        sensitivity=mode_sensitivity(problem, best.mode)[..., free_at],
        free_at=free_at,
        theta=found.at,
        theta_covariance=covariance,
    )
    if settings.points:
        states = _with_points(search, states, settings.points, progress)
    return Fit(
        tag=data.tag,
        status=status,
        parameters=parameter_table(parameters, model.motion, found.at, covariance, states.sample),
        log_marginal=-best.negative_log_marginal,
        n_fixes=len(data.hours),
        n_states=problem.n_states,
        step_hours=settings.step_hours,
        iterations=found.iterations,
        evaluations=search.evaluations,
        step_check=None,
        model=model,
        states=states,
    )


def _with_step_check(
    fit: Fit,
    data: TrackData,
    settings: FitSettings,
    report_hours: Float[np.ndarray, " n"],
    hessian: Float[np.ndarray, "free free"],
) -> Fit:
    """Refit at half the step, from the estimates, and report each parameter's change."""
    assert fit.states is not None
    search = Search(data, fit.model, 0.5 * settings.step_hours, report_hours)
    free = search.parameters.free
    floor = np.array([p.reach**-2.0 for p in free])
    metric = nearest_positive(hessian, floor)
    change = np.full(len(free), np.nan)
    try:
        found = search.run(
            fit.states.theta, metric, settings.max_iterations, lambda iteration, decrement: None
        )
        if found.converged:
            change = found.at - fit.states.theta
    except Rejected:
        pass
    sd = np.sqrt(np.diag(fit.states.theta_covariance))
    table = pd.DataFrame({"parameter": [p.name for p in free], "change_in_sd": change / sd})
    return replace(fit, step_check=table)


def _with_points(search: Search, states: States, count: int, progress: Progress) -> States:
    """Explore the parameters' posterior; keep the positions at its weighted points."""
    n = states.problem.n_states
    kept: list[tuple[np.ndarray, np.ndarray] | None] = []

    def density(free: Float[np.ndarray, " free"]) -> tuple[float, Float[np.ndarray, " free"]]:
        progress(0.7 + 0.3 * min(len(kept) / count, 1.0), "weighing parameters")
        kept.append(None)
        value, gradient = search(free)
        found = search.at(free)
        blocks = np.asarray(found.spread.steps.covariance)[:2, :2, :n]
        means = (found.mode.states + found.spread.adjoint)[:, :2]
        kept[-1] = means, np.moveaxis(blocks, -1, 0)
        return -value, -gradient

    seed = zlib.crc32(states.theta.tobytes())
    explored = explore(density, states.theta, states.theta_covariance, count, seed)
    at_points = [part for call in explored.calls if (part := kept[call]) is not None]
    means, covariances = zip(*at_points, strict=True)
    weight = explored.points.weight
    return replace(
        states,
        points=explored.points,
        sample=explored.sample,
        mixture=PathMixture(weight, np.stack(means), np.stack(covariances)),
    )


def _empty(data: TrackData, model: Model, settings: FitSettings, status: FitStatus) -> Fit:
    free = np.array([p.start for p in model.parameters.free])
    nothing_known = np.zeros((len(free), len(free)))
    table = parameter_table(model.parameters, model.motion, free, nothing_known)
    table.loc[table["role"] != "fixed", ["estimate", "sd", "lower95", "upper95"]] = np.nan
    return Fit(
        tag=data.tag,
        status=status,
        parameters=table,
        log_marginal=float("nan"),
        n_fixes=len(data.hours),
        n_states=0,
        step_hours=settings.step_hours,
        iterations=0,
        evaluations=0,
        step_check=None,
        model=model,
        states=None,
    )
