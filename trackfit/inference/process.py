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
from jaxtyping import Array, Float, Int

from trackfit.layers.splines import jet_rows
from trackfit.motion import FieldTimes, Motion, VelocityField
from trackfit.motion.blocks import (
    Element,
    Matrix,
    Vector,
    apply,
    both_axes,
    dot,
    inverse,
    minus,
    packed,
    product,
    symmetric,
    times,
    total,
    transposed,
    unpacked,
)
from trackfit.motion.velocity import Basis, amplitude_gradient, shift_gradient, velocity_jet

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

    log_motion: Float[Array, " motion"]
    amplitudes: Float[Array, " amplitudes"]
    log_pace: Float[Array, " spells"] | None = None


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


class _StepTerms(NamedTuple):
    residual: Vector
    weighted: Vector
    jacobian: Matrix
    weight: Matrix
    log_det: Element
    curvature: tuple[Element, Element, Element]


class StepSpread(NamedTuple):
    """Covariances of the Gaussian approximation, states or steps last.

    `residual` is the covariance of the linearised residual r = z' - J z of each step, `cross` that
    of r with z. They are kept instead of the covariance of neighbours: where a step is short, z and
    z' are all but equal and their covariances cannot tell r from rounding.
    """

    covariance: Float[Array, "dim dim states"]
    residual: Float[Array, "dim dim steps"]
    cross: Float[Array, "dim dim steps"]


class _StartTerms(NamedTuple):
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
    field = _field(theta, basis, z, 2)
    terms = _step_terms(motion, theta, *_ends(z), _rows(field), track.steps)
    start = _start_terms(motion, theta, list(z[:, 0]), _first(field), track)
    gradient = _process_gradient(terms, start)

    weight_jacobian = product(both_axes(terms.weight), terms.jacobian)
    diagonal = _pad_end(packed(product(transposed(terms.jacobian), weight_jacobian), steps))
    diagonal = diagonal + _pad_start(packed(both_axes(terms.weight), steps))
    diagonal = diagonal.at[..., 0].add(_start_information(start))
    curvature = _pad_end(jnp.stack(terms.curvature))
    curvature = curvature.at[:, 0].add(jnp.stack(_filled(start.curvature)))
    diagonal = diagonal.at[:2, :2].add(
        -jnp.stack([jnp.stack([curvature[0], curvature[1]]), curvature[1:]])
    )
    off = _pad_end(-packed(transposed(weight_jacobian), steps))
    return Evaluation(
        value=_density(terms) + _start_density(start),
        gradient=gradient.T,
        band=_band(diagonal, off),
        curvature=curvature.T,
    )


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
    field = _field(theta, basis, z, 2)
    terms = _step_terms(motion, theta, *_ends(z), _rows(field), track.steps)
    J, W = terms.jacobian, both_axes(terms.weight)
    own = product(transposed(J), product(W, J))
    known_before = _difference([[_part(e, slice(None, -1)) for e in row] for row in before], own)
    known_after = _difference([[_part(e, slice(1, None)) for e in row] for row in after], W)
    T = inverse(_sum(known_after, W))
    pull = product(T, known_after)
    through = product(product(transposed(J), product(W, pull)), J)
    V = inverse(symmetric(_sum(known_before, through)))
    cross = product(product(pull, J), V)
    residual = _sum(T, product(cross, transposed(product(pull, J))))
    last = inverse([[_part(e, slice(-1, None)) for e in row] for row in before])
    steps = z.shape[1] - 1
    covariance = jnp.concatenate([packed(V, steps), packed(last, 1)], axis=-1)
    return StepSpread(covariance, packed(symmetric(residual), steps), -packed(cross, steps))


def _schur_complements(columns: Array, *, reverse: bool) -> Matrix:
    """L_ii L_ii' of every block of a banded factor."""
    dim = columns.shape[1]
    root: Matrix = [[columns[:, c, r - c] if r >= c else 0 for c in range(dim)] for r in range(dim)]
    square = product(root, transposed(root))
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
    field = _field(theta, basis, z, 3)

    def half_trace(before: Vector, after: Vector, rows: FieldRows) -> Array:
        terms = _step_terms(motion, theta, before, after, rows, track.steps)
        return _half_trace(terms, spread)

    def half_trace_start(first: Vector, rows: FieldRows) -> Array:
        start = _start_terms(motion, theta, first, rows, track)
        return _half_trace_start(start, spread.covariance[..., 0])

    low = field[:, : jet_rows(2)]
    of_before, of_after, of_rows = jax.grad(half_trace, argnums=(0, 1, 2))(*_ends(z), _rows(low))
    of_field = jnp.stack([jnp.stack(component) for component in of_rows])
    of_position = shift_gradient(of_field, field[..., :-1])
    of_before = jnp.stack(of_before).at[:2].add(of_position)
    gradient = _pad_end(of_before) + _pad_start(jnp.stack(of_after))

    of_first, of_rows = jax.grad(half_trace_start, argnums=(0, 1))(list(z[:, 0]), _first(low))
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
    adjoint_before, adjoint_after = _ends(adjoint)

    def lagrangian(theta: ProcessParameters, rows: FieldRows, first_rows: FieldRows) -> Array:
        terms = _step_terms(motion, theta, *_ends(z), rows, track.steps)
        moved = apply(terms.jacobian, adjoint_before)
        along = [minus(a, b) for a, b in zip(adjoint_after, moved, strict=True)]
        start = _start_terms(motion, theta, list(z[:, 0]), first_rows, track)
        along_start = apply(start.jacobian, list(adjoint[:, 0]))
        return (
            _density(terms)
            + _half_trace(terms, spread)
            + jnp.sum(dot(along, terms.weighted))
            + _start_density(start)
            + _half_trace_start(start, spread.covariance[..., 0])
            + dot(along_start, start.weighted)
        )

    field = _field(theta, basis, z, 2)
    of_theta, of_rows, of_first = jax.grad(lagrangian, argnums=(0, 1, 2))(
        theta, _rows(field), _first(field)
    )
    of_field = _pad_end(jnp.stack([jnp.stack(component) for component in of_rows]))
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
        field = _field(theta, basis, z, 2)
        terms = _step_terms(motion, theta, *_ends(z), _rows(field), track.steps)
        start = _start_terms(motion, theta, list(z[:, 0]), _first(field), track)
        return _process_gradient(terms, start)

    parts = [part for part in jax.jacfwd(gradient)(theta) if part is not None]
    return jnp.moveaxis(jnp.concatenate(parts, axis=-1), 0, 1)


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
    field = _field(theta, basis, z, 2)
    terms = _step_terms(motion, theta, *_ends(z), _rows(field), track.steps)
    start = _start_terms(motion, theta, list(z[:, 0]), _first(field), track)
    gradient = apply(transposed(start.jacobian), start.weighted)
    return LinearSteps(
        residual=jnp.stack(terms.residual),
        jacobian=packed(terms.jacobian, steps),
        weight=packed(both_axes(terms.weight), steps),
        start_gradient=jnp.stack(_filled(gradient)),
        start_precision=_start_information(start),
    )


def _field(theta: ProcessParameters, basis: Basis, z: Array, order: int) -> Array:
    """The velocity field's rows at the states; kept whole so that they are computed once."""
    rows = velocity_jet(theta.amplitudes, basis, z.shape[1], order)
    return jax.lax.optimization_barrier(rows)


def _rows(field: Array) -> FieldRows:
    """The field at the start of every step, as separate vectors."""
    return tuple(field[0, :, :-1]), tuple(field[1, :, :-1])


def _first(field: Array) -> FieldRows:
    """The field at the first state, as separate numbers."""
    return tuple(field[0, :, 0]), tuple(field[1, :, 0])


def _ends(z: Array) -> tuple[Vector, Vector]:
    """States at the start and at the end of every step, as separate vectors."""
    return list(z[:, :-1]), list(z[:, 1:])


def _step_terms(
    motion: Motion,
    theta: ProcessParameters,
    before: Vector,
    after: Vector,
    field: FieldRows,
    steps: Steps,
) -> _StepTerms:
    k = motion.k
    F, G, W, log_det = motion.transition(theta.log_motion, steps.dt_hours)
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
    return _StepTerms(residual, weighted, jacobian, weight, log_det * steps.mask, (xx, xy, yy))


def _start_terms(
    motion: Motion, theta: ProcessParameters, first: Vector, field: FieldRows, track: Track
) -> _StartTerms:
    """The prior of the first state: position around its mean, velocity around the field."""
    start = track.start
    position, *velocity = motion.start_precision(theta.log_motion, start.sd_km)
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
    return _StartTerms(residual, weighted, jacobian, precision, curvature)


def _start_information(start: _StartTerms) -> Array:
    """J' P J of the first state."""
    weighted = [
        [times(p, e) for e in row] for p, row in zip(start.precision, start.jacobian, strict=True)
    ]
    return jnp.stack(
        [jnp.stack(_filled(row)) for row in product(transposed(start.jacobian), weighted)]
    )


def _filled(elements: Sequence[Element]) -> list[Array]:
    return [jnp.asarray(element, float) for element in elements]


def _start_density(start: _StartTerms) -> Array:
    log_det = jnp.sum(jnp.log(jnp.stack(start.precision)))
    return jnp.asarray(0.5 * dot(start.residual, start.weighted) - 0.5 * log_det)


def _half_trace_start(start: _StartTerms, covariance: Array) -> Array:
    """1/2 <V, H> of the start."""
    V = unpacked(covariance)
    spread = product(product(start.jacobian, V), transposed(start.jacobian))
    inner = total(times(p, spread[i][i]) for i, p in enumerate(start.precision))
    xx, xy, yy = start.curvature
    bend = total((times(xx, V[0][0]), times(xy, V[0][1] + V[1][0]), times(yy, V[1][1])))
    return jnp.asarray(0.5 * minus(inner, bend))


def _process_gradient(terms: _StepTerms, start: _StartTerms) -> Array:
    back = apply(transposed(terms.jacobian), terms.weighted)
    gradient = _pad_start(jnp.stack(terms.weighted)) - _pad_end(jnp.stack(back))
    first = apply(transposed(start.jacobian), start.weighted)
    return gradient.at[:, 0].add(jnp.stack(_filled(first)))


def _density(terms: _StepTerms) -> Array:
    """Process part of f, without the start and without factors of 2 pi."""
    return jnp.sum(0.5 * dot(terms.residual, terms.weighted) + terms.log_det)


def _half_trace(terms: _StepTerms, spread: StepSpread) -> Array:
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
