"""A cheap stand-in for a log posterior: a Gaussian process through its values and gradients.

In coordinates y where the normal approximation at the mode is the standard normal, a log density is

    log p(y) = -|y|^2 / 2 + r(y),

with r small and smooth. r is given a Gaussian process prior of mean zero and covariance
exp(-|y - y'|^2 / (2 l^2)), and conditioned on values and gradients at some points (Rasmussen &
Williams 2006, Gaussian Processes for Machine Learning, sections 2.2 and 9.4). A long sample of the
stand-in costs nothing, where the density itself is dear (Rasmussen 2003, Bayesian Statistics
7:651). Far from all points it falls as the normal approximation does, so it is always a density.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from jaxtyping import Float
from scipy.linalg import LinAlgError, cho_solve, cholesky

LENGTHS = (1.5, 3.0, 6.0)
"""Lengths l that are tried, in standard deviations; the likeliest is taken."""

NUGGETS = (1e-6, 1e-3, 1e-1)
"""Shares of the variance that may be noise; the likeliest is taken.

Rounding and the tolerance of the density's own iterations ask for the least. A density with jumps
or spikes, where a path has two modes, asks for more: without, the process would swing between the
points.
"""

MOST_NUMBERS = 2000
"""Beyond so many values and slopes the slopes are left out: the cost goes as the cube."""

PLAIN_SHARE = 0.4
"""Step of the moves towards the normal approximation, as a share of its standard deviation."""


@dataclass(frozen=True)
class Emulator:
    """The process's mean given what was seen: sum_j E_j [a_j + b_j'(y - y_j) / l^2].

    E_j is the covariance with point j; `slopes` (the b_j) are zero where no gradients were used.
    """

    at: Float[np.ndarray, "points dim"]
    length: float
    values: Float[np.ndarray, " points"]
    slopes: Float[np.ndarray, "points dim"]

    def excess(self, y: Float[np.ndarray, "n dim"]) -> Float[np.ndarray, " n"]:
        """Log density above the standard normal's, r(y)."""
        squared = np.sum(y**2, axis=1)[:, None] + np.sum(self.at**2, axis=1) - 2.0 * y @ self.at.T
        alike = np.exp(-0.5 * np.maximum(squared, 0.0) / self.length**2)
        along = (y @ self.slopes.T - np.sum(self.at * self.slopes, axis=1)) / self.length**2
        return np.sum(alike * (self.values + along), axis=1)


def emulate(
    at: Float[np.ndarray, "points dim"],
    excess: Float[np.ndarray, " points"],
    slope: Float[np.ndarray, "points dim"],
) -> Emulator:
    """Condition the process on values and gradients of r; l and noise are the likeliest."""
    n, dim = at.shape
    with_slopes = n * (1 + dim) <= MOST_NUMBERS
    data = np.column_stack([excess, slope]).ravel() if with_slopes else excess
    best, chosen = -np.inf, Emulator(at, LENGTHS[-1], np.zeros(n), np.zeros((n, dim)))
    for length, nugget in product(LENGTHS, NUGGETS):
        covariance = _covariance(at, length, with_slopes)
        covariance[np.diag_indices_from(covariance)] *= 1.0 + nugget
        try:
            root = cholesky(covariance, lower=True, overwrite_a=True)
        except LinAlgError:
            continue
        solved = cho_solve((root, True), data)
        variance = max(float(data @ solved) / len(data), 1e-300)
        # the likelihood at the variance that makes it largest
        likelihood = -0.5 * len(data) * np.log(variance) - np.log(np.diag(root)).sum()
        if likelihood > best:
            best = likelihood
            parts = solved.reshape(n, -1)
            slopes = parts[:, 1:] if with_slopes else np.zeros((n, dim))
            chosen = Emulator(at, length, parts[:, 0], slopes)
    return chosen


def _covariance(
    at: Float[np.ndarray, "points dim"], length: float, with_slopes: bool
) -> Float[np.ndarray, "numbers numbers"]:
    """Covariance of the values, or of values and gradients point by point."""
    n, dim = at.shape
    apart = at[:, None] - at
    alike = np.exp(-0.5 * np.sum(apart**2, axis=2) / length**2)
    if not with_slopes:
        return alike
    whole = np.empty((n, 1 + dim, n, 1 + dim))
    whole[:, 0, :, 0] = alike
    across = alike[..., None] * apart / length**2
    whole[:, 0, :, 1:] = across
    whole[:, 1:, :, 0] = -np.moveaxis(across, 1, 2)
    curved = np.eye(dim) / length**2 - apart[..., :, None] * apart[..., None, :] / length**4
    whole[:, 1:, :, 1:] = np.moveaxis(alike[..., None, None] * curved, 1, 2)
    return whole.reshape(n * (1 + dim), n * (1 + dim))


def walk(
    emulator: Emulator,
    start: Float[np.ndarray, "walkers dim"],
    rounds: int,
    rng: np.random.Generator,
) -> Float[np.ndarray, "rounds walkers dim"]:
    """Markov chains on the emulated density, all at once; where each stands after every round.

    A round is a move that would leave the standard normal as it is (Cotter et al. 2013, Stat. Sci.
    28:424), then one of each half of the walkers along differences of the other half (ter Braak
    2006, Stat. Comput. 16:239), which finds long tails.
    """
    y, excess = start.copy(), emulator.excess(start)
    taken = np.empty((rounds, *y.shape))
    for i in range(rounds):
        share = min(PLAIN_SHARE * rng.choice([0.5, 1.0, 2.0]), 0.95)
        noise = rng.standard_normal(y.shape)
        _accept(emulator, y, excess, slice(None), np.sqrt(1.0 - share**2) * y + share * noise, rng)
        order = rng.permutation(len(y))
        half = len(y) // 2
        for own, others in ((order[:half], order[half:]), (order[half:], order[:half])):
            _accept(emulator, y, excess, own, _along(y, own, others, rng), rng, plain=False)
        taken[i] = y
    return taken


def _along(
    y: Float[np.ndarray, "walkers dim"],
    own: np.ndarray,
    others: np.ndarray,
    rng: np.random.Generator,
) -> Float[np.ndarray, "some dim"]:
    """Walkers moved along differences of pairs of others."""
    first = rng.permutation(np.resize(others, len(own)))
    second = rng.permutation(np.resize(others, len(own)))
    jump = rng.choice([1.0, rng.uniform(0.5, 1.0) * 2.38 / np.sqrt(2.0 * y.shape[1])])
    return y[own] + jump * (y[first] - y[second]) + 1e-3 * rng.standard_normal(y[own].shape)


def _accept(
    emulator: Emulator,
    y: Float[np.ndarray, "walkers dim"],
    excess: Float[np.ndarray, " walkers"],
    own: np.ndarray | slice,
    proposed: Float[np.ndarray, "some dim"],
    rng: np.random.Generator,
    *,
    plain: bool = True,
) -> None:
    """Metropolis's choice, in place; `plain` moves leave the standard normal as it is."""
    there = emulator.excess(proposed)
    gain = there - excess[own]
    if not plain:
        gain -= 0.5 * np.sum(proposed**2 - y[own] ** 2, axis=1)
    goes = np.log(rng.random(len(proposed))) < gain
    y[own] = np.where(goes[:, None], proposed, y[own])
    excess[own] = np.where(goes, there, excess[own])
