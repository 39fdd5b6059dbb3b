"""What lines send to the lines below: limits in closed form, and the memory of a run."""

from __future__ import annotations

import math

import numpy as np
import pytest

from levelnet.background.conditions import Conditions
from levelnet.escape.blue_side import BlueSide, Past, log_red_side
from levelnet.escape.treatment import SobolevFeedback
from tests.small_runs import RECOMBINING, small_equations
from tests.unit.test_treatments import EV_K, KEPT, LINES, boltzmann

EXPONENT = np.array([40.0, 12.0, 1.5])


def test_a_thick_line_sends_its_own_source_function() -> None:
    # Bose-Einstein: f = 1/(g_u x_l/(g_l x_u) - 1), with x_u = b x_l (g_u/g_l) e^-x.
    b = np.array([0.7, 1.3, 1.1])
    own = 1.0 / (np.exp(EXPONENT) / b - 1.0)
    expected = np.log(own * np.expm1(EXPONENT))
    found = log_red_side(np.log(b), EXPONENT, np.full(3, 1e4), np.full(3, 0.3))
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_a_thin_line_lets_the_field_pass_and_equilibrium_stays() -> None:
    blue = np.array([-0.2, 0.1, 3.0])
    found = log_red_side(np.array([0.5, -0.5, 0.1]), EXPONENT, np.zeros(3), blue)
    np.testing.assert_allclose(found, blue, rtol=1e-14)
    nothing = np.zeros(3)
    for depth in (0.0, 0.7, 1e8):
        still = log_red_side(nothing, EXPONENT, np.full(3, depth), nothing)
        np.testing.assert_allclose(still, 0.0, atol=1e-14)


def test_past_gives_back_cubics_later_and_redshifted() -> None:
    energy = np.array([10.2, 12.09, 12.75])
    past = Past.of(energy)
    assert past.delay[0] == pytest.approx(math.log(12.09 / 10.2), rel=1e-14)
    assert past.longest_step == pytest.approx(math.log(12.75 / 12.09), rel=1e-14)
    unseen = past.blue_side(-7.0, -1.5)
    assert not unseen.log_distortion.any()
    assert unseen.hubble_slope == -1.5

    def red(s: float) -> np.ndarray:
        return np.array([0.0, 1.0 + s + 0.3 * s**3, 2.0 - s**2])

    for s in (-7.3, -7.25, -7.22, -7.15, -7.11, -7.0):
        past.remember(s, red(s))
    found = past.blue_side(-6.98, -1.5)
    for line in (0, 1):
        then = -6.98 - float(past.delay[line])
        step = 1e-4
        slope = (red(then + step) - red(then - step))[line + 1] / (2 * step)
        assert found.log_distortion[line] == pytest.approx(red(then)[line + 1], rel=1e-12)
        assert found.slope[line] == pytest.approx(slope, rel=1e-7)
    # The highest line sees the blackbody, and so does every line before anything was sent.
    assert found.log_distortion[2] == found.slope[2] == 0.0
    assert past.blue_side(-7.29, -1.5).log_distortion[0] == 0.0


def test_net_flow_is_that_of_the_field_on_the_blue_side() -> None:
    # A P [(1 + f) x_u - (g_u/g_l) f x_l], f = u / (e^x - 1), from scipy's constants.
    blue = BlueSide(np.array([0.4, -0.3, 0.0]), np.zeros(3), -1.5)
    coupling = SobolevFeedback().couple(LINES, KEPT, RECOMBINING, blue)
    plain = SobolevFeedback().couple(LINES, KEPT, RECOMBINING)
    x = LINES.energy_ev / (EV_K * RECOMBINING.radiation_temperature_k)
    f = np.exp(blue.log_distortion) / np.expm1(x)
    rate = LINES.einstein_a_per_s * plain.validity["escape_probability"]
    populations = np.array([1e-12, 2e-12, 3e-13, 1e-13])
    flow = (coupling.loss @ populations - coupling.source)[LINES.upper]
    ground = RECOMBINING.ground_fraction
    expected = rate * ((1.0 + f) * populations[LINES.upper] - LINES.weight_ratio * f * ground)
    np.testing.assert_allclose(flow, expected, rtol=1e-8)
    excess = coupling.source - coupling.loss @ boltzmann(RECOMBINING)
    np.testing.assert_allclose(coupling.excess_source, excess, rtol=1e-8, atol=1e-25)
    # A blackbody on the blue side is Sobolev's treatment to the bit of rounding.
    dark = BlueSide(np.zeros(3), np.zeros(3), -1.5)
    same = SobolevFeedback().couple(LINES, KEPT, RECOMBINING, dark)
    np.testing.assert_allclose(same.loss, plain.loss, rtol=1e-14)
    assert not same.excess_source.any()


@pytest.mark.parametrize("cold", [False, True])
def test_exact_slopes(cold: bool) -> None:
    here = RECOMBINING._replace(hydrogen_density_cm3=1e-6) if cold else RECOMBINING
    blue = BlueSide(np.array([0.4, 2.0, 0.0]), np.zeros(3), -1.5)

    def at(c: Conditions) -> np.ndarray:
        return SobolevFeedback().couple(LINES, KEPT, c, blue).excess_source

    step = 1e-5
    up, down = (
        here._replace(ground_fraction=here.ground_fraction * math.exp(h)) for h in (step, -step)
    )
    found = SobolevFeedback().couple(LINES, KEPT, here, blue)
    difference = (at(up) - at(down)) / (2 * step)
    assert found.excess_by_ground is not None
    noise = 1e-9 * np.abs(found.excess_source).max()
    np.testing.assert_allclose(found.excess_by_ground, difference, rtol=1e-7, atol=noise)


def test_jacobian_with_a_past_equals_differences() -> None:
    equations = small_equations(SobolevFeedback(), lyman=3)
    past = Past.of(equations.lines.energy_ev)
    for s in np.linspace(-7.4, -6.9, 60).tolist():
        past.remember(s, np.array([0.0, 0.2 * math.sin(9.0 * s), 0.1 * s + 0.7]))
    object.__setattr__(equations, "past", past)
    s, state = -math.log(1150.0), np.array([-1.1, -1e-6])
    matrix, drift = equations.jacobian(s, state)

    def slope(make: object, step: float) -> np.ndarray:
        values = [make(h) for h in (-2 * step, -step, step, 2 * step)]  # type: ignore[operator]
        return np.asarray(values[0] - 8 * values[1] + 8 * values[2] - values[3]) / (12 * step)

    for k in range(2):
        unit = np.eye(2)[k]
        difference = slope(lambda h, unit=unit: equations.rate(s, state + h * unit), 1e-4)
        np.testing.assert_allclose(matrix[:, k], difference, rtol=1e-6, atol=1e-8)
    difference = slope(lambda h: equations.rate(s + h, state), 2e-4)
    np.testing.assert_allclose(drift, difference, rtol=1e-5, atol=1e-8)
