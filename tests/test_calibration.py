"""Simulation-based calibration of the fast engine (Talts et al. 2018, arXiv:1804.06788).

Parameters are drawn from their priors, a track from the parameters, and the parameters' posterior
from the track: the rank of the true value among draws of its posterior is then uniform. The tracks
come from the independent simulator in steps of three minutes and are fitted in steps of six;
the animal diffuses, is drawn home, and prefers the deep (tests/plain_model.py has the sea).
"""

from __future__ import annotations

from functools import cache

import jax
import jax.numpy as jnp
import numpy as np
import plain_model as plain
import pytest
from scipy.stats import chi2
from simulator import Tag, simulate
from test_against_nuts import REACH_KM, field

from trackfit.inference.fit import FitStatus, fit_track
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.motion import Diffusive, VelocityField

TRACKS, DRAWS, BINS, SEED = 250, 99, 10, 8403
HOURS, STEP_HOURS = 60.0, 0.1
TAG = Tag((0.5, 2.5), (0.2, 1.5), roundness=(0.4, 1.0))
NAMES = ("diffusion", "depth", "home")
PRIOR_MEAN = np.array([np.log(1.5), 4.0, -0.3])
PRIOR_SD = np.array([0.3, 4.0, 0.15])


def model() -> Model:
    """The library's model with the priors that the parameters are drawn from."""
    (depth, home), ((layer, none), _) = field()[0].terms, field()[1]
    parameters = [
        Parameter(name, "", name == "diffusion", m, m, s, 1.0)
        for name, m, s in zip(NAMES, PRIOR_MEAN, PRIOR_SD, strict=True)
    ]
    parameters.append(Parameter("error_scale", "1", True, 0.0, 0.0, np.inf, 1.0, fixed=True))
    return Model(
        Diffusive(),
        VelocityField((depth, home), None),
        ((layer, none), None),
        ParameterSet(tuple(parameters)),
    )


@jax.jit
def _velocities(xy: jnp.ndarray, amplitudes: jnp.ndarray) -> jnp.ndarray:
    return jnp.einsum("na,nad->nd", amplitudes, plain.terms(xy)[:, :2])


@cache
def tracks() -> tuple[np.ndarray, list[TrackData]]:
    """Parameters from their priors (tracks, 3) and a track of each."""
    rng = np.random.default_rng(SEED)
    truth = PRIOR_MEAN + PRIOR_SD * rng.standard_normal((TRACKS, 3))
    made = simulate(
        lambda xy, t: np.asarray(_velocities(xy, truth[:, 1:])),
        rng.normal(0.0, 8.0, (TRACKS, 2)),
        HOURS,
        rng,
        diffusion=np.exp(truth[:, :1]),
        step_minutes=3.0,
    )
    assert np.abs(made.xy_km).max() < REACH_KM - 10.0
    data = []
    for i, xy_km in enumerate(made.xy_km):
        fixes = TAG.observe(made.hours, xy_km, rng)
        data.append(TrackData(f"track-{i}", fixes.hours, fixes.xy_km, fixes.covariance_km2))
    return truth, data


@cache
def posteriors() -> list[np.ndarray]:
    """Draws (DRAWS, 3) of every track's posterior: spread evenly over the engine's sample."""
    found = []
    for data in tracks()[1]:
        fit = fit_track(data, model(), FitSettings(STEP_HOURS, points=32), np.zeros(0))
        assert fit.status is FitStatus.CONVERGED, data.tag
        assert fit.states is not None
        assert fit.states.sample is not None
        sample = fit.states.sample
        rng = np.random.default_rng([SEED, len(found)])
        found.append(sample.at[rng.choice(len(sample.at), DRAWS, p=sample.weight, replace=False)])
    return found


def ranks(spread: float = 1.0, shift: float = 0.0) -> np.ndarray:
    """Rank (tracks, 3) of the truth among the draws.

    For controls the draws are spread around their mean by a factor, and shifted by a share of
    their sd.
    """
    found = []
    for truth, draws in zip(tracks()[0], posteriors(), strict=True):
        mean = draws.mean(axis=0)
        moved = mean + spread * (draws - mean) + shift * draws.std(axis=0)
        found.append(np.sum(moved < truth, axis=0))
    return np.array(found)


def p_values(of: np.ndarray) -> dict[str, float]:
    """Of a chi-square test of ten equal bins, one a parameter."""
    result = {}
    for name, rank in zip(NAMES, of.T, strict=True):
        count = np.bincount(rank * BINS // (DRAWS + 1), minlength=BINS)
        expected = len(rank) / BINS
        result[name] = float(chi2.sf(np.sum((count - expected) ** 2) / expected, BINS - 1))
    return result


@pytest.mark.slow
def test_ranks_of_the_truth_are_uniform() -> None:
    """Of three p-values the least is below 0.003 in one calibrated engine of a hundred."""
    assert min(p_values(ranks()).values()) > 0.003


@pytest.mark.slow
@pytest.mark.parametrize(("spread", "shift"), [(1.3, 0.0), (1 / 1.3, 0.0), (1.0, 0.3)])
def test_the_check_sees_an_engine_that_is_off(spread: float, shift: float) -> None:
    """Sds 30 % too large or too small, means off by 0.3 sd: the same ranks, moved so, fail."""
    assert min(p_values(ranks(spread, shift)).values()) < 0.003
