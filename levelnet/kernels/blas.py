"""BLAS called from within kernels, on parts of arrays and without a detour over Python.

The routines are those that scipy ships for compiled callers, ``scipy.linalg.cython_blas``. Their
addresses are arguments of a kernel, so that its machine code can be kept from one process to the
next.
"""

from __future__ import annotations

import functools
import importlib
import re
from typing import Any, cast

import numpy as np
from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import get_cython_function_address, intrinsic
from numpy.typing import NDArray

# numba states no types.
_alloca_once_value: Any = cgutils.alloca_once_value

_ROUTINES = ("dgemm", "dgemv", "dsymv", "dsyrk", "dtpsv", "dtrmm", "dtrsm", "dtrsv")
DGEMM, DGEMV, DSYMV, DSYRK, DTPSV, DTRMM, DTRSM, DTRSV = range(len(_ROUTINES))


@functools.cache
def blas_addresses() -> NDArray[np.int64]:
    """Addresses of the routines in this process, in the order of DGEMM, DGEMV, ...

    Raises
    ------
    ImportError
        Where scipy's BLAS counts in other integers than the 32 bits that kernels hand over.
    """
    library = "scipy.linalg.cython_blas"
    capsule = repr(importlib.import_module(library).__pyx_capi__["dgemm"])  # names all arguments
    if not re.search(r"\bint \*", capsule):
        raise ImportError(f"levelnet needs a scipy whose BLAS has 32-bit integers; found {capsule}")
    return np.array([get_cython_function_address(library, name) for name in _ROUTINES])


def _call(typing_context: Any, address: Any, arguments: Any) -> Any:
    """Call a BLAS routine with a tuple of its arguments.

    Addresses of arrays (uint64, as ``array.ctypes.data`` is) go as they are; everything else by
    reference, as Fortran wants it: letters (uint8), numbers (float64), and sizes (int64, below
    2^31; never uint64, which would be taken for an address), which become the 32-bit integers of
    BLAS. Arrays must be contiguous and of float64; nothing checks it.
    """

    def code(context: Any, builder: Any, signature: Any, values: Any) -> Any:
        whole: Any = types.Integer
        place = ir.IntType(8).as_pointer()
        handed = []
        for k, kind in enumerate(signature.args[1].types):
            value = builder.extract_value(values[1], k)
            if kind == types.uint64:
                handed.append(builder.inttoptr(value, place))
                continue
            if isinstance(kind, whole) and kind.bitwidth > 32:
                value = builder.trunc(value, ir.IntType(32))
            handed.append(builder.bitcast(_alloca_once_value(builder, value), place))
        routine = ir.FunctionType(ir.VoidType(), [place] * len(handed))
        builder.call(builder.inttoptr(values[0], routine.as_pointer()), handed)
        return context.get_dummy_value()

    return types.void(address, arguments), code


call: Any = cast(Any, intrinsic(_call))
