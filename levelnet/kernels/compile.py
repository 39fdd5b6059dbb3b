"""The one decorator for compiled kernels."""

from collections.abc import Callable
from typing import Any, TypeVar, cast

import numba

Function = TypeVar("Function", bound=Callable[..., Any])


def kernel(function: Function) -> Function:
    """Compile `function` with numba at its first call, and keep the machine code on disk.

    A kernel calls only kernels of its own file and takes every physical constant as an argument:
    the cache on disk notices changes in the kernel's own file and no others.
    """
    try:
        return _compiled(function, cache=True)
    except RuntimeError:
        # Neither the package folder nor the user's cache folder can be written: compile each time.
        return _compiled(function, cache=False)


def _compiled(function: Function, cache: bool) -> Function:
    compile_with = numba.njit(cache=cache, error_model="numpy", fastmath=False, nogil=True)
    return cast(Function, compile_with(function))
