"""What every motion tells the engine: its parameters and its transition over one step.

A motion's state holds k two-dimensional quantities (the position, then perhaps the velocity), and
moves in steps that are linear and Gaussian once the velocity field u is taken at the step's start:

    z' = (F x I2) z + (G x I2) u(x, t) + e,      e ~ N(0, Q x I2)

with F (k x k), G (k) and Q (k x k) the same for both axes.
"""

from __future__ import annotations

from typing import ClassVar, NamedTuple, Protocol, runtime_checkable

from jaxtyping import Array, Float

from trackfit.motion.blocks import Matrix, Vector


class Transition(NamedTuple):
    """The linear-Gaussian step of a motion, for many steps; W is the inverse of Q.

    Matrices are lists of rows, their elements vectors over steps or 0 for a structural zero;
    log_det is log det Q for one axis.
    """

    F: Matrix
    G: Vector
    W: Matrix
    log_det: Float[Array, " steps"]


class MotionParameter(NamedTuple):
    """A positive parameter of a motion; the engine works with its logarithm.

    The weak prior's median is `prior_median` at a typical speed of 1 km/h, and goes with the
    speed to the power `speed_power`.
    """

    name: str
    unit: str
    prior_median: float
    prior_log_sd: float
    speed_power: float


class DerivedParameter(NamedTuple):
    """A product of powers of a motion's parameters, reported beside them."""

    name: str
    unit: str
    powers: tuple[float, ...]


@runtime_checkable
class Motion(Protocol):
    """A kind of motion. Instances hold no data and are hashable, so that JAX can key on them.

    Moments closer than `same_moment_hours` are one: half a second where noise goes as dt, seconds
    where it goes as dt^3 and the precision of a step as dt^-3.
    """

    name: ClassVar[str]
    k: ClassVar[int]
    same_moment_hours: ClassVar[float]
    parameters: ClassVar[tuple[MotionParameter, ...]]
    derived: ClassVar[tuple[DerivedParameter, ...]]

    def transition(
        self, log_parameters: Float[Array, " parameters"], dt_hours: Float[Array, " steps"]
    ) -> Transition:
        """F, G, W and log det Q for steps of the given lengths."""
        ...

    def start_precision(
        self, log_parameters: Float[Array, " parameters"], position_sd_km: Float[Array, ""]
    ) -> list[Float[Array, ""]]:
        """Prior precision, per axis, of the first state: position, then velocity less the field."""
        ...

    def starting_values(self, diffusion: float, spacing_hours: float) -> tuple[float, ...]:
        """Rough natural values to start a fit from.

        Given a diffusion in km per sqrt(hour) and the typical time between fixes.
        """
        ...
