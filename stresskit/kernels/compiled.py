"""The one way a kernel is compiled.

Compiled code keeps IEEE arithmetic in the order written (no fast-math), so that the same input gives the same bits;
it releases the interpreter lock, so that blocks can run on threads, and is kept on disk between runs.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

F = TypeVar("F", bound=Callable[..., Any])


def compiled(function: F) -> F:
    """The function, compiled at its first call for the types it is called with."""
    return cast(F, njit(cache=True, nogil=True, error_model="numpy")(function))
