"""Reasons to set a fix aside before anything is fitted; each is switched on by itself.

Rules that look at one fix come first (deployment, class, land), then those that compare a fix with
its neighbours in time (near-duplicates, spikes, speed), so that a fix wrong by itself spoils no
neighbour. Distances are geodesics on WGS 84. Nothing is deleted: every fix ends in
`Fixes.table` or, with the rule and the figure that breaks it, in `Fixes.set_aside`. Screening
what is left once more sets nothing aside.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from jaxtyping import Float, Int

from trackfit.fixes import Fixes
from trackfit.frame import Plane
from trackfit.layers.layer import Coast
from trackfit.screening.neighbours import (
    Chain,
    NeighbourTest,
    SpeedTest,
    SpikeTest,
    near_duplicates,
    take_out_all,
)

FURTHEST_INLAND_KM = 50.0
"""How far inland a fix stands is told up to here: a study's coast reaches no less beyond it."""


@dataclass(frozen=True)
class Deployment:
    """When a tag was on its animal, in UTC; None where an end is not known."""

    start: pd.Timestamp | None = None
    end: pd.Timestamp | None = None


@dataclass(frozen=True)
class ScreeningRules:
    """Which fixes are to be set aside; None or empty switches a rule off.

    Attributes
    ----------
    invalid_classes
        Error classes that mean that the supplier itself takes the position for invalid.
    deployments
        Tag to the time it was on its animal.
    near_duplicate_seconds
        Of fixes of a tag this close in time the most precise is kept.
    spike, speed
        Tests against the neighbours in time, with their limits.
    """

    invalid_classes: tuple[str, ...] = ("Z",)
    deployments: Mapping[str, Deployment] = field(default_factory=dict)
    near_duplicate_seconds: float | None = None
    spike: SpikeTest | None = None
    speed: SpeedTest | None = None

    @property
    def neighbour_tests(self) -> list[NeighbourTest]:
        """The tests that are on; the one with the narrower meaning first."""
        return [test for test in (self.spike, self.speed) if test is not None]


def screen_alone(fixes: Fixes, rules: ScreeningRules) -> Fixes:
    """Set aside fixes outside their tag's deployment, and fixes of invalid classes.

    A fix at the very moment of deployment or recovery is kept. A class counts whatever else the
    row states: the ellipse of an invalid position describes nothing.
    """
    starts = {tag: deployment.start for tag, deployment in rules.deployments.items()}
    ends = {tag: deployment.end for tag, deployment in rules.deployments.items()}
    early = -_hours_after(fixes.table, starts)
    fixes = fixes.setting_aside(early > 0.0, "before the tag was deployed", _texts(early, "h"))
    late = _hours_after(fixes.table, ends)
    fixes = fixes.setting_aside(late > 0.0, "after the tag was recovered", _texts(late, "h"))
    classes = fixes.table["error_class"]
    invalid = classes.isin(rules.invalid_classes).to_numpy(bool)
    return fixes.setting_aside(invalid, "its class is invalid", classes.astype(str).tolist())


def _hours_after(
    table: pd.DataFrame, moments: Mapping[str, pd.Timestamp | None]
) -> Float[np.ndarray, " n"]:
    """Hours from a tag's moment to each of its fixes; NaN where the moment is not known."""
    limits = pd.to_datetime(table["tag"].map(moments), utc=True)
    return ((table["time"] - limits) / pd.Timedelta(hours=1)).to_numpy(float)


def _texts(values: Float[np.ndarray, " n"], unit: str) -> list[str]:
    """Figures of two digits or, where they are larger, whole ones."""
    return [f"{x:.0f} {unit}" if x >= 9.95 else f"{x:.2g} {unit}" for x in values]


def screen_land(fixes: Fixes, coast: Coast, plane: Plane, margin_m: float) -> Fixes:
    """Set aside fixes further inside land than a margin.

    The margin leaves room for the errors of the fixes and of the coast: an animal close to the
    shore is often reported ashore.
    """
    table = fixes.table
    inland_km = coast.inland_km(plane.to_plane(table["lon"], table["lat"]))
    reason = f"on land, more than {margin_m:g} m from the sea"
    texts = [_inland_text(km) for km in inland_km]
    return fixes.setting_aside(inland_km * 1000.0 > margin_m, reason, texts)


def _inland_text(inland_km: float) -> str:
    if inland_km >= FURTHEST_INLAND_KM:
        return f"over {FURTHEST_INLAND_KM:g} km"
    return f"{inland_km:.1f} km" if inland_km >= 1.0 else f"{1000.0 * inland_km:.0f} m"


def screen_among_neighbours(
    fixes: Fixes, rules: ScreeningRules, sd_m: Float[np.ndarray, " n"]
) -> Fixes:
    """Set aside near-duplicates, spikes and fixes that the speed test finds too fast.

    Spikes are looked for before the speed test, and both again as long as either finds one: a
    fix taken out makes neighbours of others.

    Parameters
    ----------
    sd_m
        Size of every fix's error (`trackfit.errors.fix_sd_m`), metres; NaN is worse than any.
    """
    sd_m = np.where(np.isnan(sd_m), np.inf, sd_m)
    if rules.near_duplicate_seconds is not None:
        apart = _apart(fixes.table, sd_m, rules.near_duplicate_seconds)
        reason = f"within {rules.near_duplicate_seconds:g} s of a fix that is no less precise"
        fixes = fixes.setting_aside(~np.isnan(apart), reason, _texts(apart, "s"))
        sd_m = sd_m[np.isnan(apart)]
    broken, shown = _broken(fixes.table, sd_m, rules.neighbour_tests)
    for reason in [test.rule for test in rules.neighbour_tests]:
        breaks = broken == reason
        fixes = fixes.setting_aside(breaks, reason, shown)
        broken, shown = broken[~breaks], shown[~breaks]
    return fixes


def _apart(
    table: pd.DataFrame, sd_m: Float[np.ndarray, " n"], within_seconds: float
) -> Float[np.ndarray, " n"]:
    apart, time_ns = np.full(len(table), np.nan), table["time"].astype("int64").to_numpy()
    for rows in _rows_of_tags(table):
        apart[rows] = near_duplicates(time_ns[rows], sd_m[rows], within_seconds)
    return apart


def _broken(
    table: pd.DataFrame, sd_m: Float[np.ndarray, " n"], tests: Sequence[NeighbourTest]
) -> tuple[np.ndarray, np.ndarray]:
    """The rule that each fix breaks and the figures, empty texts where it breaks none."""
    broken, shown = np.full((2, len(table)), "", dtype=object)
    lon, lat = table["lon"].to_numpy(float), table["lat"].to_numpy(float)
    time_ns = table["time"].astype("int64").to_numpy()
    for rows in _rows_of_tags(table):
        chain = Chain(lon[rows], lat[rows], time_ns[rows], sd_m[rows])
        for row, (rule, figures) in take_out_all(chain, tests).items():
            broken[rows[row]], shown[rows[row]] = rule, figures
    return broken, shown


def _rows_of_tags(table: pd.DataFrame) -> list[Int[np.ndarray, " k"]]:
    return [np.sort(rows) for rows in table.groupby("tag").indices.values()]
