"""Residuals of a fitted track, beside what they are like where the model is true.

Leave-one-out residuals (each fix against all others) show which fixes are far off and whether the
regions are of the right size. Neighbours among them are not independent, not even under the true
model, so their bands come from tracks drawn from the fitted model. One-step-ahead residuals (each
fix against the ones before it) are independent under the true model: what is left of the motion in
them shows as autocorrelation.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from jaxtyping import Float, Int, Shaped
from scipy.special import ndtri
from scipy.stats import norm

from trackfit.inference.leave_one_out import LeaveOneOut, leave_one_out
from trackfit.inference.marginal import Approximation
from trackfit.inference.one_step import OneStepAhead, one_step_ahead
from trackfit.inference.replicates import leave_one_out_replicates

REPLICATES = 999
LEAST_REPLICATES = 199
REPLICATE_NUMBERS = 4_000_000
"""Long tracks get fewer replicates, so that all their residuals stay below this count."""

LAGS = 20
EARLY_LAGS = 5
"""Autocorrelations of the first few lags are averaged: headway that a motion misses lasts."""

QUANTILES = 301
"""At most so many points make the quantile plot; close together at its ends."""

FAR = 2.0
"""A standard residual beyond this is called far: 4.6 % of normal ones are."""


@dataclass(frozen=True)
class Beside:
    """A number seen, beside its distribution where the model is true.

    `p_value` is two-sided; all are NaN where the track is too short for the number.
    """

    value: float
    expected: float
    lower95: float
    upper95: float
    p_value: float

    @property
    def high(self) -> bool:
        """Whether the number lies above what is expected."""
        return self.value > self.expected


@dataclass(frozen=True)
class Quantiles:
    """Sorted residuals of both axes against standard normal quantiles.

    `lower95` and `upper95` hold one point with 95 %, `lower95_all` and `upper95_all` all of them.
    """

    normal: Float[np.ndarray, " points"]
    residual: Float[np.ndarray, " points"]
    lower95: Float[np.ndarray, " points"]
    upper95: Float[np.ndarray, " points"]
    lower95_all: Float[np.ndarray, " points"]
    upper95_all: Float[np.ndarray, " points"]

    @property
    def outside(self) -> int:
        """Points outside the band that holds all of them with 95 %."""
        beyond = (self.residual < self.lower95_all) | (self.residual > self.upper95_all)
        return int(beyond.sum())


@dataclass(frozen=True)
class Autocorrelation:
    """Autocorrelation at lags of 1, 2, ... fixes, both axes together, with its 95 % band."""

    lag: Int[np.ndarray, " lags"]
    value: Float[np.ndarray, " lags"]
    expected: Float[np.ndarray, " lags"]
    lower95: Float[np.ndarray, " lags"]
    upper95: Float[np.ndarray, " lags"]


@dataclass(frozen=True)
class KindOfFix:
    """Fixes whose errors are described alike: how many, and their mean square residual."""

    fixes: int
    mean_square: Beside


@dataclass(frozen=True)
class Residuals:
    """The residuals of one fitted track.

    Attributes
    ----------
    hours
        Times of the fixes, hours since 1970.
    left_out, ahead
        Every fix against all others, and against the ones before it.
    quantiles
        Of the leave-one-out residuals.
    of_left_out, of_ahead
        Autocorrelations.
    mean_square, share_far, kurtosis
        Of the leave-one-out residuals: 1, 4.6 % and 3 of normal ones.
    first_lag, early_lags
        Of the one-step-ahead residuals: autocorrelation at lag 1, and the mean of lags 1 to 5.
    by_kind
        Mean square of the leave-one-out residuals by what describes the errors of the fixes.
    """

    hours: Float[np.ndarray, " fixes"]
    left_out: LeaveOneOut
    ahead: OneStepAhead
    quantiles: Quantiles
    of_left_out: Autocorrelation
    of_ahead: Autocorrelation
    mean_square: Beside
    share_far: Beside
    kurtosis: Beside
    first_lag: Beside
    early_lags: Beside
    by_kind: Mapping[str, KindOfFix]


def residuals_of(found: Approximation, kinds: Sequence[str], seed: int) -> Residuals:
    """Work out the residuals of a track and draw what to expect of them.

    `kinds` says of each fix what describes its error.
    """
    left_out, ahead = leave_one_out(found), one_step_ahead(found)
    n = len(left_out.residual)
    count = int(np.clip(REPLICATE_NUMBERS // (2 * n), LEAST_REPLICATES, REPLICATES))
    drawn = leave_one_out_replicates(found, count, np.random.default_rng(seed))
    # the first fix is predicted from its vague prior alone, which says nothing of the motion
    of_ahead = white_autocorrelation(ahead.residual[1:])
    return Residuals(
        hours=found.problem.hours[found.problem.observations.state],
        left_out=left_out,
        ahead=ahead,
        quantiles=quantiles_beside(left_out.residual, drawn),
        of_left_out=autocorrelation_beside(left_out.residual, drawn),
        of_ahead=of_ahead,
        mean_square=beside(np.mean(left_out.residual**2), np.mean(drawn**2, axis=(1, 2))),
        share_far=beside(share_far(left_out.residual), share_far(drawn)),
        kurtosis=beside(kurtosis(left_out.residual), kurtosis(drawn)),
        first_lag=_white_mean(of_ahead, 1, n - 1),
        early_lags=_white_mean(of_ahead, EARLY_LAGS, n - 1),
        by_kind=_by_kind(left_out.residual, drawn, np.asarray(kinds)),
    )


def _by_kind(
    residual: Float[np.ndarray, "fixes 2"],
    drawn: Float[np.ndarray, "draws fixes 2"],
    kinds: Shaped[np.ndarray, " fixes"],
) -> dict[str, KindOfFix]:
    """Mean square residual of the fixes of each kind."""
    found = {}
    for kind in np.unique(kinds):
        at = kinds == kind
        of_drawn = np.mean(drawn[:, at] ** 2, axis=(1, 2))
        found[str(kind)] = KindOfFix(int(at.sum()), beside(np.mean(residual[at] ** 2), of_drawn))
    return found


def share_far(residual: Float[np.ndarray, "*draws fixes 2"]) -> Float[np.ndarray, "*draws"]:
    """Share of residuals, both axes, beyond `FAR`."""
    return np.asarray(np.mean(np.abs(residual) > FAR, axis=(-2, -1)))


def kurtosis(residual: Float[np.ndarray, "*draws fixes 2"]) -> Float[np.ndarray, "*draws"]:
    """Mean fourth power over the square of the mean square: heaviness of tails at any scale."""
    squared = residual**2
    middle = np.mean(squared, axis=(-2, -1))
    fourth = np.mean(squared**2, axis=(-2, -1))
    return np.divide(fourth, middle**2, out=np.full_like(middle, np.nan), where=middle > 0.0)


def beside(value: float | Float[np.ndarray, ""], drawn: Float[np.ndarray, " draws"]) -> Beside:
    """Set a number beside draws of it: mean, 95 % of them, and rank-based p-value.

    p = 2 min(1 + draws at least as low, 1 + draws at least as high) / (1 + draws), at most one
    (Besag & Clifford 1989, Biometrika 76:633).
    """
    low, high = np.quantile(drawn, [0.025, 0.975])
    if np.isnan(value):
        return Beside(np.nan, float(drawn.mean()), float(low), float(high), np.nan)
    rank = min(np.sum(drawn <= value), np.sum(drawn >= value))
    p = min(1.0, 2.0 * (1.0 + rank) / (1.0 + len(drawn)))
    return Beside(float(value), float(drawn.mean()), float(low), float(high), float(p))


def autocorrelation(
    residual: Float[np.ndarray, "*draws fixes 2"], lag: int
) -> Float[np.ndarray, "*draws"]:
    """Sum of products of residuals `lag` fixes apart over the sum of squares, about zero."""
    total = np.sum(residual**2, axis=(-2, -1))
    pairs = np.sum(residual[..., lag:, :] * residual[..., :-lag, :], axis=(-2, -1))
    return np.divide(pairs, total, out=np.full_like(total, np.nan), where=total > 0.0)


def _lags(n: int) -> Int[np.ndarray, " lags"]:
    return np.arange(1, min(LAGS, n // 4) + 1)


def autocorrelation_beside(
    residual: Float[np.ndarray, "fixes 2"], drawn: Float[np.ndarray, "draws fixes 2"]
) -> Autocorrelation:
    """Autocorrelation of residuals beside that of drawn ones."""
    lags = _lags(len(residual))
    value = np.array([float(autocorrelation(residual, int(lag))) for lag in lags])
    of_drawn = np.array([autocorrelation(drawn, int(lag)) for lag in lags])
    of_drawn = of_drawn.reshape(len(lags), len(drawn))
    low, high = np.quantile(of_drawn, [0.025, 0.975], axis=1)
    return Autocorrelation(lags, value, of_drawn.mean(axis=1), low, high)


def white_autocorrelation(residual: Float[np.ndarray, "fixes 2"]) -> Autocorrelation:
    """Autocorrelation of residuals that are independent where the model is true.

    Its variance at lag l is then near (n - l)/(2 n^2) for n fixes of two axes (Box & Pierce 1970,
    J. Am. Stat. Assoc. 65:1509).
    """
    n = len(residual)
    lags = _lags(n)
    value = np.array([float(autocorrelation(residual, int(lag))) for lag in lags])
    half = norm.ppf(0.975) * _white_sd(lags, n)
    return Autocorrelation(lags, value, np.zeros(len(lags)), -half, half)


def _white_sd(lags: Int[np.ndarray, " lags"], n: int) -> Float[np.ndarray, " lags"]:
    return np.sqrt((n - lags) / 2.0) / n


def _white_mean(of: Autocorrelation, count: int, n: int) -> Beside:
    """Mean of the first lags; of independent residuals, the lags are all but independent."""
    if len(of.lag) == 0:
        return Beside(*[np.nan] * 5)
    value = float(np.mean(of.value[:count]))
    used = of.lag[:count]
    sd = float(np.sqrt(np.sum(_white_sd(used, n) ** 2)) / len(used))
    half = float(norm.ppf(0.975)) * sd
    return Beside(value, 0.0, -half, half, float(2.0 * norm.sf(abs(value) / sd)))


def quantiles_beside(
    residual: Float[np.ndarray, "fixes 2"], drawn: Float[np.ndarray, "draws fixes 2"]
) -> Quantiles:
    """Sorted residuals beside sorted drawn ones.

    The band for all points is the pointwise one stretched about the medians by such a factor that
    95 % of the draws stay inside everywhere (a sup-t band; Montiel Olea & Plagborg-Moller 2019, J.
    Appl. Econom. 34:1), up and down by themselves, for extremes are skewed.
    """
    chosen = _spread_ranks(residual.size)
    own = np.sort(drawn.reshape(len(drawn), -1), axis=1)[:, chosen]
    low, middle, high = np.quantile(own, [0.025, 0.5, 0.975], axis=0)
    apart = np.where(
        own > middle, (own - middle) / (high - middle), (middle - own) / (middle - low)
    )
    stretch = max(1.0, float(np.quantile(apart.max(axis=1), 0.95)))
    return Quantiles(
        normal=ndtri((chosen + 0.5) / residual.size),
        residual=np.sort(residual, axis=None)[chosen],
        lower95=low,
        upper95=high,
        lower95_all=middle - stretch * (middle - low),
        upper95_all=middle + stretch * (high - middle),
    )


def _spread_ranks(size: int) -> Int[np.ndarray, " points"]:
    """Ranks evenly spread on the normal scale; all of them where there are few."""
    if size <= QUANTILES:
        return np.arange(size)
    reach = -ndtri(0.5 / size)
    share = norm.cdf(np.linspace(-reach, reach, QUANTILES))
    return np.unique(np.clip(np.floor(share * size), 0, size - 1).astype(int))
