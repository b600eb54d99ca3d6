"""Posterior of the parameters where a normal approximation is too plain.

Posteriors of variances and of tails are skewed. A few points far out on the principal axes and a
scrambled Sobol sequence around the mode tell an emulator of the log posterior
(`trackfit.inference.emulator`) its shape; further points are drawn from the emulated density, batch
by batch, and tell it the rest. The last emulator is sampled at length: the estimates come from
there. The drawn points, weighted by true over emulated density (importance sampling), keep their
states, so positions average over parameters without linearising in them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from jaxtyping import Float, Int
from scipy.special import ndtri
from scipy.stats import qmc

from trackfit.inference.emulator import MOST_NUMBERS, Emulator, emulate, walk
from trackfit.inference.optimise import Rejected

FIRST_REACH, LONGER, LAST_REACH = 2.0, 1.7, 12.0
"""Points on an axis: the nearest, in standard deviations, how much further the next, the last."""

DEEP_ENOUGH = 4.0
"""Fall of the log density at which an axis has been followed far enough."""

WIDENED = 1.3
"""The first design is this much wider than the density on its axes."""

NEGLIGIBLE = 15.0
"""Points whose log density lies so far below the mode's tell the emulator nothing of use."""

BATCHES = 6
"""Batches of drawn points: where the emulated density reaches too far, the next learns of it."""

WALKERS, ROUNDS, LONG_ROUNDS, APART = 128, 60, 300, 5
"""Markov chains, their rounds for a batch and for the sample, and rounds between what is taken."""


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


Density = Callable[[Float[np.ndarray, " free"]], tuple[float, Float[np.ndarray, " free"]]]
"""Log density and its gradient; raises `Rejected` where it has none."""


@dataclass(frozen=True)
class Explored:
    """The posterior of the parameters.

    Attributes
    ----------
    points
        Where the density was evaluated and that stand for the posterior by their weights.
    calls
        Which call of the density each of them was.
    sample
        A long sample of the emulated density, weights all the same.
    """

    points: WeightedPoints
    calls: Int[np.ndarray, " points"]
    sample: WeightedPoints


def explore(
    density: Density,
    mode: Float[np.ndarray, " free"],
    covariance: Float[np.ndarray, "free free"],
    count: int,
    seed: int,
) -> Explored:
    """Explore a posterior by `count` evaluations, and those on the principal axes.

    Three quarters of `count` end up as weighted points. `mode` and `covariance` are those of the
    normal approximation.
    """
    seen = _Seen(density, mode, covariance)
    rng = np.random.default_rng(seed)
    stretch = WIDENED * seen.axes_followed()
    first = count // 4
    seen.evaluated(_sobol(first, stretch, seed))
    walkers = seen.y[rng.choice(seen.usable(), WALKERS)]
    batches = []
    for some in np.array_split(np.arange(first, count), BATCHES):
        emulator = seen.emulator()
        path = walk(emulator, walkers, max(ROUNDS, APART * -(-len(some) // WALKERS)), rng)
        walkers = path[-1]
        drawn = path[::-APART].reshape(-1, len(mode))[: len(some)]
        calls = seen.evaluated(drawn)
        batches.append((calls, seen.excess[calls] - emulator.excess(drawn)))
    path = walk(seen.emulator(), walkers, LONG_ROUNDS, rng)[LONG_ROUNDS // 5 :: APART]
    sample = seen.free(path.reshape(-1, len(mode)))
    return Explored(
        *_weighted(seen, batches), WeightedPoints(sample, np.full(len(sample), 1.0 / len(sample)))
    )


def _sobol(
    count: int, stretch: Float[np.ndarray, "2 free"], seed: int
) -> Float[np.ndarray, "count free"]:
    """Scrambled Sobol points of a normal with its own sd on both sides of every axis."""
    power = int(np.ceil(np.log2(max(count, 1))))
    uniform = qmc.Sobol(stretch.shape[1], seed=seed).random_base2(power)[:count]
    z = ndtri(np.clip(uniform, 1e-9, 1.0 - 1e-9))
    return z * np.where(z < 0.0, stretch[0], stretch[1])


def _weighted(
    seen: _Seen, batches: list[tuple[np.ndarray, np.ndarray]]
) -> tuple[WeightedPoints, Int[np.ndarray, " points"]]:
    """The drawn points that have a density, batches by their effective number; or else the mode."""
    calls, weights = [], []
    for at, log_weight in batches:
        kept = np.isfinite(log_weight)
        if kept.any():
            calls.append(at[kept])
            weight = normalised(log_weight[kept])
            weights.append(weight / np.sum(weight**2))
    if not calls:
        calls, weights = [np.zeros(1, int)], [np.ones(1)]
    at, weight = np.concatenate(calls), np.concatenate(weights)
    return WeightedPoints(seen.free(seen.y[at]), weight / weight.sum()), at


class _Seen:
    """All evaluations so far, in coordinates y where the normal approximation is the standard one.

    `excess` is the log density above the standard normal's, zero at the mode, -inf where there is
    none; `slope` its gradient.
    """

    def __init__(
        self,
        density: Density,
        mode: Float[np.ndarray, " free"],
        covariance: Float[np.ndarray, "free free"],
    ) -> None:
        values, vectors = np.linalg.eigh(covariance)
        self.density, self.mode = density, mode
        self.axes = vectors * np.sqrt(np.maximum(values, 0.0))
        self.y = np.zeros((0, len(mode)))
        self.excess, self.slope = np.zeros(0), np.zeros((0, len(mode)))
        self.top = 0.0
        self.evaluated(np.zeros((1, len(mode))))
        if not np.isfinite(self.excess[0]):
            raise Rejected
        self.top, self.excess[0] = self.excess[0], 0.0

    def free(self, y: Float[np.ndarray, "n free"]) -> Float[np.ndarray, "n free"]:
        """The parameters at some y."""
        return self.mode + y @ self.axes.T

    def evaluated(self, y: Float[np.ndarray, "n free"]) -> Int[np.ndarray, " n"]:
        """Evaluate the density at some y; which calls they were."""
        first = len(self.y)
        excess, slope = np.full(len(y), -np.inf), np.zeros_like(y)
        for i, at in enumerate(self.free(y)):
            try:
                value, gradient = self.density(at)
            except Rejected:
                continue
            if not np.isfinite(value) or not np.isfinite(gradient).all():
                continue
            excess[i] = value - self.top + 0.5 * float(y[i] @ y[i])
            slope[i] = self.axes.T @ gradient + y[i]
        self.y = np.concatenate([self.y, y])
        self.excess = np.concatenate([self.excess, excess])
        self.slope = np.concatenate([self.slope, slope])
        return np.arange(first, len(self.y))

    def axes_followed(self) -> Float[np.ndarray, "2 free"]:
        """Standard deviations on both sides of every principal axis, from points far out there."""
        stretch = np.ones((2, len(self.mode)))
        for side, sign in enumerate((-1.0, 1.0)):
            for j in range(len(self.mode)):
                reach = FIRST_REACH
                while True:
                    call = self.evaluated(sign * reach * np.eye(len(self.mode))[[j]])
                    fall = 0.5 * reach**2 - float(self.excess[call[0]])
                    # as deep as a normal density would be, or deep enough, or no density at all
                    if fall >= min(DEEP_ENOUGH, 0.45 * reach**2) or reach * LONGER > LAST_REACH:
                        break
                    reach *= LONGER
                if np.isfinite(fall):
                    stretch[side, j] = np.clip(reach / np.sqrt(max(2.0 * fall, 1e-9)), 0.5, 6.0)
        return stretch

    def usable(self) -> Int[np.ndarray, " usable"]:
        """The calls that an emulator is told: not too deep down, and not too many."""
        above = self.excess - 0.5 * np.sum(self.y**2, axis=1)
        usable = np.flatnonzero(above > -NEGLIGIBLE)
        most = max(MOST_NUMBERS // (1 + len(self.mode)), MOST_NUMBERS // 8)
        if len(usable) > most:
            usable = usable[np.linspace(0, len(usable) - 1, most).astype(int)]
        return usable

    def emulator(self) -> Emulator:
        """The emulator of what was seen."""
        usable = self.usable()
        return emulate(self.y[usable], self.excess[usable], self.slope[usable])


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
