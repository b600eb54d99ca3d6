"""A fit judged: its scores, its residuals, its error sizes, and what its parameters can tell.

Everything here is a number beside what it should be; `verdicts` puts it into words.
"""

from __future__ import annotations

import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from jaxtyping import Float
from scipy.stats import chi2

from trackfit.analysis import Prepared
from trackfit.criticism.error_sizes import ErrorSize, error_size, factor_of_kind
from trackfit.criticism.residuals import Beside, Residuals, residuals_of
from trackfit.errors import error_kinds
from trackfit.inference.fit import Fit, FitStatus
from trackfit.inference.smoothing import effective_bends, smooth_groups
from trackfit.inference.states import States
from trackfit.inference.task import TrackData
from trackfit.motion import DistanceTerm
from trackfit.motion.terms import TermName
from trackfit.usable import error_rules

DRIFT = "current.drift"


@dataclass(frozen=True)
class Scores:
    """How well a model foretells a track; for comparing models of the same fixes.

    Attributes
    ----------
    fixes
        n: the fixes used. The two coordinates of a fix count as one.
    estimated
        k: the parameters that were estimated; those held fixed do not count, and the bends of a
        smooth term count as many as the data tell.
    log_marginal
        Logarithm of the marginal likelihood (fixes in km) at the estimates. Where the pace varies
        it is averaged over the paces by Laplace's method.
    aic, aicc
        2 k - 2 log_marginal (Akaike 1974, IEEE Trans. Autom. Control 19:716), and with the
        correction 2 k (k + 1)/(n - k - 1) for short tracks (Hurvich & Tsai 1989, Biometrika
        76:297), NaN where n <= k + 1.
    leave_one_out
        Sum of the log predictive densities of all fixes, each from all others.
    """

    fixes: int
    estimated: float
    log_marginal: float
    aic: float
    aicc: float
    leave_one_out: float


@dataclass(frozen=True)
class Effect:
    """Whether a term of the velocity field is distinguishable from none.

    Attributes
    ----------
    term
        Name of the preference term, or `current.drift`.
    amplitudes, sd
        Estimates and their standard deviations; of a humped term linear, then squared.
    statistic, p_value
        a' inv(cov) a, and its chance by chi-squared with as many degrees of freedom as amplitudes
        if there were no effect (Wald 1943, Trans. Am. Math. Soc. 54:426).
    best, unit
        Value of the layer that a humped term likes best (least, where its squared amplitude is
        positive); NaN for other shapes.
    shape
        linear, humped, distance, smooth or drift.
    shared
        Whether the estimates are of all tags of the study together.
    """

    term: str
    shape: str
    amplitudes: Float[np.ndarray, " k"]
    sd: Float[np.ndarray, " k"]
    statistic: float
    p_value: float
    best: float = float("nan")
    unit: str = ""
    shared: bool = False

    @property
    def found(self) -> bool:
        """Whether no effect is outside of the 95 % region."""
        return self.p_value < 0.05


@dataclass(frozen=True)
class ParameterPair:
    """Two estimated parameters and the correlation of their posterior."""

    first: str
    second: str
    correlation: float


@dataclass(frozen=True)
class Criticism:
    """The fit of one tag, judged. Where nothing was fitted, all but the first three are empty.

    Attributes
    ----------
    motion
        Name of the motion fitted.
    heavy
        Whether errors have heavy tails.
    scale_estimated
        Whether the fit estimated the error scale.
    kind_factors
        By kind of fix, the factor for its error sizes that makes its leave-one-out predictions
        likeliest: a first estimate. NaN for kinds of fewer than 10 fixes, and where there is but
        one kind, which `error_size` judges better.
    first_lag, early_lags
        Autocorrelation of the one-step-ahead residuals at lag 1, and the mean of lags 1 to 5, of
        the fit with the error scale free where one was made: what is left is the motion's.
    """

    tag: str
    status: FitStatus
    motion: str
    heavy: bool
    scale_estimated: bool
    scores: Scores
    residuals: Residuals | None
    error_size: ErrorSize | None
    kind_factors: Mapping[str, float]
    first_lag: Beside | None
    early_lags: Beside | None
    effects: tuple[Effect, ...]
    correlations: tuple[ParameterPair, ...]


LEAST_OF_KIND = 10

POINTS_A_PARAMETER = 3.0
"""Effective weighted points a parameter needs for their covariance to be of use."""


def criticise_fits(prepared: Prepared, fits: Sequence[Fit]) -> list[Criticism]:
    """Judge the fit of every tag. A tag that was not fitted has a criticism that says so."""
    rules = error_rules(prepared.study)
    found = []
    for fit in fits:
        kinds = error_kinds(prepared.fixes.of(fit.tag), rules)
        seed = zlib.crc32(fit.tag.encode()) ^ prepared.study.study.seed
        data = prepared.tracks[fit.tag]
        found.append(criticise(fit, data, kinds, prepared.model.names, seed))
    return found


def criticise(
    fit: Fit,
    data: TrackData,
    kinds: Sequence[str],
    names: Sequence[TermName],
    seed: int,
) -> Criticism:
    """Judge one fit.

    Parameters
    ----------
    data
        The fixes it was fitted to.
    kinds
        What describes the error of each fix.
    names
        Of the preference terms, in the model's order.
    seed
        Of the tracks drawn for the residuals' bands.
    """
    states = fit.states
    if states is None:
        return _nothing(fit)
    residuals = residuals_of(states.approximation, kinds, seed)
    size = error_size(fit, data)
    judged = residuals
    if size is not None and size.freed is not None and size.freed.states is not None:
        judged = residuals_of(size.freed.states.approximation, kinds, seed)
    return Criticism(
        tag=fit.tag,
        status=fit.status,
        motion=fit.model.motion.name,
        heavy=fit.model.heavy,
        scale_estimated=states.problem.n_process in states.free_at,
        scores=scores_of(fit, float(residuals.left_out.log_density.sum())),
        residuals=residuals,
        error_size=size,
        kind_factors=_kind_factors(states, residuals, np.asarray(kinds)),
        first_lag=judged.first_lag,
        early_lags=judged.early_lags,
        effects=tuple(effects_of(fit, names)),
        correlations=tuple(correlations_of(fit)),
    )


def _nothing(fit: Fit) -> Criticism:
    nan = float("nan")
    free = len(fit.model.parameters.free)
    return Criticism(
        tag=fit.tag,
        status=fit.status,
        motion=fit.model.motion.name,
        heavy=fit.model.heavy,
        scale_estimated=any(p.name == "error_scale" for p in fit.model.parameters.free),
        scores=Scores(fit.n_fixes, free, nan, nan, nan, nan),
        residuals=None,
        error_size=None,
        kind_factors={},
        first_lag=None,
        early_lags=None,
        effects=(),
        correlations=(),
    )


def scores_of(fit: Fit, leave_one_out: float) -> Scores:
    """The scores of a fitted track."""
    assert fit.states is not None
    k = effective_number(fit)
    log_marginal = float(fit.log_marginal) + _average_over_spells(fit.states)
    aic = information_criterion(log_marginal, k)
    corrected = information_criterion(log_marginal, k, fit.n_fixes)
    return Scores(fit.n_fixes, k, log_marginal, aic, corrected, leave_one_out)


def effective_number(fit: Fit) -> float:
    """Parameters that were estimated; of the bends of a smooth term those that the data tell."""
    assert fit.states is not None
    parameters = fit.model.parameters
    told = effective_bends(parameters, fit.states.theta_covariance)
    held = sum(len(at) for at in smooth_groups(parameters).values())
    return len(parameters.free) - held + sum(told.values())


def information_criterion(
    log_likelihood: float, estimated: float, size: int | None = None
) -> float:
    """Akaike's criterion, corrected for the size of the sample if it is given.

    Examples
    --------
    >>> information_criterion(-637.7569, 4), information_criterion(-637.7569, 4, 100)
    (1283.5138, 1283.9348526315789)
    >>> information_criterion(-10.0, 4, 5)
    nan
    """
    aic = 2.0 * estimated - 2.0 * log_likelihood
    if size is None:
        return aic
    left = size - estimated - 1
    return aic + 2.0 * estimated * (estimated + 1) / left if left > 0 else float("nan")


def _average_over_spells(states: States) -> float:
    """Laplace's correction of the log likelihood from the likeliest paces to their average.

    log p(u) + (m/2) log 2 pi - 1/2 log det H_uu with u standard normal and H the posterior's
    Hessian: -1/2 u'u - 1/2 log det H_uu.
    """
    pace = states.problem.pace
    if pace is None:
        return 0.0
    paces = states.theta[-pace.spells :]
    hessian = np.linalg.inv(states.theta_covariance)[-pace.spells :, -pace.spells :]
    return float(-0.5 * paces @ paces - 0.5 * np.linalg.slogdet(hessian)[1])


def _kind_factors(states: States, residuals: Residuals, kinds: np.ndarray) -> dict[str, float]:
    problem = states.problem
    errors = problem.error_parameters(states.approximation.theta)
    error_km2 = problem.observations.covariance_km2 * np.exp(2.0 * errors[0])
    prediction_km2 = residuals.left_out.covariance_km2 - error_km2
    log_nu = float(errors[1]) if problem.observations.heavy else None
    factors = {}
    for kind in residuals.by_kind:
        at = kinds == kind
        parts = (residuals.left_out.offset_km[at], prediction_km2[at], error_km2[at])
        enough = at.sum() >= LEAST_OF_KIND and len(residuals.by_kind) > 1
        factors[kind] = factor_of_kind(*parts, log_nu) if enough else float("nan")
    return factors


def _posterior(states: States) -> tuple[Float[np.ndarray, " free"], Float[np.ndarray, "free free"]]:
    """Mean and covariance of the free parameters: of the posterior's sample, if there is one."""
    enough = POINTS_A_PARAMETER * len(states.theta)
    if states.sample is None or states.sample.effective < enough:
        return states.theta, states.theta_covariance
    return states.sample.mean, states.sample.covariance


def effects_of(fit: Fit, names: Sequence[TermName]) -> list[Effect]:
    """Test every estimated term of the velocity field against none."""
    assert fit.states is not None
    found = []
    first = len(fit.model.motion.parameters)
    for term, name in zip(fit.model.field.terms, names, strict=True):
        places = range(first, first + term.n_amplitudes)
        first += term.n_amplitudes
        amplitudes, covariance = _amplitudes(fit, places)
        shared = fit.model.parameters.all[places[0]].shared
        if isinstance(term, DistanceTerm):
            effect = _effect(name.term, "distance", amplitudes, covariance)
            found.append(replace(effect, shared=shared))
            continue
        shape = {1: "linear", 2: "humped"}.get(term.n_amplitudes, "smooth")
        best = float("nan")
        if shape == "humped" and amplitudes[1] != 0.0:
            top = -amplitudes[0] / (2.0 * amplitudes[1])
            best = float(term.centre) + float(term.scale) * float(top)
        effect = _effect(name.term, shape, amplitudes, covariance, best, name.unit)
        found.append(replace(effect, shared=shared))
    if fit.model.field.current is not None and first in fit.states.free_at:
        effect = _effect(DRIFT, "drift", *_amplitudes(fit, [first]))
        found.append(replace(effect, shared=fit.model.parameters.all[first].shared))
    return found


def _amplitudes(
    fit: Fit, places: Sequence[int]
) -> tuple[Float[np.ndarray, " k"], Float[np.ndarray, "k k"]]:
    """Estimates and their covariance; of shared ones those of all tags, which no points have."""
    states = fit.states
    assert states is not None
    mean, covariance = _posterior(states)
    if fit.model.parameters.all[places[0]].shared:
        mean, covariance = states.theta, states.theta_covariance
    at = [list(states.free_at).index(place) for place in places]
    return mean[at], covariance[np.ix_(at, at)]


def _effect(
    term: str,
    shape: str,
    amplitudes: Float[np.ndarray, " k"],
    covariance: Float[np.ndarray, "k k"],
    best: float = float("nan"),
    unit: str = "",
) -> Effect:
    statistic = float(amplitudes @ np.linalg.solve(covariance, amplitudes))
    p_value = float(chi2.sf(statistic, len(amplitudes)))
    sd = np.sqrt(np.diag(covariance))
    return Effect(term, shape, amplitudes, sd, statistic, p_value, best, unit)


def correlations_of(fit: Fit) -> list[ParameterPair]:
    """Correlations of all pairs of estimated parameters, on the engine's scale."""
    assert fit.states is not None
    names = [p.name for p in fit.model.parameters.free]
    covariance = _posterior(fit.states)[1]
    sd = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(sd, sd)
    return [
        ParameterPair(names[i], names[j], float(correlation[i, j]))
        for i in range(len(names))
        for j in range(i + 1, len(names))
    ]
