"""Collocation on a given sequence of steps, and its exact discrete adjoint.

The three-stage Radau IIA method: on each step the stages Y solve Y_i = y0 + h sum_j a_ij f(Y_j),
and the last stage is the end of the step. Order 5, stiffly accurate, L-stable. It needs no more
than the slope of f, so that its adjoint needs none higher: the derivative of what was computed,
to rounding, costs one small transposed solve a step.

References
----------
Hairer & Wanner 1996, Solving Ordinary Differential Equations II, 2nd ed., sec. IV.5 (Radau IIA,
order 5; coefficients from memory, held by the test of the order).
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Generic, NamedTuple, Protocol, TypeVar

import numpy as np

from ..arrays import FloatArray
from ..errors import Outcome, SolveError

_ROOT = np.sqrt(6.0)
NODES = np.array([(4.0 - _ROOT) / 10.0, (4.0 + _ROOT) / 10.0, 1.0])
"""Places of the stages in a step, as fractions of it."""
MATRIX = np.array(
    [
        [(88 - 7 * _ROOT) / 360, (296 - 169 * _ROOT) / 1800, (-2 + 3 * _ROOT) / 225],
        [(296 + 169 * _ROOT) / 1800, (88 + 7 * _ROOT) / 360, (-2 - 3 * _ROOT) / 225],
        [(16 - _ROOT) / 36, (16 + _ROOT) / 36, 1 / 9],
    ]
)
"""a_ij; the last row holds the weights of the quadrature over a step."""
WEIGHTS = MATRIX[2]

# Newton's correction that is small enough to be the last: the next would be its square.
_LAST_CORRECTION = 1e-8
_MOST_CORRECTIONS = 12

Here = TypeVar("Here")


class Linear(NamedTuple, Generic[Here]):
    """The equations at one time and state.

    Attributes
    ----------
    rate : ndarray, shape (n,)
        f.
    matrix : ndarray, shape (n, n)
        df/dy.
    here : object
        Whatever else the caller wants to find again at this stage.
    """

    rate: FloatArray
    matrix: FloatArray
    here: Here


@dataclass(frozen=True, slots=True, eq=False)
class Collocated(Generic[Here]):
    """A solution by collocation.

    Attributes
    ----------
    edges : ndarray, shape (n_steps + 1,)
        Ends of the steps.
    start : ndarray, shape (n,)
        The state at the first edge.
    stages : ndarray, shape (n_steps, 3, n)
        States at the stages; the last of each step is the state at its end.
    linear : list of list of Linear
        The equations at every stage, by step.
    """

    edges: FloatArray
    start: FloatArray
    stages: FloatArray
    linear: list[list[Linear[Here]]]

    @property
    def steps(self) -> FloatArray:
        """Lengths of the steps, shape (n_steps,)."""
        return np.diff(self.edges)

    @property
    def times(self) -> FloatArray:
        """Times of the stages, shape (n_steps, 3)."""
        return stage_times(self.edges)

    def state_at(self, edge: int) -> FloatArray:
        """State at one edge, shape (n,)."""
        state: FloatArray = self.start if edge == 0 else self.stages[edge - 1, 2]
        return state


def stage_times(edges: FloatArray) -> FloatArray:
    """Times of the stages between `edges`, shape (n_steps, 3)."""
    times: FloatArray = edges[:-1, None] + np.diff(edges)[:, None] * NODES
    return times


def collocate(
    linearize: Callable[[float, FloatArray], Linear[Here]],
    edges: FloatArray,
    start: FloatArray,
    guess: FloatArray,
    on_edge: Callable[[float, FloatArray], None] = lambda time, state: None,
) -> Collocated[Here]:
    """Solve dy/dt = f over given steps.

    Parameters
    ----------
    linearize : callable
        The equations at (t, y).
    edges : ndarray, shape (n_steps + 1,)
        Ends of the steps, ascending.
    start : ndarray, shape (n,)
        State at the first edge.
    guess : ndarray, shape (n_steps, 3, n)
        Stages to start Newton's iteration from.
    on_edge : callable, optional
        Told (t, y) at every edge as soon as it is known, the first one too: what later equations
        may remember.

    Returns
    -------
    Collocated
        The solution.

    Raises
    ------
    SolveError
        If Newton's iteration does not settle on a step.
    """
    stages, linear = np.array(guess), []
    state = np.asarray(start, dtype=np.float64)
    on_edge(float(edges[0]), state)
    for step, (begin, end) in enumerate(itertools.pairwise(edges.tolist())):
        times = begin + (end - begin) * NODES
        found = _solve_step(linearize, times, end - begin, state, stages[step])
        linear.append(found)
        state = stages[step, 2]
        on_edge(end, state)
    return Collocated(edges, np.asarray(start), stages, linear)


def _solve_step(
    linearize: Callable[[float, FloatArray], Linear[Here]],
    times: FloatArray,
    length: float,
    state: FloatArray,
    stages: FloatArray,
) -> list[Linear[Here]]:
    """Newton's iteration on the stages of one step, in place."""
    for _ in range(_MOST_CORRECTIONS):
        found = [linearize(float(t), y) for t, y in zip(times, stages, strict=True)]
        rates = np.array([one.rate for one in found])
        defect = state + length * (MATRIX @ rates) - stages
        system = _system(length, found)
        correction = np.linalg.solve(system, defect.ravel()).reshape(stages.shape)
        stages += correction
        if np.max(np.abs(correction)) < _LAST_CORRECTION:
            return found
    raise SolveError(Outcome.STEP_TOO_SMALL.value, outcome=Outcome.STEP_TOO_SMALL)


def _system(length: float, linear: list[Linear[Here]]) -> FloatArray:
    """1 - h A J over all stages of a step, shape (3 n, 3 n)."""
    n = len(linear[0].rate)
    system = np.eye(3 * n)
    for j, one in enumerate(linear):
        for i in range(3):
            system[i * n : i * n + n, j * n : j * n + n] -= length * MATRIX[i, j] * one.matrix
    return system


class Memory(Protocol):
    """What equations remember of states at earlier edges, for an adjoint; scalars along axis 0."""

    def told(self, step: int, weight: FloatArray) -> None:
        """Take note of the weights of the stages of a step, shape (n_scalars, 3, n)."""
        ...

    def by_edge(self, edge: int) -> FloatArray:
        """Derivative by the state at an edge of all that remembers it, shape (n_scalars, n).

        Asked when the weights of all later steps have been told.
        """
        ...


def adjoint(
    solution: Collocated[Here], source: FloatArray, memory: Memory | None = None
) -> tuple[FloatArray, FloatArray]:
    """Weights that turn changes of f at the stages into changes of scalars of the solution.

    Parameters
    ----------
    solution : Collocated
        The solution.
    source : ndarray, shape (n_scalars, n_steps, 3, n)
        Derivative of each scalar by each stage, the state at an edge counted with the stage that
        ends there.
    memory : Memory, optional
        Where the equations at a stage remember states at the edges before it.

    Returns
    -------
    weight : ndarray, shape (n_scalars, n_steps, 3, n)
        dJ = sum of weight * (change of f at the stages, states held).
    start : ndarray, shape (n_scalars, n)
        dJ by the state at the first edge.
    """
    n_scalars, n_steps, _, n = source.shape
    weight = np.empty(source.shape)
    carried = np.zeros((n_scalars, n))
    for step in range(n_steps - 1, -1, -1):
        length = float(solution.edges[step + 1] - solution.edges[step])
        right = source[:, step].copy()
        right[:, 2] += carried
        if memory is not None:
            right[:, 2] += memory.by_edge(step + 1)
        system = _system(length, solution.linear[step])
        mu = np.linalg.solve(system.T, right.reshape(n_scalars, 3 * n).T).T.reshape(right.shape)
        carried = mu.sum(axis=1)
        weight[:, step] = length * np.einsum("ij,tin->tjn", MATRIX, mu)
        if memory is not None:
            memory.told(step, weight[:, step])
    return weight, carried


def stage_slopes() -> FloatArray:
    """Slope of the cubic of a step of unit length at its stages, shape (3, 4).

    Weights of the start and of the stages; each row sums to 0.
    """
    knots = np.concatenate([[0.0], NODES])
    powers = np.vander(knots, increasing=True)
    slopes = np.arange(4) * np.vander(NODES, 4, increasing=True) / NODES[:, None]
    weights: FloatArray = np.linalg.solve(powers.T, slopes.T).T
    return weights
