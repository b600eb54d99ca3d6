"""The velocity field that an animal follows: climbing a preference, carried by the current.

    u(x, t) = grad h(x, t) + kappa c(x, t),      h = sum_j theta_j phi_j(x, t)

h is the preference surface (km^2/h), phi_j its basis functions, c the water's velocity (km/h) and
kappa the current drift. The field is linear in its amplitudes (theta, kappa), so a basis evaluated
once at a set of points serves every value of the amplitudes there.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from math import comb
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from trackfit.layers.splines import JET_ORDERS, JET_ROW, Spline, TimeBracket, jet_rows, spline_jet
from trackfit.motion.smooth import SmoothTerm

SOFTENING_KM = 1.0
"""A distance to a point is sqrt(r^2 + SOFTENING_KM^2): its gradient is smooth at the point."""


@partial(
    jax.tree_util.register_dataclass,
    data_fields=["spline", "centre", "scale"],
    meta_fields=["humped"],
)
@dataclass(frozen=True)
class LayerTerm:
    """Preference for a layer in z = (value - centre)/scale: z alone, or humped (z and z^2)."""

    spline: Spline
    centre: Float[Array, ""]
    scale: Float[Array, ""]
    humped: bool

    @property
    def n_amplitudes(self) -> int:
        """Amplitudes of the term: z, and z squared where humped."""
        return 2 if self.humped else 1

    @partial(jax.jit, static_argnames="order")
    def potential_jet(
        self,
        when: TimeBracket,
        x_km: Float[Array, " points"],
        y_km: Float[Array, " points"],
        order: int,
    ) -> Float[Array, "amplitudes rows points"]:
        """Jets of the basis functions z (and z^2) at points of the plane."""
        jet = spline_jet(self.spline, when, x_km, y_km, order)[0]
        z = jet.at[0].add(-self.centre) / self.scale
        return jnp.stack([z, square_jet(z)]) if self.humped else z[None]


@partial(jax.tree_util.register_dataclass, data_fields=["point_km"], meta_fields=[])
@dataclass(frozen=True)
class DistanceTerm:
    """Preference for the distance to a point, in km; a negative amplitude (km/h) pulls to it."""

    point_km: Float[Array, " 2"]

    @property
    def n_amplitudes(self) -> int:
        """One: the speed away from the point."""
        return 1

    @partial(jax.jit, static_argnames="order")
    def potential_jet(
        self,
        when: TimeBracket,
        x_km: Float[Array, " points"],
        y_km: Float[Array, " points"],
        order: int,
    ) -> Float[Array, "amplitudes rows points"]:
        """Jet of the softened distance at points of the plane."""
        del when
        dx, dy = x_km - self.point_km[0], y_km - self.point_km[1]
        zero, two = jnp.zeros_like(dx), jnp.full_like(dx, 2.0)
        rows = [dx**2 + dy**2 + SOFTENING_KM**2, 2 * dx, 2 * dy, two, zero, two] + [zero] * 9
        return square_root_jet(jnp.stack(rows[: jet_rows(order)]))[None]


Term = LayerTerm | SmoothTerm | DistanceTerm


@partial(jax.tree_util.register_dataclass, data_fields=["terms", "current"], meta_fields=[])
@dataclass(frozen=True)
class VelocityField:
    """The layers behind a velocity field: preference terms in order, then the current, if any."""

    terms: tuple[Term, ...]
    current: Spline | None

    @property
    def n_amplitudes(self) -> int:
        """Length of the amplitude vector: preference amplitudes in order, then kappa."""
        return sum(term.n_amplitudes for term in self.terms) + (self.current is not None)


class FieldTimes(NamedTuple):
    """Time brackets of a set of moments: one for each term, and one for the current."""

    terms: tuple[TimeBracket, ...]
    current: TimeBracket | None


class Basis(NamedTuple):
    """Basis of the velocity field at points: jets of every term's potentials and of the current.

    The velocity's derivatives up to order n need the potentials' up to n + 1 and the current's up
    to n.
    """

    potential: tuple[Float[Array, "amplitudes rows points"], ...]
    current: Float[Array, "2 current_rows points"] | None


def evaluate_basis(
    field: VelocityField,
    times: FieldTimes,
    x_km: Float[Array, " points"],
    y_km: Float[Array, " points"],
    order: int,
) -> Basis:
    """Evaluate what the velocity's derivatives up to `order` need, at points of the plane.

    One compiled call a layer: together they run at half the speed.
    """
    potential = tuple(
        term.potential_jet(when, x_km, y_km, order + 1)
        for term, when in zip(field.terms, times.terms, strict=True)
    )
    if field.current is None or times.current is None:
        return Basis(potential, None)
    return Basis(potential, spline_jet(field.current, times.current, x_km, y_km, order))


def velocity_jet(
    amplitudes: Float[Array, " amplitudes"], basis: Basis, points: int, order: int
) -> Float[Array, "2 rows points"]:
    """Combine a basis into the velocity (km/h) and its derivatives up to `order`.

    Row order is `JET_ORDERS`, for each of the two components.
    """
    parts = [jet for jets in basis.potential for jet in jets]
    components = []
    for along in ((1, 0), (0, 1)):
        rows = []
        for a, b in JET_ORDERS[: jet_rows(order)]:
            row = JET_ROW[a + along[0], b + along[1]]
            total = jnp.zeros(points)
            for amplitude, jet in zip(amplitudes, parts, strict=False):
                total = total + amplitude * jet[row]
            if basis.current is not None:
                total = total + amplitudes[len(parts)] * basis.current[along[1], JET_ROW[a, b]]
            rows.append(total)
        components.append(jnp.stack(rows))
    return jnp.stack(components)


def amplitude_gradient(
    cotangent: Float[Array, "2 rows points"], basis: Basis
) -> Float[Array, " amplitudes"]:
    """Adjoint of `velocity_jet` in the amplitudes, from the gradient in the field's rows."""
    rows = cotangent.shape[1]
    surface: dict[int, Array] = {}
    for component, along in zip(cotangent, ((1, 0), (0, 1)), strict=True):
        for (a, b), value in zip(JET_ORDERS[:rows], component, strict=True):
            row = JET_ROW[a + along[0], b + along[1]]
            surface[row] = surface[row] + value if row in surface else value
    packed = jnp.stack([surface[row] for row in sorted(surface)])
    packed, cotangent = jax.lax.optimization_barrier((packed, cotangent))
    result = [
        jnp.vdot(packed, jet[1 : len(surface) + 1]) for jets in basis.potential for jet in jets
    ]
    if basis.current is not None:
        result.append(jnp.vdot(cotangent, basis.current[:, :rows]))
    return jnp.stack(result) if result else jnp.zeros(0)


def shift_gradient(
    cotangent: Float[Array, "2 rows points"], field: Float[Array, "2 more_rows points"]
) -> Float[Array, "2 points"]:
    """Gradient in the positions from the one in the field's rows; `field` has one order more."""
    orders = JET_ORDERS[: cotangent.shape[1]]
    along = []
    for da, db in ((1, 0), (0, 1)):
        total = jnp.zeros(cotangent.shape[2])
        for component in range(2):
            for row, (a, b) in enumerate(orders):
                total = (
                    total + cotangent[component, row] * field[component, JET_ROW[a + da, b + db]]
                )
        along.append(total)
    return jnp.stack(along)


def square_jet(f: Float[Array, "rows points"]) -> Float[Array, "rows points"]:
    """Jet of f^2 by the Leibniz rule: (f f)_ab = sum_ij C(a,i) C(b,j) f_ij f_(a-i)(b-j)."""
    return jnp.stack([_leibniz(f, a, b) for a, b in JET_ORDERS[: len(f)]])


def square_root_jet(q: Float[Array, "rows points"]) -> Float[Array, "rows points"]:
    """Jet of d = sqrt(q): the Leibniz rule for d d = q, solved for the highest derivative.

    2 d d_ab = q_ab - (the terms of (d d)_ab that hold lower derivatives only).
    """
    rows: dict[tuple[int, int], Array] = {(0, 0): jnp.sqrt(q[0])}
    for a, b in JET_ORDERS[1 : len(q)]:
        lower = sum(
            comb(a, i) * comb(b, j) * rows[i, j] * rows[a - i, b - j]
            for i in range(a + 1)
            for j in range(b + 1)
            if 0 < i + j < a + b
        )
        rows[a, b] = (q[JET_ROW[a, b]] - lower) / (2.0 * rows[0, 0])
    return jnp.stack([rows[orders] for orders in JET_ORDERS[: len(q)]])


def _leibniz(f: Float[Array, "rows points"], a: int, b: int) -> Array:
    total = jnp.zeros_like(f[0])
    for i in range(a + 1):
        for j in range(b + 1):
            factor = float(comb(a, i) * comb(b, j))
            total = total + factor * f[JET_ROW[i, j]] * f[JET_ROW[a - i, b - j]]
    return total
