"""Minimising a smooth function of a few parameters whose exact gradient is dear.

A quasi-Newton method (BFGS; Nocedal & Wright 2006, chapters 3 and 6) with a backtracking line
search. A point where the function cannot be evaluated is a rejected step, never a failure.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from jaxtyping import Float

Vector = Float[np.ndarray, " parameters"]
Square = Float[np.ndarray, "parameters parameters"]

MAX_HALVINGS = 12
MAX_REJECTED = 40
"""Points without a value after which a search ends: one that converges meets a few at most."""

MAX_IDLE = 3
"""Steps in a row that gain no more than rounding: there is nothing left to gain."""

STEP_HEIGHT = 1e-3
"""A search that can go no further down has settled where the promised gain is below: four
hundredths of a standard error."""


class Rejected(Exception):
    """The function has no value at this point."""


@dataclass(frozen=True)
class Minimum:
    """Where the search ended.

    `decrement` is the gain that the quadratic model still promises; `metric` its Hessian.
    """

    at: Vector
    value: float
    gradient: Vector
    metric: Square
    decrement: float
    iterations: int
    converged: bool


def minimise(
    function: Callable[[Vector], tuple[float, Vector]],
    start: Vector,
    metric: Square,
    reach: Vector,
    *,
    tolerance: float,
    max_iterations: int,
    progress: Callable[[int, float], None] = lambda iteration, decrement: None,
) -> Minimum:
    """Search downhill from `start`.

    Parameters
    ----------
    function
        Value and gradient; raises `Rejected` where it has none.
    metric
        First guess of the Hessian, positive definite.
    reach
        Longest change of each parameter in one step.
    tolerance
        The search ends where the promised gain 1/2 g' inv(B) g is below.

    Raises
    ------
    Rejected
        The function has no value at `start`.
    """
    at = start
    value, gradient = function(at)
    if not _finite(value, gradient):
        raise Rejected
    decrement, idle, budget = np.inf, 0, _Budget()
    for iteration in range(max_iterations):
        try:
            step = -np.linalg.solve(metric, gradient)
        except np.linalg.LinAlgError:
            # a slope without end has worn the modelled curvature down to nothing
            return Minimum(at, value, gradient, metric, decrement, iteration, False)
        decrement = -0.5 * float(gradient @ step)
        progress(iteration, decrement)
        if decrement < tolerance:
            return Minimum(at, value, gradient, metric, decrement, iteration, True)
        step = step / max(1.0, float(np.max(np.abs(step) / reach)))
        spent = idle == MAX_IDLE
        found = None if spent else _backtrack(function, at, value, gradient, step, budget)
        if found is None:
            # the marginal likelihood has tiny steps where a path crosses from cell to cell of a
            # layer: near its minimum no descent may be left to find
            settled = decrement < STEP_HEIGHT
            return Minimum(at, value, gradient, metric, decrement, iteration, settled)
        moved, new_value, new_gradient = found
        idle = idle + 1 if new_value > value - _noise(value) else 0
        value = new_value
        metric = _updated(metric, moved - at, new_gradient - gradient)
        at, gradient = moved, new_gradient
    return Minimum(at, value, gradient, metric, decrement, max_iterations, False)


@dataclass
class _Budget:
    """How many rejected points a search may still meet."""

    left: int = MAX_REJECTED


def _noise(value: float) -> float:
    """What values differ by at rounding."""
    return 1e-10 * (1.0 + abs(value))


def _backtrack(
    function: Callable[[Vector], tuple[float, Vector]],
    at: Vector,
    value: float,
    gradient: Vector,
    step: Vector,
    budget: _Budget,
) -> tuple[Vector, float, Vector] | None:
    slope = float(gradient @ step)
    length = 1.0
    for _ in range(MAX_HALVINGS):
        trial = at + length * step
        try:
            new_value, new_gradient = function(trial)
        except Rejected:
            budget.left -= 1
            if budget.left <= 0:
                return None
            length *= 0.25
            continue
        ceiling = value + 1e-4 * length * slope + _noise(value)
        if _finite(new_value, new_gradient) and new_value <= ceiling:
            return trial, new_value, new_gradient
        length *= 0.5
    return None


def _finite(value: float, gradient: Vector) -> bool:
    return bool(np.isfinite(value) and np.isfinite(gradient).all())


def _updated(metric: Square, step: Vector, change: Vector) -> Square:
    """BFGS update, damped so that the metric stays positive definite (Powell 1978)."""
    along = metric @ step
    curvature, modelled = float(step @ change), float(step @ along)
    if curvature < 0.2 * modelled:
        mix = 0.8 * modelled / (modelled - curvature)
        change = mix * change + (1.0 - mix) * along
        curvature = float(step @ change)
    return metric - np.outer(along, along) / modelled + np.outer(change, change) / curvature


def difference_hessian(gradient: Callable[[Vector], Vector], at: Vector, steps: Vector) -> Square:
    """Hessian by central differences of the exact gradient, made symmetric."""
    columns = []
    for j, step in enumerate(steps):
        shift = np.zeros_like(at)
        shift[j] = step
        columns.append((gradient(at + shift) - gradient(at - shift)) / (2.0 * step))
    hessian = np.stack(columns, axis=1)
    return 0.5 * (hessian + hessian.T)


def nearest_positive(hessian: Square, floor: Vector) -> Square:
    """A positive definite metric: negative or tiny curvature is turned up in scaled directions.

    `floor` is the smallest curvature accepted along each parameter.
    """
    root = np.sqrt(floor)
    scaled = hessian / np.outer(root, root)
    eigenvalues, vectors = np.linalg.eigh(scaled)
    raised = (vectors * np.maximum(np.abs(eigenvalues), 1.0)) @ vectors.T
    return raised * np.outer(root, root)
