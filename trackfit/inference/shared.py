"""Several tracks that share some parameters: what all of them together know of these.

Track i has parameters a_i of its own and the shared b. Its likelihood, with a_i integrated out by
Laplace's method, is a function of b alone; a normal *site* stands for it,

    s_i(b) = exp(r_i' b - b' Q_i b / 2),

and the posterior of b is p0(b) prod_i s_i(b), with precision P = P0 + sum_i Q_i and mean m. Each
track is fitted with its *cavity* p0 prod_(k != i) s_k, normal with precision C and shift c, as the
prior of b. With g and H the gradient and Hessian of its negative log posterior where the search
ended, and A = inv(H_aa) H_ab,

    Q_i = H_bb - H_ba A - C,      r_i = Q_i b - (g_b - A' g_a - C b + c)

is its new site: the Laplace approximation of the tilted posterior divided by the cavity (Laplace
propagation: Smola, Vishwanathan & Eskin 2003, Adv. Neural Inf. Process. Syst. 16; over parts of the
data as here: Gelman et al. 2020, J. Mach. Learn. Res. 21:17). Each track is first fitted by itself;
then all are swept in turn until b has settled. Then every track's mode of b is m, so the slopes of
all tracks and of p0 add up to nothing there: m is the mode of all parameters of all tracks. The
Hessian of them all is an arrow, a block for each a_i beside b, and P is its Schur complement for b:
the inverse of P, carried to a_i through A, is the joint Laplace approximation.

Where a track's likelihood is not concave in b, Q_i has negative eigenvalues. Cavities take them for
zero with the slope kept, which leaves the fixed point where it is; the covariance counts them. A
track that cannot be fitted takes no part.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.estimates import parameter_table
from trackfit.inference.fit import LEAST_CURVATURE, Fit, FitStatus, Start, fit_track
from trackfit.inference.optimise import Rejected, nearest_positive
from trackfit.inference.parameters import JointNormal, ParameterSet
from trackfit.inference.search import Search
from trackfit.inference.task import FitSettings, Model, TrackData

MAX_SWEEPS = 12

SETTLED_MOVE = 0.02
"""Largest move of the mean of a shared parameter in the last sweep, in standard deviations, and
largest relative change of its standard deviation."""

NEAR = 0.05
"""A Hessian serves as long as its track's parameters stay so near, in standard errors."""

MAX_ATTEMPTS = 2
"""Searches from nothing that a track gets in the sweeps."""

KNOWS_NOTHING = 1e-8
"""Precision, in units of the parameters' reach, that stands for none."""

Vector = Float[np.ndarray, " shared"]
Square = Float[np.ndarray, "shared shared"]

TagProgress = Callable[[str, float, str], None]

Revise = Callable[[ParameterSet, Vector, Square], ParameterSet]
"""From the parameters, and the mean and covariance of the shared ones, to the same parameters with
other priors of the shared ones."""


class Task(NamedTuple):
    """One of the tracks that share parameters, and how it is fitted."""

    data: TrackData
    model: Model
    settings: FitSettings
    report_hours: Float[np.ndarray, " n"]


def _silent(tag: str, done: float, message: str) -> None:
    """Take no notice of progress."""


def fit_shared(
    tasks: Sequence[Task],
    progress: TagProgress = _silent,
    revise: Revise | None = None,
    max_sweeps: int = MAX_SWEEPS,
) -> list[Fit]:
    """Fit tracks whose models mark some parameters as shared; these come out the same for all.

    Each fit is as `fit_track` makes it, with the cavity as the prior of the shared parameters in
    its model, and the joint covariance. A track that cannot be fitted keeps the status of its own
    fit. `revise` is asked after every sweep.

    Raises
    ------
    ValueError
        The tracks do not share the same parameters.
    """
    tags = [_Tag(task) for task in tasks]
    _refuse_different(tags)
    if not tags or not tags[0].at.size:
        return [_alone(task, progress) for task in tasks]
    whole = _Whole(tags, tasks[0].model.parameters)
    settled, before = False, whole.posterior()
    for sweep in range(max_sweeps):
        for tag in tags:
            cavity = whole.cavity(tag) if sweep else whole.prior(tag)
            tag.sweep(cavity, sweep, progress)
        after = whole.posterior()
        if revise is not None:
            whole.take(revise(whole.parameters, *after))
            after = whole.posterior()
        settled = sweep > 0 and _settled(before, after)
        before = after
        if settled:
            break
    return [tag.conclude(whole.cavity(tag), before, settled, progress) for tag in tags]


def _alone(task: Task, progress: TagProgress) -> Fit:
    return fit_track(*task, lambda done, message: progress(task.data.tag, done, message))


def _refuse_different(tags: Sequence[_Tag]) -> None:
    names = [tuple(tag.model.parameters.all[i].name for i in tag.at) for tag in tags]
    if len(set(names)) > 1:
        raise ValueError(f"the tracks do not share the same parameters: {sorted(set(names))}")


Posterior = tuple[Vector, Square]


def _settled(before: Posterior, after: Posterior) -> bool:
    sd_before, sd = (np.sqrt(np.diag(covariance)) for _, covariance in (before, after))
    moved = np.abs(after[0] - before[0]) / sd
    return bool(max(moved.max(), np.abs(sd_before / sd - 1.0).max()) < SETTLED_MOVE)


@dataclass(frozen=True)
class _Site:
    """What one track says of the shared parameters.

    `curvature` is Q; in `precision` its negative eigenvalues are zero.
    """

    curvature: Square
    precision: Square
    shift: Vector

    @classmethod
    def of(cls, curvature: Square, slope: Vector, at: Vector, reach: Vector) -> _Site:
        """From slope and curvature of a negative log likelihood at a place."""
        values, vectors = np.linalg.eigh(curvature * np.outer(reach, reach))
        scaled = (vectors * np.maximum(values, 0.0)) @ vectors.T
        precision = scaled / np.outer(reach, reach)
        return cls(curvature, precision, precision @ at - slope)


class _Tag:
    """One track on its way: where its search ended, the Hessian near there, and its site."""

    def __init__(self, task: Task) -> None:
        self.task = task
        self.model = task.model
        self.at = task.model.parameters.shared_at
        self.site: _Site | None = None
        self.search: Search | None = None
        self.found: _Found | None = None
        self.attempts = 0

    def sweep(self, cavity: JointNormal, number: int, progress: TagProgress) -> None:
        """Fit with a cavity and renew the site; without a fit there is none."""
        name = self.task.data.tag
        self.site = None
        try:
            if self.found is None:
                self.attempts += 1
                if self.attempts <= MAX_ATTEMPTS:
                    self._fit_anew(cavity, lambda done, words: progress(name, 0.5 * done, words))
            else:
                progress(name, 0.5 + 0.1 * number / MAX_SWEEPS, f"sweep {number + 1} over all tags")
                self._fit_again(cavity)
        except Rejected:
            self.found = None
        if self.found is not None:
            self.site = self.found.site(cavity)

    def _fit_anew(self, cavity: JointNormal, progress: Callable[[float, str], None]) -> None:
        data, _, settings, report_hours = self.task
        plain = replace(settings, points=0, step_check=False)
        fit = fit_track(data, self._with(cavity), plain, report_hours, progress)
        if fit.states is None or fit.status is FitStatus.NOT_CONVERGED:
            return
        # smooth terms of the track's own have their spreads now
        own = replace(fit.model.parameters, joint=None)
        self.model = replace(self.model, parameters=own)
        search = Search(data, self.model, settings.step_hours, report_hours)
        search.warm = fit.states.approximation.warm
        self.search = search
        # what the others say may settle what this track leaves open
        self._run(cavity, fit.states.theta, np.linalg.inv(fit.states.theta_covariance))

    def _fit_again(self, cavity: JointNormal) -> None:
        assert self.found is not None
        hessian = self.found.hessian(cavity)
        metric = nearest_positive(hessian, self.found.reach**-2.0)
        self._run(cavity, self.found.theta, metric)

    def _run(self, cavity: JointNormal, start: np.ndarray, metric: np.ndarray) -> None:
        """Search with a cavity; keep the Hessian of the rest where the old one serves no more."""
        search, old = self.search, self.found
        assert search is not None
        search.parameters = replace(search.parameters, joint=cavity)
        found = search.run(start, metric, self.task.settings.max_iterations, lambda i, d: None)
        self.found = None
        if not found.converged:
            return
        shared = search.parameters.places(self.at)
        if old is not None and old.serves_at(found.at, cavity):
            rest, rest_at = old.rest, old.rest_at
        else:
            rest, rest_at = search.hessian(found), found.at
            rest[np.ix_(shared, shared)] -= cavity.precision
        reach = np.array([p.reach for p in search.parameters.free])
        new = _Found(found.at, found.gradient, rest, rest_at, shared, reach)
        self.found = new if new.knows_its_own else None

    def _with(self, cavity: JointNormal) -> Model:
        return replace(self.model, parameters=replace(self.model.parameters, joint=cavity))

    def take_priors(self, parameters: ParameterSet) -> None:
        """Take over the shared parameters of another set."""
        own = list(self.model.parameters.all)
        for place, other in zip(self.at, parameters.shared_at, strict=True):
            own[place] = parameters.all[other]
        changed = replace(self.model.parameters, all=tuple(own))
        self.model = replace(self.model, parameters=changed)

    def conclude(
        self, cavity: JointNormal, posterior: Posterior, settled: bool, progress: TagProgress
    ) -> Fit:
        """The whole fit, from where the sweeps ended."""
        data, _, settings, report_hours = self.task

        def tell(done: float, words: str) -> None:
            progress(data.tag, 0.6 + 0.4 * done, words)

        begin = None if self.found is None else self.found.begin(cavity, posterior[0])
        fit = fit_track(data, self._with(cavity), settings, report_hours, tell, begin)
        if self.found is None or fit.states is None:
            return fit
        if fit.status.ok and not settled:
            fit = replace(fit, status=FitStatus.NOT_SETTLED)
        return _with_posterior(fit, self.found.shared, posterior)


@dataclass(frozen=True)
class _Found:
    """Where a track's search ended.

    Attributes
    ----------
    gradient
        Of the negative log posterior, its cavity included.
    rest
        Hessian without the cavity, taken at `rest_at`.
    shared
        Places of the shared parameters among the free.
    """

    theta: Float[np.ndarray, " free"]
    gradient: Float[np.ndarray, " free"]
    rest: Float[np.ndarray, "free free"]
    rest_at: Float[np.ndarray, " free"]
    shared: Int[np.ndarray, " shared"]
    reach: Float[np.ndarray, " free"]

    @property
    def own(self) -> Int[np.ndarray, " own"]:
        """Places of the track's own parameters among the free."""
        return np.setdiff1d(np.arange(len(self.theta)), self.shared)

    @property
    def knows_its_own(self) -> bool:
        """Whether the track determines its own parameters were the shared ones known."""
        own, reach = self.own, self.reach[self.own]
        scaled = self.rest[np.ix_(own, own)] * np.outer(reach, reach)
        return bool(np.isfinite(self.rest).all()) and bool(
            np.linalg.eigvalsh(scaled).min(initial=np.inf) >= LEAST_CURVATURE
        )

    def hessian(self, cavity: JointNormal) -> Float[np.ndarray, "free free"]:
        """Hessian of the negative log posterior with a cavity."""
        whole = self.rest.copy()
        whole[np.ix_(self.shared, self.shared)] += cavity.precision
        return whole

    def serves_at(self, theta: Float[np.ndarray, " free"], cavity: JointNormal) -> bool:
        """Whether the Hessian is near enough to serve for other parameters."""
        apart = theta - self.rest_at
        return bool(apart @ self.hessian(cavity) @ apart < NEAR**2)

    def _across(self) -> Float[np.ndarray, "own shared"]:
        """A = inv(H_aa) H_ab: by how much the own parameters give way to the shared ones."""
        own, shared = self.own, self.shared
        return np.linalg.solve(self.rest[np.ix_(own, own)], self.rest[np.ix_(own, shared)])

    def site(self, cavity: JointNormal) -> _Site:
        """The track's site, given the cavity it was fitted with."""
        own, shared, across = self.own, self.shared, self._across()
        curvature = self.rest[np.ix_(shared, shared)] - self.rest[np.ix_(shared, own)] @ across
        at = self.theta[shared]
        slope = self.gradient[shared] - across.T @ self.gradient[own]
        slope = slope - (cavity.precision @ at - cavity.shift)
        return _Site.of(0.5 * (curvature + curvature.T), slope, at, self.reach[shared])

    def begin(self, cavity: JointNormal, mean: Vector) -> Start:
        """The shared parameters at their mean, the own ones where that puts them."""
        own, shared = self.own, self.shared
        theta = self.theta.copy()
        inside = self.rest[np.ix_(own, own)]
        theta[own] -= np.linalg.solve(inside, self.gradient[own])
        theta[own] -= self._across() @ (mean - self.theta[shared])
        theta[shared] = mean
        return theta, nearest_positive(self.hessian(cavity), self.reach**-2.0)


class _Whole:
    """All tracks: the posterior of the shared parameters and its cavities."""

    def __init__(self, tags: Sequence[_Tag], parameters: ParameterSet) -> None:
        self.tags = tags
        self.parameters = parameters

    def take(self, revised: ParameterSet) -> None:
        """Take other priors of the shared parameters."""
        self.parameters = revised
        for tag in self.tags:
            tag.take_priors(revised)

    def _prior(self) -> tuple[Square, Vector]:
        shared = [self.parameters.all[i] for i in self.parameters.shared_at]
        precision = np.array([p.prior_sd**-2.0 for p in shared])
        return np.diag(precision), precision * np.array([p.prior_mean for p in shared])

    def prior(self, tag: _Tag) -> JointNormal:
        """The prior alone: every track is first fitted by itself, as if nothing were shared."""
        return JointNormal(tag.at, *self._prior())

    def cavity(self, left_out: _Tag) -> JointNormal:
        """The prior and the sites of all tracks but one."""
        precision, shift = self._prior()
        for tag in self.tags:
            if tag is not left_out and tag.site is not None:
                precision, shift = precision + tag.site.precision, shift + tag.site.shift
        return JointNormal(left_out.at, precision, shift)

    def posterior(self) -> Posterior:
        """Mean and covariance of the shared parameters."""
        precision, shift = self._prior()
        curvature = precision
        for site in (tag.site for tag in self.tags if tag.site is not None):
            precision, shift = precision + site.precision, shift + site.shift
            curvature = curvature + site.curvature
        reach = np.array([self.parameters.all[i].reach for i in self.parameters.shared_at])
        mean = _inverse(precision, reach) @ shift
        scaled = np.linalg.eigvalsh(curvature * np.outer(reach, reach))
        return mean, _inverse(curvature if scaled[0] >= KNOWS_NOTHING else precision, reach)


def _inverse(precision: Square, reach: Vector) -> Square:
    """Inverse of a precision; a direction of which nothing is known gets a huge variance."""
    values, vectors = np.linalg.eigh(precision * np.outer(reach, reach))
    inside = (vectors / np.maximum(values, KNOWS_NOTHING)) @ vectors.T
    return inside * np.outer(reach, reach)


def _with_posterior(fit: Fit, shared: Int[np.ndarray, " shared"], posterior: Posterior) -> Fit:
    """A track's fit with the covariance, and the rows of shared parameters, of all tracks.

    With Sigma = inv(P) and A as above, cov(a, b) = -A Sigma and cov(a) = inv(H_aa) + A Sigma A'.
    """
    states = fit.states
    assert states is not None
    mean, sigma = posterior
    hessian = np.linalg.inv(states.theta_covariance)
    own = np.setdiff1d(np.arange(len(hessian)), shared)
    inside = np.linalg.inv(hessian[np.ix_(own, own)])
    across = inside @ hessian[np.ix_(own, shared)]
    covariance = np.empty_like(hessian)
    covariance[np.ix_(shared, shared)] = sigma
    covariance[np.ix_(own, shared)] = -across @ sigma
    covariance[np.ix_(shared, own)] = -sigma @ across.T
    covariance[np.ix_(own, own)] = inside + across @ sigma @ across.T
    theta = states.theta.copy()
    theta[shared] = mean
    model = fit.model
    parameters = model.parameters.with_spells(len(theta) - len(model.parameters.free))
    table = parameter_table(parameters, model.motion, theta, covariance, states.sample)
    return replace(fit, parameters=table, states=replace(states, theta_covariance=covariance))
