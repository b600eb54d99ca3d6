"""The demonstration: an invented study, copied out of the installed package."""

from collections.abc import Iterator
from importlib.resources import as_file, files
from pathlib import Path
from shutil import copyfile

from trackfit.faults import ResultsError, StudyError

STUDY_NAME = "study.toml"
_OF_THE_PACKAGE = {".py", ".pyc"}


def copy_demo(folder: Path, *, overwrite: bool = False) -> Path:
    """Copy the demonstration's data into a folder and return its study file.

    Parameters
    ----------
    folder
        Made if absent.
    overwrite
        Replace files of the same names; others are left alone.

    Raises
    ------
    ResultsError
        When a file of the same name is there and overwriting was not asked for.
    StudyError
        When the installed package holds no demonstration.
    """
    with as_file(files("trackfit_demo")) as source:
        names = sorted(_data_files(source))
        if Path(STUDY_NAME) not in names:
            raise StudyError("the demonstration's files are missing: install trackfit anew")
        _refuse_existing(folder, names, overwrite=overwrite)
        for name in names:
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            copyfile(source / name, folder / name)
    return folder / STUDY_NAME


def _data_files(source: Path) -> Iterator[Path]:
    for path in source.rglob("*"):
        if path.is_file() and path.suffix not in _OF_THE_PACKAGE:
            yield path.relative_to(source)


def _refuse_existing(folder: Path, names: list[Path], *, overwrite: bool) -> None:
    if folder.exists() and not folder.is_dir():
        raise ResultsError(f"{folder}: is a file; the demonstration needs a folder")
    held = next((name for name in names if (folder / name).exists()), None)
    if held is not None and not overwrite:
        raise ResultsError(
            f"{folder}: {held} is there already; add --overwrite to replace the demonstration's "
            "files, or name another folder"
        )
