"""An independent simulator of tracks: numpy only, analytic seas, steps of a minute or two.

It shares no code with trackfit, so that recovery tests compare two makers of the same model. Units
are km and hours; positions are in the plane; arrays of positions end in an axis of two.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

Array = np.ndarray
Velocity = Callable[[Array, float], Array]
"""The velocity field u(x, t): positions (n, 2) in km and one moment in hours to (n, 2) km/h."""


class Persistence(NamedTuple):
    """Persistent motion: dx = v dt, dv = -(v - u)/tau dt + s dW (tau in h, s in km/h^1.5)."""

    tau_hours: float
    noise: float


class Paths(NamedTuple):
    """Simulated paths: hours (steps + 1,), positions and velocities (paths, steps + 1, 2).

    The velocity of diffusive motion does not exist and is NaN.
    """

    hours: Array
    xy_km: Array
    velocity_kmh: Array


def simulate(
    velocity: Velocity,
    start_km: Array,
    duration_hours: float,
    rng: np.random.Generator,
    *,
    diffusion: float | None = None,
    persistence: Persistence | None = None,
    step_minutes: float = 1.0,
    first_hour: float = 0.0,
) -> Paths:
    """Euler-Maruyama from `start_km` (paths, 2): diffusive, or persistent from v = u."""
    if (diffusion is None) == (persistence is None):
        raise ValueError("give either the diffusion or the persistence")
    dt = step_minutes / 60.0
    steps = round(duration_hours / dt)
    hours = first_hour + dt * np.arange(steps + 1)
    xy = np.empty((steps + 1, *np.shape(start_km)))
    v = np.broadcast_to(np.nan, xy.shape) if persistence is None else np.empty_like(xy)
    xy[0] = start_km
    if persistence is not None:
        v[0] = velocity(xy[0], hours[0])
    for i in range(steps):
        noise = np.sqrt(dt) * rng.standard_normal(xy[0].shape)
        u = velocity(xy[i], hours[i])
        if persistence is None:
            xy[i + 1] = xy[i] + u * dt + diffusion * noise
        else:
            xy[i + 1] = xy[i] + v[i] * dt
            v[i + 1] = v[i] - (v[i] - u) / persistence.tau_hours * dt + persistence.noise * noise
    return Paths(hours, np.moveaxis(xy, 0, 1), np.moveaxis(v, 0, 1))


@dataclass(frozen=True)
class Sea:
    """A smooth invented sea, as formulas: depth, a moving temperature front, eddies, a home.

    `standard` gives centre and scale of depth (m) and temperature (degC).
    """

    home_km: tuple[float, float] = (4.0, -6.0)
    softening_km: float = 1.0
    depth_standard: tuple[float, float] = (1500.0, 1000.0)
    temperature_standard: tuple[float, float] = (12.0, 1.5)

    def depth_m(self, x: Array, y: Array) -> tuple[Array, Array, Array]:
        """Depth and its slopes along x and y, m and m/km."""
        a, b, c = x / 22.0 + 0.5, y / 26.0, (x + 2.0 * y) / 60.0
        value = 1500.0 + 600.0 * np.sin(a) * np.cos(b) + 450.0 * np.sin(c)
        along_x = 600.0 / 22.0 * np.cos(a) * np.cos(b) + 450.0 / 60.0 * np.cos(c)
        along_y = -600.0 / 26.0 * np.sin(a) * np.sin(b) + 900.0 / 60.0 * np.cos(c)
        return value, along_x, along_y

    def temperature_c(self, x: Array, y: Array, t: float) -> tuple[Array, Array, Array]:
        """Temperature and its slopes, degC and degC/km."""
        bend, swell = x / 45.0 - t / 130.0, (y - 18.0 * np.sin(x / 45.0 - t / 130.0)) / 30.0
        value = 12.0 + 2.2 * np.sin(swell)
        slope = 2.2 * np.cos(swell) / 30.0
        return value, -slope * 18.0 / 45.0 * np.cos(bend), slope * np.ones_like(x)

    def current_kmh(self, x: Array, y: Array, t: float) -> Array:
        """The water's velocity (..., 2), free of divergence: eddies that drift, and a mean flow."""
        a, b = x / 24.0 + t / 170.0, y / 28.0 + 0.3 * np.sin(t / 90.0)
        along_x = 20.0 / 28.0 * np.sin(a) * np.sin(b) + 0.25
        along_y = 20.0 / 24.0 * np.cos(a) * np.cos(b) - 0.15
        return np.stack([along_x, along_y], axis=-1)

    def terms(self, xy: Array, t: float | Array) -> Array:
        """What each amplitude of `AMPLITUDES` multiplies: (..., amplitudes, 2)."""
        x, y = xy[..., 0], xy[..., 1]
        (_, deep), (mild, warm) = self.depth_standard, self.temperature_standard
        _, depth_x, depth_y = self.depth_m(x, y)
        degrees, warm_x, warm_y = self.temperature_c(x, y, t)
        depth = np.stack([depth_x, depth_y], axis=-1) / deep
        temperature = np.stack([warm_x, warm_y], axis=-1) / warm
        z = (degrees - mild) / warm
        away = xy - np.asarray(self.home_km)
        away = away / np.sqrt(np.sum(away**2, axis=-1, keepdims=True) + self.softening_km**2)
        squared = 2.0 * z[..., None] * temperature
        return np.stack([depth, temperature, squared, away, self.current_kmh(x, y, t)], axis=-2)

    def velocity(self, amplitudes: Array) -> Velocity:
        """The field that an animal with these amplitudes follows."""
        return lambda xy, t: np.einsum("a,...ad->...d", amplitudes, self.terms(xy, t))


AMPLITUDES = ("depth.linear", "temperature.linear", "temperature.squared", "home.distance", "drift")
"""Order of a sea's amplitudes: km^2/h for layers, km/h for the distance, 1 for the current."""


def path_estimates(sea: Sea, hours: Array, xy_km: Array) -> Array:
    """Maximum likelihood from a path seen without error: (diffusion, amplitudes).

    With x' = x + sum_a theta_a g_a(x, t) dt + sigma sqrt(dt) e this is least squares; as the steps
    get short it tends to the estimate of the diffusion in continuous time.
    """
    dt = np.diff(hours)
    terms = sea.terms(xy_km[:-1], hours[:-1])
    moved = np.diff(xy_km, axis=0)
    information = np.einsum("nad,nbd,n->ab", terms, terms, dt)
    amplitudes = np.linalg.solve(information, np.einsum("nad,nd->a", terms, moved))
    rest = moved - np.einsum("a,nad,n->nd", amplitudes, terms, dt)
    return np.append(np.sqrt(np.mean(rest**2 / dt[:, None])), amplitudes)


class Fixes(NamedTuple):
    """What a tag reports: path index and hour of each fix, positions, error covariances (km^2).

    `thrown` marks the fixes thrown off.
    """

    at: Array
    hours: Array
    xy_km: Array
    covariance_km2: Array
    thrown: Array


@dataclass(frozen=True)
class Tag:
    """When a tag reports and how wrong it is.

    Attributes
    ----------
    every_hours
        Shortest and longest wait between fixes (uniform).
    sd_km
        Smallest and largest error sd along the major axis (uniform in the logarithm).
    roundness
        Smallest and largest ratio of minor to major axis; (1, 1) for circles.
    gaps_hours
        Shortest and longest gap.
    gaps
        Number of gaps, spread evenly over the track.
    tail
        Degrees of freedom of bivariate Student-t errors with the covariance as shape; None: normal.
    outliers
        Share of fixes thrown off by a further distance in a random direction.
    outlier_km
        Shortest and longest such distance (uniform).
    """

    every_hours: tuple[float, float]
    sd_km: tuple[float, float]
    roundness: tuple[float, float] = (1.0, 1.0)
    gaps_hours: tuple[float, float] = (0.0, 0.0)
    gaps: int = 0
    tail: float | None = None
    outliers: float = 0.0
    outlier_km: tuple[float, float] = (50.0, 50.0)

    def observe(self, hours: Array, xy_km: Array, rng: np.random.Generator) -> Fixes:
        """Report one path, (steps + 1,) hours and (steps + 1, 2) positions."""
        return self.observe_at(self._moments(hours, rng), hours, xy_km, rng)

    def observe_at(self, at: Array, hours: Array, xy_km: Array, rng: np.random.Generator) -> Fixes:
        """Report a path at the given places on it."""
        covariance = self._covariances(len(at), rng)
        white = rng.standard_normal((len(at), 2))
        error = np.einsum("nab,nb->na", np.linalg.cholesky(covariance), white)
        if self.tail is not None:
            error /= np.sqrt(rng.chisquare(self.tail, (len(at), 1)) / self.tail)
        thrown, bearing = rng.random(len(at)) < self.outliers, rng.uniform(0, 2 * np.pi, len(at))
        far = rng.uniform(*self.outlier_km, (len(at), 1))
        far = far * np.stack([np.sin(bearing), np.cos(bearing)], axis=1)
        error += np.where(thrown[:, None], far, 0.0)
        return Fixes(at, hours[at], xy_km[at] + error, covariance, thrown)

    def _moments(self, hours: Array, rng: np.random.Generator) -> Array:
        span, step = hours[-1] - hours[0], hours[1] - hours[0]
        waits = rng.uniform(*self.every_hours, int(span / self.every_hours[0]) + 2)
        after = np.concatenate([[0.0], np.cumsum(waits)])
        keep = after <= span
        for i in range(self.gaps):
            begin = span * (i + 0.3 + 0.4 * rng.random()) / self.gaps
            keep &= (after < begin) | (after > begin + rng.uniform(*self.gaps_hours))
        return np.unique(np.rint(after[keep] / step).astype(int))

    def _covariances(self, n: int, rng: np.random.Generator) -> Array:
        major = np.exp(rng.uniform(*np.log(self.sd_km), n))
        minor = major * rng.uniform(*self.roundness, n)
        turn = rng.uniform(0.0, np.pi, n)
        along = np.stack([np.sin(turn), np.cos(turn)], axis=-1)
        across = np.stack([np.cos(turn), -np.sin(turn)], axis=-1)
        outer = [np.einsum("na,nb->nab", v, v) for v in (along, across)]
        return major[:, None, None] ** 2 * outer[0] + minor[:, None, None] ** 2 * outer[1]
