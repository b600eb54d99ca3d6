"""The record of a run: everything needed to understand it and to do it again."""

import datetime
import enum
import importlib.metadata
import json
import math
import platform
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field, is_dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from trackfit.faults import ResultsError
from trackfit.results.inputs import FitLike, FixesLike, TrackLike
from trackfit.results.manifest import RECORD, WRITER, list_files, sealed, sha256_of

CAUTIONS = (
    "Not for navigation.",
    "Exact positions of protected species are sensitive: share with care.",
)
FORMAT_VERSION = 2
_PACKAGES = ("trackfit", "numpy", "scipy", "jax")


@dataclass(frozen=True)
class RecordInfo:
    """What a run knows about itself beyond its tracks and fits.

    Attributes
    ----------
    study
        The study as understood: every key with its value, defaults included.
    inputs
        Every file that was read, by the name the study gives it.
    seed
        Seed of everything drawn at random.
    notes, warnings
        Sentences for the user, in the order they arose.
    created
        When the run ended, in UTC; now if not given.
    findings
        What was found out about the fits: verdicts, comparisons, trials.
    title, institution, references
        Words for the NetCDF file; left out, it says that they are not stated.
    """

    study: Mapping[str, object]
    inputs: Mapping[str, Path]
    seed: int
    notes: Sequence[str] = ()
    warnings: Sequence[str] = ()
    created: datetime.datetime = field(default_factory=lambda: datetime.datetime.now(datetime.UTC))
    findings: Mapping[str, object] = field(default_factory=dict)
    title: str | None = None
    institution: str | None = None
    references: str | None = None


def build_record(
    info: RecordInfo,
    tracks: Sequence[TrackLike],
    fits: Sequence[FitLike],
    fixes: FixesLike,
    *,
    formats: Sequence[str] = (),
) -> dict[str, object]:
    """Return the record as plain JSON values: no NaN (null instead), times as ISO 8601 in UTC.

    Raises
    ------
    ResultsError
        An input file cannot be read any more.
    """
    record = {
        "written_by": WRITER,
        "format_version": FORMAT_VERSION,
        "created": info.created,
        "cautions": CAUTIONS,
        "versions": versions(),
        "study": info.study,
        "seed": info.seed,
        "inputs": {name: _checksum(name, path) for name, path in info.inputs.items()},
        "formats": formats,
        "tags": _tags(tracks, fits, fixes),
        "findings": info.findings,
        "notes": info.notes,
        "warnings": info.warnings,
    }
    plain = as_json(record)
    assert isinstance(plain, dict)
    return plain


def write_record(folder: Path, record: Mapping[str, object]) -> None:
    """Write `results.json` with the list of all files in the folder: the last file of a run."""
    whole = sealed({**record, "files": list_files(folder)})
    text = json.dumps(whole, indent=2, ensure_ascii=False, allow_nan=False)
    (folder / RECORD).write_text(text + "\n", encoding="utf-8", newline="\n")


def versions() -> dict[str, str]:
    """Return the versions of Python and of the packages a result depends on."""
    return {"python": platform.python_version(), **{name: _version(name) for name in _PACKAGES}}


def _version(package: str) -> str:
    try:
        return importlib.metadata.version(package)
    except importlib.metadata.PackageNotFoundError:
        return "not installed"


def _checksum(name: str, path: Path) -> dict[str, object]:
    try:
        return {"bytes": path.stat().st_size, "sha256": sha256_of(path)}
    except OSError as fault:
        raise ResultsError(
            f"{name}: cannot be read again for its checksum ({fault.strerror}); "
            "put the file back and run once more"
        ) from fault


def _tags(
    tracks: Sequence[TrackLike], fits: Sequence[FitLike], fixes: FixesLike
) -> dict[str, object]:
    """Return one entry for every tag that appears anywhere, so that none is lost in silence."""
    fit_of = {f.tag: f for f in fits}
    track_of = {t.tag: t for t in tracks}
    aside = fixes.set_aside["tag"].astype(str).value_counts()
    names = sorted({*fit_of, *track_of, *fixes.table["tag"], *aside.index})
    return {
        name: {
            **_fit_entry(fit_of.get(name)),
            "positions": len(track_of[name].table) if name in track_of else 0,
            "draws": len(track_of[name].draws_lonlat) if name in track_of else 0,
            "fixes_set_aside": int(aside.get(name, 0)),
        }
        for name in names
    }


def _fit_entry(fit: FitLike | None) -> dict[str, object]:
    if fit is None:
        return {"status": None, "ok": False, "sentence": "This tag was not fitted."}
    return {
        "status": fit.status.name,
        "ok": fit.status.ok,
        "sentence": fit.status.sentence,
        "log_marginal": fit.log_marginal,
        "fixes_used": fit.n_fixes,
        "states": fit.n_states,
        "step_hours": fit.step_hours,
        "parameters": fit.parameters.to_dict(orient="records"),
        "change_at_half_the_step_in_sd": None
        if fit.step_check is None
        else dict(zip(fit.step_check["parameter"], fit.step_check["change_in_sd"], strict=True)),
    }


def as_json(value: object) -> object:
    """Return a value as JSON knows it; NaN and infinities become null.

    Examples
    --------
    >>> as_json({"a": (1, float("nan")), "b": Path("sea") / "depth.nc"})
    {'a': [1, None], 'b': 'sea/depth.nc'}
    """
    if isinstance(value, Mapping):
        return {str(key): as_json(item) for key, item in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [as_json(item) for item in value]
    if isinstance(value, np.ndarray):
        return as_json(value.tolist())
    if is_dataclass(value) and not isinstance(value, type):
        return as_json(asdict(value))
    return _scalar(value)


def _scalar(value: object) -> object:
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, enum.Enum):
        return as_json(value.value)
    if value is None or value is pd.NaT or value is pd.NA:
        return None
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, bool | int | str):
        return value
    if isinstance(value, datetime.datetime):
        return _iso(value)
    return value.as_posix() if isinstance(value, Path) else str(value)


def _iso(moment: datetime.datetime) -> str:
    utc = moment if moment.tzinfo is None else moment.astimezone(datetime.UTC)
    return utc.replace(tzinfo=None).isoformat(timespec="seconds") + "Z"
