"""Hands on ``kernel``: the one way a kernel is compiled."""

from __future__ import annotations

import hashlib
import os
import stat
import tempfile
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

import numba as _numba

numba: Any = _numba  # its stubs know neither the configuration nor options given together


def _cache_folder() -> str | None:
    """Where compiled kernels are kept: a folder named after what all kernels' sources say.

    numba keeps compiled code by file and does not see that a kernel called from another file has
    changed; a folder for each state of the sources does. Beside the sources where that can be
    written, else in the user's or the system's place for such things, else nowhere; and only where
    nobody else can write, since what is kept there is run.
    """
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for source in sorted(here.glob("*.py")):
        digest.update(source.read_bytes())
    home = Path(os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache"))
    places = [here / "__pycache__", home / "miner-kernels"]
    with suppress(OSError):  # there may be none that can be written
        places.append(Path(tempfile.gettempdir()))
    for place in places:
        if not place.is_absolute():
            continue  # without a home "~" stays as it is
        folder = place / f"kernels-{digest.hexdigest()[:16]}"
        try:
            place.mkdir(parents=True, exist_ok=True)
            folder.mkdir(mode=0o700, exist_ok=True)
            is_safe = _is_ours_alone(folder)
        except OSError:
            continue
        if is_safe and os.access(folder, os.W_OK):
            return str(folder)
    return None


def _is_ours_alone(folder: Path) -> bool:
    """Whether nobody else can put compiled code there for us to run."""
    if not hasattr(os, "getuid"):
        return True
    info = folder.lstat()
    return stat.S_ISDIR(info.st_mode) and info.st_uid == os.getuid() and not info.st_mode & 0o022


CACHE_FOLDER = _cache_folder()


def _compile(function: Callable[..., Any], **options: Any) -> Any:
    options = {"nogil": True, "error_model": "numpy", "cache": CACHE_FOLDER is not None} | options
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = CACHE_FOLDER or before
    try:
        return numba.njit(**options)(function)
    except RuntimeError:  # no place for a cache after all
        return numba.njit(**options | {"cache": False})(function)
    finally:
        numba.config.CACHE_DIR = before


def kernel(function: Callable[..., Any]) -> Any:
    """Compile without the interpreter lock, and keep the compiled code on disk where possible."""
    return _compile(function)


def summing_kernel(function: Callable[..., Any]) -> Any:
    """As ``kernel``, free to add a sum's terms in another order, several at a time.

    The order is fixed for a machine, so that runs agree to the bit there; machines with other
    vector units differ by rounding.
    """
    return _compile(function, fastmath={"reassoc", "contract", "nsz", "arcp"})
