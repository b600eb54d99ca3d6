"""A source grid in memory: what a reader hands to the resampler."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float

from trackfit.layers.grids import Window
from trackfit.layers.layer import LayerRequest

MAX_VALUES = 100_000_000


@dataclass(frozen=True)
class Source:
    """The part of a file that a study needs.

    Attributes
    ----------
    values
        (components, times, rows, cols) in the file's unit, NaN where missing.
    hours
        Hours since 1970 of the slices; one entry for a fixed layer.
    span_hours
        First and last time in the file, whether read or not; None for a fixed layer.
    unit
        The file's unit, None if it says none.
    """

    window: Window
    values: Float[np.ndarray, "components times rows cols"]
    hours: Float[np.ndarray, " times"]
    unit: str | None
    span_hours: tuple[float, float] | None = None


def check_size(times: int, rows: int, cols: int, request: LayerRequest) -> None:
    """Refuse to load more than memory can be asked for."""
    count = times * rows * cols
    if count > MAX_VALUES:
        raise request.fault(
            f"the study needs {count / 1e6:.0f} million of its values ({times} times, {rows} x "
            f"{cols} cells), more than {MAX_VALUES / 1e6:.0f} million; cut the file to the study's "
            "months, or make a coarser copy of it"
        )


def pieces(order: np.ndarray) -> list[tuple[slice, np.ndarray]]:
    """Cut an order of cells into stretches a file can read: the slice, and what to take of it."""
    broken = np.flatnonzero(np.abs(np.diff(order)) != 1) + 1
    return [
        (slice(int(part.min()), int(part.max()) + 1), part - part.min())
        for part in np.split(order, broken)
    ]
