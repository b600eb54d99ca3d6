"""Covariances of the steps, and derivatives of the Laplace approximation in states and parameters.

See `trackfit.inference.process` for the density and `trackfit.inference.laplace` for what these are
used for. All are compiled by JAX and vectorised over steps.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.inference.process import (
    FieldRows,
    ProcessParameters,
    StartTerms,
    StepTerms,
    Track,
    density,
    ends_of_steps,
    field_at,
    pad_end,
    pad_start,
    process_gradient,
    rows_of_start,
    rows_of_steps,
    start_density,
    start_terms,
    step_terms,
)
from trackfit.layers.splines import jet_rows
from trackfit.motion import Motion
from trackfit.motion.blocks import (
    Element,
    Matrix,
    Vector,
    apply,
    both_axes,
    dot,
    inverse,
    kept,
    minus,
    packed,
    product,
    symmetric,
    times,
    total,
    transposed,
    unpacked,
)
from trackfit.motion.velocity import Basis, amplitude_gradient, shift_gradient


class StepSpread(NamedTuple):
    """Covariances of the Gaussian approximation, states or steps last.

    `residual` is the covariance of the linearised residual r = z' - J z of each step, `cross` that
    of r with z. They are kept instead of the covariance of neighbours: where a step is short, z and
    z' are all but equal and their covariances cannot tell r from rounding.
    """

    covariance: Float[Array, "dim dim states"]
    residual: Float[Array, "dim dim steps"]
    cross: Float[Array, "dim dim steps"]


@partial(jax.jit, static_argnames="motion")
def step_spread(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    forward: Float[Array, "states dim 2*dim"],
    backward: Float[Array, "states dim 2*dim"],
) -> StepSpread:
    """Blocks of the inverse Hessian, without a recursion over states.

    `forward` and `backward` are the banded factors of the Hessian and of the reversed Hessian, the
    latter's states turned back. Their diagonal blocks give the Schur complements Sf_i and Sb_i (see
    `trackfit.inference.banded.block_covariances`). With the step's own r'Wr taken out, A = Sf_i -
    J'WJ and D = Sb_(i+1) - W hold what is known of z and z' from both sides, and in the
    variables (z, r) the joint precision is [[A + J'DJ, J'D], [DJ, D + W]]. With T = inv(D + W):

        V = inv(A + J'(W T D)J),   cov(r, z) = -T D J V,   cov(r) = T + T D J V J'D T.

    The last state's V is inv(Sf).
    """
    before = _schur_complements(forward, reverse=False)
    after = _schur_complements(backward, reverse=True)
    field = field_at(theta, basis, z, 2)
    terms = step_terms(motion, theta, *ends_of_steps(z), rows_of_steps(field), track.steps)
    J, W = terms.jacobian, both_axes(terms.weight)
    own = product(transposed(J), product(W, J))
    known_before = _difference([[_part(e, slice(None, -1)) for e in row] for row in before], own)
    known_after = kept(_difference([[_part(e, slice(1, None)) for e in row] for row in after], W))
    T = kept(inverse(_sum(known_after, W)))
    pull = kept(product(T, known_after))
    through = product(kept(product(transposed(J), product(W, pull))), J)
    V = kept(inverse(kept(symmetric(_sum(known_before, through)))))
    cross = kept(product(product(pull, J), V))
    residual = _sum(T, product(cross, transposed(product(pull, J))))
    last = inverse([[_part(e, slice(-1, None)) for e in row] for row in before])
    steps = z.shape[1] - 1
    covariance = jnp.concatenate([packed(V, steps), packed(last, 1)], axis=-1)
    return StepSpread(covariance, packed(symmetric(residual), steps), -packed(cross, steps))


def _schur_complements(columns: Array, *, reverse: bool) -> Matrix:
    """L_ii L_ii' of every block of a banded factor."""
    dim = columns.shape[1]
    rows = jax.lax.optimization_barrier(jnp.moveaxis(columns[:, :, :dim], 0, -1))
    root: Matrix = [[rows[c, r - c] if r >= c else 0 for c in range(dim)] for r in range(dim)]
    square = kept(product(root, transposed(root)))
    return [row[::-1] for row in square[::-1]] if reverse else square


def _part(element: Element, which: slice) -> Element:
    return 0 if isinstance(element, int) else element[which]


def _sum(a: Matrix, b: Matrix) -> Matrix:
    return [[total((x, y)) for x, y in zip(p, q, strict=True)] for p, q in zip(a, b, strict=True)]


def _difference(a: Matrix, b: Matrix) -> Matrix:
    return [[minus(x, y) for x, y in zip(p, q, strict=True)] for p, q in zip(a, b, strict=True)]


@partial(jax.jit, static_argnames="motion")
def trace_gradient(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    spread: StepSpread,
) -> Float[Array, "states dim"]:
    """Gradient in the states of 1/2 <V, H>, with V = inv(H) held.

    The basis must hold the derivatives of the velocity up to order three.
    """
    field = field_at(theta, basis, z, 3)

    def half_trace(before: Vector, after: Vector, rows: FieldRows) -> Array:
        terms = step_terms(motion, theta, before, after, rows, track.steps)
        return _half_trace(terms, spread)

    def half_trace_start(first: Vector, rows: FieldRows) -> Array:
        start = start_terms(motion, theta, first, rows, track)
        return _half_trace_start(start, spread.covariance[..., 0])

    low = field[:, : jet_rows(2)]
    of_before, of_after, of_rows = jax.grad(half_trace, argnums=(0, 1, 2))(
        *ends_of_steps(z), rows_of_steps(low)
    )
    of_field = jnp.stack([jnp.stack(component) for component in of_rows])
    of_position = shift_gradient(of_field, field[..., :-1])
    of_before = jnp.stack(of_before).at[:2].add(of_position)
    gradient = pad_end(of_before) + pad_start(jnp.stack(of_after))

    of_first, of_rows = jax.grad(half_trace_start, argnums=(0, 1))(
        list(z[:, 0]), rows_of_start(low)
    )
    of_field = jnp.stack([jnp.stack(component) for component in of_rows])
    of_shift = shift_gradient(of_field[..., None], field[..., :1])[:, 0]
    return gradient.at[:, 0].add(jnp.stack(of_first).at[:2].add(of_shift)).T


@partial(jax.jit, static_argnames="motion")
def parameter_gradient(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    spread: StepSpread,
    adjoint: Float[Array, "dim states"],
) -> ProcessParameters:
    """Gradient in theta of f + 1/2 <V, H> + adjoint' g, with states, V and adjoint held.

    With H adjoint = -gradient(1/2 <V, H>) this is the exact gradient of the Laplace marginal
    likelihood in theta (process part).
    """
    adjoint_before, adjoint_after = ends_of_steps(adjoint)

    def lagrangian(theta: ProcessParameters, rows: FieldRows, first_rows: FieldRows) -> Array:
        terms = step_terms(motion, theta, *ends_of_steps(z), rows, track.steps)
        moved = apply(terms.jacobian, adjoint_before)
        along = [minus(a, b) for a, b in zip(adjoint_after, moved, strict=True)]
        start = start_terms(motion, theta, list(z[:, 0]), first_rows, track)
        along_start = apply(start.jacobian, list(adjoint[:, 0]))
        return (
            density(terms)
            + _half_trace(terms, spread)
            + jnp.sum(dot(along, terms.weighted))
            + start_density(start)
            + _half_trace_start(start, spread.covariance[..., 0])
            + dot(along_start, start.weighted)
        )

    field = field_at(theta, basis, z, 2)
    of_theta, of_rows, of_first = jax.grad(lagrangian, argnums=(0, 1, 2))(
        theta, rows_of_steps(field), rows_of_start(field)
    )
    of_field = pad_end(jnp.stack([jnp.stack(component) for component in of_rows]))
    of_first = jnp.stack([jnp.stack(component) for component in of_first])
    of_field = of_field.at[..., 0].add(of_first)
    return of_theta._replace(amplitudes=amplitude_gradient(of_field, basis))


@partial(jax.jit, static_argnames="motion")
def gradient_sensitivity(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
) -> Float[Array, "states dim parameters"]:
    """Derivative in theta of the gradient in the states (process part), states held."""

    def gradient(theta: ProcessParameters) -> Array:
        field = field_at(theta, basis, z, 2)
        terms = step_terms(motion, theta, *ends_of_steps(z), rows_of_steps(field), track.steps)
        start = start_terms(motion, theta, list(z[:, 0]), rows_of_start(field), track)
        return process_gradient(terms, start)

    parts = [part for part in jax.jacfwd(gradient)(theta) if part is not None]
    return jnp.moveaxis(jnp.concatenate(parts, axis=-1), 0, 1)


def _half_trace(terms: StepTerms, spread: StepSpread) -> Array:
    """1/2 <V, H> of the process: W against the covariance of the linearised residual, less B.

    The covariance is that of r - (J - J_0) z, to first order around the J_0 at hand.
    """
    V = unpacked(spread.covariance[..., :-1])
    residual, cross = unpacked(spread.residual), unpacked(spread.cross)
    change = [[minus(e, jax.lax.stop_gradient(e)) for e in row] for row in terms.jacobian]
    moved = product(change, transposed(cross))
    k = len(terms.weight)
    parts = []
    for p in range(k):
        for q in range(k):
            for axis in range(2):
                r, c = 2 * p + axis, 2 * q + axis
                inner = minus(residual[r][c], total((moved[r][c], moved[c][r])))
                parts.append(times(terms.weight[p][q], inner))
    xx, xy, yy = terms.curvature
    bend = xx * V[0][0] + xy * (V[0][1] + V[1][0]) + yy * V[1][1]
    return 0.5 * jnp.sum(minus(total(parts), bend))


def _half_trace_start(start: StartTerms, covariance: Array) -> Array:
    """1/2 <V, H> of the start."""
    V = unpacked(covariance)
    spread = product(product(start.jacobian, V), transposed(start.jacobian))
    inner = total(times(p, spread[i][i]) for i, p in enumerate(start.precision))
    xx, xy, yy = start.curvature
    bend = total((times(xx, V[0][0]), times(xy, V[0][1] + V[1][0]), times(yy, V[1][1])))
    return jnp.asarray(0.5 * minus(inner, bend))
