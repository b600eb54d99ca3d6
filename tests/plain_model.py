"""The model once more, written plainly: an unnormalised density of parameters and states.

It shares no code with the library: the sea is formulas, slopes come from automatic differentiation,
noise from the matrices as they are printed. `tests/plain_nuts.py` samples it at length,
`tests/test_against_nuts.py` holds the library to the result. Units are km and hours.

The parameters are one vector: the logarithms of the motion's, the amplitudes of `AMPLITUDES`, the
logarithm of the error scale. All have independent normal priors.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import jax
import jax.numpy as jnp
import numpy as np
from simulator import Persistence, Tag, simulate

jax.config.update("jax_enable_x64", True)

AMPLITUDES = ("depth", "home", "drift")
"""Preference for depth, km^2/h; speed away from home, km/h; share of the current."""

HOME_KM = (3.0, -4.0)
SOFTENING_KM = 1.0
START_SD_KM = 1000.0
STEP_HOURS = 1.0


def depth(x, y):
    """Depth, already standardised."""
    return jnp.sin(x / 9.0 + 0.4) * jnp.cos(y / 11.0) + 0.7 * jnp.sin((x + 2.0 * y) / 23.0)


def home(x, y):
    """Distance to the home, softened."""
    return jnp.sqrt((x - HOME_KM[0]) ** 2 + (y - HOME_KM[1]) ** 2 + SOFTENING_KM**2)


def stream(x, y):
    """The current runs along its contours, km^2/h."""
    return 14.0 * jnp.sin(x / 17.0) * jnp.sin(y / 20.0 + 0.7) - 0.2 * x + 0.3 * y


def current(x, y):
    """The current, km/h."""
    by_x, by_y = jax.grad(stream, (0, 1))(x, y)
    return by_y, -by_x


def _terms(at):
    slopes = [jnp.stack(jax.grad(h, (0, 1))(*at)) for h in (depth, home)]
    return jnp.stack([*slopes, jnp.stack(current(*at))])


terms = jax.vmap(_terms)
"""What each amplitude multiplies at positions (n, 2): (n, amplitudes, 2)."""


@dataclass(frozen=True)
class Case:
    """A simulated track and how it is fitted.

    `motion` holds the diffusion, or speed and persistence; `nu` is that of the errors, None where
    they are normal.
    """

    name: str
    motion: tuple[float, ...]
    nu: float | None
    fixes: int
    every_hours: tuple[float, float]
    sd_km: tuple[float, float]
    seed: int
    amplitudes: tuple[float, ...] = (8.0, -0.3, 0.7)

    @property
    def names(self) -> tuple[str, ...]:
        """The parameters' names."""
        motion = ("speed", "persistence") if self.persistent else ("diffusion",)
        return (*motion, *AMPLITUDES, "error_scale")

    @property
    def persistent(self) -> bool:
        """Whether the state holds a velocity."""
        return len(self.motion) == 2

    @property
    def truth(self) -> np.ndarray:
        """The parameters the track was made with."""
        return np.array([*np.log(self.motion), *self.amplitudes, 0.0])

    @property
    def prior(self) -> tuple[np.ndarray, np.ndarray]:
        """Means and sds: as weak as a study's own priors at a typical speed of 1 km/h."""
        motion = ([0.0, np.log(2.0)], [2.0, 2.0]) if self.persistent else ([np.log(0.5)], [2.0])
        mean, sd = ([0.0, 0.0, 1.0, 0.0], [12.0, 1.0, 1.0, 1.0])
        return np.array([*motion[0], *mean]), np.array([*motion[1], *sd])

    @cached_property
    def track(self) -> Track:
        """The fixes, at quarters of an hour, and the time grid: every hour and every fix."""
        rng = np.random.default_rng(self.seed)
        low, high = (round(4 * h) for h in self.every_hours)
        fix_hours = np.append(0, np.cumsum(rng.integers(low, high + 1, self.fixes - 1))) / 4.0
        amplitudes = jnp.asarray(self.amplitudes)
        velocity = jax.jit(lambda xy: jnp.einsum("a,nad->nd", amplitudes, terms(xy)))
        paths = simulate(
            lambda xy, t: np.asarray(velocity(xy)),
            np.array([[5.0, 5.0]]),
            fix_hours[-1],
            rng,
            diffusion=None if self.persistent else self.motion[0],
            persistence=noise_of(*self.motion) if self.persistent else None,
            step_minutes=3.0,
        )
        tag = Tag(self.every_hours, self.sd_km, roundness=(0.5, 1.0), tail=self.nu)
        at = np.rint(fix_hours * 20.0).astype(int)
        seen = tag.observe_at(at, paths.hours, paths.xy_km[0], rng)
        hours = np.union1d(fix_hours, np.arange(0.0, fix_hours[-1], STEP_HOURS))
        return Track(
            hours, np.searchsorted(hours, fix_hours), fix_hours, seen.xy_km, seen.covariance_km2
        )


def noise_of(speed: float, persistence: float) -> Persistence:
    """The simulator's parameters: s^2 = w^2 / tau."""
    return Persistence(persistence, speed / np.sqrt(persistence))


@dataclass(frozen=True)
class Track:
    """The time grid (states,), each fix's place on it, hours, positions and scale matrices."""

    hours: np.ndarray
    at: np.ndarray
    fix_hours: np.ndarray
    fix_km: np.ndarray
    covariance_km2: np.ndarray


DENSE, SPARSE = (0.25, 0.75), (1.0, 4.0)
CASES = (
    Case("diffusive-normal-dense", (1.5,), None, 100, DENSE, (0.5, 1.5), 61),
    Case("diffusive-nu5-sparse", (1.5,), 5.0, 60, SPARSE, (0.8, 4.0), 62),
    Case("diffusive-nu3-dense", (1.5,), 3.0, 100, DENSE, (0.5, 1.5), 63),
    Case("persistent-normal-sparse", (1.5, 5.0), None, 80, SPARSE, (0.3, 1.5), 64),
    Case("persistent-nu5-dense", (1.5, 5.0), 5.0, 130, DENSE, (0.1, 0.6), 65),
    Case("persistent-nu3-sparse", (1.5, 5.0), 3.0, 80, SPARSE, (0.3, 1.5), 66),
)


def steps(motion, dt):
    """F (k, k, n), G (k, n) and Q (k, k, n) of every step, for one axis."""
    one, none = jnp.ones_like(dt), jnp.zeros_like(dt)
    if len(motion) == 1:
        return one[None, None], dt[None], motion[0] ** 2 * dt[None, None]
    w, tau = motion
    a = jnp.exp(-dt / tau)
    s2 = w**2 / tau
    xx = s2 * tau**2 * (dt - 2.0 * tau * (1.0 - a) + 0.5 * tau * (1.0 - a**2))
    xv = 0.5 * s2 * tau**2 * (1.0 - a) ** 2
    vv = 0.5 * s2 * tau * (1.0 - a**2)
    F = jnp.stack([jnp.stack([one, tau * (1.0 - a)]), jnp.stack([none, a])])
    return F, jnp.stack([dt - tau * (1.0 - a), 1.0 - a]), jnp.array([[xx, xv], [xv, vv]])


def log_normal(residual, covariance):
    """Log density of residuals (k, axes, n) with covariance (k, k, n) on each axis."""
    if len(residual) == 1:
        variance = covariance[0, 0]
        return jnp.sum(-0.5 * residual[0] ** 2 / variance - 0.5 * jnp.log(2 * jnp.pi * variance))
    (xx, xv), (_, vv) = covariance
    first, second = residual
    rest = vv - xv**2 / xx
    apart = second - xv / xx * first
    exponent = -0.5 * (first**2 / xx + apart**2 / rest)
    return jnp.sum(exponent - 0.5 * jnp.log(xx * rest) - jnp.log(2 * jnp.pi))


def log_process(case: Case, theta, states):
    """Log density of the states (n, k, 2) given the parameters."""
    track, k = case.track, len(case.motion)
    motion, amplitudes = jnp.exp(theta[:k]), theta[k:-1]
    u = jnp.einsum("a,nad->nd", amplitudes, terms(states[:, 0]))
    F, G, Q = steps(motion, jnp.asarray(np.diff(track.hours)))
    carried = jnp.einsum("pqn,nqd->pdn", F, states[:-1]) + jnp.einsum("pn,nd->pdn", G, u[:-1])
    total = log_normal(jnp.moveaxis(states[1:], 0, -1) - carried, Q)
    first = (states[0, 0] - track.fix_km[0])[None, :, None]
    total += log_normal(first, jnp.full((1, 1, 1), START_SD_KM**2))
    if case.persistent:
        apart = (states[0, 1] - u[0])[None, :, None]
        total += log_normal(apart, jnp.full((1, 1, 1), 0.5 * motion[0] ** 2))
    return total


def log_fixes(case: Case, theta, states):
    """Log density of the fixes: normal, or bivariate t with the covariance as its scale matrix."""
    track, nu = case.track, case.nu
    off = track.fix_km - states[track.at, 0]
    precision = np.linalg.inv(track.covariance_km2)
    squared = jnp.einsum("ka,kab,kb->k", off, precision, off) * jnp.exp(-2.0 * theta[-1])
    log_det = np.linalg.slogdet(track.covariance_km2)[1] + 4.0 * theta[-1]
    shape = -0.5 * squared if nu is None else -0.5 * (nu + 2.0) * jnp.log1p(squared / nu)
    return jnp.sum(shape - 0.5 * log_det - jnp.log(2 * jnp.pi))


def log_prior(case: Case, theta):
    """Log density of the priors."""
    mean, sd = case.prior
    return jnp.sum(-0.5 * ((theta - mean) / sd) ** 2 - jnp.log(sd) - 0.5 * jnp.log(2 * jnp.pi))


def log_joint(case: Case, theta, states):
    """Log density of parameters, states (n, k, 2) and fixes."""
    both = log_process(case, theta, states) + log_fixes(case, theta, states)
    return log_prior(case, theta) + both
