"""What every motion tells the engine: its parameters and its transition over one step.

A motion's state holds k two-dimensional quantities (the position, then perhaps the velocity), and
moves in steps that are linear and Gaussian once the velocity field u is taken at the step's start:

    z' = (F x I2) z + (G x I2) u(x, t) + e,      e ~ N(0, Q x I2)

with F (k x k), G (k) and Q (k x k) the same for both axes.
"""

from __future__ import annotations

from typing import ClassVar, NamedTuple, Protocol

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
    """A positive parameter of a motion; the engine works with its logarithm."""

    name: str
    unit: str
    prior_median: float
    prior_log_sd: float


class Motion(Protocol):
    """A kind of motion. Instances hold no data and are hashable, so that JAX can key on them."""

    name: ClassVar[str]
    k: ClassVar[int]
    parameters: ClassVar[tuple[MotionParameter, ...]]

    def transition(
        self, log_parameters: Float[Array, " parameters"], dt_hours: Float[Array, " steps"]
    ) -> Transition:
        """F, G, W and log det Q for steps of the given lengths."""
        ...

    def start_precision(
        self, log_parameters: Float[Array, " parameters"], position_sd_km: Float[Array, ""]
    ) -> Float[Array, " k"]:
        """Prior precision, per axis, of each quantity of the first state."""
        ...

    def starting_values(self, speed_scale: float) -> tuple[float, ...]:
        """Rough natural values to start a fit from, given a diffusion in km per sqrt(hour)."""
        ...
