"""Smooth preference: the curve's functions, its jets, how smooth it comes out, what it finds."""

from dataclasses import replace
from functools import cache

import jax.numpy as jnp
import numpy as np
import pytest
from engine_standins import bumpy_layer
from scipy.interpolate import BSpline
from simulator import Sea, Tag, simulate

from trackfit.inference.fit import FitStatus, fit_track
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.search import Search
from trackfit.inference.smoothing import effective_bends, smooth_groups
from trackfit.inference.task import FitSettings, Model, TrackData
from trackfit.layers.layer import Layer
from trackfit.layers.splines import bracket_times, fit_spline
from trackfit.motion import Diffusive, SmoothTerm, VelocityField, fit_curve
from trackfit.motion.smooth import DEGREE, composed_jet
from trackfit.motion.terms import TermName
from trackfit.motion.velocity import square_jet
from trackfit.responses import responses_of

VALUES = np.random.default_rng(5).gamma(2.0, 1.0, 3000) - 2.0
CURVE = fit_curve(VALUES)
SEA = Sea()


# The functions -----------------------------------------------------------------------------------


def test_the_functions_are_the_splines_that_scipy_evaluates():
    """Against scipy.interpolate.BSpline, all derivatives."""
    z = np.linspace(VALUES.min(), VALUES.max(), 301)
    spline = BSpline(np.asarray(CURVE.knots), np.asarray(CURVE.maps[0]).T, DEGREE)
    for d, found in enumerate(CURVE.values(jnp.asarray(z))):
        wanted = spline.derivative(d)(z) if d else spline(z)
        scale = np.abs(wanted).max()
        np.testing.assert_allclose(np.asarray(found).T, wanted, atol=1e-10 * scale)


def test_the_functions_are_of_unit_roughness_and_hold_no_straight_line():
    z = np.linspace(*np.asarray(CURVE.knots)[[DEGREE, -DEGREE - 1]], 40_001)
    found = [np.asarray(part) for part in CURVE.values(jnp.asarray(z))]
    rough = np.trapezoid(found[2][:, None] * found[2], z, axis=2)
    # 1e-5: the trapezoidal rule
    np.testing.assert_allclose(rough, np.eye(CURVE.n_functions), atol=1e-5)
    seen = np.asarray(CURVE.values(jnp.asarray(VALUES))[0])
    # the first function bends once, and each further one once more
    turns = (np.diff(np.sign(np.diff(found[0], axis=1)), axis=1) != 0).sum(axis=1)
    assert turns.tolist() == list(range(1, CURVE.n_functions + 1))
    lines = np.stack([np.ones_like(VALUES), VALUES])
    even = np.linspace(z[0], z[-1], 240)
    spread = np.asarray(CURVE.values(jnp.asarray(even))[0])
    mixed = 0.9 * seen @ lines.T / len(VALUES)
    mixed += 0.1 * spread @ np.stack([np.ones_like(even), even]).T / len(even)
    np.testing.assert_allclose(mixed, 0.0, atol=1e-10)


def test_beyond_the_knots_nothing_changes():
    outer = np.asarray(CURVE.knots)[[DEGREE, -DEGREE - 1]]
    step = np.array([-5.0, 5.0])
    at, beyond = (CURVE.values(jnp.asarray(z)) for z in (outer, outer + step))
    np.testing.assert_array_equal(np.asarray(at[0]), np.asarray(beyond[0]))


@pytest.mark.parametrize("order", [0, 1, 3, 4])
def test_the_jet_of_a_square_is_the_square_of_the_jet(order):
    z = jnp.asarray(np.random.default_rng(order).normal(size=(15, 7)))
    rows = (order + 1) * (order + 2) // 2
    outer = [z[0] ** 2, 2.0 * z[0], jnp.full(7, 2.0), jnp.zeros(7), jnp.zeros(7)]
    found = composed_jet([part[None] for part in outer[: order + 1]], z[:rows])
    np.testing.assert_allclose(found[:, 0], square_jet(z[:rows]), rtol=1e-13, atol=1e-13)


def test_the_jet_of_a_smooth_term_is_that_of_finite_differences():
    layer = bumpy_layer(3)
    curve = fit_curve(layer.values.ravel())
    term = SmoothTerm(fit_spline(layer), jnp.asarray(0.1), jnp.asarray(1.3), curve)
    rng = np.random.default_rng(1)
    x, y = rng.uniform(-20.0, 20.0, (2, 40))
    when = bracket_times(layer, np.zeros(40))

    def jet(x, y):
        return np.asarray(term.potential_jet(when, jnp.asarray(x), jnp.asarray(y), 4))

    h = 1e-4
    along_x = (jet(x + h, y) - jet(x - h, y)) / (2.0 * h)
    along_y = (jet(x, y + h) - jet(x, y - h)) / (2.0 * h)
    whole = jet(x, y)
    low, third = [(0, 1, 2), (1, 3, 4), (2, 4, 5)], [(3, 6, 7), (4, 7, 8), (5, 8, 9)]
    for row, by_x, by_y in (*low, *third, (6, 10, 11), (9, 13, 14)):
        for got, wanted in ((along_x[:, row], whole[:, by_x]), (along_y[:, row], whole[:, by_y])):
            # 1e-6: differences over 0.2 m
            np.testing.assert_allclose(got, wanted, atol=1e-6 * max(1.0, np.abs(wanted).max()))


# Fits --------------------------------------------------------------------------------------------


def bump(z):
    """A preference for one depth, and its slope: km^2/h."""
    h = 30.0 * np.exp(-((z - 0.3) ** 2) / (2.0 * 0.6**2))
    return h, -(z - 0.3) / 0.6**2 * h


def line(z):
    """The deeper the better."""
    return 15.0 * z, np.full_like(z, 15.0)


def velocity(response):
    centre, scale = SEA.depth_standard

    def field(xy, t):
        value, along_x, along_y = SEA.depth_m(xy[..., 0], xy[..., 1])
        slope = response((value - centre) / scale)[1] / scale
        return np.stack([slope * along_x, slope * along_y], axis=-1)

    return field


@cache
def depth():
    nodes = np.arange(-150.0, 150.1, 2.5)
    values = SEA.depth_m(*np.meshgrid(nodes, nodes))[0][None, ..., None]
    every = np.ones(values.shape[1:3], bool)
    return Layer("depth", "m", -150.0, -150.0, 2.5, np.zeros(1), values, every, ~every, 0.0, "made")


def model(tau=20.0):
    centre, scale = SEA.depth_standard
    layer = depth()
    curve = fit_curve((layer.values.ravel() - centre) / scale)
    term = SmoothTerm(fit_spline(layer), jnp.asarray(centre), jnp.asarray(scale), curve)
    bend = Parameter("depth.bend", "", False, 0.0, 0.0, tau, tau, reported=False, smooth="depth")
    return Model(
        motion=Diffusive(),
        field=VelocityField((term,), None),
        layers=((layer,), None),
        parameters=ParameterSet((
            Parameter("diffusion", "", True, 0.0, 0.0, np.inf, 1.0),
            Parameter("depth.linear", "", False, 0.0, 0.0, 50.0, 50.0),
            *(replace(bend, name=f"depth.bend_{i}") for i in range(curve.n_functions)),
            Parameter("error_scale", "1", True, 0.0, 0.0, np.inf, 1.0, fixed=True),
        )),
    )  # fmt: skip


@cache
def simulated(response, seed, hours=432.0):
    rng = np.random.default_rng(seed)
    paths = simulate(
        velocity(response), rng.normal(0.0, 20.0, (1, 2)), hours, rng, diffusion=1.5,
        step_minutes=2.0,
    )  # fmt: skip
    fixes = Tag((0.4, 0.6), (0.02, 0.06)).observe(paths.hours, paths.xy_km[0], rng)
    return TrackData("bent", fixes.hours, fixes.xy_km, fixes.covariance_km2)


@cache
def fitted(response, seed):
    data = simulated(response, seed)
    return fit_track(data, model(), FitSettings(0.5), np.arange(1.0, 430.0, 12.0))


def test_the_gradient_with_a_smooth_term_is_that_of_finite_differences():
    search = Search(simulated(bump, 1, 96.0), model(), 0.5, np.zeros(0))
    rng = np.random.default_rng(2)
    free = np.array([np.log(1.4), 5.0, *rng.normal(0.0, 20.0, 8)])
    gradient = search(free)[1]
    for i, step in enumerate([1e-4, 1e-2, *[1e-2] * 8]):
        up, down = free.copy(), free.copy()
        up[i] += step
        down[i] -= step
        slope = (search.value(up) - search.value(down)) / (2.0 * step)
        # 1e-5: the bound for a full model
        assert gradient[i] == pytest.approx(slope, rel=1e-5, abs=1e-5)


def evidence(fit, data, log_change):
    """Log marginal likelihood of tau, bends and other parameters integrated out by Laplace."""
    parameters = tuple(
        p if p.smooth is None else replace(p, prior_sd=p.prior_sd * np.exp(log_change))
        for p in fit.model.parameters.all
    )
    changed = replace(fit.model, parameters=ParameterSet(parameters))
    search = Search(data, changed, 0.5, np.arange(1.0, 430.0, 12.0))
    metric = np.linalg.inv(fit.states.theta_covariance)
    found = search.run(fit.states.theta, metric, 50, lambda iteration, decrement: None)
    assert found.converged
    at = smooth_groups(search.parameters)["depth"]
    log_tau = np.log(search.parameters.free[at[0]].prior_sd)
    hessian = search.hessian(found)
    return -search.value(found.at) - len(at) * log_tau - 0.5 * np.linalg.slogdet(hessian)[1]


def test_the_smoothness_is_where_the_marginal_likelihood_is_greatest():
    data, fit = simulated(bump, 3), fitted(bump, 3)
    assert fit.status is FitStatus.CONVERGED
    middle, less, more = (evidence(fit, data, change) for change in (0.0, -0.5, 0.5))
    assert middle > max(less, more)
    # a parabola through the three has its top near the middle; tau is settled to 0.05
    top = 0.25 * (more - less) / (2.0 * middle - less - more)
    assert abs(top) < 0.1


def test_a_bent_preference_is_found():
    """Twelve animals that like one depth: where it is, and how often the band holds the curve."""
    centre, scale = SEA.depth_standard
    inside, best = [], []
    for seed in range(20, 32):
        fit = fitted(bump, seed)
        assert fit.status is FitStatus.CONVERGED
        (curve,) = responses_of(fit, (TermName("depth", "depth", "m"),))
        low, high = np.quantile(curve.on_path, [0.05, 0.95])
        seen = (curve.at > low) & (curve.at < high)
        # h is less its value at the centre
        truth = bump((curve.at - centre) / scale)[0] - bump(0.0)[0]
        inside.append(((curve.lower95 <= truth) & (truth <= curve.upper95))[seen].mean())
        best.append((curve.at[seen][np.argmax(curve.h[seen])] - centre) / scale)
        bends = fit.parameters.set_index("parameter").loc["depth.bends"]
        assert bends["role"] == "chosen"
        assert 1.0 < bends["estimate"] < 6.0
    # a band holds its curve nearly everywhere or is off in a piece: twelve halves of an animal
    assert np.mean(inside) > 0.85
    assert abs(np.median(best) - 0.3) < 0.1


def test_a_straight_preference_comes_out_straight():
    fits = [fitted(line, seed) for seed in (5, 6, 7)]
    told = [fit.parameters.set_index("parameter").loc["depth.bends", "estimate"] for fit in fits]
    assert all(fit.status is FitStatus.CONVERGED for fit in fits)
    assert np.median(told) < 1.0
    for fit in fits:
        row = fit.parameters.set_index("parameter").loc["depth.linear"]
        assert abs(row["estimate"] - 15.0) < 3.0 * row["sd"]


def test_the_number_of_bends_lies_between_none_and_all():
    parameters = model(2.0).parameters
    size = len(parameters.free)
    assert effective_bends(parameters, np.zeros((size, size)))["depth"] == 8.0
    assert effective_bends(parameters, 4.0 * np.eye(size))["depth"] == 0.0
