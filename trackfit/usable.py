"""The fixes of a study: read, screened, and those left that can be used."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.errors import CLASS_SD_M, ErrorRules, fix_sd_m, without_error
from trackfit.faults import FixesError, StudyError
from trackfit.fix_files import nearest
from trackfit.fixes import Fixes, read_fixes
from trackfit.frame import Plane
from trackfit.layers import Box, read_coast
from trackfit.screening.neighbours import SpeedTest, SpikeTest
from trackfit.screening.rules import (
    Deployment,
    ScreeningRules,
    screen_alone,
    screen_among_neighbours,
    screen_land,
)
from trackfit.study import Study
from trackfit.study_screening import Screening

NO_ERROR = "nothing describes the error of this fix (no ellipse, sd or known class)"
OTHER_TAG = "the study does not take this tag (study.tags)"

MARGIN_SHARE = 0.25
MARGIN_KM = 50.0
"""Layers are read to this far beyond the fixes: a share of their extent, and never less than so."""

ASTRAY_KM = 5000.0
FEW = 0.1
"""Fixes further than so from the middle of all, where they are but this share, are astray."""

MANY = 0.2
"""A larger share of a tag's fixes set aside by screening is worth a note."""


def error_rules(study: Study) -> ErrorRules:
    """Return how a study reads the descriptions of errors."""
    return ErrorRules(
        ellipse_probability=study.errors.ellipse_probability,
        class_sd_m={**CLASS_SD_M, **study.errors.classes},
        default_sd_m=study.errors.default_sd_m,
    )


def screening_rules(settings: Screening) -> ScreeningRules:
    """Return the rules that a study switches on, but for those that need its coast."""
    spike, speed = settings.spike_speed_m_per_s, settings.max_speed_m_per_s
    return ScreeningRules(
        invalid_classes=settings.invalid_classes,
        deployments={
            tag: Deployment(*(None if t is None else pd.Timestamp(t) for t in (d.start, d.end)))
            for tag, d in settings.deployments.items()
        },
        near_duplicate_seconds=settings.near_duplicate_seconds,
        spike=None if spike is None else SpikeTest(spike, settings.spike_angle_deg),
        speed=None if speed is None else SpeedTest(speed),
    )


def usable_fixes(study: Study) -> Fixes:
    """Read a study's fixes and set aside what it does not take and what screening refuses.

    Raises
    ------
    FixesError
        A file cannot be read, or no fix is left.
    StudyError
        The study names a tag that the fixes do not hold.
    """
    read = read_fixes(
        study.fixes.files,
        study.fixes.columns.mapping(),
        delimiter=study.fixes.delimiter,
        decimal=study.fixes.decimal,
        time_zone=study.fixes.time_zone,
    )
    _check_deployed_tags(study, read)
    taken = _taken(study, read)
    errors, rules = error_rules(study), screening_rules(study.screening)
    fixes = screen_alone(taken, rules)
    fixes = fixes.setting_aside(without_error(fixes.table, errors), NO_ERROR)
    fixes = _at_sea(study, _some_left(study, fixes))
    fixes = screen_among_neighbours(fixes, rules, fix_sd_m(fixes.table, errors))
    notes = (*fixes.notes, *_notes(study, taken, fixes))
    return replace(_some_left(study, fixes), notes=notes)


def _taken(study: Study, fixes: Fixes) -> Fixes:
    """Leave out the tags that the study does not name, if it names any."""
    if not study.study.tags:
        return fixes
    absent = [tag for tag in study.study.tags if tag not in fixes.tags]
    if absent:
        raise StudyError(
            f"{study.path}: study.tags: no usable fix has the tag {absent[0]!r}; "
            f"the fixes hold {', '.join(fixes.tags)}"
        )
    return fixes.setting_aside(~fixes.table["tag"].isin(study.study.tags), OTHER_TAG)


def _check_deployed_tags(study: Study, fixes: Fixes) -> None:
    held = sorted({*fixes.tags, *fixes.set_aside["tag"]})
    for tag in study.screening.deployments:
        if tag not in held:
            raise StudyError(
                f"{study.path}: screening.deployments: no row of the fixes has the tag {tag!r}"
                f"{nearest(tag, held)}; the fixes hold {', '.join(held)}"
            )


def _some_left(study: Study, fixes: Fixes) -> Fixes:
    if fixes.table.empty:
        counts = "; ".join(f"{count} x {reason}" for reason, count in fixes.reason_counts().items())
        raise FixesError(f"{study.path}: no fix is left to use ({counts})")
    return fixes


def _at_sea(study: Study, fixes: Fixes) -> Fixes:
    """Set aside fixes on land, told in a plane of their own: the study's rests on what is left."""
    margin_m = study.screening.land_margin_m
    if margin_m is None or study.coast is None:
        return fixes
    lon, lat = fixes.table["lon"].to_numpy(), fixes.table["lat"].to_numpy()
    plane = Plane.centred_on(lon, lat)
    box = study_area(plane.to_plane(lon, lat))
    return screen_land(fixes, read_coast(study.coast.file, plane, box), plane, margin_m)


def study_area(at_km: Float[np.ndarray, "n 2"]) -> Box:
    """Return the box around fixes to which layers and coast are read.

    A few fixes on the other side of the globe do not stretch it: no path goes there, and no plane
    could show it.
    """
    far = np.linalg.norm(at_km - np.median(at_km, axis=0), axis=1) > ASTRAY_KM
    if far.mean() < FEW:
        at_km = at_km[~far]
    low, high = at_km.min(axis=0), at_km.max(axis=0)
    margin = max(MARGIN_KM, MARGIN_SHARE * float((high - low).max()))
    return Box(*(low - margin), *(high + margin))


def _notes(study: Study, before: Fixes, after: Fixes) -> list[str]:
    """Tell of tags that screening leaves little of, and of tags with no time of deployment."""
    had, has = (fixes.table["tag"].value_counts() for fixes in (before, after))
    notes = []
    for tag in before.tags:
        lost = int(had[tag] - has.get(tag, 0))
        if lost > MANY * had[tag]:
            notes.append(
                f"tag {tag}: {lost} of {had[tag]} fixes are set aside by screening or for want of "
                "an error; see whether the limits suit the animal"
            )
    missing = [tag for tag in before.tags if tag not in study.screening.deployments]
    if study.screening.deployments and missing:
        notes.append(f"screening.deployments: no times for tag {', '.join(missing)}; all are used")
    return notes
