"""The quintic splines of layers and their partial derivatives."""

from importlib.metadata import PackageNotFoundError, files
from pathlib import Path

import jax.numpy as jnp
import numpy as np
import pytest
from engine_standins import bumpy_layer, field_layer, grid_layer, still
from hypothesis import given
from hypothesis import strategies as st
from numpy.polynomial.polynomial import polyder, polyval2d
from scipy.interpolate import NdBSpline, RectBivariateSpline, make_interp_spline

from trackfit.layers.splines import (
    BLOCK,
    JET_ORDERS,
    JET_ROW,
    bracket_times,
    fit_spline,
    jet_rows,
    spline_jet,
)


def jets(layer, x, y, order=4, hours=None):
    """Rows of the jet as numpy, (components, rows, points)."""
    x, y = np.atleast_1d(np.asarray(x, float)), np.atleast_1d(np.asarray(y, float))
    when = still(x.size) if hours is None else bracket_times(layer, np.asarray(hours, float))
    return np.asarray(spline_jet(fit_spline(layer), when, jnp.asarray(x), jnp.asarray(y), order))


def random_layer(seed=0, times=1, ny=14, nx=17, components=1, spacing_km=2.5):
    values = np.random.default_rng(seed).normal(size=(times, ny, nx, components))
    return grid_layer(
        values, spacing_km=spacing_km, hours=10.0 * np.arange(times), corner_km=(-7.0, 3.0)
    )


def inner_points(layer, seed=1, count=200, low=0.2, high=0.8):
    """Points well inside cells, so that a short stencil of differences stays in one cell."""
    rng = np.random.default_rng(seed)
    ny, nx = layer.covered.shape
    cell = rng.integers(0, [nx - 1, ny - 1], size=(count, 2))
    at = (cell + rng.uniform(low, high, size=(count, 2))) * layer.spacing_km
    return at[:, 0] + layer.x0_km, at[:, 1] + layer.y0_km


def test_the_rows_of_a_jet_are_all_partial_derivatives_up_to_order_four():
    assert [jet_rows(order) for order in range(5)] == [1, 3, 6, 10, 15]
    assert len(set(JET_ORDERS)) == 15
    for order in range(5):
        assert {a + b for a, b in JET_ORDERS[: jet_rows(order)]} == set(range(order + 1))
    assert all(JET_ORDERS[row] == orders for orders, row in JET_ROW.items())


def test_the_nodes_keep_their_values_on_every_slice_and_component():
    layer = random_layer(times=3, components=2)
    ny, nx = layer.covered.shape
    row, col = np.divmod(np.arange(ny * nx), nx)
    for k, hour in enumerate(layer.hours):
        found = jets(
            layer,
            layer.x0_km + col * layer.spacing_km,
            layer.y0_km + row * layer.spacing_km,
            0,
            np.full(ny * nx, hour),
        )
        assert np.allclose(found[:, 0], layer.values[k, row, col].T, rtol=0, atol=1e-12)


@pytest.mark.parametrize("orders", JET_ORDERS[1:])
def test_each_partial_derivative_is_the_difference_of_a_lower_one(orders):
    """Seven-point differences are exact for the quintics of one cell: only rounding is left.

    The step, a twentieth of a cell, keeps the stencil inside the cell and rounding near 1e-13.
    """
    layer = random_layer(times=2)
    x, y = inner_points(layer)
    hours = np.linspace(0.0, 10.0, x.size)
    step = 0.05 * layer.spacing_km
    exact = jets(layer, x, y, 4, hours)[0, JET_ROW[orders]]
    for axis in (0, 1):
        lower = (orders[0] - (axis == 0), orders[1] - (axis == 1))
        if min(lower) < 0:
            continue

        def shifted(multiple, axis=axis, lower=lower):
            move = [0.0, 0.0]
            move[axis] = multiple * step
            return jets(layer, x + move[0], y + move[1], 4, hours)[0, JET_ROW[lower]]

        pairs = [shifted(m) - shifted(-m) for m in (1, 2, 3)]
        difference = (45.0 * pairs[0] - 9.0 * pairs[1] + pairs[2]) / (60.0 * step)
        assert np.allclose(difference, exact, rtol=0, atol=1e-11)
    assert np.abs(exact).max() > 1e-3


@pytest.mark.parametrize("axis", [0, 1])
def test_everything_in_a_jet_is_continuous_across_cells(axis):
    """And the derivative after the last one is not: it jumps from cell to cell."""
    layer = random_layer()
    knots = layer.spacing_km * np.arange(1, 13)
    across = np.full(knots.size, 4.3)
    gap = 1e-9

    def beside(shift):
        at = [knots + shift, across] if axis == 0 else [across, knots + shift]
        return jets(layer, layer.x0_km + at[0], layer.y0_km + at[1])[0]

    left, right = beside(-gap), beside(gap)
    for row in JET_ROW.values():
        # over the gap a continuous row moves by 2e-9 times the next derivative (a few at most)
        assert np.abs(left[row] - right[row]).max() < 1e-7
    highest = JET_ROW[(4, 0) if axis == 0 else (0, 4)]
    before, after = (sign * (beside(sign * 0.3) - beside(sign * 0.1)) / 0.2 for sign in (-1, 1))
    assert np.abs(before[highest] - after[highest]).min() > 1e-3


def flat(columns):
    """No first and no third derivative at either end, for each of some columns."""
    nothing = [(order, np.zeros(columns)) for order in (1, 3)]
    return (nothing, nothing)


def clamped_spline(layer, component=0):
    """scipy's spline through the nodes, its odd derivatives zero at the border (mirrored)."""
    ny, nx = layer.covered.shape
    y = layer.y0_km + layer.spacing_km * np.arange(ny)
    x = layer.x0_km + layer.spacing_km * np.arange(nx)
    along_y = make_interp_spline(y, layer.values[0, ..., component], 5, bc_type=flat(nx))
    along_x = make_interp_spline(x, along_y.c.T, 5, bc_type=flat(ny + 4))
    return NdBSpline((along_y.t, along_x.t), np.ascontiguousarray(along_x.c.T), 5)


def test_all_partials_against_a_general_spline_library_up_to_the_border():
    """scipy.interpolate solves the interpolation by a banded system on its own knots."""
    layer = random_layer(components=2)
    x, y = inner_points(layer, count=400, low=0.0, high=0.999)
    ours = jets(layer, x, y)
    for component in (0, 1):
        theirs = clamped_spline(layer, component)
        for (a, b), row in JET_ROW.items():
            expected = theirs(np.stack([y, x], axis=1), nu=(b, a))
            assert np.allclose(ours[component, row], expected, rtol=1e-9, atol=1e-10), (a, b)


def test_interior_against_fitpack_with_another_border():
    """40 nodes from the border its treatment no longer matters (0.43^40 = 2e-15)."""
    layer = random_layer(ny=90, nx=92, spacing_km=1.0)
    rng = np.random.default_rng(5)
    x, y = layer.x0_km + rng.uniform(40, 50, 300), layer.y0_km + rng.uniform(40, 50, 300)
    fitpack = RectBivariateSpline(
        layer.y0_km + np.arange(90.0),
        layer.x0_km + np.arange(92.0),
        layer.values[0, ..., 0],
        kx=5,
        ky=5,
    )
    ours = jets(layer, x, y)[0]
    for (a, b), row in JET_ROW.items():
        expected = fitpack.ev(y, x, dx=b, dy=a)
        assert np.allclose(ours[row], expected, rtol=0, atol=1e-10)


def test_quintic_polynomials_are_reproduced_with_all_their_derivatives():
    """x^i y^j with i and j up to five, by numpy's own derivatives of polynomials."""
    rng = np.random.default_rng(2)
    power = np.add.outer(np.arange(6), np.arange(6))
    coefficients = rng.normal(size=(6, 6)) / 40.0**power
    layer = field_layer(lambda x, y, t: polyval2d(x, y, coefficients))
    x, y = rng.uniform(-15, 15, (2, 100))
    found = jets(layer, x, y)[0]
    for (a, b), row in JET_ROW.items():
        slopes = polyder(polyder(coefficients, a, axis=0), b, axis=1)
        # values reach 1000 at the border: 1e-10 is rounding
        assert np.allclose(found[row], polyval2d(x, y, slopes), rtol=0, atol=1e-10), (a, b)


def test_beyond_the_border_the_nearest_edge_holds():
    layer = random_layer()
    ny, nx = layer.covered.shape
    far_x = layer.x0_km + (nx - 1) * layer.spacing_km
    far_y = layer.y0_km + (ny - 1) * layer.spacing_km
    inside = jets(layer, [layer.x0_km, far_x, 1.3, far_x], [9.1, 8.2, far_y, far_y])
    outside = jets(layer, [layer.x0_km - 500.0, far_x + 1e-6, 1.3, far_x + 3], [9.1, 8.2, 99, 77])
    assert np.array_equal(inside, outside)


def test_no_odd_derivative_across_the_border():
    layer = random_layer()
    y = layer.y0_km + np.linspace(0.0, 30.0, 50)
    for x in (layer.x0_km, layer.x0_km + 16 * layer.spacing_km):
        found = jets(layer, np.full(50, x), y)[0]
        for orders in ((1, 0), (1, 1), (1, 2), (1, 3), (3, 0), (3, 1)):
            assert np.abs(found[JET_ROW[orders]]).max() < 1e-13, orders


@pytest.mark.parametrize("flip", ["x", "y", "swap"])
def test_mirrored_and_transposed_layers(flip):
    values = np.random.default_rng(3).normal(size=(1, 12, 12, 1))
    turned = {
        "x": values[:, :, ::-1],
        "y": values[:, ::-1],
        "swap": np.swapaxes(values, 1, 2),
    }[flip]
    x, y = np.random.default_rng(4).uniform(-5.5, 5.5, (2, 60))
    places = {"x": (-x, y), "y": (x, -y), "swap": (y, x)}[flip]
    plain, other = jets(grid_layer(values), x, y)[0], jets(grid_layer(turned), *places)[0]
    for (a, b), row in JET_ROW.items():
        same = JET_ROW[b, a] if flip == "swap" else row
        sign = {"x": (-1) ** a, "y": (-1) ** b, "swap": 1}[flip]
        assert np.allclose(plain[row], sign * other[same], rtol=0, atol=1e-11)


def test_between_slices_everything_is_linear_in_time():
    layer = random_layer(times=3)
    x, y = inner_points(layer, count=50)
    slices = [jets(layer, x, y, 4, np.full(50, hour)) for hour in layer.hours]
    for hour, k, weight in [(2.5, 0, 0.25), (10.0, 1, 0.0), (17.0, 1, 0.7), (20.0, 2, 0.0)]:
        later = slices[min(k + 1, 2)]
        expected = (1 - weight) * slices[k] + weight * later
        found = jets(layer, x, y, 4, np.full(50, hour))
        assert np.allclose(found, expected, rtol=0, atol=1e-12)


@given(st.lists(st.floats(-50.0, 80.0), min_size=1, max_size=20))
def test_brackets_hold_their_moment_or_the_nearest_slice(hours):
    layer = grid_layer(np.zeros((4, 3, 3, 1)), hours=(0.0, 1.0, 7.5, 30.0))
    earlier, weight = (np.asarray(part) for part in bracket_times(layer, np.array(hours)))
    assert ((weight >= 0) & (weight <= 1)).all()
    assert ((earlier >= 0) & (earlier <= 2)).all()
    blended = (1 - weight) * layer.hours[earlier] + weight * layer.hours[earlier + 1]
    assert np.allclose(blended, np.clip(hours, 0.0, 30.0), rtol=0, atol=1e-12)


def test_a_fixed_layer_is_the_same_at_all_times():
    layer = random_layer()
    earlier, weight = bracket_times(layer, np.array([-1e9, 0.0, 1e9]))
    assert not np.asarray(earlier).any()
    assert not np.asarray(weight).any()


def test_the_components_of_a_current_do_not_touch_each_other():
    layer = random_layer(times=2, components=2)
    x, y = inner_points(layer, count=80)
    hours = np.linspace(0, 10, 80)
    both = jets(layer, x, y, 4, hours)
    for component in (0, 1):
        alone = grid_layer(
            layer.values[..., component : component + 1],
            spacing_km=layer.spacing_km,
            hours=layer.hours,
            corner_km=(layer.x0_km, layer.y0_km),
        )
        assert np.allclose(both[component], jets(alone, x, y, 4, hours)[0], rtol=0, atol=1e-12)


@pytest.mark.parametrize("order", [0, 1, 2, 3])
def test_a_lower_order_gives_the_first_rows_of_a_higher_one(order):
    layer = bumpy_layer(0, times=3, components=2)
    x, y = np.random.default_rng(1).uniform(-100, 100, (2, 40))
    hours = np.linspace(0, 300, 40)
    whole, part = jets(layer, x, y, 4, hours), jets(layer, x, y, order, hours)
    assert part.shape[1] == jet_rows(order)
    assert np.allclose(part, whole[:, : jet_rows(order)], rtol=0, atol=1e-13)


def test_the_smallest_layer_rises_from_edge_to_edge():
    """Two nodes, no odd derivative at either: 5/2 f^2 - 5/2 f^4 + f^5 between them."""
    layer = grid_layer(np.array([[[0.0, 1.0], [0.0, 1.0]]])[..., None])
    f = np.linspace(0, 1, 9)
    found = jets(layer, f - 0.5, np.full(9, 0.2))[0]
    assert np.allclose(found[JET_ROW[0, 0]], 2.5 * f**2 - 2.5 * f**4 + f**5, rtol=0, atol=1e-13)
    assert np.allclose(found[JET_ROW[1, 0]], 5 * f - 10 * f**3 + 5 * f**4, rtol=0, atol=1e-13)
    assert np.allclose(found[JET_ROW[0, 1]], 0.0, rtol=0, atol=1e-13)


def packaged(package: str, ending: str) -> Path:
    try:
        found = [file for file in files(package) or [] if str(file).endswith(ending)]
    except PackageNotFoundError:
        pytest.skip(f"the test data package {package} is not installed")
    return Path(str(found[0].locate()))


def test_the_gradient_of_a_potential_on_the_sphere():
    """windspharm 2.0.0, tests/data/regular: a spectral gradient on the 2.5 degree grid.

    Central differences miss it by 1.4 % and 2.1 % rms inside 60 degrees (recomputed for this
    project); the spline's own slopes at the same nodes must do better.
    """
    chi, east, north = (
        np.load(packaged("windspharm", f"tests/data/regular/{name}.ref.npy")).squeeze()[::-1]
        for name in ("chi", "chigradu", "chigradv")
    )
    lat = np.arange(-90.0, 90.1, 2.5)
    layer = grid_layer(chi[None, ..., None], spacing_km=2.5, corner_km=(0.0, -90.0))
    inside = np.abs(lat) < 60.0
    row, col = np.meshgrid(np.flatnonzero(inside), np.arange(12, 132), indexing="ij")
    found = jets(layer, 2.5 * col.ravel(), lat[row.ravel()], 1)[0]
    radius_m = 6.3712e6
    per_radian = 180.0 / np.pi / radius_m
    ours = {
        "east": found[1] * per_radian / np.cos(np.radians(lat[row.ravel()])),
        "north": found[2] * per_radian,
    }
    for name, theirs in (("east", east), ("north", north)):
        theirs = theirs[row, col].ravel()
        rms = np.sqrt(np.mean((ours[name] - theirs) ** 2) / np.mean(theirs**2))
        assert rms < 0.005, (name, rms)


def test_very_many_points_are_each_their_own():
    """Blocks of points change nothing but the time it takes."""
    layer = bumpy_layer(2, times=3, components=2)
    spline, rng = fit_spline(layer), np.random.default_rng(8)
    points = 2 * BLOCK + 5
    x, y = rng.uniform(-20.0, 20.0, (2, points))
    when = bracket_times(layer, rng.uniform(layer.hours[0], layer.hours[-1], points))
    whole = np.asarray(spline_jet(spline, when, jnp.asarray(x), jnp.asarray(y), 2))
    some = np.r_[0:3, BLOCK - 1 : BLOCK + 2, points - 2 : points]
    part = type(when)(*(values[some] for values in when))
    alone = np.asarray(spline_jet(spline, part, jnp.asarray(x[some]), jnp.asarray(y[some]), 2))
    np.testing.assert_allclose(whole[..., some], alone, rtol=1e-12, atol=1e-12)
