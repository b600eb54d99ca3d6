"""Posterior of the parameters by weighted points, where a normal approximation is too plain.

Posteriors of variances and of tails are skewed. Points are laid around the mode by a scrambled
Sobol sequence, stretched on both sides of every principal axis to the density's own fall (a split
normal; Rue, Martino & Chopin 2009, J. R. Stat. Soc. B 71:319, section 6.5), and weighted by the
marginal likelihood they really have: importance sampling with a low-discrepancy design. Every
point keeps its states, so positions average over parameters without linearising in them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from jaxtyping import Float
from scipy.special import ndtri
from scipy.stats import qmc

from trackfit.inference.optimise import Rejected

REACH = np.sqrt(2.0)
"""Distance from the mode, in standard deviations, at which the density's fall is measured."""

WIDENED = 1.3
"""The design is this much wider than the split normal, so that no tail weighs too much."""


@dataclass(frozen=True)
class WeightedPoints:
    """Points in the free parameters (engine's scale) with weights that sum to one."""

    at: Float[np.ndarray, "points free"]
    weight: Float[np.ndarray, " points"]

    @property
    def effective(self) -> float:
        """Number of equally weighted points that would be worth the same (Kish 1965)."""
        return float(1.0 / np.sum(self.weight**2))

    @property
    def mean(self) -> Float[np.ndarray, " free"]:
        """Posterior mean."""
        return self.weight @ self.at

    @property
    def covariance(self) -> Float[np.ndarray, "free free"]:
        """Posterior covariance."""
        apart = self.at - self.mean
        return (self.weight[:, None] * apart).T @ apart

    def quantile(self, values: Float[np.ndarray, " points"], level: float) -> float:
        """Weighted quantile of some function of the parameters, given at every point."""
        order = np.argsort(values)
        mass = np.cumsum(self.weight[order]) - 0.5 * self.weight[order]
        return float(np.interp(level, mass, values[order]))


def lay_points(
    log_density: Callable[[Float[np.ndarray, " free"]], float],
    mode: Float[np.ndarray, " free"],
    covariance: Float[np.ndarray, "free free"],
    count: int,
    seed: int,
) -> tuple[Float[np.ndarray, "count free"], Float[np.ndarray, " count"]]:
    """Points of the design and the logarithm of their density under it.

    `log_density` is evaluated twice on every principal axis; where it has no value (`Rejected`)
    the normal approximation's fall is taken.
    """
    values, vectors = np.linalg.eigh(covariance)
    axes = vectors * np.sqrt(values)
    top = log_density(mode)
    scales = np.ones((2, len(mode)))
    for j in range(len(mode)):
        for side, sign in enumerate((-1.0, 1.0)):
            try:
                fall = top - log_density(mode + sign * REACH * axes[:, j])
            except Rejected:
                continue
            scales[side, j] = np.clip(REACH / np.sqrt(max(2.0 * fall, 1e-9)), 0.3, 3.0)
    scales *= WIDENED
    uniform = qmc.Sobol(len(mode), seed=seed).random(count)
    z = ndtri(np.clip(uniform, 1e-9, 1.0 - 1e-9))
    stretch = np.where(z < 0.0, scales[0], scales[1])
    log_design = -0.5 * np.sum(z**2, axis=1) - np.sum(np.log(stretch), axis=1)
    return mode + (z * stretch) @ axes.T, log_design


def normalised(log_weight: Float[np.ndarray, " points"]) -> Float[np.ndarray, " points"]:
    """Weights that sum to one."""
    weight = np.exp(log_weight - np.max(log_weight))
    return weight / weight.sum()


@dataclass(frozen=True)
class PathMixture:
    """Positions at every point: the posterior of a position is a mixture of normals."""

    weight: Float[np.ndarray, " points"]
    mean_km: Float[np.ndarray, "points states 2"]
    covariance_km2: Float[np.ndarray, "points states 2 2"]

    def mean(self) -> Float[np.ndarray, "states 2"]:
        """Mean of the mixture."""
        return np.einsum("p,psa->sa", self.weight, self.mean_km)

    def covariance(self) -> Float[np.ndarray, "states 2 2"]:
        """Covariance of the mixture."""
        apart = self.mean_km - self.mean()
        inside = np.einsum("p,psab->sab", self.weight, self.covariance_km2)
        return inside + np.einsum("p,psa,psb->sab", self.weight, apart, apart)

    def squared_radius(self, probability: float) -> Float[np.ndarray, " states"]:
        """Squared Mahalanobis radius of the region that holds a share of the mixture.

        Components are taken as concentric with their own size: the share of component i inside r
        is 1 - exp(-r^2 / (2 rho_i)), with rho_i the square root of the ratio of determinants of its
        second moment about the mixture's mean to the mixture's covariance. For one component it is
        -2 ln(1 - p).
        """
        whole = np.linalg.det(self.covariance())
        apart = self.mean_km - self.mean()
        second = self.covariance_km2 + apart[..., :, None] * apart[..., None, :]
        ratio = np.sqrt(np.linalg.det(second) / whole)
        low, high = np.zeros(ratio.shape[1]), np.full(ratio.shape[1], -2.0 * np.log1p(-probability))
        high = high * np.max(ratio, axis=0)
        for _ in range(60):
            middle = 0.5 * (low + high)
            share = self.weight @ -np.expm1(-0.5 * middle / ratio)
            low = np.where(share < probability, middle, low)
            high = np.where(share < probability, high, middle)
        return 0.5 * (low + high)
