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
from scipy.linalg import blas, lapack

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from ..kernels import small
from .block_system import BlockShape

# Up to this block size one compiled routine beats a library call per block.
SMALL_BLOCK = 52


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
        Lower triangles L of every block: C-ordered where every block is at most SMALL_BLOCK, else
        Fortran-ordered.
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
        shape = self.shape
        if not _is_small(shape):
            return self.solve_many(right)
        x = np.array(right, dtype=np.float64)
        small.solve_small(*_layout(shape), self.coupling, self.factor, x)
        return x

    def solve_many(self, right: FloatArray) -> FloatArray:
        """Do the same by library calls for every block: for tens of right sides and more."""
        x = np.array(right, dtype=np.float64)
        _substitute_down(self, x)
        _substitute_up(self, x)
        return x

    def triangle(self, block: int) -> tuple[FloatArray, bool]:
        """View of one triangle, Fortran-ordered as LAPACK wants it; True where it is L, not L^T."""
        return self.shape.factor(self.factor, block), not _is_small(self.shape)


def factor_symmetric(
    shape: BlockShape,
    coupling: FloatArray,
    weight: FloatArray,
    outflow: FloatArray,
    excess: FloatArray,
    factor: FloatArray | None = None,
) -> BlockCholesky:
    """Factor H = I - (B + B^T).

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
    carried = excess.copy()
    if _is_small(shape):
        status = small.factor_small(*_layout(shape), weight, outflow, carried, coupling, factor)
        if status:
            raise SolveError(f"{Outcome.SINGULAR.value} (block l = {status - 1})")
    else:
        _factor_large(shape, coupling, weight, outflow, carried, factor)
    return BlockCholesky(shape, coupling, factor)


def _is_small(shape: BlockShape) -> bool:
    return int(shape.size.max(initial=0)) <= SMALL_BLOCK


def _layout(shape: BlockShape) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    return shape.size, shape.start, shape.coupling_start, shape.factor_start


def _factor_large(
    shape: BlockShape,
    coupling: FloatArray,
    weight: FloatArray,
    outflow: FloatArray,
    carried: FloatArray,
    factor: FloatArray,
) -> None:
    # Plain integers and slices: at n_max = 100 half the time goes into calls, not arithmetic.
    sizes, starts = shape.size.tolist(), shape.start.tolist()
    couplings, factors = shape.coupling_start.tolist(), shape.factor_start.tolist()
    above: FloatArray | None = None
    for block in range(len(sizes) - 1, -1, -1):
        side, begin, first = sizes[block], starts[block], factors[block]
        square = factor[first : first + side * side]
        own = square.reshape(side, side).T  # Fortran-ordered, as LAPACK wants it
        leak = carried[begin : begin + side]
        if above is not None and side and len(above):
            high = len(above)
            origin = couplings[block]
            rows = coupling[origin : origin + side * high].reshape(side, high).T
            blas.dtrsm(1.0, above, rows, lower=1, overwrite_b=1)
            blas.dsyrk(-1.0, rows, beta=0.0, c=own, trans=1, lower=1, overwrite_c=1)
            begin_above = starts[block + 1]
            passed = blas.dtrsv(above, carried[begin_above : begin_above + high], lower=1)
            leak += rows.T @ passed
        else:
            square[:] = 0.0
        if side:
            _set_diagonal(
                square, own, weight[begin : begin + side], leak, outflow[begin : begin + side]
            )
            _, status = lapack.dpotrf(own, lower=1, clean=0, overwrite_a=1)
            if status:
                raise SolveError(f"{Outcome.SINGULAR.value} (block l = {block})")
        above = own


def _set_diagonal(
    square: FloatArray, own: FloatArray, v: FloatArray, leak: FloatArray, outflow: FloatArray
) -> None:
    """Make the diagonal the sum of outflows over v; it must not be a difference."""
    diagonal = square[:: len(v) + 1]
    diagonal[:] = 0.0
    diagonal[:] = (leak + outflow + blas.dsymv(-1.0, own, v, lower=1)) / v


def _substitute_down(factored: BlockCholesky, x: FloatArray) -> None:
    """Forward substitution, last block first: y_l = L^-1 (r_l + X_l y_{l+1})."""
    shape = factored.shape
    parts = [
        x[:, a : a + n] for a, n in zip(shape.start.tolist(), shape.size.tolist(), strict=True)
    ]
    for block in range(len(parts) - 1, -1, -1):
        own = parts[block]
        if not own.size:
            continue
        if block + 1 < len(parts) and parts[block + 1].size:
            own += parts[block + 1] @ shape.coupling(factored.coupling, block).T
        _triangle(*factored.triangle(block), own, transposed=0)


def _substitute_up(factored: BlockCholesky, x: FloatArray) -> None:
    """Back substitution, first block first: x_l = L^-T (y_l + X_{l-1}^T x_{l-1})."""
    shape = factored.shape
    parts = [
        x[:, a : a + n] for a, n in zip(shape.start.tolist(), shape.size.tolist(), strict=True)
    ]
    for block, own in enumerate(parts):
        if not own.size:
            continue
        if block and parts[block - 1].size:
            own[...] += parts[block - 1] @ shape.coupling(factored.coupling, block - 1)
        _triangle(*factored.triangle(block), own, transposed=1)


def _triangle(factor: FloatArray, lower: bool, right: FloatArray, transposed: int) -> None:
    """Solve with L or L^T in place; `right` has shape (n_right, size)."""
    turned = transposed if lower else 1 - transposed
    if len(right) == 1:  # one right side: the vector routine has a third of the overhead
        right[0] = blas.dtrsv(factor, right[0], lower=lower, trans=turned)
    else:
        right[...] = blas.dtrsm(1.0, factor, right.T, lower=lower, trans_a=turned).T
