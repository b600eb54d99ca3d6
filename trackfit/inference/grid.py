"""The time grid of a track: a regular step, the times to report and the fixes' own times."""

from __future__ import annotations

from dataclasses import dataclass

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float, Int

from trackfit.inference.observations import Observations
from trackfit.inference.problem import Pace, TrackProblem
from trackfit.inference.process import Start, Steps, Track
from trackfit.inference.sites import neighbour_medians
from trackfit.layers.layer import Layer
from trackfit.layers.splines import TimeBracket, bracket_times
from trackfit.motion import FieldTimes, Motion, VelocityField

CROWDED_SHARE = 0.1
"""A regular step closer than this share of the step to a fix or a report time is left out."""

START_SD_KM = 1000.0
"""Prior sd of the first position around the first fix: vague at the scale of any study."""


@dataclass(frozen=True)
class PacePrior:
    """How the pace of a motion varies: log pace is normal around zero, constant within a spell.

    Attributes
    ----------
    log_sd
        Standard deviation of the logarithm of the pace.
    spell_hours
        Length of a spell.
    alike_hours
        Time over which the correlation of log paces falls to 1/e.
    """

    log_sd: float
    spell_hours: float
    alike_hours: float


def time_grid(
    fix_hours: Float[np.ndarray, " fixes"],
    step_hours: float,
    report_hours: Float[np.ndarray, " n"],
    same_moment_hours: float,
) -> Float[np.ndarray, " states"]:
    """The fixes' times, the times to report, and regular steps (whole multiples since 1970).

    It runs from the first to the last fix. A fix closer than `same_moment_hours` to the one before,
    or a report time so close to a fix, shares its state; regular steps that crowd either are left
    out. Precisions of very short steps would drown all other information in rounding.
    """
    first, last = fix_hours.min(), fix_hours.max()
    fixes = _apart(np.sort(fix_hours), same_moment_hours)
    inside = report_hours[(report_hours >= first) & (report_hours <= last)]
    held = np.sort(np.concatenate([fixes, _away_from(inside, fixes, same_moment_hours)]))
    whole = np.arange(np.ceil(first / step_hours), np.floor(last / step_hours) + 1) * step_hours
    steps = _away_from(whole, held, max(CROWDED_SHARE * step_hours, same_moment_hours))
    return np.sort(np.concatenate([held, steps]))


def _apart(hours: Float[np.ndarray, " n"], least_hours: float) -> Float[np.ndarray, " m"]:
    """Sorted times, less those closer than a limit to the last one kept."""
    if (np.diff(hours) >= least_hours).all():
        return hours
    kept = [hours[0]]
    for hour in hours[1:]:
        if hour - kept[-1] >= least_hours:
            kept.append(hour)
    return np.array(kept)


def _away_from(
    times: Float[np.ndarray, " n"], others: Float[np.ndarray, " m"], least_hours: float
) -> Float[np.ndarray, " k"]:
    """Times no closer than a limit to any of some sorted others."""
    nearest = others[nearest_state(others, times)]
    return times[np.abs(times - nearest) >= least_hours]


def nearest_state(
    hours: Float[np.ndarray, " states"], times: Float[np.ndarray, " n"]
) -> np.ndarray:
    """Index of the state nearest in time to each moment."""
    after = np.clip(np.searchsorted(hours, times), 1, max(len(hours) - 1, 1))
    if len(hours) == 1:
        return np.zeros(len(times), dtype=int)
    return np.where(times - hours[after - 1] <= hours[after] - times, after - 1, after)


def padded_size(states: int) -> int:
    """Compiled size for a number of states: 1024, 2048, 4096, 8192, then a fifth more each time.

    One compilation serves all tracks of a size. Padding short tracks costs microseconds, and
    LAPACK never sees it.
    """
    doublings = np.log2(max(states, 1024) / 1024) - 1e-9
    rungs = np.ceil(doublings) if states <= 8192 else np.ceil(4 * doublings) / 4
    return 8 * int(np.ceil(128 * 2**rungs))


def build_problem(
    *,
    motion: Motion,
    field: VelocityField,
    layers: tuple[tuple[Layer | None, ...], Layer | None],
    hours: Float[np.ndarray, " states"],
    fix_hours: Float[np.ndarray, " fixes"],
    fix_km: Float[np.ndarray, "fixes 2"],
    covariance_km2: Float[np.ndarray, "fixes 2 2"],
    start: Start | None = None,
    heavy: bool = False,
    pace: PacePrior | None = None,
) -> TrackProblem:
    """Lay one track on its time grid.

    Parameters
    ----------
    layers
        The layer behind every term of the field (None for a distance), and the current's layer.
    start
        Prior of the first position; by default normal around the first fix, sd `START_SD_KM`.
    heavy
        Errors are bivariate Student-t.
    pace
        How much the pace of the motion varies; None keeps it the same.
    """
    padded = padded_size(len(hours))
    extra = padded - len(hours)
    padded_hours = np.pad(hours, (0, extra), mode="edge")
    dt = np.pad(np.diff(hours), (0, extra), constant_values=1.0)
    mask = np.pad(np.ones(len(hours) - 1), (0, extra))
    if start is None:
        start = Start(jnp.asarray(fix_km[np.argmin(fix_hours)]), jnp.asarray(START_SD_KM))
    spell, spells = _spells(hours, pace)
    track = Track(
        field=field,
        times=_field_times(layers, padded_hours),
        steps=Steps(jnp.asarray(dt), jnp.asarray(mask), jnp.asarray(_padded_spells(spell, padded))),
        start=start,
    )
    observations = Observations(nearest_state(hours, fix_hours), fix_km, covariance_km2, heavy)
    return TrackProblem(motion, track, observations, hours, spells)


def _spells(
    hours: Float[np.ndarray, " states"], pace: PacePrior | None
) -> tuple[Int[np.ndarray, " steps"], Pace | None]:
    """The spell of every step, and the spells' prior."""
    if pace is None:
        return np.zeros(len(hours) - 1, dtype=int), None
    middle = 0.5 * (hours[1:] + hours[:-1]) - hours[0]
    count = max(1, int(np.ceil((hours[-1] - hours[0]) / pace.spell_hours)))
    spell = np.minimum((middle / pace.spell_hours).astype(int), count - 1)
    apart = np.abs(np.subtract.outer(np.arange(count), np.arange(count))) * pace.spell_hours
    covariance = pace.log_sd**2 * np.exp(-apart / pace.alike_hours)
    return spell, Pace(np.linalg.cholesky(covariance))


def _padded_spells(spell: Int[np.ndarray, " steps"], padded: int) -> Int[np.ndarray, " n"]:
    return np.pad(spell, (0, padded - 1 - len(spell))).astype(np.int32)


def _field_times(
    layers: tuple[tuple[Layer | None, ...], Layer | None], hours: np.ndarray
) -> FieldTimes:
    still = TimeBracket(jnp.zeros(len(hours), jnp.int32), jnp.zeros(len(hours)))
    of_terms, current = layers
    return FieldTimes(
        tuple(still if layer is None else bracket_times(layer, hours) for layer in of_terms),
        None if current is None else bracket_times(current, hours),
    )


def interpolated_start(
    hours: Float[np.ndarray, " states"],
    fix_hours: Float[np.ndarray, " fixes"],
    fix_km: Float[np.ndarray, "fixes 2"],
    dim: int,
    *,
    robust: bool = False,
) -> Float[np.ndarray, "states dim"]:
    """First guess of the states: straight lines between the fixes, at their mean speed.

    With `robust`, between medians of five neighbouring fixes.
    """
    order = np.argsort(fix_hours, kind="stable")
    at_km = fix_km - neighbour_medians(fix_km, fix_hours)[0] if robust else fix_km
    states = np.zeros((len(hours), dim))
    for axis in range(2):
        states[:, axis] = np.interp(hours, fix_hours[order], at_km[order, axis])
    if dim == 4 and len(hours) > 1:
        states[:, 2:] = np.gradient(states[:, :2], hours, axis=0)
    return states
