"""The emulator: it goes through what it was told, its walk follows the density it emulates."""

import numpy as np
import pytest

from trackfit.inference import emulator
from trackfit.inference.emulator import Emulator, emulate, walk


def bent(y):
    """An excess over the standard normal with its gradient: values (n,), gradients (n, 2)."""
    q = 1.0 + 0.1 * y[:, 0] ** 2
    value = 0.4 * np.sin(y[:, 0]) * y[:, 1] - 0.05 * y[:, 0] ** 3 / q
    along_x = 0.4 * np.cos(y[:, 0]) * y[:, 1]
    along_x -= 0.05 * (3.0 * y[:, 0] ** 2 * q - 0.2 * y[:, 0] ** 4) / q**2
    return value, np.stack([along_x, 0.4 * np.sin(y[:, 0])], axis=1)


def seen(n, seed=0):
    y = np.random.default_rng(seed).normal(size=(n, 2)) * 1.5
    return (y, *bent(y))


def test_values_and_gradients_are_met():
    y, value, slope = seen(40)
    found = emulate(y, value, slope)
    # the nugget leaves a thousandth of the process's sd
    assert found.excess(y) == pytest.approx(value, abs=5e-3)
    d = 1e-4
    for j in range(2):
        step = d * np.eye(2)[j]
        along = (found.excess(y + step) - found.excess(y - step)) / (2.0 * d)
        assert along == pytest.approx(slope[:, j], abs=2e-2)


def test_gradients_are_worth_points(monkeypatch):
    """Between forty points: with gradients the rms error is half of that without, or less."""
    y, value, slope = seen(40)
    there = np.random.default_rng(1).normal(size=(500, 2))
    wanted, _ = bent(there)
    errors = []
    for most in (emulator.MOST_NUMBERS, 0):
        monkeypatch.setattr(emulator, "MOST_NUMBERS", most)
        found = emulate(y, value, slope)
        assert found.slopes.any() == (most > 0)
        errors.append(np.sqrt(np.mean((found.excess(there) - wanted) ** 2)))
    assert errors[0] < 0.02
    assert errors[0] < 0.5 * errors[1]


def test_a_wild_point_is_taken_for_noise(monkeypatch):
    """A spike of 2 with slopes of 30 at one point of forty: without noise the rest swings."""
    y, value, slope = seen(40)
    value[7] += 2.0
    slope[7] += 30.0
    there = np.random.default_rng(1).normal(size=(500, 2))
    wanted, _ = bent(there)
    errors = []
    for nuggets in (emulator.NUGGETS, (1e-6,)):
        monkeypatch.setattr(emulator, "NUGGETS", nuggets)
        off = emulate(y, value, slope).excess(there) - wanted
        errors.append(np.sqrt(np.mean(off**2)))
    assert errors[0] < 0.7 * errors[1]


def test_far_away_nothing_is_added():
    found = emulate(*seen(40))
    assert found.excess(np.array([[80.0, -60.0]])) == pytest.approx([0.0], abs=1e-12)


def test_the_walk_follows_the_density():
    """Moments against a net of points; some 10,000 draws: five standard errors."""
    found = emulate(*seen(40))
    rng = np.random.default_rng(2)
    taken = walk(found, rng.normal(size=(200, 2)), 500, rng)[100::4].reshape(-1, 2)
    u = np.linspace(-7.0, 7.0, 281)
    net = np.stack(np.meshgrid(u, u, indexing="ij"), axis=-1).reshape(-1, 2)
    weight = np.exp(found.excess(net) - 0.5 * np.sum(net**2, axis=1))
    weight /= weight.sum()
    mean = weight @ net
    sd = np.sqrt(weight @ (net - mean) ** 2)
    assert np.abs(taken.mean(axis=0) - mean).max() < 0.05
    assert taken.std(axis=0) == pytest.approx(sd, rel=0.05)


def test_the_walk_finds_a_tail_nine_sds_long():
    """log p falls as |y|/3 to the left: the excess is y^2/2 + y/3 there, told at points."""
    y = np.concatenate([np.linspace(-14.0, 4.0, 37)[:, None], np.zeros((1, 1))])
    left = y[:, 0] < 0.0
    excess = np.where(left, 0.5 * y[:, 0] ** 2 + y[:, 0] / 3.0, 0.0)
    slope = np.where(left, y[:, 0] + 1.0 / 3.0, 0.0)[:, None]
    found = emulate(y, excess, slope)
    rng = np.random.default_rng(3)
    taken = walk(found, rng.normal(size=(128, 1)), 400, rng)[100::4].ravel()
    u = np.linspace(-14.0, 6.0, 2001)[:, None]
    weight = np.exp(found.excess(u) - 0.5 * u[:, 0] ** 2)
    mean = weight @ u[:, 0] / weight.sum()
    sd = np.sqrt(weight @ (u[:, 0] - mean) ** 2 / weight.sum())
    assert sd > 2.5
    # the tail's draws go together: a tenth
    assert taken.mean() == pytest.approx(mean, abs=0.1 * sd)
    assert taken.std() == pytest.approx(sd, rel=0.1)


def test_nothing_in_excess_is_the_standard_normal():
    found = Emulator(np.zeros((1, 3)), 1.0, np.zeros(1), np.zeros((1, 3)))
    rng = np.random.default_rng(4)
    taken = walk(found, 3.0 + np.zeros((100, 3)), 300, rng)[60::4].reshape(-1, 3)
    assert np.abs(taken.mean(axis=0)).max() < 0.06
    assert taken.std(axis=0) == pytest.approx(np.ones(3), rel=0.06)
