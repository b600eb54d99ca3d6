"""Heavy tails: moments of one fix, and expectation propagation over a track."""

import dataclasses
import functools

import numpy as np
import pytest
from engine_standins import (
    approximation_of,
    bumpy_layer,
    covariance_of,
    distance_term,
    first_guess,
    isotropic,
    layer_term,
    problem_of,
    random_covariances,
    start_prior,
)
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.special import gammaln, loggamma

from trackfit.inference.grid import time_grid
from trackfit.inference.laplace import ModeNotFound
from trackfit.inference.marginal import Warm, approximate
from trackfit.inference.sites import (
    Cavity,
    cavities,
    log_site_mass,
    matched_sites,
    neighbour_medians,
    starting_sites,
)
from trackfit.inference.tails import padded_fixes, tilted_moments, weight_nodes
from trackfit.layers.splines import fit_spline
from trackfit.motion import Diffusive, Persistent, VelocityField


def moments(C, offset, V, log_scale, log_nu):
    return tilted_moments(
        np.linalg.cholesky(np.atleast_3d(C).reshape(-1, 2, 2)),
        np.asarray(offset, float).reshape(-1, 2),
        np.asarray(V, float).reshape(-1, 2, 2),
        log_scale,
        log_nu,
    )


def log_t(e, C, scale, nu):
    """Bivariate Student-t: -(nu + 2)/2 log(1 + r^2/nu), with its constant."""
    r2 = np.einsum("...a,ab,...b->...", e, np.linalg.inv(C), e) / scale**2
    constant = gammaln(nu / 2 + 1) - gammaln(nu / 2) - np.log(nu * np.pi)
    constant -= 0.5 * np.linalg.slogdet(C)[1] + 2 * np.log(scale)
    return constant - 0.5 * (nu + 2) * np.log1p(r2 / nu)


def test_the_formula_for_the_density_is_the_published_one():
    """scipy: t5, I, at (1, 2): -4.2638921984; t4, [[4, 1], [1, 2]], at (1, -1): -3.5647754258."""
    found = [
        log_t(np.array([1.0, 2.0]), np.eye(2), 1.0, 5.0),
        log_t(np.array([1.0, -1.0]), np.array([[4.0, 1.0], [1.0, 2.0]]), 1.0, 4.0),
    ]
    assert found == pytest.approx([-4.2638921984, -3.5647754258], abs=1e-9)


@pytest.mark.parametrize(
    ("y", "log_z", "mean", "variance"),
    [
        # prior N(0, 1), y | x ~ t4(x, scale 0.5); scipy.integrate, recomputed for this project
        (3.0, -4.193406103, 1.850470898, 0.752703647),
        (1.0, -1.454812077, 0.738851619, 0.282155260),
    ],
)
def test_one_factor_and_a_normal_prior(y, log_z, mean, variance):
    """A second axis that nothing is known of (sd 1e7) leaves the univariate t.

    Its share of the mass is the cavity's density there: 1/sqrt(2 pi 1e14).
    """
    # along a line integrated over, t4 in two dimensions is t4 in one
    V = np.diag([1.0, 1e14])
    found = moments(0.25 * np.eye(2), [y, 0.0], V, 0.0, np.log(4.0))
    aside = 0.5 * np.log(2 * np.pi * 1e14)
    assert found.log_z[0] + aside == pytest.approx(log_z, abs=1e-8)
    assert found.mean_km[0, 0] == pytest.approx(mean, abs=1e-8)
    assert found.covariance_km2[0, 0, 0] == pytest.approx(variance, abs=1e-8)
    assert found.covariance_km2[0, 0, 1] == pytest.approx(0.0, abs=1e-8)


def brute(C, offset, V, scale, nu):
    """Mass, mean and covariance by the trapezoidal rule on a fine net over the cavity."""
    root = np.linalg.cholesky(V)
    u = np.linspace(-10.0, 10.0, 1501)
    cell = (u[1] - u[0]) ** 2
    white = np.stack(np.meshgrid(u, u, indexing="ij"), axis=-1)
    x = white @ root.T
    log_f = -0.5 * np.sum(white**2, axis=-1) - np.log(2 * np.pi)
    log_f += log_t(np.asarray(offset) - x, C, scale, nu)
    mass = np.exp(log_f - log_f.max())
    total = mass.sum()
    mean = np.einsum("ij,ija->a", mass, x) / total
    apart = x - mean
    covariance = np.einsum("ij,ija,ijb->ab", mass, apart, apart) / total
    return np.log(total * cell) + log_f.max(), mean, covariance


CASES = [
    # log scale, log nu, offset in km, and a seed for C and V
    (0.0, np.log(4.0), (0.3, -0.2), 0),
    (0.3, np.log(1.0), (2.5, 1.0), 1),
    (-0.4, np.log(0.6), (-4.0, 3.0), 2),
    (0.1, np.log(12.0), (1.0, 5.0), 3),
    (0.2, np.log(3.0), (40.0, -30.0), 5),
]


def matrices(seed):
    return random_covariances(np.random.default_rng(seed), 2)


def rule_error(nu):
    """What steps of h in log w leave of a Gamma's mass: 2 |G(nu/2 + 2 pi i/h)| / G(nu/2).

    By Poisson's sum; G is the Gamma function, whose values are the transform of a log-gamma.
    """
    nodes, _ = weight_nodes(np.log(nu))
    twist = 2j * np.pi / (nodes[1] - nodes[0])
    return 2.0 * np.exp(loggamma(0.5 * nu + twist).real - loggamma(0.5 * nu).real)


def check_moments(log_scale, log_nu, offset, seed, bound):
    C, V = matrices(seed)
    found = moments(C, offset, V, log_scale, log_nu)
    log_z, mean, covariance = brute(C, offset, V, np.exp(log_scale), np.exp(log_nu))
    assert found.log_z[0] == pytest.approx(log_z, abs=bound)
    size = 1.0 + np.abs(mean).max() + np.abs(covariance).max()
    assert np.allclose(found.mean_km[0], mean, rtol=0, atol=bound * size)
    assert np.allclose(found.covariance_km2[0], covariance, rtol=0, atol=bound * size)


@pytest.mark.parametrize(("log_scale", "log_nu", "offset", "seed"), CASES)
def test_moments_against_a_net_of_points(log_scale, log_nu, offset, seed):
    # a fix that misfits has the weight of a Gamma of nu + 2
    bound = 1e-9 + 4.0 * rule_error(np.exp(log_nu) + 2.0)
    assert bound < 1e-4
    check_moments(log_scale, log_nu, offset, seed, bound)


@pytest.mark.parametrize("nu", [30.0, 60.0, 1e3, 1e6])
def test_moments_of_tails_that_are_nearly_normal(nu):
    check_moments(0.0, np.log(nu), (0.5, 0.5), 4, 1e-5)


@pytest.mark.parametrize(("log_scale", "log_nu", "offset", "seed"), CASES)
def test_derivatives_of_the_mass_against_differences(log_scale, log_nu, offset, seed):
    C, V = matrices(seed)
    found = moments(C, offset, V, log_scale, log_nu)

    def along(by_scale, by_nu):
        def at(d):
            return moments(C, offset, V, log_scale + d * by_scale, log_nu + d * by_nu).log_z[0]

        h = 1e-3
        return (8.0 * (at(h) - at(-h)) - (at(2 * h) - at(-2 * h))) / (12.0 * h)

    # values round at 1e-15, over the step 1e-12; h^4/30 of the fifth derivative is 1e-13
    assert found.by_log_scale[0] == pytest.approx(along(1, 0), abs=1e-9)
    assert found.by_log_nu[0] == pytest.approx(along(0, 1), abs=1e-9)


def test_a_certain_position_leaves_the_density_itself():
    C = np.array([[4.0, 1.0], [1.0, 2.0]])
    found = moments(C, [1.0, -1.0], 1e-14 * np.eye(2), 0.0, np.log(4.0))
    # the rule's error at nu = 4 and for a misfit
    bound = 2.0 * rule_error(6.0)
    assert bound < 2e-7
    assert found.log_z[0] == pytest.approx(-3.5647754258, abs=bound)


@pytest.mark.parametrize("away_km", [300.0, 1e3, 1e4, 1e5])
def test_a_fix_thousands_of_standard_errors_off_tells_nothing(away_km):
    """The mean is drawn by (nu + 2) V inv(C) / r, the covariance is the cavity's."""
    V = np.array([[0.5, 0.1], [0.1, 0.3]])
    found = moments(np.eye(2), [away_km, 0.0], V, 0.0, np.log(4.0))
    expected = log_t(np.array([away_km, 0.0]), np.eye(2), 1.0, 4.0)
    assert found.log_z[0] == pytest.approx(expected, abs=20.0 / away_km**2 + 2.0 * rule_error(6.0))
    assert found.mean_km[0] * away_km == pytest.approx(6.0 * V[0], rel=1e-4)
    assert np.allclose(found.covariance_km2[0], V, rtol=0, atol=20.0 / away_km**2)


def test_many_fixes_are_each_their_own_and_padding_is_unseen():
    rng = np.random.default_rng(1)
    C, V = random_covariances(rng, 200), random_covariances(rng, 200)
    offset = rng.normal(size=(200, 2)) * 5
    root = np.linalg.cholesky(C)
    whole = tilted_moments(root, offset, V, 0.2, 1.0)
    for k in (0, 127, 128, 199):
        alone = tilted_moments(root[[k]], offset[[k]], V[[k]], 0.2, 1.0)
        for name in ("log_z", "mean_km", "covariance_km2", "by_log_scale", "by_log_nu"):
            both = getattr(whole, name)[k], getattr(alone, name)[0]
            assert np.allclose(*both, rtol=1e-11, atol=1e-13)
    sizes = [padded_fixes(n) for n in (0, 1, 128, 129, 193, 256, 257, 1500)]
    assert sizes == [128, 128, 128, 192, 256, 256, 384, 1536]
    assert weight_nodes(np.log(4.0), 1e12)[0][0] < np.log(1e-12)


# --- sites ------------------------------------------------------------------------------------


def test_cavities_take_the_site_out():
    rng = np.random.default_rng(2)
    V, L = random_covariances(rng, 5), random_covariances(rng, 5)
    m, c = rng.normal(size=(2, 5, 2))
    precision = np.linalg.inv(V)
    joint = np.linalg.inv(precision + L)
    mean = np.einsum("kab,kb->ka", joint, np.einsum("kab,kb->ka", precision, m) + c)
    from trackfit.inference.observations import Sites

    found = cavities(Sites(L, c), mean, joint)
    assert found.sound.all()
    assert np.allclose(found.covariance_km2, V, rtol=1e-11)
    assert np.allclose(found.mean_km, m, rtol=0, atol=1e-10)
    # the mass of cavity times site: integral of N(e; m, V) exp(-e'Le/2 + c'e)
    for k in range(5):
        u = np.linspace(-9, 9, 901)
        white = np.stack(np.meshgrid(u, u, indexing="ij"), axis=-1)
        e = m[k] + white @ np.linalg.cholesky(V[k]).T
        log_f = -0.5 * np.sum(white**2, axis=-1) - np.log(2 * np.pi)
        log_f += -0.5 * np.einsum("...a,ab,...b->...", e, L[k], e) + e @ c[k]
        mass = np.log(np.exp(log_f).sum() * (u[1] - u[0]) ** 2)
        assert log_site_mass(Sites(L, c), found)[k] == pytest.approx(mass, abs=1e-9)


def test_a_cavity_that_is_no_density_keeps_its_site():
    from trackfit.inference.observations import Sites

    sites = Sites(np.stack([np.eye(2), 3.0 * np.eye(2)]), np.ones((2, 2)))
    found = cavities(sites, np.zeros((2, 2)), np.stack([0.5 * np.eye(2)] * 2))
    assert found.sound.tolist() == [True, False]
    assert np.isfinite(found.covariance_km2).all()
    about = moments(np.stack([np.eye(2)] * 2), np.ones((2, 2)), found.covariance_km2, 0.0, 1.0)
    kept = matched_sites(sites, found, about)
    assert np.array_equal(kept.precision[1], sites.precision[1])
    assert np.array_equal(kept.pull[1], sites.pull[1])
    assert not np.allclose(kept.precision[0], sites.precision[0])


def test_matched_sites_give_back_the_moments():
    rng = np.random.default_rng(3)
    C, V = random_covariances(rng, 6), random_covariances(rng, 6)
    m = rng.normal(size=(6, 2)) * 3
    from trackfit.inference.observations import Sites

    about = moments(C, -m, V, 0.0, np.log(3.0)).shifted(m)
    cavity = Cavity(m, V, np.ones(6, bool))
    sites = matched_sites(Sites(np.zeros((6, 2, 2)), np.zeros((6, 2))), cavity, about)
    joint = np.linalg.inv(np.linalg.inv(V) + sites.precision)
    pull = np.einsum("kab,kb->ka", np.linalg.inv(V), m) + sites.pull
    assert np.allclose(joint, about.covariance_km2, rtol=1e-9)
    assert np.allclose(np.einsum("kab,kb->ka", joint, pull), about.mean_km, rtol=0, atol=1e-9)


def test_first_sites_weaken_what_is_far_from_its_neighbours():
    hours = np.arange(9.0)[::-1]
    at_km = np.stack([hours, 0.0 * hours], axis=1)
    at_km[4] += 300.0
    away = neighbour_medians(at_km, hours)[0]
    assert np.linalg.norm(away[4]) > 290.0
    assert np.linalg.norm(np.delete(away, 4, axis=0), axis=1).max() < 4.0
    problem = problem_of(hours, at_km, isotropic(np.ones(9)), heavy=True)
    sites = starting_sites(problem.observations, hours, 0.0, np.log(4.0))
    weight = sites.precision[:, 0, 0]
    assert weight[4] < 0.01 * np.median(weight)


# --- whole tracks -----------------------------------------------------------------------------


def sea(last_hour=60.0):
    layers = (bumpy_layer(1), bumpy_layer(2, times=4, last_hour=last_hour), None)
    water = bumpy_layer(3, times=4, components=2, last_hour=last_hour)
    field = VelocityField(
        (
            layer_term(layers[0], centre=0.1, scale=0.9, humped=True),
            layer_term(layers[1]),
            distance_term(1.0, 2.0),
        ),
        fit_spline(water),
    )
    return {"field": field, "layers": (layers, water)}


AMPLITUDES = [6.0, -2.0, 4.0, -0.1, 0.5]


@functools.cache
def tailed(kind, nu=3.0, field=True, seed=4, fixes=40):
    """A walk seen with t errors of turned ellipses."""
    rng = np.random.default_rng(seed)
    hours = np.sort(np.round(rng.uniform(0, 60, fixes), 1))
    truth = np.cumsum(rng.normal(size=(fixes, 2)) * 1.2, axis=0)
    C = random_covariances(rng, fixes, 0.3)
    white = rng.normal(size=(fixes, 2)) / np.sqrt(rng.chisquare(nu, (fixes, 1)) / nu)
    seen = truth + np.einsum("kab,kb->ka", np.linalg.cholesky(C), white)
    motion = {"diffusive": Diffusive(), "persistent": Persistent()}[kind]
    grid = time_grid(hours, 0.5, np.zeros(0), motion.same_moment_hours)
    problem = problem_of(
        hours, seen, C, hours=grid, motion=motion, heavy=True, **(sea() if field else {})
    )
    start = [np.log(1.2)] if kind == "diffusive" else [np.log(1.0), np.log(1.5)]
    theta = np.array([*start, *(AMPLITUDES if field else []), 0.1, np.log(nu)])
    return problem, theta, hours


def normal_twin(problem):
    """The same track with normal errors."""
    return dataclasses.replace(
        problem, observations=dataclasses.replace(problem.observations, heavy=False)
    )


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
@pytest.mark.parametrize("field", [False, True])
def test_tails_that_are_none_give_the_normal_results(kind, field):
    """nu = 1e6: without a field the Kalman smoother; with one Laplace's approximation.

    What the tails still do is of the order of 1/nu of each fix's fourth power.
    """
    rng = np.random.default_rng(5)
    problem, theta, hours = tailed(kind, field=field)
    observations = problem.observations
    steady = approximation_of(normal_twin(problem), theta[:-1], hours).mode.states
    noise = np.einsum("kab,kb->ka", observations.root_km, rng.normal(size=(len(hours), 2)))
    observations = dataclasses.replace(observations, at_km=steady[observations.state, :2] + noise)
    problem = dataclasses.replace(problem, observations=observations)
    theta = np.append(theta[:-1], np.log(1e6))
    heavy = approximation_of(problem, theta, hours, 1e-14, 1e-10)
    plain = approximation_of(normal_twin(problem), theta[:-1], hours, 1e-14)
    assert heavy.negative_log_marginal == pytest.approx(plain.negative_log_marginal, abs=1e-3)
    slope = plain.gradient()
    assert heavy.gradient()[-1] == pytest.approx(0.0, abs=1e-3)
    if not field:
        assert np.abs(heavy.mode.states - plain.mode.states).max() < 1e-5
        assert np.allclose(covariance_of(heavy), covariance_of(plain), rtol=1e-5, atol=1e-5)
        assert np.allclose(heavy.gradient()[:-1], slope, rtol=1e-4, atol=1e-3)


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
@pytest.mark.parametrize("nu", [1.0, 3.0, 20.0])
def test_the_gradient_with_tails_against_differences(kind, nu):
    problem, theta, hours = tailed(kind, nu=nu)
    found = approximation_of(problem, theta, hours, 1e-14, 1e-10)
    slopes = found.gradient()
    for j in range(len(theta)):
        step = 1e-4 * max(1.0, abs(theta[j]))

        def at(multiple, j=j, step=step):
            moved = theta.copy()
            moved[j] += multiple * step
            return approximate(problem, moved, found.warm, 1e-14, 1e-10).negative_log_marginal

        slope = (8.0 * (at(1) - at(-1)) - (at(2) - at(-2))) / (12.0 * step)
        # the value is stationary in the sites only where the marginals it uses are those of the
        # Laplace approximation to first order: 1e-4 of the slope
        assert slopes[j] == pytest.approx(slope, rel=1e-4, abs=1e-5), j


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
def test_without_a_field_the_gradient_with_tails_is_exact(kind):
    problem, theta, hours = tailed(kind, field=False)
    found = approximation_of(problem, theta, hours, 1e-14, 1e-10)
    for j in range(len(theta)):
        step = 1e-3

        def at(multiple, j=j, step=step):
            moved = theta.copy()
            moved[j] += multiple * step
            return approximate(problem, moved, found.warm, 1e-14, 1e-10).negative_log_marginal

        slope = (8.0 * (at(1) - at(-1)) - (at(2) - at(-2))) / (12.0 * step)
        assert found.gradient()[j] == pytest.approx(slope, rel=1e-7, abs=1e-7), j


def test_a_single_fix_is_exact():
    """Prior N(0, 3^2) times the t: mass, mean and covariance by a net of points."""
    C = np.array([[[0.8, 0.2], [0.2, 0.5]]])
    problem = problem_of([0.0], [[4.0, -2.0]], C, start=start_prior(sd_km=3.0), heavy=True)
    found = approximation_of(problem, [0.0, 0.2, np.log(2.5)], [0.0], 1e-14, 1e-10)
    log_z, mean, covariance = brute(C[0], [4.0, -2.0], 9.0 * np.eye(2), np.exp(0.2), 2.5)
    assert -found.negative_log_marginal == pytest.approx(log_z, abs=1e-8)
    assert np.allclose(found.mode.states[0], mean, rtol=0, atol=1e-8)
    assert np.allclose(covariance_of(found)[0], covariance, rtol=0, atol=1e-8)


def test_two_fixes_against_the_whole_integral():
    """One static position, two t errors: EP's mass and moments are near the true ones."""
    C = np.array([np.eye(2), [[2.0, 0.5], [0.5, 1.0]]])
    seen = np.array([[1.0, 0.0], [-1.5, 1.0]])
    problem = problem_of([0.0, 0.0], seen, C, hours=[0.0], start=start_prior(sd_km=3.0), heavy=True)
    found = approximation_of(problem, [0.0, 0.0, np.log(4.0)], [0.0, 0.0])
    u = np.linspace(-9, 9, 901)
    x = np.stack(np.meshgrid(u, u, indexing="ij"), axis=-1)
    log_f = -0.5 * np.sum(x**2, axis=-1) / 9.0 - np.log(2 * np.pi * 9.0)
    log_f += sum(log_t(y - x, c, 1.0, 4.0) for y, c in zip(seen, C, strict=True))
    mass = np.exp(log_f)
    mean = np.einsum("ij,ija->a", mass, x) / mass.sum()
    # EP is an approximation here: four hundredths of the mass, two of an sd in the mean
    assert -found.negative_log_marginal == pytest.approx(
        np.log(mass.sum() * (u[1] - u[0]) ** 2), abs=0.05
    )
    assert np.allclose(found.mode.states[0], mean, atol=0.02)


@pytest.mark.parametrize("kind", ["diffusive", "persistent"])
@pytest.mark.parametrize("away_km", [100.0, 1000.0])
def test_outliers_are_left_where_they_are(kind, away_km):
    """Three fixes of forty thrown off: the path is that of the other 37, nearly."""
    problem, theta, hours = tailed(kind, field=True)
    at_km = problem.observations.at_km.copy()
    bad = np.array([7, 8, 25])
    at_km[bad] += away_km * np.array([[1.0, 0.0], [-0.6, 0.8], [0.0, -1.0]])
    thrown = dataclasses.replace(
        problem, observations=dataclasses.replace(problem.observations, at_km=at_km)
    )
    keep = np.delete(np.arange(len(hours)), bad)
    rest = dataclasses.replace(
        problem,
        observations=dataclasses.replace(
            problem.observations,
            state=problem.observations.state[keep],
            at_km=at_km[keep],
            covariance_km2=problem.observations.covariance_km2[keep],
        ),
    )
    found = approximation_of(thrown, theta, hours, 1e-10, 1e-8)
    without = approximate(rest, theta, Warm(first_guess(rest, hours[keep])))
    sd = np.sqrt(np.einsum("naa->na", covariance_of(without)[:, :2, :2]))
    moved = np.abs(found.mode.states - without.mode.states)[:, :2] / sd
    # a fix so far off pulls like (nu + 2)/r: some 5/100 sd^2 per km
    assert moved.max() < 20.0 / away_km
    assert (found.mode.sites.precision[bad, 0, 0] < 1e-2).all()


@pytest.mark.parametrize("heavy_nu", [0.5, 2.0, 30.0])
def test_five_fixes(heavy_nu):
    rng = np.random.default_rng(6)
    hours = np.array([0.0, 2.0, 3.0, 7.0, 8.0])
    problem = problem_of(
        hours,
        rng.normal(size=(5, 2)) * 3,
        random_covariances(rng, 5),
        hours=np.arange(0.0, 8.1, 0.5),
        heavy=True,
    )
    theta = np.array([0.2, 0.0, np.log(heavy_nu)])
    found = approximation_of(problem, theta, hours)
    assert np.linalg.eigvalsh(covariance_of(found)).min() > 0.0
    assert found.cavity.sound.all()
    again = approximate(problem, theta, found.warm, 1e-12, 1e-9)
    assert again.negative_log_marginal == pytest.approx(found.negative_log_marginal, abs=1e-9)
    assert again.sweeps <= 2


@pytest.mark.parametrize(
    ("apart_km", "nu"),
    [(apart, nu) for nu in (1.0, 4.0) for apart in (3.0, 10.0, 60.0)],
)
def test_fixes_that_contradict_each_other_settle(apart_km, nu):
    """Every other fix is so far off that both halves cannot be right: no circle without end."""
    hours = np.arange(24.0)
    seen = np.stack([apart_km * (np.arange(24) % 2), 0.1 * hours], axis=1)
    problem = problem_of(hours, seen, isotropic(np.ones(24)), heavy=True)
    found = approximation_of(problem, [np.log(0.3), 0.0, np.log(nu)], hours, 1e-9, 1e-6)
    assert found.sweeps < 200
    wanted = np.abs(found.moments.mean_km - (
        problem.observations.offset(found.mode.states)
        + found.spread.adjoint[problem.observations.state, :2]
    ))  # fmt: skip
    assert wanted.max() < 1e-5


fix_rows = st.tuples(
    st.floats(0.0, 40.0),
    st.one_of(st.sampled_from([0.0, 1.0]), st.floats(-900.0, 900.0)),
    st.one_of(st.sampled_from([0.0, 1.0]), st.floats(-900.0, 900.0)),
    st.floats(-3.0, 2.0).map(lambda power: 10.0**power),
)


@settings(max_examples=25, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.lists(fix_rows, min_size=3, max_size=12),
    st.sampled_from([Diffusive(), Persistent()]),
    st.floats(-1.0, 5.0),
    st.floats(-2.0, 3.0),
    st.booleans(),
)
def test_whatever_the_fixes_a_mode_or_none_is_found(rows, motion, log_nu, log_pace, field):
    table = np.array(sorted(rows))
    hours = table[:, 0]
    grid = time_grid(hours, 1.0, np.zeros(0), motion.same_moment_hours)
    problem = problem_of(
        hours,
        table[:, 1:3],
        isotropic(table[:, 3]),
        hours=grid,
        motion=motion,
        heavy=True,
        **(sea() if field else {}),
    )
    first = [log_pace] if motion.k == 1 else [log_pace, 0.5]
    theta = [*first, *(AMPLITUDES if field else []), 0.0, log_nu]
    with np.errstate(all="ignore"):
        try:
            found = approximation_of(problem, theta, hours, 1e-9, 1e-6)
        except ModeNotFound:
            return
        slopes = found.gradient()
    assert np.isfinite(found.negative_log_marginal)
    assert np.isfinite(slopes).all()
    assert np.isfinite(found.mode.states).all()
