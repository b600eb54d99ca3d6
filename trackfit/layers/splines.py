"""Quintic B-splines of gridded layers and their partial derivatives, vectorised in JAX.

A layer f on a square grid with spacing s is the tensor product of uniform quintic B-splines B that
interpolates its nodes (de Boor, *A Practical Guide to Splines*, 1978; coefficients by the recursive
filter of Unser, Aldroubi & Eden, IEEE Trans. Signal Process. 41:821, 1993, through scipy.ndimage):

    f(x, y) = sum_ij c_ij B((x - x0)/s - j) B((y - y0)/s - i)

The engine needs the *jet* of f: all partial derivatives up to order four at many points. Orders one
to three make the drift, its Jacobian and its Hessian; order four carries their derivatives when the
marginal likelihood is differentiated through the mode. All are continuous: with cubic splines the
third derivatives jump from cell to cell, the likelihood jumps with them, and one fit in six on
tracks like the demonstration's did not settle.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from math import comb, factorial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import scipy.ndimage
from jaxtyping import Array, Float, Int

import trackfit.compiled  # noqa: F401  (float64 before any array is made)
from trackfit.layers.layer import Layer

JET_ORDERS: tuple[tuple[int, int], ...] = tuple(
    (order - b, b) for order in range(5) for b in range(order + 1)
)
"""Orders (in x, in y) of the 15 rows of a jet: (0,0), (1,0), (0,1), (2,0), (1,1), (0,2), ..."""

JET_ROW: dict[tuple[int, int], int] = {orders: row for row, orders in enumerate(JET_ORDERS)}


DEGREE = 5
NODES = DEGREE + 1
"""Nodes of the stencil along one axis."""

BLOCK = 16384
"""Points whose stencils are held at once, where there are very many."""

PADDING = (DEGREE - 1) // 2
"""Mirrored nodes on every side of the grid, so that the stencil never leaves it."""


def _pieces() -> list[list[list[float]]]:
    """Coefficients of the B-spline pieces as polynomials in the place f within a cell.

    Highest power first, indexed [derivative][node of the stencil]. The piece over node j is that of
    the truncated power form sum_i (-1)^i C(n+1, i) (f + k - i)^n / n! with k = n - j.
    """
    pieces = []
    for k in range(DEGREE, -1, -1):
        piece = np.poly1d([0.0])
        for i in range(k + 1):
            sign = (-1.0) ** i * comb(DEGREE + 1, i) / factorial(DEGREE)
            piece = piece + sign * np.poly1d([1.0, k - i]) ** DEGREE
        pieces.append(piece)
    return [[piece.deriv(d).coeffs.tolist() for piece in pieces] for d in range(5)]


_PIECES = _pieces()


class Spline(NamedTuple):
    """Spline coefficients of one layer, ready for the engine (a JAX pytree).

    Attributes
    ----------
    coefficients
        `PADDING` nodes on every side of the layer's grid; unit of the layer.
    origin_km
        Plane position (x, y) of the layer's node [0, 0].
    spacing_km
        Distance between nodes, the same in x and y.
    """

    coefficients: Float[Array, "times components ny nx"]
    origin_km: Float[Array, " 2"]
    spacing_km: Float[Array, ""]


class TimeBracket(NamedTuple):
    """Which two slices of a layer surround each moment, and the weight of the later one."""

    earlier: Int[Array, " points"]
    weight: Float[Array, " points"]


def fit_spline(layer: Layer) -> Spline:
    """Interpolate a layer's nodes by a quintic spline with mirrored edges.

    Values are kept at every node; a layer must have at least two nodes in each direction.
    """
    values = np.moveaxis(layer.values, -1, 1)
    for axis in (2, 3):
        values = scipy.ndimage.spline_filter1d(values, order=DEGREE, axis=axis, mode="mirror")
    padded = np.pad(
        values, ((0, 0), (0, 0), (PADDING, PADDING), (PADDING, PADDING)), mode="reflect"
    )
    return Spline(
        coefficients=jnp.asarray(padded),
        origin_km=jnp.asarray([layer.x0_km, layer.y0_km]),
        spacing_km=jnp.asarray(float(layer.spacing_km)),
    )


def bracket_times(layer: Layer, hours: Float[np.ndarray, " points"]) -> TimeBracket:
    """Find the slices of a layer around each moment (hours since 1970-01-01T00:00Z).

    A fixed layer, or a moment outside the layer's times, takes the nearest slice whole; whether
    the layer's times cover a track is checked where the track is prepared.
    """
    if layer.fixed:
        return TimeBracket(jnp.zeros(len(hours), jnp.int32), jnp.zeros(len(hours)))
    last = len(layer.hours) - 2
    earlier = np.clip(np.searchsorted(layer.hours, hours, side="right") - 1, 0, last)
    width = layer.hours[earlier + 1] - layer.hours[earlier]
    weight = np.clip((hours - layer.hours[earlier]) / width, 0.0, 1.0)
    return TimeBracket(jnp.asarray(earlier, jnp.int32), jnp.asarray(weight))


def jet_rows(order: int) -> int:
    """Number of partial derivatives up to an order: the rows of a jet."""
    return (order + 1) * (order + 2) // 2


@partial(jax.jit, static_argnames="order")
def spline_jet(
    spline: Spline,
    when: TimeBracket,
    x_km: Float[Array, " points"],
    y_km: Float[Array, " points"],
    order: int,
) -> Float[Array, "components rows points"]:
    """All partial derivatives up to `order` (at most 4) of a layer at points, unit per km^order.

    Linear in time between slices. Beyond the grid the point is moved to the nearest edge.
    Row order is `JET_ORDERS`. Very many points are taken in blocks, whose stencils stay in the
    processor's cache: that halves the time.
    """
    points = x_km.shape[0]
    if points <= 2 * BLOCK:
        return _jet(spline, when, x_km, y_km, order)
    blocks = -(-points // BLOCK)

    def in_blocks(values: Array) -> Array:
        padded = jnp.pad(values, (0, blocks * BLOCK - points), mode="edge")
        return padded.reshape(blocks, BLOCK)

    jets = jax.lax.map(
        lambda block: _jet(spline, TimeBracket(block[0], block[1]), block[2], block[3], order),
        tuple(in_blocks(values) for values in (*when, x_km, y_km)),
    )
    return jnp.moveaxis(jets, 0, 2).reshape(*jets.shape[1:3], -1)[..., :points]


def _jet(
    spline: Spline,
    when: TimeBracket,
    x_km: Float[Array, " points"],
    y_km: Float[Array, " points"],
    order: int,
) -> Float[Array, "components rows points"]:
    orders = JET_ORDERS[: jet_rows(order)]
    times, components, ny, nx = spline.coefficients.shape
    col, weights_x = _stencil(x_km, spline.origin_km[0], spline.spacing_km, nx - 2 * PADDING)
    row, weights_y = _stencil(y_km, spline.origin_km[1], spline.spacing_km, ny - 2 * PADDING)
    flat = spline.coefficients.reshape(-1)
    offsets = np.asarray([i * nx + j for i in range(NODES) for j in range(NODES)], np.int32)[
        :, None
    ]
    jets = []
    for component in range(components):
        corner = ((when.earlier * components + component) * ny + row) * nx + col
        nodes = _gather(flat, corner + offsets)
        if times > 1:
            later = _gather(flat, corner + offsets + components * ny * nx)
            nodes = nodes + when.weight * (later - nodes)
        # the barrier keeps XLA from gathering anew for every row of the jet
        nodes = jax.lax.optimization_barrier(nodes)
        along_x = jnp.stack(
            [
                jnp.stack(
                    [_dot(weights_x[a], nodes[NODES * i : NODES * (i + 1)]) for i in range(NODES)]
                )
                for a in range(order + 1)
            ]
        )
        rows = [_dot(weights_y[b], along_x[a]) / spline.spacing_km ** (a + b) for a, b in orders]
        jets.append(jnp.stack(rows))
    return jnp.stack(jets)


def _gather(
    flat: Float[Array, " coefficients"], at: Int[Array, "stencil points"]
) -> Float[Array, "stencil points"]:
    return flat.at[at].get(mode="promise_in_bounds")


def _dot(weights: Sequence[Array], values: Sequence[Array] | Array) -> Array:
    total = weights[0] * values[0]
    for weight, value in zip(weights[1:], values[1:], strict=True):
        total = total + weight * value
    return total


def _stencil(
    at_km: Float[Array, " points"], origin_km: Array, spacing_km: Array, nodes: int
) -> tuple[Int[Array, " points"], list[list[Array]]]:
    """First padded node of the stencil and B-spline weights in cells, [derivative][node]."""
    position = jnp.clip((at_km - origin_km) / spacing_km, 0.0, nodes - 1.0)
    cell = jnp.clip(jnp.floor(position), 0, nodes - 2)
    cell, f = jax.lax.optimization_barrier((cell.astype(jnp.int32), position - cell))
    weights = [[_polynomial(piece, f) for piece in pieces] for pieces in _PIECES]
    return cell, weights


def _polynomial(coefficients: list[float], f: Float[Array, " points"]) -> Float[Array, " points"]:
    """Horner's rule, highest power first."""
    value = jnp.full_like(f, coefficients[0])
    for coefficient in coefficients[1:]:
        value = value * f + coefficient
    return value
