"""The search for the parameters' mode."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from trackfit.inference.optimise import (
    MAX_IDLE,
    MAX_REJECTED,
    Rejected,
    difference_hessian,
    minimise,
    nearest_positive,
)
from trackfit.inference.parameters import ParameterSet


def search(function, start, *, metric=None, reach=1.0, tolerance=1e-10, max_iterations=200, **more):
    start = np.asarray(start, float)
    return minimise(
        function,
        start,
        np.eye(start.size) if metric is None else metric,
        np.full(start.size, reach),
        tolerance=tolerance,
        max_iterations=max_iterations,
        **more,
    )


def rosenbrock(x):
    """Minimum 0 at (1, 1) (Rosenbrock 1960)."""
    a, b = x
    value = (1 - a) ** 2 + 100 * (b - a**2) ** 2
    return value, np.array([-2 * (1 - a) - 400 * a * (b - a**2), 200 * (b - a**2)])


def spd(seed, size):
    root = np.random.default_rng(seed).normal(size=(size, size))
    return root @ root.T + 0.2 * np.eye(size)


@given(st.integers(0, 1000), st.integers(1, 7))
def test_a_quadratic(seed, size):
    rng = np.random.default_rng(seed)
    hessian, lowest = spd(seed, size), rng.normal(size=size) * 5
    found = search(lambda x: (0.5 * (x - lowest) @ hessian @ (x - lowest), hessian @ (x - lowest)),
                   np.zeros(size), reach=100.0)  # fmt: skip
    assert found.converged
    # the metric is a quasi-Newton one: 1e-10 promised leaves 1e-5 times a few
    assert np.allclose(found.at, lowest, rtol=0, atol=2e-3)
    assert found.value < 1e-5


def test_the_newton_metric_ends_at_once():
    hessian, lowest = spd(1, 4), np.array([1.0, -2.0, 0.5, 3.0])
    found = search(
        lambda x: (0.5 * (x - lowest) @ hessian @ (x - lowest), hessian @ (x - lowest)),
        np.zeros(4),
        metric=hessian,
        reach=100.0,
    )
    assert (found.converged, found.iterations) == (True, 1)
    assert np.allclose(found.at, lowest, rtol=0, atol=1e-12)


def test_a_curved_valley():
    found = search(rosenbrock, [-1.2, 1.0])
    assert found.converged
    assert found.at == pytest.approx([1.0, 1.0], abs=1e-3)
    assert np.linalg.eigvalsh(found.metric).min() > 0


def test_no_step_is_longer_than_the_reach():
    seen = []

    def slope(x):
        seen.append(x)
        return 1e6 * float(np.sum(x)), np.full(2, 1e6)

    found = search(slope, [0.0, 0.0], reach=0.3, max_iterations=5)
    assert not found.converged
    assert np.abs(np.diff(seen, axis=0)).max() <= 0.3 + 1e-12


def test_points_without_a_value_are_stepped_back_from():
    """Minimum at 0.5 with a wall at 0.6."""

    def walled(x):
        if x[0] > 0.6:
            raise Rejected
        return (x[0] - 0.5) ** 2, np.array([2 * (x[0] - 0.5)])

    found = search(walled, [-9.0], reach=30.0, metric=np.array([[0.1]]))
    assert found.converged
    assert found.at == pytest.approx([0.5], abs=1e-4)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_values_that_are_not_finite_are_stepped_back_from(bad):
    def patchy(x):
        value = bad if x[0] > 0.6 else (x[0] - 0.5) ** 2
        return value, np.array([2 * (x[0] - 0.5)])

    found = search(patchy, [-9.0], reach=30.0, metric=np.array([[0.1]]))
    assert found.converged
    assert found.at == pytest.approx([0.5], abs=1e-4)


def test_a_search_among_holes_ends_with_its_budget():
    """Every second try has no value: steps succeed, but the search does not go on for ever."""
    calls = []

    def holed(x):
        calls.append(x)
        if len(calls) % 2 == 0:
            raise Rejected
        return float(-x[0]), np.array([-1.0])

    found = minimise(
        holed, np.zeros(1), np.eye(1), np.ones(1), tolerance=1e-8, max_iterations=10_000
    )
    assert not found.converged
    assert len(calls) == 2 * MAX_REJECTED


def test_steps_that_gain_nothing_end_the_search():
    """A slope that the values do not follow: noise lets the steps pass, nothing is gained."""
    calls = []

    def flat(x):
        calls.append(x)
        return 1.0, np.array([1e-6])

    found = minimise(
        flat, np.zeros(1), 1e-9 * np.eye(1), 1e-3 * np.ones(1), tolerance=1e-8, max_iterations=500
    )
    assert found.iterations == MAX_IDLE
    assert len(calls) == 1 + MAX_IDLE


def test_no_value_at_the_start():
    def nowhere(x):
        raise Rejected

    with pytest.raises(Rejected, match=r"^$"):
        search(nowhere, [0.0])
    with pytest.raises(Rejected, match=r"^$"):
        search(lambda x: (np.nan, x), [0.0])
    with pytest.raises(Rejected, match=r"^$"):
        search(lambda x: (1.0, x * np.nan), [0.0])


def test_the_search_ends_where_it_may_not_go_on():
    found = search(rosenbrock, [-1.2, 1.0], max_iterations=3)
    assert (found.converged, found.iterations) == (False, 3)
    assert found.value < rosenbrock(np.array([-1.2, 1.0]))[0]


def test_a_gradient_that_lies_is_no_minimum():
    """No step downhill exists although a gain is promised."""
    found = search(lambda x: (float(x[0]), np.array([-1.0])), [0.0])
    assert not found.converged
    assert found.decrement == pytest.approx(0.5)


def test_a_slope_without_end_is_no_minimum_and_no_crash():
    """A straight slope: every update shrinks the modelled curvature until none is left."""
    found = search(lambda x: (float(x[0] + x[1]), np.ones(2)), [0.0, 0.0], max_iterations=2000)
    assert not found.converged


def test_at_the_minimum_nothing_is_done():
    found = search(lambda x: (0.0, np.zeros(2)), [1.0, 2.0])
    assert (found.converged, found.iterations, found.decrement) == (True, 0, 0.0)
    assert found.at.tolist() == [1.0, 2.0]


def test_progress_is_told_for_every_iteration():
    told = []
    found = search(rosenbrock, [-1.2, 1.0], progress=lambda *what: told.append(what))
    assert [iteration for iteration, _ in told] == list(range(found.iterations + 1))
    assert told[-1][1] == found.decrement < 1e-10


def test_the_hessian_by_differences():
    """Central differences of a cubic's gradient are exact but for step^2 f4 = 0."""
    at = np.array([0.3, -0.4])
    found = difference_hessian(
        lambda x: np.array([3 * x[0] ** 2 + x[1], x[0] + 6 * x[1]]), at, np.array([0.1, 0.01])
    )
    assert np.allclose(found, [[1.8, 1.0], [1.0, 6.0]], rtol=0, atol=1e-12)


@given(st.integers(0, 10_000), st.integers(1, 6))
def test_a_metric_made_positive(seed, size):
    rng = np.random.default_rng(seed)
    hessian = rng.normal(size=(size, size)) * 10.0 ** rng.uniform(-6, 6)
    hessian = hessian + hessian.T
    floor = 10.0 ** rng.uniform(-4, 4, size)
    root = np.sqrt(floor)
    made = nearest_positive(hessian, floor) / np.outer(root, root)
    assert np.linalg.eigvalsh(made).min() > 1.0 - 1e-6
    good = spd(seed, size) * np.outer(root, root) + 2.0 * np.diag(floor)
    assert np.allclose(nearest_positive(good, floor), good, rtol=1e-8)


def test_the_penalty_is_a_normal_density():
    from engine_standins import parameter

    many = ParameterSet(
        (
            parameter("a", start=1.0, sd=2.0, mean=0.5),
            parameter("b", fixed=True, start=7.0),
            parameter("c", positive=True, start=0.2),
        )
    )
    assert many.free_at.tolist() == [0, 2]
    assert many.full(np.array([9.0, 8.0])).tolist() == [9.0, 7.0, 8.0]
    value, slope = many.penalty(np.array([2.5, 1e3]))
    assert (value, slope.tolist()) == (0.5, [0.5, 0.0])


def test_spells_are_added_once_with_a_standard_normal_prior():
    from engine_standins import parameter

    plain = ParameterSet((parameter("a", start=1.0), parameter("b", fixed=True, start=7.0)))
    assert plain.with_spells(0) == plain
    many = plain.with_spells(3)
    assert many.with_spells(3) == many
    assert [p.reported for p in many.all] == [True, True, False, False, False]
    assert many.free_at.tolist() == [0, 2, 3, 4]
    value, slope = many.penalty(np.array([9.0, 1.0, -2.0, 0.0]))
    assert (value, slope.tolist()) == (2.5, [0.0, 1.0, -2.0, 0.0])
