"""Cheap layers, fields and tracks in the plane for the tests of the engine."""

from collections.abc import Callable, Sequence

import jax.numpy as jnp
import numpy as np
import scipy.ndimage

from trackfit.inference.fit import fit_track
from trackfit.inference.grid import build_problem, interpolated_start
from trackfit.inference.marginal import Approximation, Warm, approximate
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.problem import TrackProblem
from trackfit.inference.process import Start
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.layers import Layer
from trackfit.layers.splines import TimeBracket, fit_spline
from trackfit.motion import Diffusive, DistanceTerm, LayerTerm, VelocityField

STILL = VelocityField((), None)


def grid_layer(values, *, spacing_km=1.0, hours=(0.0,), corner_km=None) -> Layer:
    """A layer from values (times, ny, nx, components), centred on the origin unless said."""
    values = np.asarray(values, float)
    ny, nx = values.shape[1:3]
    x0, y0 = corner_km or (-0.5 * (nx - 1) * spacing_km, -0.5 * (ny - 1) * spacing_km)
    return Layer(
        name="made",
        unit="1",
        x0_km=x0,
        y0_km=y0,
        spacing_km=spacing_km,
        hours=np.asarray(hours, float),
        values=values,
        covered=np.ones((ny, nx), bool),
        filled=np.zeros((ny, nx), bool),
        share_filled=0.0,
        source="made up",
    )


def field_layer(
    *components: Callable, hours: Sequence[float] = (0.0,), nodes=160, spacing_km=1.0
) -> Layer:
    """A layer of functions f(x, y, hour).

    Quintic polynomials are reproduced exactly far from the border: what the mirrored border spoils
    falls by 0.43 a node (the largest root of the quintic filter), so 60 nodes inside 1e-22 is left.
    """
    half = 0.5 * (nodes - 1) * spacing_km
    y, x = np.meshgrid(*(np.linspace(-half, half, nodes),) * 2, indexing="ij")
    values = [np.stack([f(x, y, t) + 0.0 * x for f in components], axis=-1) for t in hours]
    return grid_layer(np.stack(values), spacing_km=spacing_km, hours=hours)


def bumpy_layer(seed: int, *, times=1, components=1, nodes=60, spacing_km=4.0, last_hour=300.0):
    """Smooth random values of unit variance."""
    noise = np.random.default_rng(seed).normal(size=(times, nodes, nodes, components))
    values = scipy.ndimage.gaussian_filter(noise, (0.5 if times > 1 else 0.0, 4.0, 4.0, 0.0))
    hours = np.linspace(0.0, last_hour, times) if times > 1 else np.zeros(1)
    return grid_layer(values / values.std(), spacing_km=spacing_km, hours=hours)


def still(points: int) -> TimeBracket:
    """The time bracket of a fixed layer."""
    return TimeBracket(jnp.zeros(points, jnp.int32), jnp.zeros(points))


def layer_term(layer: Layer, *, centre=0.0, scale=1.0, humped=False) -> LayerTerm:
    return LayerTerm(fit_spline(layer), jnp.asarray(centre), jnp.asarray(scale), humped)


def distance_term(x_km: float, y_km: float) -> DistanceTerm:
    return DistanceTerm(jnp.asarray([x_km, y_km]))


def start_prior(x_km=0.0, y_km=0.0, sd_km=10.0) -> Start:
    return Start(jnp.asarray([float(x_km), float(y_km)]), jnp.asarray(float(sd_km)))


def isotropic(sd_km) -> np.ndarray:
    """Covariances (n, 2, 2) from standard deviations."""
    return np.asarray(sd_km, float)[:, None, None] ** 2 * np.eye(2)


def random_covariances(rng, n, scale=1.0):
    """Turned error ellipses."""
    root = rng.normal(size=(n, 2, 2))
    return scale * (root @ root.transpose(0, 2, 1) + 0.3 * np.eye(2))


def problem_of(
    fix_hours,
    fix_km,
    covariance_km2,
    *,
    hours=None,
    field=STILL,
    layers=((), None),
    start=None,
    motion=None,
    heavy=False,
    pace=None,
) -> TrackProblem:
    fix_hours = np.asarray(fix_hours, float)
    return build_problem(
        motion=motion or Diffusive(),
        field=field,
        layers=layers,
        hours=fix_hours if hours is None else np.asarray(hours, float),
        fix_hours=fix_hours,
        fix_km=np.asarray(fix_km, float),
        covariance_km2=np.asarray(covariance_km2, float),
        start=start,
        heavy=heavy,
        pace=pace,
    )


def first_guess(problem: TrackProblem, fix_hours) -> np.ndarray:
    return interpolated_start(
        problem.hours,
        np.asarray(fix_hours, float),
        problem.observations.at_km,
        problem.dim,
        robust=problem.observations.heavy,
    )


def approximation_of(
    problem: TrackProblem, theta, fix_hours, tolerance=1e-12, site_tolerance=1e-9
) -> Approximation:
    start = first_guess(problem, fix_hours)
    theta = np.asarray(theta, float)
    return approximate(problem, theta, Warm(start), tolerance, site_tolerance)


def covariance_of(found: Approximation) -> np.ndarray:
    """Covariance blocks of the states (states, dim, dim)."""
    blocks = np.asarray(found.spread.steps.covariance)
    return np.moveaxis(blocks, -1, 0)[: found.problem.n_states]


def parameter(name="p", *, positive=False, start=0.0, sd=np.inf, mean=0.0, reach=1.0, fixed=False):
    return Parameter(name, "1", positive, start, mean, sd, reach, fixed)


def still_model(
    *, log_diffusion=0.0, log_scale=0.0, scale_fixed=True, weak=False, start=None
) -> Model:
    """Diffusion without a field: a random walk seen with errors."""
    return Model(
        motion=Diffusive(),
        field=STILL,
        layers=((), None),
        parameters=ParameterSet(
            (
                parameter(
                    "diffusion",
                    positive=True,
                    start=log_diffusion,
                    sd=2.0 if weak else np.inf,
                ),
                parameter(
                    "error_scale",
                    positive=True,
                    start=log_scale,
                    sd=1.0 if weak else np.inf,
                    fixed=scale_fixed,
                ),
            )
        ),
        start=start,
    )


def walk(seed: int, fixes: int, *, diffusion=1.5, error_km=0.5, every_hours=1.0):
    """A random walk seen with errors: TrackData and the true positions at the fixes."""
    rng = np.random.default_rng(seed)
    truth = np.cumsum(rng.normal(size=(fixes, 2)) * diffusion * np.sqrt(every_hours), axis=0)
    seen = truth + error_km * rng.normal(size=truth.shape)
    hours = every_hours * np.arange(fixes)
    return TrackData("walker", hours, seen, isotropic(np.full(fixes, error_km))), truth


def quick_fit(data: TrackData, model: Model, *, step_hours=1.0, report_hours=(), **settings):
    return fit_track(
        data, model, FitSettings(step_hours=step_hours, **settings), np.asarray(report_hours, float)
    )
