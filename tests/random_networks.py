"""Random block-tridiagonal rate networks for the tests of the block solvers: invented numbers."""

from __future__ import annotations

import itertools
from typing import Any, NamedTuple

import mpmath
import numpy as np

from levelnet.numerics.block_cholesky import BlockCholesky, factor_symmetric
from levelnet.numerics.block_lu import BlockLU, factor_general
from levelnet.numerics.block_system import BlockShape


class Symmetric(NamedTuple):
    """H = diag - (B + B^T) with H weight = excess, in the form that the factorization takes."""

    shape: BlockShape
    coupling: np.ndarray
    weight: np.ndarray
    outflow: np.ndarray
    excess: np.ndarray

    def factor(self) -> BlockCholesky:
        return factor_symmetric(
            self.shape, self.coupling.copy(), self.weight, self.outflow, self.excess
        )

    def off_diagonal(self) -> np.ndarray:
        """B + B^T, dense."""
        size = self.shape.n_unknowns
        off = np.zeros((size, size))
        for block in range(len(self.shape.size) - 1):
            rows, columns = block_range(self.shape, block), block_range(self.shape, block + 1)
            off[rows, columns] = self.shape.coupling(self.coupling, block)
        return off + off.T

    def dense(self) -> np.ndarray:
        return np.eye(self.shape.n_unknowns) - self.off_diagonal()

    def exact_solution(self, right: np.ndarray) -> np.ndarray:
        """Solve in 60 digits; the diagonal is what conservation makes it: (excess + B v) / v."""
        off = self.off_diagonal()
        with mpmath.workdps(60):
            n = len(right)
            matrix: Any = mpmath.zeros(n)
            for i in range(n):
                total = mpmath.mpf(float(self.excess[i]))
                for j in np.flatnonzero(off[i]).tolist():
                    matrix[i, j] = -mpmath.mpf(float(off[i, j]))
                    total -= matrix[i, j] * mpmath.mpf(float(self.weight[j]))
                matrix[i, i] = total / mpmath.mpf(float(self.weight[i]))
            solution = mpmath.lu_solve(matrix, mpmath.matrix([mpmath.mpf(float(r)) for r in right]))
            return np.array([float(x) for x in solution])


def block_range(shape: BlockShape, block: int) -> slice:
    begin = int(shape.start[block])
    return slice(begin, begin + int(shape.size[block]))


def symmetric_network(
    sizes: list[int],
    rng: np.random.Generator,
    decades: float = 2.0,
    leak: float = 0.1,
    leaking: int | None = None,
) -> Symmetric:
    """Conductances and weights over `decades`; leak, relative to the flow, of all or of one."""
    shape = BlockShape.of(sizes)
    n = shape.n_unknowns
    conductance = 10.0 ** rng.uniform(-decades, 0.0, shape.n_couplings)
    weight = 10.0 ** rng.uniform(-0.5 * decades, 0.0, n)
    plain = Symmetric(shape, conductance, weight, weight, weight)
    flow = plain.off_diagonal() @ weight
    lost = leak * np.where(flow > 0.0, flow, 1.0)
    if leaking is not None:
        lost[(np.arange(n) != leaking) & (flow > 0.0)] = 0.0
    diagonal = (flow + lost) / weight
    root = np.sqrt(diagonal)
    coupling = conductance.copy()
    outflow = np.zeros(n)
    for block in range(len(sizes) - 1):
        rows, columns = block_range(shape, block), block_range(shape, block + 1)
        part = shape.coupling(coupling, block)
        part /= np.multiply.outer(root[rows], root[columns])
        outflow[columns] = part.T @ (weight * root)[rows]
    return Symmetric(shape, coupling, weight * root, outflow, lost / root)


class General(NamedTuple):
    """A = D - R: rates between neighbouring blocks and sinks, D the total outflow."""

    shape: BlockShape
    upward: list[np.ndarray]
    downward: list[np.ndarray]
    sink: np.ndarray

    def factor(self) -> BlockLU:
        rates = ([one.copy() for one in side] for side in (self.upward, self.downward))
        return factor_general(self.shape, *rates, self.sink)

    def rates(self) -> np.ndarray:
        size = self.shape.n_unknowns
        rates = np.zeros((size, size))
        for block, (up, down) in enumerate(zip(self.upward, self.downward, strict=True)):
            rows, columns = block_range(self.shape, block), block_range(self.shape, block + 1)
            rates[rows, columns], rates[columns, rows] = up, down
        return rates

    def dense(self) -> np.ndarray:
        rates = self.rates()
        return np.diag(rates.sum(axis=1) + self.sink) - rates

    def exact_solution(self, right: np.ndarray) -> np.ndarray:
        """Solve A p = right in 60 digits."""
        rates = self.rates()
        with mpmath.workdps(60):
            n = len(right)
            matrix: Any = mpmath.zeros(n)
            for i in range(n):
                total = mpmath.mpf(float(self.sink[i]))
                for j in np.flatnonzero(rates[i]).tolist():
                    matrix[i, j] = -mpmath.mpf(float(rates[i, j]))
                    total -= matrix[i, j]
                matrix[i, i] = total
            solution = mpmath.lu_solve(matrix, mpmath.matrix([mpmath.mpf(float(r)) for r in right]))
            return np.array([float(x) for x in solution])


def general_network(
    sizes: list[int],
    rng: np.random.Generator,
    decades: float = 2.0,
    leak: float = 0.1,
    leaking: int | None = None,
) -> General:
    """Rates over `decades`, no symmetry; sinks, relative to the outflow, of all or of one."""
    shape = BlockShape.of(sizes)
    pairs = list(itertools.pairwise(sizes))
    upward = [10.0 ** rng.uniform(-decades, 0.0, pair) for pair in pairs]
    downward = [10.0 ** rng.uniform(-decades, 0.0, pair[::-1]) for pair in pairs]
    bare = General(shape, upward, downward, np.zeros(shape.n_unknowns))
    outflow = bare.rates().sum(axis=1)
    sink = leak * np.where(outflow > 0.0, outflow, 1.0)
    if leaking is not None:
        sink[(np.arange(shape.n_unknowns) != leaking) & (outflow > 0.0)] = 0.0
    return bare._replace(sink=sink)
