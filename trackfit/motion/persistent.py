"""Persistent motion: the animal keeps heading, relaxing to the velocity field."""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial
from typing import ClassVar

import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.motion.motion import DerivedParameter, MotionParameter, Transition

SERIES_BELOW = 0.1
"""Below this step, in persistence times, the position variance is summed as a series."""

SERIES_TERMS = 12


@dataclass(frozen=True)
class Persistent:
    """Exact steps of dx = v dt, dv = -(v - u)/tau dt + s dW, with u held over a step.

    The velocity is an Ornstein-Uhlenbeck process around the field u(x, t) (Uhlenbeck & Ornstein
    1930, Phys. Rev. 36:823; the form with u held is a local linearisation). With a = exp(-dt/tau):

        E v' = u + a (v - u),      E x' = x + u dt + tau (1 - a) (v - u)

    and per axis, with s^2 = w^2 / tau,

        q_xx = s^2 tau^2 [dt - 2 tau (1 - a) + tau/2 (1 - a^2)]
        q_xv = s^2 tau^2 / 2 (1 - a)^2,      q_vv = s^2 tau / 2 (1 - a^2).

    Parameters are the speed w, the root mean square of |v - u| in the long run (both axes), and the
    persistence time tau. Over times much longer than tau the motion is diffusive with sigma =
    w sqrt(tau) = s tau.
    """

    name: ClassVar[str] = "persistent"
    k: ClassVar[int] = 2
    same_moment_hours: ClassVar[float] = 5.0 / 3600.0
    parameters: ClassVar[tuple[MotionParameter, ...]] = (
        MotionParameter("speed", "km/h", 1.0, prior_log_sd=2.0, speed_power=1.0),
        MotionParameter("persistence", "h", 2.0, prior_log_sd=2.0, speed_power=0.0),
    )
    derived: ClassVar[tuple[DerivedParameter, ...]] = (
        DerivedParameter("long_run_diffusion", "km/sqrt(h)", (1.0, 0.5)),
    )

    def transition(
        self, log_parameters: Float[Array, " parameters"], dt_hours: Float[Array, " steps"]
    ) -> Transition:
        """F, G, W and log det Q for steps of the given lengths."""
        speed, tau = jnp.exp(log_parameters[0]), jnp.exp(log_parameters[1])
        d = dt_hours / tau
        gone = -jnp.expm1(-d)
        q_xx = (speed * tau) ** 2 * position_growth(d)
        q_xv = 0.5 * speed**2 * tau * gone**2
        q_vv = 0.5 * speed**2 * gone * (2.0 - gone)
        determinant = q_xx * q_vv - q_xv**2
        return Transition(
            F=[[jnp.ones_like(d), tau * gone], [0, 1.0 - gone]],
            G=[dt_hours - tau * gone, gone],
            W=[
                [q_vv / determinant, -q_xv / determinant],
                [-q_xv / determinant, q_xx / determinant],
            ],
            log_det=jnp.log(determinant),
        )

    def start_precision(
        self, log_parameters: Float[Array, " parameters"], position_sd_km: Float[Array, ""]
    ) -> list[Float[Array, ""]]:
        """Vague for the position, long-run spread for the velocity around the field."""
        return [position_sd_km**-2.0, 2.0 * jnp.exp(-2.0 * log_parameters[0])]

    def starting_values(self, diffusion: float, spacing_hours: float) -> tuple[float, ...]:
        """Speed and persistence of the asked diffusion, persistent over a typical spacing."""
        return diffusion / spacing_hours**0.5, spacing_hours


def position_growth(d: Float[Array, " steps"]) -> Float[Array, " steps"]:
    """D - 2 (1 - e^-d) + (1 - e^-2d)/2, without cancellation where d is small.

    Its series is sum_(n >= 3) (-1)^n (2 - 2^(n-1)) / n! d^n = d^3/3 - d^4/4 + ...
    """
    # both branches must be finite everywhere, or the derivative of the chosen one is lost
    small, large = jnp.minimum(d, SERIES_BELOW), jnp.maximum(d, SERIES_BELOW)
    series = jnp.zeros_like(d)
    for n in range(SERIES_TERMS + 2, 2, -1):
        series = series * small + (-1.0) ** n * (2.0 - 2.0 ** (n - 1)) / factorial(n)
    gone = -jnp.expm1(-large)
    return jnp.where(d < SERIES_BELOW, series * small**3, large - gone - 0.5 * gone**2)
