"""Fitting one track: the parameters' mode, their uncertainty, and the states given both.

The parameters maximise the Laplace marginal likelihood times their priors, first on a coarse time
grid, then on the asked one. Their covariance is the inverse Hessian there, by central differences
of the exact gradient. It is carried into the states to first order:

    cov(z) = V + J Sigma J',      J = dm/dtheta

(the law of total covariance, with the mode for the mean; Kass & Steffey 1989, J. Am. Stat. Assoc.
84:717).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
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
from trackfit.inference.smoothing import settle
from trackfit.inference.states import States
from trackfit.inference.task import FitSettings, Model, TrackData

MIN_FIXES = 3

SEED = 1
"""Of the random numbers that explore the parameters' posterior: the same for every track, so that
nearly the same track, or another machine, gives nearly the same result."""

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
    NO_CURVATURE = (
        "The search settled, but how well the parameters are known could not be computed there; "
        "intervals and ellipses are not to be trusted."
    )
    NO_MODE = (
        "No most probable path was found; check the fixes and their errors, or use a shorter step."
    )
    NOT_SETTLED = (
        "The tags had not agreed on the responses they share when the sweeps over them ended; "
        "estimates and intervals are not to be trusted."
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
        One row a parameter: parameter, unit, estimate, sd, lower95, upper95, role (estimated,
        shared by all tags, fixed, derived from others, or chosen: the bends of a smooth term).
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

Start = tuple[Float[np.ndarray, " free"], Float[np.ndarray, "free free"]]
"""Where a search begins: parameters, and a first guess of the Hessian."""


def _silent(done: float, message: str) -> None:
    """Take no notice of progress."""


def fit_track(
    data: TrackData,
    model: Model,
    settings: FitSettings,
    report_hours: Float[np.ndarray, " n"],
    progress: Progress = _silent,
    begin: Start | None = None,
) -> Fit:
    """Fit a model to one track by the fast engine.

    Never raises for what the data do: the status says how it ended. With `begin` the search starts
    there, without the coarse grid.
    """
    if len(data.hours) < MIN_FIXES:
        return _empty(data, model, settings, FitStatus.TOO_FEW_FIXES)
    search = Search(data, model, settings.step_hours, report_hours)
    starts = _starts(search, data, model, settings, progress) if begin is None else iter([begin])
    found = _searched(search, starts, settings, progress)
    if found is None:
        return _empty(data, model, settings, FitStatus.NO_MODE)
    found = settle(search, found, settings.max_iterations)
    progress(0.6, "uncertainty")
    ending = _ending(search, found)
    try:
        fit = _conclude(data, model, settings, search, found, ending, progress)
    except Rejected:
        return _empty(data, model, settings, FitStatus.NO_MODE)
    if settings.step_check:
        progress(0.8, "half the step")
        fit = _with_step_check(fit, data, settings, report_hours, ending.hessian)
    progress(1.0, "done")
    return fit


def _starts(
    search: Search, data: TrackData, model: Model, settings: FitSettings, progress: Progress
) -> Iterator[Start]:
    """What the coarse grid found, if it found anything; then the model's own starting values."""
    free = search.parameters.free
    plain = np.array([p.start for p in free]), np.diag([p.reach**-2.0 for p in free])
    if settings.coarse_factor > 1:
        coarse = Search(data, model, settings.step_hours * settings.coarse_factor, np.zeros(0))
        try:
            found = coarse.run(*plain, settings.max_iterations, _part(progress, 0.0, 0.3))
            found = settle(coarse, found, settings.max_iterations)
            search.parameters = coarse.parameters
            search.start_from(coarse)
            yield found.at, coarse.metric(found)
        except Rejected:
            pass
    yield plain


def _searched(
    search: Search, starts: Iterator[Start], settings: FitSettings, progress: Progress
) -> Minimum | None:
    """Where the search ended from the first start that has a value; None where none has."""
    for start, metric in starts:
        try:
            return search.run(start, metric, settings.max_iterations, _part(progress, 0.3, 0.6))
        except Rejected:
            continue
    return None


def _part(progress: Progress, begin: float, end: float) -> Callable[[int, float], None]:
    def report(iteration: int, decrement: float) -> None:
        # the gain still to be had falls from some thousands to the tolerance: a rough clock
        left = np.clip(np.log10(max(decrement, TOLERANCE) / TOLERANCE) / 8.0, 0.0, 1.0)
        progress(begin + (end - begin) * (1.0 - float(left)), f"iteration {iteration + 1}")

    return report


@dataclass(frozen=True)
class _Ending:
    """How a search ended, and a positive definite Hessian there."""

    status: FitStatus
    hessian: Float[np.ndarray, "free free"]


def _ending(search: Search, found: Minimum) -> _Ending:
    """Judge where a search ended by the curvature there."""
    reach = np.array([p.reach for p in search.parameters.free])
    settled = found.converged
    try:
        hessian = search.hessian(found)
    except Rejected:
        stand_in = nearest_positive(found.metric, reach**-2.0)
        status = FitStatus.NO_CURVATURE if settled else FitStatus.NOT_CONVERGED
        return _Ending(status, stand_in)
    if np.linalg.eigvalsh(hessian * np.outer(reach, reach))[0] < LEAST_CURVATURE:
        status = FitStatus.NOT_IDENTIFIED if settled else FitStatus.NOT_CONVERGED
        return _Ending(status, nearest_positive(hessian, reach**-2.0))
    return _Ending(FitStatus.CONVERGED if settled else FitStatus.NOT_CONVERGED, hessian)


def _conclude(
    data: TrackData,
    model: Model,
    settings: FitSettings,
    search: Search,
    found: Minimum,
    ending: _Ending,
    progress: Progress,
) -> Fit:
    """The fit with its states.

    Raises
    ------
    Rejected
        The states at the estimates were not found again.
    """
    problem, parameters, status = search.problem, search.parameters, ending.status
    free_at = parameters.free_at
    best = search.with_spread(found.at)
    covariance = np.linalg.inv(ending.hessian)
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
        try:
            states = _with_points(search, states, settings.points, progress)
        except Rejected:
            status = FitStatus.NO_CURVATURE if status.ok else status
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
        model=replace(model, parameters=parameters.first(len(model.parameters.all))),
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
    """Explore the parameters' posterior; keep the positions at its weighted points.

    Raises
    ------
    Rejected
        The density has no value at the mode, or at none of the points.
    """
    n = states.problem.n_states
    kept: list[tuple[np.ndarray, np.ndarray] | None] = []

    def density(free: Float[np.ndarray, " free"]) -> tuple[float, Float[np.ndarray, " free"]]:
        progress(0.7 + 0.3 * min(len(kept) / count, 1.0), "weighing parameters")
        kept.append(None)
        value, gradient = search(free)
        found = search.with_spread(free)
        blocks = np.asarray(found.spread.steps.covariance)[:2, :2, :n]
        means = (found.mode.states + found.spread.adjoint)[:, :2]
        kept[-1] = means, np.moveaxis(blocks, -1, 0)
        return -value, -gradient

    explored = explore(density, states.theta, states.theta_covariance, count, SEED)
    at_points = [part for call in explored.calls if (part := kept[call]) is not None]
    if not at_points:
        raise Rejected
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
