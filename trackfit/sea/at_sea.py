"""Paths that know the sea: no position on land, no step across it.

The fast engine's Gaussian knows no land. Here it is confined: every state and every straight step
between states is at sea, and an animal whose step would end ashore takes another. Its step from z
to z' then has the density N(z'; ..) 1[at sea] / Z(z), with Z the probability that a free step from
z ends at sea, and given the fixes and the parameters

    p(path) ~ Gaussian(path) prod_i 1[x_i to x_(i+1) at sea] / Z(z_i).

Without 1/Z the paths would be those of an animal that chance alone kept from touching land. Such
paths keep off the shore, the more the shorter the step and the longer the gap: in the limit they
are Brownian motion conditioned never to arrive. With 1/Z the limit is motion reflected at the shore
(`trackfit.sea.bounds` has Z).

Draws are made by `trackfit.inference.confined`. What is approximate: sweeps are finitely many; Z
asks only where a step ends; the engine's linearisation and, for heavy tails, its Gaussian stand-ins
of the fixes are kept; the parameters stay those fitted without a coast; ways round an island are
weighed only as far as draws find them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import shapely
from jaxtyping import Bool, Float, Int
from shapely.geometry.base import BaseGeometry

from trackfit.inference.confined import Paths, mend, put_through, sweep
from trackfit.inference.states import Drawn, States
from trackfit.inference.twins import TwinSums, medoid, squared_radius
from trackfit.layers.layer import Box, Coast
from trackfit.layers.shore import Shore, widened
from trackfit.sea.bounds import SeaBounds, Strides
from trackfit.sea.route import SeaGraph, led_by_sea

REACH_SD = 4.291932052578694
"""Half axis, in sds, of the ellipse that holds 99.99 %; land beyond it is no concern of a state."""

PATHS = 128
"""Paths behind the reported positions and ellipses, whatever the number of draws asked for."""

SWEEPS = 20
SETTLING = 6
"""Sweeps of every path; positions and ellipses rest on those after the settling ones."""

TIED = 0.02
"""States more correlated than so with one near land are moved together with it."""

REGIONS = (0.50, 0.95)
"""Probabilities of the regions that are reported."""

MATTERS = 0.02
"""A change of the mean or the sd by less than this share of the sd is none."""

POINTS = 8
"""Points of the parameters' posterior that these paths share."""


class Trouble(NamedTuple):
    """States (first and last) where coast and fixes do not go together.

    `crosses` where no way by sea was found and draws still cross land; else the coast moved the
    position out of the 99.99 % ellipse that the fixes give.
    """

    first: int
    last: int
    crosses: bool


@dataclass(frozen=True)
class Kept:
    """Positions and paths of one track that keep to the sea.

    Attributes
    ----------
    xy_km, covariance_km2
        Position of every state and the second moment around it.
    adjusted
        Where these differ from the Gaussian's; elsewhere they are the Gaussian's own.
    squared_radius
        Squared Mahalanobis radius of the region of each of `REGIONS`.
    draws_km
        The draws, moved where they had to be.
    troubles
        Where coast and fixes do not go together.
    land
        Land with its margin, prepared.
    """

    xy_km: Float[np.ndarray, "states 2"]
    covariance_km2: Float[np.ndarray, "states 2 2"]
    adjusted: Bool[np.ndarray, " states"]
    squared_radius: Mapping[float, Float[np.ndarray, " states"]]
    draws_km: Float[np.ndarray, "draws states 2"]
    troubles: tuple[Trouble, ...]
    land: BaseGeometry


class _Stretch(NamedTuple):
    """States that are moved together; an end that is not the track's own is held.

    Blocks longer than `longest`, two gaps between fixes, would be of no more use.
    """

    first: int
    last: int
    held: tuple[bool, bool]
    longest: int

    @property
    def states(self) -> slice:
        return slice(self.first, self.last + 1)


def keep_at_sea(states: States, coast: Coast, drawn: Sequence[Drawn], seed: Sequence[int]) -> Kept:
    """Confine a track to the sea.

    Parameters
    ----------
    drawn
        The draws to be moved to sea, from `states.drawn`.
    seed
        Of the random numbers for the moves. Positions and ellipses rest on paths of their own.
    """
    free = _Regions(
        states.positions_km(),
        states.position_covariance_km2(),
        np.stack([states.squared_radius(probability) for probability in REGIONS]),
        np.zeros(states.problem.n_states, bool),
    )
    land, moved, troubles = widened(coast), _positions(drawn, len(free.xy_km)), []
    near = _near_land(free.xy_km, free.covariance_km2, moved, land)
    if not near.any() or len(near) < 2:
        return _kept(free, moved, (), land)
    strides = Strides.of(states)
    shore = Shore.over(land, _box(free, near))
    of_draws, of_positions = (np.random.default_rng([*seed, k]) for k in (1, 2))
    behind = states.drawn(PATHS, of_positions, most_points=POINTS)
    kept = free.part(slice(None))
    for stretch in _stretches(states, near):
        at = stretch.states
        sea = SeaBounds(shore, strides.along(stretch.first, stretch.last))
        confined = _Confiner(sea, stretch)
        if drawn:
            paths = confined.paths(drawn)
            clear = confined.run(paths, of_draws)
            moved[_rows(drawn), at] = paths.xy_km
            troubles += confined.crossings(paths, clear)
        found = confined.regions(behind, free.part(at), of_positions)
        if found is None:
            troubles.append(Trouble(stretch.first, stretch.last, crosses=True))
            continue
        troubles += _contradictions(stretch, found, free.part(at))
        kept.put(at, found)
    return _kept(kept, moved, troubles, land)


@dataclass(frozen=True)
class _Regions:
    """Positions, second moments, radii for `REGIONS`, and whether a coast had a say in them."""

    xy_km: Float[np.ndarray, "states 2"]
    covariance_km2: Float[np.ndarray, "states 2 2"]
    squared_radius: Float[np.ndarray, "regions states"]
    adjusted: Bool[np.ndarray, " states"]

    def part(self, at: slice) -> _Regions:
        """A copy of some states."""
        return _Regions(
            self.xy_km[at].copy(),
            self.covariance_km2[at].copy(),
            self.squared_radius[:, at].copy(),
            self.adjusted[at].copy(),
        )

    def put(self, at: slice, other: _Regions) -> None:
        """Replace some states, in place."""
        self.xy_km[at], self.covariance_km2[at] = other.xy_km, other.covariance_km2
        self.squared_radius[:, at], self.adjusted[at] = other.squared_radius, other.adjusted


def _kept(
    regions: _Regions,
    draws_km: Float[np.ndarray, "draws states 2"],
    troubles: Sequence[Trouble],
    land: BaseGeometry,
) -> Kept:
    return Kept(
        regions.xy_km,
        regions.covariance_km2,
        regions.adjusted,
        dict(zip(REGIONS, regions.squared_radius, strict=True)),
        draws_km,
        tuple(dict.fromkeys(troubles)),
        land,
    )


def _rows(drawn: Sequence[Drawn]) -> Int[np.ndarray, " draws"]:
    return np.concatenate([part.rows for part in drawn])


def _positions(drawn: Sequence[Drawn], states: int) -> Float[np.ndarray, "draws states 2"]:
    moved = np.empty((sum(len(part.rows) for part in drawn), states, 2))
    for part in drawn:
        moved[part.rows] = part.paths[..., :2]
    return moved


def _near_land(
    xy: Float[np.ndarray, "states 2"],
    covariance: Float[np.ndarray, "states 2 2"],
    draws: Float[np.ndarray, "draws states 2"],
    land: BaseGeometry,
) -> Bool[np.ndarray, " states"]:
    """States with land in the square around their 99.99 % ellipse and step, or under a draw."""
    reach = REACH_SD * np.sqrt(np.linalg.eigvalsh(covariance)[:, -1])
    stride = np.hypot(*np.diff(xy, axis=0, append=xy[-1:]).T)
    size = (np.maximum(reach, np.append(reach[1:], 0.0)) + stride)[:, None]
    near = shapely.intersects(land, shapely.box(*(xy - size).T, *(xy + size).T))
    # a step whose ends keep to their own squares keeps to this one
    far = (np.abs(draws - xy) > reach[:, None]).any(axis=2)
    draw, step = np.nonzero(far[:, :-1] | far[:, 1:])
    lines = shapely.linestrings(np.stack([draws[draw, step], draws[draw, step + 1]], axis=1))
    met = step[shapely.intersects(land, lines)]
    near[met] = near[met + 1] = True
    return near


def _box(free: _Regions, near: Bool[np.ndarray, " states"]) -> Box:
    xy, covariance = free.xy_km, free.covariance_km2[near]
    size = 1.25 * REACH_SD * np.sqrt(np.linalg.eigvalsh(covariance)[:, -1:])
    return Box(*(xy[near] - size).min(axis=0), *(xy[near] + size).max(axis=0))


def _stretches(states: States, near: Bool[np.ndarray, " states"]) -> list[_Stretch]:
    """Runs of states near land, each widened to what is tied to it, joined where they meet."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], near.astype(int), [0]])))
    wide = near.copy()
    for first, last in zip(edges[::2], edges[1::2] - 1, strict=True):
        wide[_tied(states, int(first), -1) : _tied(states, int(last), 1) + 1] = True
    edges = np.flatnonzero(np.diff(np.concatenate([[0], wide.astype(int), [0]])))
    n = len(near)
    seen = np.unique(np.concatenate([[0], states.problem.observations.state, [n - 1]]))
    stretches = []
    for first, end in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        inside = np.diff(seen)[(seen[1:] > first) & (seen[:-1] < end)]
        longest = min(end - first, 2 * int(inside.max(initial=1)))
        stretches.append(_Stretch(first, end - 1, (first > 0, end < n), longest))
    return stretches


def _tied(states: States, state: int, way: int) -> int:
    """The first state on a side whose position is no longer tied to that of a state."""
    n, dim = states.mean.shape
    right = np.zeros((n, dim, 2))
    right[state, [0, 1], [0, 1]] = 1.0
    solved = states.approximation.mode.cholesky.solve(right.reshape(n * dim, 2))
    across = solved.reshape(n, dim, 2)[:, :2]
    variance = np.einsum("nii->n", states.covariance[:, :2, :2]) / 2.0
    tie = np.sqrt(np.einsum("nij,nij->n", across, across) / (variance * variance[state] * 2.0))
    beyond = np.flatnonzero(tie[state::way] < TIED)
    if not beyond.size:
        return 0 if way < 0 else n - 1
    return state + way * int(beyond[0])


@dataclass(frozen=True)
class _Confiner:
    """The sampler of one stretch."""

    sea: SeaBounds
    stretch: _Stretch

    def paths(self, drawn: Sequence[Drawn]) -> Paths:
        """The stretch of some draws, ready to be moved; in the order of `_rows`."""
        at = self.stretch.states
        return Paths(
            bands=np.stack([part.band[at] for part in drawn]),
            group=np.repeat(np.arange(len(drawn)), [len(part.rows) for part in drawn]),
            centre=np.concatenate([part.centre[:, at] for part in drawn]),
            deviation=np.concatenate([part.paths[:, at] - part.centre[:, at] for part in drawn]),
            held=self.stretch.held,
            longest=self.stretch.longest,
        )

    def started(self, paths: Paths, rng: np.random.Generator) -> Bool[np.ndarray, " paths"]:
        """Bring paths to sea, by new draws and then by the shortest ways; tell which are."""
        mend(paths, self.sea, rng)
        clear = paths.all_clear(self.sea)
        if clear.all():
            return clear
        graph = self._graph(paths)
        for row in np.flatnonzero(~clear):
            led = led_by_sea(paths.xy_km[row], paths.held, graph)
            if led is not None:
                put_through(paths, int(row), led)
                clear[row] = True
        return clear

    def _graph(self, paths: Paths) -> SeaGraph:
        xy = paths.xy_km.reshape(-1, 2)
        low, high = xy.min(axis=0), xy.max(axis=0)
        margin = 0.25 * float((high - low).max())
        return SeaGraph.over(self.sea.shore, Box(*(low - margin), *(high + margin)))

    def run(self, paths: Paths, rng: np.random.Generator) -> Bool[np.ndarray, " paths"]:
        """Draw all paths from the confined law, in place; tell which are at sea."""
        clear = self.started(paths, rng)
        part = paths.some(np.flatnonzero(clear))
        for _ in range(SWEEPS if clear.any() else 0):
            sweep(part, self.sea, rng)
        paths.deviation[clear] = part.deviation
        return clear

    def crossings(self, paths: Paths, clear: Bool[np.ndarray, " paths"]) -> list[Trouble]:
        """Where draws still cross land."""
        if clear.all():
            return []
        bad = np.flatnonzero((~paths.clear(self.sea)).any(axis=0)) + self.stretch.first
        return [Trouble(int(bad[0]), int(bad[-1]) + 1, crosses=True)]

    def regions(
        self, drawn: Sequence[Drawn], free: _Regions, rng: np.random.Generator
    ) -> _Regions | None:
        """Regions of the confined law, from those without land; None if few paths reach the sea."""
        paths = self.paths(drawn)
        twin = paths.deviation.copy()
        rows = np.flatnonzero(self.started(paths, rng))
        if len(rows) < PATHS / 2:
            return None
        part, twin, sums = paths.some(rows), twin[rows], TwinSums.of(free.xy_km)
        pairs = []
        for done in range(SWEEPS):
            sweep(part, self.sea, rng, twin)
            if done >= SETTLING:
                pair = part.xy_km, part.centre[..., :2] + twin[..., :2]
                sums.add(*pair)
                pairs += [np.stack(pair).astype(np.float32)] if done % 2 else []
        return self._reported(part.xy_km, np.concatenate(pairs, axis=1), sums, free)

    def _reported(
        self,
        paths_km: Float[np.ndarray, "paths states 2"],
        pairs_km: Float[np.ndarray, "2 more_paths states 2"],
        sums: TwinSums,
        free: _Regions,
    ) -> _Regions:
        """The mean where it is at sea, else the medoid of the paths, with moments around it.

        Radii are quantiles of the paths, steadied by those of their twins.
        """
        shift, around, tie = sums.controlled(free.covariance_km2)
        inverse = np.linalg.inv(free.covariance_km2)
        change = np.sqrt(np.einsum("ni,nij,nj->n", shift, inverse, shift))
        size = np.einsum("nii->n", around) / np.einsum("nii->n", free.covariance_km2)
        adjusted = (change > MATTERS) | (np.abs(np.sqrt(size) - 1.0) > MATTERS)
        xy = free.xy_km + np.where(adjusted[:, None], shift, 0.0)
        around = np.where(adjusted[:, None, None], around, free.covariance_km2)
        ashore = np.flatnonzero(~self.sea.shore.afloat(xy))
        for state in ashore:
            middle = medoid(paths_km[:, state], pairs_km[0, :, state])
            off = xy[state] - middle
            xy[state], around[state] = middle, around[state] + np.outer(off, off)
        adjusted[ashore] = True
        radius = free.squared_radius.copy()
        for row, probability in enumerate(REGIONS):
            found = squared_radius(pairs_km[0], xy, around, probability)
            known = squared_radius(pairs_km[1], free.xy_km, free.covariance_km2, probability)
            steadied = found * (free.squared_radius[row] / known) ** tie
            radius[row] = np.where(adjusted, steadied, radius[row])
        return _Regions(xy, around, radius, adjusted)


def _contradictions(stretch: _Stretch, found: _Regions, free: _Regions) -> list[Trouble]:
    """Runs of states that the coast moved out of the ellipse that the fixes give."""
    off = found.xy_km - free.xy_km
    inverse = np.linalg.inv(free.covariance_km2)
    far = np.einsum("ni,nij,nj->n", off, inverse, off) > REACH_SD**2
    edges = np.flatnonzero(np.diff(np.concatenate([[0], far.astype(int), [0]])))
    return [
        Trouble(stretch.first + int(first), stretch.first + int(end) - 1, crosses=False)
        for first, end in zip(edges[::2], edges[1::2], strict=True)
    ]
