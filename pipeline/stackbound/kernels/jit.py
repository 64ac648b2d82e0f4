"""The one way kernels are compiled: lazily, without the interpreter lock, cached where a folder is writable."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

import numba

Array = Any
"""An array as a kernel sees it: numba takes its type from the argument."""

Function = TypeVar("Function", bound=Callable[..., Any])


def kernel(function: Function) -> Function:
    """Compile `function` on first use.

    No fastmath and no parallel loops: both change results from machine to machine. Signatures stay open, because an
    explicit one would compile at import.
    """
    try:
        compiled = numba.njit(nogil=True, cache=True, error_model="numpy")(function)
    except RuntimeError:
        # No folder for the cache is writable (containers, clusters): compile anew in each process.
        compiled = numba.njit(nogil=True, error_model="numpy")(function)
    return compiled


def inlined(function: Function) -> Function:
    """Compile a helper that only other kernels call; it becomes part of them and of their cache entry."""
    return numba.njit(nogil=True, error_model="numpy", inline="never")(function)
