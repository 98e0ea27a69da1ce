"""Faults of the machine that a user can do something about, as one message each."""

from __future__ import annotations

import errno
import os
import sys

from miner.errors import InputError, explain

OF_THE_SYSTEM = {
    getattr(errno, name)
    for name in (
        *("ENOSPC", "EDQUOT", "EFBIG", "EROFS", "EACCES", "EPERM", "EIO", "EMFILE", "ENFILE"),
        *("ENOMEM", "ENAMETOOLONG", "ELOOP", "ENOTDIR", "EISDIR", "ENOENT", "ESTALE", "ETXTBSY"),
    )
    if hasattr(errno, name)
}
NO_ROOM = ("failed to map segment", "annot allocate memory", "libllvmlite.so' from resource")
LESS = (
    "Raise [mining] min_triggers, lower max_size or [testing] permutations, hunt with fewer "
    "entities or alert types, or use a machine with more memory."
)


def as_message(error: BaseException) -> str | None:
    """What to tell the user of an error; None where it is a fault of ours."""
    if isinstance(error, InputError):
        return str(error)
    if isinstance(error, MemoryError) or _lacks_room(error):
        return explain("memory", "the study", "fit into free memory", "too little of it", LESS)
    if isinstance(error, RuntimeError) and "can't start new thread" in str(error):
        advice = "Use fewer --workers, or raise the limits of processes and memory (ulimit -a)."
        return explain("system", "threads", "be to be had", "a refusal to start one", advice)
    if isinstance(error, OSError) and error.errno in OF_THE_SYSTEM:
        what = str(error.filename) if error.filename else "output"
        found = f"the system's error: {error.strerror}"
        advice = "Free some space, check rights and limits, or name another place."
        return explain("system", what, "be usable", found, advice)
    return None


def _lacks_room(error: BaseException | None) -> bool:
    """Whether a library could not be loaded for want of memory: that is no MemoryError."""
    while error is not None:
        said = str(error)
        if isinstance(error, ImportError | OSError) and any(text in said for text in NO_ROOM):
            return True
        error = error.__cause__ or error.__context__
    return False


def let_go_of_output() -> None:
    """Where standard output takes nothing more, drop what is left, or Python complains at exit."""
    try:
        sys.stdout.flush()
    except OSError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
