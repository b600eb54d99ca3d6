"""The list of files that trackfit wrote into a folder, and what else lies there.

The record (`results.json`) lists every other file with size and sha256, and holds a sha256 of its
own content. Whatever is not on the list, or was changed since, belongs to the user.
"""

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path

RECORD = "results.json"
WRITER = "trackfit"


def sha256_of(path: Path) -> str:
    """Return the sha256 of a file as 64 hexadecimal digits."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def list_files(folder: Path) -> dict[str, dict[str, object]]:
    """Return bytes and sha256 of every file under a folder except the record, by relative name."""
    files = sorted(p for p in folder.rglob("*") if p.is_file() and p != folder / RECORD)
    return {
        p.relative_to(folder).as_posix(): {"bytes": p.stat().st_size, "sha256": sha256_of(p)}
        for p in files
    }


def sealed(record: Mapping[str, object]) -> dict[str, object]:
    """Return the record with `record_sha256`, a digest of everything else in it."""
    return {**record, "record_sha256": _digest(record)}


def read_record(folder: Path) -> dict[str, object] | None:
    """Return the record of a results folder as trackfit wrote it, or None."""
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    if not isinstance(record, dict) or record.get("written_by") != WRITER:
        return None
    return record if isinstance(record.get("files"), dict) else None


def foreign_entries(folder: Path) -> list[str]:
    """Return what lies in a folder and is not a file of trackfit's, unchanged; sorted names.

    An empty folder holds nothing foreign. Links and empty folders that are not on the list count.
    """
    record = read_record(folder)
    known = _known(record) if record else {}
    return sorted(
        name
        for path in folder.rglob("*")
        if not _ours(path, (name := path.relative_to(folder).as_posix()), known, record)
    )


def _known(record: Mapping[str, object]) -> dict[str, dict[str, object]]:
    files = record["files"]
    return files if isinstance(files, dict) else {}


def _ours(
    path: Path,
    name: str,
    known: Mapping[str, Mapping[str, object]],
    record: Mapping[str, object] | None,
) -> bool:
    if path.is_symlink():
        return False
    if path.is_dir():
        return any(file.startswith(f"{name}/") for file in known)
    if name == RECORD:
        return record is not None and _seal_holds(record)
    seen = known.get(name)
    return seen is not None and _unchanged(path, seen)


def _unchanged(path: Path, seen: Mapping[str, object]) -> bool:
    return path.is_file() and (
        path.stat().st_size == seen.get("bytes") and sha256_of(path) == seen.get("sha256")
    )


def _seal_holds(record: Mapping[str, object]) -> bool:
    rest = {key: value for key, value in record.items() if key != "record_sha256"}
    return record.get("record_sha256") == _digest(rest)


def _digest(record: Mapping[str, object]) -> str:
    text = json.dumps(record, sort_keys=True, ensure_ascii=False, allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()
