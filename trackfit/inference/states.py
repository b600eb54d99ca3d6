"""The states of a fitted track: means, covariances, regions and draws, parameters included."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.integrate import PathMixture, WeightedPoints
from trackfit.inference.marginal import Approximation, approximate
from trackfit.inference.problem import TrackProblem


@dataclass(frozen=True)
class Drawn:
    """Draws of the whole path from one Gaussian.

    `rows` numbers them among all draws; `band` is the Gaussian's precision in banded storage;
    `centre` is what each is drawn around.
    """

    rows: Int[np.ndarray, " some"]
    band: Float[np.ndarray, "states dim 2*dim"]
    centre: Float[np.ndarray, "some states dim"]
    paths: Float[np.ndarray, "some states dim"]


def _centre(found: Approximation) -> Float[np.ndarray, "states dim"]:
    """Posterior mean of the states at fixed parameters, to first order."""
    return found.mode.states + found.spread.adjoint


@dataclass(frozen=True)
class States:
    """The states of a fitted track on its time grid.

    `theta` (the mode) and `theta_covariance` are of the free parameters on the engine's scale;
    `sensitivity` is the derivative of the states in them. Where weighted points stand for the
    parameters' posterior, `points` and `mixture` hold them and the positions at each; `sample` is a
    long sample of the same posterior.
    """

    approximation: Approximation
    covariance: Float[np.ndarray, "states dim dim"]
    sensitivity: Float[np.ndarray, "states dim free"]
    free_at: Int[np.ndarray, " free"]
    theta: Float[np.ndarray, " free"]
    theta_covariance: Float[np.ndarray, "free free"]
    points: WeightedPoints | None = None
    mixture: PathMixture | None = None
    sample: WeightedPoints | None = None

    @property
    def problem(self) -> TrackProblem:
        """The track on its time grid."""
        return self.approximation.problem

    @property
    def mean(self) -> Float[np.ndarray, "states dim"]:
        """Posterior mean of the states: the mode and its first-order correction."""
        return _centre(self.approximation)

    def positions_km(self) -> Float[np.ndarray, "states 2"]:
        """Posterior mean of the positions, averaged over the parameters."""
        return self.mean[:, :2] if self.mixture is None else self.mixture.mean()

    def position_covariance_km2(self) -> Float[np.ndarray, "states 2 2"]:
        """Covariance of the positions, parameter uncertainty included."""
        if self.mixture is None:
            return self.total_covariance()[:, :2, :2]
        return self.mixture.covariance()

    def squared_radius(self, probability: float) -> Float[np.ndarray, " states"]:
        """Squared Mahalanobis radius of the region of a position that holds a probability."""
        if self.mixture is None:
            return np.full(self.problem.n_states, -2.0 * np.log1p(-probability))
        return self.mixture.squared_radius(probability)

    def total_covariance(self) -> Float[np.ndarray, "states dim dim"]:
        """Covariance of the states, parameter uncertainty included."""
        carried = self.sensitivity @ self.theta_covariance
        return self.covariance + carried @ np.swapaxes(self.sensitivity, 1, 2)

    def draw(self, count: int, rng: np.random.Generator) -> Float[np.ndarray, "count states dim"]:
        """Joint draws of the whole path, parameters included."""
        draws = np.empty((count, *self.mean.shape))
        for part in self.drawn(count, rng):
            draws[part.rows] = part.paths
        return draws

    def drawn(
        self, count: int, rng: np.random.Generator, most_points: int | None = None
    ) -> list[Drawn]:
        """Joint draws of the whole path, by the Gaussians they come from.

        From the weighted points if there are any: each draw takes a point by its weight, then
        states from the Gaussian approximation there. Else all from the one at the mode. With
        `most_points` the draws share so few points, taken evenly by their weights.
        """
        if self.points is None:
            around = self._draw_around(self.approximation, count, rng)
            carried = self._carried(count, rng)
            band, centre = self.approximation.mode.band, self.mean + carried
            return [Drawn(np.arange(count), band, centre, around + carried)]
        points, weight = self.points.at, self.points.weight
        if most_points is None:
            chosen = rng.choice(len(points), size=count, p=weight)
        else:
            even = (rng.random() + np.arange(most_points)) / most_points
            taken = np.searchsorted(np.cumsum(weight), even * weight.sum() * (1.0 - 1e-12))
            chosen = np.resize(taken, count)
        parts = []
        for point in np.unique(chosen):
            at = np.flatnonzero(chosen == point)
            found = self._approximation_at(points[point])
            centre = np.broadcast_to(_centre(found), (len(at), *self.mean.shape))
            paths = self._draw_around(found, len(at), rng)
            parts.append(Drawn(at, found.mode.band, centre, paths))
        return parts

    def _approximation_at(self, free: Float[np.ndarray, " free"]) -> Approximation:
        theta = self.approximation.theta.copy()
        theta[self.free_at] = free
        return approximate(self.problem, theta, self.approximation.warm)

    def _carried(
        self, count: int, rng: np.random.Generator
    ) -> Float[np.ndarray, "count states dim"]:
        # a Cholesky factor fails where rounding has left a variance of nothing below nothing
        values, vectors = np.linalg.eigh(self.theta_covariance)
        root = vectors * np.sqrt(np.maximum(values, 0.0))
        theta = rng.standard_normal((count, len(self.theta))) @ root.T
        return np.einsum("sdp,cp->csd", self.sensitivity, theta)

    @staticmethod
    def _draw_around(
        found: Approximation, count: int, rng: np.random.Generator
    ) -> Float[np.ndarray, "count states dim"]:
        mean = _centre(found)
        noise = rng.standard_normal((mean.size, count))
        around = found.mode.cholesky.solve_transposed_factor(noise).T
        return mean + around.reshape(count, *mean.shape)
