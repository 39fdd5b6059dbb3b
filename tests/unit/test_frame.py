"""Variables measured from Saha equilibrium: nothing but the length of steps may hang on it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from levelnet.history import integrate
from levelnet.history.frame import Frame, frame_of
from tests.helium_runs import saha_state
from tests.small_helium import helium_equations, helium_history, helium_setup

START = -math.log1p(6000.0)


def test_the_origin_follows_saha_equilibrium() -> None:
    equations, _ = helium_equations()
    frame = frame_of(equations)
    early, late = (-math.log1p(z) for z in (3200.0, 3000.0))
    moved = frame.origin(late) - frame.origin(early)
    # Saha equilibrium at T_r; n_e/n_H falls as He III recombines, T_m is T_r.
    states = np.array([saha_state(equations, z) for z in (3200.0, 3000.0)])
    electrons = np.log([equations.electron_fraction(one) for one in states])
    expected = np.diff(states, axis=0)[0] + (electrons[1] - electrons[0])
    np.testing.assert_allclose(moved[[0, 2, 3]], expected[[0, 2, 3]], rtol=1e-6)
    assert moved[1] == 0.0


def test_slope_and_curvature_are_derivatives_before_and_after_it_is_left() -> None:
    frame = frame_of(helium_equations()[0])
    step = 1e-5
    for time in (-8.5, -7.9, -7.0, -6.0):
        rise = (frame.origin(time + step) - frame.origin(time - step)) / (2.0 * step)
        bend = (frame.slope(time + step) - frame.slope(time - step)) / (2.0 * step)
        np.testing.assert_allclose(frame.slope(time), rise, rtol=1e-8)
        np.testing.assert_allclose(frame.curvature(time), bend, rtol=1e-8)


def test_steps_end_where_the_origin_is_left() -> None:
    equations, _ = helium_equations()
    frame = frame_of(equations)
    breaks = frame.breaks(START, 0.0)
    left_k = equations.cosmology.cmb_temperature_k * np.exp(-np.array(breaks))
    np.testing.assert_allclose(left_k, [7500.0, 5000.0, 1500.0])
    assert frame.breaks(START, breaks[0]) == []
    for one in breaks:
        before, after = frame.origin(one - 1e-9), frame.origin(one + 1e-9)
        np.testing.assert_allclose(after - before, 2e-9 * frame.slope(one), atol=1e-12)


def test_the_linearized_rate_in_the_frame_is_that_of_the_rate() -> None:
    equations, _ = helium_equations()
    frame = frame_of(equations)
    state = saha_state(equations, 6000.0) + np.array([0.01, -1e-6, 0.3, 0.02]) - frame.origin(START)
    rate = frame.rate(equations.rate)
    found = frame.linearize(equations.slopes)(START, state)
    np.testing.assert_allclose(found.rate, rate(START, state), rtol=1e-12)
    short = 1e-6
    drift = (rate(START + short, state) - rate(START - short, state)) / (2.0 * short)
    np.testing.assert_allclose(found.drift[[0, 2, 3]], drift[[0, 2, 3]], rtol=1e-6)


def test_hydrogen_alone_is_measured_from_zero() -> None:
    equations = replace(helium_equations()[0], helium=None)
    frame = frame_of(equations)
    assert not frame.origin(-7.0).any()
    assert not frame.slope(-7.0).any()
    assert frame.breaks(-9.0, 0.0) == []


def test_a_history_is_the_same_from_zero_and_takes_more_steps(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    framed = helium_history()

    def nothing(equations: object) -> Frame:
        return Frame(np.zeros(4), np.zeros(4))

    monkeypatch.setattr(integrate, "frame_of", nothing)
    plain = integrate.integrate_history(helium_setup(), lambda *_: None)
    fraction = [
        plain.equations.electron_fraction(plain.trajectory.state[k])
        for k in (
            int(np.argmin(np.abs(plain.trajectory.time + math.log1p(z))))
            for z in framed.redshift[2:].tolist()
        )
    ]
    np.testing.assert_allclose(framed.free_electron_fraction[2:], fraction, rtol=3e-8)
    assert len(plain.trajectory.time) > 1.15 * framed.diagnostics.steps


@pytest.mark.parametrize("gap", [0.0, 1e-14, 1e-12, 1e-8, 1e-5])
def test_outputs_beside_a_bend_leave_no_sliver(gap: float) -> None:
    # A step of 1e-14 had spoilt what lines remember, and the run with feedback ended early.
    setup = helium_setup(3, lines={"helium": "sobolev_feedback"})
    bend = frame_of(helium_equations()[0]).breaks(START, 0.0)[1]
    beside = math.expm1(-bend - gap)
    grid = replace(setup.grid, redshifts=(2500.0, 2000.0, beside, 1700.0, 500.0))
    found = integrate.integrate_history(replace(setup, grid=grid), lambda *_: None)
    assert found.trajectory.outcome.ok
    assert len(found.trajectory.time) < 900
    assert np.min(np.diff(found.trajectory.time)) > 5e-6
