"""The response to a preference term and its band."""

import dataclasses

import numpy as np
import pytest
from engine_standins import (
    bumpy_layer,
    distance_term,
    isotropic,
    layer_term,
    parameter,
    quick_fit,
    still_model,
    walk,
)

from trackfit.inference.parameters import ParameterSet
from trackfit.inference.task import Model, TrackData
from trackfit.layers.splines import fit_spline
from trackfit.motion import Diffusive, VelocityField
from trackfit.motion.terms import TermName
from trackfit.responses import POINTS, responses_of

NAMES = (
    TermName("warmth", "temperature", "degC"),
    TermName("deep", "depth", "m"),
    TermName("home", "distance", "km"),
)
CENTRE, SCALE = 0.4, 1.7


@pytest.fixture(scope="module")
def fit():
    """A humped term, a linear one of a changing layer, a distance; then a current and a scale."""
    layers = (bumpy_layer(1), bumpy_layer(2, times=4, last_hour=80.0), None)
    water = bumpy_layer(3, components=2)
    data, _ = walk(2, 60)
    model = Model(
        motion=Diffusive(),
        field=VelocityField(
            (
                layer_term(layers[0], centre=CENTRE, scale=SCALE, humped=True),
                layer_term(layers[1], centre=-1.0, scale=0.5),
                distance_term(1.0, 2.0),
            ),
            fit_spline(water),
        ),
        layers=(layers, water),
        parameters=ParameterSet(
            (
                parameter("diffusion", positive=True, sd=2.0),
                parameter("z", sd=10.0, reach=10.0),
                parameter("zz", sd=10.0, reach=10.0),
                parameter("depth", sd=10.0, reach=10.0),
                parameter("home", sd=1.0),
                parameter("drift", start=0.5, fixed=True),
                parameter("error_scale", positive=True, fixed=True),
            )
        ),
    )
    made = quick_fit(data, model)
    assert made.status.ok
    return made


def test_each_term_has_its_names(fit):
    found = responses_of(fit, NAMES)
    assert [(r.tag, r.term, r.layer, r.unit) for r in found] == [
        ("walker", "warmth", "temperature", "degC"),
        ("walker", "deep", "depth", "m"),
        ("walker", "home", "distance", "km"),
    ]


def test_the_preference_along_the_values_the_path_met(fit):
    warmth, deep, home = responses_of(fit, NAMES)
    theta = fit.states.theta
    z = (warmth.at - CENTRE) / SCALE
    assert np.allclose(warmth.h, theta[1] * z + theta[2] * z**2, rtol=0, atol=1e-12)
    assert np.allclose(deep.h, theta[3] * (deep.at + 1.0) / 0.5, rtol=0, atol=1e-12)
    assert np.allclose(home.h, theta[4] * home.at, rtol=0, atol=1e-12)
    x, y = fit.states.positions_km().T
    assert np.allclose(home.on_path, np.hypot(x - 1.0, y - 2.0), rtol=0, atol=1e-12)
    for response in (warmth, deep, home):
        assert response.on_path.shape == (fit.n_states,)
        assert np.allclose(
            response.at,
            np.linspace(response.on_path.min(), response.on_path.max(), POINTS),
            rtol=0,
            atol=1e-12,
        )


def test_the_values_on_the_path_are_the_layers_own(fit):
    """At a grid time of the changing layer's last slice, by its nodes around (roughly)."""
    _, deep, _ = responses_of(fit, NAMES)
    layer = fit.model.layers[0][1]
    hours = fit.states.problem.hours
    for i in (0, 30, 59):
        x, y = (fit.states.positions_km()[i] - [layer.x0_km, layer.y0_km]) / layer.spacing_km
        col, row = int(x), int(y)
        around = layer.values[:, row : row + 2, col : col + 2, 0]
        k = min(int(np.searchsorted(layer.hours, hours[i], side="right")) - 1, 2)
        slices = around[k : k + 2]
        slack = 0.2 * np.abs(np.gradient(layer.values[..., 0], axis=(1, 2))).max()
        assert slices.min() - slack < deep.on_path[i] < slices.max() + slack


def test_the_band_is_that_of_draws_of_the_parameters(fit):
    """10,000 draws of the amplitudes, 2.5 % and 97.5 % quantiles: 3 % of the width by chance."""
    states = fit.states
    theta = np.random.default_rng(0).multivariate_normal(
        states.theta, states.theta_covariance, size=10_000
    )
    for response, columns in zip(responses_of(fit, NAMES), ((1, 2), (3,), (4,)), strict=True):
        centre, scale = {1: (CENTRE, SCALE), 3: (-1.0, 0.5), 4: (0.0, 1.0)}[columns[0]]
        z = (response.at - centre) / scale
        curves = sum(theta[:, c, None] * z ** (power + 1) for power, c in enumerate(columns))
        low, high = np.quantile(curves, [0.025, 0.975], axis=0)
        width = (response.upper95 - response.lower95).max()
        assert np.abs(response.lower95 - low).max() < 0.05 * width
        assert np.abs(response.upper95 - high).max() < 0.05 * width
        middle = 0.5 * (response.lower95 + response.upper95)
        assert np.allclose(middle, response.h, rtol=0, atol=1e-12 * width + 1e-12)


def test_no_response_of_nothing():
    data, _ = walk(1, 5)
    few = TrackData("lonely", data.hours[:1], data.at_km[:1], isotropic([1.0]))
    assert responses_of(quick_fit(few, still_model()), ()) == []
    plain = quick_fit(data, still_model(weak=True))
    assert responses_of(plain, ()) == []
    with pytest.raises(ValueError, match="zip"):
        responses_of(dataclasses.replace(plain), NAMES)
