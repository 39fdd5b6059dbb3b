"""Elimination of a block-tridiagonal, symmetric network: one compiled loop around BLAS.

What is computed stands in :mod:`levelnet.numerics.block_cholesky`. Flat buffers: the coupling of
block l to block l + 1 is C-ordered, shape (size[l], size[l + 1]), at ``coupling_start[l]``; the
factor of block l is a lower triangle, packed column by column, at ``factor_start[l]``; vectors at
``start[l]``. BLAS sees a coupling as its transpose.

Triangular solves and the Cholesky decomposition go panel by panel: a product for all that is known,
then a multiplication by the inverse of a small triangle on the diagonal. OpenBLAS reaches a quarter
to a half of the rate of a product in those two (measured, sizes 100 to 500); here every large
operation is a product. The triangles belong to M-matrices, so that their inverses are sums of
positive terms and lose no digit.
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .blas import DGEMM, DGEMV, DSYMV, DSYRK, DTPSV, DTRMM, DTRSM, DTRSV, call
from .compile import inlined, kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Sides of the triangles that are inverted, and of wider panels: measured at sizes 50 to 1000.
PANEL, _MIDDLE, WIDE = 8, 32, 128
SMALL = 20  # up to here plain loops beat a call
_NO, _TRANSPOSED = np.uint8(ord("N")), np.uint8(ord("T"))
_LOWER, _LEFT, _RIGHT = np.uint8(ord("L")), np.uint8(ord("L")), np.uint8(ord("R"))


@inlined
def _at(array: Any, index: int) -> Any:
    """Address of an element, from that of the first."""
    return np.uint64(array) + np.uint64(8) * np.uint64(index)


@kernel
def _factor_triangle(
    side: int, stride: int, square: FloatArray, first: int, inverse: FloatArray
) -> bool:
    """Factor a small square in place and invert its triangle; False if it is not positive.

    The square begins at `first` of a Fortran-ordered one with `stride` rows; `inverse` is
    Fortran-ordered, shape (side, side).
    """
    for j in range(side):
        own = first + j * stride
        for k in range(j):
            other = first + k * stride
            share = square[other + j]
            for i in range(j, side):
                square[own + i] -= share * square[other + i]
        pivot = square[own + j]
        if not pivot > 0.0:
            return False
        pivot = math.sqrt(pivot)
        square[own + j] = pivot
        for i in range(j + 1, side):
            square[own + i] /= pivot
    for j in range(side):
        column = inverse[j * side : (j + 1) * side]
        column[:] = 0.0
        column[j] = 1.0
        for k in range(j, side):
            other = first + k * stride
            column[k] /= square[other + k]
            share = column[k]
            for i in range(k + 1, side):
                column[i] -= share * square[other + i]
    return True


@kernel
def _product_at(p: int, halves: bool) -> tuple[int, int]:
    """Column from which a panel takes its product, and how many columns share it.

    What stands to the left of a wide panel enters for all of its columns at once; then what stands
    within it, for all of a middle one; then the rest. Most of the work is done in large products.
    With `halves` wide panels share theirs too.
    """
    if p % WIDE == 0:
        half = p & -p  # the largest power of two in p
        return (p - half, max(half, WIDE)) if halves else (0, WIDE)
    if p % _MIDDLE == 0:
        return p - p % WIDE, _MIDDLE
    return p - p % _MIDDLE, PANEL


@kernel
def _cholesky(blas: IntArray, side: int, square: FloatArray, inverse: FloatArray) -> bool:
    """Factor a square in place, and invert the triangles on its diagonal; False if it cannot be."""
    a = square.ctypes.data
    for p in range(0, side, PANEL):
        left, reach = _product_at(p, False)
        own = _at(a, p * side + p)
        if p > left:
            rows = _at(a, left * side + p)
            sizes = (_NO, _TRANSPOSED, side - p, min(reach, side - p), p - left)
            call(blas[DGEMM], (*sizes, -1.0, rows, side, rows, side, 1.0, own, side))
        width = min(PANEL, side - p)
        triangle = inverse[p * PANEL :]
        if not _factor_triangle(width, side, square, p * side + p, triangle):
            return False
        below = side - p - width
        if below:
            how = (_RIGHT, _LOWER, _TRANSPOSED, _NO, below, width)
            small = triangle.ctypes.data
            call(blas[DTRMM], (*how, 1.0, small, width, _at(own, width), side))
    return True


@kernel
def _divide(
    blas: IntArray,
    side: int,
    n_rows: int,
    square: FloatArray,
    inverse: FloatArray,
    rows: FloatArray,
) -> None:
    """Rows <- rows L^-T, with the inverses of the triangles on the diagonal of L."""
    a, x = square.ctypes.data, rows.ctypes.data
    for p in range(0, side, PANEL):
        left, reach = _product_at(p, True)
        own = _at(x, p)
        if p > left:
            sizes = (_NO, _NO, min(reach, side - p), n_rows, p - left)
            known = (-1.0, _at(a, left * side + p), side, _at(x, left), side)
            call(blas[DGEMM], (*sizes, *known, 1.0, own, side))
        width = min(PANEL, side - p)
        triangle = inverse[p * PANEL :].ctypes.data
        how = (_LEFT, _LOWER, _NO, _NO, width, n_rows)
        call(blas[DTRMM], (*how, 1.0, triangle, width, own, side))


@kernel
def _fold_in_small(
    side: int,
    n_rows: int,
    above: FloatArray,
    passed: FloatArray,
    rows: FloatArray,
    own: FloatArray,
    excess: FloatArray,
) -> None:
    """Do as :func:`_fold_in` where a call of BLAS costs more than what it does."""
    for i in range(n_rows):
        row = rows[i * side : (i + 1) * side]
        for j in range(side):
            row[j] /= above[j * side + j]
            for k in range(j + 1, side):
                row[k] -= row[j] * above[j * side + k]
    for j in range(side):
        passed[j] /= above[j * side + j]
        for k in range(j + 1, side):
            passed[k] -= passed[j] * above[j * side + k]
    for i in range(n_rows):
        row = rows[i * side : (i + 1) * side]
        for k in range(side):
            excess[i] += row[k] * passed[k]
        for j in range(i + 1):
            total = 0.0
            for k in range(side):
                total += row[k] * rows[j * side + k]
            own[j * n_rows + i] = -total


@kernel
def _fold_in(
    blas: IntArray,
    side: int,
    n_rows: int,
    above: FloatArray,
    inverse: FloatArray,
    passed: FloatArray,
    rows: FloatArray,
    own: FloatArray,
    excess: FloatArray,
) -> None:
    """Eliminate block l + 1: rows <- rows L^-T, own <- -(rows rows^T), excess carried down."""
    if side <= SMALL:
        _fold_in_small(side, n_rows, above, passed, rows, own, excess)
        return
    _divide(blas, side, n_rows, above, inverse, rows)
    x = rows.ctypes.data
    how = (_LOWER, _TRANSPOSED, n_rows, side)
    call(blas[DSYRK], (*how, -1.0, x, side, 0.0, own.ctypes.data, n_rows))
    y = passed.ctypes.data
    call(blas[DTRSV], (_LOWER, _NO, _NO, side, above.ctypes.data, side, y, 1))
    out = excess.ctypes.data
    call(blas[DGEMV], (_TRANSPOSED, side, n_rows, 1.0, x, side, y, 1, 1.0, out, 1))


@kernel
def _scale(n_rows: int, row_scale: FloatArray, column_scale: FloatArray, rows: FloatArray) -> None:
    """Scale a C-ordered block from both sides."""
    side = len(column_scale)
    for i in range(n_rows):
        row, own = rows[i * side : (i + 1) * side], row_scale[i]
        for j in range(side):
            row[j] *= own * column_scale[j]


@kernel
def _set_diagonal(
    blas: IntArray,
    side: int,
    weight: FloatArray,
    excess: FloatArray,
    outflow: FloatArray,
    own: FloatArray,
) -> None:
    """Make the diagonal the sum of outflows over the weights; it must not be a difference."""
    total = excess + outflow
    own[:: side + 1] = 0.0
    if side <= SMALL:
        for j in range(side):
            for i in range(j + 1, side):
                total[i] -= own[j * side + i] * weight[j]
                total[j] -= own[j * side + i] * weight[i]
    else:
        v, out = weight.ctypes.data, total.ctypes.data
        call(blas[DSYMV], (_LOWER, side, -1.0, own.ctypes.data, side, v, 1, 1.0, out, 1))
    own[:: side + 1] = total / weight


@kernel
def factor_blocks(
    blas: IntArray,
    first: int,
    last: int,
    size: IntArray,
    start: IntArray,
    coupling_start: IntArray,
    factor_start: IntArray,
    scale: FloatArray,
    weight: FloatArray,
    outflow: FloatArray,
    excess: FloatArray,
    coupling: FloatArray,
    factor: FloatArray,
    squares: FloatArray,
    inverse: FloatArray,
) -> int:
    """Factor I - (B + B^T), high blocks first, with the conserving diagonal.

    Parameters
    ----------
    blas : ndarray of int
        Addresses of the routines.
    first, last : int
        Blocks to be eliminated, from `first` down to `last`.
    size, start, coupling_start, factor_start : ndarray of int
        As :class:`levelnet.numerics.block_system.BlockShape` has them.
    scale, weight, outflow : ndarray, shape (n_unknowns,)
        As for :func:`levelnet.numerics.block_cholesky.factor_symmetric`.
    excess : ndarray, shape (n_unknowns,)
        Used up.
    coupling : ndarray
        On entry B but for `scale` on both sides (all entries >= 0), on exit X = B L^-T.
    factor : ndarray
        On exit the triangles.
    squares : ndarray, shape (2, largest^2)
        Work space that hands a block on to the next: the two at hand, unpacked while they are hot.
    inverse : ndarray, shape (PANEL * (PANEL + largest),)
        Work space, handed on likewise.

    Returns
    -------
    int
        0, or 1 + l where block l is not positive definite.
    """
    for block in range(first, last - 1, -1):
        side, v0 = size[block], start[block]
        above = size[block + 1] if block + 1 < len(size) else 0
        own = squares[block % 2, : side * side]
        leak = excess[v0 : v0 + side]
        if side and above:
            x0, w0 = coupling_start[block], start[block + 1]
            rows = coupling[x0 : x0 + side * above]
            high, passed = squares[1 - block % 2, : above * above], excess[w0 : w0 + above]
            _scale(side, scale[v0 : v0 + side], scale[w0 : w0 + above], rows)
            _fold_in(blas, above, side, high, inverse, passed, rows, own, leak)
        else:
            own[:] = 0.0
        if side:
            v, leaving = weight[v0 : v0 + side], outflow[v0 : v0 + side]
            _set_diagonal(blas, side, v, leak, leaving, own)
            if not _cholesky(blas, side, own, inverse):
                return 1 + block
            _pack(side, own, factor[factor_start[block] :])
    return 0


@kernel
def _pack(side: int, square: FloatArray, packed: FloatArray) -> None:
    """Put the lower triangle of a Fortran-ordered square away, column by column."""
    at = 0
    for j in range(side):
        packed[at : at + side - j] = square[j * side + j : (j + 1) * side]
        at += side - j


@kernel
def _unpack(side: int, packed: FloatArray, square: FloatArray) -> None:
    """Undo :func:`_pack`; what stands above the diagonal is left as it is."""
    at = 0
    for j in range(side):
        square[j * side + j : (j + 1) * side] = packed[at : at + side - j]
        at += side - j


@kernel
def _add_product(
    blas: IntArray,
    how: np.uint8,
    shape: tuple[int, int],
    coupling: np.uint64,
    n_right: int,
    stride: int,
    x: np.uint64,
    out: np.uint64,
) -> None:
    """Out += C x or C^T x, C Fortran-ordered with this shape."""
    rows, columns = shape
    n_out, n_in = (rows, columns) if how == _NO else (columns, rows)
    if n_right == 1:
        call(blas[DGEMV], (how, rows, columns, 1.0, coupling, rows, x, 1, 1.0, out, 1))
    else:
        sizes = (how, _NO, n_out, n_right, n_in)
        call(blas[DGEMM], (*sizes, 1.0, coupling, rows, x, stride, 1.0, out, stride))


@kernel
def _solve_triangle(
    blas: IntArray,
    how: np.uint8,
    side: int,
    packed: FloatArray,
    square: FloatArray,
    n_right: int,
    stride: int,
    x: np.uint64,
) -> None:
    """X <- L^-1 x or L^-T x; `square` is work space."""
    if n_right == 1:
        call(blas[DTPSV], (_LOWER, how, _NO, side, packed.ctypes.data, x, 1))
    else:
        _unpack(side, packed, square)
        sizes = (_LEFT, _LOWER, how, _NO, side, n_right)
        call(blas[DTRSM], (*sizes, 1.0, square.ctypes.data, side, x, stride))


@kernel
def solve_blocks(
    blas: IntArray,
    size: IntArray,
    start: IntArray,
    coupling_start: IntArray,
    factor_start: IntArray,
    coupling: FloatArray,
    factor: FloatArray,
    right: FloatArray,
) -> None:
    """Solve H x = r in place.

    The first arguments as for :func:`factor_blocks`, `coupling` and `factor` as it leaves them;
    `right` is C-ordered, shape (n_right, n_unknowns).
    """
    n_right, stride = right.shape
    x, c = right.ctypes.data, coupling.ctypes.data
    if n_right == 0 or stride == 0:
        return
    square = np.empty(size.max() ** 2)
    begun = False  # rates to the kept levels begin at low l: all above stays 0
    for block in range(len(size) - 1, -1, -1):  # y_l = L^-1 (r_l + X_l y_{l+1})
        side, own = size[block], _at(x, start[block])
        begun = begun or bool(np.any(right[:, start[block] : start[block] + side]))
        if not begun:
            continue
        above = size[block + 1] if block + 1 < len(size) else 0
        if side and above:
            shape, known = (above, side), _at(x, start[block + 1])
            matrix = _at(c, coupling_start[block])
            _add_product(blas, _TRANSPOSED, shape, matrix, n_right, stride, known, own)
        if side:
            triangle = factor[factor_start[block] :]
            _solve_triangle(blas, _NO, side, triangle, square, n_right, stride, own)
    for block in range(len(size)):  # x_l = L^-T (y_l + X_{l-1}^T x_{l-1})
        side, own = size[block], _at(x, start[block])
        below = size[block - 1] if block else 0
        if side and below:
            shape, known = (side, below), _at(x, start[block - 1])
            matrix = _at(c, coupling_start[block - 1])
            _add_product(blas, _NO, shape, matrix, n_right, stride, known, own)
        if side:
            triangle = factor[factor_start[block] :]
            _solve_triangle(blas, _TRANSPOSED, side, triangle, square, n_right, stride, own)
