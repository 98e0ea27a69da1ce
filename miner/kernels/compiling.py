"""Hands on ``kernel``: the one way a kernel is compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba


def _compile(function: Callable[..., Any], **options: Any) -> Any:
    options = {"nogil": True, "error_model": "numpy"} | options
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:
        return numba.njit(**options)(function)


def kernel(function: Callable[..., Any]) -> Any:
    """Compile without the interpreter lock, cached on disk where a cache can be written.

    numba looks for a cache folder beside the source, then in the user's home; a read-only
    install without a home has neither, and then every process compiles afresh.
    """
    return _compile(function)


def summing_kernel(function: Callable[..., Any]) -> Any:
    """As ``kernel``, free to add a sum's terms in another order, several at a time.

    The order is fixed for a machine, so that runs agree to the bit there; machines with other
    vector units differ by rounding.
    """
    return _compile(function, fastmath={"reassoc", "contract", "nsz", "arcp"})
