"""Collocation on given steps: order, and its adjoint against differences."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet.errors import SolveError
from levelnet.numerics.collocation import (
    MATRIX,
    NODES,
    WEIGHTS,
    Collocated,
    Linear,
    adjoint,
    collocate,
    stage_slopes,
)
from tests.tolerances import ORDER, ROUND_OFF


def pendulum(factor: float = 1.0) -> Any:
    def linearize(t: float, y: np.ndarray) -> Linear[None]:
        rate = np.array([y[1], -factor * math.sin(y[0]) + 0.1 * math.cos(t)])
        return Linear(rate, np.array([[0.0, 1.0], [-factor * math.cos(y[0]), 0.0]]), None)

    return linearize


def run(edges: np.ndarray, factor: float = 1.0, start: tuple[float, float] = (0.5, 0.0)) -> Any:
    begin = np.array(start)
    guess = np.broadcast_to(begin, (len(edges) - 1, 3, 2))
    return collocate(pendulum(factor), edges, begin, guess)


def test_coefficients_satisfy_the_conditions_of_the_method() -> None:
    # Hairer & Wanner 1996, sec. IV.5: B(5), C(3), stiffly accurate.
    for k in range(1, 6):
        assert WEIGHTS @ NODES ** (k - 1) == pytest.approx(1.0 / k, rel=ROUND_OFF)
    for k in range(1, 4):
        np.testing.assert_allclose(MATRIX @ NODES ** (k - 1), NODES**k / k, rtol=ROUND_OFF)


def test_order_five() -> None:
    # Reference: scipy's DOP853.
    truth = solve_ivp(
        lambda t, y: pendulum()(t, y).rate, (0, 2), (0.5, 0.0), "DOP853", rtol=1e-13, atol=1e-14
    ).y[:, -1]
    errors = [
        np.abs(run(np.linspace(0.0, 2.0, n + 1)).state_at(n) - truth).max() for n in (4, 8, 16)
    ]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert np.all(orders > 5.0 - 3.0 * ORDER)


def test_stiff_equation_settles_on_its_slow_solution() -> None:
    def linearize(t: float, y: np.ndarray) -> Linear[None]:
        return Linear(np.array([-1e7 * (y[0] - math.cos(t))]), np.array([[-1e7]]), None)

    edges = np.linspace(0.0, 1.0, 41)
    found = collocate(linearize, edges, np.array([0.0]), np.zeros((40, 3, 1)))
    # It lags by its slope over the rate of relaxation.
    slow = math.cos(1.0) + 1e-7 * math.sin(1.0)
    assert found.stages[-1, 2, 0] == pytest.approx(slow, rel=1e-12)


def test_adjoint_equals_differences() -> None:
    edges = np.array([0.0, 0.3, 0.4, 1.1, 1.5])
    draw = np.random.default_rng(3)
    source = draw.normal(size=(2, 4, 3, 2))
    solution: Collocated[None] = run(edges)
    weight, by_start = adjoint(solution, source)

    def scalars(**change: Any) -> np.ndarray:
        return np.einsum("tsin,sin->t", source, run(edges, **change).stages)

    step = 1e-4
    # By a factor in the equations: sum of weights times the change of f at the stages.
    change = -np.sin(solution.stages[:, :, 0])
    expected = (scalars(factor=1 + step) - scalars(factor=1 - step)) / (2 * step)
    np.testing.assert_allclose(np.einsum("tsi,si->t", weight[..., 1], change), expected, rtol=1e-7)
    for k in range(2):
        ahead, behind = np.array([0.5, 0.0]), np.array([0.5, 0.0])
        ahead[k] += step
        behind[k] -= step
        expected = (scalars(start=tuple(ahead)) - scalars(start=tuple(behind))) / (2 * step)
        np.testing.assert_allclose(by_start[:, k], expected, rtol=1e-6)


def test_adjoint_identity() -> None:
    # <y, M x> = <M^T y, x> with M the linear map from changes of f to changes of the stages.
    edges = np.array([0.0, 0.2, 0.9, 1.3])
    solution = run(edges)
    draw = np.random.default_rng(4)
    kick, source = draw.normal(size=(3, 3, 2)), draw.normal(size=(1, 3, 3, 2))
    weight, _ = adjoint(solution, source)
    carried, moved = np.zeros(2), np.empty((3, 3, 2))
    for step in range(3):
        length = edges[step + 1] - edges[step]
        system = np.eye(6)
        for j in range(3):
            for i in range(3):
                block = length * MATRIX[i, j] * solution.linear[step][j].matrix
                system[2 * i : 2 * i + 2, 2 * j : 2 * j + 2] -= block
        right = carried + length * MATRIX @ kick[step]
        moved[step] = np.linalg.solve(system, right.ravel()).reshape(3, 2)
        carried = moved[step, 2]
    forward, backward = float((source[0] * moved).sum()), float((weight[0] * kick).sum())
    assert forward == pytest.approx(backward, rel=1e-12)


def test_slopes_of_the_cubic() -> None:
    knots = np.concatenate([[0.0], NODES])
    for power in range(4):
        expected = power * NODES ** (power - 1.0) if power else np.zeros(3)
        np.testing.assert_allclose(stage_slopes() @ knots**power, expected, atol=1e-12)


def test_a_step_that_does_not_settle() -> None:
    def wild(t: float, y: np.ndarray) -> Linear[None]:
        return Linear(np.array([-math.copysign(1e6, y[0])]), np.array([[0.0]]), None)

    with pytest.raises(SolveError, match="step size"):
        collocate(wild, np.array([0.0, 1.0]), np.array([0.0]), np.full((1, 3, 1), 0.2))
