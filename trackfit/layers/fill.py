"""Missing cells, filled as smoothly as their neighbours allow."""

from __future__ import annotations

import numpy as np
from jaxtyping import Bool, Float
from scipy import sparse
from scipy.sparse import linalg


def fill(values: Float[np.ndarray, "slices rows cols"]) -> Float[np.ndarray, "slices rows cols"]:
    """Solve Laplace's equation on the missing (NaN) cells of every slice.

    Each missing cell becomes the mean of its neighbours (four, fewer at the edges: the natural
    boundary), so filled values never leave the range of the known ones, and a linear function
    around a hole is restored exactly. Slices with the same missing cells share a factorisation.

    A slice without a known cell stays missing.
    """
    values = np.array(values, float, order="C")
    slices = values.reshape(len(values), -1)
    shape = (values.shape[1], values.shape[2])
    missing = np.isnan(slices)
    masks, which = np.unique(np.packbits(missing, axis=1), axis=0, return_inverse=True)
    for number in range(len(masks)):
        members = np.flatnonzero(which.ravel() == number)
        holes = missing[members[0]]
        if holes.any() and not holes.all():
            slices[np.ix_(members, holes)] = _solved(slices[members], holes, shape)
    return values


def _solved(
    slices: Float[np.ndarray, "slices cells"],
    holes: Bool[np.ndarray, " cells"],
    shape: tuple[int, int],
) -> Float[np.ndarray, "slices holes"]:
    laplacian = _laplacian(shape)[holes]
    known = laplacian[:, ~holes] @ slices[:, ~holes].T
    # The matrix is symmetric and diagonally dominant: no pivoting, little fill-in.
    factor = linalg.splu(
        laplacian[:, holes].tocsc(),
        permc_spec="MMD_AT_PLUS_A",
        diag_pivot_thresh=0.0,
        options={"SymmetricMode": True},
    )
    return factor.solve(-known).T


def _laplacian(shape: tuple[int, int]) -> sparse.csr_array:
    """Return the graph Laplacian of a grid: neighbours minus self, over the edges there are."""
    paths = []
    for count in shape:
        ones = np.ones(count - 1)
        links = sparse.diags_array([ones, ones], offsets=[-1, 1], shape=(count, count))
        paths.append(sparse.diags_array(links.sum(axis=1)) - links)
    rows, cols = paths
    return sparse.csr_array(
        sparse.kron(rows, sparse.eye_array(shape[1]))
        + sparse.kron(sparse.eye_array(shape[0]), cols)
    )
