"""What the fixes say of the states: Gaussian factors, gathered on the time grid.

Fix k sees the state i(k) with error N(0, s^2 S_k); s is the common error scale. Fixes that share a
state are combined into one factor of the same information, so the engine sees at most one a state.
"""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.process import LOG_2PI, Sightings


@dataclass(frozen=True)
class Observations:
    """The fixes of one track.

    Attributes
    ----------
    state
        Index on the time grid of each fix.
    at_km
        Reported position in the plane.
    covariance_km2
        Error covariance in the plane at error scale one.
    """

    state: Int[np.ndarray, " fixes"]
    at_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]

    def __post_init__(self) -> None:
        object.__setattr__(self, "_precision", np.linalg.inv(self.covariance_km2))

    @property
    def precision(self) -> Float[np.ndarray, "fixes 2 2"]:
        """Inverse covariances at error scale one, 1/km^2."""
        return self._precision  # type: ignore[attr-defined]

    def gathered(self, log_scale: float, padded: int) -> tuple[Sightings, float]:
        """One Gaussian factor a state, and the constant of the negative log density they leave out.

        The constant holds the normalising terms of every fix and the disagreement between fixes
        that share a state.
        """
        precision = self.precision * np.exp(-2.0 * log_scale)
        total = np.zeros((padded, 2, 2))
        weighted = np.zeros((padded, 2))
        np.add.at(total, self.state, precision)
        np.add.at(weighted, self.state, np.einsum("kab,kb->ka", precision, self.at_km))
        seen = np.unique(self.state)
        mean = np.zeros((padded, 2))
        mean[seen] = np.linalg.solve(total[seen], weighted[seen][..., None])[..., 0]
        apart = self.at_km - mean[self.state]
        disagreement = 0.5 * np.einsum("ka,kab,kb->", apart, precision, apart)
        log_det = np.linalg.slogdet(self.covariance_km2)[1].sum()
        n = len(self.state)
        constant = disagreement + 0.5 * log_det + n * (LOG_2PI + 2.0 * log_scale)
        packed = np.stack([total[:, 0, 0], total[:, 0, 1], total[:, 1, 1]])
        return Sightings(jnp.asarray(mean.T), jnp.asarray(packed)), float(constant)

    def scale_gradient(
        self,
        log_scale: float,
        position_km: Float[np.ndarray, "states 2"],
        covariance: Float[np.ndarray, "states 2 2"],
        adjoint: Float[np.ndarray, "states 2"],
    ) -> float:
        """Derivative in log s of the Laplace marginal likelihood (negative log), exact.

        Every precision P_k goes as s^-2, so the derivative of
        sum_k [1/2 e'P e + 1/2 tr(P V) + a'P e + 2 log s] is
        2 n - sum_k [e'P e + tr(P V) + 2 a'P e], with e = x - y and V, a held.
        """
        precision = self.precision * np.exp(-2.0 * log_scale)
        e = position_km[self.state] - self.at_km
        second = np.einsum("ka,kb->kab", e + 2.0 * adjoint[self.state], e)
        inside = np.einsum("kab,kab->", precision, second + covariance[self.state])
        return float(2.0 * len(self.state) - inside)

    def scale_sensitivity(
        self, log_scale: float, position_km: Float[np.ndarray, "states 2"]
    ) -> Float[np.ndarray, "states 2"]:
        """Derivative in log s of the gradient in the positions, positions held: -2 P (x - y)."""
        precision = self.precision * np.exp(-2.0 * log_scale)
        e = position_km[self.state] - self.at_km
        result = np.zeros_like(position_km)
        np.add.at(result, self.state, -2.0 * np.einsum("kab,kb->ka", precision, e))
        return result
