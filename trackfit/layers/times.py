"""CF times to hours since 1970, and the slices a study needs."""

from __future__ import annotations

import datetime

import cftime
import numpy as np
from jaxtyping import Float

from trackfit.layers.layer import LayerRequest

EPOCH = datetime.datetime(1970, 1, 1)
REAL_CALENDARS = ("standard", "gregorian", "proleptic_gregorian", "julian")


def hours_since_1970(
    numbers: np.ndarray, unit: str, calendar: str, request: LayerRequest
) -> Float[np.ndarray, " times"]:
    """Decode CF times.

    Dates of a calendar without leap days stand for the same dates of the real calendar; a date
    that the real calendar does not have (30 February of a 360-day year) is an error.

    Raises
    ------
    LayerError
        If the unit is not "<unit> since <date>", or a time is missing, impossible or out of order.
    """
    numbers = np.asarray(numbers, float)
    if not np.isfinite(numbers).all():
        raise request.fault("a time is missing (_FillValue or NaN); every slice needs its time")
    dates = _dates(numbers, unit, calendar, request)
    hours = np.array([_hours(date, request) for date in np.atleast_1d(dates)])
    _check_order(hours, request)
    return hours


def bracket(
    hours: Float[np.ndarray, " times"], span: tuple[float, float], request: LayerRequest
) -> slice:
    """Return the slices from the last not after the span's start to the first not before its end.

    At least two, so that a layer that changes in time never looks fixed.

    Raises
    ------
    LayerError
        If the file's times and the span have nothing in common.
    """
    if span[0] > hours[-1] or span[1] < hours[0]:
        raise request.fault(
            f"its times run from {stamp(hours[0])} to {stamp(hours[-1])}, the fixes from "
            f"{stamp(span[0])} to {stamp(span[1])}: they have no time in common"
        )
    first = max(int(np.searchsorted(hours, span[0], side="right")) - 1, 0)
    last = min(int(np.searchsorted(hours, span[1], side="left")), hours.size - 1)
    if last == first:
        first, last = max(first - 1, 0), min(max(last, 1), hours.size - 1)
    return slice(first, last + 1)


def stamp(hours: float) -> str:
    """Write hours since 1970 as an ISO 8601 time."""
    whole = np.datetime64(0, "s") + np.timedelta64(round(float(hours) * 3600), "s")
    return f"{whole}Z"


def _dates(numbers: np.ndarray, unit: str, calendar: str, request: LayerRequest) -> np.ndarray:
    try:
        return np.asarray(cftime.num2date(numbers, unit, calendar=calendar))
    except (ValueError, OverflowError, TypeError) as fault:
        raise request.fault(
            f"time unit '{unit}' (calendar '{calendar}') is not understood: {fault}; "
            "a time needs a unit such as 'hours since 1970-01-01'"
        ) from fault


def _hours(date: cftime.datetime, request: LayerRequest) -> float:
    if date.calendar in REAL_CALENDARS:
        date = date.change_calendar("proleptic_gregorian")
    try:
        real = datetime.datetime(
            date.year, date.month, date.day, date.hour, date.minute, date.second, date.microsecond
        )
    except ValueError as fault:
        raise request.fault(
            f"date {date.isoformat()} of calendar '{date.calendar}' is no real date ({fault}); "
            "convert the file to the standard calendar"
        ) from fault
    return (real - EPOCH) / datetime.timedelta(hours=1)


def _check_order(hours: Float[np.ndarray, " times"], request: LayerRequest) -> None:
    steps = np.diff(hours)
    if (steps == 0).any():
        twice = stamp(hours[int(np.argmin(steps != 0))])
        raise request.fault(f"time {twice} stands twice in the file; keep one slice for each time")
    if (steps < 0).any():
        at = int(np.argmax(steps < 0)) + 1
        raise request.fault(
            f"times are out of order: {stamp(hours[at])} comes after {stamp(hours[at - 1])}; "
            "sort the file by time"
        )
