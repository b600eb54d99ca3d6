"""The border to the libraries that read files: their exceptions become ours there."""

from __future__ import annotations

import contextlib
import difflib
import warnings
from collections.abc import Iterable, Iterator
from pathlib import Path

from trackfit.faults import LayerError, TrackfitError


@contextlib.contextmanager
def foreign(place: str, doing: str) -> Iterator[None]:
    """Turn any exception of a foreign reader into a LayerError; keep its warnings quiet.

    A damaged file can make a reader raise anything, so everything is caught.
    """
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    except TrackfitError:
        raise
    except Exception as fault:
        said = " ".join(str(fault).split()) or type(fault).__name__
        raise LayerError(
            f"{place}: cannot {doing}: {said}; is the file whole and of the kind it says?"
        ) from fault


def check_file(place: str, file: Path) -> None:
    """Refuse a file that is not there, a folder and an empty file."""
    if not file.exists():
        raise LayerError(f"{place}: there is no such file; check the path")
    if file.is_dir():
        raise LayerError(f"{place}: this is a folder; name a file in it")
    if file.stat().st_size == 0:
        raise LayerError(f"{place}: the file is empty (0 bytes); fetch it again")


def choices(wanted: str, there: Iterable[str]) -> str:
    """List what there is, and the nearest to what was asked for."""
    names = sorted(there)
    lowered = {name.lower(): name for name in names}
    near = difflib.get_close_matches(wanted.lower(), lowered, n=1, cutoff=0.5)
    hint = f"; did you mean '{lowered[near[0]]}'?" if near else ""
    return f"there are {', '.join(names) or 'none'}{hint}"
