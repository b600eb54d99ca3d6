"""How smooth a curve is: the spread of its bends, by the marginal likelihood.

The bends beta of a smooth term have the prior N(0, tau^2). With V their covariance at the mode,

    edf = J - tr(V) / tau^2

of the J bends are told by the data (the rest is the prior's), and the marginal likelihood of tau,
beta integrated out by Laplace's method, is stationary where

    tau^2 = beta' beta / edf

(MacKay 1992, Neural Comput. 4:415; for penalised regression Wood & Fasiolo 2017, Biometrics
73:1071, whose update this is). Fitting and updating take turns until tau settles.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from jaxtyping import Float

from trackfit.inference.optimise import Minimum, nearest_positive
from trackfit.inference.parameters import ParameterSet
from trackfit.inference.search import Search

SETTLED = 0.05
"""Change of log tau that is none: a tenth of what would be seen in a curve."""

MOST_TURNS = 15
LONGEST = np.log(10.0)
LEAST_SHARE = 1e-3
"""Least tau, as a share of what it started from: the curve is then a straight line."""

LEAST_BENDS = 1e-3


def smooth_groups(parameters: ParameterSet) -> dict[str, Float[np.ndarray, " bends"]]:
    """Places among the free parameters of each smooth term's bends, by the term's name."""
    groups: dict[str, list[int]] = {}
    for i, parameter in enumerate(parameters.free):
        if parameter.smooth is not None:
            groups.setdefault(parameter.smooth, []).append(i)
    return {name: np.array(at) for name, at in groups.items()}


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
    covariance: Float[np.ndarray, "free free"],
) -> tuple[ParameterSet, float]:
    """The set with every smooth term's tau updated, and the largest change of log tau.

    Parameters
    ----------
    free, covariance
        The mode and the inverse Hessian there.
    """
    told = effective_bends(parameters, covariance)
    new, largest = {}, 0.0
    for name, at in smooth_groups(parameters).items():
        first = parameters.free[at[0]]
        log_tau = np.log(first.prior_sd)
        wanted = 0.5 * np.log(np.sum(free[at] ** 2) / max(told[name], LEAST_BENDS) + 1e-300)
        change = float(np.clip(wanted - log_tau, -LONGEST, LONGEST))
        least = np.log(LEAST_SHARE * first.reach)
        updated = max(log_tau + change, least)
        largest = max(largest, abs(updated - log_tau))
        new[name] = float(np.exp(updated))
    every = tuple(
        p if p.smooth is None else replace(p, prior_sd=new[p.smooth]) for p in parameters.all
    )
    return replace(parameters, all=every), largest


def settle(
    search: Search,
    found: Minimum,
    hessian: Float[np.ndarray, "free free"],
    max_iterations: int,
    progress: Callable[[int, float], None],
) -> tuple[Minimum, Float[np.ndarray, "free free"]]:
    """Update the spreads and search anew, in turn; the search's parameters are replaced.

    Raises
    ------
    Rejected
        No mode was found at an update.
    """
    if not smooth_groups(search.parameters):
        return found, hessian
    for _ in range(MOST_TURNS):
        floor = np.array([p.reach**-2.0 for p in search.parameters.free])
        covariance = np.linalg.inv(nearest_positive(hessian, 1e-6 * floor))
        updated, change = with_spread(search.parameters, found.at, covariance)
        if change < SETTLED:
            break
        search.parameters = updated
        found = search.run(found.at, nearest_positive(hessian, floor), max_iterations, progress)
        hessian = search.hessian(found)
    return found, hessian
