"""A block tridiagonal Gaussian at some of its states, all others integrated out.

Sweeps over the sites of heavy-tailed errors change the precision only at states that have fixes.
With H and the gradient g split into those (F) and the others (O), which fall apart into the gaps
between fixes,

    S = H_FF - H_FO inv(H_OO) H_OF,      s = g_F - H_FO inv(H_OO) g_O

hold all that the sweeps need: S is block tridiagonal again, inv(S) the covariance of the states
with fixes, -inv(S) s their Newton step, and g' inv(H) g = s' inv(S) s + g_O' inv(H_OO) g_O.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Self

import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.banded import blocks_below, factor, joined, lower_triangles, with_held


@dataclass(frozen=True)
class Reduced:
    """The Gaussian at the states `at`, in order.

    Attributes
    ----------
    band
        S in banded storage.
    gradient
        s.
    gained
        g_O' inv(H_OO) g_O.
    """

    at: Int[np.ndarray, " kept"]
    band: Float[np.ndarray, "kept dim 2*dim"]
    gradient: Float[np.ndarray, "kept dim"]
    gained: float

    @classmethod
    def of(
        cls,
        band: Float[np.ndarray, "n dim 2*dim"],
        gradient: Float[np.ndarray, "n dim"],
        at: Int[np.ndarray, " kept"],
    ) -> Self:
        """Integrate out all states but `at` (sorted, each once).

        Raises
        ------
        NotPositiveDefinite
            The precision of the others is not positive definite.
        """
        n, dim, _ = band.shape
        kept = np.zeros(n, bool)
        kept[at] = True
        own, pull = lower_triangles(band[at]), gradient[at]
        number = np.cumsum(kept) - 1
        across = blocks_below(band[at[1:] - 1])
        free = np.flatnonzero(~kept)
        if not free.size:
            return cls(at, joined(own, across), pull, 0.0)
        factored = factor(with_held(band, np.repeat(kept[:, None], dim, axis=1)))
        # L^-1 of what the state before each gap does to it, and of the gradient in the last row
        right = np.zeros((dim + 1, n, dim))
        right[-1] = np.where(kept[:, None], 0.0, gradient)
        before = at[at < n - 1]
        before = before[~kept[before + 1]]
        right[:dim, before + 1] = blocks_below(band[before]).transpose(2, 0, 1)
        left = factored.solve_factor(right.reshape(dim + 1, -1).T).T.reshape(right.shape)
        # what the state after a gap does reaches only the gap's last block of L^-1
        after = at[at > 0]
        after = after[~kept[after - 1]]
        blocks = lower_triangles(factored.storage.T.reshape(band.shape)[after - 1])
        ahead = blocks_below(band[after - 1]) @ np.swapaxes(np.linalg.inv(blocks), 1, 2)
        reached = np.einsum("kab,rkb->kar", ahead, left[:, after - 1])
        row = number[after]
        own[row] -= ahead @ np.swapaxes(ahead, 1, 2)
        pull[row] -= reached[:, :, -1]
        across[row[row > 0] - 1] = -reached[row > 0, :, :dim]
        # the rest are sums over whole gaps; of the blocks on the diagonal lower triangles suffice
        gaps = np.flatnonzero(np.diff(kept.astype(int), prepend=1) == -1)
        follows = gaps > 0
        row = number[gaps[follows]]

        def over_gaps(p: int, q: int) -> Float[np.ndarray, " gaps"]:
            return np.add.reduceat((left[p] * left[q]).ravel(), gaps * dim)

        for p in range(dim):
            pull[row, p] -= over_gaps(p, dim)[follows]
            for q in range(p + 1):
                own[row, p, q] -= over_gaps(p, q)[follows]
        return cls(at, joined(own, across), pull, float(over_gaps(dim, dim).sum()))
