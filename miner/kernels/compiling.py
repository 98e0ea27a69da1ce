"""Hands on ``kernel``: the one way a kernel is compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba

F = TypeVar("F", bound=Callable[..., Any])


def kernel(function: F) -> F:
    """Compile without the interpreter lock, cached on disk where a cache can be written.

    numba looks for a cache folder beside the source, then in the user's home; a read-only
    install without a home has neither, and then every process compiles afresh.
    """
    try:
        return numba.njit(nogil=True, cache=True, error_model="numpy")(function)  # type: ignore
    except RuntimeError:
        return numba.njit(nogil=True, error_model="numpy")(function)  # type: ignore
