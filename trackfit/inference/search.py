"""The function of the parameters that a fit minimises, on one time grid."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from jaxtyping import Float

from trackfit.inference.grid import build_problem, interpolated_start, time_grid
from trackfit.inference.laplace import ModeNotFound
from trackfit.inference.marginal import Approximation, Warm, approximate
from trackfit.inference.optimise import (
    Minimum,
    Rejected,
    difference_hessian,
    minimise,
    nearest_positive,
)
from trackfit.inference.task import Model, TrackData

TOLERANCE = 1e-5
"""Log-likelihood gain still to be had when a search ends: half a percent of a standard error."""


class Search:
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

    def start_from(self, other: Search) -> None:
        """Start where another search of the same track, on another grid, stands now.

        Sites belong to the fixes, so they are the same; from nothing, sites of fixes that
        contradict each other may not settle where tails are very heavy.
        """
        columns = [
            np.interp(self.problem.hours, other.problem.hours, column)
            for column in other.warm.states.T
        ]
        self.warm = Warm(np.stack(columns, axis=1), other.warm.sites)

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

    def with_spread(self, free: Float[np.ndarray, " free"]) -> Approximation:
        """The approximation at some parameters, its `spread` computed: that, too, can fail."""
        found = self.at(free)
        try:
            _ = found.spread
        except ModeNotFound as fault:
            raise Rejected from fault
        return found

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
            found = self.with_spread(free)
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
        """Hessian of the negative log posterior at the minimum.

        Raises
        ------
        Rejected
            A point beside the minimum has no value, or no finite gradient.
        """
        reach = np.array([p.reach for p in self.parameters.free])
        metric = nearest_positive(found.metric, reach**-2.0)
        variance = np.diag(np.linalg.inv(metric))
        # where the metric is too uneven to be inverted the reach has to do
        spread = np.sqrt(np.where(variance > 0.0, variance, np.inf))
        # a twentieth of a standard error: far above rounding, far below the scale of curvature
        steps = 0.05 * np.minimum(spread, reach)
        hessian = difference_hessian(lambda free: self(free)[1], found.at, steps)
        if not np.isfinite(hessian).all():
            raise Rejected
        return hessian

    def metric(self, found: Minimum) -> Float[np.ndarray, "free free"]:
        """A positive definite metric for a search that starts where this one ended."""
        floor = np.array([p.reach**-2.0 for p in self.parameters.free])
        try:
            return nearest_positive(self.hessian(found), floor)
        except Rejected:
            return found.metric
