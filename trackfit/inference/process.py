"""The negative log density of a track's states and what the Laplace approximation needs of it.

For states z_i on a time grid the process part of the negative log density is

    f(z; theta) = sum_i [ 1/2 r_i' W_i r_i + log det Q_i ] + start,
    r_i = z_(i+1) - F_i z_i - G_i u(x_i, t_i)

(log det Q_i of one axis; two axes share it). With J_i = F_i + G_i Du_i its Hessian is block
tridiagonal:

    H_(i,i)     += J' W J - B_i        B_i = sum_a (W r G)_a D^2 u_a   (positions only)
    H_(i+1,i+1) += W
    H_(i,i+1)    = - J' W

Everything here is compiled by JAX, vectorised over steps, and evaluates each spline once. Arrays
hold the quantities of a state first and the steps last; padded steps have mask zero.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.layers.splines import jet_rows
from trackfit.motion import FieldTimes, Motion, VelocityField
from trackfit.motion.blocks import (
    Element,
    Matrix,
    Vector,
    apply,
    both_axes,
    dot,
    minus,
    packed,
    product,
    times,
    total,
    transposed,
    unpacked,
)
from trackfit.motion.velocity import Basis, amplitude_gradient, shift_gradient, velocity_jet

LOG_2PI = 1.8378770664093453


class Steps(NamedTuple):
    """The time grid: step lengths, and one for a real step or zero for padding."""

    dt_hours: Float[Array, " steps"]
    mask: Float[Array, " steps"]


class Sightings(NamedTuple):
    """What the fixes say of each state's position: mean, and precision as (xx, xy, yy), 1/km^2."""

    mean_km: Float[Array, "2 states"]
    precision: Float[Array, "3 states"]


class Start(NamedTuple):
    """Vague normal prior of the first position."""

    mean_km: Float[Array, 2]
    sd_km: Float[Array, ""]


class Track(NamedTuple):
    """All arrays of one track that do not change while it is fitted (a JAX pytree)."""

    field: VelocityField
    times: FieldTimes
    steps: Steps
    start: Start


class Evaluation(NamedTuple):
    """The density at one set of states.

    `band` holds, for column c of block i, the rows c.. of the lower triangle of the Hessian: the
    layout that LAPACK's banded routines read without a copy. `curvature` is B_i in its three
    distinct elements; adding it back leaves the Gauss-Newton Hessian, which is always positive.
    """

    value: Float[Array, ""]
    gradient: Float[Array, "states dim"]
    band: Float[Array, "states dim 2*dim"]
    curvature: Float[Array, "states 3"]


class _StepTerms(NamedTuple):
    residual: Vector
    weighted: Vector
    jacobian: Matrix
    weight: Matrix
    log_det: Element
    curvature: tuple[Element, Element, Element]


FieldRows = tuple[tuple[Array, ...], tuple[Array, ...]]


@partial(jax.jit, static_argnames="motion")
def evaluate(
    motion: Motion,
    theta: Float[Array, " parameters"],
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    sightings: Sightings,
) -> Evaluation:
    """Value, gradient and Hessian of the negative log density, observations included.

    `theta` holds the logarithms of the motion's parameters, then the amplitudes of the velocity
    field; `basis` is the field's at the states' positions. The constant of the observations is left
    out (it is added where their scale is known).
    """
    n_motion, dim = len(motion.parameters), z.shape[0]
    field = _rows(_field(motion, theta, basis, z, 2))
    terms = _step_terms(motion, theta[:n_motion], *_ends(z), field, track.steps)
    start_precision = _start_precision(motion, theta[:n_motion], track.start)
    start_offset = _start_offset(z, track.start)
    offset = z[:2] - sightings.mean_km
    xx, xy, yy = sightings.precision
    pull = jnp.stack([xx * offset[0] + xy * offset[1], xy * offset[0] + yy * offset[1]])
    value = (
        _density(terms)
        + _start_density(start_precision, start_offset)
        + 0.5 * jnp.sum(offset * pull)
    )
    gradient = _process_gradient(terms).at[:2].add(pull)
    gradient = gradient.at[:, 0].add(start_precision * start_offset)

    weight_jacobian = product(both_axes(terms.weight), terms.jacobian)
    steps = z.shape[1] - 1
    diagonal = _pad_end(packed(product(transposed(terms.jacobian), weight_jacobian), steps))
    diagonal = diagonal + _pad_start(packed(both_axes(terms.weight), steps))
    curvature = _pad_end(jnp.stack(terms.curvature))
    information = sightings.precision - curvature
    diagonal = diagonal.at[:2, :2].add(
        jnp.stack([jnp.stack([information[0], information[1]]), information[1:]])
    )
    diagonal = diagonal.at[jnp.arange(dim), jnp.arange(dim), 0].add(start_precision)
    off = _pad_end(-packed(transposed(weight_jacobian), steps))
    return Evaluation(
        value=value, gradient=gradient.T, band=_band(diagonal, off), curvature=curvature.T
    )


@partial(jax.jit, static_argnames="motion")
def trace_gradient(
    motion: Motion,
    theta: Float[Array, " parameters"],
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    covariance: Float[Array, "dim dim states"],
    neighbour: Float[Array, "dim dim steps"],
) -> Float[Array, "states dim"]:
    """Gradient in the states of 1/2 <V, H>, with V = inv(H) held (its blocks inside the band).

    The basis must hold the derivatives of the velocity up to order three.
    """
    field = _field(motion, theta, basis, z, 3)

    def half_trace(before: Vector, after: Vector, rows: FieldRows) -> Array:
        terms = _step_terms(
            motion, theta[: len(motion.parameters)], before, after, rows, track.steps
        )
        return _half_trace(terms, covariance, neighbour)

    rows = _rows(field[:, : jet_rows(2)])
    of_before, of_after, of_rows = jax.grad(half_trace, argnums=(0, 1, 2))(*_ends(z), rows)
    of_field = jnp.stack([jnp.stack(component) for component in of_rows])
    of_position = shift_gradient(of_field, field[..., :-1])
    of_before = jnp.stack(of_before).at[:2].add(of_position)
    return (_pad_end(of_before) + _pad_start(jnp.stack(of_after))).T


@partial(jax.jit, static_argnames="motion")
def parameter_gradient(
    motion: Motion,
    theta: Float[Array, " parameters"],
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
    covariance: Float[Array, "dim dim states"],
    neighbour: Float[Array, "dim dim steps"],
    adjoint: Float[Array, "dim states"],
) -> Float[Array, " parameters"]:
    """Gradient in theta of f + 1/2 <V, H> + adjoint' g, with states, V and adjoint held.

    With H adjoint = -gradient(1/2 <V, H>) this is the exact gradient of the Laplace marginal
    likelihood in theta (process part).
    """
    n_motion, dim = len(motion.parameters), z.shape[0]
    start_variance = covariance[jnp.arange(dim), jnp.arange(dim), 0]
    adjoint_before, adjoint_after = _ends(adjoint)

    def lagrangian(log_parameters: Array, rows: FieldRows) -> Array:
        terms = _step_terms(motion, log_parameters, *_ends(z), rows, track.steps)
        moved = apply(terms.jacobian, adjoint_before)
        along = [minus(a, b) for a, b in zip(adjoint_after, moved, strict=True)]
        precision = _start_precision(motion, log_parameters, track.start)
        offset = _start_offset(z, track.start)
        start = _start_density(precision, offset) + jnp.sum(
            precision * (0.5 * start_variance + adjoint[:, 0] * offset)
        )
        return (
            _density(terms)
            + _half_trace(terms, covariance, neighbour)
            + jnp.sum(dot(along, terms.weighted))
            + start
        )

    rows = _rows(_field(motion, theta, basis, z, 2))
    of_motion, of_rows = jax.grad(lagrangian, argnums=(0, 1))(theta[:n_motion], rows)
    of_field = _pad_end(jnp.stack([jnp.stack(component) for component in of_rows]))
    return jnp.concatenate([of_motion, amplitude_gradient(of_field, basis)])


@partial(jax.jit, static_argnames="motion")
def gradient_sensitivity(
    motion: Motion,
    theta: Float[Array, " parameters"],
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
) -> Float[Array, "states dim parameters"]:
    """Derivative in theta of the gradient in the states (process part), states held."""
    n_motion = len(motion.parameters)

    def gradient(theta: Array) -> Array:
        rows = _rows(_field(motion, theta, basis, z, 2))
        terms = _step_terms(motion, theta[:n_motion], *_ends(z), rows, track.steps)
        precision = _start_precision(motion, theta[:n_motion], track.start)
        start = precision * _start_offset(z, track.start)
        return _process_gradient(terms).at[:, 0].add(start)

    return jnp.moveaxis(jax.jacfwd(gradient)(theta), 0, 1)


def _field(motion: Motion, theta: Array, basis: Basis, z: Array, order: int) -> Array:
    """The velocity field's rows at the states; kept whole so that they are computed once."""
    rows = velocity_jet(theta[len(motion.parameters) :], basis, z.shape[1], order)
    return jax.lax.optimization_barrier(rows)


def _rows(field: Array) -> FieldRows:
    """The field at the start of every step, as separate vectors."""
    return tuple(field[0, :, :-1]), tuple(field[1, :, :-1])


def _ends(z: Array) -> tuple[Vector, Vector]:
    """States at the start and at the end of every step, as separate vectors."""
    return list(z[:, :-1]), list(z[:, 1:])


def _step_terms(
    motion: Motion,
    log_parameters: Array,
    before: Vector,
    after: Vector,
    field: FieldRows,
    steps: Steps,
) -> _StepTerms:
    k = motion.k
    F, G, W, log_det = motion.transition(log_parameters, steps.dt_hours)
    weight: Matrix = [[times(element, steps.mask) for element in row] for row in W]
    velocity = [rows[0] for rows in field]
    drift = [G[p] * velocity[axis] for p in range(k) for axis in range(2)]
    carried = apply(both_axes(F), before)
    residual = [a - total((c, d)) for a, c, d in zip(after, carried, drift, strict=True)]
    jacobian = both_axes(F)
    for p in range(k):
        for axis in range(2):
            for toward in range(2):
                slope = G[p] * field[axis][1 + toward]
                jacobian[2 * p + axis][toward] = total((jacobian[2 * p + axis][toward], slope))
    weighted = apply(both_axes(weight), residual)
    push = [dot(G, [weighted[2 * p + axis] for p in range(k)]) for axis in range(2)]
    xx, xy, yy = (push[0] * field[0][row] + push[1] * field[1][row] for row in range(3, 6))
    return _StepTerms(residual, weighted, jacobian, weight, log_det * steps.mask, (xx, xy, yy))


def _process_gradient(terms: _StepTerms) -> Array:
    back = apply(transposed(terms.jacobian), terms.weighted)
    return _pad_start(jnp.stack(terms.weighted)) - _pad_end(jnp.stack(back))


def _density(terms: _StepTerms) -> Array:
    """Process part of f, without the start and without factors of 2 pi."""
    return jnp.sum(0.5 * dot(terms.residual, terms.weighted) + terms.log_det)


def _half_trace(terms: _StepTerms, covariance: Array, neighbour: Array) -> Array:
    """1/2 <V, H> of the process: W against the covariance of the linearised residual, less B."""
    before, after = unpacked(covariance[..., :-1]), unpacked(covariance[..., 1:])
    spread = product(product(terms.jacobian, before), transposed(terms.jacobian))
    cross = product(terms.jacobian, unpacked(neighbour))
    k = len(terms.weight)
    parts = []
    for p in range(k):
        for q in range(k):
            for axis in range(2):
                r, c = 2 * p + axis, 2 * q + axis
                inner = total((spread[r][c], after[r][c])) - cross[r][c] - cross[c][r]
                parts.append(times(terms.weight[p][q], inner))
    xx, xy, yy = terms.curvature
    bend = xx * before[0][0] + xy * (before[0][1] + before[1][0]) + yy * before[1][1]
    return 0.5 * jnp.sum(minus(total(parts), bend))


def _start_precision(motion: Motion, log_parameters: Array, start: Start) -> Array:
    per_axis = motion.start_precision(log_parameters, start.sd_km)
    return jnp.repeat(per_axis, 2)


def _start_offset(z: Array, start: Start) -> Array:
    return z[:, 0].at[:2].add(-start.mean_km)


def _start_density(precision: Array, offset: Array) -> Array:
    return 0.5 * jnp.sum(precision * offset**2) - 0.5 * jnp.sum(jnp.log(precision))


def _pad_end(steps: Array) -> Array:
    """From one column a step to one a state: the state where the step starts."""
    return jnp.concatenate([steps, jnp.zeros((*steps.shape[:-1], 1))], axis=-1)


def _pad_start(steps: Array) -> Array:
    """From one column a step to one a state: the state where the step ends."""
    return jnp.concatenate([jnp.zeros((*steps.shape[:-1], 1)), steps], axis=-1)


def _band(diagonal: Array, off: Array) -> Array:
    """Lower band, (states, dim, 2 dim): entry [i, c, m] is row c + m below the diagonal."""
    dim = diagonal.shape[0]
    columns = []
    for c in range(dim):
        below = [diagonal[r, c] for r in range(c, dim)]
        beyond = [off[c, r] for r in range(dim)]
        blank = [jnp.zeros_like(diagonal[0, 0])] * c
        columns.append(jnp.stack(below + beyond + blank))
    return jnp.moveaxis(jnp.stack(columns), -1, 0)
