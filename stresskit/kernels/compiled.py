"""Loops that numpy cannot say in few passes, compiled by numba.

No fast-math: additions keep the order of the source, so the same machine gives the same bits on every run.
No threads inside: they come from :func:`stresskit.kernels.blocks.in_order`, for which the lock is let go.
The machine code is kept beside the module (numba's cache), so that a process compiles nothing twice.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

F = TypeVar("F", bound=Callable[..., Any])

#: Options that numba has for its own use and leaves out of its types.
_LEAN: dict[str, Any] = {"_nrt": False, "no_cpython_wrapper": True, "no_cfunc_wrapper": True}


def compiled(function: F) -> F:
    """The function as machine code; division by zero gives inf or nan as in numpy."""
    return cast(F, njit(cache=True, nogil=True, error_model="numpy")(function))


def lean(function: F) -> F:
    """The same for compiled callers alone, without counting references to arrays, which costs more than short loops do:
    the function may slice arrays that its callers hold, and must not make any. Python cannot call it, which spares a
    third of the compiling."""
    return cast(F, njit(cache=True, nogil=True, error_model="numpy", **_LEAN)(function))


def inlined(function: F) -> F:
    """The same, put into every caller as a copy of its own: arguments that are constants there decide at compile time."""
    return cast(F, njit(cache=True, nogil=True, error_model="numpy", forceinline=True, **_LEAN)(function))
