"""Banded symmetric algebra by LAPACK: factor, solve, and diagonal blocks of the inverse.

A block tridiagonal matrix of n blocks of size d is kept as an array (n, d, 2 d): entry [i, c, m] is
the element m rows below the diagonal in column i d + c. Read as (n d, 2 d) in C order it is what
LAPACK's `pbtrf` wants in Fortran order, so nothing is copied but by LAPACK itself.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from jaxtyping import Bool, Float, Int
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

    def solve_factor(
        self, right: Float[np.ndarray, " *size_and_columns"]
    ) -> Float[np.ndarray, " *size_and_columns"]:
        """Solve L x = right."""
        solution, info = lapack.dtbtrs(self.storage, right, uplo="L", trans="N")
        _check(info)
        return solution.reshape(right.shape)

    def solve_transposed_factor(
        self, right: Float[np.ndarray, " *size_and_columns"]
    ) -> Float[np.ndarray, " *size_and_columns"]:
        """Solve L' x = right: turns white noise into draws with covariance inv(L L')."""
        solution, info = lapack.dtbtrs(self.storage, right, uplo="L", trans="T")
        _check(info)
        return solution.reshape(right.shape)

    def multiply_factor(
        self, right: Float[np.ndarray, "size columns"]
    ) -> Float[np.ndarray, "size columns"]:
        """L times right: turns white noise into draws with covariance L L'."""
        product = np.zeros_like(right)
        size = len(right)
        for below, diagonal in enumerate(self.storage[:size]):
            product[below:] += diagonal[: size - below, None] * right[: size - below]
        return product


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


def with_held(
    band: Float[np.ndarray, "n dim 2*dim"], held: Bool[np.ndarray, "n dim"]
) -> Float[np.ndarray, "n dim 2*dim"]:
    """The matrix of the free components; held ones stand alone with a one on the diagonal."""
    flat, fixed = band.reshape(-1, band.shape[2]).copy(), held.ravel()
    flat[fixed] = 0.0
    flat[fixed, 0] = 1.0
    for below in range(1, min(flat.shape[1], len(flat))):
        flat[: len(flat) - below, below][fixed[below:]] = 0.0
    return flat.reshape(band.shape)


def times_band(
    band: Float[np.ndarray, "n dim 2*dim"], x: Float[np.ndarray, "rows n*dim"]
) -> Float[np.ndarray, "rows n*dim"]:
    """The matrix times each row of x."""
    flat = band.reshape(-1, band.shape[2])
    size = len(flat)
    result = x * flat[:, 0]
    for below in range(1, min(flat.shape[1], size)):
        column = flat[: size - below, below]
        result[:, below:] += x[:, : size - below] * column
        result[:, : size - below] += x[:, below:] * column
    return result


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


def split(
    band: Float[np.ndarray, "n dim 2*dim"],
) -> tuple[Float[np.ndarray, "n dim dim"], Float[np.ndarray, "n-1 dim dim"]]:
    """Diagonal blocks, and the blocks below them."""
    lower = lower_triangles(band)
    for c in range(band.shape[1]):
        lower[:, c, c + 1 :] = lower[:, c + 1 :, c]
    return lower, blocks_below(band[:-1])


def blocks_below(columns: Float[np.ndarray, "k dim 2*dim"]) -> Float[np.ndarray, "k dim dim"]:
    """Blocks below the diagonal in some block columns of a matrix in banded storage."""
    dim = columns.shape[1]
    below = np.empty((len(columns), dim, dim))
    for c in range(dim):
        below[:, :, c] = columns[:, c, dim - c : 2 * dim - c]
    return below


def joined(
    diagonal: Float[np.ndarray, "n dim dim"], below: Float[np.ndarray, "n-1 dim dim"]
) -> Float[np.ndarray, "n dim 2*dim"]:
    """Banded storage from diagonal blocks and the blocks below them."""
    n, dim, _ = diagonal.shape
    band = np.zeros((n, dim, 2 * dim))
    for c in range(dim):
        band[:, c, : dim - c] = diagonal[:, c:, c]
        band[:-1, c, dim - c : 2 * dim - c] = below[:, :, c]
    return band


def block_covariances(
    band: Float[np.ndarray, "n dim width"],
    forward: Cholesky,
    backward: Cholesky,
    at: Int[np.ndarray, " k"],
) -> Float[np.ndarray, "k dim dim"]:
    """Diagonal blocks of the inverse at some states: inv(Sf_i + Sb_i - D_i).

    `backward` is the factor of the reversed matrix. Factored forwards, the Schur complement Sf_i =
    L_ii L_ii' is the precision of state i given all that comes before it and its own block D_i;
    factored in reverse, Sb_i the same from the other end (the two-filter form of the smoother;
    Fraser & Potter 1969, IEEE Trans. Autom. Control 14:387).
    """
    n, dim, width = band.shape
    before = lower_triangles(forward.storage.T.reshape(n, dim, width)[at])
    after = lower_triangles(backward.storage.T.reshape(n, dim, width)[n - 1 - at])
    own = lower_triangles(band[at])
    own = own + np.swapaxes(np.tril(own, -1), 1, 2)
    before = before @ np.swapaxes(before, 1, 2)
    after = (after @ np.swapaxes(after, 1, 2))[:, ::-1, ::-1]
    return np.linalg.inv(before + after - own)


def lower_triangles(columns: Float[np.ndarray, "k dim width"]) -> Float[np.ndarray, "k dim dim"]:
    """Lower triangles of the diagonal blocks of a matrix in banded storage."""
    dim = columns.shape[1]
    lower = np.zeros((len(columns), dim, dim))
    for c in range(dim):
        lower[:, c:, c] = columns[:, c, : dim - c]
    return lower


def _check(info: int) -> None:
    if info != 0:
        raise NotPositiveDefinite
