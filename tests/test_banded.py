"""Banded algebra against dense matrices."""

import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trackfit.inference.banded import (
    NotPositiveDefinite,
    block_covariances,
    dense,
    factor,
    reversed_band,
)
from trackfit.motion.blocks import inverse, packed, unpacked

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
    block_covariances(band, cholesky, factor(reversed_band(band)), np.arange(5))
    assert np.array_equal(band, before)
    assert np.array_equal(right, np.ones(10))


def test_draws_have_the_inverse_as_their_covariance():
    """L' x = e gives the covariance inv(L L') exactly: its matrix is inv(L')."""
    matrix = random_matrix(6, 2, 3)
    spread = factor(banded(matrix, 2)).solve_transposed_factor(np.eye(12))
    assert np.allclose(spread @ spread.T, np.linalg.inv(matrix), rtol=0, atol=1e-11)


@settings(max_examples=40)
@given(sizes, st.integers(0, 2**32 - 1))
def test_blocks_of_the_inverse(size, seed):
    """At any states, in any order, some twice."""
    n, dim, matrix_seed = size
    matrix = random_matrix(n, dim, matrix_seed)
    band = banded(matrix, dim)
    at = np.random.default_rng(seed).integers(0, n, size=n + 2)
    found = block_covariances(band, factor(band), factor(reversed_band(band)), at)
    expected = np.moveaxis(blocks(np.linalg.inv(matrix), dim, 0), -1, 0)[at]
    assert found.shape == (n + 2, dim, dim)
    # the condition number costs digits: the scale is that of the inverse
    assert np.allclose(found, expected, rtol=0, atol=1e-10 * np.abs(expected).max())


def test_a_single_state():
    matrix = random_matrix(1, 2, 1)
    band = banded(matrix, 2)
    found = block_covariances(band, factor(band), factor(reversed_band(band)), np.array([0]))
    assert np.allclose(found[0], np.linalg.inv(matrix), rtol=1e-12)


@pytest.mark.parametrize("dim", [1, 2, 3, 4])
def test_inverses_of_many_small_matrices(dim):
    many = np.stack([random_matrix(1, dim, seed) for seed in range(20)], axis=-1)
    found = np.asarray(packed(inverse(unpacked(jnp.asarray(many))), 20))
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
