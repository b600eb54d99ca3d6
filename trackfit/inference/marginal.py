"""The marginal likelihood of a track at given parameters, normal errors or heavy tails alike."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Self

import numpy as np
from jaxtyping import Float

from trackfit.inference.banded import (
    Cholesky,
    NotPositiveDefinite,
    block_covariances,
    factor,
    reversed_band,
)
from trackfit.inference.laplace import (
    DECREMENT_TOLERANCE,
    Mode,
    ModeNotFound,
    Patience,
    Spread,
    factored,
    find_mode,
    line_search,
    process_gradient,
    spread_around,
)
from trackfit.inference.observations import Observations, Sites
from trackfit.inference.problem import Point, TrackProblem, evaluate_at
from trackfit.inference.reduced import Reduced
from trackfit.inference.sites import (
    Cavity,
    SiteMixer,
    cavities,
    inverse_2x2,
    log_site_mass,
    matched_sites,
    starting_sites,
    tilted,
)
from trackfit.inference.tails import Tilted
from trackfit.motion.velocity import Basis

MAX_ROUNDS = 60
SWEEPS_PER_ROUND = 12
SITE_TOLERANCE = 1e-6
"""Sites have settled where no marginal moment would move by more than this share of its sd."""


@dataclass(frozen=True)
class Warm:
    """Where an approximation starts: states, and sites where tails are heavy.

    `adjoint` is that of the last spread, and serves the first round of sweeps. `basis` is the
    field's at the states where it is known: layers are then not asked again.
    """

    states: Float[np.ndarray, "states dim"]
    sites: Sites | None = None
    adjoint: Float[np.ndarray, "states dim"] | None = None
    basis: Basis | None = None


@dataclass(frozen=True)
class Approximation:
    """The Gaussian approximation of the states at fixed parameters.

    `cavity` and `moments` exist where tails are heavy.
    """

    problem: TrackProblem
    mode: Mode
    spread_known: Spread | None
    cavity: Cavity | None
    moments: Tilted | None
    sweeps: int

    @property
    def theta(self) -> Float[np.ndarray, " parameters"]:
        """The parameters."""
        return self.mode.theta

    @property
    def warm(self) -> Warm:
        """A start for nearby parameters."""
        basis = self.mode.point.basis
        if not self.problem.observations.heavy:
            return Warm(self.mode.states, basis=basis)
        return Warm(self.mode.states, self.mode.sites, self.spread.adjoint, basis)

    @cached_property
    def spread(self) -> Spread:
        """Covariance blocks and adjoint at the mode."""
        if self.spread_known is not None:
            return self.spread_known
        mode = self.mode
        return spread_around(self.problem, mode.theta, mode.point, mode.band, mode.cholesky)

    @property
    def negative_log_marginal(self) -> float:
        """-log p(y | theta); factors of 2 pi of the states cancel."""
        observations = self.problem.observations
        laplace = (
            self.mode.point.density(self.problem, self.mode.sites)
            + 0.5 * self.mode.cholesky.log_det
        )
        if self.cavity is None or self.moments is None:
            return laplace + observations.gaussian_constant(
                self.problem.error_parameters(self.theta)[0]
            )
        correction = self.moments.log_z - log_site_mass(self.mode.sites, self.cavity)
        return laplace - float(correction.sum())

    def gradient(self) -> Float[np.ndarray, " parameters"]:
        """Exact gradient of `negative_log_marginal` in all parameters."""
        observations = self.problem.observations
        process = process_gradient(self.problem, self.mode, self.spread)
        if self.moments is not None:
            errors = [-self.moments.by_log_scale.sum(), -self.moments.by_log_nu.sum()]
        else:
            errors = [
                observations.gaussian_scale_gradient(
                    self.mode.sites,
                    self.mode.states,
                    self.spread.covariance_at(observations.state),
                    self.spread.adjoint,
                )
            ]
        return self.problem.whole_gradient(process, np.array(errors))


def approximate(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    warm: Warm,
    tolerance: float = DECREMENT_TOLERANCE,
    site_tolerance: float = SITE_TOLERANCE,
) -> Approximation:
    """Approximate the states at fixed parameters: Laplace, with expectation propagation for tails.

    Raises
    ------
    ModeNotFound
        These parameters have no usable approximation; the step that asked for them is rejected.
    """
    observations = problem.observations
    if not observations.heavy:
        sites = observations.gaussian_sites(problem.error_parameters(theta)[0])
        mode = find_mode(problem, theta, sites, warm.states, tolerance, warm.basis)
        return Approximation(problem, mode, None, None, None, 0)
    try:
        return _propagate(problem, theta, warm, tolerance, site_tolerance)
    except np.linalg.LinAlgError:
        raise ModeNotFound("a site's moments are not finite or not positive definite") from None


@dataclass(frozen=True)
class _Linear:
    """The process linearised at a point, at the states with fixes: all that sweeps of sites need.

    `own` is the adjoint at the fixes' states.
    """

    observations: Observations
    states: Float[np.ndarray, "kept dim"]
    reduced: Reduced
    own: Float[np.ndarray, "fixes 2"]

    @classmethod
    def at(
        cls,
        problem: TrackProblem,
        point: Point,
        adjoint: Float[np.ndarray, "states dim"],
        *,
        exact: bool,
    ) -> Self:
        """Integrate out the states without fixes; they have a Gaussian of their own."""
        seen, observations = problem.observations.seen
        none = Sites.none(len(observations.state))
        band = point.band(problem, none, exact=exact)
        try:
            reduced = Reduced.of(band, point.gradient, seen)
        except NotPositiveDefinite:
            raise ModeNotFound("the Hessian between fixes is indefinite") from None
        own = adjoint[problem.observations.state, :2]
        return cls(observations, point.states[seen], reduced, own)

    def factored(self, sites: Sites) -> tuple[Float[np.ndarray, "kept dim 2*dim"], Cholesky]:
        """The precision with sites, and its factor."""
        band = self.reduced.band.copy()
        self.observations.add_information(sites, band)
        return band, factor(band)

    def marginals(
        self, sites: Sites, band: Float[np.ndarray, "kept dim 2*dim"], cholesky: Cholesky
    ) -> tuple[float, np.ndarray, np.ndarray]:
        """The Newton decrement of all states, and moments of e = x - y at the fixes' states."""
        gradient = self.reduced.gradient.copy()
        self.observations.add_gradient(sites, self.states, gradient)
        step = -cholesky.solve(gradient.reshape(-1)).reshape(gradient.shape)
        decrement = self.reduced.gained - float(np.sum(gradient * step))
        at = self.observations.state
        mean = self.observations.offset(self.states) + step[at, :2] + self.own
        try:
            backward = factor(reversed_band(band))
        except NotPositiveDefinite:
            raise ModeNotFound("the Hessian cannot be factored in reverse") from None
        covariance = block_covariances(band, cholesky, backward, at)[:, :2, :2]
        return decrement, mean, less_square(covariance, self.own)

    def towards(
        self, sites: Sites, wanted: Sites
    ) -> tuple[Sites, Float[np.ndarray, "kept dim 2*dim"], Cholesky]:
        """The wanted sites, or as far on the way to them as the Hessian stays positive."""
        share = 1.0
        for _ in range(12):
            trial = sites.mixed(wanted, share)
            try:
                return trial, *self.factored(trial)
            except NotPositiveDefinite:
                share *= 0.5
        raise ModeNotFound("no change of the sites keeps the Hessian positive definite")


def less_square(
    covariance: Float[np.ndarray, "n 2 2"], by: Float[np.ndarray, "n 2"]
) -> Float[np.ndarray, "n 2 2"]:
    """V - a a', or V - a a'/(1 + a' inv(V) a) where a is too long for that to be positive."""
    length = np.einsum("na,nab,nb->n", by, inverse_2x2(covariance), by)
    share = np.where(length < 0.5, 1.0, 1.0 / (1.0 + length))
    return covariance - share[:, None, None] * by[:, :, None] * by[:, None, :]


def _propagate(
    problem: TrackProblem,
    theta: Float[np.ndarray, " parameters"],
    warm: Warm,
    tolerance: float,
    site_tolerance: float,
) -> Approximation:
    """Rounds of: linearise the process; sweep the sites; take the Newton step.

    Around one point sites are swept until they move the marginals less than the step due will.
    """
    observations = problem.observations
    log_scale, log_nu = problem.error_parameters(theta)
    sites = warm.sites
    if sites is None:
        fix_hours = problem.hours[observations.state]
        sites = starting_sites(observations, fix_hours, log_scale, log_nu)
    point = evaluate_at(problem, theta, warm.states, warm.basis)
    if not np.isfinite(point.value):
        raise ModeNotFound("the density is not finite at the start")
    sweeps, mixer, patience, adjoint = 0, SiteMixer(), Patience(), warm.adjoint
    for rounds in range(MAX_ROUNDS):
        sites, band, cholesky, exact = _factored(problem, point, sites)
        fresh = adjoint is None or rounds > 0
        if adjoint is None or fresh:
            adjoint = spread_around(problem, theta, point, band, cholesky).adjoint
        linear = _Linear.at(problem, point, adjoint, exact=exact)
        band_seen, factor_seen = linear.towards(sites, sites)[1:]
        for _ in range(SWEEPS_PER_ROUND):
            decrement, mean, covariance = linear.marginals(sites, band_seen, factor_seen)
            cavity = cavities(sites, mean, covariance)
            moments = tilted(observations, cavity, log_scale, log_nu)
            moved = _moved(moments, mean, covariance, cavity)
            sweeps += 1
            if not np.isfinite(moved) or not np.isfinite(decrement):
                raise ModeNotFound("a site's moments are not finite")
            due = np.sqrt(max(decrement, 0.0) / len(observations.state))
            if moved < max(site_tolerance, due):
                break
            wanted = mixer.proposed(sites, matched_sites(sites, cavity, moments), covariance)
            sites, band_seen, factor_seen = linear.towards(sites, wanted)
        if fresh and moved < site_tolerance and decrement < tolerance:
            if not exact:
                raise ModeNotFound("the Hessian is indefinite where the gradient vanishes")
            if not cavity.sound.all():
                raise ModeNotFound("a site holds more than all that is known of its fix")
            band, cholesky, _ = factored(problem, point, sites)
            spread = spread_around(problem, theta, point, band, cholesky)
            mode = Mode(theta, point, sites, band, cholesky, rounds)
            return Approximation(problem, mode, spread, cavity, moments, sweeps)
        point = _step(problem, theta, sites, point, patience)
    raise ModeNotFound(f"the sites did not settle in {MAX_ROUNDS} rounds")


def _factored(
    problem: TrackProblem, point: Point, sites: Sites
) -> tuple[Sites, Float[np.ndarray, "states dim 2*dim"], Cholesky, bool]:
    """Factor the Hessian; sites of negative precision give way where they leave it none."""
    try:
        return sites, *factored(problem, point, sites)
    except ModeNotFound:
        sites = sites.without_negative()
        return sites, *factored(problem, point, sites)


def _moved(moments: Tilted, mean: np.ndarray, covariance: np.ndarray, cavity: Cavity) -> float:
    """Largest change that matching would make to a marginal, in shares of its sd."""
    scale = np.sqrt(np.einsum("kaa->ka", covariance))
    by_mean = np.abs(moments.mean_km - mean) / scale
    by_covariance = np.abs(moments.covariance_km2 - covariance) / (
        scale[:, :, None] * scale[:, None, :]
    )
    change = np.maximum(by_mean.max(axis=1), by_covariance.max(axis=(1, 2)))
    return float(change[cavity.sound].max(initial=0.0))


def _step(
    problem: TrackProblem, theta: np.ndarray, sites: Sites, point: Point, patience: Patience
) -> Point:
    """One Newton step of the states with the sites held."""
    _, cholesky, _ = factored(problem, point, sites)
    gradient = point.full_gradient(problem, sites)
    step = -cholesky.solve(gradient.reshape(-1)).reshape(gradient.shape)
    decrement = -float(np.sum(gradient * step))
    return line_search(problem, theta, sites, point, step, decrement, patience)
