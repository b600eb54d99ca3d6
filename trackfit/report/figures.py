"""All figures of a study, as files to be written."""

import hashlib
import re
from collections.abc import Sequence
from functools import partial
from pathlib import Path

from trackfit.faults import ResultsError
from trackfit.report.judgement_figure import judgement_figure
from trackfit.report.response_figure import PathValues, response_figure, response_pages
from trackfit.report.scene import Scene
from trackfit.report.style import FIGURE_FORMATS, save_figure
from trackfit.report.track_figure import track_figure
from trackfit.results.inputs import FixesLike, JudgementLike, ResponseLike, TrackLike
from trackfit.results.write import FileWriter

_UNSAFE = re.compile(r"[^a-z0-9_-]+")
_LONGEST = 40


def figure_writers(
    tracks: Sequence[TrackLike],
    fixes: FixesLike,
    responses: Sequence[ResponseLike],
    scene: Scene,
    *,
    judgements: Sequence[JudgementLike] = (),
    on_path: PathValues | None = None,
    figure_format: str = "png",
) -> dict[str, FileWriter]:
    """Return a writer for every figure of the study, by file name: `extra_files` of the results.

    Nothing is drawn before a writer is called with the path of its file.

    Raises
    ------
    ResultsError
        The format is not one of `FIGURE_FORMATS`.
    """
    if figure_format not in FIGURE_FORMATS:
        choices = ", ".join(FIGURE_FORMATS)
        raise ResultsError(f"figure_format {figure_format!r} is not known: choose from {choices}")
    writers: dict[str, FileWriter] = {}
    for track in tracks:
        if len(track.table):
            name = f"figures/track_{file_stem(track.tag)}.{figure_format}"
            writers[name] = partial(_write_track, track, fixes, scene)
    track_of = {track.tag: track for track in tracks if len(track.table)}
    for judgement in judgements:
        if judgement.tag in track_of and len(judgement.table):
            draw = partial(judgement_figure, judgement, track_of[judgement.tag], scene)
            name = f"figures/fixes_{file_stem(judgement.tag)}.{figure_format}"
            writers[name] = partial(save_figure, draw)
    for page, panels in response_pages(responses).items():
        draw = partial(response_figure, panels, on_path)
        writers[f"figures/{page}.{figure_format}"] = partial(save_figure, draw)
    return writers


def _write_track(track: TrackLike, fixes: FixesLike, scene: Scene, path: Path) -> None:
    used = fixes.table[fixes.table["tag"] == track.tag]
    aside = fixes.set_aside[fixes.set_aside["tag"] == track.tag]
    save_figure(partial(track_figure, track, used, aside, scene), path)


def file_stem(tag: str) -> str:
    """Return a file name for a tag: small letters, digits, - and _.

    A tag that needs changing gets a few digits of its sha256, so that no two tags share a file,
    not even where capitals do not count.

    Examples
    --------
    >>> file_stem("seal-7"), file_stem("Seal 7/b")
    ('seal-7', 'seal_7_b-aea85b')
    """
    plain = _UNSAFE.sub("_", tag.lower()).strip("_")[:_LONGEST]
    if plain and plain == tag:
        return tag
    digest = hashlib.sha256(tag.encode()).hexdigest()[:6]
    return f"{plain}-{digest}" if plain else digest
