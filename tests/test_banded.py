"""Banded algebra against dense matrices."""

import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trackfit.inference.banded import (
    NotPositiveDefinite,
    band_inverse,
    dense,
    factor,
    inverse_of_blocks,
    reversed_band,
)

sizes = st.tuples(st.integers(1, 12), st.sampled_from([2, 4]), st.integers(0, 2**32 - 1))


def random_matrix(n, dim, seed, coupling=1.0):
    """A symmetric positive definite block tridiagonal matrix: B B' of a block bidiagonal B."""
    rng = np.random.default_rng(seed)
    root = np.zeros((n * dim, n * dim))
    for i in range(n):
        here = slice(i * dim, (i + 1) * dim)
        root[here, here] = rng.normal(size=(dim, dim)) + 2.0 * np.eye(dim)
        if i:
            before = slice((i - 1) * dim, i * dim)
            root[here, before] = coupling * rng.normal(size=(dim, dim))
    return root @ root.T + 0.1 * np.eye(n * dim)


def banded(matrix, dim):
    """[i, c, m]: the element m rows below the diagonal in column i dim + c; zero beyond the end."""
    size = len(matrix)
    band = np.zeros((size // dim, dim, 2 * dim))
    for column in range(size):
        for below in range(min(2 * dim, size - column)):
            band[column // dim, column % dim, below] = matrix[column + below, column]
    return band


def blocks(matrix, dim, apart):
    n = len(matrix) // dim
    return np.stack(
        [
            matrix[i * dim : (i + 1) * dim, (i + apart) * dim : (i + apart + 1) * dim]
            for i in range(n - apart)
        ],
        axis=-1,
    )


@given(sizes)
def test_dense_and_reversed(size):
    n, dim, seed = size
    matrix = random_matrix(n, dim, seed)
    assert np.array_equal(dense(banded(matrix, dim)), matrix)
    assert np.array_equal(dense(reversed_band(banded(matrix, dim))), matrix[::-1, ::-1])


@given(sizes)
def test_log_determinant_and_solution(size):
    n, dim, seed = size
    matrix = random_matrix(n, dim, seed)
    cholesky = factor(banded(matrix, dim))
    assert cholesky.log_det == pytest.approx(np.linalg.slogdet(matrix)[1], rel=1e-10, abs=1e-10)
    right = np.random.default_rng(seed).normal(size=(n * dim, 3))
    solution = cholesky.solve(right)
    # a condition number up to 1e4 costs four digits
    assert np.allclose(matrix @ solution, right, rtol=0, atol=1e-9)
    assert np.allclose(cholesky.solve(right[:, 0]), solution[:, 0], rtol=1e-12)
    root = np.linalg.cholesky(matrix)
    assert np.allclose(root.T @ cholesky.solve_transposed_factor(right), right, rtol=0, atol=1e-9)


def test_the_input_is_left_alone():
    band = banded(random_matrix(5, 2, 0), 2)
    before = band.copy()
    right = np.ones(10)
    cholesky = factor(band)
    cholesky.solve(right)
    cholesky.solve_transposed_factor(right)
    band_inverse(band, cholesky, 8)
    assert np.array_equal(band, before)
    assert np.array_equal(right, np.ones(10))


def test_draws_have_the_inverse_as_their_covariance():
    """L' x = e gives the covariance inv(L L') exactly: its matrix is inv(L')."""
    matrix = random_matrix(6, 2, 3)
    spread = factor(banded(matrix, 2)).solve_transposed_factor(np.eye(12))
    assert np.allclose(spread @ spread.T, np.linalg.inv(matrix), rtol=0, atol=1e-11)


@settings(max_examples=40)
@given(sizes, st.integers(0, 3))
def test_blocks_of_the_inverse(size, extra):
    n, dim, seed = size
    matrix = random_matrix(n, dim, seed)
    band = banded(matrix, dim)
    inverse = np.linalg.inv(matrix)
    # n = 1 needs a padding state only if asked
    covariance, neighbour = (
        np.asarray(part) for part in band_inverse(band, factor(band), n + extra)
    )
    assert covariance.shape == (dim, dim, n + extra)
    assert neighbour.shape[2] >= n - 1
    scale = np.abs(inverse).max()
    assert np.allclose(covariance[..., :n], blocks(inverse, dim, 0), rtol=0, atol=1e-10 * scale)
    assert not covariance[..., n:].any()
    if n > 1:
        expected = blocks(inverse, dim, 1)
        assert np.allclose(neighbour[..., : n - 1], expected, rtol=0, atol=1e-10 * scale)
    assert not neighbour[..., n - 1 :].any()


@pytest.mark.parametrize("padded", [1, 4])
def test_a_single_state(padded):
    matrix = random_matrix(1, 2, 1)
    band = banded(matrix, 2)
    covariance, neighbour = band_inverse(band, factor(band), padded)
    assert np.allclose(np.asarray(covariance)[..., 0], np.linalg.inv(matrix), rtol=1e-12)
    assert neighbour.shape == (2, 2, padded - 1)


@pytest.mark.parametrize("dim", [1, 2, 4])
def test_inverses_of_many_small_matrices(dim):
    many = np.stack([random_matrix(1, dim, seed) for seed in range(20)], axis=-1)
    found = np.asarray(inverse_of_blocks(jnp.asarray(many)))
    for i in range(20):
        assert np.allclose(found[..., i] @ many[..., i], np.eye(dim), rtol=0, atol=1e-11)


@pytest.mark.parametrize("dim", [2, 4])
@pytest.mark.parametrize("where", [0, 5, 9])
@pytest.mark.parametrize("value", [-1.0, np.nan, np.inf, -np.inf])
def test_no_factor_of_what_is_not_positive_definite(dim, where, value):
    band = banded(random_matrix(10, dim, 2), dim)
    band[where, dim - 1, 0] = value
    with pytest.raises(NotPositiveDefinite, match=r"^$"):
        factor(band)


def test_no_factor_of_what_is_not_finite_beside_the_diagonal():
    band = banded(random_matrix(10, 2, 2), 2)
    band[4, 0, 1] = np.nan
    with pytest.raises(NotPositiveDefinite, match=r"^$"):
        factor(band)


def test_an_indefinite_matrix_with_a_positive_diagonal():
    band = np.zeros((2, 2, 4))
    band[..., 0] = 1.0
    band[0, 0, 2] = 2.0
    with pytest.raises(NotPositiveDefinite, match=r"^$"):
        factor(band)
