"""The velocity field: jets of squares and roots, terms, and adjoints."""

import jax.numpy as jnp
import numpy as np
import pytest
from engine_standins import bumpy_layer, distance_term, layer_term, still

from trackfit.layers.splines import (
    JET_ORDERS,
    JET_ROW,
    bracket_times,
    fit_spline,
    jet_rows,
    spline_jet,
)
from trackfit.motion import FieldTimes, VelocityField
from trackfit.motion.velocity import (
    SOFTENING_KM,
    amplitude_gradient,
    evaluate_basis,
    shift_gradient,
    square_jet,
    square_root_jet,
    velocity_jet,
)

RNG = np.random.default_rng(7)
X, Y = RNG.uniform(-60, 60, (2, 40))
HOURS = np.linspace(0.0, 300.0, 40)


def exponential_jet(a, b, x, y):
    """All partials of exp(a x + b y)."""
    return np.stack([a**i * b**j * np.exp(a * x + b * y) for i, j in JET_ORDERS])


def five_point(function, axis, step):
    """Derivative along an axis: error step^4 f5 / 30."""

    def at(multiple):
        move = [0.0, 0.0]
        move[axis] = multiple * step
        return np.asarray(function(*move))

    return (8.0 * (at(1) - at(-1)) - (at(2) - at(-2))) / (12.0 * step)


def test_the_square_of_an_exponential():
    f = exponential_jet(0.3, -0.7, X / 50, Y / 50)
    expected = exponential_jet(0.6, -1.4, X / 50, Y / 50)
    assert np.allclose(square_jet(jnp.asarray(f)), expected, rtol=1e-13, atol=0)


def test_the_root_of_an_exponential():
    q = exponential_jet(0.6, -1.4, X / 50, Y / 50)
    expected = exponential_jet(0.3, -0.7, X / 50, Y / 50)
    assert np.allclose(square_root_jet(jnp.asarray(q)), expected, rtol=1e-12, atol=0)


@pytest.mark.parametrize("order", [1, 2, 3, 4])
def test_the_root_undoes_the_square(order):
    f = RNG.normal(size=(jet_rows(order), 30))
    f[0] = np.abs(f[0]) + 1.0
    back = square_root_jet(square_jet(jnp.asarray(f)))
    assert np.allclose(back, f, rtol=0, atol=1e-11)


def distance_jet(dx=0.0, dy=0.0):
    return np.asarray(
        distance_term(3.0, -2.0).potential_jet(
            still(X.size), jnp.asarray(X / 10 + dx), jnp.asarray(Y / 10 + dy), 4
        )
    )[0]


def test_the_distance_is_softened_at_its_point():
    term = distance_term(3.0, -2.0)
    here = np.asarray(
        term.potential_jet(still(2), jnp.asarray([3.0, 6.0]), jnp.asarray([-2.0, 2.0]), 1)
    )[0]
    assert np.allclose(here[0], [SOFTENING_KM, np.sqrt(25 + SOFTENING_KM**2)], rtol=1e-14)
    assert here.shape == (3, 2)
    assert np.array_equal(here[1:, 0], [0.0, 0.0])
    assert np.allclose(here[1:, 1], np.array([3.0, 4.0]) / here[0, 1], rtol=1e-14)


@pytest.mark.parametrize("orders", JET_ORDERS[1:])
def test_the_partials_of_the_distance_are_differences_of_lower_ones(orders):
    exact = distance_jet()[JET_ROW[orders]]
    for axis in (0, 1):
        lower = (orders[0] - (axis == 0), orders[1] - (axis == 1))
        if min(lower) >= 0:
            found = five_point(lambda *move: distance_jet(*move), axis, 1e-2)[JET_ROW[lower]]
            # step^4 / 30 = 3e-10 times derivatives of order nine at most, near 1000 at the point
            assert np.allclose(found, exact, rtol=0, atol=1e-6)


def test_far_away_the_distance_is_the_plain_one():
    term = distance_term(0.0, 0.0)
    jet = np.asarray(term.potential_jet(still(1), jnp.asarray([3e4]), jnp.asarray([4e4]), 2))[0]
    # the softening adds 1/(2 r) = 1e-5 km at 50,000 km
    assert np.allclose(jet[:, 0], [5e4 + 1e-5, 0.6, 0.8, *np.array([16, -12, 9]) / 25 / 5e4])


def test_a_humped_term_holds_the_layer_and_its_square():
    layer = bumpy_layer(1, times=4)
    when = bracket_times(layer, HOURS)
    place = (when, jnp.asarray(X), jnp.asarray(Y), 4)
    f = np.asarray(spline_jet(fit_spline(layer), *place))[0]
    z, squared = np.asarray(
        layer_term(layer, centre=0.4, scale=2.0, humped=True).potential_jet(*place)
    )
    value = (f[0] - 0.4) / 2.0
    assert np.allclose(z[0], value, rtol=0, atol=1e-14)
    assert np.allclose(z[1:], f[1:] / 2.0, rtol=0, atol=1e-14)
    dx, dy = f[JET_ROW[1, 0]] / 2, f[JET_ROW[0, 1]] / 2
    dxx, dxy = f[JET_ROW[2, 0]] / 2, f[JET_ROW[1, 1]] / 2
    assert np.allclose(squared[0], value**2, rtol=0, atol=1e-13)
    assert np.allclose(squared[JET_ROW[1, 0]], 2 * value * dx, rtol=0, atol=1e-13)
    assert np.allclose(squared[JET_ROW[2, 0]], 2 * dx**2 + 2 * value * dxx, rtol=0, atol=1e-13)
    assert np.allclose(squared[JET_ROW[1, 1]], 2 * dx * dy + 2 * value * dxy, rtol=0, atol=1e-13)
    single = layer_term(layer, centre=0.4, scale=2.0)
    assert np.array_equal(np.asarray(single.potential_jet(*place))[0], z)


LAYERS = (bumpy_layer(1), bumpy_layer(2, times=5), None)
CURRENT = bumpy_layer(3, times=5, components=2)
FIELD = VelocityField(
    (
        layer_term(LAYERS[0], centre=0.1, scale=0.9, humped=True),
        layer_term(LAYERS[1]),
        distance_term(1.0, 2.0),
    ),
    fit_spline(CURRENT),
)
AMPLITUDES = jnp.asarray([20.0, -8.0, 15.0, -0.5, 0.7])


def basis_at(x, y, order, field=FIELD):
    times = FieldTimes(
        (still(x.size), bracket_times(LAYERS[1], HOURS), still(x.size))[: len(field.terms)],
        None if field.current is None else bracket_times(CURRENT, HOURS),
    )
    return evaluate_basis(field, times, jnp.asarray(x), jnp.asarray(y), order)


def inside_cells():
    """Points at the middle of cells (spacing 4 km, nodes at -118, -114, ... km)."""
    return 4.0 * np.round(X / 4.0), 4.0 * np.round(Y / 4.0)


def velocity(dx=0.0, dy=0.0, order=3):
    x, y = inside_cells()
    return np.asarray(velocity_jet(AMPLITUDES, basis_at(x + dx, y + dy, order), x.size, order))


def test_amplitudes_are_counted():
    assert FIELD.n_amplitudes == 5
    assert VelocityField((), None).n_amplitudes == 0
    assert VelocityField((), fit_spline(CURRENT)).n_amplitudes == 1


def test_the_velocity_is_the_slope_of_the_preference_and_the_share_of_the_current():
    x, y = inside_cells()
    first, second, far = (
        np.asarray(spline_jet(fit_spline(LAYERS[0]), still(40), *map(jnp.asarray, (x, y)), 1))[0],
        np.asarray(
            spline_jet(
                fit_spline(LAYERS[1]), bracket_times(LAYERS[1], HOURS), *map(jnp.asarray, (x, y)), 1
            )
        )[0],
        np.sqrt((x - 1) ** 2 + (y - 2) ** 2 + 1),
    )
    water = np.asarray(
        spline_jet(fit_spline(CURRENT), bracket_times(CURRENT, HOURS), *map(jnp.asarray, (x, y)), 0)
    )[:, 0]
    z = (first[0] - 0.1) / 0.9
    for axis, away in enumerate((x - 1, y - 2)):
        slope = first[1 + axis] / 0.9
        expected = (
            20.0 * slope
            - 8.0 * 2 * z * slope
            + 15.0 * second[1 + axis]
            - 0.5 * away / far
            + 0.7 * water[axis]
        )
        assert np.allclose(velocity()[axis, 0], expected, rtol=0, atol=1e-12)


@pytest.mark.parametrize("orders", JET_ORDERS[1:10])
def test_the_velocity_has_the_derivatives_it_says(orders):
    exact = velocity()[:, JET_ROW[orders]]
    for axis in (0, 1):
        lower = (orders[0] - (axis == 0), orders[1] - (axis == 1))
        if min(lower) >= 0:
            found = five_point(velocity, axis, 0.1)[:, JET_ROW[lower]]
            # in a cell the splines' part is exact; the squares and the distance leave
            # step^4 f5 / 30 = 3e-6 f5, and f5 is small away from the point
            assert np.allclose(found, exact, rtol=0, atol=2e-6 * max(1, np.abs(exact).max()))


@pytest.mark.parametrize("rows", [1, 3, 6])
def test_the_amplitudes_gradient_is_the_adjoint_of_the_velocity(rows):
    """<c, U a> = <U' c, a> for the linear map U from amplitudes to the field's rows."""
    x, y = inside_cells()
    basis = basis_at(x, y, 3)
    cotangent = RNG.normal(size=(2, rows, x.size))
    order = {1: 0, 3: 1, 6: 2}[rows]
    direction = jnp.asarray(RNG.normal(size=5))
    moved = np.asarray(velocity_jet(direction, basis, x.size, order))
    back = np.asarray(amplitude_gradient(jnp.asarray(cotangent), basis))
    assert back.shape == (5,)
    assert np.vdot(cotangent, moved) == pytest.approx(back @ np.asarray(direction), rel=1e-11)


@pytest.mark.parametrize(
    ("field", "count"),
    [
        (VelocityField((), None), 0),
        (VelocityField((), fit_spline(CURRENT)), 1),
        (VelocityField((layer_term(LAYERS[0]),), None), 1),
    ],
)
def test_adjoint_of_a_field_with_parts_missing(field, count):
    x, y = inside_cells()
    basis = basis_at(x, y, 2, field)
    cotangent = jnp.asarray(RNG.normal(size=(2, 6, x.size)))
    direction = jnp.asarray(RNG.normal(size=count))
    back = np.asarray(amplitude_gradient(cotangent, basis))
    assert back.shape == (count,)
    moved = velocity_jet(direction, basis, x.size, 2)
    assert float(jnp.vdot(cotangent, moved)) == pytest.approx(float(back @ direction), rel=1e-11)


def test_the_shift_gradient_is_the_slope_in_the_positions():
    """d/de <c, field(x + e d)> at e = 0, by five-point differences inside the cells."""
    x, _ = inside_cells()
    cotangent = RNG.normal(size=(2, 6, x.size))
    direction = RNG.normal(size=(2, x.size))
    found = np.asarray(shift_gradient(jnp.asarray(cotangent), jnp.asarray(velocity())))
    step = 0.05

    def along(multiple):
        rows = velocity(*(multiple * step * direction))[:, :6]
        return np.vdot(cotangent, rows)

    slope = (8.0 * (along(1) - along(-1)) - (along(2) - along(-2))) / (12.0 * step)
    # as above: the squares' and the distance's fifth derivatives times step^4 / 30 = 2e-7
    assert slope == pytest.approx(np.vdot(found, direction), rel=1e-6)
