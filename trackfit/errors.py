"""What a fix says about a position: the covariance of its error in the plane.

A fix may describe its error as an ellipse, as the standard deviation of a satellite-navigation
receiver, or as a location class; a study may state one standard deviation for all the rest. The
first of these that a row has is used.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float

from trackfit.faults import FixesError, StudyError
from trackfit.frame import Plane, covariance_from_ellipse, ellipse_scale

CLASS_SD_M: dict[str, float] = {
    "G": 100.0,
    "3": 323.0,
    "2": 667.0,
    "1": 792.0,
    "0": 2759.0,
    "A": 4085.0,
    "B": 6785.0,
}
"""Standard deviation per axis, metres, of each location class where the study states none.

Classes 3, 2, 1, 0, A and B: the 68th percentiles of the distance between Argos and satellite-
navigation positions of free-ranging seals and sea lions (490, 1010, 1200, 4180, 6190 and 10280 m;
Costa, D. P. et al. 2010, Accuracy of ARGOS locations of pinnipeds at-sea estimated using Fastloc
GPS, PLoS ONE 5:e8677), divided by 1.5152: a circle of 1.5152 standard deviations holds 68.27 % of a
2-D normal. Class G: the Argos user's manual, section 3.4, gives "better than 100 m" as the radius.
Class Z is an invalid location and has no entry.
"""


@dataclass(frozen=True)
class ErrorRules:
    """How the descriptions of errors are to be read.

    Attributes
    ----------
    ellipse_probability
        What share of true positions the supplier's ellipse is meant to hold. The default 0.632 is
        the reading in which the semi-axes are sqrt(2) standard deviations (k^2 = -2 ln(1 - p) = 2),
        so that sqrt(major * minor) is the root-mean-square radius of a near-circular error. The
        rival reading is 0.39: the semi-axes are the standard deviations themselves (k = 1), and
        the same ellipse then means errors 1.41 times as large. The Argos user's manual says "one
        standard deviation" without saying of what; no text seen settles it, hence the setting.
    class_sd_m
        Location class to standard deviation per axis, metres.
    default_sd_m
        Standard deviation per axis, metres, of fixes that nothing else describes; None sets them
        aside.

    Raises
    ------
    StudyError
        Where the probability is not between 0 and 1, or a standard deviation is not positive.
    """

    ellipse_probability: float = 0.632
    class_sd_m: Mapping[str, float] = field(default_factory=lambda: dict(CLASS_SD_M))
    default_sd_m: float | None = None

    def __post_init__(self) -> None:
        if not 0.0 < self.ellipse_probability < 1.0:
            raise StudyError(
                f"errors.ellipse_probability: {self.ellipse_probability!r} does not lie between "
                "0 and 1; 0.632 and 0.39 are the usual readings"
            )
        for name, sd_m in self.class_sd_m.items():
            _check_sd(f"errors.classes.{name}", sd_m)
        if self.default_sd_m is not None:
            _check_sd("errors.default_sd_m", self.default_sd_m)


def fix_covariances(
    table: pd.DataFrame, plane: Plane, rules: ErrorRules
) -> Float[np.ndarray, "n 2 2"]:
    """Error covariances of fixes in the plane, km^2, (n, 2, 2).

    Per row, the first of these that it has: its ellipse, `gps_sd_m`, its class, the default. All
    are errors on the ground, S (east, north); in the plane they are J S J' with J =
    `plane.ground_to_plane` at the fix.

    Parameters
    ----------
    table
        `Fixes.table`, or rows of it.

    Raises
    ------
    FixesError
        Where a row has no description of its error (see `without_error`); names the first.
    """
    blank = without_error(table, rules)
    if blank.any():
        first = table[blank].iloc[0]
        raise FixesError(
            f"{first['file']}:{first['line']}: nothing describes the error of this fix (and of "
            f"{blank.sum() - 1} more); set them aside or state errors.default_sd_m"
        )
    ground_m2 = _round_m2(_sd_m(table, rules))
    has = _has_ellipse(table)
    ground_m2[has] = covariance_from_ellipse(
        _numbers(table, "ellipse_major_m")[has],
        _numbers(table, "ellipse_minor_m")[has],
        _numbers(table, "ellipse_bearing_deg")[has],
        rules.ellipse_probability,
    )
    jacobian = plane.ground_to_plane(_numbers(table, "lon"), _numbers(table, "lat"))
    return jacobian @ ground_m2 @ np.swapaxes(jacobian, 1, 2) / 1e6


def without_error(table: pd.DataFrame, rules: ErrorRules) -> Bool[np.ndarray, " n"]:
    """Rows of `Fixes.table` for which neither the row nor the rules describe the error, (n,).

    A class that is not in `rules.class_sd_m` (class Z, for one) describes nothing.
    """
    return ~_has_ellipse(table) & np.isnan(_sd_m(table, rules))


def fix_sd_m(table: pd.DataFrame, rules: ErrorRules) -> Float[np.ndarray, " n"]:
    """Root mean square of the errors' standard deviations on two axes, metres, (n,).

    Of an ellipse sqrt((major^2 + minor^2) / 2) / k with k = `ellipse_scale(probability)`. NaN
    where nothing describes the error.
    """
    major, minor = _numbers(table, "ellipse_major_m"), _numbers(table, "ellipse_minor_m")
    of_ellipse = np.hypot(major, minor) / np.sqrt(2.0) / ellipse_scale(rules.ellipse_probability)
    return np.where(_has_ellipse(table), of_ellipse, _sd_m(table, rules))


def error_kinds(table: pd.DataFrame, rules: ErrorRules) -> list[str]:
    """What describes the error of each fix: "ellipse", "GPS", "class B" and so on, or "default".

    Precedence as in `fix_covariances`.
    """
    stated = table["error_class"].isin(list(rules.class_sd_m)).to_numpy(dtype=bool)
    gps = ~np.isnan(_numbers(table, "gps_sd_m"))
    rows = zip(_has_ellipse(table), gps, stated, table["error_class"], strict=True)
    return [
        "ellipse" if ellipse else "GPS" if near else f"class {name}" if known else "default"
        for ellipse, near, known, name in rows
    ]


def _has_ellipse(table: pd.DataFrame) -> np.ndarray:
    parts = ["ellipse_major_m", "ellipse_minor_m", "ellipse_bearing_deg"]
    return table[parts].notna().all(axis=1).to_numpy(dtype=bool)


def _sd_m(table: pd.DataFrame, rules: ErrorRules) -> np.ndarray:
    """Look up the standard deviation per axis of round errors, metres; NaN where unstated."""
    gps = _numbers(table, "gps_sd_m")
    by_class = table["error_class"].map(dict(rules.class_sd_m)).to_numpy(dtype=float)
    default = np.nan if rules.default_sd_m is None else rules.default_sd_m
    sd_m = np.where(np.isnan(gps), by_class, gps)
    return np.where(np.isnan(sd_m), default, sd_m)


def _round_m2(sd_m: np.ndarray) -> np.ndarray:
    return sd_m[:, None, None] ** 2 * np.eye(2)


def _numbers(table: pd.DataFrame, column: str) -> np.ndarray:
    return table[column].to_numpy(dtype=float)


def _check_sd(key: str, sd_m: float) -> None:
    if not (np.isfinite(sd_m) and sd_m > 0.0):
        raise StudyError(f"{key}: {sd_m!r} is not a positive number of metres")
