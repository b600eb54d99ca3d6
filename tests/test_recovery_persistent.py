"""Simulated recovery of persistent motion: fifty tracks from known parameters.

As tests/test_recovery.py has it for diffusive motion: the same sea, an independent simulator,
maximum likelihood, bounds in Monte-Carlo standard errors of fifty tracks, seeds fixed.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import pytest
from scipy.optimize import minimize_scalar
from scipy.stats import chi2
from simulator import AMPLITUDES, Paths, Persistence, Sea, Tag, simulate
from test_recovery import REACH_KM, SEA, STEP_HOURS, Within, free, model

from trackfit.inference.fit import Fit, FitStatus, fit_track
from trackfit.inference.grid import nearest_state
from trackfit.inference.parameters import ParameterSet
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.motion import Persistent

TRACKS, OTHERS, SEED = 50, 300, 7201
SPEED_KMH, PERSISTENCE_HOURS = 1.5, 3.0
TRUTH = np.array([SPEED_KMH, PERSISTENCE_HOURS, 12.0, -5.0, -5.0, -0.4, 0.8])
NAMES = ("speed", "persistence", *AMPLITUDES)
DURATION_HOURS = 360.0
TAG = Tag((0.5, 1.5), (0.05, 0.5), roundness=(0.3, 1.0), gaps_hours=(5.0, 15.0), gaps=3)


@cache
def simulated(tracks: int, stream: int, step_minutes: float) -> Paths:
    """True paths; streams are independent."""
    rng = np.random.default_rng([SEED, stream])
    return simulate(
        SEA.velocity(TRUTH[2:]),
        rng.normal(0.0, 15.0, (tracks, 2)),
        DURATION_HOURS,
        rng,
        persistence=Persistence(PERSISTENCE_HOURS, SPEED_KMH / np.sqrt(PERSISTENCE_HOURS)),
        step_minutes=step_minutes,
    )


def persistent_model() -> Model:
    """The diffusive tests' model with the other motion; the search starts at 1 km/h and 2 h."""
    base = model(DURATION_HOURS)
    motion = (
        free("speed", 0.0, 1.0, positive=True),
        free("persistence", float(np.log(2.0)), 1.0, positive=True),
    )
    parameters = ParameterSet((*motion, *base.parameters.all[1:]))
    return replace(base, motion=Persistent(), parameters=parameters)


def noise(tau: float, dt: float) -> np.ndarray:
    """Covariance of one axis over a step, in units of the speed squared."""
    a = np.exp(-dt / tau)
    xx = tau * (dt - 2.0 * tau * (1.0 - a) + 0.5 * tau * (1.0 - a**2))
    xv = 0.5 * tau * (1.0 - a) ** 2
    return np.array([[xx, xv], [xv, 0.5 * (1.0 - a**2)]])


def path_estimates(sea: Sea, hours: np.ndarray, xy: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Maximum likelihood from positions and velocities seen without error, in equal steps.

    Given tau, amplitudes are least squares and the speed is the mean square of what is left;
    tau is searched for.
    """
    dt = hours[1] - hours[0]
    terms = sea.terms(xy[:-1], hours[:-1])

    def given(tau: float) -> tuple[float, np.ndarray]:
        a = np.exp(-dt / tau)
        carried = xy[:-1] + tau * (1.0 - a) * v[:-1], a * v[:-1]
        left = np.stack([xy[1:] - carried[0], v[1:] - carried[1]])
        across = np.stack([(dt - tau * (1.0 - a)) * terms, (1.0 - a) * terms])
        Q = noise(tau, dt)
        W = np.linalg.inv(Q)
        information = np.einsum("pnad,pq,qnbd->ab", across, W, across, optimize=True)
        pull = np.einsum("pnad,pq,qnd->a", across, W, left, optimize=True)
        amplitudes = np.linalg.solve(information, pull)
        left = left - np.einsum("a,pnad->pnd", amplitudes, across)
        squared = np.einsum("pnd,pq,qnd->", left, W, left, optimize=True) / (4.0 * len(terms))
        value = 2.0 * np.log(squared) + np.linalg.slogdet(Q)[1]
        return value, np.array([np.sqrt(squared), tau, *amplitudes])

    bounds = np.log(PERSISTENCE_HOURS) + np.array([-1.5, 1.5])
    found = minimize_scalar(
        lambda log_tau: given(np.exp(log_tau))[0],
        bounds=bounds,
        method="bounded",
        options={"xatol": 1e-4},
    )
    return given(float(np.exp(found.x)))[1]


@cache
def stated_bias() -> tuple[np.ndarray, np.ndarray]:
    """Bias of maximum likelihood itself on the engine's steps, with its standard error.

    From other paths, positions and velocities seen without error: what half-hour steps and the
    track's length cost.
    """
    paths = simulated(OTHERS, 1, 3.0)
    every = round(STEP_HOURS * 60.0 / 3.0)
    found = np.array(
        [
            path_estimates(SEA, paths.hours[::every], xy[::every], v[::every])
            for xy, v in zip(paths.xy_km, paths.velocity_kmh, strict=True)
        ]
    )
    return found.mean(axis=0) - TRUTH, found.std(axis=0, ddof=1) / np.sqrt(OTHERS)


@dataclass(frozen=True)
class Recovered:
    """One track: its fit, its intervals, and hourly squared Mahalanobis distances of the truth."""

    fit: Fit
    estimates: np.ndarray
    sd: np.ndarray
    inside95: np.ndarray
    hourly: np.ndarray


def fitted(track: int) -> Recovered:
    paths = simulated(TRACKS, 0, 2.0)
    true_km = paths.xy_km[track]
    fixes = TAG.observe(paths.hours, true_km, np.random.default_rng([SEED, 9, track]))
    data = TrackData("persistent", fixes.hours, fixes.xy_km, fixes.covariance_km2)
    hourly = np.arange(np.ceil(fixes.hours[0]), fixes.hours[-1])
    fit = fit_track(data, persistent_model(), FitSettings(STEP_HOURS), hourly)
    assert fit.states is not None, fit.status.sentence
    table = fit.parameters.iloc[: len(NAMES)]
    at = nearest_state(fit.states.problem.hours, hourly)
    off = fit.states.positions_km()[at] - true_km[np.rint(hourly * 30.0).astype(int)]
    spread = np.linalg.inv(fit.states.position_covariance_km2()[at])
    return Recovered(
        fit,
        table["estimate"].to_numpy(),
        table["sd"].to_numpy(),
        ((table["lower95"] <= TRUTH) & (table["upper95"] >= TRUTH)).to_numpy(),
        np.einsum("na,nab,nb->n", off, spread, off),
    )


@cache
def recovered() -> list[Recovered]:
    assert np.abs(simulated(TRACKS, 0, 2.0).xy_km).max() < REACH_KM - 10.0
    return [fitted(track) for track in range(TRACKS)]


@pytest.mark.slow
def test_all_fits_but_one_converge() -> None:
    """One animal passes 240 m from its home: there the path has two modes.

    The Laplace approximation then has a spike, 0.01 km/h wide, in which the search gets stuck; the
    curvature there is no standard error, and the fit says so.
    """
    statuses = [r.fit.status for r in recovered()]
    assert statuses.count(FitStatus.CONVERGED) >= TRACKS - 1
    assert set(statuses) <= {FitStatus.CONVERGED, FitStatus.NOT_IDENTIFIED}


@pytest.mark.slow
def test_mean_errors_within_three_monte_carlo_standard_errors_of_the_stated_bias() -> None:
    estimates = np.array([r.estimates for r in recovered()])
    bias, bias_se = stated_bias()
    off = estimates.mean(axis=0) - TRUTH - bias
    se = np.hypot(estimates.std(axis=0, ddof=1) / np.sqrt(TRACKS), bias_se)
    assert dict(zip(NAMES, np.abs(off / se) <= 3.0, strict=True)) == dict.fromkeys(NAMES, True)


@pytest.mark.slow
def test_intervals_cover_what_they_say() -> None:
    """95 % intervals hold the truth in 88 to 99 % of all cases; each parameter's in 84 % or more.

    Of fifty tracks a right interval misses eight or more once in 300 times.
    """
    inside = np.array([r.inside95 for r in recovered()])
    assert inside.mean() * 100 == Within(88, 99)
    assert dict(zip(NAMES, inside.mean(axis=0) * 100, strict=True)) == {
        name: Within(84, 100) for name in NAMES
    }


@pytest.mark.slow
def test_stated_standard_errors_are_the_spread_of_the_estimates() -> None:
    """To 30 %: the spread over fifty tracks is itself known to a tenth."""
    spread = np.std([r.estimates for r in recovered()], axis=0, ddof=1)
    stated = np.sqrt(np.mean([r.sd**2 for r in recovered()], axis=0))
    assert dict(zip(NAMES, (spread / stated).round(2), strict=True)) == {
        name: Within(0.7, 1.3) for name in NAMES
    }


@pytest.mark.slow
@pytest.mark.parametrize("probability", [0.50, 0.95])
def test_hourly_ellipses_hold_the_true_positions(probability: float) -> None:
    """To two per cent; hours of one track go together, so the tracks are what is counted."""
    share = np.array([np.mean(r.hourly <= chi2.ppf(probability, 2)) for r in recovered()])
    assert share.std(ddof=1) / np.sqrt(TRACKS) < 0.007
    assert share.mean() == pytest.approx(probability, abs=0.02)


@pytest.mark.slow
def test_what_maximum_likelihood_itself_is_off_by_is_small() -> None:
    """Half-hour steps and fifteen days: 2 % of the speed, 7 % of the persistence, half an sd."""
    bias, _ = stated_bias()
    sd = np.sqrt(np.mean([r.sd**2 for r in recovered()], axis=0))
    assert np.all(np.abs(bias[:2]) < np.array([0.02, 0.07]) * TRUTH[:2])
    assert np.all(np.abs(bias[2:]) < 0.5 * sd[2:])
