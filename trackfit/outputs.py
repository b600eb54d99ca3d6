"""All that a study asks for, written to its folder: tables, maps' files, figures and the record."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import partial
from pathlib import Path

from trackfit.analysis import Prepared, TagProgress, fix_judgements, preference_responses
from trackfit.counted import counted
from trackfit.criticism.judged import Judged, judge_fits
from trackfit.criticism.tables import comparison_table, hold_out_table, judged_tables
from trackfit.inference.fit import Fit
from trackfit.judgement import FixJudgement
from trackfit.paths import FilledTrack
from trackfit.report import Scene, figure_writers, file_stems, residual_figure, save_figure
from trackfit.results import (
    JUDGEMENT_FILE,
    RecordInfo,
    write_folder,
    write_judgements,
    write_table,
)
from trackfit.results.write import FileWriter


def _silent(what: str, done: float, message: str) -> None:
    """Take no notice of progress."""


def write_results(
    folder: Path | str,
    prepared: Prepared,
    fits: Sequence[Fit],
    tracks: Sequence[FilledTrack],
    *,
    judged: Judged | None = None,
    overwrite: bool = False,
    progress: TagProgress = _silent,
) -> Path:
    """Write the results of a study to a folder, all at once, and return the folder.

    Always `parameters.csv`, `set_aside.csv`, `fix_judgement.csv`, `verdicts.csv`, the tables of
    the folder `fit` and `results.json`. `responses.csv` where a fitted tag has a preference term.
    With filled tracks also the positions in the formats of `[output]`, and the figures unless the
    study does without. Where the study asks for them, `comparison.csv`, `hold_out.csv` and
    `hold_out_fixes.csv`.

    Parameters
    ----------
    judged
        What was found out about the fits (`judge_fits`); found out now if it is not given.
    progress
        Told of every figure drawn.

    Raises
    ------
    ResultsError
        The folder may not be replaced, or the disk refuses.
    """
    output = prepared.study.output
    responses = preference_responses(prepared, fits)
    judgements = fix_judgements(prepared, fits)
    judged = judge_fits(prepared, fits) if judged is None else judged
    figures: dict[str, FileWriter] = {}
    if output.figures and tracks:
        figures = figure_writers(
            tracks,
            prepared.fixes,
            responses,
            _scene(prepared),
            judgements=judgements,
            on_path={(r.tag, r.term): r.on_path for r in responses},
            figure_format=output.figure_format,
        )
        stems = file_stems(prepared.fixes.tags)
        figures |= _residual_figures(judged, stems, output.figure_format)
    return write_folder(
        Path(folder),
        tracks=tracks,
        fits=fits,
        responses=responses,
        fixes=prepared.fixes,
        record=_record(prepared, judged, tracks),
        formats=output.formats if tracks else (),
        extra_files={
            JUDGEMENT_FILE: partial(_write_judgements, judgements),
            **_judged_files(judged),
            **_told(figures, progress),
        },
        overwrite=overwrite,
    )


def _told(figures: Mapping[str, FileWriter], progress: TagProgress) -> dict[str, FileWriter]:
    """The same writers; each says when it has drawn its figure."""

    def write(number: int, writer: FileWriter, path: Path) -> None:
        writer(path)
        last = number == len(figures)
        words = f"{counted(number, 'figure')} drawn" if last else path.name
        progress("figures", number / len(figures), words)

    return {
        name: partial(write, number, writer)
        for number, (name, writer) in enumerate(figures.items(), 1)
    }


def _write_judgements(judgements: Sequence[FixJudgement], path: Path) -> None:
    write_judgements(path, judgements)


def _judged_files(judged: Judged) -> dict[str, FileWriter]:
    tables = judged_tables(judged.criticisms, judged.verdicts)
    if judged.comparison:
        tables["comparison.csv"] = comparison_table(judged.comparison)
    if judged.trial is not None:
        tables["hold_out.csv"] = hold_out_table(judged.trial)
        tables["hold_out_fixes.csv"] = judged.trial.fixes
    return {name: partial(write_table, table=table) for name, table in tables.items()}


def _residual_figures(
    judged: Judged, stems: Mapping[str, str], figure_format: str
) -> dict[str, FileWriter]:
    figures: dict[str, FileWriter] = {}
    for criticism in judged.criticisms:
        residuals = criticism.residuals
        if residuals is None:
            continue
        draw = partial(
            residual_figure,
            criticism.tag,
            residuals.hours,
            residuals.left_out.residual,
            residuals.quantiles,
            residuals.of_ahead,
            residuals.of_left_out,
            criticism.status,
        )
        name = f"figures/residuals_{stems[criticism.tag]}.{figure_format}"
        figures[name] = partial(save_figure, draw)
    return figures


def _scene(prepared: Prepared) -> Scene:
    """What the maps show beside the tracks: coast, the first depth-like layer, the first point."""
    depth = next(
        (layer for name, layer in prepared.layers.items() if "depth" in name.lower()), None
    )
    named = next((p for p in prepared.study.preference if p.point), None)
    point = named.point if named else None
    return Scene(
        plane=prepared.plane,
        coast=prepared.coast,
        depth=depth,
        colony_lonlat=None if point is None else (point.lon, point.lat),
        colony_name=named.term if named else "",
    )


def _record(prepared: Prepared, judged: Judged, tracks: Sequence[FilledTrack]) -> RecordInfo:
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
        warnings=(*prepared.warnings, *(w for track in tracks for w in track.warnings)),
        findings=judged.for_record(),
        title=study.study.name,
    )
