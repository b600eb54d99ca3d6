"""The parameters of a fit: their names, units, scales and priors."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from jaxtyping import Float, Int


@dataclass(frozen=True)
class Parameter:
    """One parameter as the engine sees it.

    A positive parameter is handled as its logarithm (`positive`); prior and start are then of the
    logarithm. The prior is normal on the engine's scale; an infinite sd means none. A fixed
    parameter keeps its start.

    `reach` is the longest change the search makes in one step; one that is not `reported` has no
    row in the table of parameters. `smooth` names the curve whose bend it is: its prior sd is then
    chosen by the fit (`trackfit.inference.smoothing`). A `shared` one has the same value for all
    tags of a study.
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
    shared: bool = False


@dataclass(frozen=True, eq=False)
class JointNormal:
    """A normal density of some parameters together: exp(shift' b - b' precision b / 2).

    Its mean is inv(precision) shift. The precision may be singular: along some directions nothing
    is known then. `at` are the places of the parameters in the full vector, in order.
    """

    at: Int[np.ndarray, " some"]
    precision: Float[np.ndarray, "some some"]
    shift: Float[np.ndarray, " some"]


@dataclass(frozen=True)
class ParameterSet:
    """All parameters of a model, in the engine's order.

    A `joint` prior stands in place of the independent ones of its parameters, all of them free.
    """

    all: tuple[Parameter, ...]
    joint: JointNormal | None = None

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
        if self.joint is not None:
            precision[self.places(self.joint.at)] = 0.0
        offset = free - mean
        value, slope = 0.5 * float(np.sum(precision * offset**2)), precision * offset
        if self.joint is not None:
            at = self.places(self.joint.at)
            along = self.joint.precision @ free[at]
            value += float(free[at] @ (0.5 * along - self.joint.shift))
            slope[at] = along - self.joint.shift
        return value, slope

    @property
    def shared_at(self) -> Int[np.ndarray, " shared"]:
        """Places, in the full vector, of the free parameters that all tags share."""
        return np.array([i for i, p in enumerate(self.all) if p.shared and not p.fixed], dtype=int)

    def places(self, at: Int[np.ndarray, " some"]) -> Int[np.ndarray, " some"]:
        """Where free parameters, given by their places in the full vector, stand among the free."""
        return np.searchsorted(self.free_at, at)

    def first(self, count: int) -> ParameterSet:
        """The set of the first parameters."""
        return replace(self, all=self.all[:count])

    def with_spells(self, count: int) -> ParameterSet:
        """The set with one standard normal number a spell at its end, if there are none yet."""
        spells = tuple(
            Parameter(f"spell_{i + 1}", "1", False, 0.0, 0.0, 1.0, 1.0, reported=False)
            for i in range(count)
        )
        return self if self.all[-count:] == spells else replace(self, all=self.all + spells)
