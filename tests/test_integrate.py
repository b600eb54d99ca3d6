"""Exploring a posterior, and regions of mixtures."""

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import digamma, polygamma

from trackfit.inference.integrate import PathMixture, explore
from trackfit.inference.optimise import Rejected

TURN = np.array([[0.8, -0.6], [0.6, 0.8]])


def log_gammas(shapes, turn=None):
    """Log density of turned log-gamma variables: skewed to the left."""
    shapes = np.asarray(shapes, float)
    turn = np.eye(len(shapes)) if turn is None else turn

    def density(x):
        y = turn.T @ x
        return float(np.sum(shapes * y - np.exp(y))), turn @ (shapes - np.exp(y))

    mode, covariance = turn @ np.log(shapes), turn @ np.diag(1 / shapes) @ turn.T
    mean = turn @ digamma(shapes)
    spread = turn @ np.diag(polygamma(1, shapes)) @ turn.T
    return density, mode, covariance, mean, spread


def standard_normal(x):
    return -0.5 * float(x @ x), -x


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(
    ("shapes", "turn", "off", "spread_off"),
    [
        ((10.0,), None, 0.02, 0.03),
        ((8.0, 20.0), TURN, 0.04, 0.04),
        ((2.0, 4.0, 9.0, 25.0, 100.0), None, 0.05, 0.05),
        # shape 1/2 falls off as exp(y/2): 1.1 sd between mode and mean
        ((0.5, 6.0), TURN, 0.05, 0.1),
    ],
)
def test_mean_and_spread_of_a_skewed_density(shapes, turn, off, spread_off, seed):
    """Sample and weighted points of 128 evaluations; bounds are of their own noise.

    The sample is worth some 2,000 draws (0.02 of an sd), the points 96 (0.1 of an sd, 0.07 of the
    spread), and long tails make the spread noisier.
    """
    density, mode, covariance, mean, spread = log_gammas(shapes, turn)
    found = explore(density, mode, covariance, 128, seed)
    sd = np.sqrt(np.diag(spread))
    assert np.abs((found.sample.mean - mean) / sd).max() < off
    assert np.sqrt(np.diag(found.sample.covariance)) == pytest.approx(sd, rel=spread_off)
    assert np.abs((found.points.mean - mean) / sd).max() < 0.25
    assert np.sqrt(np.diag(found.points.covariance)) == pytest.approx(sd, rel=0.25)
    assert found.points.effective > 0.7 * 96
    assert np.abs((mode - mean) / sd).max() > 0.1


def test_a_normal_density_keeps_its_quantiles():
    sample = explore(standard_normal, np.zeros(3), np.eye(3), 64, 0).sample
    for level, z in ((0.025, -1.959964), (0.5, 0.0), (0.975, 1.959964)):
        # 2,000 draws: 0.06 of an sd at the tails' density
        for along in sample.at.T:
            assert sample.quantile(along, level) == pytest.approx(z, abs=0.1)


def test_where_there_is_no_value_there_is_no_point():
    """No density above 1: what is asked for there is left out."""

    def cut(x):
        if x[0] > 1.0:
            raise Rejected
        return standard_normal(x)

    found = explore(cut, np.zeros(1), np.eye(1), 64, 0)
    assert found.points.at.max() <= 1.0
    assert 24 < len(found.points.weight) < 48
    assert found.points.weight.sum() == pytest.approx(1.0)
    assert len(found.calls) == len(found.points.weight)


@pytest.mark.parametrize("count", [1, 2, 5])
def test_few_points_are_points(count):
    found = explore(standard_normal, np.zeros(2), np.eye(2), count, 0)
    assert len(found.points.weight) == count - count // 4
    assert found.points.weight.sum() == pytest.approx(1.0)


def test_where_only_the_mode_has_a_value_it_is_the_point():
    def lonely(x):
        if np.any(x != 0.0):
            raise Rejected
        return standard_normal(x)

    found = explore(lonely, np.zeros(2), np.eye(2), 16, 0)
    assert found.calls.tolist() == [0]
    assert found.points.at.tolist() == [[0.0, 0.0]]
    assert found.points.weight.tolist() == [1.0]


def test_every_point_knows_its_call():
    asked = []

    def density(x):
        asked.append(x)
        return standard_normal(x)

    found = explore(density, np.array([1.0, 2.0]), np.diag([4.0, 0.1]), 40, 0)
    assert np.array_equal(np.array(asked)[found.calls], found.points.at)
    assert len(found.calls) == 30


def test_the_same_seed_lays_the_same_points():
    args = (standard_normal, np.zeros(3), np.eye(3), 64)
    first, again, other = (explore(*args, seed).points.at for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.allclose(first, other)


@pytest.mark.parametrize("dim", [12, 30])
def test_many_parameters_are_no_fault(dim):
    """A posterior as normal as its approximation: the sample is that."""
    found = explore(standard_normal, np.zeros(dim), np.eye(dim), 128, 0)
    assert np.abs(found.sample.mean).max() < 0.15
    assert np.sqrt(np.diag(found.sample.covariance)) == pytest.approx(np.ones(dim), rel=0.15)
    assert found.points.effective > 90


def mixture(weight, sd):
    n = len(weight)
    covariance = np.asarray(sd, float)[:, None, None, None] ** 2 * np.eye(2)
    return PathMixture(np.asarray(weight, float), np.zeros((n, 1, 2)), covariance)


@pytest.mark.parametrize("probability", [0.5, 0.95, 0.99])
def test_the_region_of_one_normal(probability):
    found = mixture([1.0], [3.0]).squared_radius(probability)
    assert found == pytest.approx([-2.0 * np.log(1.0 - probability)], rel=1e-12)


@pytest.mark.parametrize("probability", [0.5, 0.95, 0.99])
@pytest.mark.parametrize("sd", [(1.0, 2.0), (0.2, 5.0), (1.0, 1.0)])
def test_the_region_of_two_normals_around_one_centre(probability, sd):
    """Exact: sum_i w_i (1 - exp(-q s^2 / (2 s_i^2))) = p, with s^2 the mixture's variance."""
    weight = np.array([0.7, 0.3])
    whole = weight @ np.square(sd)
    expected = brentq(
        lambda q: weight @ -np.expm1(-0.5 * q * whole / np.square(sd)) - probability, 0.0, 1e4,
        xtol=1e-13,
    )  # fmt: skip
    assert mixture(weight, sd).squared_radius(probability) == pytest.approx([expected], rel=1e-9)


def test_the_region_of_shifted_normals_holds_its_share():
    """Two centres apart: 200,000 draws; the concentric stand-in is good to two per cent."""
    rng = np.random.default_rng(1)
    means = np.array([[[0.0, 0.0]], [[1.5, 0.5]]])
    covariance = np.stack([np.diag([1.0, 0.5])[None], np.array([[[2.0, 0.4], [0.4, 1.0]]])])
    made = PathMixture(np.array([0.6, 0.4]), means, covariance)
    which = rng.choice(2, 200_000, p=made.weight)
    roots = np.linalg.cholesky(covariance[:, 0])
    x = means[which, 0] + np.einsum("nab,nb->na", roots[which], rng.normal(size=(200_000, 2)))
    assert np.allclose(made.mean()[0], x.mean(axis=0), atol=0.02)
    assert np.allclose(made.covariance()[0], np.cov(x.T), atol=0.03)
    off = x - made.mean()[0]
    squared = np.einsum("na,ab,nb->n", off, np.linalg.inv(made.covariance()[0]), off)
    for probability in (0.5, 0.95):
        share = np.mean(squared <= made.squared_radius(probability)[0])
        assert share == pytest.approx(probability, abs=0.02)
