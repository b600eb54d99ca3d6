"""Banded symmetric algebra by LAPACK: factor, solve, and the inverse inside the band.

A block tridiagonal matrix of n blocks of size d is kept as an array (n, d, 2 d): entry [i, c, m] is
the element m rows below the diagonal in column i d + c. Read as (n d, 2 d) in C order it is what
LAPACK's `pbtrf` wants in Fortran order, so nothing is copied but by LAPACK itself.
"""

from __future__ import annotations

from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float
from scipy.linalg import lapack


class NotPositiveDefinite(Exception):
    """The matrix has no Cholesky factor."""


class Cholesky(NamedTuple):
    """Lower Cholesky factor L of a block tridiagonal matrix, in LAPACK's banded storage."""

    storage: Float[np.ndarray, "2*dim n*dim"]

    @property
    def log_det(self) -> float:
        """Logarithm of the determinant of the matrix L L'."""
        return 2.0 * float(np.sum(np.log(self.storage[0])))

    def solve(
        self, right: Float[np.ndarray, " *size_and_columns"]
    ) -> Float[np.ndarray, " *size_and_columns"]:
        """Solve L L' x = right."""
        solution, info = lapack.dpbtrs(self.storage, right, lower=1)
        _check(info)
        return solution.reshape(right.shape)

    def solve_transposed_factor(
        self, right: Float[np.ndarray, " *size_and_columns"]
    ) -> Float[np.ndarray, " *size_and_columns"]:
        """Solve L' x = right: turns white noise into draws with covariance inv(L L')."""
        solution, info = lapack.dtbtrs(self.storage, right, uplo="L", trans="T")
        _check(info)
        return solution.reshape(right.shape)


def factor(band: Float[np.ndarray, "n dim 2*dim"]) -> Cholesky:
    """Cholesky factor of a block tridiagonal matrix.

    Raises
    ------
    NotPositiveDefinite
        The matrix is not positive definite, or holds a number that is not finite.
    """
    n, dim, width = band.shape
    storage, info = lapack.dpbtrf(band.reshape(n * dim, width).T, lower=1)
    if info != 0 or not np.isfinite(storage[0]).all():
        raise NotPositiveDefinite
    return Cholesky(storage)


def reversed_band(band: Float[np.ndarray, "n dim 2*dim"]) -> Float[np.ndarray, "n dim 2*dim"]:
    """The same matrix with rows and columns in reversed order."""
    n, dim, width = band.shape
    flat = band.reshape(n * dim, width)
    turned = np.zeros_like(flat)
    for below in range(width):
        turned[: n * dim - below, below] = flat[: n * dim - below, below][::-1]
    return turned.reshape(n, dim, width)


def dense(band: Float[np.ndarray, "n dim 2*dim"]) -> Float[np.ndarray, "n*dim n*dim"]:
    """The full symmetric matrix; for small problems and tests."""
    n, dim, width = band.shape
    size = n * dim
    matrix = np.zeros((size, size))
    flat = band.reshape(size, width)
    for below in range(min(width, size)):
        columns = np.arange(size - below)
        matrix[columns + below, columns] = flat[: size - below, below]
        matrix[columns, columns + below] = flat[: size - below, below]
    return matrix


class BandInverse(NamedTuple):
    """Blocks of an inverse inside the band: cov(z_i) and cov(z_i, z_(i+1)), states last."""

    covariance: Float[Array, "dim dim n"]
    neighbour: Float[Array, "dim dim n-1"]


def band_inverse(
    band: Float[np.ndarray, "n dim 2*dim"], forward: Cholesky, padded: int
) -> BandInverse:
    """Blocks of the inverse inside the band, without a recursion over states.

    Factored forwards, the Schur complement Sf_i = L_ii L_ii' is the precision of state i given all
    that comes before it (marginalised) and its own block; factored in reverse, Sb_i the same from
    the other end. The joint precision of neighbours is then [[Sf_i, E_i], [E_i', Sb_(i+1)]] (the
    two-filter form of the smoother; Fraser & Potter 1969), inverted for all i at once.

    The blocks are padded with zeros to `padded` states.
    """
    backward = factor(reversed_band(band))
    n, dim, width = band.shape
    forward_columns = forward.storage.T.reshape(n, dim, width)
    backward_columns = backward.storage.T.reshape(n, dim, width)[::-1]
    fill = np.zeros((padded - n, dim, width))
    fill[:, :, 0] = 1.0
    covariance, neighbour = _neighbour_covariances(
        *(jnp.asarray(np.concatenate([a, fill])) for a in (forward_columns, backward_columns, band))
    )
    real = np.arange(padded) < n
    return BandInverse(jnp.where(real, covariance, 0.0), jnp.where(real[1:], neighbour, 0.0))


@jax.jit
def _neighbour_covariances(
    forward: Float[Array, "n dim width"],
    backward: Float[Array, "n dim width"],
    band: Float[Array, "n dim width"],
) -> tuple[Float[Array, "dim dim n"], Float[Array, "dim dim n-1"]]:
    dim = forward.shape[1]
    before = _schur(forward)
    after = _schur(backward)[::-1, ::-1]
    couple = jnp.stack(
        [jnp.stack([band[:-1, c, dim + r - c] for r in range(dim)]) for c in range(dim)]
    )
    # a single state has no neighbour: the last state's own block comes from the forward factor
    last = inverse_of_blocks(before[..., -1:])
    if forward.shape[0] == 1:
        return last, couple
    first_first, first_second, _ = _inverse_of_pair(before[..., :-1], couple, after[..., 1:])
    return jnp.concatenate([first_first, last], axis=-1), first_second


def _schur(columns: Float[Array, "n dim width"]) -> Float[Array, "dim dim n"]:
    """L_ii L_ii' of every block, from the banded columns."""
    dim = columns.shape[1]
    zero = jnp.zeros(columns.shape[0])
    factor_rows = [
        [columns[:, c, r - c] if r >= c else zero for c in range(dim)] for r in range(dim)
    ]
    return jnp.stack(
        [
            jnp.stack(
                [
                    sum((factor_rows[r][m] * factor_rows[s][m] for m in range(min(r, s) + 1)), zero)
                    for s in range(dim)
                ]
            )
            for r in range(dim)
        ]
    )


def inverse_of_blocks(matrix: Float[Array, "dim dim n"]) -> Float[Array, "dim dim n"]:
    """Inverses of many small symmetric positive definite matrices, by halving."""
    dim = matrix.shape[0]
    if dim == 1:
        return 1.0 / matrix
    half = dim // 2
    a, b, c = _inverse_of_pair(matrix[:half, :half], matrix[:half, half:], matrix[half:, half:])
    return jnp.concatenate(
        [jnp.concatenate([a, b], axis=1), jnp.concatenate([jnp.swapaxes(b, 0, 1), c], axis=1)]
    )


def _inverse_of_pair(
    a: Float[Array, "m m n"], b: Float[Array, "m l n"], d: Float[Array, "l l n"]
) -> tuple[Float[Array, "m m n"], Float[Array, "m l n"], Float[Array, "l l n"]]:
    """Blocks of the inverse of [[A, B], [B', D]] through the Schur complement of A."""
    a_inverse = inverse_of_blocks(a)
    ab = _product(a_inverse, b)
    complement = inverse_of_blocks(d - _product(jnp.swapaxes(b, 0, 1), ab))
    off = -_product(ab, complement)
    return a_inverse - _product(off, jnp.swapaxes(ab, 0, 1)), off, complement


def _product(a: Float[Array, "m l n"], b: Float[Array, "l p n"]) -> Float[Array, "m p n"]:
    total = a[:, 0, None] * b[None, 0]
    for j in range(1, a.shape[1]):
        total = total + a[:, j, None] * b[None, j]
    return total


def _check(info: int) -> None:
    if info != 0:
        raise NotPositiveDefinite


__all__ = [
    "BandInverse",
    "Cholesky",
    "NotPositiveDefinite",
    "band_inverse",
    "dense",
    "factor",
    "inverse_of_blocks",
    "reversed_band",
]
