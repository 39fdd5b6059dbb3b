"""Block Cholesky against general dense and sparse solvers and 60-digit arithmetic."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.errors import SolveError
from levelnet.kernels.blocks import PANEL, SMALL, WIDE
from levelnet.numerics import block_cholesky
from levelnet.numerics.block_cholesky import factor_symmetric
from levelnet.numerics.block_system import BlockShape
from tests.random_networks import Symmetric, symmetric_network
from tests.tolerances import CONSERVATION, ELIMINATION, ROUND_OFF

SIZES = [
    [1],
    [7],
    [1, 1],
    [1] * 9,
    [5, 4, 3, 2, 1],
    [3, 5, 1, 4],
    [6, 0, 5],
    [0, 4, 3],
    [4, 3, 0],
    [0, 0, 2, 0],
    [PANEL + 1, PANEL, PANEL - 1],
    [SMALL + 1, SMALL, 7],
    [SMALL, SMALL + 1, 1, 0, 9, 2 * PANEL],
    [2, 5 * PANEL + 1, 5 * PANEL],
    [WIDE + 1, WIDE, 3],
    [5, WIDE + PANEL + 3, 40],
]
shapes = st.lists(st.integers(0, 6), min_size=1, max_size=7).filter(lambda sizes: sum(sizes) > 0)


def general_sparse(matrix: np.ndarray, right: np.ndarray) -> np.ndarray:
    """Solve each row of `right` by SuperLU (scipy)."""
    return splu(sparse.csc_array(matrix)).solve(right.T).T


def relative_error(computed: np.ndarray, expected: np.ndarray) -> float:
    return float(np.max(np.abs(computed / expected - 1.0)))


@pytest.mark.parametrize("sizes", SIZES, ids=str)
def test_against_dense_and_sparse_solvers(sizes: list[int]) -> None:
    rng = np.random.default_rng(11)
    network = symmetric_network(sizes, rng)
    right = rng.uniform(0.0, 1.0, (3, sum(sizes)))
    solution = network.factor().solve(right)
    # A leak of a tenth of the flow: condition below 100, so the references are good to ROUND_OFF x
    # 100.
    for expected in (
        np.linalg.solve(network.dense(), right.T).T,
        general_sparse(network.dense(), right),
    ):
        assert relative_error(solution, expected) < 100 * ROUND_OFF


@given(shapes, st.integers(0, 2**32), st.floats(0.0, 6.0), st.floats(-8.0, 0.0))
def test_any_network_has_a_small_residual(
    sizes: list[int], seed: int, decades: float, log_leak: float
) -> None:
    rng = np.random.default_rng(seed)
    network = symmetric_network(sizes, rng, decades, 10.0**log_leak)
    right = rng.uniform(0.0, 1.0, (1, sum(sizes)))
    solution = network.factor().solve(right)
    assert np.all(solution > 0.0)
    residual = solution[0] - network.off_diagonal() @ solution[0] - right[0]
    assert np.max(np.abs(residual)) < 100 * ROUND_OFF * np.max(solution)


@given(shapes, st.integers(0, 2**32))
def test_adjoint_identity(sizes: list[int], seed: int) -> None:
    # H is symmetric: <w, H^-1 v> = <H^-1 w, v>.
    rng = np.random.default_rng(seed)
    factored = symmetric_network(sizes, rng, 4.0, 1e-3).factor()
    v, w = rng.uniform(0.0, 1.0, (2, sum(sizes)))
    forward, backward = factored.solve(np.array([v, w]))
    assert w @ forward == pytest.approx(backward @ v, rel=100 * ROUND_OFF)


@pytest.mark.parametrize("decades", [1.0, 6.0, 14.0])
@pytest.mark.parametrize("sizes", [[9, 8, 7, 5], [SMALL + 2, SMALL, 3], [60, 59, 58]], ids=str)
def test_what_enters_leaves(sizes: list[int], decades: float) -> None:
    # Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107: v.r = v.(H x) = c.x.
    rng = np.random.default_rng(3)
    for leak in (1e-1, 1e-3):
        network = symmetric_network(sizes, rng, decades, leak)
        right = 10.0 ** rng.uniform(-decades, 0.0, sum(sizes))
        solution = network.factor().solve(right[None])[0]
        inflow, outflow = network.weight @ right, network.excess @ solution
        assert outflow == pytest.approx(inflow, rel=CONSERVATION)


@pytest.mark.parametrize("sizes", [[1] * 12, [1, 3, 1, 2], [1, 6, 5, 4]], ids=str)
@pytest.mark.parametrize("decades", [2.0, 14.0])
@pytest.mark.parametrize("leak", [1e-6, 1e-14])
def test_nearly_singular_networks_keep_every_digit(
    sizes: list[int], decades: float, leak: float
) -> None:
    # One exit, at the last unknown or the first; the condition is about 1/leak, up to 1e16 and
    # more.
    rng = np.random.default_rng(5)
    for leaking in (0, sum(sizes) - 1):
        network = symmetric_network(sizes, rng, decades, leak, leaking)
        right = rng.uniform(0.0, 1.0, sum(sizes))
        solution = network.factor().solve(right[None])[0]
        exact = network.exact_solution(right)
        assert relative_error(solution, exact) < 10 * ROUND_OFF


def test_a_plain_factorization_loses_those_digits() -> None:
    # Why the diagonal is formed as a sum: the same network, entered as a matrix into LAPACK.
    rng = np.random.default_rng(5)
    network = symmetric_network([1, 6, 5, 4], rng, 2.0, 1e-10, 15)
    right = rng.uniform(0.0, 1.0, 16)
    exact = network.exact_solution(right)
    plain = np.linalg.solve(network.dense(), right)
    assert relative_error(plain, exact) > 1e-7
    assert relative_error(network.factor().solve(right[None])[0], exact) < 10 * ROUND_OFF


def test_a_trap_inside_the_first_block_costs_its_condition_only() -> None:
    # Within one block the pivots are differences; digits go as rounding over leak, as in any
    # solver.
    rng = np.random.default_rng(8)
    for leak in (1e-4, 1e-7):
        network = symmetric_network([6, 5, 4], rng, 2.0, leak, 14)
        right = rng.uniform(0.0, 1.0, 15)
        solution = network.factor().solve(right[None])[0]
        assert relative_error(solution, network.exact_solution(right)) < ROUND_OFF / leak


@pytest.mark.parametrize(
    "sizes",
    [[4], [3, 2], [5, 4, 3, 2, 1], [2, 6, 3], [SMALL + 5, SMALL + 4], [WIDE + 9, 2]],
    ids=str,
)
def test_factors_multiply_to_the_matrix(sizes: list[int]) -> None:
    # Eliminated from the last block: H = U U^T, U upper block bidiagonal: L on the diagonal,
    # -X = -B L^-T above it.
    network = symmetric_network(sizes, np.random.default_rng(2))
    factored = network.factor()
    shape, root = network.shape, np.zeros((sum(sizes), sum(sizes)))
    for block in range(len(sizes)):
        rows = shape.slice(block)
        begin, side = int(shape.factor_start[block]), sizes[block]
        # Packed column by column, as LAPACK's documentation of packed storage says.
        upper = np.zeros((side, side))
        upper[np.triu_indices(side)] = factored.factor[begin : begin + side * (side + 1) // 2]
        root[rows, rows] = upper.T
        if block + 1 < len(sizes):
            root[rows, shape.slice(block + 1)] = -shape.coupling(factored.coupling, block)
    np.testing.assert_allclose(root @ root.T, network.dense(), rtol=0, atol=ROUND_OFF)


def test_large_blocks_against_the_sparse_solver() -> None:
    rng = np.random.default_rng(4)
    network = symmetric_network([90, 89, 60, 30, 1], rng, 6.0, 1e-4)
    right = rng.uniform(0.0, 1.0, (2, 270))
    expected = general_sparse(network.dense(), right)
    assert relative_error(network.factor().solve(right), expected) < ELIMINATION


@pytest.mark.parametrize(
    "sizes", [[1, 1, 1], [1, 4, 3], [6, 1], [4, 3], [5, 6, 5], [1, 30, 29]], ids=str
)
def test_a_network_without_exit_is_singular(sizes: list[int]) -> None:
    for seed in range(10):
        network = symmetric_network(sizes, np.random.default_rng(seed), 2.0, 0.0)
        with pytest.raises(SolveError, match=r"rate matrix is singular.*block l = 0"):
            network.factor()


def test_a_part_without_exit_is_singular() -> None:
    # Two networks that do not talk: one has an exit, the other has none.
    for leaking, closed in ((0, 3), (6, 0)):
        network = symmetric_network([1, 4, 0, 1, 3], np.random.default_rng(6), 2.0, 0.1, leaking)
        with pytest.raises(SolveError, match=rf"rate matrix is singular.*block l = {closed}"):
            network.factor()


def test_a_matrix_that_is_not_positive_is_an_error() -> None:
    network = symmetric_network([3, 4, 2], np.random.default_rng(6))
    network.outflow[3:7] = -1e3  # takes back more than what leaves
    with pytest.raises(SolveError, match="block l = 1"):
        network.factor()


def test_one_unknown_without_exit_is_singular() -> None:
    alone = Symmetric(BlockShape.of([1]), np.zeros(0), np.ones(1), np.zeros(1), np.zeros(1))
    with pytest.raises(SolveError, match="block l = 0"):
        alone.factor()


def test_an_excess_that_is_no_number_is_an_error() -> None:
    for sizes in ([3, 2], [SMALL + 1, 2]):
        network = symmetric_network(sizes, np.random.default_rng(0))
        network.excess[-1] = np.nan
        with pytest.raises(SolveError):
            network.factor()


def test_a_buffer_in_use_leaves_nothing_of_its_contents() -> None:
    for sizes in ([4, 3, 2], [SMALL + 5, 0, 3]):
        network = symmetric_network(sizes, np.random.default_rng(1))
        right = np.ones((1, sum(sizes)))
        fresh = network.factor().solve(right)
        buffer = np.full(network.shape.n_factors, np.nan)
        reused = factor_symmetric(
            network.shape,
            network.coupling.copy(),
            network.weight,
            network.outflow,
            network.excess,
            buffer,
        )
        assert np.array_equal(reused.solve(right), fresh)
        assert np.shares_memory(reused.factor, buffer)


@pytest.mark.parametrize("sizes", [[4, 3, 2], [SMALL + 5, 0, 3], [30, 29, 28]], ids=str)
def test_a_scale_that_the_couplings_lack(sizes: list[int]) -> None:
    rng = np.random.default_rng(12)
    network, right = symmetric_network(sizes, rng), rng.random((2, sum(sizes)))
    scale, bare = rng.uniform(0.1, 10.0, sum(sizes)), network.coupling.copy()
    for block in range(len(sizes) - 1):
        rows, columns = network.shape.slice(block), network.shape.slice(block + 1)
        part = network.shape.coupling(bare, block)
        part /= np.multiply.outer(scale[rows], scale[columns])
    scaled = factor_symmetric(
        network.shape, bare, network.weight, network.outflow, network.excess, scale=scale
    )
    expected = network.factor().solve(right)
    np.testing.assert_allclose(scaled.solve(right), expected, rtol=100 * ROUND_OFF)


def test_arrays_that_blas_would_misread_are_refused() -> None:
    network = symmetric_network([30, 29], np.random.default_rng(0))
    factored, n = network.factor(), 59
    for right in (np.ones((2, n + 1)), np.ones((2, n - 1)), np.ones(n)):
        with pytest.raises(ValueError, match=r"right: shape \(n_right, 59\)"):
            factored.solve(right)
    parts = network._asdict()
    for name, wrong in (
        ("coupling", network.coupling.astype(np.float32)),
        ("coupling", network.coupling[:-1]),
        ("coupling", np.repeat(network.coupling, 2)[::2]),
        ("weight", network.weight[:-1]),
        ("excess", network.excess[:-1]),
    ):
        with pytest.raises(ValueError, match=name):
            factor_symmetric(**parts | {name: wrong})
    with pytest.raises(ValueError, match="factor: a contiguous array of 900 float64"):
        factor_symmetric(**parts | {"factor": np.empty(3)})


def test_a_strided_vector_is_taken_as_it_is_meant() -> None:
    network = symmetric_network([30, 29], np.random.default_rng(0))
    right, strided = np.ones((1, 59)), np.repeat(network.weight, 2)[::2]
    expected = network.factor().solve(right)
    assert np.array_equal(network._replace(weight=strided).factor().solve(right), expected)


def test_the_parts_of_an_elimination_do_not_show(monkeypatch: pytest.MonkeyPatch) -> None:
    network = symmetric_network([9, 0, 40, 39, 5, 1], np.random.default_rng(3))
    right = np.ones((1, 94))
    whole = network.factor().solve(right)
    for part in (0, 60_000):
        monkeypatch.setattr(block_cholesky, "_PART", part)
        assert np.array_equal(network.factor().solve(right), whole)
    network.outflow[49:88] = -1e3
    with pytest.raises(SolveError, match="block l = 3"):
        network.factor()


def test_inputs_are_left_alone() -> None:
    network = symmetric_network([4, 3], np.random.default_rng(1))
    copies = [part.copy() for part in network[2:]]
    right = np.ones((2, 7))
    network.factor().solve(right)
    for part, copy in zip(network[2:], copies, strict=True):
        assert np.array_equal(part, copy)
    assert np.all(right == 1.0)


def test_no_unknowns_and_no_right_sides() -> None:
    empty = BlockShape.of([0, 0])
    nothing = np.zeros(0)
    factored = Symmetric(empty, nothing, nothing, nothing, nothing).factor()
    assert factored.solve(np.zeros((2, 0))).shape == (2, 0)
    for sizes in ([3, 2], [SMALL + 1, 2]):
        network = symmetric_network(sizes, np.random.default_rng(0))
        assert network.factor().solve(np.zeros((0, sum(sizes)))).shape == (0, sum(sizes))


def test_layout_of_blocks() -> None:
    shape = BlockShape.of([2, 0, 3, 1])
    assert (shape.n_unknowns, shape.n_couplings, shape.n_factors) == (6, 3, 10)
    assert shape.start.tolist() == [0, 2, 2, 5]
    assert shape.coupling_start.tolist() == [0, 0, 0]
    assert shape.factor_start.tolist() == [0, 3, 3, 9]
    assert shape.coupling(np.arange(3.0), 2).tolist() == [[0.0], [1.0], [2.0]]
    assert shape.part(np.arange(12.0).reshape(2, 6), 3).tolist() == [[5.0], [11.0]]
