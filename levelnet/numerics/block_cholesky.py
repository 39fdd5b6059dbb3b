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

from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from ..kernels.blas import blas_addresses
from ..kernels.blocks import factor_blocks, solve_blocks
from .block_system import BlockShape


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
    """
    if len(excess) and not (np.isfinite(excess).all() and (excess > 0.0).any()):
        raise SolveError(f"{Outcome.SINGULAR.value} (block l = 0)")
    factor = np.empty(shape.n_factors) if factor is None else factor
    scale = np.ones(len(weight)) if scale is None else scale
    carried = excess.copy()
    status = factor_blocks(
        blas_addresses(), *_layout(shape), scale, weight, outflow, carried, coupling, factor
    )
    if status:
        raise SolveError(f"{Outcome.SINGULAR.value} (block l = {status - 1})")
    return BlockCholesky(shape, coupling, factor)


def _layout(shape: BlockShape) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    return shape.size, shape.start, shape.coupling_start, shape.factor_start
