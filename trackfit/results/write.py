"""Everything a study asks for, written to one folder in one step."""

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path, PurePosixPath

import pandas as pd

from trackfit.faults import ResultsError
from trackfit.results import tables
from trackfit.results.folder import refuse_unless_replaceable, swap_in
from trackfit.results.geojson import write_geojson
from trackfit.results.geopackage import write_geopackage
from trackfit.results.inputs import FitLike, FixesLike, ResponseLike, TrackLike
from trackfit.results.manifest import RECORD
from trackfit.results.record import RecordInfo, build_record, write_record
from trackfit.results.trajectory import Discovery, write_trajectory

FORMATS = ("csv", "geopackage", "geojson", "netcdf")
FileWriter = Callable[[Path], None]


def write_folder(
    folder: Path,
    *,
    tracks: Sequence[TrackLike],
    fits: Sequence[FitLike],
    responses: Sequence[ResponseLike],
    fixes: FixesLike,
    record: RecordInfo,
    formats: Sequence[str] = FORMATS,
    extra_files: Mapping[str, FileWriter] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write the results of a study; return the folder.

    Always written: `parameters.csv`, `set_aside.csv`, `responses.csv` (if there are responses) and
    `results.json`. By format: csv `positions.csv` and `drawn_paths.csv` (`.csv.gz` if large; none
    without draws), geopackage `positions.gpkg`, geojson `positions.geojson`, netcdf `positions.nc`.

    Parameters
    ----------
    folder
        Put in place all at once: a failure or a kill leaves what stood there.
    tracks, fits, responses, fixes
        Filled tracks, fits (also those that failed), responses, and all fixes of the study.
    record
        What else goes into `results.json`.
    formats
        Some of `FORMATS`.
    extra_files
        More files by relative name (figures): each is drawn by a call with its path.
    overwrite
        Replace earlier results.

    Raises
    ------
    ResultsError
        The folder may not be replaced, a format is unknown, two names clash, or the disk refuses.
    """
    extra = dict(extra_files or {})
    _check_formats(formats)
    refuse_unless_replaceable(folder.resolve(), overwrite=overwrite)
    content = build_record(record, tracks, fits, fixes, formats=formats)
    with swap_in(folder, overwrite=overwrite) as fresh:
        _write_always(fresh, fits, responses, fixes)
        for name in formats:
            _BY_FORMAT[name](fresh, tracks, fixes.table, record)
        for name, writer in extra.items():
            _write_extra(fresh, name, writer)
        write_record(fresh, content)
    return folder


def _check_formats(formats: Sequence[str]) -> None:
    for name in formats:
        if name not in FORMATS:
            raise ResultsError(f"format {name!r} is not known: choose from {', '.join(FORMATS)}")


def _write_always(
    fresh: Path, fits: Sequence[FitLike], responses: Sequence[ResponseLike], fixes: FixesLike
) -> None:
    tables.write_parameters(fresh / "parameters.csv", fits)
    tables.write_set_aside(fresh / "set_aside.csv", fixes.set_aside)
    if responses:
        tables.write_responses(fresh / "responses.csv", responses)


def _write_csv(
    fresh: Path, tracks: Sequence[TrackLike], fixes: pd.DataFrame, record: RecordInfo
) -> None:
    tables.write_positions(fresh / "positions.csv", tracks)
    if any(len(t.draws_lonlat) for t in tracks):
        tables.write_drawn_paths(fresh / "drawn_paths.csv", tracks)


def _write_geopackage(
    fresh: Path, tracks: Sequence[TrackLike], fixes: pd.DataFrame, record: RecordInfo
) -> None:
    write_geopackage(fresh / "positions.gpkg", tracks, fixes)


def _write_geojson(
    fresh: Path, tracks: Sequence[TrackLike], fixes: pd.DataFrame, record: RecordInfo
) -> None:
    write_geojson(fresh / "positions.geojson", tracks)


def _write_netcdf(
    fresh: Path, tracks: Sequence[TrackLike], fixes: pd.DataFrame, record: RecordInfo
) -> None:
    write_trajectory(fresh / "positions.nc", tracks, discovery(record))


_BY_FORMAT = {
    "csv": _write_csv,
    "geopackage": _write_geopackage,
    "geojson": _write_geojson,
    "netcdf": _write_netcdf,
}


def discovery(record: RecordInfo) -> Discovery:
    """Return the words of a NetCDF file from what a run knows about itself."""
    given = {
        "title": record.title,
        "institution": record.institution,
        "references": record.references,
        "history": f"{record.created:%Y-%m-%dT%H:%M:%SZ} written by trackfit",
    }
    return Discovery(**{name: text for name, text in given.items() if text})


def _write_extra(fresh: Path, name: str, writer: FileWriter) -> None:
    relative = PurePosixPath(name)
    path = fresh / relative
    if relative.is_absolute() or ".." in relative.parts or name == RECORD or path.exists():
        raise ResultsError(f"{name!r} cannot be the name of a further file: choose a free one")
    path.parent.mkdir(parents=True, exist_ok=True)
    writer(path)
