"""Block Cholesky of a symmetric, positive definite, block-tridiagonal M-matrix that conserves.

The matrix is H = I - (B + B^T) with B >= 0 between neighbouring blocks, known only through B and a
positive vector v with H v = c >= 0: v is the equilibrium, c what leaks out. Elimination runs from
the last block to the first. Each eliminated block adds terms of one sign to the off-diagonals of
the next, and the next diagonal is formed as the sum of what flows out of each unknown, so that
nothing is subtracted between blocks and what the elimination conserves it conserves to rounding:
the block form of the idea of Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107.

    S_last = I;  S_{l+1} = L L^T;  X = B_l L^-T;  offdiag(S_l) = -X X^T
    c_l <- c_l + X L^-1 c_{l+1}
    S_l,ii = [c_l,i + (B_{l-1}^T v_{l-1})_i + sum_{j != i} |S_l,ij| v_j] / v_i
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from ..kernels.blas import blas_addresses
from ..kernels.blocks import PANEL, factor_blocks, solve_blocks
from .block_system import BlockShape

# Sum of cubes of sizes that one call of the kernel eliminates: some 7/3 as many operations.
_PART = 4_000_000_000


@dataclass(frozen=True, slots=True, eq=False)
class BlockCholesky:
    """A factored H: solve for any number of right sides with it.

    Attributes
    ----------
    shape : BlockShape
        Blocks.
    coupling : ndarray, shape (shape.n_couplings,)
        X = B L^-T of every block.
    factor : ndarray, shape (shape.n_factors,)
        Lower triangles L of every block, packed column by column.
    """

    shape: BlockShape
    coupling: FloatArray
    factor: FloatArray

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve H x = r.

        Parameters
        ----------
        right : ndarray, shape (n_right, n_unknowns)
            Right sides; nonnegative ones keep every component relatively accurate.

        Returns
        -------
        ndarray, shape (n_right, n_unknowns)
            The solutions. H is symmetric, so they solve the transposed system too.
        """
        x = np.array(right, dtype=np.float64, order="C")
        if x.ndim != 2 or x.shape[1] != self.shape.n_unknowns:
            raise ValueError(f"right: shape (n_right, {self.shape.n_unknowns}), not {x.shape}")
        solve_blocks(blas_addresses(), *_layout(self.shape), self.coupling, self.factor, x)
        return x


def factor_symmetric(
    shape: BlockShape,
    coupling: FloatArray,
    weight: FloatArray,
    outflow: FloatArray,
    excess: FloatArray,
    factor: FloatArray | None = None,
    scale: FloatArray | None = None,
) -> BlockCholesky:
    """Factor H = I - (B + B^T), or I - diag(s) (B + B^T) diag(s).

    Parameters
    ----------
    shape : BlockShape
        Blocks.
    coupling : ndarray, shape (shape.n_couplings,)
        B, nonnegative; overwritten and kept by the result.
    weight : ndarray, shape (n_unknowns,)
        The positive vector v.
    outflow : ndarray, shape (n_unknowns,)
        (B_{l-1}^T v_{l-1}): what each unknown of block l sends to block l - 1.
    excess : ndarray, shape (n_unknowns,)
        c = H v, nonnegative.
    factor : ndarray, shape (shape.n_factors,), optional
        Buffer to reuse; touching fresh memory costs more than the arithmetic of small blocks.
    scale : ndarray, shape (n_unknowns,), optional
        s, positive: what B lacks yet. It is applied to each block as it is used, which saves a
        passage of the whole through memory. None: B lacks nothing.

    Returns
    -------
    BlockCholesky
        The factors.

    Raises
    ------
    SolveError
        If a block is not positive definite (an unknown without exit).
    ValueError
        For an array of another length or layout: BLAS sees addresses alone.
    """
    n = shape.n_unknowns
    factor = np.empty(shape.n_factors) if factor is None else factor
    weight, outflow, excess, scale = (
        np.ascontiguousarray(one, dtype=np.float64)
        for one in (weight, outflow, excess, np.ones(n) if scale is None else scale)
    )
    _check_buffers(shape, coupling, factor)
    if any(one.shape != (n,) for one in (weight, outflow, excess, scale)):
        raise ValueError(f"weight, outflow, excess and scale: shape ({n},) each")
    if len(excess) and not (np.isfinite(excess).all() and (excess > 0.0).any()):
        raise SolveError(f"{Outcome.SINGULAR.value} (block l = 0)")
    carried = excess.copy()
    largest = int(shape.size.max(initial=0))
    work = np.empty((2, largest**2)), np.empty(PANEL * (PANEL + largest))
    vectors = scale, weight, outflow, carried
    for first, last in _stretches(shape):
        status = factor_blocks(
            blas_addresses(), first, last, *_layout(shape), *vectors, coupling, factor, *work
        )
        if status:
            raise SolveError(f"{Outcome.SINGULAR.value} (block l = {status - 1})")
    return BlockCholesky(shape, coupling, factor)


def _stretches(shape: BlockShape) -> Iterator[tuple[int, int]]:
    """Blocks from high to low, in parts of a fraction of a second: one may interrupt in between."""
    first, done = len(shape.size) - 1, 0
    for block in range(first, -1, -1):
        done += int(shape.size[block]) ** 3
        if done > _PART or block == 0:
            yield first, block
            first, done = block - 1, 0


def _check_buffers(shape: BlockShape, coupling: FloatArray, factor: FloatArray) -> None:
    """Raise ValueError for a buffer that the kernel would overrun or misread."""
    for name, buffer, count in (
        ("coupling", coupling, shape.n_couplings),
        ("factor", factor, shape.n_factors),
    ):
        sound = buffer.dtype == np.float64 and buffer.flags.c_contiguous
        if not sound or buffer.shape != (count,):
            raise ValueError(f"{name}: a contiguous array of {count} float64 numbers is needed")


def _layout(shape: BlockShape) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    return shape.size, shape.start, shape.coupling_start, shape.factor_start
