"""Hands on ``kernel``: the one way a kernel is compiled."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba as _numba

numba: Any = _numba  # its stubs know neither the configuration nor options given together


def _cache_folder() -> str | None:
    """Where compiled kernels are kept: a folder named after what all kernels' sources say.

    numba keeps compiled code by file and does not see that a kernel called from another file has
    changed; a folder for each state of the sources does. Beside the sources where that can be
    written, else in the user's or the system's place for such things, else nowhere.
    """
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for source in sorted(here.glob("*.py")):
        digest.update(source.read_bytes())
    home = os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    places = [here / "__pycache__", Path(home, "miner-kernels"), Path(tempfile.gettempdir())]
    for place in places:
        folder = place / f"kernels-{digest.hexdigest()[:16]}"
        try:
            folder.mkdir(parents=True, exist_ok=True)
        except OSError:
            continue
        if os.access(folder, os.W_OK):
            return str(folder)
    return None


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
