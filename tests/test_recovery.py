"""Simulated recovery: what went into fifty tracks comes out of the fits, with honest intervals.

The tracks come from an independent simulator (tests/simulator.py). Two kinds of tag: accurate and
frequent, inaccurate and rare. Bounds are in Monte-Carlo standard errors of fifty tracks, seeds are
fixed.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import NamedTuple

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.linalg import expm, solve_continuous_lyapunov
from scipy.stats import chi2
from simulator import AMPLITUDES, Paths, Persistence, Sea, Tag, path_estimates, simulate

from trackfit.inference.fit import Fit, FitStatus, fit_track
from trackfit.inference.grid import nearest_state
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.layers import Layer
from trackfit.layers.splines import fit_spline
from trackfit.motion import Diffusive, DistanceTerm, LayerTerm, VelocityField

SEA = Sea()
TRACKS = 50
STEP_HOURS = 0.5
REACH_KM, SPACING_KM, SLICE_HOURS = 180.0, 2.5, 6.0
NAMES = ("diffusion", *AMPLITUDES)


@dataclass(frozen=True)
class Case:
    """One kind of tag on one kind of animal."""

    name: str
    diffusion: float
    amplitudes: tuple[float, ...]
    duration_hours: float
    tag: Tag
    seed: int

    @property
    def truth(self) -> np.ndarray:
        """Diffusion, then amplitudes."""
        return np.array([self.diffusion, *self.amplitudes])

    def simulated(self, tracks: int, stream: int, step_minutes: float = 2.0) -> Paths:
        """True paths; streams are independent."""
        rng = np.random.default_rng([self.seed, stream])
        return simulate(
            SEA.velocity(np.array(self.amplitudes)),
            rng.normal(0.0, 15.0, (tracks, 2)),
            self.duration_hours,
            rng,
            diffusion=self.diffusion,
            step_minutes=step_minutes,
        )


DENSE = Case(
    "dense",
    2.0,
    (12.0, -5.0, -5.0, -0.3, 0.8),
    432.0,
    Tag((1 / 3, 1 / 2), (0.01, 0.06), gaps_hours=(5.0, 15.0), gaps=3),
    7101,
)
SPARSE = Case(
    "sparse",
    1.5,
    (12.0, -5.0, -5.0, -0.2, 0.6),
    816.0,
    Tag((1.7, 4.0), (0.3, 7.0), roundness=(0.2, 1.0), gaps_hours=(24.0, 72.0), gaps=3),
    7102,
)


def layer(name: str, unit: str, hours: np.ndarray, values: np.ndarray) -> Layer:
    """A formula's values (times, ny, nx, components) as a layer of the study area."""
    every = np.ones(values.shape[1:3], bool)
    return Layer(
        name, unit, -REACH_KM, -REACH_KM, SPACING_KM, hours, values, every, ~every, 0.0, "formula"
    )


@cache
def layers(duration_hours: float) -> tuple[Layer, Layer, Layer]:
    """Depth, temperature and current of the sea."""
    nodes = np.arange(-REACH_KM, REACH_KM + SPACING_KM, SPACING_KM)
    x, y = np.meshgrid(nodes, nodes)
    hours = np.arange(0.0, duration_hours + SLICE_HOURS, SLICE_HOURS)
    warm = np.stack([SEA.temperature_c(x, y, t)[0] for t in hours])
    flow = np.stack([SEA.current_kmh(x, y, t) for t in hours])
    depth = SEA.depth_m(x, y)[0][None, ..., None]
    return (
        layer("depth", "m", np.zeros(1), depth),
        layer("temperature", "degC", hours, warm[..., None]),
        layer("water", "km/h", hours, flow),
    )


def free(name: str, start: float, reach: float, *, positive: bool = False) -> Parameter:
    """A parameter without a prior: recovery is of maximum likelihood."""
    return Parameter(name, "", positive, start, 0.0, np.inf, reach)


@cache
def model(duration_hours: float) -> Model:
    """The engine's model of the sea; its search starts from no preference and a diffusion of 1."""
    depth, temperature, water = layers(duration_hours)
    term = [
        LayerTerm(fit_spline(part), jnp.asarray(centre), jnp.asarray(scale), humped)
        for part, (centre, scale), humped in (
            (depth, SEA.depth_standard, False),
            (temperature, SEA.temperature_standard, True),
        )
    ]
    home = DistanceTerm(jnp.asarray(SEA.home_km))
    reach = (50.0, 30.0, 20.0, 2.0, 0.5)
    return Model(
        motion=Diffusive(),
        field=VelocityField((*term, home), fit_spline(water)),
        layers=((depth, temperature, None), water),
        parameters=ParameterSet(
            (
                free("diffusion", 0.0, 1.0, positive=True),
                *(free(n, 0.0, r) for n, r in zip(AMPLITUDES, reach, strict=True)),
                Parameter("error_scale", "1", True, 0.0, 0.0, np.inf, 1.0, fixed=True),
            )
        ),
    )


@dataclass(frozen=True)
class Recovered:
    """One track: its fit, what its true path alone would tell, and how far the hours are off.

    `from_path` is maximum likelihood from the true path on the engine's time grid; `hourly` the
    squared Mahalanobis distance of the true position in the stated ellipse, each hour.
    """

    fit: Fit
    estimates: np.ndarray
    sd: np.ndarray
    inside95: np.ndarray
    from_path: np.ndarray
    hourly: np.ndarray


def fitted(case: Case, paths: Paths, track: int) -> Recovered:
    """Report one simulated path by the tag, fit it, and hold it against the truth."""
    true_hours, true_km = paths.hours, paths.xy_km[track]
    fixes = case.tag.observe(true_hours, true_km, np.random.default_rng([case.seed, 9, track]))
    data = TrackData(case.name, fixes.hours, fixes.xy_km, fixes.covariance_km2)
    hourly = np.arange(np.ceil(fixes.hours[0]), fixes.hours[-1])
    fit = fit_track(data, model(case.duration_hours), FitSettings(STEP_HOURS), hourly)
    assert fit.states is not None, fit.status.sentence
    table = fit.parameters.iloc[: len(NAMES)]
    truth = case.truth
    inside = (table["lower95"] <= truth) & (truth <= table["upper95"])
    grid = fit.states.problem.hours
    seen = np.rint(grid / (true_hours[1] - true_hours[0])).astype(int)
    at = nearest_state(grid, hourly)
    off = fit.states.positions_km()[at] - true_km[seen[at]]
    spread = fit.states.position_covariance_km2()[at]
    return Recovered(
        fit,
        table["estimate"].to_numpy(),
        table["sd"].to_numpy(),
        inside.to_numpy(),
        path_estimates(SEA, true_hours[seen], true_km[seen]),
        np.einsum("na,nab,nb->n", off, np.linalg.inv(spread), off),
    )


@cache
def recovered(case: Case) -> list[Recovered]:
    """All tracks of a case."""
    paths = case.simulated(TRACKS, 0)
    assert np.abs(paths.xy_km).max() < REACH_KM - 10.0
    return [fitted(case, paths, track) for track in range(TRACKS)]


class Bias(NamedTuple):
    """Bias of maximum likelihood itself, from `OTHERS` other paths seen without error.

    `discretisation` is of steps of `STEP_HOURS` against four minutes; `small_sample` is what stays
    with four minutes (animals held near home: the drift's estimates are biased as those of a mean
    reversion are, by a share of a standard error that shrinks with the track's length).
    """

    discretisation: np.ndarray
    small_sample: np.ndarray
    se: np.ndarray


OTHERS = 300


@cache
def stated_bias(case: Case) -> Bias:
    """Measured without trackfit: by least squares on true paths."""
    paths = case.simulated(OTHERS, 1, step_minutes=4.0)
    every = round(STEP_HOURS * 60.0 / 4.0)
    fine = np.array([path_estimates(SEA, paths.hours, xy) for xy in paths.xy_km])
    coarse = np.array(
        [path_estimates(SEA, paths.hours[::every], xy[::every]) for xy in paths.xy_km]
    )
    return Bias(
        (coarse - fine).mean(axis=0),
        fine.mean(axis=0) - case.truth,
        coarse.std(axis=0, ddof=1) / np.sqrt(OTHERS),
    )


CASES = pytest.mark.parametrize("case", [DENSE, SPARSE], ids=lambda case: case.name)


@pytest.mark.slow
@CASES
def test_every_fit_converges(case: Case) -> None:
    assert [r.fit.status for r in recovered(case)] == [FitStatus.CONVERGED] * TRACKS


@pytest.mark.slow
@CASES
def test_mean_errors_within_three_monte_carlo_standard_errors_of_the_stated_bias(
    case: Case,
) -> None:
    estimates, bias = np.array([r.estimates for r in recovered(case)]), stated_bias(case)
    off = estimates.mean(axis=0) - case.truth - bias.discretisation - bias.small_sample
    se = np.hypot(estimates.std(axis=0, ddof=1) / np.sqrt(TRACKS), bias.se)
    assert dict(zip(NAMES, np.abs(off / se) <= 3.0, strict=True)) == dict.fromkeys(NAMES, True)


@pytest.mark.slow
@CASES
def test_the_half_hour_step_costs_little(case: Case) -> None:
    """Diffusion comes out up to 1.5 % low; amplitudes are moved by less than a tenth of an sd."""
    bias, sd = stated_bias(case), np.array([r.sd for r in recovered(case)]).mean(axis=0)
    assert -0.015 < bias.discretisation[0] / case.diffusion < 0.0
    assert np.all(np.abs(bias.discretisation[1:]) < 0.1 * sd[1:])


@pytest.mark.slow
def test_frequent_accurate_fixes_tell_what_the_path_itself_would() -> None:
    """The engine adds less than a tenth of a standard error to the estimate from the true path."""
    tracks = recovered(DENSE)
    off = np.array([r.estimates - r.from_path for r in tracks])
    sd = np.array([r.sd for r in tracks]).mean(axis=0)
    se = off.std(axis=0, ddof=1) / np.sqrt(TRACKS)
    assert np.all(np.abs(off.mean(axis=0)) < 0.1 * sd + 3.0 * se)
    assert np.all(off[:, 1:].std(axis=0) < 0.2 * sd[1:])


@pytest.mark.slow
def test_intervals_cover_what_they_say() -> None:
    """95 % intervals hold the truth in 88 to 99 % of cases: each parameter's, and all together."""
    inside = np.array([r.inside95 for case in (DENSE, SPARSE) for r in recovered(case)])
    assert dict(zip(NAMES, (inside.mean(axis=0) * 100).round(), strict=True)) == {
        name: Within(88, 99) for name in NAMES
    }
    for case in (DENSE, SPARSE):
        assert np.mean([r.inside95 for r in recovered(case)]) * 100 == Within(88, 99)


@pytest.mark.slow
@CASES
def test_stated_standard_errors_are_the_spread_of_the_estimates(case: Case) -> None:
    """To 25 %: the spread over fifty tracks is itself known to a tenth (1/sqrt(2 x 49))."""
    tracks = recovered(case)
    spread = np.std([r.estimates for r in tracks], axis=0, ddof=1)
    stated = np.sqrt(np.mean([r.sd**2 for r in tracks], axis=0))
    assert dict(zip(NAMES, (spread / stated).round(2), strict=True)) == {
        name: Within(0.75, 1.25) for name in NAMES
    }


@pytest.mark.slow
@CASES
@pytest.mark.parametrize("probability", [0.50, 0.95])
def test_hourly_ellipses_hold_the_true_positions(case: Case, probability: float) -> None:
    """To two per cent; hours of one track go together, so the tracks are what is counted."""
    limit = chi2.ppf(probability, 2)
    share = np.array([np.mean(r.hourly <= limit) for r in recovered(case)])
    assert share.std(ddof=1) / np.sqrt(TRACKS) < 0.007
    assert share.mean() == pytest.approx(probability, abs=0.02)


class Within:
    """Equal to every number between two bounds; shows both sides where it is not."""

    def __init__(self, low: float, high: float) -> None:
        self.low, self.high = low, high

    def __eq__(self, other: object) -> bool:
        return bool(self.low <= float(other) <= self.high)  # type: ignore[arg-type]

    def __hash__(self) -> int:
        return hash((self.low, self.high))

    def __repr__(self) -> str:
        return f"{self.low} to {self.high}"


def test_simulated_steps_follow_the_law_of_a_linear_field() -> None:
    """Mean exp(A t) x and covariance of the linear equation (Van Loan 1978), within 4 se.

    Steps of a minute leave less than half a per cent of bias, here a third of a standard error.
    """
    A = np.array([[-0.3, -0.8], [0.8, -0.9]])
    start = np.array([2.0, -1.0])
    n, hours, sigma = 20_000, 0.7, 1.2
    path = simulate(
        lambda xy, t: xy @ A.T,
        np.tile(start, (n, 1)),
        hours,
        np.random.default_rng(31),
        diffusion=sigma,
    )
    step = expm(A * hours)
    stationary = solve_continuous_lyapunov(A, -(sigma**2) * np.eye(2))
    spread = stationary - step @ stationary @ step.T
    # outside figure for this very case: checked with scipy, 8 digits
    np.testing.assert_allclose(
        spread, [[0.81108373, 0.04059721], [0.04059721, 0.58325893]], atol=1e-8
    )
    end = path.xy_km[:, -1]
    se = np.sqrt(np.diag(spread) / n)
    assert np.all(np.abs(end.mean(axis=0) - step @ start) < 4.0 * se + 0.005)
    variance = end.var(axis=0, ddof=1)
    assert np.all(np.abs(variance / np.diag(spread) - 1.0) < 4.0 * np.sqrt(2.0 / n) + 0.01)


def test_simulated_persistent_steps_follow_the_law_of_integrated_velocity() -> None:
    """Variances of position and velocity from rest, within 4 se and half a per cent of step."""
    tau, s, hours, n = 3.0, 0.5, 8.0, 20_000
    path = simulate(
        lambda xy, t: np.zeros_like(xy),
        np.zeros((n, 2)),
        hours,
        np.random.default_rng(32),
        persistence=Persistence(tau, s),
    )
    a = np.exp(-hours / tau)
    of_x = s**2 * tau**2 * (hours - 2 * tau * (1 - a) + tau / 2 * (1 - a**2))
    of_v = s**2 * tau / 2 * (1 - a**2)
    both = s**2 * tau**2 / 2 * (1 - a) ** 2
    x, v = path.xy_km[:, -1], path.velocity_kmh[:, -1]
    bound = 4.0 * np.sqrt(2.0 / n) + 0.005
    np.testing.assert_allclose(x.var(axis=0), of_x, rtol=bound)
    np.testing.assert_allclose(v.var(axis=0), of_v, rtol=bound)
    np.testing.assert_allclose(np.mean(x * v, axis=0), both, rtol=bound * 1.2)


def test_simulated_errors_follow_the_stated_law() -> None:
    """Mahalanobis radii at the quantiles of the 2-D normal and the bivariate t, within 4 se.

    r^2 = -2 ln(1 - p) and nu ((1 - p)^(-2/nu) - 1).
    """
    hours, still = np.arange(20_001) / 30.0, np.zeros((20_001, 2))
    for nu in (None, 4.0):
        tag = Tag((1 / 30, 1 / 29), (0.3, 7.0), roundness=(0.2, 0.9), tail=nu)
        fixes = tag.observe(hours, still, np.random.default_rng(33))
        precision = np.linalg.inv(fixes.covariance_km2)
        squared = np.einsum("na,nab,nb->n", fixes.xy_km, precision, fixes.xy_km)
        for p in (0.5, 0.95):
            limit = -2 * np.log(1 - p) if nu is None else nu * ((1 - p) ** (-2 / nu) - 1)
            se = np.sqrt(p * (1 - p) / len(squared))
            assert np.mean(squared <= limit) == pytest.approx(p, abs=4.0 * se)


def test_simulated_tags_have_gaps_and_outliers() -> None:
    hours, still = np.arange(30 * 24 * 30 + 1) / 30.0, np.zeros((30 * 24 * 30 + 1, 2))
    tag = Tag((0.4, 0.6), (0.01, 0.02), gaps_hours=(24.0, 48.0), gaps=3, outliers=0.05)
    fixes = tag.observe(hours, still, np.random.default_rng(34))
    waits = np.diff(fixes.hours)
    long = waits > 1.0
    assert long.sum() == 3
    assert np.all((waits[long] >= 24.0) & (waits[long] <= 49.5))
    share = np.mean(np.hypot(*fixes.xy_km.T) > 40.0)
    assert share == pytest.approx(0.05, abs=4.0 * np.sqrt(0.05 * 0.95 / len(waits)))


def test_the_sea_s_slopes_are_those_of_its_formulas() -> None:
    """Central differences over a metre: their own error is some 1e-9 of the values."""
    xy = np.random.default_rng(35).uniform(-60.0, 60.0, (50, 2))
    d = 1e-3
    for formula in (SEA.depth_m, lambda x, y: SEA.temperature_c(x, y, 40.0)):
        _, along_x, along_y = formula(*xy.T)
        for slope, shift in ((along_x, (d, 0.0)), (along_y, (0.0, d))):
            ahead, behind = (formula(*(xy + sign * np.array(shift)).T)[0] for sign in (1, -1))
            np.testing.assert_allclose((ahead - behind) / (2 * d), slope, atol=1e-5)
