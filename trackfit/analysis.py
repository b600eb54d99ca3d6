"""A whole study, step by step: read and check everything, fit every tag, fill every track."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from jaxtyping import Float

from trackfit.counted import counted
from trackfit.errors import ErrorRules, fix_covariances
from trackfit.faults import LayerError
from trackfit.fixes import Fixes
from trackfit.frame import Plane
from trackfit.inference.fit import MIN_FIXES, Fit
from trackfit.inference.grid import time_grid
from trackfit.inference.shared import Task, fit_shared
from trackfit.inference.smoothing import revise_shared
from trackfit.inference.task import FitSettings, TrackData
from trackfit.judgement import FixJudgement, judge_fixes
from trackfit.layers import Coast, Layer, LayerRequest, read_coast, read_layer
from trackfit.model import StudyModel, build_model
from trackfit.paths import FilledTrack, fill_track, hours_since_1970, report_hours, times_utc
from trackfit.responses import Response, responses_of, shared_responses
from trackfit.study import Study
from trackfit.usable import error_rules, study_area, usable_fixes

DISTORTION_WARNING = 0.02
"""Distances and directions in the plane that are further off than this are worth a warning."""

FEW_FIXES = 20
"""A tag with fewer fixes in use gets a note."""

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

    def fitted_together(self) -> list[list[str]]:
        """The tags in groups: one by one, or all together where they share a response."""
        tags = self.fixes.tags
        return [tags] if self.model.base.parameters.shared_at.size else [[tag] for tag in tags]

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
    fixes = usable_fixes(study)
    lon, lat = fixes.table["lon"].to_numpy(), fixes.table["lat"].to_numpy()
    plane = Plane.from_crs(study.plane.crs) if study.plane.crs else Plane.centred_on(lon, lat)
    tracks = _tracks(fixes, plane, error_rules(study))
    box = study_area(np.concatenate([t.at_km for t in tracks.values()]))
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
    used = used_layers(study, layers)
    far_off = [
        note
        for track in tracks.values()
        for layer in used.values()
        for note in _check_fixes_covered(track, layer, plane, heavy=study.errors.tails == "heavy")
    ]
    return Prepared(
        study=study,
        fixes=fixes,
        plane=plane,
        tracks=tracks,
        layers=layers,
        coast=read_coast(study.coast.file, plane, box) if study.coast else None,
        model=build_model(study, used, plane),
        notes=(
            *fixes.notes,
            *_few_notes(tracks),
            *_layer_notes(study, layers),
            *_sharing_notes(study, fixes),
            *far_off,
        ),
        warnings=_distortion_warning(plane, lon, lat),
    )


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


def used_layers(study: Study, layers: Mapping[str, Layer]) -> dict[str, Layer]:
    """The layers that serve a term of the study."""
    names = {p.layer for p in study.preference if p.layer}
    names |= {study.current.layer} if study.current else set()
    return {name: layer for name, layer in layers.items() if name in names}


def _few_notes(tracks: Mapping[str, TrackData]) -> list[str]:
    """Tell of tags whose fixes can hardly bear a fit; those that cannot have a status later."""
    return [
        f"tag {tag}: {counted(len(track.hours), 'fix', 'fixes')} to use are few: expect wide "
        "intervals, and lean on the priors no more than you believe in them"
        for tag, track in tracks.items()
        if MIN_FIXES <= len(track.hours) < FEW_FIXES
    ]


def _layer_notes(study: Study, layers: Mapping[str, Layer]) -> list[str]:
    used = used_layers(study, layers)
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


def _sharing_notes(study: Study, fixes: Fixes) -> list[str]:
    shared = [f"preference.{p.term}" for p in study.preference if p.shared]
    shared += ["current.drift"] if study.current and study.current.shared else []
    if len(fixes.tags) > 1:
        return []
    return [f"{name}: shared by all tags, and the study has but one" for name in shared]


def _distortion_warning(plane: Plane, lon: np.ndarray, lat: np.ndarray) -> tuple[str, ...]:
    distortion = plane.distortion(lon, lat)
    if distortion <= DISTORTION_WARNING:
        return ()
    return (
        f"the plane stretches distances by up to {distortion:.1%} at the fixes; split the study "
        "into smaller areas or set plane.crs to a projection made for the region",
    )


def _check_fixes_covered(track: TrackData, layer: Layer, plane: Plane, *, heavy: bool) -> list[str]:
    """Refuse fixes that a layer does not cover; with heavy tails note those outside its area.

    Heavy tails are there for fixes the animal was nowhere near. Whether the layer covers the path
    itself is seen when it is fitted.
    """
    outside_time = ~layer.covers_time(track.hours)
    if outside_time.any():
        first, last = times_utc(np.array(layer.own_span_hours))
        raise LayerError(
            f"tag {track.tag}: the fix at {_stamp(track.hours[outside_time][0])} lies outside the "
            f"time of layer '{layer.name}' ({first:%Y-%m-%d %H:%M} to {last:%Y-%m-%d %H:%M} UTC, "
            f"{layer.source}); use a layer that covers the track, or leave the layer out"
        )
    if not heavy:
        _check_inside(track.tag, "fix", track.hours, track.at_km, layer, plane)
    outside = int((~layer.covers(track.at_km)).sum())
    if not outside:
        return []
    return [
        f"tag {track.tag}: outside the area of layer '{layer.name}' lie {outside} of "
        f"{len(track.hours)} fixes; they are used, for the tails are heavy and the path need not "
        "go there"
    ]


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
    """Fit every tag of a study, one after the other; where they share a response, over and over.

    A tag that cannot be fitted has a status that says so; the others are fitted all the same.

    Raises
    ------
    LayerError
        A fitted path leaves the area of a layer that the model uses.
    """
    return [
        _inside_layers(prepared, fit)
        for tags in prepared.fitted_together()
        for fit in fit_tracks(
            prepared,
            [prepared.tracks[tag] for tag in tags],
            [prepared.report_hours(tag) for tag in tags],
            progress,
        )
    ]


def fit_tracks(
    prepared: Prepared,
    tracks: Sequence[TrackData],
    report: Sequence[Float[np.ndarray, " n"]],
    progress: TagProgress = _silent,
) -> list[Fit]:
    """Fit a study's model to any tracks, with the times to report of each.

    Tracks that share a response are fitted together.
    """
    model, settings = prepared.model, fit_settings(prepared.study)
    return fit_shared(
        [
            Task(track, model.for_track(track), settings, hours)
            for track, hours in zip(tracks, report, strict=True)
        ],
        progress,
        revise_shared,
    )


def fit_settings(study: Study) -> FitSettings:
    """How a study wants its tracks fitted."""
    return FitSettings(
        step_hours=study.motion.step_hours,
        coarse_factor=study.fit.coarse_factor,
        max_iterations=study.fit.max_iterations,
        step_check=study.fit.step_check,
        points=study.fit.points,
    )


def _inside_layers(prepared: Prepared, fit: Fit) -> Fit:
    """The fit, if its path stays inside the layers of its model."""
    if fit.states is not None:
        hours, at_km = fit.states.problem.hours, fit.states.mean[:, :2]
        for layer in used_layers(prepared.study, prepared.layers).values():
            _check_inside(fit.tag, "fitted path", hours, at_km, layer, prepared.plane)
    return fit


def fill_tracks(
    prepared: Prepared, fits: Sequence[Fit], progress: TagProgress = _silent
) -> list[FilledTrack]:
    """Positions with credible ellipses of every tag that was fitted.

    Where the study has a coast and does not say otherwise, they keep to the sea.
    """
    fitted = [fit for fit in fits if fit.states is not None]
    tracks: list[FilledTrack] = []
    for done, fit in enumerate(fitted):
        progress("positions", done / len(fitted), f"filling tag {fit.tag}")
        tracks.append(_filled(prepared, fit))
    if tracks:
        progress("positions", 1.0, f"{counted(len(tracks), 'track')} filled")
    return tracks


def _filled(prepared: Prepared, fit: Fit) -> FilledTrack:
    paths = prepared.study.paths
    at_sea = paths.keep_at_sea is not False
    return fill_track(
        fit,
        prepared.plane,
        prepared.tracks[fit.tag].hours,
        interval_hours=paths.interval_hours,
        gap_hours=paths.gap_hours,
        draws=paths.draws,
        seed=prepared.study.study.seed,
        coast=prepared.coast if at_sea else None,
    )


def preference_responses(prepared: Prepared, fits: Sequence[Fit]) -> list[Response]:
    """The response of every fitted tag to every preference term.

    A term that the tags share has one response, of `ALL_TAGS`.
    """
    names = prepared.model.names
    own = [r for fit in fits for r in responses_of(fit, names)]
    return [*own, *shared_responses(fits, names)]


def fix_judgements(prepared: Prepared, fits: Sequence[Fit]) -> list[FixJudgement]:
    """Every used fix against its prediction from the other fixes of its tag, by tag."""
    flag_p_value = prepared.study.screening.flag_p_value
    return [
        judge_fixes(fit, prepared.fixes.of(fit.tag), prepared.plane, flag_p_value=flag_p_value)
        for fit in fits
    ]


def parameter_table(fits: Sequence[Fit]) -> pd.DataFrame:
    """The parameters of all tags, one row each, the tag first."""
    tables = [fit.parameters.assign(tag=fit.tag) for fit in fits]
    table = pd.concat(tables, ignore_index=True)
    return table[["tag", *(c for c in table.columns if c != "tag")]]
