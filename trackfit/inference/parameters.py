"""The parameters of a fit: their names, units, scales and priors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float


@dataclass(frozen=True)
class Parameter:
    """One parameter as the engine sees it.

    A positive parameter is handled as its logarithm (`positive`); prior and start are then of the
    logarithm. The prior is normal on the engine's scale; an infinite sd means none. A fixed
    parameter keeps its start.

    `reach` is the longest change the search makes in one step; one that is not `reported` has no
    row in the table of parameters. `smooth` names the curve whose bend it is: its prior sd is then
    chosen by the fit (`trackfit.inference.smoothing`).
    """

    name: str
    unit: str
    positive: bool
    start: float
    prior_mean: float
    prior_sd: float
    reach: float
    fixed: bool = False
    reported: bool = True
    smooth: str | None = None


@dataclass(frozen=True)
class ParameterSet:
    """All parameters of a model, in the engine's order."""

    all: tuple[Parameter, ...]

    @property
    def free(self) -> tuple[Parameter, ...]:
        """Those that are estimated."""
        return tuple(p for p in self.all if not p.fixed)

    @property
    def free_at(self) -> np.ndarray:
        """Their places in the full vector."""
        return np.array([i for i, p in enumerate(self.all) if not p.fixed], dtype=int)

    def full(self, free: Float[np.ndarray, " free"]) -> Float[np.ndarray, " parameters"]:
        """The full vector for values of the free parameters."""
        theta = np.array([p.start for p in self.all])
        theta[self.free_at] = free
        return theta

    def penalty(self, free: Float[np.ndarray, " free"]) -> tuple[float, Float[np.ndarray, " free"]]:
        """Negative log prior density, up to a constant, and its gradient."""
        mean = np.array([p.prior_mean for p in self.free])
        precision = np.array([p.prior_sd**-2.0 for p in self.free])
        offset = free - mean
        return 0.5 * float(np.sum(precision * offset**2)), precision * offset

    def first(self, count: int) -> ParameterSet:
        """The set of the first parameters."""
        return ParameterSet(self.all[:count])

    def with_spells(self, count: int) -> ParameterSet:
        """The set with one standard normal number a spell at its end, if there are none yet."""
        spells = tuple(
            Parameter(f"spell_{i + 1}", "1", False, 0.0, 0.0, 1.0, 1.0, reported=False)
            for i in range(count)
        )
        return self if self.all[-count:] == spells else ParameterSet(self.all + spells)
