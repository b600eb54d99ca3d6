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
from jaxtyping import Float, Int

from trackfit.inference.grid import PacePrior, build_problem, interpolated_start, time_grid
from trackfit.inference.integrate import PathMixture, WeightedPoints, lay_points, normalised
from trackfit.inference.laplace import ModeNotFound, mode_sensitivity
from trackfit.inference.marginal import Approximation, Warm, approximate
from trackfit.inference.optimise import (
    Minimum,
    Rejected,
    difference_hessian,
    minimise,
    nearest_positive,
)
from trackfit.inference.parameters import ParameterSet
from trackfit.inference.problem import TrackProblem
from trackfit.inference.process import Start
from trackfit.layers.layer import Layer
from trackfit.motion import Motion, VelocityField

NORMAL_95 = 1.959963984540054
TOLERANCE = 1e-5
"""Log-likelihood gain still to be had when a search ends: half a percent of a standard error."""

MIN_FIXES = 3


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
class TrackData:
    """The used fixes of one tag in the plane, in time order."""

    tag: str
    hours: Float[np.ndarray, " fixes"]
    at_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]


@dataclass(frozen=True)
class Model:
    """What is fitted to a track: motion, velocity field with its layers, parameters, errors.

    `heavy` errors are bivariate Student-t, normal ones else. `pace` lets the motion's pace vary in
    time; its spells are further parameters, added when a track's length is known. `start` is the
    prior of the first
    position, vague around the first fix if None.
    """

    motion: Motion
    field: VelocityField
    layers: tuple[tuple[Layer | None, ...], Layer | None]
    parameters: ParameterSet
    heavy: bool = False
    pace: PacePrior | None = None
    start: Start | None = None


@dataclass(frozen=True)
class FitSettings:
    """How a track is fitted.

    `points` is the number of weighted points that stand for the parameters' posterior; zero takes
    the normal approximation at the mode.
    """

    step_hours: float = 0.5
    coarse_factor: int = 4
    max_iterations: int = 100
    step_check: bool = False
    points: int = 0


@dataclass(frozen=True)
class Drawn:
    """Draws of the whole path from one Gaussian.

    `rows` numbers them among all draws; `band` is the Gaussian's precision in banded storage;
    `centre` is what each is drawn around.
    """

    rows: Int[np.ndarray, " some"]
    band: Float[np.ndarray, "states dim 2*dim"]
    centre: Float[np.ndarray, "some states dim"]
    paths: Float[np.ndarray, "some states dim"]


def _centre(found: Approximation) -> Float[np.ndarray, "states dim"]:
    """Posterior mean of the states at fixed parameters, to first order."""
    return found.mode.states + found.spread.adjoint


@dataclass(frozen=True)
class States:
    """The states of a fitted track on its time grid.

    `theta` (the mode) and `theta_covariance` are of the free parameters on the engine's scale;
    `sensitivity` is the derivative of the states in them. Where weighted points stand for the
    parameters' posterior, `points` and `mixture` hold them and the positions at each.
    """

    approximation: Approximation
    covariance: Float[np.ndarray, "states dim dim"]
    sensitivity: Float[np.ndarray, "states dim free"]
    free_at: Int[np.ndarray, " free"]
    theta: Float[np.ndarray, " free"]
    theta_covariance: Float[np.ndarray, "free free"]
    points: WeightedPoints | None = None
    mixture: PathMixture | None = None

    @property
    def problem(self) -> TrackProblem:
        """The track on its time grid."""
        return self.approximation.problem

    @property
    def mean(self) -> Float[np.ndarray, "states dim"]:
        """Posterior mean of the states: the mode and its first-order correction."""
        return _centre(self.approximation)

    def positions_km(self) -> Float[np.ndarray, "states 2"]:
        """Posterior mean of the positions, averaged over the parameters."""
        return self.mean[:, :2] if self.mixture is None else self.mixture.mean()

    def position_covariance_km2(self) -> Float[np.ndarray, "states 2 2"]:
        """Covariance of the positions, parameter uncertainty included."""
        if self.mixture is None:
            return self.total_covariance()[:, :2, :2]
        return self.mixture.covariance()

    def squared_radius(self, probability: float) -> Float[np.ndarray, " states"]:
        """Squared Mahalanobis radius of the region of a position that holds a probability."""
        if self.mixture is None:
            return np.full(self.problem.n_states, -2.0 * np.log1p(-probability))
        return self.mixture.squared_radius(probability)

    def total_covariance(self) -> Float[np.ndarray, "states dim dim"]:
        """Covariance of the states, parameter uncertainty included."""
        carried = self.sensitivity @ self.theta_covariance
        return self.covariance + carried @ np.swapaxes(self.sensitivity, 1, 2)

    def draw(self, count: int, rng: np.random.Generator) -> Float[np.ndarray, "count states dim"]:
        """Joint draws of the whole path, parameters included."""
        draws = np.empty((count, *self.mean.shape))
        for part in self.drawn(count, rng):
            draws[part.rows] = part.paths
        return draws

    def drawn(
        self, count: int, rng: np.random.Generator, most_points: int | None = None
    ) -> list[Drawn]:
        """Joint draws of the whole path, by the Gaussians they come from.

        From the weighted points if there are any: each draw takes a point by its weight, then
        states from the Gaussian approximation there. Else all from the one at the mode. With
        `most_points` the draws share so few points, taken evenly by their weights.
        """
        if self.points is None:
            around = self._draw_around(self.approximation, count, rng)
            carried = self._carried(count, rng)
            band, centre = self.approximation.mode.band, self.mean + carried
            return [Drawn(np.arange(count), band, centre, around + carried)]
        points, weight = self.points.at, self.points.weight
        if most_points is None:
            chosen = rng.choice(len(points), size=count, p=weight)
        else:
            even = (rng.random() + np.arange(most_points)) / most_points
            taken = np.searchsorted(np.cumsum(weight), even * weight.sum() * (1.0 - 1e-12))
            chosen = np.resize(taken, count)
        parts = []
        for point in np.unique(chosen):
            at = np.flatnonzero(chosen == point)
            found = self._approximation_at(points[point])
            centre = np.broadcast_to(_centre(found), (len(at), *self.mean.shape))
            paths = self._draw_around(found, len(at), rng)
            parts.append(Drawn(at, found.mode.band, centre, paths))
        return parts

    def _approximation_at(self, free: Float[np.ndarray, " free"]) -> Approximation:
        theta = self.approximation.theta.copy()
        theta[self.free_at] = free
        return approximate(self.problem, theta, self.approximation.warm)

    def _carried(
        self, count: int, rng: np.random.Generator
    ) -> Float[np.ndarray, "count states dim"]:
        root = np.linalg.cholesky(self.theta_covariance)
        theta = rng.standard_normal((count, len(self.theta))) @ root.T
        return np.einsum("sdp,cp->csd", self.sensitivity, theta)

    @staticmethod
    def _draw_around(
        found: Approximation, count: int, rng: np.random.Generator
    ) -> Float[np.ndarray, "count states dim"]:
        mean = _centre(found)
        noise = rng.standard_normal((mean.size, count))
        around = found.mode.cholesky.solve_transposed_factor(noise).T
        return mean + around.reshape(count, *mean.shape)


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
    fine = _Search(data, model, settings.step_hours, report_hours)
    free = fine.parameters.free
    start = np.array([p.start for p in free])
    metric = np.diag([p.reach**-2.0 for p in free])
    try:
        if settings.coarse_factor > 1:
            coarse = _Search(data, model, coarse_step, np.zeros(0))
            found = coarse.run(start, metric, settings.max_iterations, _part(progress, 0.0, 0.3))
            start, metric = found.at, coarse.metric(found)
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


class _Search:
    """The function to be minimised on one time grid; remembers the last mode as its next start."""

    def __init__(
        self,
        data: TrackData,
        model: Model,
        step_hours: float,
        report_hours: Float[np.ndarray, " n"],
    ) -> None:
        hours = time_grid(data.hours, step_hours, report_hours, model.motion.same_moment_hours)
        self.problem = build_problem(
            motion=model.motion,
            field=model.field,
            layers=model.layers,
            hours=hours,
            fix_hours=data.hours,
            fix_km=data.at_km,
            covariance_km2=data.covariance_km2,
            start=model.start,
            heavy=model.heavy,
            pace=model.pace,
        )
        spells = 0 if self.problem.pace is None else self.problem.pace.spells
        self.parameters = model.parameters.with_spells(spells)
        states = interpolated_start(
            hours, data.hours, data.at_km, self.problem.dim, robust=model.heavy
        )
        self.cold = self.warm = Warm(states)
        self.evaluations = 0
        self.latest: tuple[bytes, Approximation] | None = None

    def at(self, free: Float[np.ndarray, " free"]) -> Approximation:
        """The approximation at some parameters; starts from the latest one, else anew."""
        key = free.tobytes()
        if self.latest is None or self.latest[0] != key:
            theta = self.parameters.full(free)
            try:
                found = approximate(self.problem, theta, self.warm)
            except ModeNotFound:
                found = self._anew(theta)
            self.evaluations += 1
            self.warm = found.warm
            self.latest = (key, found)
        return self.latest[1]

    def _anew(self, theta: Float[np.ndarray, " parameters"]) -> Approximation:
        try:
            return approximate(self.problem, theta, self.cold)
        except ModeNotFound as fault:
            raise Rejected from fault

    def value(self, free: Float[np.ndarray, " free"]) -> float:
        """Negative log posterior of the free parameters, up to a constant."""
        self._refuse_wild(free)
        with np.errstate(all="ignore"):
            found = self.at(free)
        return found.negative_log_marginal + self.parameters.penalty(free)[0]

    def _refuse_wild(self, free: Float[np.ndarray, " free"]) -> None:
        """No logarithm beyond 50 is worth a try: its exponential is no quantity of this world."""
        if np.abs(free[[p.positive for p in self.parameters.free]]).max(initial=0.0) > 50.0:
            raise Rejected

    def __call__(self, free: Float[np.ndarray, " free"]) -> tuple[float, np.ndarray]:
        """Negative log posterior of the free parameters and its gradient."""
        self._refuse_wild(free)
        with np.errstate(all="ignore"):
            found = self.at(free)
            gradient = found.gradient()[self.parameters.free_at]
        penalty, slope = self.parameters.penalty(free)
        return found.negative_log_marginal + penalty, gradient + slope

    def run(
        self,
        start: Float[np.ndarray, " free"],
        metric: Float[np.ndarray, "free free"],
        max_iterations: int,
        progress: Callable[[int, float], None],
    ) -> Minimum:
        """Search from `start`."""
        reach = np.array([p.reach for p in self.parameters.free])
        return minimise(
            self,
            start,
            metric,
            reach,
            tolerance=TOLERANCE,
            max_iterations=max_iterations,
            progress=progress,
        )

    def hessian(self, found: Minimum) -> Float[np.ndarray, "free free"]:
        """Hessian of the negative log posterior at the minimum."""
        spread = np.sqrt(np.diag(np.linalg.inv(found.metric)))
        reach = np.array([p.reach for p in self.parameters.free])
        # a twentieth of a standard error: far above rounding, far below the scale of curvature
        steps = 0.05 * np.minimum(spread, reach)
        return difference_hessian(lambda free: self(free)[1], found.at, steps)

    def metric(self, found: Minimum) -> Float[np.ndarray, "free free"]:
        """A positive definite metric for a search that starts where this one ended."""
        floor = np.array([p.reach**-2.0 for p in self.parameters.free])
        try:
            return nearest_positive(self.hessian(found), floor)
        except Rejected:
            return found.metric


def _conclude(
    data: TrackData,
    model: Model,
    settings: FitSettings,
    search: _Search,
    found: Minimum,
    hessian: Float[np.ndarray, "free free"],
    progress: Progress,
) -> Fit:
    problem, parameters = search.problem, search.parameters
    free_at = parameters.free_at
    best = search.at(found.at)
    status = FitStatus.CONVERGED if found.converged else FitStatus.NOT_CONVERGED
    try:
        np.linalg.cholesky(hessian)
    except np.linalg.LinAlgError:
        status = FitStatus.NOT_IDENTIFIED if found.converged else status
        floor = np.array([p.reach**-2.0 for p in parameters.free])
        hessian = nearest_positive(hessian, floor)
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
        parameters=parameter_table(parameters, model.motion, found.at, covariance, states.points),
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
    search = _Search(data, fit.model, 0.5 * settings.step_hours, report_hours)
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


def _with_points(search: _Search, states: States, count: int, progress: Progress) -> States:
    """Weighted points for the parameters' posterior, with the positions at each."""

    def log_density(free: Float[np.ndarray, " free"]) -> float:
        return -search.value(free)

    seed = zlib.crc32(states.theta.tobytes())
    at, log_design = lay_points(log_density, states.theta, states.theta_covariance, count, seed)
    log_weight, means, covariances = np.full(count, -np.inf), [], []
    n = states.problem.n_states
    for i, point in enumerate(at):
        progress(0.7 + 0.3 * i / count, "weighing parameters")
        try:
            log_weight[i] = log_density(point) - log_design[i]
            found = search.at(point)
        except Rejected:
            found = states.approximation
        means.append((found.mode.states + found.spread.adjoint)[:, :2])
        blocks = np.asarray(found.spread.steps.covariance)[:2, :2, :n]
        covariances.append(np.moveaxis(blocks, -1, 0))
    weight = normalised(log_weight)
    return replace(
        states,
        points=WeightedPoints(at, weight),
        mixture=PathMixture(weight, np.stack(means), np.stack(covariances)),
    )


def parameter_table(
    parameters: ParameterSet,
    motion: Motion,
    free: Float[np.ndarray, " free"],
    covariance: Float[np.ndarray, "free free"],
    points: WeightedPoints | None = None,
) -> pd.DataFrame:
    """Estimates on the reported scale, with standard deviations and 95 % intervals.

    From weighted points: posterior means on the engine's scale, turned to the reported one (of a
    positive parameter its median, nearly), and weighted quantiles. Else the mode, with intervals
    normal on the engine's scale.
    """
    free_at, size = parameters.free_at, len(parameters.all)
    names = [
        (p.name, p.unit, p.positive, np.eye(size)[i], "fixed" if p.fixed else "estimated")
        for i, p in enumerate(parameters.all)
        if p.reported
    ]
    for derived in motion.derived:
        powers = np.zeros(size)
        powers[: len(derived.powers)] = derived.powers
        names.append((derived.name, derived.unit, True, powers, "derived"))
    start = parameters.full(free)
    rows = []
    for name, unit, positive, combination, role in names:
        along = combination[free_at]
        value = float(combination @ start)
        spread = float(np.sqrt(max(along @ covariance @ along, 0.0)))
        interval = (value - NORMAL_95 * spread, value + NORMAL_95 * spread)
        if points is not None and along.any():
            values = value + (points.at - free) @ along
            value = float(points.weight @ values)
            spread = float(np.sqrt(points.weight @ (values - value) ** 2))
            interval = (points.quantile(values, 0.025), points.quantile(values, 0.975))
        rows.append(_row(name, unit, positive, value, spread, interval, role))
    return pd.DataFrame(rows)


def _row(
    name: str,
    unit: str,
    positive: bool,
    value: float,
    spread: float,
    interval: tuple[float, float],
    role: str,
) -> dict[str, object]:
    def natural(x: float) -> float:
        return float(np.exp(x)) if positive else float(x)

    return {
        "parameter": name,
        "unit": unit,
        "estimate": natural(value),
        "sd": spread * (natural(value) if positive else 1.0),
        "lower95": natural(interval[0]),
        "upper95": natural(interval[1]),
        "role": role,
    }


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
