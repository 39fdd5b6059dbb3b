"""Block LU of a block-tridiagonal M-matrix without symmetry, with the conserving diagonal.

The matrix is A = D - R in row form: R_ij >= 0 is the rate from i to j, D_i = sum_j R_ij + sink_i,
so that A 1 = sink. Solving A p = r gives fates (the chance to end somewhere), solving A^T x = s
populations. It serves where the symmetric form fails: rates of both directions that are not in
detailed balance at one temperature, or weights that leave the doubles. Blocks of 1 - D^-1 R are
eliminated as in :mod:`levelnet.numerics.block_cholesky`, with v = 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from .block_system import BlockShape


@dataclass(frozen=True, slots=True, eq=False)
class BlockLU:
    """A factored A: solve it and its transpose for any number of right sides.

    Attributes
    ----------
    shape : BlockShape
        Blocks.
    diagonal : ndarray, shape (n_unknowns,), s^-1
        D.
    upward, downward : list of ndarray
        D^-1 R from block l to l + 1, shape (size[l], size[l + 1]), and back, shape transposed.
    factors : list of (ndarray, ndarray)
        LU factors and pivots of every block.
    """

    shape: BlockShape
    diagonal: FloatArray
    upward: list[FloatArray]
    downward: list[FloatArray]
    factors: list[tuple[FloatArray, IntArray]]

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve A p = r; `right` has shape (n_right, n_unknowns)."""
        p: FloatArray = np.asarray(right, dtype=np.float64) / self.diagonal
        for block in range(len(self.shape.size) - 1, 0, -1):
            inner = self._inverse(block, self.shape.part(p, block), 0)
            self.shape.part(p, block - 1)[...] += inner @ self.upward[block - 1].T
        self._inverse(0, self.shape.part(p, 0), 0, keep=True)
        for block in range(1, len(self.shape.size)):
            own = self.shape.part(p, block)
            own += self.shape.part(p, block - 1) @ self.downward[block - 1].T
            self._inverse(block, own, 0, keep=True)
        return p

    def solve_transposed(self, right: FloatArray) -> FloatArray:
        """Solve A^T x = s; `right` has shape (n_right, n_unknowns)."""
        x = np.array(right, dtype=np.float64)
        for block in range(len(self.shape.size) - 1, 0, -1):
            inner = self._inverse(block, self.shape.part(x, block), 1)
            self.shape.part(x, block - 1)[...] += inner @ self.downward[block - 1]
        self._inverse(0, self.shape.part(x, 0), 1, keep=True)
        for block in range(1, len(self.shape.size)):
            own = self.shape.part(x, block)
            own += self.shape.part(x, block - 1) @ self.upward[block - 1]
            self._inverse(block, own, 1, keep=True)
        solution: FloatArray = x / self.diagonal
        return solution

    def _inverse(
        self, block: int, right: FloatArray, transposed: int, keep: bool = False
    ) -> FloatArray:
        """S_block^-1 (or its transpose) on each row of `right`; in place where `keep`."""
        if not right.size:
            return right
        solution: FloatArray = lapack.dgetrs(*self.factors[block], right.T, trans=transposed)[0].T
        if keep:
            right[...] = solution
        return solution


def factor_general(
    shape: BlockShape,
    upward: list[FloatArray],
    downward: list[FloatArray],
    sink: FloatArray,
) -> BlockLU:
    """Factor A = D - R, given the rates off the diagonal and the sinks.

    Parameters
    ----------
    shape : BlockShape
        Blocks.
    upward : list of ndarray, s^-1
        Rates from block l to l + 1, shape (size[l], size[l + 1]); overwritten, kept by the result.
    downward : list of ndarray, s^-1
        Rates from block l + 1 to l, shape (size[l + 1], size[l]); likewise.
    sink : ndarray, shape (n_unknowns,), s^-1
        Outflow of each unknown from the network.

    Returns
    -------
    BlockLU
        The factors.

    Raises
    ------
    SolveError
        If a block is singular (an unknown without exit).
    """
    n_blocks = len(shape.size)
    to_above, to_below = np.zeros(shape.n_unknowns), np.zeros(shape.n_unknowns)
    for block in range(n_blocks - 1):
        shape.part(to_above, block)[...] = upward[block].sum(axis=1)
        shape.part(to_below, block + 1)[...] = downward[block].sum(axis=1)
    diagonal = to_above + to_below + sink
    leaks = np.isfinite(sink).all() and (sink > 0.0).any()
    if len(sink) and not (leaks and np.all(diagonal > 0.0)):
        raise SolveError(f"{Outcome.SINGULAR.value} (block l = 0)")
    for k in range(n_blocks - 1):
        upward[k] /= shape.part(diagonal, k)[:, None]
        downward[k] /= shape.part(diagonal, k + 1)[:, None]
    excess, below = sink / diagonal, to_below / diagonal
    factors: list[tuple[FloatArray, IntArray]] = [
        (np.zeros((0, 0)), np.zeros(0, np.int64))
    ] * n_blocks
    for block in range(n_blocks - 1, -1, -1):
        side = int(shape.size[block])
        if not side:
            continue
        own = np.zeros((side, side))
        leak = shape.part(excess, block)
        if block + 1 < n_blocks and shape.size[block + 1]:
            above = factors[block + 1]
            own -= upward[block] @ lapack.dgetrs(*above, downward[block])[0]
            leak += upward[block] @ lapack.dgetrs(*above, shape.part(excess, block + 1))[0]
        np.fill_diagonal(own, 0.0)
        np.fill_diagonal(own, leak + shape.part(below, block) - own.sum(axis=1))
        lu, pivots, status = lapack.dgetrf(own)
        if status:
            raise SolveError(f"{Outcome.SINGULAR.value} (block l = {block})")
        factors[block] = (lu, pivots)
    return BlockLU(shape, diagonal, upward, downward, factors)
