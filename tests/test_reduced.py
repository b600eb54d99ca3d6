"""A Gaussian at some of its states: against the dense inverse."""

import numpy as np
import pytest

from trackfit.inference.banded import NotPositiveDefinite, dense, joined, split
from trackfit.inference.reduced import Reduced


def random_band(states, dim, rng):
    """A positive definite block tridiagonal matrix, from a factor of the same shape."""
    root = np.zeros((states, dim, states, dim))
    for i in range(states):
        root[i, :, i] = np.tril(rng.normal(size=(dim, dim))) + 3.0 * np.eye(dim)
        if i:
            root[i, :, i - 1] = rng.normal(size=(dim, dim))
    root = root.reshape(states * dim, states * dim)
    full = (root @ root.T).reshape(states, dim, states, dim)
    at = np.arange(states)
    return joined(full[at, :, at], full[at[1:], :, at[:-1]])


@pytest.mark.parametrize("dim", [2, 4])
@pytest.mark.parametrize(("states", "kept"), [(1, 1), (2, 1), (7, 2), (30, 1), (30, 10), (30, 30)])
def test_states_integrated_out_leave_the_marginal_of_the_others(dim, states, kept):
    rng = np.random.default_rng(100 * states + kept)
    band, gradient = random_band(states, dim, rng), rng.normal(size=(states, dim))
    at = np.sort(rng.choice(states, kept, replace=False))
    found = Reduced.of(band, gradient, at)
    whole = dense(band)
    covariance = np.linalg.inv(whole).reshape(states, dim, states, dim)
    np.testing.assert_allclose(
        np.linalg.inv(dense(found.band)),
        covariance[at][:, :, at].reshape(kept * dim, kept * dim),
        atol=1e-12,
    )
    step = np.linalg.solve(whole, gradient.ravel())
    reduced = np.linalg.solve(dense(found.band), found.gradient.ravel())
    np.testing.assert_allclose(reduced, step.reshape(states, dim)[at].ravel(), atol=1e-12)
    assert found.gained + found.gradient.ravel() @ reduced == pytest.approx(gradient.ravel() @ step)


def test_blocks_taken_apart_and_joined_are_the_same():
    band = random_band(6, 4, np.random.default_rng(1))
    assert np.array_equal(joined(*split(band)), band)


def test_states_that_nothing_holds_are_told():
    band = random_band(6, 2, np.random.default_rng(2))
    band[3] *= -1.0
    with pytest.raises(NotPositiveDefinite):
        Reduced.of(band, np.zeros((6, 2)), np.array([0, 5]))
