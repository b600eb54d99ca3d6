"""Diffusive motion: the animal drifts with the velocity field and diffuses around it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.motion.motion import DerivedParameter, MotionParameter, Transition


@dataclass(frozen=True)
class Diffusive:
    """Euler-Maruyama steps of dx = u(x, t) dt + sigma dW (Kloeden & Platen 1992, section 10.2).

    x' = x + u(x, t) dt + sigma sqrt(dt) e, so F = 1, G = dt, Q = sigma^2 dt. The noise is additive,
    for which the scheme converges with strong order one.
    """

    name: ClassVar[str] = "diffusive"
    k: ClassVar[int] = 1
    same_moment_hours: ClassVar[float] = 0.5 / 3600.0
    parameters: ClassVar[tuple[MotionParameter, ...]] = (
        MotionParameter("diffusion", "km/sqrt(h)", 0.5, prior_log_sd=2.0, speed_power=1.0),
    )
    derived: ClassVar[tuple[DerivedParameter, ...]] = ()

    def transition(
        self, log_parameters: Float[Array, " parameters"], dt_hours: Float[Array, " steps"]
    ) -> Transition:
        """F, G, W and log det Q for steps of the given lengths."""
        variance = jnp.exp(2.0 * log_parameters[0]) * dt_hours
        return Transition(
            F=[[jnp.ones_like(dt_hours)]],
            G=[dt_hours],
            W=[[1.0 / variance]],
            log_det=jnp.log(variance),
        )

    def start_precision(
        self, log_parameters: Float[Array, " parameters"], position_sd_km: Float[Array, ""]
    ) -> list[Float[Array, ""]]:
        """Only the position, with its vague prior."""
        del log_parameters
        return [position_sd_km**-2.0]

    def starting_values(self, diffusion: float, spacing_hours: float) -> tuple[float, ...]:
        """The diffusion itself."""
        del spacing_hours
        return (diffusion,)
