"""Weighted points for a posterior, and regions of mixtures."""

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import digamma, polygamma

from trackfit.inference.integrate import PathMixture, WeightedPoints, lay_points, normalised
from trackfit.inference.optimise import Rejected

TURN = np.array([[0.8, -0.6], [0.6, 0.8]])


def log_gammas(shapes, turn=None):
    """Log density of turned log-gamma variables: skewed to the left."""
    shapes = np.asarray(shapes, float)
    turn = np.eye(len(shapes)) if turn is None else turn

    def log_density(x):
        y = turn.T @ x
        return float(np.sum(shapes * y - np.exp(y)))

    mode, covariance = turn @ np.log(shapes), turn @ np.diag(1 / shapes) @ turn.T
    mean = turn @ digamma(shapes)
    spread = turn @ np.diag(polygamma(1, shapes)) @ turn.T
    return log_density, mode, covariance, mean, spread


def weighted(log_density, mode, covariance, count, seed=3):
    at, log_design = lay_points(log_density, mode, covariance, count, seed)
    return WeightedPoints(at, normalised(np.array([log_density(x) for x in at]) - log_design))


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize(
    ("shapes", "turn", "bound"),
    [
        ((10.0,), None, 0.02),
        ((8.0, 20.0), TURN, 0.02),
        ((9.0, 25.0, 49.0), None, 0.02),
        # a log-gamma of shape 2 or 3 falls off as exp(3 y) to the left, slower than the design:
        # rare points weigh much, and 512 of them leave 5 %
        ((3.0,), None, 0.05),
        ((2.0, 6.0), TURN, 0.05),
    ],
)
def test_mean_and_spread_of_a_skewed_density(shapes, turn, bound, seed):
    """To 2 % of an sd with 512 points; the normal approximation is off by 0.1 to 0.4 sd."""
    log_density, mode, covariance, mean, spread = log_gammas(shapes, turn)
    points = weighted(log_density, mode, covariance, 512, seed)
    sd = np.sqrt(np.diag(spread))
    assert np.abs((points.mean - mean) / sd).max() < bound
    assert np.sqrt(np.diag(points.covariance)) == pytest.approx(sd, rel=bound)
    assert points.effective > 0.7 * 512
    assert np.abs((mode - mean) / sd).max() > 0.1


def test_the_studys_number_of_points():
    """128 points, five parameters of all skews: 5 % of an sd."""
    log_density, mode, covariance, mean, spread = log_gammas((2.0, 4.0, 9.0, 25.0, 100.0))
    points = weighted(log_density, mode, covariance, 128)
    sd = np.sqrt(np.diag(spread))
    assert np.abs((points.mean - mean) / sd).max() < 0.05
    assert np.sqrt(np.diag(points.covariance)) == pytest.approx(sd, rel=0.1)
    assert 50 < points.effective <= 128


def test_a_normal_density_keeps_its_quantiles():
    points = weighted(lambda x: -0.5 * float(x @ x), np.zeros(1), np.eye(1), 1024)
    for level, z in ((0.025, -1.959964), (0.5, 0.0), (0.975, 1.959964)):
        # a step of the sequence is 1e-3 of the mass: 0.02 of an sd at the tails' density
        assert points.quantile(points.at[:, 0], level) == pytest.approx(z, abs=0.03)


def test_where_there_is_no_value_the_normal_fall_is_taken():
    """No density above 2: the points' design there is as wide as the normal approximation."""

    def cut(x):
        if x[0] > 1.0:
            raise Rejected
        return -0.5 * float(x @ x)

    at, _ = lay_points(cut, np.zeros(1), np.eye(1), 256, 0)
    whole, _ = lay_points(lambda x: -0.5 * float(x @ x), np.zeros(1), np.eye(1), 256, 0)
    assert np.allclose(at, whole, rtol=0, atol=1e-12)


def test_the_same_seed_lays_the_same_points():
    args = (lambda x: -0.5 * float(x @ x), np.zeros(3), np.eye(3), 64)
    first, again, other = (lay_points(*args, seed)[0] for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.allclose(first, other)


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
