"""BLAS called from compiled code, against numpy's products: parts of arrays, and a triangle."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import cython_blas

from levelnet.arrays import FloatArray, IntArray
from levelnet.kernels.blas import DGEMM, DTRSV, blas_addresses, call
from levelnet.kernels.compile import kernel
from tests.tolerances import ROUND_OFF

NO, TRANSPOSED, LOWER = np.uint8(ord("N")), np.uint8(ord("T")), np.uint8(ord("L"))


@kernel
def product(
    blas: IntArray, a: FloatArray, b: FloatArray, c: FloatArray, rows: int, columns: int, inner: int
) -> None:
    """C <- 2 A^T B - C over the leading parts of C-ordered squares, which BLAS sees transposed."""
    side = len(a)
    sizes = (NO, TRANSPOSED, rows, columns, inner)
    x, y, out = a.ctypes.data, b.ctypes.data, c.ctypes.data
    call(blas[DGEMM], (*sizes, 2.0, x, side, y, side, -1.0, out, side))


@kernel
def divided(blas: IntArray, a: FloatArray, x: FloatArray) -> None:
    """X <- L^-1 x, L the lower triangle of a Fortran-ordered square."""
    call(blas[DTRSV], (LOWER, NO, NO, len(x), a.ctypes.data, len(x), x.ctypes.data, 1))


def test_a_part_of_a_product_and_nothing_else() -> None:
    rng = np.random.default_rng(0)
    a, b, c = rng.random((3, 9, 9))
    before = c.copy()
    product(blas_addresses(), a, b, c, 4, 3, 5)
    # What BLAS calls a column stands in a row here.
    expected = 2.0 * b[:5, :3].T @ a[:5, :4] - before[:3, :4]
    np.testing.assert_allclose(c[:3, :4], expected, rtol=100 * ROUND_OFF)
    before[:3, :4] = c[:3, :4]
    assert np.array_equal(c, before)


def test_other_integers_are_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    routines = {"dgemm": "void (char *, char *, int64_t *, int64_t *, int64_t *, d *)"}
    monkeypatch.setattr(cython_blas, "__pyx_capi__", routines)
    with pytest.raises(ImportError, match=r"32-bit integers; found .*int64_t"):
        blas_addresses.__wrapped__()


def test_a_triangle() -> None:
    rng = np.random.default_rng(1)
    a, x = np.asfortranarray(rng.random((7, 7)) + np.eye(7)), rng.random(7)
    expected = np.linalg.solve(np.tril(a), x)
    divided(blas_addresses(), a, x)
    np.testing.assert_allclose(x, expected, rtol=100 * ROUND_OFF)
