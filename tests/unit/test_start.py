"""The hand-over from Saha equilibrium against a direct integration started much higher."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet.errors import InputError
from levelnet.history.start import equilibrium_state, find_handover
from tests.small_runs import COSMOLOGY, small_equations


def test_lag_against_a_direct_integration() -> None:
    # scipy's Radau from z = 2600, where the lag is below 1e-13, in plain Saha equilibrium.
    equations = small_equations()
    start = -math.log1p(2600.0)
    at = [-math.log1p(z) for z in (1900.0, 1800.0, 1700.0)]
    state, _ = equilibrium_state(equations, start)
    found = solve_ivp(
        equations.rate,
        (start, at[-1]),
        state,
        method="Radau",
        t_eval=at,
        jac=lambda s, y: equations.jacobian(s, y)[0],
        rtol=1e-12,
        atol=1e-13,
        first_step=1e-6,
    )
    for s, integrated in zip(at, found.y.T, strict=True):
        state, lag = equilibrium_state(equations, s)
        # What is left is of second order: a few per cent of the lag at z = 1700.
        assert abs(integrated[0] - state[0]) < 0.05 * abs(lag) + 1e-11
        assert abs(integrated[1] - state[1]) < 0.05 * abs(state[1]) + 1e-11
        # Recombination lags: more ions than in equilibrium, matter colder than the radiation.
        assert lag > 0.0
        assert integrated[1] < 0.0


def test_without_the_lag_the_start_would_be_wrong() -> None:
    equations = small_equations()
    assert equilibrium_state(equations, -math.log1p(1700.0))[1] > 1e-6


@pytest.mark.parametrize("tolerance", [1e-9, 1e-7, 1e-5])
def test_handover_is_the_lowest_redshift_that_does(tolerance: float) -> None:
    equations = small_equations()
    handover = find_handover(equations, tolerance)
    assert handover.redshift % 10.0 == 0.0
    assert 1500.0 < handover.redshift < 2500.0
    assert handover.departure <= tolerance
    lower = equilibrium_state(equations, -math.log1p(handover.redshift - 10.0))[1]
    assert abs(lower) > tolerance
    # The departure is that of the neutral fraction: u and ln x_HI differ by x_HII -> 1 up there.
    here = equilibrium_state(equations, -math.log1p(handover.redshift))[1]
    assert handover.departure == abs(here)


def test_a_tolerance_that_is_always_met_gives_the_lowest_redshift_looked_at() -> None:
    # 1100 K, whatever the temperature today.
    found = find_handover(small_equations(), 1e100).redshift
    assert found == pytest.approx(1100.0 / COSMOLOGY.cmb_temperature_k - 1.0)


def test_open_lines_follow_saha_longer_than_closed() -> None:
    redshift = [
        find_handover(small_equations(lines), 1e-7).redshift
        for lines in ("open", "sobolev", "closed")
    ]
    assert redshift == sorted(redshift)
    assert redshift[0] < redshift[-1]


def test_nothing_open_is_an_error() -> None:
    equations = small_equations("closed", rate_per_s=0.0)
    with pytest.raises(InputError, match="no channel to the ground state"):
        find_handover(equations, 1e-7)


def test_hardly_anything_open_is_an_error_too() -> None:
    equations = small_equations("closed", rate_per_s=1e-30)
    with pytest.raises(InputError, match="no channel to the ground state"):
        find_handover(equations, 1e-7)


def test_equilibrium_state_is_a_pair_of_numbers() -> None:
    state, lag = equilibrium_state(small_equations(), -math.log1p(2000.0))
    assert state.shape == (2,)
    assert np.all(np.isfinite(state))
    assert isinstance(lag, float)
