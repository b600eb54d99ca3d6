"""Where a path may go: at sea, with the weight of an animal that turns from the shore."""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Bool, Float, Int

from trackfit.inference.states import States
from trackfit.layers.shore import Shore

WEIGHED_SD = 4.5
"""A step that is expected to end farther off land than so many of its sds has the weight one."""

LEAST_SHARE = 1e-12


@dataclass(frozen=True)
class Strides:
    """The next step of every state but the last.

    The next position is expected at x + v `glide_hours`, with v the velocity (no glide where the
    motion has none), and spreads around that with `sd_km` along either axis.
    """

    glide_hours: Float[np.ndarray, " steps"]
    sd_km: Float[np.ndarray, " steps"]

    @classmethod
    def of(cls, states: States) -> Strides:
        """Strides of a fitted track.

        The sd comes from the precision between neighbours, -W J, so that a pace that varies in time
        is in it. The drift of the velocity field within one step is left out.
        """
        problem, band = states.problem, states.approximation.mode.band
        motion, dim = problem.motion, problem.dim
        weight = np.maximum(-0.5 * (band[:-1, 0, dim] + band[:-1, 1, dim]), 1e-12)
        if motion.k == 1:
            return cls(np.zeros(len(weight)), weight**-0.5)
        log_parameters = jnp.asarray(states.approximation.theta[: len(motion.parameters)])
        F, _, W, _ = motion.transition(log_parameters, jnp.asarray(np.diff(problem.hours)))
        own, cross, other = (np.asarray(W[i][j]) for i, j in ((0, 0), (0, 1), (1, 1)))
        # variance of x' times its precision given v', the same at any pace
        ratio = own * other / (own * other - cross**2)
        return cls(np.asarray(F[0][1]), np.sqrt(ratio / weight))

    def along(self, first: int, last: int) -> Strides:
        """Those of the states of a stretch, both ends included."""
        return Strides(self.glide_hours[first:last], self.sd_km[first:last])


@dataclass(frozen=True)
class SeaBounds:
    """Steps at sea, and the weight 1/Z of a state whose next step must end there.

    Z is the probability that a free step would (`Shore.share_at_sea` around the place where the
    step is expected to end). It asks where the step ends only, not what lies in between.
    """

    shore: Shore
    strides: Strides | None

    def clear(
        self, start_km: Float[np.ndarray, "m 2"], end_km: Float[np.ndarray, "m 2"]
    ) -> Bool[np.ndarray, " m"]:
        """Tell which steps stay at sea."""
        return self.shore.clear(start_km, end_km)

    def log_weight(
        self, states: Float[np.ndarray, "m dim"], number: Int[np.ndarray, " m"]
    ) -> Float[np.ndarray, " m"]:
        """-log Z of states, by their number in the stretch; its last one takes no step in it."""
        weight = np.zeros(len(number))
        if self.strides is None:
            return weight
        steps = np.flatnonzero(number < len(self.strides.sd_km))
        number, next_km = number[steps], states[steps, :2]
        if states.shape[1] == 4:
            next_km = next_km + states[steps, 2:] * self.strides.glide_hours[number, None]
        sd = self.strides.sd_km[number]
        close = np.flatnonzero(self.shore.room_at(next_km) < WEIGHED_SD * sd)
        share = self.shore.share_at_sea(next_km[close], sd[close])
        weight[steps[close]] = -np.log(np.maximum(share, LEAST_SHARE))
        return weight
