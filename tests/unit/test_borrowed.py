"""Arguments lent to a kernel: read, written and alive after it, and not counted meanwhile."""

from __future__ import annotations

import sys
import weakref
from typing import Any, NamedTuple

import numba
import numpy as np

from levelnet.kernels.compile import borrowed, kernel


class Inner(NamedTuple):
    """A tuple in a tuple, as the rooms of a desk are."""

    second: np.ndarray
    count: int


class Outer(NamedTuple):
    """What is lent."""

    first: np.ndarray
    inner: Inner


@kernel
def add(outer: Outer, k: int) -> None:
    """Add the second array to the first, `count` times."""
    for _ in range(outer.inner.count):
        outer.first[k] += outer.inner.second[k]


@kernel
def lent(outer: Outer) -> float:
    """Sum of the first array after :func:`add`, without counting."""
    outer = borrowed(outer)
    for k in range(outer.first.shape[0]):
        add(outer, k)
    part = outer.first[1:]  # a view of what is lent
    return float(outer.first[0] + part.sum())


@kernel
def counted(outer: Outer) -> float:
    """As :func:`lent`, with counting."""
    for k in range(outer.first.shape[0]):
        add(outer, k)
    part = outer.first[1:]
    return float(outer.first[0] + part.sum())


def references(function: Any) -> int:
    fresh: Any = numba.njit(error_model="numpy")(function.py_func)  # cached code cannot be read
    fresh(Outer(np.arange(4.0), Inner(np.ones(4), 1)))
    (code,) = fresh.inspect_llvm().values()
    return str(code).count("call void @NRT_incref")


def test_what_is_lent_is_read_written_and_stays_with_its_owner() -> None:
    first, second = np.arange(4.0), np.full(4, 0.5)
    outer = Outer(first, Inner(second, 3))
    before = sys.getrefcount(first), sys.getrefcount(second)
    for _ in range(100):
        total = lent(outer)
    # Exact: halves.
    assert total == 6.0 + 100 * 4 * 3 * 0.5
    assert first.tolist() == [150.0, 151.0, 152.0, 153.0]
    assert (sys.getrefcount(first), sys.getrefcount(second)) == before
    gone = weakref.ref(first)
    del first, outer
    assert gone() is None  # freed once its last owner is
    assert second.tolist() == [0.5] * 4


def test_what_is_lent_is_not_counted() -> None:
    outer = Outer(np.arange(4.0), Inner(np.ones(4), 1))
    again = Outer(outer.first.copy(), outer.inner)
    assert lent(outer) == counted(again)
    assert references(lent) < references(counted)
