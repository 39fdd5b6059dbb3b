"""The compiled elimination of small networks against its own source and a dense formula."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from levelnet.kernels import small
from levelnet.numerics.block_system import BlockShape
from tests.random_networks import Symmetric, block_range, symmetric_network
from tests.tolerances import ROUND_OFF

KERNELS = ("_fold_in", "_conserving_cholesky", "factor_small", "solve_small")
SIZES = [[1], [4], [3, 2], [5, 4, 3, 2, 1], [2, 6, 3], [4, 0, 3], [0, 2, 0]]


@pytest.fixture
def interpreted(monkeypatch: pytest.MonkeyPatch) -> Any:
    """Give the kernels as plain Python, their calls of each other included."""
    compiled = {name: getattr(small, name) for name in KERNELS}
    for name, kernel in compiled.items():
        monkeypatch.setattr(small, name, kernel.py_func)
    return small


def layout(shape: BlockShape) -> tuple[np.ndarray, ...]:
    return shape.size, shape.start, shape.coupling_start, shape.factor_start


def factored(network: Symmetric, factor_small: Any) -> tuple[int, np.ndarray, np.ndarray]:
    coupling, factor = network.coupling.copy(), np.full(network.shape.n_factors, np.nan)
    carried = network.excess.copy()
    status = factor_small(
        *layout(network.shape), network.weight, network.outflow, carried, coupling, factor
    )
    return status, coupling, factor


def squares(network: Symmetric, factor: np.ndarray) -> list[np.ndarray]:
    """Give the triangle of each block, C-ordered as these kernels keep it."""
    shape, found = network.shape, []
    for block in range(len(shape.size)):
        side, begin = int(shape.size[block]), int(shape.factor_start[block])
        found.append(np.tril(factor[begin : begin + side * side].reshape(side, side)))
    return found


@pytest.mark.parametrize("sizes", SIZES, ids=str)
def test_against_their_own_source(sizes: list[int], monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(1)
    network = symmetric_network(sizes, rng)
    compiled_factor, compiled_solve = small.factor_small, small.solve_small
    right = rng.uniform(0.0, 1.0, (2, sum(sizes)))
    one, other = right.copy(), right.copy()
    status, coupling, factor = factored(network, compiled_factor)
    compiled_solve(*layout(network.shape), coupling, factor, one)
    for name in KERNELS:
        monkeypatch.setattr(small, name, getattr(small, name).py_func)
    plain_status, plain_coupling, plain_factor = factored(network, small.factor_small)
    small.solve_small(*layout(network.shape), plain_coupling, plain_factor, other)
    assert status == plain_status == 0
    # Compiled code may join a product and a sum in one rounding.
    np.testing.assert_allclose(coupling, plain_coupling, rtol=10 * ROUND_OFF)
    for ours, plain in zip(squares(network, factor), squares(network, plain_factor), strict=True):
        np.testing.assert_allclose(ours, plain, rtol=10 * ROUND_OFF)
    np.testing.assert_allclose(one, other, rtol=10 * ROUND_OFF)


@pytest.mark.parametrize("sizes", [[4], [3, 2], [5, 4, 3, 2, 1], [2, 6, 3]], ids=str)
def test_factors_multiply_to_the_matrix(sizes: list[int]) -> None:
    # Eliminated from the last block: H = U U^T, U upper block bidiagonal: L on the diagonal,
    # -X = -B L^-T above it.
    network = symmetric_network(sizes, np.random.default_rng(2))
    status, coupling, factor = factored(network, small.factor_small)
    assert status == 0
    root = np.zeros((sum(sizes), sum(sizes)))
    for block, lower in enumerate(squares(network, factor)):
        rows = block_range(network.shape, block)
        root[rows, rows] = lower
        if block + 1 < len(sizes):
            columns = block_range(network.shape, block + 1)
            root[rows, columns] = -network.shape.coupling(coupling, block)
    np.testing.assert_allclose(root @ root.T, network.dense(), rtol=0, atol=ROUND_OFF)


@pytest.mark.parametrize("sizes", SIZES, ids=str)
def test_solution_against_the_dense_formula(sizes: list[int]) -> None:
    rng = np.random.default_rng(3)
    network = symmetric_network(sizes, rng)
    _, coupling, factor = factored(network, small.factor_small)
    right = rng.uniform(0.0, 1.0, (3, sum(sizes)))
    x = right.copy()
    small.solve_small(*layout(network.shape), coupling, factor, x)
    expected = np.linalg.solve(network.dense(), right.T).T
    np.testing.assert_allclose(x, expected, rtol=100 * ROUND_OFF)


def test_status_names_the_block_that_is_not_positive(interpreted: Any) -> None:
    network = symmetric_network([2, 2, 1], np.random.default_rng(4))
    for block in (0, 1, 2):
        broken = network._replace(excess=network.excess.copy(), outflow=network.outflow.copy())
        rows = block_range(network.shape, block)
        # An outflow that takes back more than what leaves is no network at all.
        broken.outflow[rows] = -1e3
        assert factored(broken, interpreted.factor_small)[0] == 1 + block


def test_nothing_to_do(interpreted: Any) -> None:
    empty = Symmetric(BlockShape.of([0, 0]), *(np.zeros(0) for _ in range(4)))
    assert factored(empty, interpreted.factor_small)[0] == 0
    x = np.zeros((2, 0))
    interpreted.solve_small(*layout(empty.shape), np.zeros(0), np.zeros(0), x)
