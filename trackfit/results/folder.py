"""Put a folder of results in place all at once, and never lose what stood there.

New results are written into a sibling, `.<name>.new-<pid>`, which is exchanged with the old folder
in one step (Linux: `renameat2` with RENAME_EXCHANGE, see renameat2(2)). Where the system cannot do
that, the old folder is first renamed to `.<name>.old-<pid>`; a run killed between the two renames
is set right at the next start. Siblings left by killed runs are removed then, too.
"""

import contextlib
import ctypes
import errno
import os
import shutil
import sys
from collections.abc import Iterator
from pathlib import Path

from trackfit.faults import ResultsError
from trackfit.results.manifest import RECORD, foreign_entries, read_record

if sys.platform != "win32":
    import fcntl

_AT_FDCWD = -100
_RENAME_EXCHANGE = 2
_NO_EXCHANGE = {errno.ENOSYS, errno.EINVAL, errno.EOPNOTSUPP, errno.EPERM}
_NAMES_SHOWN = 5


@contextlib.contextmanager
def swap_in(folder: Path, *, overwrite: bool = False) -> Iterator[Path]:
    """Yield a fresh folder to fill; when the block ends well, it takes the place of `folder`.

    If the block fails, the fresh folder is removed and `folder` stays as it was. A process killed
    at any moment leaves the old folder or the new one, whole.

    Parameters
    ----------
    folder
        Where the results shall stand. Missing parent folders are made.
    overwrite
        Replace earlier results. A folder that holds anything trackfit did not write, or a file
        changed since, is never replaced.

    Raises
    ------
    ResultsError
        `folder` exists and may not be replaced; another run is writing it; the disk refuses.
    """
    target = folder.resolve()
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        with _parent_locked(target.parent):
            recover(target)
            refuse_unless_replaceable(target, overwrite=overwrite)
            fresh, lock = _new_sibling(target)
    except OSError as fault:
        raise _refused_by_system(folder, fault) from fault
    try:
        yield fresh
        _flush(fresh)
        refuse_unless_replaceable(target, overwrite=overwrite)
        old = _put_in_place(fresh, target)
    except BaseException as fault:
        shutil.rmtree(fresh, ignore_errors=True)
        if isinstance(fault, OSError):
            raise _refused_by_system(folder, fault) from fault
        raise
    finally:
        _unlock(lock)
    if old is not None:
        with contextlib.suppress(OSError):  # what is left goes at the next start
            _remove_old(old)


def refuse_unless_replaceable(folder: Path, *, overwrite: bool) -> None:
    """Raise `ResultsError` if results may not be written to `folder`.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as empty:
    ...     refuse_unless_replaceable(Path(empty), overwrite=True)
    """
    if not folder.exists():
        return
    if not folder.is_dir():
        raise ResultsError(f"{folder}: is a file; results need a folder: name another one")
    foreign = foreign_entries(folder)
    if foreign:
        shown = ", ".join(foreign[:_NAMES_SHOWN])
        more = f" and {len(foreign) - _NAMES_SHOWN} more" if len(foreign) > _NAMES_SHOWN else ""
        raise ResultsError(
            f"{folder}: holds {shown}{more}, not written by trackfit or changed since; a folder "
            "is replaced only if all in it is trackfit's: move these away or name another folder"
        )
    if not overwrite:
        raise ResultsError(
            f"{folder}: exists already; ask for overwriting to replace it, or name another folder"
        )


def recover(folder: Path) -> None:
    """Set right what killed runs left beside `folder`.

    If the folder itself is missing because a run died between two renames, the old one returns.

    Raises
    ------
    ResultsError
        Another run is writing this folder now.
    """
    for new in _siblings(folder, "new"):
        _remove_stale(new, folder)
    for old in _siblings(folder, "old"):
        if folder.exists():
            _remove_old(old)
        else:
            old.rename(folder)


def _siblings(folder: Path, kind: str) -> list[Path]:
    start = f".{folder.name}.{kind}-"
    if not folder.parent.is_dir():
        return []
    found = (p for p in folder.parent.iterdir() if p.name.startswith(start))
    return sorted(p for p in found if p.name.removeprefix(start).isdigit() and p.is_dir())


def _remove_stale(sibling: Path, folder: Path) -> None:
    """Remove what a dead run left: a half-written folder whole, an old one only as listed."""
    try:
        lock = _lock(sibling)
    except BlockingIOError as fault:
        raise ResultsError(
            f"{folder}: another run is writing it now ({sibling.name}); wait until it has ended"
        ) from fault
    try:
        if read_record(sibling) is None:
            shutil.rmtree(sibling, ignore_errors=True)
        else:
            _remove_old(sibling)
    finally:
        _unlock(lock)


def _remove_old(old: Path) -> None:
    """Remove the files trackfit wrote and the folders left empty; keep anything else.

    Files go before the record, so that a run killed here leaves a folder that still tells which
    of its files are trackfit's.
    """
    kept = set(foreign_entries(old))
    paths = sorted(old.rglob("*"), key=lambda p: (p == old / RECORD, -len(p.parts)))
    for path in paths:
        if path.relative_to(old).as_posix() in kept:
            continue
        with contextlib.suppress(OSError):
            path.rmdir() if path.is_dir() else path.unlink()
    with contextlib.suppress(OSError):
        old.rmdir()


def _new_sibling(target: Path) -> tuple[Path, int | None]:
    fresh = target.parent / f".{target.name}.new-{os.getpid()}"
    fresh.mkdir()
    return fresh, _lock(fresh)


def _put_in_place(fresh: Path, target: Path) -> Path | None:
    """Move the fresh folder to its place; return where the old one stands now, if there was one."""
    if not target.exists():
        fresh.rename(target)
        return None
    if exchange(fresh, target):
        return fresh
    old = target.parent / f".{target.name}.old-{os.getpid()}"
    target.rename(old)
    try:
        fresh.rename(target)
    except OSError:
        old.rename(target)
        raise
    return old


def exchange(one: Path, other: Path) -> bool:
    """Exchange two folders in one step; False where the system cannot (nothing has changed then).

    Raises
    ------
    OSError
        The system can, but refuses this pair.
    """
    swap = getattr(ctypes.CDLL(None, use_errno=True), "renameat2", None) if _is_linux() else None
    if swap is None:
        return False
    names = os.fsencode(one), os.fsencode(other)
    if swap(_AT_FDCWD, names[0], _AT_FDCWD, names[1], ctypes.c_uint(_RENAME_EXCHANGE)) == 0:
        return True
    code = ctypes.get_errno()
    if code in _NO_EXCHANGE:
        return False
    raise OSError(code, os.strerror(code), str(other))


def _is_linux() -> bool:
    return sys.platform.startswith("linux")


def _flush(folder: Path) -> None:
    """Ask the system to put every file on the disk before it becomes the result."""
    if not _can_lock():
        return
    for path in [*folder.rglob("*"), folder]:
        handle = os.open(path, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _refused_by_system(folder: Path, fault: OSError) -> ResultsError:
    return ResultsError(
        f"{folder}: results cannot be written ({fault.strerror or fault}); what stood there is "
        "untouched: free space or rights, or name another folder"
    )


# A lock on a folder lives as long as the process that took it, so a killed run never blocks. Where
# the file system knows no locks, two runs at once on one folder are not told apart.


def _can_lock() -> bool:
    return sys.platform != "win32"


def _lock(folder: Path) -> int | None:
    """Lock a folder without waiting; BlockingIOError if another process has it."""
    if sys.platform == "win32":
        return None
    handle = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        os.close(handle)
        raise
    except OSError:
        pass
    return handle


def _unlock(handle: int | None) -> None:
    if handle is not None:
        os.close(handle)


@contextlib.contextmanager
def _parent_locked(parent: Path) -> Iterator[None]:
    """Wait for the parent's lock: a sibling is made and locked before another run can see it."""
    if sys.platform == "win32":
        yield
        return
    handle = os.open(parent, os.O_RDONLY)
    try:
        with contextlib.suppress(OSError):
            fcntl.flock(handle, fcntl.LOCK_EX)
        yield
    finally:
        os.close(handle)
