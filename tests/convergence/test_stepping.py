"""The step method: order conditions, stability, observed order, error control, ways to end."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet.errors import Outcome
from levelnet.numerics import stepping
from levelnet.numerics.stepping import Linearize, Slopes, Trajectory, integrate, rosenbrock_step
from tests.tolerances import ORDER, ROUND_OFF

Array = np.ndarray
STIFF, MILD = 1e6, 1e2
Rate = Callable[[float, Array], Array]
Jacobian = Callable[[float, Array], tuple[Array, Array]]


def linear(rate: Rate, jacobian: Jacobian) -> Linearize:
    """Join a rate and its derivatives by state and time."""
    return lambda t, y: Slopes(rate(t, y), *jacobian(t, y))


def both(rate: Rate, jacobian: Jacobian) -> tuple[Rate, Linearize]:
    """What `integrate` asks for."""
    return rate, linear(rate, jacobian)


def tableau() -> tuple[Array, Array, Array, Array]:
    """Turn the coefficients of the code into alpha, Gamma, b and b of the embedded method.

    Hairer & Wanner 1996, Solving Ordinary Differential Equations II, sec. IV.7: stages are
    u = Gamma k, so
    a = alpha Gamma^-1, c = 1/gamma - Gamma^-1, m = b Gamma^-1.
    """
    a, c = np.zeros((6, 6)), np.zeros((6, 6))
    for k in range(5):
        a[k, :k] = stepping._A[k]
    a[5, :4], a[5, 4] = a[4, :4], 1.0
    for k in range(6):
        c[k, :k] = stepping._C[k]
    gamma = np.linalg.inv(np.eye(6) / stepping._GAMMA - c)
    end = np.append(a[5, :5], 1.0)
    embedded = np.append(a[5, :5], 0.0)
    return a @ gamma, gamma, end @ gamma, embedded @ gamma


def conditions(alpha: Array, gamma: Array, b: Array) -> dict[str, tuple[float, float, int]]:
    """List left side, right side and order of every condition to order 4 (Hairer & Wanner IV.7)."""
    beta = alpha + gamma
    node, slope = alpha.sum(axis=1), beta.sum(axis=1)
    return {
        "b": (b.sum(), 1.0, 1),
        "b beta": (b @ slope, 1 / 2, 2),
        "b alpha^2": (b @ node**2, 1 / 3, 3),
        "b beta beta": (b @ beta @ slope, 1 / 6, 3),
        "b alpha^3": (b @ node**3, 1 / 4, 4),
        "b alpha alpha beta": (b @ (node * (alpha @ slope)), 1 / 8, 4),
        "b beta alpha^2": (b @ beta @ node**2, 1 / 12, 4),
        "b beta beta beta": (b @ beta @ beta @ slope, 1 / 24, 4),
    }


def test_order_conditions() -> None:
    alpha, gamma, b, embedded = tableau()
    for name, (left, right, _) in conditions(alpha, gamma, b).items():
        # The coefficients have 16 digits and reach 34.
        assert left == pytest.approx(right, abs=1e-13), name
    missed = 0
    for name, (left, right, order) in conditions(alpha, gamma, embedded).items():
        if order <= 3:
            assert left == pytest.approx(right, abs=1e-13), name
        else:
            missed += abs(left - right) > 1e-3
    assert missed  # the embedded method must differ at order 4, or it would estimate nothing


def test_times_of_the_stages() -> None:
    # For an equation that names its time: nodes are row sums of alpha, and the coefficients of
    # df/dt row sums of Gamma (Hairer & Wanner IV.7).
    alpha, gamma, _, _ = tableau()
    np.testing.assert_allclose(alpha.sum(axis=1), stepping._NODE, atol=1e-13)
    np.testing.assert_allclose(gamma.sum(axis=1), stepping._TIME, atol=1e-13)


def test_stiffly_accurate() -> None:
    alpha, gamma, b, embedded = tableau()
    np.testing.assert_allclose(b, (alpha + gamma)[5], atol=1e-13)
    np.testing.assert_allclose(embedded, (alpha + gamma)[4], atol=1e-13)


def growth(z: complex) -> complex:
    """Ratio of one step of y' = z y, from the code itself, complex z as a real 2 x 2 system."""
    matrix = np.array([[z.real, -z.imag], [z.imag, z.real]])
    start = np.array([1.0, 0.0])
    new, _ = rosenbrock_step(
        lambda t, y: matrix @ y, Slopes(matrix @ start, matrix, np.zeros(2)), 0.0, start, 1.0
    )
    return complex(new[0], new[1])


def test_l_stable() -> None:
    # All poles at 1/gamma > 0, so |R| <= 1 on the imaginary axis means A-stable; R(inf) = 0
    # besides.
    for y in np.logspace(-2, 6, 161).tolist():
        assert abs(growth(1j * y)) <= 1.0 + 1e-12
    for z in (-1e4, -1e8, -1e8 + 1e8j):
        assert abs(growth(z)) < 30.0 / abs(z)


def test_growth_is_the_exponential_to_fourth_order() -> None:
    steps = np.array([0.2, 0.1, 0.05])
    errors = [abs(growth(complex(-h)) - np.exp(-h)) for h in steps.tolist()]
    assert np.polyfit(np.log(steps), np.log(errors), 1)[0] == pytest.approx(5.0, abs=ORDER)


# Kaps 1981: y1' = -(k + 2) y1 + k y2^2, y2' = y1 - y2 - y2^2 has y1 = y2^2, y2 = e^-t for any
# stiffness k. With t = s + s^2/2 it names its time: dy/ds = (1 + s) f(y).


class Kaps:
    def __init__(self, stiffness: float) -> None:
        self.stiffness = stiffness

    def rate(self, s: float, y: Array) -> Array:
        k = self.stiffness
        return (1.0 + s) * np.array([-(k + 2) * y[0] + k * y[1] ** 2, y[0] - y[1] - y[1] ** 2])

    def jacobian(self, s: float, y: Array) -> tuple[Array, Array]:
        k = self.stiffness
        slope = np.array([[-(k + 2), 2 * k * y[1]], [1.0, -1.0 - 2 * y[1]]])
        return (1.0 + s) * slope, self.rate(s, y) / (1.0 + s)


def kaps_exact(s: float) -> Array:
    t = s + 0.5 * s * s
    return np.array([np.exp(-2 * t), np.exp(-t)])


def march(problem: Kaps, count: int) -> Array:
    """Take `count` equal steps to s = 1."""
    y, step = np.ones(2), 1.0 / count
    for k in range(count):
        here = linear(problem.rate, problem.jacobian)(k * step, y)
        y, _ = rosenbrock_step(problem.rate, here, k * step, y, step)
    return y


def test_observed_order_on_a_stiff_problem_that_names_its_time() -> None:
    counts = np.array([32, 64, 128, 256])
    runs = [march(Kaps(STIFF), n) for n in counts.tolist()]
    errors = np.abs(np.array(runs) - kaps_exact(1.0))
    order = -np.polyfit(np.log(counts), np.log(errors[:, 1]), 1)[0]
    assert order == pytest.approx(4.0, abs=ORDER)
    # The fast variable follows the slow one; where h k passes through 1 its own order drops, as
    # that of every such method (Hairer & Wanner 1996, sec. IV.15), far below the error of the slow
    # one.
    assert np.all(errors[:, 0] < 2e-9)


def test_observed_order_on_a_smooth_problem() -> None:
    counts = np.array([20, 40, 80, 160])
    errors = []
    for count in counts.tolist():
        y, step, worst = np.ones(1), 2.0 / count, 0.0
        for k in range(count):
            t = k * step
            here = linear(smooth_rate, smooth_jacobian)(t, y)
            y, _ = rosenbrock_step(smooth_rate, here, t, y, step)
            worst = max(worst, abs(y[0] - np.exp(np.sin(t + step))))
        errors.append(worst)
    assert -np.polyfit(np.log(counts), np.log(errors), 1)[0] == pytest.approx(4.0, abs=ORDER)


def smooth_rate(t: float, y: Array) -> Array:
    # y = exp(sin t): solved in closed form, and names its time.
    return np.cos(t) * y


def smooth_jacobian(t: float, y: Array) -> tuple[Array, Array]:
    return np.array([[np.cos(t)]]), -np.sin(t) * y


def test_error_of_one_step_and_its_estimate() -> None:
    start = 0.3
    y = np.array([np.exp(np.sin(start))])
    steps = np.array([0.05, 0.025, 0.0125])
    errors, estimates = [], []
    for h in steps.tolist():
        here = linear(smooth_rate, smooth_jacobian)(start, y)
        new, estimate = rosenbrock_step(smooth_rate, here, start, y, h)
        errors.append(abs(new[0] - np.exp(np.sin(start + h))))
        estimates.append(abs(estimate[0]))
    fit = np.polyfit(np.log(steps), np.log(np.array([errors, estimates]).T), 1)[0]
    # One step of order 4 errs by h^5, of order 3 by h^4.
    assert fit[0] == pytest.approx(5.0, abs=2 * ORDER)
    assert fit[1] == pytest.approx(4.0, abs=2 * ORDER)


def solved(tolerance: float, outputs: tuple[float, ...] = (1.0,), **options: float) -> Trajectory:
    settings = {"first_step": 1e-3, "max_steps": 10_000} | options
    problem = Kaps(MILD)
    return integrate(
        *both(problem.rate, problem.jacobian),
        0.0,
        np.ones(2),
        outputs,
        tolerance,
        first_step=settings["first_step"],
        max_steps=int(settings["max_steps"]),
    )


def test_error_falls_with_the_tolerance() -> None:
    tolerances = 10.0 ** -np.arange(4.0, 12.0)
    errors, steps = [], []
    for tolerance in tolerances.tolist():
        run = solved(tolerance)
        assert run.outcome is Outcome.CONVERGED
        errors.append(np.max(np.abs(run.state[-1] - kaps_exact(1.0))))
        steps.append(len(run.time) - 1)
    assert np.all(np.array(errors) < tolerances)
    assert np.all(np.diff(np.log(errors)) < 0.0)
    # The estimate is of order h^4: four times smaller steps for 256 times smaller tolerance.
    fit = np.polyfit(np.log(tolerances[4:]), np.log(steps[4:]), 1)[0]
    assert fit == pytest.approx(-0.25, abs=0.02)


def test_against_a_general_integrator() -> None:
    # A driven reaction with rates over four decades, scipy's Radau on the same equations.
    def rate(t: float, y: Array) -> Array:
        drive = 1.0 + 0.5 * np.sin(3.0 * t)
        return np.array([-drive * y[0] * y[1], 1e4 * (y[0] * drive - y[1]) - y[1] ** 2])

    def jacobian(t: float, y: Array) -> tuple[Array, Array]:
        drive, change = 1.0 + 0.5 * np.sin(3.0 * t), 1.5 * np.cos(3.0 * t)
        slope = np.array([[-drive * y[1], -drive * y[0]], [1e4 * drive, -1e4 - 2 * y[1]]])
        return slope, np.array([-change * y[0] * y[1], 1e4 * y[0] * change])

    start, outputs = np.array([1.0, 0.0]), (0.5, 1.0, 3.0)
    run = integrate(
        *both(rate, jacobian), 0.0, start, outputs, 1e-9, first_step=1e-6, max_steps=100_000
    )
    assert run.outcome.ok
    reference = solve_ivp(
        rate,
        (0.0, 3.0),
        start,
        "Radau",
        outputs,
        rtol=1e-11,
        atol=1e-13,
        jac=lambda t, y: jacobian(t, y)[0],
    )
    found = run.state[np.isin(run.time, outputs)]
    np.testing.assert_allclose(found, reference.y.T, rtol=0, atol=3e-8)


def test_outputs_are_hit_exactly() -> None:
    outputs = (0.1, 0.1000001, 1 / 3, 0.7, 2.0 / 3.0 + 0.1, 1.0)
    told: list[float] = []
    problem = Kaps(MILD)
    run = integrate(
        *both(problem.rate, problem.jacobian),
        0.0,
        np.ones(2),
        outputs,
        1e-7,
        first_step=1.0,
        max_steps=1000,
        on_step=lambda time, state: told.append(time),
    )
    assert set(outputs) <= set(run.time.tolist())
    assert told == run.time[1:].tolist()
    assert np.all(np.diff(run.time) > 0.0)
    exact = np.array([kaps_exact(t) for t in run.time.tolist()])
    np.testing.assert_allclose(run.state, exact, rtol=0, atol=1e-6)
    assert run.evaluations == 6 * (len(run.time) - 1) + 5 * run.rejected


def test_outputs_in_the_past_are_passed_over() -> None:
    run = solved(1e-6, outputs=(-1.0, 0.0, 0.5, 0.5))
    assert run.time[-1] == 0.5
    assert run.outcome.ok
    none = solved(1e-6, outputs=())
    assert none.time.tolist() == [0.0]
    assert none.outcome.ok


def test_step_limit() -> None:
    full = solved(1e-8)
    needed = len(full.time) - 1 + full.rejected
    assert solved(1e-8, max_steps=needed).outcome is Outcome.CONVERGED
    short = solved(1e-8, max_steps=needed - 1)
    assert short.outcome is Outcome.STEP_LIMIT
    assert len(short.time) - 1 + short.rejected == needed - 1
    # What was done before is the same, to the bit.
    assert np.array_equal(short.state, full.state[: len(short.state)])


def broken(after: Callable[[float], float]) -> Trajectory:
    """Integrate y' = after(t), which goes wrong at t = 1."""
    return integrate(
        *both(lambda t, y: np.array([after(t)]), lambda t, y: (np.zeros((1, 1)), np.zeros(1))),
        0.0,
        np.zeros(1),
        (2.0,),
        1e-8,
        first_step=0.1,
        max_steps=10_000,
    )


def test_a_rate_that_is_no_number_ends_the_run() -> None:
    run = broken(lambda t: 1.0 if t < 1.0 else np.nan)
    assert run.outcome is Outcome.STEP_TOO_SMALL
    assert 0.9 < run.time[-1] <= 1.0
    assert np.all(np.isfinite(run.state))
    assert run.rejected > 5


def test_a_pole_is_never_stepped_over() -> None:
    # y' = y^2 from 1 is infinite at t = 1.
    run = integrate(
        *both(lambda t, y: y**2, lambda t, y: (np.diag(2.0 * y), np.zeros(1))),
        0.0,
        np.ones(1),
        (2.0,),
        1e-9,
        first_step=0.01,
        max_steps=300,
    )
    assert not run.outcome.ok
    assert 0.8 < run.time[-1] < 1.0


def test_a_jump_costs_steps_but_no_digits() -> None:
    run = broken(lambda t: 1.0 if t < 1.0 else 3.0)
    assert run.outcome.ok
    assert run.state[-1, 0] == pytest.approx(4.0, abs=1e-6)
    assert run.rejected > 0


def test_steps_keep_to_a_bound_that_moves_and_to_a_tolerance_that_goes_with_the_state() -> None:
    def decay(tolerance: float | Callable[[float, np.ndarray], np.ndarray]) -> Trajectory:
        return integrate(
            *both(lambda t, y: -y, lambda t, y: (-np.eye(1), np.zeros(1))),
            0.0,
            np.ones(1),
            (1.0, 8.0),
            tolerance,
            first_step=1e-3,
            max_steps=1000,
            longest_step=lambda t: 0.02 if t < 1.0 else math.inf,
        )

    held, eased = decay(1e-9), decay(lambda t, y: 1e-9 / np.maximum(y, 1e-3))
    steps = np.diff(held.time)
    assert steps[held.time[:-1] < 1.0].max() <= 0.02 * (1.0 + ROUND_OFF)
    assert steps[held.time[:-1] >= 1.0].max() > 0.04
    assert len(eased.time) < len(held.time)
    np.testing.assert_allclose(eased.state[-1], math.exp(-8.0), atol=1e-6)


def test_nothing_to_do_takes_the_longest_steps() -> None:
    run = integrate(
        *both(lambda t, y: np.zeros(1), lambda t, y: (np.zeros((1, 1)), np.zeros(1))),
        0.0,
        np.ones(1),
        (1e6,),
        1e-8,
        first_step=1e-3,
        max_steps=100,
    )
    # Five times longer each step: ln(1e9)/ln 5 = 13, and the last one stretched.
    assert len(run.time) - 1 <= 15
    assert run.state[-1, 0] == pytest.approx(1.0, abs=ROUND_OFF)
