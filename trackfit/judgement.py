"""The model's own judgement of every used fix: how far it lies from where all others place it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.faults import StudyError
from trackfit.frame import Plane, geodesic_bearing_deg, geodesic_km
from trackfit.inference.fit import Fit
from trackfit.inference.leave_one_out import leave_one_out


@dataclass(frozen=True)
class FixJudgement:
    """The used fixes of one tag against their predictions from all its other fixes.

    Attributes
    ----------
    table
        One row a used fix, in time order: time (UTC), lon, lat (degrees, as reported),
        predicted_lon, predicted_lat (degrees, where the other fixes place it), offset_m (geodesic
        distance from the predicted to the reported position), bearing_deg (of that way, at the
        predicted position, clockwise from true north), distance_sd (that offset in standard
        deviations of the reported position about the predicted one, their covariance taken into
        account: sqrt(e' S^-1 e), e the offset and S = V + s^2 C in `trackfit.inference.predicted`),
        p_value (probability of a reported position at least as far off if the model is right; with
        heavy tails even a far one is not unlikely: see distance_sd), expected_sd_m (root mean
        square over two axes of the standard deviation of the reported position about the predicted
        one: of the prediction and the fix's own error; with heavy tails as if errors were normal),
        flagged (p_value below `flag_p_value`). A tag that was not fitted has no predictions: NaN.
    flag_p_value
        The limit; where the model is right, this share of sound fixes is flagged by chance.
    """

    tag: str
    table: pd.DataFrame
    flag_p_value: float

    @property
    def n_flagged(self) -> int:
        """How many fixes are flagged."""
        return int(self.table["flagged"].sum())


def judge_fixes(
    fit: Fit, fixes: pd.DataFrame, plane: Plane, *, flag_p_value: float
) -> FixJudgement:
    """Judge every fix of a tag by all its others (`trackfit.inference.leave_one_out`).

    Parameters are held at their estimates, and nothing is fitted again. A flag is a hint, no
    verdict: a run of wrong fixes agrees with itself, and a wrong fix casts doubt on its
    neighbours.

    Parameters
    ----------
    fit
        The fit of the tag.
    fixes
        The used fixes it was fitted to, in time order (`Fixes.of`).
    """
    columns = fixes[["time", "lon", "lat"]].reset_index(drop=True)
    if fit.states is None:
        figures = {name: np.full(len(columns), np.nan) for name in _FIGURES}
    else:
        figures = _figures(fit, columns, plane)
    table = columns.assign(**figures, flagged=figures["p_value"] < flag_p_value)
    return FixJudgement(fit.tag, table, flag_p_value)


_FIGURES = (
    "predicted_lon",
    "predicted_lat",
    "offset_m",
    "bearing_deg",
    "distance_sd",
    "p_value",
    "expected_sd_m",
)


def _figures(fit: Fit, reported: pd.DataFrame, plane: Plane) -> dict[str, np.ndarray]:
    assert fit.states is not None
    left_out = leave_one_out(fit.states.approximation)
    lon, lat = reported["lon"].to_numpy(float), reported["lat"].to_numpy(float)
    at = _on_earth(plane, plane.to_plane(lon, lat) - left_out.offset_km)
    scaled = np.linalg.solve(left_out.covariance_km2, left_out.offset_km[..., None])[..., 0]
    to_ground = np.linalg.inv(plane.ground_to_plane(lon, lat))
    ground_km2 = to_ground @ left_out.covariance_km2 @ np.swapaxes(to_ground, 1, 2)
    return {
        "predicted_lon": at[:, 0],
        "predicted_lat": at[:, 1],
        "offset_m": 1000.0 * geodesic_km(at[:, 0], at[:, 1], lon, lat),
        "bearing_deg": geodesic_bearing_deg(at[:, 0], at[:, 1], lon, lat),
        "distance_sd": np.sqrt(np.sum(left_out.offset_km * scaled, axis=1)),
        "p_value": left_out.p_value,
        "expected_sd_m": 1000.0 * np.sqrt(np.trace(ground_km2, axis1=1, axis2=2) / 2.0),
    }


def _on_earth(plane: Plane, xy_km: Float[np.ndarray, "n 2"]) -> Float[np.ndarray, "n 2"]:
    """Degrees of points of the plane; NaN for a point that is no place on Earth.

    A prediction from a few fixes on one side only can be as wild as that.
    """
    try:
        return np.column_stack(plane.to_lonlat(xy_km))
    except StudyError:
        if len(xy_km) == 1:
            return np.full((1, 2), np.nan)
    return np.concatenate([_on_earth(plane, one[None]) for one in xy_km])
