"""A dense twin of the whole engine, with all its features at once.

Layers are polynomials, which the splines reproduce exactly; the twin knows them as formulas, its
derivatives are automatic, its algebra dense. It shares nothing with the engine but the model.
"""

import jax
import jax.numpy as jnp
import numpy as np
from engine_standins import (
    distance_term,
    field_layer,
    layer_term,
    problem_of,
    random_covariances,
    start_prior,
)

from trackfit.inference.grid import nearest_state, time_grid
from trackfit.layers.splines import fit_spline
from trackfit.motion import VelocityField


def polynomial(coefficients, x, y):
    c = coefficients
    return c[0] * x + c[1] * y + c[2] * x * y + c[3] * x**2 + c[4] * y**3 + c[5] * x**2 * y


FIRST = (0.05, -0.03, 0.004, -0.006, 2e-4, -1e-4)
EARLY = (0.02, 0.05, -0.005, 0.004, 1e-4, 2e-4)
LATE = (-0.04, 0.02, 0.003, 0.005, -2e-4, 1e-4)
COLONY = (2.0, -1.0)
LAST_HOUR = 10.0


def blended(early, late, t):
    return (1 - t / LAST_HOUR) * early + (t / LAST_HOUR) * late


def changing(x, y, t):
    return blended(polynomial(EARLY, x, y), polynomial(LATE, x, y), t)


def water_x(x, y, t):
    return blended(0.3 - 0.05 * y + 0.004 * x * y, 0.1 + 0.03 * x - 0.003 * y**2, t)


def water_y(x, y, t):
    return blended(-0.2 + 0.05 * x + 0.002 * x**2, 0.04 * y - 0.003 * x * y, t)


TWIN_HOURS = (0.0, LAST_HOUR)
TWIN_LAYERS = (
    (
        field_layer(lambda x, y, t: polynomial(FIRST, x, y)),
        field_layer(changing, hours=TWIN_HOURS),
        None,
    ),
    field_layer(water_x, water_y, hours=TWIN_HOURS),
)
TWIN_FIELD = VelocityField(
    (
        layer_term(TWIN_LAYERS[0][0], centre=0.1, scale=0.8, humped=True),
        layer_term(TWIN_LAYERS[0][1], centre=-0.2, scale=0.5),
        distance_term(*COLONY),
    ),
    fit_spline(TWIN_LAYERS[1]),
)
THETA = np.array([np.log(1.1), 2.0, -1.2, 1.5, -0.6, 0.8, 0.15])
"""log sigma; z, z^2, changing layer, distance; kappa; log error scale."""


def preference(theta, x, y, t):
    z = (polynomial(FIRST, x, y) - 0.1) / 0.8
    far = jnp.sqrt((x - COLONY[0]) ** 2 + (y - COLONY[1]) ** 2 + 1.0)
    return (
        theta[1] * z + theta[2] * z**2 + theta[3] * (changing(x, y, t) + 0.2) / 0.5 + theta[4] * far
    )


def drift(theta, x, y, t):
    up = jax.vmap(jax.grad(preference, argnums=(1, 2)), (None, 0, 0, 0))(theta, x, y, t)
    return jnp.stack([up[0] + theta[5] * water_x(x, y, t), up[1] + theta[5] * water_y(x, y, t)], 1)


class Twin:
    """-log joint density with all its constants, and Laplace's approximation, densely."""

    def __init__(self, seed=4, fixes=9):
        rng = np.random.default_rng(seed)
        self.fix_hours = np.sort(rng.uniform(0, LAST_HOUR, fixes))
        self.fix_hours[0] = 0.0
        # two fixes of one moment, and one a tenth of a second after a grid time
        self.fix_hours[4] = self.fix_hours[3]
        self.fix_hours[-1] = 9.5 + 0.1 / 3600
        self.hours = time_grid(self.fix_hours, 0.5, np.zeros(0))
        self.state = nearest_state(self.hours, self.fix_hours)
        self.at_km = np.cumsum(rng.normal(size=(fixes, 2)) * 1.5, axis=0)
        self.covariance = random_covariances(rng, fixes, 0.3)
        self.precision = np.linalg.inv(self.covariance)
        self.half_log_dets = 0.5 * np.log(np.linalg.det(2 * np.pi * self.covariance))
        self.start = start_prior(0.5, 0.3, 4.0)
        self.problem = problem_of(
            self.fix_hours,
            self.at_km,
            self.covariance,
            hours=self.hours,
            field=TWIN_FIELD,
            layers=TWIN_LAYERS,
            start=self.start,
        )
        self.gradient = jax.jit(jax.grad(self.density))
        self.hessian = jax.jit(jax.hessian(self.density))
        self.cross = jax.jit(jax.jacfwd(jax.grad(self.density), argnums=1))
        self.third = jax.jit(jax.jacfwd(jax.hessian(self.density), argnums=(0, 1)))

    def density(self, flat, theta):
        z = flat.reshape(-1, 2)
        dt = jnp.diff(self.hours)
        mean = z[:-1] + drift(theta, z[:-1, 0], z[:-1, 1], self.hours[:-1]) * dt[:, None]
        variance = jnp.exp(2 * theta[0]) * dt[:, None]
        steps = 0.5 * (z[1:] - mean) ** 2 / variance + 0.5 * jnp.log(2 * jnp.pi * variance)
        e = z[self.state] - self.at_km
        fixes = 0.5 * jnp.exp(-2 * theta[-1]) * jnp.einsum("ka,kab,kb->k", e, self.precision, e)
        fixes += 2.0 * theta[-1] + self.half_log_dets
        first = 0.5 * jnp.sum((z[0] - jnp.array([0.5, 0.3])) ** 2) / 16.0
        return steps.sum() + fixes.sum() + first + jnp.log(2 * jnp.pi * 16.0)

    def mode(self, theta, start):
        flat = jnp.asarray(start).reshape(-1)
        for _ in range(20):
            step = jnp.linalg.solve(self.hessian(flat, theta), self.gradient(flat, theta))
            flat = flat - step
            if jnp.abs(step).max() < 1e-12:
                break
        return flat

    def negative_log_marginal(self, theta, flat):
        log_det = jnp.linalg.slogdet(self.hessian(flat, theta))[1]
        n = len(flat)
        return self.density(flat, theta) + 0.5 * log_det - 0.5 * n * jnp.log(2 * jnp.pi)

    def sensitivity(self, theta, flat):
        return -jnp.linalg.solve(self.hessian(flat, theta), self.cross(flat, theta))

    def marginal_gradient(self, theta, flat):
        """Total derivative through the mode; d(log det H) = tr(inv(H) dH)."""
        inverse = jnp.linalg.inv(self.hessian(flat, theta))
        in_z, in_theta = (
            0.5 * jnp.einsum("ij,ijk->k", inverse, slope) for slope in self.third(flat, theta)
        )
        explicit = jax.grad(self.density, argnums=1)(flat, theta) + in_theta
        return explicit + in_z @ self.sensitivity(theta, flat)
