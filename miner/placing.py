"""Puts finished files and folders where they belong in one step, so that what is there is whole.

Work is done in a folder of its own beside the target, ``.NAME.unfinished-XXXXXXXX``, and moved when
complete. A process that is killed leaves such a folder behind; the next one with the same target
removes it. A live one is told from a dead one by a lock that the system drops with the process.
"""

from __future__ import annotations

import ctypes
import errno
import os
import shutil
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

if sys.platform != "win32":
    import fcntl

LONGEST = 60  # characters of the target's name that go into that of the folder beside it
AT_FDCWD, RENAME_EXCHANGE = -100, 2
NO_EXCHANGE = {errno.EINVAL, errno.ENOSYS, errno.ENOTSUP, errno.EOPNOTSUPP, errno.EXDEV}
TRIES = 100

_unfinished: set[Path] = set()
_placing = threading.Lock()


def is_placing() -> bool:
    """Whether something is being moved to its place right now."""
    return _placing.locked()


@contextmanager
def aside(target: Path) -> Iterator[Path]:
    """A new folder beside ``target`` to work in; it is gone at the end, whatever happened.

    What dead processes left of the same target is removed first.

    Raises
    ------
    OSError : no folder can be made there
    """
    target.parent.mkdir(parents=True, exist_ok=True)
    sweep(target)
    folder = _beside(target, "unfinished")
    _unfinished.add(folder)  # before it is there, so that none is missed
    handle = None
    try:
        folder.mkdir()
        handle = _hold(folder)
        yield folder
    finally:
        _remove(folder)
        _unfinished.discard(folder)
        if handle is not None:
            os.close(handle)


def put_folder(made: Path, target: Path) -> None:
    """Move a finished folder to its place, in the place of one that is there.

    The two change places in one step where the system can; else the old one is first moved to
    ``.NAME.replaced-XXXXXXXX``, from where ``sweep`` brings it back if the process is killed
    before the new one is in place.

    Raises
    ------
    OSError : it cannot be moved; what was there is there
    """
    _to_disk(made)
    with _placing:
        if not target.exists():
            made.rename(target)
        elif not _exchange(made, target):
            old, handle = _beside(target, "replaced"), _hold(target)
            target.rename(old)
            try:
                made.rename(target)
            except OSError:
                old.rename(target)
                raise
            finally:
                if handle is not None:
                    os.close(handle)
            _remove(old)
    _flush(target.parent)


def put_files(made: Path, folder: Path) -> None:
    """Move all files of a finished folder into another, in the place of those that are there.

    Every file appears whole; they are moved one after the other, in the order of their names.

    Raises
    ------
    OSError : one cannot be moved
    """
    _to_disk(made)
    with _placing:
        folder.mkdir(parents=True, exist_ok=True)
        for path in sorted(made.iterdir()):
            path.replace(folder / path.name)
    _flush(folder)


def sweep(target: Path) -> None:
    """Remove what dead processes left beside ``target``; bring back a folder they had moved away.

    What cannot be removed stays.
    """
    for path in _left(target, "replaced"):
        if _is_dead(path) and not target.exists():
            with suppress(OSError):
                path.rename(target)
    for kind in ("unfinished", "replaced"):
        for path in _left(target, kind):
            if _is_dead(path):
                shutil.rmtree(path, ignore_errors=True)


def abandon(timeout: float) -> None:
    """Remove everything unfinished, for good: nothing can be put in its place after this.

    Waits up to ``timeout`` seconds for what is being moved; for a process that is about to end.
    """
    _placing.acquire(timeout=timeout)
    for folder in list(_unfinished):
        _remove(folder)


def _beside(target: Path, kind: str) -> Path:
    return target.with_name(f"{_prefix(target, kind)}{os.urandom(4).hex()}")


def _prefix(target: Path, kind: str) -> str:
    return f".{target.name[:LONGEST]}.{kind}-"


def _left(target: Path, kind: str) -> list[Path]:
    prefix = _prefix(target, kind)
    try:
        return [p for p in target.parent.iterdir() if p.name.startswith(prefix)]
    except OSError:
        return []


def _remove(folder: Path) -> None:
    """Remove a folder even while another thread still writes into it."""
    for _ in range(TRIES):
        shutil.rmtree(folder, ignore_errors=True)
        if not folder.exists():
            return


def _hold(folder: Path, wait: bool = True) -> int | None:
    """Lock a folder until the returned handle is closed or the process ends; None: it is not."""
    if sys.platform == "win32":
        return None
    handle = None
    try:
        handle = os.open(folder, os.O_RDONLY)
        fcntl.flock(handle, fcntl.LOCK_EX | (0 if wait else fcntl.LOCK_NB))
        return handle
    except OSError:  # held by another, or a file system without locks
        if handle is not None:
            os.close(handle)
        return None


def _is_dead(folder: Path) -> bool:
    handle = _hold(folder, wait=False)
    if handle is not None:
        os.close(handle)
    return handle is not None


def _exchange(one: Path, other: Path) -> bool:
    """Let two folders change places in one step; False where the system cannot."""
    call = getattr(ctypes.CDLL(None, use_errno=True), "renameat2", None) if _is_linux() else None
    if call is None:
        return False
    names = os.fsencode(one), os.fsencode(other)
    if call(AT_FDCWD, names[0], AT_FDCWD, names[1], RENAME_EXCHANGE) == 0:
        return True
    code = ctypes.get_errno()
    if code in NO_EXCHANGE:
        return False
    raise OSError(code, os.strerror(code), str(other))


def _is_linux() -> bool:
    return sys.platform == "linux"


def _to_disk(folder: Path) -> None:
    """Have the system write a folder's files out: only then does it tell of a disk that is full."""
    for path in folder.iterdir():
        if path.is_file():
            _flush(path)
    _flush(folder)


def _flush(path: Path) -> None:
    if path.is_dir() and sys.platform == "win32":
        return  # folders cannot be opened there
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    except OSError as error:
        if error.errno not in NO_EXCHANGE:  # some file systems cannot flush a folder
            raise
    finally:
        os.close(handle)
