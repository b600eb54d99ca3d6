"""The negative log density of a track's states and what the Laplace approximation needs of it.

For states z_i on a time grid the negative log density of the process is

    f(z; theta) = sum_i [ 1/2 r_i' W_i r_i + log det Q_i ] + start,
    r_i = z_(i+1) - F_i z_i - G_i u(x_i, t_i)

(log det Q_i of one axis; two axes share it). With J_i = F_i + G_i Du_i its Hessian is block
tridiagonal:

    H_(i,i)     += J' W J - B_i        B_i = sum_a (W r G)_a D^2 u_a   (positions only)
    H_(i+1,i+1) += W
    H_(i,i+1)    = - J' W

The start is one more such term, with the residual (x_0 - mean, v_0 - u(x_0, t_0)): the first
position is vague, and the first velocity spreads around the field as in the long run.

Everything here is compiled by JAX, vectorised over steps, and evaluates each spline once. Arrays
hold the quantities of a state first and the steps last; padded steps have mask zero.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float, Int

from trackfit.motion import FieldTimes, Motion, VelocityField
from trackfit.motion.blocks import (
    Element,
    Matrix,
    Vector,
    apply,
    both_axes,
    dot,
    packed,
    product,
    times,
    total,
    transposed,
)
from trackfit.motion.velocity import Basis, velocity_jet

LOG_2PI = 1.8378770664093453


class Steps(NamedTuple):
    """The time grid: step lengths, one for a real step or zero for padding, and each step's spell.

    A spell is a stretch of time with a pace of its own: its noise is exp(pace) times the motion's.
    """

    dt_hours: Float[Array, " steps"]
    mask: Float[Array, " steps"]
    spell: Int[Array, " steps"]


class ProcessParameters(NamedTuple):
    """Parameters of the process.

    Logarithms of the motion's, amplitudes of the velocity field, and the logarithm of the pace of
    each spell (None where the pace does not vary).
    """

    log_motion: Float[Array | np.ndarray, " motion"]
    amplitudes: Float[Array | np.ndarray, " amplitudes"]
    log_pace: Float[Array | np.ndarray, " spells"] | None = None


class Start(NamedTuple):
    """Vague normal prior of the first position, the same sd on both axes."""

    mean_km: Float[Array, " 2"]
    sd_km: Float[Array, ""]


class Track(NamedTuple):
    """All arrays of one track that do not change while it is fitted (a JAX pytree)."""

    field: VelocityField
    times: FieldTimes
    steps: Steps
    start: Start


class Evaluation(NamedTuple):
    """The density of the process at one set of states.

    `band` holds, for column c of block i, the rows c.. of the lower triangle of the Hessian: the
    layout that LAPACK's banded routines read without a copy. `curvature` is B_i in its three
    distinct elements; adding it back leaves the Gauss-Newton Hessian, which is always positive.
    """

    value: Float[Array, ""]
    gradient: Float[Array, "states dim"]
    band: Float[Array, "states dim 2*dim"]
    curvature: Float[Array, "states 3"]


class StepTerms(NamedTuple):
    """What one evaluation of all steps gives: r, W r, J, W, log det Q and B."""

    residual: Vector
    weighted: Vector
    jacobian: Matrix
    weight: Matrix
    log_det: Element
    curvature: tuple[Element, Element, Element]


class StartTerms(NamedTuple):
    """The same of the start, whose precision is diagonal."""

    residual: Vector
    weighted: Vector
    jacobian: Matrix
    precision: Sequence[Array]
    curvature: tuple[Element, Element, Element]


FieldRows = tuple[tuple[Array, ...], tuple[Array, ...]]


@partial(jax.jit, static_argnames="motion")
def evaluate(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
) -> Evaluation:
    """Value, gradient and Hessian of the negative log density of the process.

    `basis` is the field's at the states' positions. Factors of 2 pi are left out: those of the
    states cancel in the Laplace approximation.
    """
    steps = z.shape[1] - 1
    field = field_at(theta, basis, z, 2)
    terms = step_terms(motion, theta, *ends_of_steps(z), rows_of_steps(field), track.steps)
    start = start_terms(motion, theta, list(z[:, 0]), rows_of_start(field), track)
    gradient = process_gradient(terms, start)

    weight_jacobian = product(both_axes(terms.weight), terms.jacobian)
    diagonal = pad_end(packed(product(transposed(terms.jacobian), weight_jacobian), steps))
    diagonal = diagonal + pad_start(packed(both_axes(terms.weight), steps))
    diagonal = diagonal.at[..., 0].add(_start_information(start))
    curvature = pad_end(jnp.stack(terms.curvature))
    curvature = curvature.at[:, 0].add(jnp.stack(_filled(start.curvature)))
    diagonal = diagonal.at[:2, :2].add(
        -jnp.stack([jnp.stack([curvature[0], curvature[1]]), curvature[1:]])
    )
    off = pad_end(-packed(transposed(weight_jacobian), steps))
    return Evaluation(
        value=density(terms) + start_density(start),
        gradient=gradient.T,
        band=_band(diagonal, off),
        curvature=curvature.T,
    )


class LinearSteps(NamedTuple):
    """The process linearised at given states z: z' = J z + noise of covariance inv(W), steps last.

    `residual` is r at z. The first state is N(z_0 - inv(P) g, inv(P)) with P = `start_precision`
    and g = `start_gradient`.
    """

    residual: Float[Array, "dim steps"]
    jacobian: Float[Array, "dim dim steps"]
    weight: Float[Array, "dim dim steps"]
    start_gradient: Float[Array, " dim"]
    start_precision: Float[Array, "dim dim"]


@partial(jax.jit, static_argnames="motion")
def linear_steps(
    motion: Motion,
    theta: ProcessParameters,
    z: Float[Array, "dim states"],
    basis: Basis,
    track: Track,
) -> LinearSteps:
    """Linearise every step and the start at the states."""
    steps = z.shape[1] - 1
    field = field_at(theta, basis, z, 2)
    terms = step_terms(motion, theta, *ends_of_steps(z), rows_of_steps(field), track.steps)
    start = start_terms(motion, theta, list(z[:, 0]), rows_of_start(field), track)
    gradient = apply(transposed(start.jacobian), start.weighted)
    return LinearSteps(
        residual=jnp.stack(terms.residual),
        jacobian=packed(terms.jacobian, steps),
        weight=packed(both_axes(terms.weight), steps),
        start_gradient=jnp.stack(_filled(gradient)),
        start_precision=_start_information(start),
    )


def field_at(theta: ProcessParameters, basis: Basis, z: Array, order: int) -> Array:
    """The velocity field's rows at the states; kept whole so that they are computed once."""
    rows = velocity_jet(jnp.asarray(theta.amplitudes), basis, z.shape[1], order)
    return jax.lax.optimization_barrier(rows)


def rows_of_steps(field: Array) -> FieldRows:
    """The field at the start of every step, as separate vectors."""
    return tuple(field[0, :, :-1]), tuple(field[1, :, :-1])


def rows_of_start(field: Array) -> FieldRows:
    """The field at the first state, as separate numbers."""
    return tuple(field[0, :, 0]), tuple(field[1, :, 0])


def ends_of_steps(z: Array) -> tuple[Vector, Vector]:
    """States at the start and at the end of every step, as separate vectors."""
    return list(z[:, :-1]), list(z[:, 1:])


def step_terms(
    motion: Motion,
    theta: ProcessParameters,
    before: Vector,
    after: Vector,
    field: FieldRows,
    steps: Steps,
) -> StepTerms:
    """Evaluate all steps at their ends, given the field at their starts."""
    k = motion.k
    F, G, W, log_det = motion.transition(jnp.asarray(theta.log_motion), steps.dt_hours)
    pace = jnp.zeros(()) if theta.log_pace is None else theta.log_pace[steps.spell]
    calm = steps.mask * jnp.exp(-2.0 * pace)
    log_det = log_det + 2.0 * k * pace
    weight: Matrix = [[times(element, calm) for element in row] for row in W]
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
    return StepTerms(residual, weighted, jacobian, weight, log_det * steps.mask, (xx, xy, yy))


def start_terms(
    motion: Motion, theta: ProcessParameters, first: Vector, field: FieldRows, track: Track
) -> StartTerms:
    """The prior of the first state: position around its mean, velocity around the field."""
    start = track.start
    position, *velocity = motion.start_precision(jnp.asarray(theta.log_motion), start.sd_km)
    if theta.log_pace is not None:
        velocity = [p * jnp.exp(-2.0 * theta.log_pace[track.steps.spell[0]]) for p in velocity]
    precision = [p for p in (position, *velocity) for _ in range(2)]
    centre = [start.mean_km[0], start.mean_km[1]]
    one = jnp.ones(())
    jacobian = both_axes([[one if p == q else 0 for q in range(motion.k)] for p in range(motion.k)])
    curvature: tuple[Element, Element, Element] = (0, 0, 0)
    if motion.k == 2:
        centre += [rows[0] for rows in field]
        for axis in range(2):
            for toward in range(2):
                jacobian[2 + axis][toward] = -field[axis][1 + toward]
    residual = [z - c for z, c in zip(first, centre, strict=True)]
    weighted = [p * r for p, r in zip(precision, residual, strict=True)]
    if motion.k == 2:
        xx, xy, yy = (
            weighted[2] * field[0][row] + weighted[3] * field[1][row] for row in range(3, 6)
        )
        curvature = (xx, xy, yy)
    return StartTerms(residual, weighted, jacobian, precision, curvature)


def _start_information(start: StartTerms) -> Array:
    """J' P J of the first state."""
    weighted = [
        [times(p, e) for e in row] for p, row in zip(start.precision, start.jacobian, strict=True)
    ]
    return jnp.stack(
        [jnp.stack(_filled(row)) for row in product(transposed(start.jacobian), weighted)]
    )


def _filled(elements: Sequence[Element]) -> list[Array]:
    return [jnp.asarray(element, float) for element in elements]


def start_density(start: StartTerms) -> Array:
    """Start part of f, without factors of 2 pi."""
    log_det = jnp.sum(jnp.log(jnp.stack(start.precision)))
    return jnp.asarray(0.5 * dot(start.residual, start.weighted) - 0.5 * log_det)


def process_gradient(terms: StepTerms, start: StartTerms) -> Array:
    """Gradient of f in the states."""
    back = apply(transposed(terms.jacobian), terms.weighted)
    gradient = pad_start(jnp.stack(terms.weighted)) - pad_end(jnp.stack(back))
    first = apply(transposed(start.jacobian), start.weighted)
    return gradient.at[:, 0].add(jnp.stack(_filled(first)))


def density(terms: StepTerms) -> Array:
    """Process part of f, without the start and without factors of 2 pi."""
    return jnp.sum(0.5 * dot(terms.residual, terms.weighted) + terms.log_det)


def pad_end(steps: Array) -> Array:
    """From one column a step to one a state: the state where the step starts."""
    return jnp.concatenate([steps, jnp.zeros((*steps.shape[:-1], 1))], axis=-1)


def pad_start(steps: Array) -> Array:
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
