"""The one routine for inverse rates, and blackbody occupation numbers."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants as codata

from levelnet.atomic.bound_free import photoionization_rate, recombination_coefficient
from levelnet.atomic.detailed_balance import (
    absorption_from_spontaneous,
    log_saha_factor,
    log_upward_ratio,
    photoionization_from_recombination,
    thermal_volume_cm3,
    upward_rate,
)
from levelnet.atomic.levels import ionization_scale_ev
from levelnet.atomic.radiation import planck_occupation
from levelnet.errors import InputError
from tests.tolerances import ROUND_OFF

KELVIN_PER_EV = codata.e / codata.k
temperatures = st.floats(0.02, 1e5)


def test_einsteins_derivation() -> None:
    # Einstein 1917, Phys. Z. 18, 121: downward A (1 + f) and upward A (g_u/g_l) f balance in a
    # blackbody.
    for energy, kelvin in ((10.2, 3000.0), (1e-4, 3000.0), (0.1, 30.0)):
        occupation = planck_occupation(energy, kelvin)
        upward = upward_rate(7.0 * (1 + occupation), 6.0, 2.0, energy, kelvin)
        expected = absorption_from_spontaneous(21.0, occupation)
        # The exponent itself is rounded: E/kT units in the last place.
        rounding = ROUND_OFF * max(1.0, energy * KELVIN_PER_EV / kelvin)
        assert upward == pytest.approx(expected, rel=rounding)


@given(temperatures, st.floats(1e-6, 13.6), st.floats(2.0, 2000.0))
def test_logarithm_and_rate_agree(kelvin: float, energy: float, weight: float) -> None:
    log_ratio = log_upward_ratio(weight, 2.0, energy, kelvin)
    expected = np.log(weight / 2) - energy * KELVIN_PER_EV / kelvin
    assert log_ratio == pytest.approx(expected, rel=1e-12, abs=1e-12)
    if log_ratio > -600:
        rate = upward_rate(3.0, weight, 2.0, energy, kelvin)
        assert np.log(rate / 3.0) == pytest.approx(log_ratio, rel=1e-12, abs=1e-12)


def test_thermal_volume() -> None:
    # (h^2 / 2 pi mu k T)^(3/2) with the constants of scipy, at kT = 1 eV.
    mass = codata.m_e / (1 + codata.physical_constants["electron-proton mass ratio"][0])
    expected = (codata.h**2 / (2 * np.pi * mass * codata.e)) ** 1.5 * 1e6
    assert thermal_volume_cm3(KELVIN_PER_EV) == pytest.approx(expected, rel=1e-11)
    assert thermal_volume_cm3([1.0, 4.0])[0] == pytest.approx(
        8 * thermal_volume_cm3(4.0), rel=ROUND_OFF
    )


def test_saha_equation() -> None:
    # Saha 1920, Phil. Mag. 40, 472, in mpmath: finite where the factor itself is not a double.
    for kelvin in (0.02, 2.7, 30.0, 3000.0, 1e5):
        computed = log_saha_factor(2.0, 13.6, kelvin)
        volume = mpmath.log(mpmath.mpf(float(thermal_volume_cm3(kelvin))))
        expected = volume + mpmath.mpf(13.6) * KELVIN_PER_EV / kelvin
        assert computed == pytest.approx(float(expected), rel=1e-12)
    # 3 : 1 for the weights of 2p and 2s.
    ratio = log_saha_factor(6.0, 3.4, 30.0) - log_saha_factor(2.0, 3.4, 30.0)
    assert ratio == pytest.approx(np.log(3.0), abs=1e-12)


@given(temperatures, st.integers(1, 60), st.data())
def test_milne_relation(kelvin: float, n: int, data: st.DataObject) -> None:
    l = data.draw(st.integers(0, n - 1))
    binding, weight = ionization_scale_ev() / n**2, 2.0 * (2 * l + 1)
    alpha = recombination_coefficient(n, l, kelvin, kelvin)
    beta = photoionization_rate(n, l, kelvin)
    log_factor = log_saha_factor(weight, binding, kelvin)
    if np.log(alpha) - log_factor > -650:
        rounding = ROUND_OFF * max(10.0, abs(log_factor))
        assert np.log(beta) == pytest.approx(np.log(alpha) - log_factor, abs=rounding)
    else:
        assert beta < 1e-280
    assert beta == photoionization_from_recombination(alpha, weight, binding, kelvin)


def test_cold_rates_underflow_to_zero() -> None:
    assert photoionization_rate(1, 0, 0.02) == 0.0
    assert upward_rate(1e8, 2.0, 2.0, 10.2, 2.7) == 0.0


def test_occupation_numbers_against_mpmath() -> None:
    for energy, kelvin in ((1e-9, 3000.0), (0.3, 3000.0), (10.2, 3000.0), (13.6, 250.0)):
        x = mpmath.mpf(energy) * KELVIN_PER_EV / kelvin
        expected = float(1 / mpmath.expm1(x))
        rounding = ROUND_OFF * max(10.0, float(x))
        assert planck_occupation(energy, kelvin) == pytest.approx(expected, rel=rounding)


def test_occupation_limits() -> None:
    assert planck_occupation(10.2, 0.0) == 0.0
    assert planck_occupation(10.2, 1.0) == 0.0
    x = 1e-12
    assert planck_occupation(x * 3000.0 / KELVIN_PER_EV, 3000.0) == pytest.approx(1 / x, rel=1e-9)
    assert planck_occupation([1.0, 2.0], [[100.0], [200.0]]).shape == (2, 2)


def test_bad_input() -> None:
    with pytest.raises(InputError, match=r"energy_ev = 0: .* above 0 eV"):
        planck_occupation(0.0, 3000.0)
    with pytest.raises(InputError, match="temperature_k = -3: must be 0 K or above"):
        planck_occupation(1.0, -3.0)
    for kelvin in (0.0, -2.0, np.nan, np.inf):
        with pytest.raises(InputError, match="must be above 0 K and finite"):
            thermal_volume_cm3(kelvin)
        with pytest.raises(InputError, match="must be above 0 K and finite"):
            upward_rate(1.0, 1.0, 1.0, 1.0, kelvin)
