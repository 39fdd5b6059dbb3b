"""Bordered block systems against dense and sparse solvers and 60-digit arithmetic.

The networks are invented: random conductances over the blocks, their neighbours and the border.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.errors import SolveError
from levelnet.numerics.block_cholesky import factor_symmetric
from levelnet.numerics.block_lu import factor_general
from levelnet.numerics.block_system import BlockShape
from levelnet.numerics.bordered import (
    BorderedCholesky,
    BorderedLU,
    BorderRates,
    border_general,
    border_symmetric,
)
from tests.random_networks import block_range
from tests.tolerances import CONSERVATION, ROUND_OFF

# Blocks, then border unknowns; [60, ...] takes the library calls, the others the compiled routine.
CASES = [([5, 4, 3], 1), ([3, 5, 1, 4], 6), ([6, 0, 5], 3), ([0, 0], 4), ([60, 50, 7], 30)]
cases = st.tuples(st.lists(st.integers(0, 5), min_size=1, max_size=5), st.integers(1, 5))


class Bordered(NamedTuple):
    """Off-diagonal part, dense, over inner unknowns and border; sinks; equilibrium if symmetric."""

    shape: BlockShape
    rates: np.ndarray
    sink: np.ndarray
    weight: np.ndarray

    @property
    def n_inner(self) -> int:
        return self.shape.n_unknowns

    def dense(self) -> np.ndarray:
        """D - R, where D makes row sums over `weight` the sink."""
        return np.diag((self.rates @ self.weight + self.sink) / self.weight) - self.rates

    def exact_solution(self, right: np.ndarray) -> np.ndarray:
        """Solve in 60 digits; the diagonal is what conservation makes it."""
        with mpmath.workdps(60):
            n = len(right)
            matrix: Any = mpmath.zeros(n)
            for i in range(n):
                total = mpmath.mpf(float(self.sink[i]))
                for j in np.flatnonzero(self.rates[i]).tolist():
                    matrix[i, j] = -mpmath.mpf(float(self.rates[i, j]))
                    total -= matrix[i, j] * mpmath.mpf(float(self.weight[j]))
                matrix[i, i] = total / mpmath.mpf(float(self.weight[i]))
            solution = mpmath.lu_solve(matrix, mpmath.matrix([mpmath.mpf(float(r)) for r in right]))
            return np.array([float(x) for x in solution])

    def symmetric(self) -> BorderedCholesky:
        """Factor: off-diagonals scaled so that the diagonal of H is 1."""
        inner, high = slice(self.n_inner), slice(self.n_inner, None)
        scale = np.sqrt((self.rates @ self.weight + self.sink) / self.weight)
        off, v, c = self.rates / np.outer(scale, scale), self.weight * scale, self.sink / scale
        coupling = np.empty(self.shape.n_couplings)
        down = np.zeros(self.n_inner)
        for block in range(len(self.shape.size) - 1):
            rows, columns = block_range(self.shape, block), block_range(self.shape, block + 1)
            self.shape.coupling(coupling, block)[...] = off[rows, columns]
            down[columns] = off[columns, rows] @ v[rows]
        leak = c[inner] + off[inner, high] @ v[high]
        factored = factor_symmetric(self.shape, coupling, v[inner], down, leak)
        return border_symmetric(factored, off[high, inner], off[high, high], v, c)

    def solve_symmetric(self, right: np.ndarray) -> np.ndarray:
        """Solve (D - R) x = r through the factored form."""
        scale = np.sqrt((self.rates @ self.weight + self.sink) / self.weight)
        return self.symmetric().solve(right / scale) / scale

    def general(self) -> BorderedLU:
        inner, high = slice(self.n_inner), slice(self.n_inner, None)
        up, down = [], []
        for block in range(len(self.shape.size) - 1):
            rows, columns = block_range(self.shape, block), block_range(self.shape, block + 1)
            up.append(self.rates[rows, columns].copy())
            down.append(self.rates[columns, rows].copy())
        border = BorderRates(
            self.rates[inner, high].T, self.rates[high, inner], self.rates[high, high]
        )
        leak = self.sink[inner] + border.into.sum(axis=0)
        return border_general(factor_general(self.shape, up, down, leak), border, self.sink)


def network(
    sizes: list[int],
    n_border: int,
    seed: int,
    symmetric: bool,
    decades: float = 2.0,
    leak: float = 0.1,
    leaking: int | None = None,
) -> Bordered:
    rng = np.random.default_rng(seed)
    shape = BlockShape.of(sizes)
    block = np.concatenate([np.repeat(np.arange(len(sizes)), sizes), np.full(n_border, -9)])
    joined = np.abs(np.subtract.outer(block, block)) == 1
    joined |= (block < 0)[:, None] | (block < 0)[None, :]
    rates = 10.0 ** rng.uniform(-decades, 0.0, joined.shape) * joined
    weight = np.ones(len(block))
    if symmetric:
        rates = np.triu(rates) + np.triu(rates).T
        weight = 10.0 ** rng.uniform(-0.5 * decades, 0.0, len(block))
    np.fill_diagonal(rates, 0.0)
    flow = rates @ weight
    sink = leak * np.where(flow > 0.0, flow, 1.0)
    if leaking is not None:
        sink[(np.arange(len(block)) != leaking) & (flow > 0.0)] = 0.0
    return Bordered(shape, rates, sink, weight)


def relative_error(computed: np.ndarray, expected: np.ndarray) -> float:
    return float(np.max(np.abs(computed / expected - 1.0)))


@pytest.mark.parametrize(("sizes", "n_border"), CASES, ids=str)
def test_against_dense_and_sparse_solvers(sizes: list[int], n_border: int) -> None:
    right = np.random.default_rng(4).uniform(0.0, 1.0, (3, sum(sizes) + n_border))
    balanced, free = (network(sizes, n_border, 7, choice) for choice in (True, False))
    lu = splu(sparse.csc_array(free.dense()))
    factored = free.general()
    for computed, expected in (
        (balanced.solve_symmetric(right), np.linalg.solve(balanced.dense(), right.T).T),
        (factored.solve(right), lu.solve(right.T).T),
        (factored.solve_transposed(right), lu.solve(right.T, trans="T").T),
    ):
        # Condition below 1000 with a leak of a tenth.
        assert relative_error(computed, expected) < 100 * ROUND_OFF


@given(cases, st.integers(0, 2**32), st.floats(0.0, 14.0), st.floats(-6.0, 0.0))
def test_what_enters_leaves(
    case: tuple[list[int], int], seed: int, decades: float, log_leak: float
) -> None:
    # A 1 = sink, so that fates over all exits sum to 1, and sum(s) = sink.x. The corner is dense:
    # as inside a block, a leak small against the flow among its unknowns costs digits there.
    sizes, n_border = case
    leak = 10.0**log_leak if n_border == 1 else 1.0
    for symmetric in (True, False):
        given_network = network(sizes, n_border, seed, symmetric, decades, leak)
        sink, v = given_network.sink, given_network.weight
        share = np.linspace(0.1, 0.9, len(sink))
        exits = np.array([sink * share, sink * (1.0 - share)])
        source = np.random.default_rng(seed).uniform(0.0, 1.0, len(sink))
        if symmetric:
            fates = given_network.solve_symmetric(exits) / v
            populations = given_network.solve_symmetric(source[None])[0]
        else:
            factored = given_network.general()
            fates, populations = factored.solve(exits), factored.solve_transposed(source[None])[0]
        assert np.all(fates > 0.0)
        np.testing.assert_allclose(fates.sum(axis=0), 1.0, rtol=CONSERVATION)
        assert sink @ populations == pytest.approx(source @ v, rel=CONSERVATION)


@given(cases, st.integers(0, 2**32), st.floats(0.0, 14.0), st.floats(-6.0, 0.0))
def test_adjoint_identity(
    case: tuple[list[int], int], seed: int, decades: float, log_leak: float
) -> None:
    # <w, A^-1 v> = <A^-T w, v>.
    sizes, n_border = case
    factored = network(sizes, n_border, seed, False, decades, 10.0**log_leak).general()
    v, w = np.random.default_rng(seed).uniform(0.0, 1.0, (2, sum(sizes) + n_border))
    forward, backward = factored.solve(v[None])[0], factored.solve_transposed(w[None])[0]
    assert w @ forward == pytest.approx(backward @ v, rel=100 * ROUND_OFF)


@pytest.mark.parametrize("leak", [1e-6, 1e-14])
@pytest.mark.parametrize("decades", [2.0, 14.0])
@pytest.mark.parametrize("symmetric", [True, False])
def test_nearly_singular_networks_keep_every_digit(
    symmetric: bool, decades: float, leak: float
) -> None:
    right = np.random.default_rng(2).uniform(0.0, 1.0, 13)
    for leaking in (0, 11, 12):
        tight = network([1, 6, 5], 1, 5, symmetric, decades, leak, leaking)
        exact = tight.exact_solution(right)
        found = (
            tight.solve_symmetric(right[None]) if symmetric else tight.general().solve(right[None])
        )
        assert relative_error(found[0], exact) < 20 * ROUND_OFF


@pytest.mark.parametrize("symmetric", [True, False])
@pytest.mark.parametrize(("sizes", "n_border"), [([4, 3], 2), ([0, 0], 3), ([1], 1)], ids=str)
def test_a_network_without_exit_is_singular(
    sizes: list[int], n_border: int, symmetric: bool
) -> None:
    closed = network(sizes, n_border, 3, symmetric, leak=0.0)
    with pytest.raises(SolveError, match="rate matrix is singular"):
        closed.symmetric() if symmetric else closed.general()


def test_inputs_are_left_alone() -> None:
    plain = network([4, 3], 2, 1, False)
    right = np.ones((2, 9))
    factored, balanced = plain.general(), network([4, 3], 2, 1, True).symmetric()
    before = plain.rates.copy()
    factored.solve(right), factored.solve_transposed(right), balanced.solve(right)
    assert np.all(right == 1.0) and np.array_equal(before, plain.rates)
