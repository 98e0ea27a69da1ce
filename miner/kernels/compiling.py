"""Hands on ``kernel``: the one way a kernel is compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba


def kernel(function: Callable[..., Any]) -> Any:
    """Compile without the interpreter lock, cached on disk where a cache can be written.

    numba looks for a cache folder beside the source, then in the user's home; a read-only
    install without a home has neither, and then every process compiles afresh.
    """
    try:
        return numba.njit(nogil=True, cache=True, error_model="numpy")(function)
    except RuntimeError:
        return numba.njit(nogil=True, error_model="numpy")(function)
