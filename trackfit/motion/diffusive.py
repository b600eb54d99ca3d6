"""Diffusive motion: the animal drifts with the velocity field and diffuses around it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.motion.motion import MotionParameter, Transition


@dataclass(frozen=True)
class Diffusive:
    """Euler-Maruyama steps of dx = u(x, t) dt + sigma dW (Kloeden & Platen 1992, section 10.2).

    x' = x + u(x, t) dt + sigma sqrt(dt) e, so F = 1, G = dt, Q = sigma^2 dt. The noise is additive,
    for which the scheme converges with strong order one.
    """

    name: ClassVar[str] = "diffusive"
    k: ClassVar[int] = 1
    parameters: ClassVar[tuple[MotionParameter, ...]] = (
        MotionParameter("diffusion", "km/sqrt(h)", prior_median=1.0, prior_log_sd=2.0),
    )

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
    ) -> Float[Array, " k"]:
        """Only the position, with its vague prior."""
        del log_parameters
        return jnp.asarray([position_sd_km**-2.0])

    def starting_values(self, speed_scale: float) -> tuple[float, ...]:
        """The diffusion itself."""
        return (speed_scale,)
