"""Jacobian and drift of hydrogen with helium, with each treatment of the He I lines."""

from __future__ import annotations

import math

import numpy as np
import pytest

from levelnet.escape.helium_continuum import HeliumContinuum
from levelnet.escape.helium_treatment import HeliumSobolev, HeliumSobolevFeedback, HeliumTreatment
from levelnet.history.equations import SlowEquations
from levelnet.history.helium import HeliumEquations
from tests.helium_runs import helium_equations, saha_state

REMEMBERED_FROM, NOW = 2100.0, 1950.0


def after_some_steps(
    treatment: HeliumTreatment, feedback: bool
) -> tuple[SlowEquations, np.ndarray]:
    """Equations that remember an invented course, He I lagging behind Saha equilibrium."""
    equations = helium_equations(treatment, feedback)
    for s in np.linspace(-math.log1p(REMEMBERED_FROM), -math.log1p(NOW), 40).tolist():
        state = saha_state(equations, math.expm1(-s)) + np.array([0.01, -1e-6, 4.5, 0.0])
        equations.remember(s, state)
    return equations, state


@pytest.mark.parametrize(
    ("treatment", "feedback"),
    [
        (HeliumSobolev(), False),
        (HeliumSobolevFeedback(), True),
        (HeliumContinuum("partial"), False),
        (HeliumContinuum("partial", diffusion=True), True),
        (HeliumContinuum("complete"), True),
        (HeliumContinuum("doppler"), True),
    ],
)
def test_jacobian_and_drift_are_exact(treatment: HeliumTreatment, feedback: bool) -> None:
    equations, state = after_some_steps(treatment, feedback)
    s = -math.log1p(NOW)
    matrix, drift = equations.jacobian(s, state)
    step, differences = 1e-5, np.empty((4, 4))
    for k in range(4):
        shift = step * np.eye(4)[k]
        high, low = equations.rate(s, state + shift), equations.rate(s, state - shift)
        differences[:, k] = (high - low) / (2.0 * step)
    # Of the row of b, pulled to Saha equilibrium at 1e9, differences keep few digits.
    largest = np.abs(differences[:3]).max(axis=1, keepdims=True)
    np.testing.assert_allclose(matrix[:3] / largest, differences[:3] / largest, atol=1e-7)
    short = 1e-6
    found = (equations.rate(s + short, state) - equations.rate(s - short, state)) / (2 * short)
    np.testing.assert_allclose(drift[:3], found[:3], rtol=1e-6)
    if treatment.absorbs:
        # More neutral hydrogen, faster recombination of He I: u up, a held more.
        assert matrix[2, 0] > 0.1


@pytest.mark.parametrize("feedback", [False, True])
def test_everything_stands_still_in_equilibrium(feedback: bool) -> None:
    equations = helium_equations(HeliumContinuum("partial"), feedback)
    state = saha_state(equations, 2000.0)
    s = -math.log1p(2000.0)
    matrix, _ = equations.jacobian(s, state)
    # Moved off by 1e-9 in a, it runs back; in equilibrium what is left is rounding of ln ratios.
    assert abs(equations.rate(s, state)[2]) < 1e-9 * abs(matrix[2, 2])


def test_figures_of_the_lines_hold_both_sides_of_the_field() -> None:
    equations, state = after_some_steps(HeliumContinuum("partial"), True)
    assert equations.helium is not None
    around = equations.helium_around(-math.log1p(NOW), state)
    figures = equations.helium.line_figures(around, state[2:])
    assert set(figures) == {
        "optical_depth",
        "escape_probability",
        "continuum_depth",
        "damping",
        "incoherent_fraction",
        "log_blue_side",
        "log_red_side",
    }
    assert figures["log_red_side"][3] > 1.0  # He I lags, 584 A is brighter than the blackbody
    # Hydrogen takes most of it on the way to 591 A.
    assert 0.0 < figures["log_blue_side"][2] < figures["log_red_side"][3]


def test_a_rare_ion_may_be_less_exact_within_bounds() -> None:
    half, millionth, rarer, gone = 0.0, math.log(1e6), math.log(1e10), 400.0
    slack = [HeliumEquations.slack(np.array([a, -a])) for a in (half, millionth, rarer, gone)]
    np.testing.assert_allclose(slack, np.outer([1.0, 1.0, 100.0, 1000.0], [1.0, 1.0]), rtol=1e-12)


def test_steps_are_short_only_where_one_line_lights_another() -> None:
    fed = helium_equations(HeliumSobolevFeedback(), True)
    assert fed.helium is not None and fed.helium.past is not None
    assert fed.longest_step(-math.log1p(2000.0)) == fed.helium.past.longest_step
    # Helium is held below T_r = 1400 K, z = 513.
    assert fed.longest_step(-math.log1p(500.0)) == math.inf
    assert helium_equations(HeliumSobolev(), False).longest_step(-7.0) == math.inf


def test_nothing_is_remembered_once_helium_is_held() -> None:
    # The tables of He I end at 1400 K, z = 513; histories go on.
    equations = helium_equations(HeliumSobolevFeedback(), True)
    assert equations.helium is not None
    past = equations.helium.past
    assert past is not None
    state = saha_state(equations, 1000.0)
    for redshift in (700.0, 500.0, 20.0):
        equations.remember(-math.log1p(redshift), state)
    assert past.red.time == [-math.log1p(700.0)]
