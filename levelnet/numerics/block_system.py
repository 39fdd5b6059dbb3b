"""The shape of a block-tridiagonal system, and the buffers its factorization needs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from ..arrays import FloatArray, IntArray

Scalar = TypeVar("Scalar", bound=np.generic)


@dataclass(frozen=True, slots=True, eq=False)
class BlockShape:
    """Sizes and offsets of a block-tridiagonal matrix, block 0 first.

    Attributes
    ----------
    size : ndarray of int, shape (n_blocks,)
        Unknowns in each block; may be 0.
    start : ndarray of int, shape (n_blocks,)
        Where each block begins in a vector.
    coupling_start : ndarray of int, shape (n_blocks - 1,)
        Where the coupling of block l (rows) to block l + 1 (columns), C-ordered, begins in its
        buffer.
    factor_start : ndarray of int, shape (n_blocks,)
        Where the packed triangle of block l begins in the buffer of factors.
    """

    size: IntArray
    start: IntArray
    coupling_start: IntArray
    factor_start: IntArray

    @staticmethod
    def of(sizes: list[int]) -> BlockShape:
        """Lay out blocks of these sizes one after the other."""
        size = np.array(sizes, dtype=np.int64)
        return BlockShape(
            size,
            _starts(size),
            _starts(size[:-1] * size[1:]),
            _starts(size * (size + 1) // 2),
        )

    @property
    def n_unknowns(self) -> int:
        """Length of a vector."""
        return int(self.size.sum())

    @property
    def n_couplings(self) -> int:
        """Length of a coupling buffer."""
        return int((self.size[:-1] * self.size[1:]).sum())

    @property
    def n_factors(self) -> int:
        """Length of a buffer of factors."""
        return int((self.size * (self.size + 1) // 2).sum())

    def coupling(self, buffer: FloatArray, block: int) -> FloatArray:
        """View of the coupling of `block` to `block` + 1, shape (size[block], size[block + 1])."""
        rows, columns = self.size[block], self.size[block + 1]
        begin = self.coupling_start[block]
        return buffer[begin : begin + rows * columns].reshape(rows, columns)

    def slice(self, block: int) -> slice:
        """Where the unknowns of `block` stand in a vector."""
        return slice(int(self.start[block]), int(self.start[block] + self.size[block]))

    def part(self, vector: NDArray[Scalar], block: int) -> NDArray[Scalar]:
        """View of the unknowns of `block` along the last axis."""
        begin = self.start[block]
        return vector[..., begin : begin + self.size[block]]


def _starts(lengths: IntArray) -> IntArray:
    """Offsets of pieces laid end to end."""
    return np.concatenate([[0], np.cumsum(lengths)[:-1]]).astype(np.int64)
