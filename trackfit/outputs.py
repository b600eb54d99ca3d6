"""All that a study asks for, written to its folder: tables, maps' files, figures and the record."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from trackfit.analysis import Prepared, preference_responses
from trackfit.inference.fit import Fit
from trackfit.paths import FilledTrack
from trackfit.report import Scene, figure_writers
from trackfit.results import RecordInfo, write_folder


def write_results(
    folder: Path | str,
    prepared: Prepared,
    fits: Sequence[Fit],
    tracks: Sequence[FilledTrack],
    *,
    overwrite: bool = False,
) -> Path:
    """Write the results of a study to a folder, all at once, and return the folder.

    Always `parameters.csv`, `set_aside.csv`, `responses.csv` and `results.json`. With filled
    tracks also the positions in the formats of `[output]` and the figures.

    Raises
    ------
    ResultsError
        The folder may not be replaced, or the disk refuses.
    """
    output = prepared.study.output
    responses = preference_responses(prepared, fits)
    figures = {}
    if output.figures and tracks:
        figures = figure_writers(
            tracks,
            prepared.fixes,
            responses,
            _scene(prepared),
            on_path={(r.tag, r.term): r.on_path for r in responses},
            figure_format=output.figure_format,
        )
    return write_folder(
        Path(folder),
        tracks=tracks,
        fits=fits,
        responses=responses,
        fixes=prepared.fixes,
        record=_record(prepared),
        formats=output.formats if tracks else (),
        extra_files=figures,
        overwrite=overwrite,
    )


def _scene(prepared: Prepared) -> Scene:
    """What the maps show beside the tracks: coast, the first depth-like layer, the first point."""
    depth = next(
        (layer for name, layer in prepared.layers.items() if "depth" in name.lower()), None
    )
    point = next((p.point for p in prepared.study.preference if p.point), None)
    return Scene(
        plane=prepared.plane,
        coast=prepared.coast,
        depth=depth,
        colony_lonlat=None if point is None else (point.lon, point.lat),
    )


def _record(prepared: Prepared) -> RecordInfo:
    study = prepared.study
    standards = {
        name: {"centre": s.centre, "scale": s.scale, "unit": prepared.layers[name].unit}
        for name, s in prepared.model.standards.items()
    }
    return RecordInfo(
        study={**study.as_dict(), "plane_used": prepared.plane.description, "standards": standards},
        inputs=prepared.input_files(),
        seed=study.study.seed,
        notes=prepared.notes,
        warnings=prepared.warnings,
        title=study.study.name,
    )
