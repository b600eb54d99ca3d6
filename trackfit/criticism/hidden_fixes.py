"""Fixes hidden, foretold and found again: whether regions are as wide as they say, paths near.

Some fixes of each tag are hidden, the model is fitted to the rest, and the track is filled at the
hidden times. A hidden fix is not the animal's position: it has an error of its own. So it is set
against the region of the *reported* position, whose spread is that of the filled position plus the
fix's own error as the model has it (its stated covariance times the fitted scale, with heavy tails
where the study has them). A 95 % region of that kind should hold 95 % of the hidden fixes. Errors
are distances from the filled to the reported position, own errors of the fixes included; those of
linear interpolation between the fixes that were kept are measured alike.
"""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float, Int

from trackfit.analysis import Prepared, TagProgress, fit_tracks
from trackfit.counted import counted
from trackfit.frame import Plane, geodesic_km
from trackfit.inference.fit import MIN_FIXES, Fit, FitStatus
from trackfit.inference.grid import nearest_state
from trackfit.inference.predicted import Predicted
from trackfit.inference.states import States
from trackfit.inference.task import TrackData
from trackfit.paths import times_utc
from trackfit.sea.at_sea import Kept, keep_at_sea

ALL_TAGS = "all tags"

HIDDEN_COLUMNS = (
    "tag",
    "time",
    "block",
    "lon",
    "lat",
    "filled_lon",
    "filled_lat",
    "hours_to_fix",
    "p_value",
    "error_km",
    "linear_error_km",
)
"""One row a hidden fix. `p_value` is the probability of a reported position at least as far off:
the region of probability p holds the fix where p_value >= 1 - p."""


@dataclass(frozen=True)
class HeldOut:
    """How the hidden fixes of one tag, or of all tags together, were foretold.

    Attributes
    ----------
    inside50, inside95
        Shares of the hidden fixes inside their 50 % and 95 % regions; in `sd50` and `sd95` the
        standard deviations of these shares, with blocks of hidden fixes as the units.
    error_median_km, error_95_km
        Median and 95 % quantile of the distance from the filled to the reported position; the
        same of linear interpolation as `linear_median_km` and `linear_95_km`.
    """

    tag: str
    status: FitStatus | None
    kept: int
    hidden: int
    inside50: float
    sd50: float
    inside95: float
    sd95: float
    error_median_km: float
    error_95_km: float
    linear_median_km: float
    linear_95_km: float
    sentence: str


@dataclass(frozen=True)
class HoldOutTrial:
    """The outcome for every tag, for all tags together, and the hidden fixes one by one."""

    tags: tuple[HeldOut, ...]
    pooled: HeldOut
    fixes: pd.DataFrame


def hold_out(
    prepared: Prepared,
    *,
    share: float,
    block_hours: float | None = None,
    progress: TagProgress = lambda tag, done, message: None,
) -> HoldOutTrial:
    """Hide fixes of every tag, fit and fill without them, and set them beside the outcome.

    Parameters
    ----------
    share
        Share of each tag's fixes to hide.
    block_hours
        Hide all fixes in stretches of this length; None hides single fixes.
    """
    parts = {
        tag: part
        for tags in prepared.fitted_together()
        for tag, part in _try_tags(prepared, tags, share, block_hours, progress).items()
    }
    tables = [table for _, table in parts.values() if len(table)]
    whole = pd.concat(tables, ignore_index=True) if tables else _no_fixes()
    kept = sum(kept for (_, kept), _ in parts.values())
    return HoldOutTrial(
        tags=tuple(_summary(tag, s, kept, table) for tag, ((s, kept), table) in parts.items()),
        pooled=_summary(ALL_TAGS, None, kept, whole),
        fixes=whole,
    )


def _no_fixes() -> pd.DataFrame:
    return pd.DataFrame({name: pd.Series(dtype=float) for name in HIDDEN_COLUMNS})


_Tried = tuple[tuple[FitStatus | None, int], pd.DataFrame]
"""Status and number of fixes kept of one tag, and its hidden fixes."""


def _try_tags(
    prepared: Prepared,
    tags: Sequence[str],
    share: float,
    block_hours: float | None,
    progress: TagProgress,
) -> dict[str, _Tried]:
    """Hide fixes of some tags that are fitted together, all at once."""
    blocks = {tag: _blocks(prepared, tag, share, block_hours) for tag in tags}
    tried = [tag for tag in tags if (blocks[tag] >= 0).any()]
    kept = {tag: _part(prepared.tracks[tag], blocks[tag] < 0) for tag in tags}
    fits = fit_tracks(
        prepared,
        [kept[tag] for tag in tried],
        [prepared.tracks[tag].hours[blocks[tag] >= 0] for tag in tried],
        lambda tag, done, message: progress(f"{tag}, some fixes hidden", done, message),
    )
    found = {fit.tag: _tried(prepared, kept[fit.tag], blocks[fit.tag], fit) for fit in fits}
    nothing = {tag: ((None, len(kept[tag].hours)), _no_fixes()) for tag in tags}
    return nothing | found


def _blocks(
    prepared: Prepared, tag: str, share: float, block_hours: float | None
) -> Int[np.ndarray, " fixes"]:
    rng = np.random.default_rng([prepared.study.study.seed, zlib.crc32(tag.encode()), 1])
    return hidden_blocks(prepared.tracks[tag].hours, share, block_hours, rng)


def _tried(
    prepared: Prepared, kept: TrackData, block: Int[np.ndarray, " fixes"], fit: Fit
) -> _Tried:
    hidden = _part(prepared.tracks[fit.tag], block >= 0)
    if fit.states is None:
        return (fit.status, len(kept.hours)), _no_fixes()
    table = _foretold(fit.states, kept, hidden, prepared.plane, _at_sea(prepared, fit.states))
    return (fit.status, len(kept.hours)), table.assign(block=block[block >= 0])[[*HIDDEN_COLUMNS]]


def _part(data: TrackData, chosen: Bool[np.ndarray, " fixes"]) -> TrackData:
    return TrackData(data.tag, data.hours[chosen], data.at_km[chosen], data.covariance_km2[chosen])


def hidden_blocks(
    hours: Float[np.ndarray, " fixes"],
    share: float,
    block_hours: float | None,
    rng: np.random.Generator,
) -> Int[np.ndarray, " fixes"]:
    """Choose fixes to hide: the number of its block for each, -1 for a fix that is kept.

    Fixes are taken in random order as the beginnings of blocks until the share is reached. A block
    that would hold the last fix, touch another block, or leave fewer than `MIN_FIXES` fixes is
    passed over. Single fixes may lie side by side.

    Parameters
    ----------
    hours
        Times in order.
    share
        Of all fixes; at least one is hidden where there are enough.
    """
    n = len(hours)
    block = np.full(n, -1)
    wanted = max(1, round(share * n))
    for number, begin in enumerate(rng.permutation(np.arange(1, n - 1))):
        hidden = int(np.sum(block >= 0))
        if hidden >= wanted:
            break
        end, around = begin + 1, slice(begin, begin + 1)
        if block_hours is not None:
            end = int(np.searchsorted(hours, hours[begin] + block_hours))
            around = slice(begin - 1, end + 1)
        free = end < n and (block[around] < 0).all()
        if free and n - hidden - (end - begin) >= MIN_FIXES:
            block[begin:end] = number
    return block


def _at_sea(prepared: Prepared, states: States) -> Kept | None:
    """The positions as they are reported, where a coast may move them."""
    if prepared.coast is None or prepared.study.paths.keep_at_sea is False:
        return None
    return keep_at_sea(states, prepared.coast, [], [prepared.study.study.seed])


def _foretold(
    states: States, kept: TrackData, hidden: TrackData, plane: Plane, at_sea: Kept | None
) -> pd.DataFrame:
    at = nearest_state(states.problem.hours, hidden.hours)
    filled = states.positions_km()[at] if at_sea is None else at_sea.xy_km[at]
    linear = np.column_stack(
        [np.interp(hidden.hours, kept.hours, kept.at_km[:, axis]) for axis in range(2)]
    )
    lon, lat = plane.to_lonlat(hidden.at_km)
    filled_lon, filled_lat = plane.to_lonlat(filled)
    nearest = np.min(np.abs(np.subtract.outer(hidden.hours, kept.hours)), axis=1)
    return pd.DataFrame(
        {
            "tag": kept.tag,
            "time": times_utc(hidden.hours),
            "lon": lon,
            "lat": lat,
            "filled_lon": filled_lon,
            "filled_lat": filled_lat,
            "hours_to_fix": nearest,
            "p_value": p_values(states, at, hidden, at_sea),
            "error_km": geodesic_km(filled_lon, filled_lat, lon, lat),
            "linear_error_km": geodesic_km(*plane.to_lonlat(linear), lon, lat),
        }
    )


def p_values(
    states: States, at: Int[np.ndarray, " n"], reported: TrackData, kept: Kept | None = None
) -> Float[np.ndarray, " n"]:
    """Probability of a reported position at least as far from the filled one, at some states.

    The predicted spread is that of the position plus the fix's own error. Where weighted points
    stand for the parameters, the ellipses of all points are averaged by weight, each with its own
    error scale and tails, its spread taken about the mean of all. Where a coast moved the position
    (`kept`), the spread is that of the paths at sea.
    """
    problem, theta = states.problem, states.approximation.theta.copy()
    middle, spread = states.positions_km()[at], states.position_covariance_km2()[at]
    if kept is not None:
        middle, spread = kept.xy_km[at], kept.covariance_km2[at]
    offset, stated = reported.at_km - middle, reported.covariance_km2
    plain = _p_value(offset, spread, stated, problem.error_parameters(theta))
    if states.points is None or states.mixture is None:
        return plain
    total, mixture = np.zeros(len(at)), states.mixture
    for weight, free, mean, inside in zip(
        states.points.weight, states.points.at, mixture.mean_km, mixture.covariance_km2, strict=True
    ):
        theta[states.free_at] = free
        apart = mean[at] - middle
        second = inside[at] + apart[:, :, None] * apart[:, None, :]
        total += weight * _p_value(offset, second, stated, problem.error_parameters(theta))
    return total if kept is None else np.where(kept.adjusted[at], plain, total)


def _p_value(
    offset_km: Float[np.ndarray, "n 2"],
    spread_km2: Float[np.ndarray, "n 2 2"],
    stated_km2: Float[np.ndarray, "n 2 2"],
    errors: Float[np.ndarray, " errors"],
) -> Float[np.ndarray, " n"]:
    own = stated_km2 * np.exp(2.0 * errors[0])
    log_nu = float(errors[1]) if len(errors) > 1 else None
    return Predicted.of(offset_km, spread_km2, own, log_nu).p_value


def _summary(tag: str, status: FitStatus | None, kept: int, fixes: pd.DataFrame) -> HeldOut:
    hidden = len(fixes)
    inside = {p: fixes["p_value"].to_numpy(float) >= 1.0 - p for p in (0.5, 0.95)}
    units = pd.factorize(fixes["tag"].astype(str) + "/" + fixes["block"].astype(str))[0]
    shares = {p: float(np.mean(x)) if hidden else float("nan") for p, x in inside.items()}
    errors = _middle_and_far(fixes["error_km"].to_numpy(float))
    linear = _middle_and_far(fixes["linear_error_km"].to_numpy(float))
    return HeldOut(
        tag=tag,
        status=status,
        kept=kept,
        hidden=hidden,
        inside50=shares[0.5],
        sd50=share_sd(inside[0.5], units),
        inside95=shares[0.95],
        sd95=share_sd(inside[0.95], units),
        error_median_km=errors[0],
        error_95_km=errors[1],
        linear_median_km=linear[0],
        linear_95_km=linear[1],
        sentence=_sentence(status, hidden, kept, shares, errors, linear),
    )


def _middle_and_far(errors_km: Float[np.ndarray, " n"]) -> tuple[float, float]:
    if not len(errors_km):
        return float("nan"), float("nan")
    middle, far = np.quantile(errors_km, [0.5, 0.95])
    return float(middle), float(far)


def share_sd(inside: Bool[np.ndarray, " n"], unit: Int[np.ndarray, " n"]) -> float:
    """Standard deviation of a share, with whole units (blocks) as the sample.

    sqrt(m/(m - 1) sum_u (hits_u - share n_u)^2) / n, over m units (Cochran 1977, Sampling
    Techniques, section 9A). NaN for fewer than two units.
    """
    n, units = len(inside), len(np.unique(unit))
    if units < 2:
        return float("nan")
    off = np.bincount(unit, weights=inside - inside.mean())
    return float(np.sqrt(units / (units - 1.0) * np.sum(off**2)) / n)


def _sentence(
    status: FitStatus | None,
    hidden: int,
    kept: int,
    shares: dict[float, float],
    errors: Sequence[float],
    linear: Sequence[float],
) -> str:
    if not hidden:
        if status is not None and not status.ok:
            return f"Nothing foretold. {status.sentence}"
        return f"Nothing hidden: too few fixes ({kept}), or blocks too long for the track."
    warning = "" if status is None or status.ok else f" {status.sentence}"
    return (
        f"Of {counted(hidden, 'hidden fix', 'hidden fixes')}, 50 % regions hold "
        f"{100.0 * shares[0.5]:.0f} % and 95 % regions {100.0 * shares[0.95]:.0f} %; median error "
        f"{errors[0]:.3g} km (linear interpolation {linear[0]:.3g} km).{warning}"
    )
