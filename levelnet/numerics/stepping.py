"""One error-controlled implicit step method: a six-stage Rosenbrock method of order 4(3).

L-stable and stiffly accurate; one Jacobian and one factorization a step, no Newton iteration. The
Jacobian comes with the rate there, which is also the first of the six stages.

References
----------
Hairer & Wanner 1996, Solving Ordinary Differential Equations II, 2nd ed., sec. IV.7 and IV.10
(method RODAS; coefficients from memory, held by the test of the observed order and of the order
conditions).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.linalg import lapack

from ..arrays import FloatArray
from ..errors import Outcome, SolveError

Rate = Callable[[float, FloatArray], FloatArray]


class Slopes(NamedTuple):
    """The right-hand side at one time and state, linearized.

    Attributes
    ----------
    rate : ndarray, shape (n,)
        dy/dt.
    matrix : ndarray, shape (n, n)
        Its derivatives by the state.
    drift : ndarray, shape (n,)
        Its derivatives by time.
    """

    rate: FloatArray
    matrix: FloatArray
    drift: FloatArray


Linearize = Callable[[float, FloatArray], Slopes]

_GAMMA = 0.25
_A = (
    (),
    (1.544000000000000,),
    (0.9466785280815826, 0.2557011698983284),
    (3.314825187068521, 2.896124015972201, 0.9986419139977817),
    (1.221224509226641, 6.019134481288629, 12.53708332932087, -0.6878860361058950),
)
_C = (
    (),
    (-5.668800000000000,),
    (-2.430093356833875, -0.2063599157091915),
    (-0.1073529058151375, -9.594562251023355, -20.47028614809616),
    (7.496443313967647, -10.24680431464352, -33.99990352819905, 11.70890893206160),
    (
        8.083246795921522,
        -7.981132988064893,
        -31.52159432874371,
        16.31930543123136,
        -6.058818238834054,
    ),
)
_NODE = (0.0, 0.386, 0.21, 0.63, 1.0, 1.0)
_TIME = (0.25, -0.1043, 0.1035, -0.03620000000000023, 0.0, 0.0)

_SHRINK, _GROW, _SAFETY = 0.2, 5.0, 0.9


@dataclass(frozen=True, slots=True, eq=False)
class Trajectory:
    """Every accepted step of one integration.

    Attributes
    ----------
    time : ndarray, shape (n_points,)
        Start, every accepted step end; each asked output is one of them, exactly.
    state : ndarray, shape (n_points, n_variables)
        The variables there. Their rates are not kept: of a stiff variable the rate holds the local
        error times the relaxation rate and is no slope of the solution.
    outcome : Outcome
        How it ended; where it is not CONVERGED the arrays end early.
    rejected, evaluations : int
        Steps thrown away; evaluations of the right-hand side, those with its Jacobian counted as
        one.
    """

    time: FloatArray
    state: FloatArray
    outcome: Outcome
    rejected: int
    evaluations: int


def rosenbrock_step(
    rate: Rate, here: Slopes, time: float, state: FloatArray, step: float
) -> tuple[FloatArray, FloatArray]:
    """Take one step.

    Parameters
    ----------
    rate : callable
        dy/dt = rate(t, y).
    here : Slopes
        That function where the step starts.
    time, state, step : float, ndarray (n,), float
        Where that is, and its length.

    Returns
    -------
    state, error : ndarray, shape (n,)
        The state after the step, and its estimated error.
    """
    n = len(state)
    lu, pivots, _ = lapack.dgetrf(np.eye(n) / (step * _GAMMA) - here.matrix)
    stages: list[FloatArray] = []
    point = state
    for k in range(6):
        if k < 5:
            point = state + sum((a * u for a, u in zip(_A[k], stages, strict=True)), np.zeros(n))
        else:
            point = point + stages[-1]
        if not np.isfinite(point).all():
            return point, np.full(n, np.inf)  # a step far too long
        value = here.rate if k == 0 else rate(time + _NODE[k] * step, point)
        right = value + step * _TIME[k] * here.drift
        for c, u in zip(_C[k], stages, strict=True):
            right = right + (c / step) * u
        stages.append(lapack.dgetrs(lu, pivots, right)[0])
    return point + stages[-1], stages[-1]


def integrate(  # noqa: PLR0913 (each is a choice of the caller)
    rate: Rate,
    linearize: Linearize,
    start: float,
    state: FloatArray,
    outputs: Sequence[float],
    tolerance: float | FloatArray | Callable[[float, FloatArray], FloatArray],
    *,
    first_step: float,
    max_steps: int,
    on_step: Callable[[float, FloatArray], None] | None = None,
    longest_step: Callable[[float], float] = lambda _: math.inf,
) -> Trajectory:
    """Integrate to every output in turn, the local error of each variable below `tolerance`.

    Parameters
    ----------
    rate, linearize : callable
        dy/dt and its Slopes at (t, y); their SolveError ends the integration with its outcome.
    start : float
        Initial time.
    state : ndarray, shape (n,)
        Initial variables; scaled so that an absolute tolerance serves them.
    outputs : sequence of float
        Ascending times, all above `start`; steps end on each exactly.
    tolerance : float, ndarray of shape (n,), or callable
        Largest absolute local error of any variable, or of each, in one step; a callable gives it
        from the time and the state where the step starts.
    first_step : float
        Length of the first step tried.
    max_steps : int
        Limit on accepted plus rejected steps.
    on_step : callable, optional
        Told the time and the state after every accepted step.
    longest_step : callable
        No step that starts at this time is longer.

    Returns
    -------
    Trajectory
        Accepted points and the outcome.
    """
    now, y, step = start, np.asarray(state, dtype=np.float64), first_step
    here: Slopes | None = None
    times, states = [now], [y]
    rejected, evaluations, outcome = 0, 0, Outcome.CONVERGED
    for target in outputs:
        while now < target and outcome.ok:
            if len(times) + rejected > max_steps:
                outcome = Outcome.STEP_LIMIT
                break
            # Stretch or split evenly rather than leave a sliver before the output.
            pieces = max(1, int(np.ceil((target - now) / step - 0.1)))
            pieces = max(pieces, math.ceil((target - now) / longest_step(now)))
            trial = (target - now) / pieces
            end = target if pieces == 1 else now + trial
            try:
                allowed = tolerance(now, y) if callable(tolerance) else tolerance
                if here is None:
                    here, evaluations = linearize(now, y), evaluations + 1
                new, error = rosenbrock_step(rate, here, now, y, end - now)
            except SolveError as failure:
                outcome = failure.outcome
                break
            evaluations += 5
            size = float(np.max(np.abs(error) / allowed))
            size = size if np.isfinite(size) else np.inf
            factor = min(_GROW, max(_SHRINK, _SAFETY * max(size, 1e-12) ** -0.25))
            if size > 1.0:
                rejected += 1
                step = trial * factor
                if step < 1e-13 * max(1.0, abs(now)):
                    outcome = Outcome.STEP_TOO_SMALL
                continue
            step = trial * factor if pieces > 1 or factor < 1.0 else max(step, trial * factor)
            now, y, here = end, new, None
            times.append(now)
            states.append(y)
            if on_step is not None:
                on_step(now, y)
    return Trajectory(np.array(times), np.array(states), outcome, rejected, evaluations)
