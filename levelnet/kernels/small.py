"""Block elimination of small networks, compiled whole.

The same algorithm as :mod:`levelnet.numerics.block_cholesky`, for blocks too small to pay for a
library call each. Flat buffers: the coupling of block l to block l + 1 is stored C-ordered, shape
(size[l], size[l + 1]), at ``coupling_start[l]``; the factor of block l, shape (size[l], size[l]),
at ``factor_start[l]``; vectors at ``start[l]``.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@kernel
def _fold_in(
    b: int,
    above: int,
    low: int,
    high: int,
    rows: FloatArray,
    excess: FloatArray,
    factor_high: FloatArray,
    block: FloatArray,
) -> None:
    """Eliminate the block above: rows <- rows L^-T, block <- -(rows rows^T); carry excess down."""
    for i in range(b):
        row = i * above
        for j in range(above):
            total = rows[row + j]
            for k in range(j):
                total -= rows[row + k] * factor_high[j * above + k]
            rows[row + j] = total / factor_high[j * above + j]
    for j in range(above):
        total = excess[high + j]
        for k in range(j):
            total -= factor_high[j * above + k] * excess[high + k]
        excess[high + j] = total / factor_high[j * above + j]
    for i in range(b):
        total = 0.0
        for k in range(above):
            total += rows[i * above + k] * excess[high + k]
        excess[low + i] += total
        for j in range(i):
            total = 0.0
            for k in range(above):
                total += rows[i * above + k] * rows[j * above + k]
            block[i * b + j] = -total


@kernel
def _conserving_cholesky(
    b: int, weight: FloatArray, carried: FloatArray, block: FloatArray
) -> bool:
    """Set the diagonal to the sum of outflows, then factor in place; False if not positive."""
    for i in range(b):
        total = carried[i]
        for j in range(b):
            if j != i:
                entry = block[i * b + j] if j < i else block[j * b + i]
                total -= entry * weight[j]
        block[i * b + i] = total / weight[i]
    for j in range(b):
        pivot = block[j * b + j]
        for k in range(j):
            pivot -= block[j * b + k] ** 2
        if not pivot > 0.0:
            return False
        pivot = math.sqrt(pivot)
        block[j * b + j] = pivot
        for i in range(j + 1, b):
            total = block[i * b + j]
            for k in range(j):
                total -= block[i * b + k] * block[j * b + k]
            block[i * b + j] = total / pivot
    return True


@kernel
def factor_small(
    size: IntArray,
    start: IntArray,
    coupling_start: IntArray,
    factor_start: IntArray,
    weight: FloatArray,
    outflow: FloatArray,
    excess: FloatArray,
    coupling: FloatArray,
    factor: FloatArray,
) -> int:
    """Factor I - (B + B^T), high blocks first, with the conserving diagonal.

    On entry `coupling` holds B (all entries >= 0), on exit X = B L^-T; `excess` is used up. Returns
    0, or 1 + l where block l is not positive definite.
    """
    n_blocks = size.shape[0]
    for block in range(n_blocks - 1, -1, -1):
        b, v0, f0 = size[block], start[block], factor_start[block]
        own = factor[f0 : f0 + b * b]
        for i in range(b * b):
            own[i] = 0.0
        if block < n_blocks - 1:
            above, x0, g0 = size[block + 1], coupling_start[block], factor_start[block + 1]
            rows = coupling[x0 : x0 + b * above]
            high = factor[g0 : g0 + above * above]
            _fold_in(b, above, v0, start[block + 1], rows, excess, high, own)
        carried = excess[v0 : v0 + b] + outflow[v0 : v0 + b]
        if not _conserving_cholesky(b, weight[v0 : v0 + b], carried, own):
            return 1 + block
    return 0


@kernel
def solve_small(
    size: IntArray,
    start: IntArray,
    coupling_start: IntArray,
    factor_start: IntArray,
    coupling: FloatArray,
    factor: FloatArray,
    right: FloatArray,
) -> None:
    """Solve H x = r in place; `right` has shape (n_right, n_unknowns)."""
    n_blocks = size.shape[0]
    for column in range(right.shape[0]):
        x = right[column]
        for block in range(n_blocks - 1, -1, -1):
            b, v0, f0 = size[block], start[block], factor_start[block]
            if block < n_blocks - 1:
                above, x0, w0 = size[block + 1], coupling_start[block], start[block + 1]
                for i in range(b):
                    total = 0.0
                    for k in range(above):
                        total += coupling[x0 + i * above + k] * x[w0 + k]
                    x[v0 + i] += total
            for i in range(b):
                total = x[v0 + i]
                for k in range(i):
                    total -= factor[f0 + i * b + k] * x[v0 + k]
                x[v0 + i] = total / factor[f0 + i * b + i]
        for block in range(n_blocks):
            b, v0, f0 = size[block], start[block], factor_start[block]
            if block > 0:
                below, x0, w0 = size[block - 1], coupling_start[block - 1], start[block - 1]
                for i in range(below):
                    for k in range(b):
                        x[v0 + k] += coupling[x0 + i * b + k] * x[w0 + i]
            for i in range(b - 1, -1, -1):
                total = x[v0 + i]
                for k in range(i + 1, b):
                    total -= factor[f0 + k * b + i] * x[v0 + k]
                x[v0 + i] = total / factor[f0 + i * b + i]
