"""Tracks made exactly by either motion without a field, seen with errors; and models for them."""

from dataclasses import replace

import numpy as np

from trackfit.inference.fit import fit_track
from trackfit.inference.grid import build_problem, interpolated_start, time_grid
from trackfit.inference.marginal import Warm, approximate
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.motion import Diffusive, Persistent, VelocityField

MOTIONS = {"diffusive": Diffusive(), "persistent": Persistent()}
STILL = VelocityField((), None)


def times(rng, fixes, every_hours=1.0):
    return np.sort(rng.uniform(0.0, fixes * every_hours, fixes))


def walk(rng, hours, diffusion=1.5):
    """A random walk at some times: exact increments."""
    steps = diffusion * np.sqrt(np.diff(hours))[:, None] * rng.normal(size=(len(hours) - 1, 2))
    return np.vstack([np.zeros(2), np.cumsum(steps, axis=0)])


def cruise(rng, hours, speed=2.0, persistence=3.0):
    """Integrated Ornstein-Uhlenbeck velocity at some times: exact increments."""
    x, v = np.zeros((len(hours), 2)), speed / np.sqrt(2.0) * rng.normal(size=2)
    noise = speed**2 / persistence
    for i, dt in enumerate(np.diff(hours)):
        a = np.exp(-dt / persistence)
        xx = noise * persistence**2 * (
            dt - 2.0 * persistence * (1.0 - a) + 0.5 * persistence * (1.0 - a * a)
        )  # fmt: skip
        xv = 0.5 * noise * persistence**2 * (1.0 - a) ** 2
        vv = 0.5 * noise * persistence * (1.0 - a * a)
        root = np.linalg.cholesky(np.array([[xx, xv], [xv, vv]]) + 1e-15 * np.eye(2))
        kick = root @ rng.normal(size=(2, 2))
        x[i + 1] = x[i] + persistence * (1.0 - a) * v + kick[0]
        v = a * v + kick[1]
    return x


def seen(rng, hours, at_km, sd_km, factor=1.0, tag="made"):
    """Fixes with errors `factor` times as large as stated."""
    sd_km = np.broadcast_to(sd_km, len(hours))
    errors = factor * sd_km[:, None] * rng.normal(size=(len(hours), 2))
    return TrackData(tag, hours, at_km + errors, sd_km[:, None, None] ** 2 * np.eye(2))


def made(kind, seed, fixes=300, sd_km=0.5, factor=1.0, **how):
    rng = np.random.default_rng(seed)
    hours = times(rng, fixes)
    path = {"diffusive": walk, "persistent": cruise}[kind](rng, hours, **how)
    return seen(rng, hours, path, sd_km, factor)


def parameter(name, *, start=0.0, sd=2.0, positive=True, fixed=False):
    return Parameter(name, "1", positive, start, 0.0, sd, 1.0, fixed)


def model_of(kind, *, scale="fixed", nu=None, field=STILL, layers=((), None), amplitudes=()):
    """A model of one motion; `nu` makes tails heavy and starts their degrees of freedom."""
    motion = MOTIONS[kind]
    parameters = [parameter(p.name) for p in motion.parameters]
    parameters += amplitudes
    parameters.append(parameter("error_scale", sd=1.0, fixed=scale == "fixed"))
    if nu is not None:
        parameters.append(parameter("tail_nu", start=float(np.log(nu)), sd=1.0))
    return Model(motion, field, layers, ParameterSet(tuple(parameters)), heavy=nu is not None)


def fitted(data, model, step_hours=1.0, **settings):
    return fit_track(data, model, FitSettings(step_hours=step_hours, **settings), np.zeros(0))


def approximated(data, kind, theta, *, heavy=False, start=None, hours=None, step_hours=1.0):
    """The Gaussian approximation of a track at given parameters."""
    motion = MOTIONS[kind]
    if hours is None:
        hours = time_grid(data.hours, step_hours, np.zeros(0), motion.same_moment_hours)
    problem = build_problem(
        motion=motion,
        field=STILL,
        layers=((), None),
        hours=hours,
        fix_hours=data.hours,
        fix_km=data.at_km,
        covariance_km2=data.covariance_km2,
        start=start,
        heavy=heavy,
    )
    states = interpolated_start(hours, data.hours, data.at_km, problem.dim, robust=heavy)
    return approximate(problem, np.asarray(theta, float), Warm(states), 1e-13, 1e-9)


def part(data, chosen):
    return replace(
        data,
        hours=data.hours[chosen],
        at_km=data.at_km[chosen],
        covariance_km2=data.covariance_km2[chosen],
    )
