"""All figures of a study, as files to be written."""

import hashlib
import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
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
    stems = file_stems([*fixes.table["tag"].unique(), *(track.tag for track in tracks)])
    for track in tracks:
        if len(track.table):
            name = f"figures/track_{stems[track.tag]}.{figure_format}"
            writers[name] = partial(_write_track, track, fixes, scene)
    track_of = {track.tag: track for track in tracks if len(track.table)}
    for judgement in judgements:
        if judgement.tag in track_of and len(judgement.table):
            draw = partial(judgement_figure, judgement, track_of[judgement.tag], scene)
            name = f"figures/fixes_{stems[judgement.tag]}.{figure_format}"
            writers[name] = partial(save_figure, draw)
    terms = file_stems([response.term for response in responses])
    for page in response_pages(responses):
        draw = partial(response_figure, page.panels, on_path, alike=page.alike)
        name = "_".join(["responses", *([terms[page.term]] if page.term else []), *page.part])
        writers[f"figures/{name}.{figure_format}"] = partial(save_figure, draw)
    return writers


def _write_track(track: TrackLike, fixes: FixesLike, scene: Scene, path: Path) -> None:
    used = fixes.table[fixes.table["tag"] == track.tag]
    aside = fixes.set_aside[fixes.set_aside["tag"] == track.tag]
    save_figure(partial(track_figure, track, used, aside, scene), path)


def file_stems(names: Iterable[str]) -> Mapping[str, str]:
    """Return a part of a file name for each tag or term: small letters, digits, - and _.

    Names that would share a file, be it only where capitals do not count, get a few digits of
    their sha256.

    Examples
    --------
    >>> dict(file_stems(["Seal 7/b", "p1", "P1"]))
    {'Seal 7/b': 'seal_7_b', 'p1': 'p1-f64551', 'P1': 'p1-fbeae7'}
    """
    stems = {name: _cleaned(name) for name in names}
    digits = 0
    while shared := {stem for stem, count in Counter(stems.values()).items() if count > 1}:
        digits += 6
        for name in [name for name, stem in stems.items() if stem in shared]:
            stems[name] = f"{_cleaned(name)}-{_digest(name)[:digits]}"
    return stems


def _cleaned(name: str) -> str:
    """Small letters, digits, - and _; of a name with none of them, digits of its sha256."""
    return _UNSAFE.sub("_", name.lower()).strip("_")[:_LONGEST] or _digest(name)[:6]


def _digest(name: str) -> str:
    return hashlib.sha256(name.encode()).hexdigest()
