"""A whole study, step by step: read and check everything, fit every tag, fill every track."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.errors import CLASS_SD_M, ErrorRules, fix_covariances, without_error
from trackfit.faults import FixesError, LayerError, StudyError
from trackfit.fixes import Fixes, read_fixes
from trackfit.frame import Plane
from trackfit.inference.fit import Fit, fit_track
from trackfit.inference.grid import time_grid
from trackfit.inference.task import FitSettings, TrackData
from trackfit.layers import Box, Coast, Layer, LayerRequest, read_coast, read_layer
from trackfit.model import StudyModel, build_model
from trackfit.paths import FilledTrack, fill_track, hours_since_1970, report_hours, times_utc
from trackfit.responses import Response, responses_of
from trackfit.study import Study

DISTORTION_WARNING = 0.02
"""Distances and directions in the plane that are further off than this are worth a warning."""

MARGIN_SHARE = 0.25
MARGIN_KM = 50.0
"""Layers are read to this far beyond the fixes: a share of their extent, and never less than so."""

NO_ERROR = "nothing describes the error of this fix (no ellipse, sd or known class)"
OTHER_TAG = "the study does not take this tag (study.tags)"

TagProgress = Callable[[str, float, str], None]


def _silent(tag: str, done: float, message: str) -> None:
    """Take no notice of progress."""


@dataclass(frozen=True)
class Prepared:
    """A study with all its data read, checked and brought into the plane.

    Attributes
    ----------
    fixes
        Used fixes, and those set aside with their reasons.
    tracks
        The used fixes of every tag in the plane, by tag.
    layers, coast
        In the plane, around the fixes.
    notes, warnings
        Sentences for the user.
    """

    study: Study
    fixes: Fixes
    plane: Plane
    tracks: Mapping[str, TrackData]
    layers: Mapping[str, Layer]
    coast: Coast | None
    model: StudyModel
    notes: tuple[str, ...]
    warnings: tuple[str, ...]

    def n_states(self, tag: str) -> int:
        """States on the time grid of a tag."""
        return len(
            time_grid(
                self.tracks[tag].hours,
                self.study.motion.step_hours,
                self.report_hours(tag),
                self.model.base.motion.same_moment_hours,
            )
        )

    def report_hours(self, tag: str) -> Float[np.ndarray, " n"]:
        """Times at which positions of a tag are reported, hours since 1970."""
        hours = self.tracks[tag].hours
        return report_hours(hours[0], hours[-1], self.study.paths.interval_hours)

    def input_files(self) -> dict[str, Path]:
        """Every file the study reads, by the name the study gives it."""
        study = self.study
        files = [study.path, *study.fixes.files, *(s.file for s in study.layers.values())]
        files += [study.coast.file] if study.coast else []
        named: dict[str, Path] = {}
        for file in files:
            near = file.is_relative_to(study.folder)
            named[str(file.relative_to(study.folder) if near else file)] = file
        return named


def prepare(study: Study) -> Prepared:
    """Read everything a study names and check that it fits together; fit nothing.

    Raises
    ------
    TrackfitError
        With the file, the line or key, the rule and the value.
    """
    rules = ErrorRules(
        ellipse_probability=study.errors.ellipse_probability,
        class_sd_m={**CLASS_SD_M, **study.errors.classes},
        default_sd_m=study.errors.default_sd_m,
    )
    fixes = _usable(study, rules)
    table = fixes.table
    lon, lat = table["lon"].to_numpy(), table["lat"].to_numpy()
    plane = Plane.from_crs(study.plane.crs) if study.plane.crs else Plane.centred_on(lon, lat)
    tracks = _tracks(fixes, plane, rules)
    box = _study_area(np.concatenate([t.at_km for t in tracks.values()]))
    hours = np.concatenate([t.hours for t in tracks.values()])
    layers = {
        name: read_layer(
            LayerRequest(name=name, **settings.model_dump(exclude={"centre", "scale"})),
            plane,
            box,
            (float(hours.min()), float(hours.max())),
        )
        for name, settings in study.layers.items()
    }
    used = _used_layers(study, layers)
    for track in tracks.values():
        for layer in used.values():
            _check_fixes_covered(track, layer, plane)
    return Prepared(
        study=study,
        fixes=fixes,
        plane=plane,
        tracks=tracks,
        layers=layers,
        coast=read_coast(study.coast.file, plane, box) if study.coast else None,
        model=build_model(study, used, plane),
        notes=(*fixes.notes, *_layer_notes(study, layers)),
        warnings=_distortion_warning(plane, lon, lat),
    )


def _usable(study: Study, rules: ErrorRules) -> Fixes:
    fixes = read_fixes(
        study.fixes.files,
        study.fixes.columns.mapping(),
        delimiter=study.fixes.delimiter,
        decimal=study.fixes.decimal,
        time_zone=study.fixes.time_zone,
    )
    if study.study.tags:
        absent = [tag for tag in study.study.tags if tag not in fixes.tags]
        if absent:
            raise StudyError(
                f"{study.path}: study.tags: no usable fix has the tag {absent[0]!r}; "
                f"the fixes hold {', '.join(fixes.tags)}"
            )
        fixes = fixes.setting_aside(~fixes.table["tag"].isin(study.study.tags), OTHER_TAG)
    fixes = fixes.setting_aside(without_error(fixes.table, rules), NO_ERROR)
    if fixes.table.empty:
        counts = "; ".join(f"{count} x {reason}" for reason, count in fixes.reason_counts().items())
        raise FixesError(f"{study.path}: no fix is left to use ({counts})")
    return fixes


def _tracks(fixes: Fixes, plane: Plane, rules: ErrorRules) -> dict[str, TrackData]:
    tracks = {}
    for tag in fixes.tags:
        table = fixes.of(tag)
        tracks[tag] = TrackData(
            tag=tag,
            hours=hours_since_1970(table["time"]),
            at_km=plane.to_plane(table["lon"], table["lat"]),
            covariance_km2=fix_covariances(table, plane, rules),
        )
    return tracks


def _study_area(at_km: Float[np.ndarray, "n 2"]) -> Box:
    low, high = at_km.min(axis=0), at_km.max(axis=0)
    margin = max(MARGIN_KM, MARGIN_SHARE * float((high - low).max()))
    return Box(*(low - margin), *(high + margin))


def _used_layers(study: Study, layers: Mapping[str, Layer]) -> dict[str, Layer]:
    names = {p.layer for p in study.preference if p.layer}
    names |= {study.current.layer} if study.current else set()
    return {name: layer for name, layer in layers.items() if name in names}


def _layer_notes(study: Study, layers: Mapping[str, Layer]) -> list[str]:
    used = _used_layers(study, layers)
    notes = [
        f"layer '{name}' is read but serves no term of the study" for name in layers.keys() - used
    ]
    notes += [
        f"layer '{name}': {layer.share_filled:.1%} of its cells near the fixes were missing and "
        "are filled from their neighbours"
        for name, layer in layers.items()
        if layer.share_filled > 0
    ]
    return sorted(notes)


def _distortion_warning(plane: Plane, lon: np.ndarray, lat: np.ndarray) -> tuple[str, ...]:
    distortion = plane.distortion(lon, lat)
    if distortion <= DISTORTION_WARNING:
        return ()
    return (
        f"the plane stretches distances by up to {distortion:.1%} at the fixes; split the study "
        "into smaller areas or set plane.crs to a projection made for the region",
    )


def _check_fixes_covered(track: TrackData, layer: Layer, plane: Plane) -> None:
    outside_time = ~layer.covers_time(track.hours)
    if outside_time.any():
        first, last = times_utc(layer.hours[[0, -1]])
        raise LayerError(
            f"tag {track.tag}: the fix at {_stamp(track.hours[outside_time][0])} lies outside the "
            f"time of layer '{layer.name}' ({first:%Y-%m-%d %H:%M} to {last:%Y-%m-%d %H:%M} UTC, "
            f"{layer.source}); use a layer that covers the track, or leave the layer out"
        )
    _check_inside(track.tag, "fix", track.hours, track.at_km, layer, plane)


def _check_inside(
    tag: str,
    what: str,
    hours: Float[np.ndarray, " n"],
    at_km: Float[np.ndarray, "n 2"],
    layer: Layer,
    plane: Plane,
) -> None:
    outside = ~layer.covers(at_km)
    if not outside.any():
        return
    lon, lat = plane.to_lonlat(at_km[outside][:1])
    raise LayerError(
        f"tag {tag}: the {what} at {_stamp(hours[outside][0])} (lon {lon[0]:.4f}, "
        f"lat {lat[0]:.4f}; {int(outside.sum())} in all) lies outside the area of layer "
        f"'{layer.name}' ({layer.source}); use a layer that covers the track, or leave "
        "the layer out"
    )


def _stamp(hour: float) -> str:
    return f"{times_utc(np.array([hour]))[0]:%Y-%m-%d %H:%M:%S} UTC"


def fit_tags(prepared: Prepared, progress: TagProgress = _silent) -> list[Fit]:
    """Fit every tag of a study, one after the other.

    A tag that cannot be fitted has a status that says so; the others are fitted all the same.

    Raises
    ------
    LayerError
        A fitted path leaves the area of a layer that the model uses.
    """
    return [_fit_tag(prepared, tag, progress) for tag in prepared.fixes.tags]


def _fit_tag(prepared: Prepared, tag: str, progress: TagProgress) -> Fit:
    study, data = prepared.study, prepared.tracks[tag]
    settings = FitSettings(
        step_hours=study.motion.step_hours,
        coarse_factor=study.fit.coarse_factor,
        max_iterations=study.fit.max_iterations,
        step_check=study.fit.step_check,
        points=study.fit.points,
    )
    fit = fit_track(
        data,
        prepared.model.for_track(data),
        settings,
        prepared.report_hours(tag),
        lambda done, message: progress(tag, done, message),
    )
    if fit.states is not None:
        hours, at_km = fit.states.problem.hours, fit.states.mean[:, :2]
        for layer in _used_layers(study, prepared.layers).values():
            _check_inside(tag, "fitted path", hours, at_km, layer, prepared.plane)
    return fit


def fill_tracks(prepared: Prepared, fits: Sequence[Fit]) -> list[FilledTrack]:
    """Positions with credible ellipses of every tag that was fitted."""
    paths = prepared.study.paths
    return [
        fill_track(
            fit,
            prepared.plane,
            prepared.tracks[fit.tag].hours,
            interval_hours=paths.interval_hours,
            gap_hours=paths.gap_hours,
            draws=paths.draws,
            seed=prepared.study.study.seed,
        )
        for fit in fits
        if fit.states is not None
    ]


def preference_responses(prepared: Prepared, fits: Sequence[Fit]) -> list[Response]:
    """The response of every fitted tag to every preference term."""
    return [r for fit in fits for r in responses_of(fit, prepared.model.names)]


def parameter_table(fits: Sequence[Fit]) -> pd.DataFrame:
    """The parameters of all tags, one row each, the tag first."""
    tables = [fit.parameters.assign(tag=fit.tag) for fit in fits]
    table = pd.concat(tables, ignore_index=True)
    return table[["tag", *(c for c in table.columns if c != "tag")]]
