"""Loops that are compiled to machine code, once a machine: whatever goes row by row.

A compiled function must read nothing from outside its own file but what it is handed: the
machine code is kept on disk and told to be out of date by that file alone.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

F = TypeVar("F", bound=Callable[..., Any])


def compiled(function: F) -> F:
    """Compile a function at its first call, without Python's lock while it runs.

    The code is kept beside the module or, where that cannot be written, in the user's cache
    folder (or ``NUMBA_CACHE_DIR``); with none of them, each process compiles it anew.
    """
    try:
        made = njit(cache=True, nogil=True)(function)
    except RuntimeError:  # no folder can be written
        made = njit(nogil=True)(function)
    return cast(F, made)
