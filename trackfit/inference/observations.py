"""What the fixes say of the states: Gaussian factors, one a fix, on the time grid.

Fix k sees the position x of state i(k). Its factor, or *site*, is kept about the reported position
y_k, so that nothing is lost to rounding far from the plane's origin:

    exp(-1/2 e' L_k e + c_k' e),      e = x - y_k.

A Gaussian error N(0, s^2 S_k) is such a factor with L_k = inv(S_k)/s^2 and c_k = 0. A heavy-tailed
one is stood in for by the site that expectation propagation finds (`trackfit.inference.sites`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Self

import numpy as np
from jaxtyping import Float, Int

LOG_2PI = 1.8378770664093453


@dataclass(frozen=True)
class Sites:
    """Gaussian factors of the fixes: precision L_k (1/km^2) and pull c_k (1/km)."""

    precision: Float[np.ndarray, "fixes 2 2"]
    pull: Float[np.ndarray, "fixes 2"]

    @classmethod
    def none(cls, fixes: int) -> Self:
        """Sites that say nothing."""
        return cls(np.zeros((fixes, 2, 2)), np.zeros((fixes, 2)))

    def mixed(self, other: Sites, share: float) -> Sites:
        """Sites moved by a share of the way to others, in natural parameters."""
        return Sites(
            self.precision + share * (other.precision - self.precision),
            self.pull + share * (other.pull - self.pull),
        )

    def without_negative(self) -> Sites:
        """The same sites with negative precisions set to zero along their axes.

        A fix that contradicts the others may ask for negative precision; where the states are far
        from their mode that can leave no Hessian to go on with.
        """
        values, axes = np.linalg.eigh(self.precision)
        kept = np.maximum(values, 0.0)
        return Sites(np.einsum("kab,kb,kcb->kac", axes, kept, axes), self.pull)


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
        Error covariance in the plane at error scale one; the scale matrix where tails are heavy.
    heavy
        Whether errors are bivariate Student-t, not normal.
    """

    state: Int[np.ndarray, " fixes"]
    at_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]
    heavy: bool = False

    @property
    def n_parameters(self) -> int:
        """Error parameters at the end of the engine's vector: log scale, then log nu if heavy."""
        return 2 if self.heavy else 1

    @cached_property
    def seen(self) -> tuple[Int[np.ndarray, " seen"], Observations]:
        """The states that have fixes, and the observations numbered by them."""
        states, number = np.unique(self.state, return_inverse=True)
        return states, replace(self, state=number)

    @cached_property
    def precision(self) -> Float[np.ndarray, "fixes 2 2"]:
        """Inverse covariances at error scale one, 1/km^2."""
        return np.linalg.inv(self.covariance_km2)

    @cached_property
    def root_km(self) -> Float[np.ndarray, "fixes 2 2"]:
        """Lower Cholesky factors of the covariances at error scale one."""
        return np.linalg.cholesky(self.covariance_km2)

    def gaussian_sites(self, log_scale: float) -> Sites:
        """The sites that are exact where errors are normal."""
        return Sites(self.precision * np.exp(-2.0 * log_scale), np.zeros_like(self.at_km))

    def gaussian_constant(self, log_scale: float) -> float:
        """Normalising terms of normal errors in the negative log density."""
        log_det = float(np.linalg.slogdet(self.covariance_km2)[1].sum())
        return 0.5 * log_det + len(self.state) * (LOG_2PI + 2.0 * log_scale)

    def offset(self, states: Float[np.ndarray, "states dim"]) -> Float[np.ndarray, "fixes 2"]:
        """State's position less the reported one, for every fix."""
        return states[self.state, :2] - self.at_km

    def value(self, sites: Sites, states: Float[np.ndarray, "states dim"]) -> float:
        """Negative logarithm of the product of all sites."""
        e = self.offset(states)
        return float(0.5 * np.einsum("ka,kab,kb->", e, sites.precision, e) - np.sum(sites.pull * e))

    def add_gradient(
        self,
        sites: Sites,
        states: Float[np.ndarray, "states dim"],
        gradient: Float[np.ndarray, "states dim"],
    ) -> None:
        """Add the sites' gradient in the states, in place."""
        e = self.offset(states)
        np.add.at(
            gradient[:, :2], self.state, np.einsum("kab,kb->ka", sites.precision, e) - sites.pull
        )

    def add_information(self, sites: Sites, band: Float[np.ndarray, "states dim width"]) -> None:
        """Add the sites' precisions to a block tridiagonal matrix in banded storage, in place."""
        np.add.at(band[:, 0, 0], self.state, sites.precision[:, 0, 0])
        np.add.at(band[:, 0, 1], self.state, sites.precision[:, 0, 1])
        np.add.at(band[:, 1, 0], self.state, sites.precision[:, 1, 1])

    def gaussian_scale_gradient(
        self,
        sites: Sites,
        states: Float[np.ndarray, "states dim"],
        covariance: Float[np.ndarray, "fixes 2 2"],
        adjoint: Float[np.ndarray, "states dim"],
    ) -> float:
        """Derivative in log s of the Laplace marginal likelihood (negative log) of normal errors.

        Every precision P_k goes as s^-2, so the derivative of
        sum_k [1/2 e'P e + 1/2 tr(P V) + a'P e + 2 log s] is
        2 n - sum_k [e'P e + tr(P V) + 2 a'P e], with V (at the fixes' states) and a held.
        """
        e = self.offset(states)
        second = np.einsum("ka,kb->kab", e + 2.0 * adjoint[self.state, :2], e)
        inside = np.einsum("kab,kab->", sites.precision, second + covariance)
        return float(2.0 * len(self.state) - inside)

    def scale_sensitivity(
        self, sites: Sites, states: Float[np.ndarray, "states dim"]
    ) -> Float[np.ndarray, "states 2"]:
        """Derivative in log s of the gradient in the positions, for normal errors: -2 P (x - y)."""
        result = np.zeros((len(states), 2))
        e = self.offset(states)
        np.add.at(result, self.state, -2.0 * np.einsum("kab,kb->ka", sites.precision, e))
        return result
