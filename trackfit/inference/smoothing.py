"""How smooth a curve is: the spread of its bends, by the marginal likelihood.

The bends beta of a smooth term have the prior N(0, tau^2). With V their covariance at the mode,

    edf = J - tr(V) / tau^2

of the J bends are told by the data (the rest is the prior's), and the marginal likelihood of tau,
beta integrated out by Laplace's method, is stationary where

    tau^2 = beta' beta / edf

(MacKay 1992, Neural Comput. 4:415; for penalised regression Wood & Fasiolo 2017, Biometrics
73:1071, whose update this is). It is repeated on the quadratic approximation of the log likelihood
at the mode until tau settles there; then the parameters are fitted anew, and so on.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from jaxtyping import Float

from trackfit.inference.optimise import Minimum, Rejected, nearest_positive
from trackfit.inference.parameters import ParameterSet
from trackfit.inference.search import Search

SETTLED, SETTLED_BENDS = 0.05, 0.03
"""Tau has settled where its logarithm, or the number of bends told, moves by less."""

MOST_TURNS, MOST_UPDATES = 10, 500
LONGEST = (np.log(0.1), np.log(3.0))
"""How far log tau goes on one quadratic approximation."""

LEAST_SHARE = 1e-3
"""Least tau, as a share of what it started from: the curve is then a straight line."""


def smooth_groups(parameters: ParameterSet) -> dict[str, Float[np.ndarray, " bends"]]:
    """Places among the free parameters of each smooth term's bends, by the term's name."""
    groups: dict[str, list[int]] = {}
    for i, parameter in enumerate(parameters.free):
        if parameter.smooth is not None:
            groups.setdefault(parameter.smooth, []).append(i)
    return {name: np.array(at) for name, at in groups.items()}


def _own_groups(parameters: ParameterSet) -> dict[str, Float[np.ndarray, " bends"]]:
    """Those whose tau is the track's own affair: no joint prior stands in its place."""
    joint = parameters.joint
    held = set() if joint is None else set(parameters.places(joint.at))
    groups = smooth_groups(parameters)
    return {name: at for name, at in groups.items() if not held.intersection(at)}


def revise_shared(
    parameters: ParameterSet,
    mean: Float[np.ndarray, " shared"],
    covariance: Float[np.ndarray, "shared shared"],
) -> ParameterSet:
    """The set with the tau of every smooth term that tags share updated, if it had not settled.

    Parameters
    ----------
    mean, covariance
        Of the shared parameters, by all tags.
    """
    shared_at = parameters.shared_at
    shared = ParameterSet(tuple(parameters.all[i] for i in shared_at))
    changed, settled = with_spread(shared, mean, np.linalg.inv(covariance))
    if settled:
        return parameters
    every = list(parameters.all)
    for place, parameter in zip(shared_at, changed.all, strict=True):
        every[place] = parameter
    return replace(parameters, all=tuple(every))


def effective_bends(
    parameters: ParameterSet, covariance: Float[np.ndarray, "free free"]
) -> dict[str, float]:
    """How many bends of each smooth term the data tell: 0 is a straight line."""
    found = {}
    for name, at in smooth_groups(parameters).items():
        tau = parameters.free[at[0]].prior_sd
        told = len(at) - np.trace(covariance[np.ix_(at, at)]) / tau**2
        found[name] = float(np.clip(told, 0.0, len(at)))
    return found


def with_spread(
    parameters: ParameterSet,
    free: Float[np.ndarray, " free"],
    hessian: Float[np.ndarray, "free free"],
) -> tuple[ParameterSet, bool]:
    """The set with every smooth term's tau updated; says whether all had settled before.

    Parameters
    ----------
    free, hessian
        The mode, and the Hessian of the negative log posterior there.
    """
    groups = _own_groups(parameters)
    floor = np.array([1e-6 * p.reach**-2.0 for p in parameters.free])
    before = _prior_precision(parameters)
    mean = np.array([p.prior_mean for p in parameters.free])
    tau = {name: parameters.free[at[0]].prior_sd for name, at in groups.items()}
    first = dict(tau)
    told: dict[str, list[float]] = {name: [] for name in groups}
    for _ in range(MOST_UPDATES):
        now = before.copy()
        for name, at in groups.items():
            now[at] = tau[name] ** -2.0
        covariance = np.linalg.inv(nearest_positive(hessian + np.diag(now - before), floor))
        at_mode = free - covariance @ ((now - before) * (free - mean))
        moved = 0.0
        for name, at in groups.items():
            own = np.trace(covariance[np.ix_(at, at)])
            bends = float(np.clip(len(at) - own / tau[name] ** 2, 1e-9, len(at)))
            told[name].append(bends)
            wanted = 0.5 * np.log(np.sum(at_mode[at] ** 2) / bends + 1e-300)
            low, high = np.log(first[name]) + np.array(LONGEST)
            low = max(low, np.log(LEAST_SHARE * parameters.free[at[0]].reach))
            wanted = float(np.clip(wanted, low, max(high, low)))
            moved = max(moved, abs(wanted - np.log(tau[name])))
            tau[name] = float(np.exp(wanted))
        if moved < 1e-4:
            break
    settled = all(
        abs(np.log(tau[name] / first[name])) < SETTLED
        or abs(told[name][-1] - told[name][0]) < SETTLED_BENDS
        for name in groups
    )
    every = tuple(
        replace(p, prior_sd=tau[p.smooth]) if p.smooth in tau else p for p in parameters.all
    )
    return replace(parameters, all=every), settled


def settle(search: Search, found: Minimum, max_iterations: int) -> Minimum:
    """Update the spreads and search anew, in turn; the search's parameters are replaced.

    A search that does not converge, or finds no mode, ends it.
    """
    if not _own_groups(search.parameters):
        return found
    for _ in range(MOST_TURNS):
        if not found.converged:
            break
        before = search.parameters
        try:
            hessian = search.hessian(found)
            search.parameters, settled = with_spread(before, found.at, hessian)
            if settled:
                search.parameters = before
                break
            floor = np.array([p.reach**-2.0 for p in before.free])
            change = _prior_precision(search.parameters) - _prior_precision(before)
            metric = nearest_positive(hessian + np.diag(change), floor)
            found = search.run(found.at, metric, max_iterations, _silent)
        except Rejected:
            search.parameters = before
            break
    return found


def _silent(iteration: int, decrement: float) -> None:
    """Tell nothing of a search within a search."""


def _prior_precision(parameters: ParameterSet) -> Float[np.ndarray, " free"]:
    return np.array([p.prior_sd**-2.0 for p in parameters.free])
