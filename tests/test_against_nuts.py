"""The fast engine against long Hamiltonian sampling of the plain model.

`tests/nuts_summaries.json` keeps what `python tests/plain_nuts.py` found for six tracks: diffusive
and persistent; normal errors, nu 5, nu 3; sparse and dense. The plain model is written apart from
the library (`tests/plain_model.py`).
"""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import jax.numpy as jnp
import numpy as np
import plain_model as plain
import pytest

from trackfit.inference.fit import Fit, FitStatus, fit_track
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.problem import evaluate_at
from trackfit.inference.search import Search
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.layers import Layer
from trackfit.layers.splines import fit_spline
from trackfit.motion import Diffusive, DistanceTerm, LayerTerm, Persistent, VelocityField

SUMMARIES = json.loads(Path(__file__).with_name("nuts_summaries.json").read_text())
REACH_KM, SPACING_KM = 90.0, 1.0
EVERY = pytest.mark.parametrize("case", plain.CASES, ids=lambda case: case.name)


def layer(name: str, unit: str, values: np.ndarray) -> Layer:
    """A formula's values (ny, nx, components) as a layer."""
    every = np.ones(values.shape[:2], bool)
    return Layer(
        name,
        unit,
        -REACH_KM,
        -REACH_KM,
        SPACING_KM,
        np.zeros(1),
        values[None],
        every,
        ~every,
        0.0,
        "formula",
    )


@cache
def field() -> tuple[VelocityField, tuple[tuple[Layer | None, ...], Layer]]:
    """The plain sea as the library has it: splines through its values."""
    nodes = np.arange(-REACH_KM, REACH_KM + SPACING_KM, SPACING_KM)
    x, y = np.meshgrid(nodes, nodes)
    depth = layer("depth", "1", np.asarray(plain.depth(x, y))[..., None])
    at = jnp.asarray(np.stack([x.ravel(), y.ravel()], axis=1))
    flow = np.asarray(plain.terms(at)[:, plain.AMPLITUDES.index("drift")])
    water = layer("water", "km/h", flow.reshape(*x.shape, 2))
    term = LayerTerm(fit_spline(depth), jnp.asarray(0.0), jnp.asarray(1.0), humped=False)
    home = DistanceTerm(jnp.asarray(plain.HOME_KM))
    return VelocityField((term, home), fit_spline(water)), ((depth, None), water)


def model(case: plain.Case) -> Model:
    """The library's model of a case, with the same priors; the search starts at their means."""
    mean, sd = case.prior
    n_motion = len(case.motion)
    parameters = [
        Parameter(name, "", i < n_motion or name == "error_scale", m, m, s, min(s, 1.0))
        for i, (name, m, s) in enumerate(zip(case.names, mean, sd, strict=True))
    ]
    if case.nu is not None:
        nu = float(np.log(case.nu))
        parameters.append(Parameter("tail_nu", "1", True, nu, 0.0, np.inf, 1.0, fixed=True))
    return Model(
        Persistent() if case.persistent else Diffusive(),
        *field(),
        ParameterSet(tuple(parameters)),
        heavy=case.nu is not None,
    )


def data(case: plain.Case) -> TrackData:
    track = case.track
    return TrackData(case.name, track.fix_hours, track.fix_km, track.covariance_km2)


@cache
def fitted(case: plain.Case, points: int) -> Fit:
    return fit_track(
        data(case), model(case), FitSettings(plain.STEP_HOURS, points=points), np.zeros(0)
    )


@EVERY
def test_both_write_the_same_density(case: plain.Case) -> None:
    """Process and normal errors at the true parameters and at others, up to a constant.

    The library's layers are splines through the formulas' values: 1e-7 of them off.
    """
    assert np.abs(case.track.fix_km).max() < REACH_KM - 15.0
    problem = Search(data(case), model(case), plain.STEP_HOURS, np.zeros(0)).problem
    assert np.array_equal(problem.hours, case.track.hours)
    rng = np.random.default_rng(case.seed)
    n, k = len(problem.hours), len(case.motion)
    path = np.stack(
        [np.interp(problem.hours, case.track.fix_hours, xy) for xy in case.track.fix_km.T], axis=1
    )
    apart = []
    for shift in (0.0, 0.3):
        states = path[:, None] * np.array([1.0, 0.01])[:k, None] + rng.normal(size=(n, k, 2))
        theta = case.truth + shift
        ours = evaluate_at(problem, np.append(theta, []), states.reshape(n, 2 * k))
        wanted = float(plain.log_process(case, jnp.asarray(theta), jnp.asarray(states)))
        apart.append(wanted + ours.value)
    # values near 1e4
    assert apart[0] == pytest.approx(apart[1], abs=1e-3)


@EVERY
def test_the_sampling_was_long_enough(case: plain.Case) -> None:
    kept = SUMMARIES["tracks"][case.name]
    assert kept["names"] == list(case.names)
    assert min(kept["effective"]) >= 1500
    assert max(abs(r - 1.0) for r in kept["r_hat"]) < 0.01
    assert kept["divergences"] == 0


@EVERY
def test_means_within_a_quarter_and_sds_within_fifteen_per_cent(case: plain.Case) -> None:
    kept = SUMMARIES["tracks"][case.name]
    fit = fitted(case, 128)
    assert fit.status is FitStatus.CONVERGED
    assert fit.states is not None
    assert fit.states.sample is not None
    found = fit.states.sample
    off = (found.mean - kept["mean"]) / kept["sd"]
    ratio = np.sqrt(np.diag(found.covariance)) / kept["sd"]
    assert dict(zip(case.names, (np.abs(off) <= 0.25), strict=True)) == dict.fromkeys(
        case.names, True
    ), off
    assert np.all(np.abs(ratio - 1.0) <= 0.15), ratio
