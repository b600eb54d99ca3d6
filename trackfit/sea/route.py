"""Short ways by sea, for paths that chance alone does not bring round the land."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from jaxtyping import Bool, Float, Int
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra
from scipy.spatial import Delaunay, QhullError, cKDTree

from trackfit.layers.layer import Box
from trackfit.layers.shore import CLEARANCE_KM, Shore

LATTICE = 40
ENTRIES = 40
"""Nodes near a point among which its ways into the graph are looked for."""


@dataclass(frozen=True)
class SeaGraph:
    """Points at sea and the straight ways between them: off the shore all along, and a lattice.

    Ways are the edges of a Delaunay triangulation that stay at sea, and those along the shore. The
    graph is as connected as the sea is (in the box, and away from straits that `CLEARANCE_KM`
    closes); its shortest ways, pulled straight, are close to the shortest there are.
    """

    shore: Shore
    nodes_km: Float[np.ndarray, "nodes 2"]
    tree: cKDTree
    lengths_km: csr_array

    @classmethod
    def over(cls, shore: Shore, box: Box) -> SeaGraph:
        """Build the graph for a box."""
        frame = shapely.box(box.x_min, box.y_min, box.x_max, box.y_max)
        near = shapely.intersection(shore.land, frame)
        wide = shapely.buffer(near, CLEARANCE_KM, quad_segs=2)
        outline = shapely.simplify(shapely.boundary(wide), CLEARANCE_KM / 2)
        span = max(box.x_max - box.x_min, box.y_max - box.y_min)
        outline = shapely.segmentize(outline, span / LATTICE)
        along, part = shapely.get_coordinates(shapely.get_parts(outline), return_index=True)
        follows = np.flatnonzero(part[1:] == part[:-1])
        nodes = np.vstack([along, box.lattice_km(LATTICE)])
        pairs = np.vstack([np.column_stack([follows, follows + 1]), _delaunay(nodes)])
        afloat = shore.afloat(nodes)
        pairs = pairs[afloat[pairs].all(axis=1)]
        # a closed ring's first point stands twice: an edge of length zero joins the two
        pairs = pairs[shore.clear(nodes[pairs[:, 0]], nodes[pairs[:, 1]])]
        length = np.hypot(*(nodes[pairs[:, 0]] - nodes[pairs[:, 1]]).T)
        number = np.cumsum(afloat) - 1
        size, pairs = int(afloat.sum()), number[pairs]
        # min, not sum, of ways found twice
        order = np.lexsort((length, pairs[:, 1], pairs[:, 0]))
        pairs, length = pairs[order], np.maximum(length[order], 1e-9)
        _, first = np.unique(pairs, axis=0, return_index=True)
        graph = csr_array((length[first], pairs[first].T), shape=(size, size))
        return cls(shore, nodes[afloat], cKDTree(nodes[afloat]), graph)

    def nearest_afloat(self, xy_km: Float[np.ndarray, " 2"]) -> Float[np.ndarray, " 2"]:
        """The node nearest to a point."""
        return self.nodes_km[int(self.tree.query(xy_km)[1])]

    def way(
        self, start_km: Float[np.ndarray, " 2"], end_km: Float[np.ndarray, " 2"]
    ) -> Float[np.ndarray, "corners 2"] | None:
        """Corners of a short way by sea, both ends included; None where the sea does not join them.

        Both ends must be at sea.
        """
        if self.shore.clear(start_km[None], end_km[None])[0]:
            return np.stack([start_km, end_km])
        first, last = self._entries(start_km), self._entries(end_km)
        if not len(first) or not len(last):
            return None
        reach, before = dijkstra(
            self.lengths_km, directed=False, indices=first, return_predecessors=True
        )
        out = np.hypot(*(self.nodes_km[first] - start_km).T)
        back = np.hypot(*(self.nodes_km[last] - end_km).T)
        total = out[:, None] + reach[:, last] + back
        if not np.isfinite(total).any():
            return None
        row, column = np.unravel_index(np.argmin(total), total.shape)
        chain = [int(last[column])]
        while chain[-1] != first[row]:
            chain.append(int(before[row, chain[-1]]))
        return self._pulled(np.vstack([start_km, self.nodes_km[chain[::-1]], end_km]))

    def _entries(self, xy_km: Float[np.ndarray, " 2"]) -> Int[np.ndarray, " entries"]:
        """Nearest nodes in sight, six at most: of those near, else of all."""
        for count in (ENTRIES, len(self.nodes_km)):
            near = np.atleast_1d(self.tree.query(xy_km, k=min(count, len(self.nodes_km)))[1])
            seen = near[self._seen(xy_km, self.nodes_km[near])]
            if len(seen):
                return seen[:6]
        return np.zeros(0, int)

    def _seen(
        self, from_km: Float[np.ndarray, " 2"], to_km: Float[np.ndarray, "n 2"]
    ) -> Bool[np.ndarray, " n"]:
        return self.shore.clear(np.broadcast_to(from_km, to_km.shape), to_km)

    def _pulled(self, corners: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, "m 2"]:
        """Leave out corners as long as the straight way past them is clear."""
        kept, at = [0], 0
        while at < len(corners) - 1:
            seen = np.flatnonzero(self._seen(corners[at], corners[at + 1 :]))
            # the next corner is in sight by construction, but for rounding
            at += int(seen[-1]) + 1 if len(seen) else 1
            kept.append(at)
        return corners[kept]


def _delaunay(nodes: Float[np.ndarray, "n 2"]) -> Int[np.ndarray, "edges 2"]:
    try:
        sides = Delaunay(nodes).simplices
    except QhullError:
        return np.zeros((0, 2), int)
    return np.unique(
        np.sort(np.vstack([sides[:, [0, 1]], sides[:, [1, 2]], sides[:, [0, 2]]])), axis=0
    )


def spread_along(
    corners_km: Float[np.ndarray, "corners 2"], count: int
) -> Float[np.ndarray, "count 2"]:
    """Points inside a way: all its corners, and others evenly between them.

    `count` must be the number of corners between the ends at least.
    """
    legs = np.hypot(*np.diff(corners_km, axis=0).T)
    parts = np.ones(len(legs), int)
    for _ in range(count - (len(legs) - 1)):
        parts[np.argmax(legs / parts)] += 1
    pieces = [
        a + (b - a) * np.arange(n)[:, None] / n
        for a, b, n in zip(corners_km[:-1], corners_km[1:], parts, strict=True)
    ]
    return np.concatenate(pieces)[1:]


def led_by_sea(
    xy_km: Float[np.ndarray, "states 2"],
    held: tuple[bool, bool],
    graph: SeaGraph,
) -> Float[np.ndarray, "states 2"] | None:
    """A path led round the land, changed only where it offends and as far as corners need room.

    First and last states that are not held may move to sea. None where no way by sea exists, or
    where it has more corners than states.
    """
    xy = xy_km.copy()
    for end, kept in zip((0, -1), held, strict=True):
        if not kept and not graph.shore.afloat(xy[None, end])[0]:
            xy[end] = graph.nearest_afloat(xy[end])
    for _ in range(len(xy)):
        bad = np.flatnonzero(~graph.shore.clear(xy[:-1], xy[1:]))
        if not bad.size:
            return xy
        if not _led_past(xy, int(bad[0]), graph):
            return None
    return None


def _led_past(xy: Float[np.ndarray, "states 2"], step: int, graph: SeaGraph) -> bool:
    """Replace the states around an offending step by ones along a way by sea; in place."""
    afloat = graph.shore.afloat(xy)
    before, after = step, step + 1
    while True:
        while before > 0 and not afloat[before]:
            before -= 1
        while after < len(xy) - 1 and not afloat[after]:
            after += 1
        if not (afloat[before] and afloat[after]):
            return False
        corners = graph.way(xy[before], xy[after])
        if corners is None:
            return False
        inside = after - before - 1
        if inside >= len(corners) - 2:
            xy[before + 1 : after] = spread_along(corners, inside)
            return True
        if before == 0 and after == len(xy) - 1:
            return False
        wider = max(1, len(corners) - 2 - inside)
        before, after = max(0, before - wider), min(len(xy) - 1, after + wider)
