"""A smooth preference: a curve of a layer's value, as wiggly as the data ask for.

    h(z) = alpha z + sum_j beta_j psi_j(z),      beta_j ~ N(0, tau^2)

The psi_j are quintic splines of z of unit roughness: sum_j beta_j^2 is the integral of h''(z)^2, so
that a normal prior on the beta_j is the usual roughness penalty (Kimeldorf & Wahba 1970, Ann. Math.
Stat. 41:495; Wood 2017, *Generalized Additive Models*, 2nd ed., ch. 5). They are the smoothest ones
(Demmler & Reinsch 1975, Numer. Math. 24:375): orthogonal to each other, to a constant and to z
itself over the values that the layer takes (with a tenth of weight on an even spread of values),
which leaves alpha the linear part.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from math import comb
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import scipy.linalg
from jaxtyping import Array, Float
from scipy.interpolate import BSpline

from trackfit.layers.splines import JET_ORDERS, JET_ROW, Spline, TimeBracket, jet_rows, spline_jet

DEGREE = 5
"""Four continuous derivatives of h: as many as the jets of the layers have."""

INTERVALS = 12
"""Pieces of the splines; their ends are half-way between even spacing and quantiles."""

FUNCTIONS = 8
"""Functions psi_j: the smoothest of those the pieces allow."""

MARGIN = 0.03
"""A layer's spline may overshoot its nodes: the curve reaches so far (a share) beyond them."""


class Curve(NamedTuple):
    """Functions of a number (a JAX pytree).

    Attributes
    ----------
    knots
        Strictly increasing; `DEGREE` of them on either side lie beyond the values of interest.
    maps
        For each derivative d: from the B-splines of degree `DEGREE` - d to the functions'.
    """

    knots: Float[Array, " knots"]
    maps: tuple[Float[Array, "functions basis"], ...]

    @property
    def n_functions(self) -> int:
        """Number of functions."""
        return self.maps[0].shape[0]

    def values(
        self, z: Float[Array | np.ndarray, " points"]
    ) -> list[Float[Array, "functions points"]]:
        """The functions and their first four derivatives; constant beyond the outer knots.

        All degrees of B-splines come from one pass of the recursion of de Boor (1972, J. Approx.
        Theory 6:50).
        """
        t = self.knots[:, None]
        inside = jnp.clip(z, self.knots[DEGREE], self.knots[-DEGREE - 1])
        # the last piece holds its right end
        left = jnp.searchsorted(self.knots[DEGREE + 1 : -DEGREE - 1], inside, side="right")
        basis = jnp.asarray(left + DEGREE == jnp.arange(len(self.knots) - 1)[:, None], float)
        stages = [basis]
        for p in range(1, DEGREE + 1):
            n = len(self.knots) - 1 - p
            up = (inside - t[:n]) / (t[p : p + n] - t[:n])
            down = (t[p + 1 : p + 1 + n] - inside) / (t[p + 1 : p + 1 + n] - t[1 : 1 + n])
            basis = up * basis[:n] + down * basis[1 : n + 1]
            stages.append(basis)
        found = []
        for d, turn in enumerate(self.maps):
            stage = stages[DEGREE - d]
            found.append(turn @ stage[d : len(stage) - d])
        return found


def fit_curve(values: Float[np.ndarray, " n"], functions: int = FUNCTIONS) -> Curve:
    """The smoothest functions over the values that a layer takes, standardised ones (z)."""
    low, high = float(values.min()), float(values.max())
    share = np.linspace(0.0, 1.0, INTERVALS + 1)
    inner = 0.5 * (low + (high - low) * share) + 0.5 * np.quantile(values, share)
    reach = MARGIN * (high - low)
    inner[0], inner[-1] = low - reach, high + reach
    before = inner[0] - np.diff(inner)[0] * np.arange(DEGREE, 0, -1)
    after = inner[-1] + np.diff(inner)[-1] * np.arange(1, DEGREE + 1)
    knots = np.concatenate([before, inner, after])
    roughness, mass = _roughness(knots), _mass(knots, values)
    size, vectors = scipy.linalg.eigh(roughness, mass)
    # the first two, of no roughness, are a constant and z
    chosen = slice(2, 2 + functions)
    coefficients = (vectors[:, chosen] / np.sqrt(size[chosen])).T
    return Curve(jnp.asarray(knots), tuple(map(jnp.asarray, _derivatives(knots, coefficients))))


def _roughness(knots: Float[np.ndarray, " knots"]) -> Float[np.ndarray, "basis basis"]:
    """Integrals of the products of second derivatives, exact by Gauss-Legendre."""
    nodes, weights = np.polynomial.legendre.leggauss(DEGREE)
    ends = knots[DEGREE : len(knots) - DEGREE]
    half = 0.5 * np.diff(ends)[:, None]
    at = (0.5 * (ends[1:] + ends[:-1])[:, None] + half * nodes).ravel()
    count = len(knots) - DEGREE - 1
    bends = BSpline(knots, np.eye(count), DEGREE).derivative(2)(at)
    return bends.T @ ((half * weights).ravel()[:, None] * bends)


def _mass(
    knots: Float[np.ndarray, " knots"], values: Float[np.ndarray, " n"]
) -> Float[np.ndarray, "basis basis"]:
    """Mean products of the B-splines over the values, and a little of an even spread of values."""
    even = np.linspace(knots[DEGREE], knots[-DEGREE - 1], 20 * INTERVALS)
    count = len(knots) - DEGREE - 1
    parts = [BSpline(knots, np.eye(count), DEGREE)(at) for at in (values, even)]
    seen, spread = (part.T @ part / len(part) for part in parts)
    return np.asarray(0.9 * seen + 0.1 * spread)


def _derivatives(
    knots: Float[np.ndarray, " knots"], coefficients: Float[np.ndarray, "functions basis"]
) -> list[Float[np.ndarray, "functions basis"]]:
    """Coefficients of the derivatives of order 0 to 4, in B-splines of falling degree."""
    found = [coefficients]
    for d in range(1, 5):
        degree = DEGREE - d + 1
        t = knots[d - 1 : len(knots) - d + 1]
        count = coefficients.shape[1]
        width = t[degree + 1 : degree + count] - t[1:count]
        coefficients = degree * np.diff(coefficients, axis=1) / width
        found.append(coefficients)
    return found


@partial(
    jax.tree_util.register_dataclass,
    data_fields=["spline", "centre", "scale", "curve"],
    meta_fields=[],
)
@dataclass(frozen=True)
class SmoothTerm:
    """Preference for a layer by a smooth curve of z = (value - centre)/scale."""

    spline: Spline
    centre: Float[Array, ""]
    scale: Float[Array, ""]
    curve: Curve

    @property
    def n_amplitudes(self) -> int:
        """Amplitudes of the term: alpha, then the beta_j."""
        return 1 + self.curve.n_functions

    @partial(jax.jit, static_argnames="order")
    def potential_jet(
        self,
        when: TimeBracket,
        x_km: Float[Array, " points"],
        y_km: Float[Array, " points"],
        order: int,
    ) -> Float[Array, "amplitudes rows points"]:
        """Jets of z and of the psi_j(z) at points of the plane."""
        jet = spline_jet(self.spline, when, x_km, y_km, order)[0]
        z = jet.at[0].add(-self.centre) / self.scale
        bent = composed_jet(self.curve.values(z[0])[: order + 1], z)
        return jnp.concatenate([z[None], jnp.moveaxis(bent, 0, 1)])


def composed_jet(
    outer: list[Float[Array, "functions points"]], z: Float[Array, "rows points"]
) -> Float[Array, "rows functions points"]:
    """Jet of g(z(x, y)) from g's derivatives at z, order by order, and the jet of z.

    d/dx g(z) = g'(z) z_x, and the Leibniz rule gives the derivatives of that product from those of
    g'(z), one order fewer: Faa di Bruno's formula by recursion.
    """
    order = len(outer) - 1
    inner: dict[tuple[int, int], Array] = {(0, 0): outer[order]}
    for d in range(order - 1, -1, -1):
        jet = {(0, 0): outer[d]}
        for a, b in JET_ORDERS[1 : jet_rows(order - d)]:
            along = (1, 0) if a else (0, 1)
            m, n = a - along[0], b - along[1]
            jet[a, b] = sum(
                (
                    float(comb(m, i) * comb(n, j)) * inner[i, j] * z[JET_ROW[a - i, b - j]]
                    for i in range(m + 1)
                    for j in range(n + 1)
                ),
                start=jnp.zeros_like(outer[0]),
            )
        inner = jet
    return jnp.stack([inner[orders] for orders in JET_ORDERS[: jet_rows(order)]])
