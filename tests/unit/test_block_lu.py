"""Block LU without symmetry against general dense and sparse solvers and 60-digit arithmetic."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.errors import SolveError
from levelnet.numerics.block_lu import factor_general
from levelnet.numerics.block_system import BlockShape
from tests.random_networks import general_network, symmetric_network
from tests.tolerances import CONSERVATION, ELIMINATION, ROUND_OFF

SIZES = [
    [1],
    [7],
    [1] * 9,
    [5, 4, 3, 2, 1],
    [3, 5, 1, 4],
    [6, 0, 5],
    [0, 4, 3],
    [45, 44, 7],
    [4, 0],
]
shapes = st.lists(st.integers(0, 6), min_size=1, max_size=7).filter(lambda sizes: sum(sizes) > 0)


def relative_error(computed: np.ndarray, expected: np.ndarray) -> float:
    return float(np.max(np.abs(computed / expected - 1.0)))


@pytest.mark.parametrize("sizes", SIZES, ids=str)
def test_against_dense_and_sparse_solvers(sizes: list[int]) -> None:
    rng = np.random.default_rng(21)
    network = general_network(sizes, rng)
    right = rng.uniform(0.0, 1.0, (3, sum(sizes)))
    factored, matrix = network.factor(), network.dense()
    general = splu(sparse.csc_array(matrix))
    for computed, expected in (
        (factored.solve(right), np.linalg.solve(matrix, right.T).T),
        (factored.solve(right), general.solve(right.T).T),
        (factored.solve_transposed(right), np.linalg.solve(matrix.T, right.T).T),
        (factored.solve_transposed(right), general.solve(right.T, trans="T").T),
    ):
        # Condition below 1000 with a leak of a tenth.
        assert relative_error(computed, expected) < 100 * ROUND_OFF


@given(shapes, st.integers(0, 2**32), st.floats(0.0, 14.0), st.floats(-6.0, 0.0))
def test_adjoint_identity(sizes: list[int], seed: int, decades: float, log_leak: float) -> None:
    # <w, A^-1 v> = <A^-T w, v>.
    rng = np.random.default_rng(seed)
    factored = general_network(sizes, rng, decades, 10.0**log_leak).factor()
    v, w = rng.uniform(0.0, 1.0, (2, sum(sizes)))
    forward, backward = factored.solve(v[None])[0], factored.solve_transposed(w[None])[0]
    assert np.all(forward > 0.0) and np.all(backward > 0.0)
    assert w @ forward == pytest.approx(backward @ v, rel=100 * ROUND_OFF)


@pytest.mark.parametrize("decades", [1.0, 6.0, 14.0])
def test_what_enters_leaves(decades: float) -> None:
    # Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107: A 1 = sink, so sum(s) = sink.x, and the
    # fates over all exits sum to 1.
    rng = np.random.default_rng(3)
    for sizes in ([9, 8, 7, 5], [1, 60, 50]):
        network = general_network(sizes, rng, decades, 1e-2)
        factored = network.factor()
        source = 10.0 ** rng.uniform(-decades, 0.0, sum(sizes))
        populations = factored.solve_transposed(source[None])[0]
        assert network.sink @ populations == pytest.approx(source.sum(), rel=CONSERVATION)
        share = rng.uniform(0.0, 1.0, sum(sizes))
        fates = factored.solve(np.array([network.sink * share, network.sink * (1.0 - share)]))
        np.testing.assert_allclose(fates.sum(axis=0), 1.0, rtol=CONSERVATION)


@pytest.mark.parametrize("sizes", [[1] * 12, [1, 3, 1, 2], [1, 6, 5, 4]], ids=str)
@pytest.mark.parametrize("decades", [2.0, 14.0])
@pytest.mark.parametrize("leak", [1e-6, 1e-14])
def test_nearly_singular_networks_keep_every_digit(
    sizes: list[int], decades: float, leak: float
) -> None:
    rng = np.random.default_rng(5)
    for leaking in (0, sum(sizes) - 1):
        network = general_network(sizes, rng, decades, leak, leaking)
        right = rng.uniform(0.0, 1.0, sum(sizes))
        solution = network.factor().solve(right[None])[0]
        assert relative_error(solution, network.exact_solution(right)) < 10 * ROUND_OFF


def test_a_plain_factorization_loses_those_digits() -> None:
    rng = np.random.default_rng(5)
    network = general_network([1, 6, 5, 4], rng, 2.0, 1e-10, 15)
    right = rng.uniform(0.0, 1.0, 16)
    exact = network.exact_solution(right)
    assert relative_error(np.linalg.solve(network.dense(), right), exact) > 1e-7
    assert relative_error(network.factor().solve(right[None])[0], exact) < 10 * ROUND_OFF


def test_agrees_with_the_symmetric_form_where_both_hold() -> None:
    # A = V^-1 D^1/2 H D^1/2 V of a network in detailed balance: rates B_ij v_j / v_i.
    rng = np.random.default_rng(9)
    sizes = [6, 5, 4, 2]
    network = symmetric_network(sizes, rng, 4.0, 1e-3)
    up, down = [], []
    for block in range(len(sizes) - 1):
        shape = network.shape
        coupling = shape.coupling(network.coupling, block)
        low, high = shape.part(network.weight, block), shape.part(network.weight, block + 1)
        up.append(coupling * high / low[:, None])
        down.append(coupling.T * low / high[:, None])
    factored = factor_general(network.shape, up, down, network.excess / network.weight)
    right = rng.uniform(0.0, 1.0, (2, sum(sizes)))
    symmetric = network.factor().solve(right * network.weight) / network.weight
    assert relative_error(factored.solve(right), symmetric) < ELIMINATION


@pytest.mark.parametrize("sizes", [[1], [1, 1, 1], [1, 4, 3], [6, 1], [4, 3], [5, 6, 5]], ids=str)
def test_a_network_without_exit_is_singular(sizes: list[int]) -> None:
    for seed in range(10):
        network = general_network(sizes, np.random.default_rng(seed), 2.0, 0.0)
        with pytest.raises(SolveError, match="rate matrix is singular"):
            network.factor()


def test_inputs_are_left_alone() -> None:
    network = general_network([4, 3], np.random.default_rng(1))
    before = [network.upward[0].copy(), network.downward[0].copy(), network.sink.copy()]
    right = np.ones((2, 7))
    factored = network.factor()
    factored.solve(right)
    factored.solve_transposed(right)
    after = [network.upward[0], network.downward[0], network.sink]
    assert all(np.array_equal(a, b) for a, b in zip(before, after, strict=True))
    assert np.all(right == 1.0)


def test_no_unknowns() -> None:
    empty = factor_general(
        BlockShape.of([0, 0]), [np.zeros((0, 0))], [np.zeros((0, 0))], np.zeros(0)
    )
    assert empty.solve(np.zeros((2, 0))).shape == (2, 0)
    assert empty.solve_transposed(np.zeros((2, 0))).shape == (2, 0)
