"""Estimates on the reported scale, with standard deviations and intervals."""

from __future__ import annotations

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.inference.integrate import WeightedPoints
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.smoothing import effective_bends
from trackfit.motion import Motion

NORMAL_95 = 1.959963984540054


def parameter_table(
    parameters: ParameterSet,
    motion: Motion,
    free: Float[np.ndarray, " free"],
    covariance: Float[np.ndarray, "free free"],
    sample: WeightedPoints | None = None,
) -> pd.DataFrame:
    """Estimates on the reported scale, with standard deviations and 95 % intervals.

    From a sample of the posterior: means on the engine's scale, turned to the reported one (of a
    positive parameter its median, nearly), and quantiles. Else the mode, with intervals normal on
    the engine's scale. Shared parameters are of that kind always: one tag's points know nothing of
    how the others see them. For a smooth term there is a row with the number of bends that the
    data tell.
    """
    free_at, size = parameters.free_at, len(parameters.all)
    names = [
        (p.name, p.unit, p.positive, np.eye(size)[i], _role(p))
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
        if sample is not None and along.any() and role != "shared":
            values = value + (sample.at - free) @ along
            value = float(sample.weight @ values)
            spread = float(np.sqrt(sample.weight @ (values - value) ** 2))
            interval = (sample.quantile(values, 0.025), sample.quantile(values, 0.975))
        rows.append(_row(name, unit, positive, value, spread, interval, role))
    for name, bends in effective_bends(parameters, covariance).items():
        rows.append(_row(f"{name}.bends", "1", False, bends, 0.0, (bends, bends), "chosen"))
    return pd.DataFrame(rows)


def _role(parameter: Parameter) -> str:
    if parameter.fixed:
        return "fixed"
    return "shared" if parameter.shared else "estimated"


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
