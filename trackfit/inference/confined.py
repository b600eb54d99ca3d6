"""Gaussian paths confined to where an animal can be: elliptical slice sampling in blocks.

The target is the density of a block tridiagonal Gaussian, times a weight of each state, times one
where every step is clear and zero where a step is not:

    p(z) ~ N(z; centre, inv(H)) prod_i w_i(z_i) prod_i 1[x_i to x_(i+1) is clear].

A move holds some states, spaced evenly from a random start. The blocks between them are then
independent. In each, with m the conditional mean and e a fresh conditional draw around it,

    z(a) = m + (z - m) cos a + e sin a

runs through points of equal standing under the Gaussian; the angle a is drawn from a bracket that
shrinks towards a = 0 until the block is clear and its weight above a random level (Murray, Adams &
MacKay 2010, J. Mach. Learn. Res. W&CP 9:541). Every such move leaves the target as it is, nothing
needs tuning, and blocks of many lengths move both steps and whole stretches. A block that runs out
of tries stays where it was, which leaves the target as it is too.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple, Protocol, runtime_checkable

import numpy as np
from jaxtyping import Bool, Float, Int

from trackfit.inference.banded import Cholesky, factor, times_band, with_held

MAX_SHRINKS = 10
"""Tries of a block: after so many the bracket is a few thousandths of a turn."""

MEND_ROUNDS = 8


@runtime_checkable
class Bounds(Protocol):
    """Where paths may go."""

    def clear(
        self, start_km: Float[np.ndarray, "m 2"], end_km: Float[np.ndarray, "m 2"]
    ) -> Bool[np.ndarray, " m"]:
        """Tell which steps may be taken."""

    def log_weight(
        self, states: Float[np.ndarray, "m dim"], number: Int[np.ndarray, " m"]
    ) -> Float[np.ndarray, " m"]:
        """Logarithm of the weight of some states, given their numbers along the path."""


@dataclass
class Paths:
    """Paths on the way to the target.

    Attributes
    ----------
    bands
        Precisions of the Gaussians, block tridiagonal in banded storage.
    group
        Which Gaussian each path is of.
    centre, deviation
        What each path is drawn around, and its deviation from that.
    held
        Whether the first and the last state stay where they are.
    longest
        Longest block, in states, that is worth moving as one.
    """

    bands: Float[np.ndarray, "groups states dim 2*dim"]
    group: Int[np.ndarray, " paths"]
    centre: Float[np.ndarray, "paths states dim"]
    deviation: Float[np.ndarray, "paths states dim"]
    held: tuple[bool, bool]
    longest: int

    def some(self, rows: Int[np.ndarray, " some"]) -> Paths:
        """A copy of some of the paths."""
        return Paths(
            self.bands,
            self.group[rows],
            self.centre[rows],
            self.deviation[rows],
            self.held,
            self.longest,
        )

    @property
    def xy_km(self) -> Float[np.ndarray, "paths states 2"]:
        """Positions."""
        return self.centre[..., :2] + self.deviation[..., :2]

    def clear(self, bounds: Bounds) -> Bool[np.ndarray, "paths steps"]:
        """Tell which steps of which paths are clear."""
        xy = self.xy_km
        paths, states, _ = xy.shape
        start, end = xy[:, :-1].reshape(-1, 2), xy[:, 1:].reshape(-1, 2)
        return bounds.clear(start, end).reshape(paths, states - 1)

    def all_clear(self, bounds: Bounds) -> Bool[np.ndarray, " paths"]:
        """Tell which paths are clear all along."""
        return np.asarray(self.clear(bounds).all(axis=1))


class _Part(NamedTuple):
    rows: Int[np.ndarray, " some"]
    band: Float[np.ndarray, "states dim 2*dim"]
    cholesky: Cholesky


@dataclass(frozen=True)
class Conditional:
    """Some components of the paths given the others, which are held."""

    held: Bool[np.ndarray, "states dim"]
    parts: tuple[_Part, ...]

    @classmethod
    def of(cls, paths: Paths, held: Bool[np.ndarray, "states dim"]) -> Conditional:
        """Factor the precisions of the free components."""
        parts = []
        for group in np.unique(paths.group):
            band = paths.bands[group]
            rows = np.flatnonzero(paths.group == group)
            parts.append(_Part(rows, band, factor(with_held(band, held))))
        return cls(held, tuple(parts))

    def mean(
        self, deviation: Float[np.ndarray, "paths states dim"]
    ) -> Float[np.ndarray, "paths states dim"]:
        """Mean of the free deviations given the held ones, which are returned as they are."""
        kept = (deviation * self.held).reshape(len(deviation), -1)
        for part in self.parts:
            push = times_band(part.band, kept[part.rows])
            push[:, self.held.ravel()] = 0.0
            kept[part.rows] -= part.cholesky.solve(push.T).T
        return kept.reshape(deviation.shape)

    def noise(self, paths: int, rng: np.random.Generator) -> Float[np.ndarray, "paths states dim"]:
        """Fresh draws around the conditional mean; zero where held."""
        white = rng.standard_normal((paths, *self.held.shape)) * ~self.held
        flat = white.reshape(paths, -1)
        for part in self.parts:
            flat[part.rows] = part.cholesky.solve_transposed_factor(flat[part.rows].T).T
        return white


@dataclass(frozen=True)
class _Layout:
    """Which states a move holds; a block is numbered by the held states before it."""

    held: Bool[np.ndarray, " states"]
    block: Int[np.ndarray, " states"]

    @classmethod
    def drawn(
        cls, states: int, length: int, ends: tuple[bool, bool], rng: np.random.Generator
    ) -> _Layout:
        held = np.zeros(states, bool)
        if length < states:
            held[rng.integers(length + 1) :: length + 1] = True
        held[0] |= ends[0]
        held[-1] |= ends[1]
        return cls(held, np.cumsum(held))

    @property
    def blocks(self) -> int:
        return int(self.block[-1]) + 1

    def conditional(self, paths: Paths) -> Conditional:
        dim = paths.centre.shape[2]
        return Conditional.of(paths, np.repeat(self.held[:, None], dim, axis=1))


def block_lengths(longest: int) -> list[int]:
    """Lengths of the blocks of one sweep: 1, 4, 16, ... and the longest."""
    return [4**k for k in range(20) if 4**k < longest] + [longest]


def sweep(
    paths: Paths,
    bounds: Bounds,
    rng: np.random.Generator,
    twin: Float[np.ndarray, "paths states dim"] | None = None,
) -> None:
    """Move all paths, which must be clear, once at every block length; in place.

    `twin` holds deviations of unconfined paths, which are moved by the same random numbers: where
    bounds do not matter they stay close to the paths, and their law is known.
    """
    states = paths.centre.shape[1]
    for length in block_lengths(paths.longest):
        layout = _Layout.drawn(states, length, paths.held, rng)
        given = layout.conditional(paths)
        noise = given.noise(len(paths.deviation), rng)
        angle = rng.uniform(0.0, 2.0 * np.pi, (len(noise), layout.blocks))
        if twin is not None:
            mean = given.mean(twin)
            turn = angle[:, layout.block, None]
            twin[:] = mean + (twin - mean) * np.cos(turn) + noise * np.sin(turn)
        _slice(paths, bounds, layout, given.mean(paths.deviation), noise, angle, rng)


def _slice(
    paths: Paths,
    bounds: Bounds,
    layout: _Layout,
    mean: Float[np.ndarray, "paths states dim"],
    noise: Float[np.ndarray, "paths states dim"],
    angle: Float[np.ndarray, "paths blocks"],
    rng: np.random.Generator,
) -> None:
    """One elliptical slice move of every block of every path, in place."""
    away = paths.deviation - mean
    trial = paths.deviation.copy()
    pending = np.zeros(angle.shape, bool)
    pending[:, np.unique(layout.block[~layout.held])] = True
    level = _block_weight(paths, trial, bounds, layout, pending) - rng.exponential(size=angle.shape)
    low, high = angle - 2.0 * np.pi, angle.copy()
    for _ in range(MAX_SHRINKS):
        path, state = np.nonzero(pending[:, layout.block] & ~layout.held)
        if not len(path):
            break
        turn = angle[path, layout.block[state], None]
        trial[path, state] = (
            mean[path, state] + away[path, state] * np.cos(turn) + noise[path, state] * np.sin(turn)
        )
        clear = pending & (_bad_steps(paths, trial, bounds, layout, pending) == 0)
        pending &= ~clear | (_block_weight(paths, trial, bounds, layout, clear) < level)
        low = np.where(angle < 0.0, angle, low)
        high = np.where(angle < 0.0, high, angle)
        angle = np.where(pending, rng.uniform(low, high), angle)
    given_up = pending[:, layout.block]
    trial[given_up] = paths.deviation[given_up]
    paths.deviation = trial


def _bad_steps(
    paths: Paths,
    deviation: Float[np.ndarray, "paths states dim"],
    bounds: Bounds,
    layout: _Layout,
    which: Bool[np.ndarray, "paths blocks"],
) -> Int[np.ndarray, "paths blocks"]:
    """Steps that are not clear, in some of the blocks; the step from a held state is the next's."""
    path, step = np.nonzero(which[:, layout.block[:-1]])
    start = paths.centre[path, step, :2] + deviation[path, step, :2]
    end = paths.centre[path, step + 1, :2] + deviation[path, step + 1, :2]
    bad = ~bounds.clear(start, end)
    flat = path[bad] * layout.blocks + layout.block[step[bad]]
    return np.bincount(flat, minlength=which.size).reshape(which.shape)


def _block_weight(
    paths: Paths,
    deviation: Float[np.ndarray, "paths states dim"],
    bounds: Bounds,
    layout: _Layout,
    which: Bool[np.ndarray, "paths blocks"],
) -> Float[np.ndarray, "paths blocks"]:
    """Log weight of the free states of some of the blocks; zero elsewhere."""
    path, state = np.nonzero(which[:, layout.block] & ~layout.held)
    at = paths.centre[path, state] + deviation[path, state]
    flat = path * layout.blocks + layout.block[state]
    weight = np.bincount(flat, bounds.log_weight(at, state), minlength=which.size)
    return weight.astype(float).reshape(which.shape)


def mend(
    paths: Paths,
    bounds: Bounds,
    rng: np.random.Generator,
) -> None:
    """Draw offending blocks anew until their paths are clear, or rounds run out; in place.

    A new draw is taken where fewer of its block's steps offend. This only finds a start for
    `sweep`.
    """
    states = paths.centre.shape[1]
    for length in [n for n in block_lengths(paths.longest) for _ in range(2)] * MEND_ROUNDS:
        rows = np.flatnonzero(~paths.all_clear(bounds))
        if not rows.size:
            return
        layout = _Layout.drawn(states, length, paths.held, rng)
        part = paths.some(rows)
        given = layout.conditional(part)
        trial = given.mean(part.deviation) + given.noise(len(rows), rng)
        everywhere = np.ones((len(rows), layout.blocks), bool)
        before = _bad_steps(part, part.deviation, bounds, layout, everywhere)
        better = _bad_steps(part, trial, bounds, layout, before > 0) < before
        taken = better[:, layout.block, None]
        paths.deviation[rows] = np.where(taken, trial, part.deviation)


def put_through(paths: Paths, row: int, xy_km: Float[np.ndarray, "states 2"]) -> None:
    """Give a path these positions, and what else a state holds its mean given them; in place."""
    part = paths.some(np.array([row]))
    part.deviation[0, :, :2] = xy_km - part.centre[0, :, :2]
    held = np.zeros(part.centre.shape[1:], bool)
    held[:, :2] = True
    paths.deviation[row] = Conditional.of(part, held).mean(part.deviation)[0]
