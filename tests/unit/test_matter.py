"""Compton heating and the Saha equilibrium against scipy's constants and exact arithmetic."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants as si

from levelnet.background import Cosmology, compton_rate_per_s, saha_log_odds
from levelnet.errors import InputError

ENERGY_EV = 13.5983
# Constants of the same CODATA edition in SI: they agree to about 1e-10.
CODATA = 1e-9


def test_compton_rate_from_constants_of_scipy() -> None:
    thomson = si.value("Thomson cross section")
    radiation = 4.0 * si.Stefan_Boltzmann / si.c
    temperature, electrons, helium = 2730.0, 0.15, 0.08
    expected = 8.0 * thomson * radiation * temperature**4 / (3.0 * si.m_e * si.c)
    expected *= electrons / (1.0 + helium + electrons)
    assert compton_rate_per_s(temperature, electrons, helium) == pytest.approx(expected, rel=CODATA)


def test_compton_rate_broadcasts_and_vanishes_without_electrons() -> None:
    rate = compton_rate_per_s(np.array([[100.0], [200.0]]), np.array([0.0, 1e-4, 1.0]), 0.08)
    assert rate.shape == (2, 3)
    assert np.all(rate[:, 0] == 0.0)
    assert rate[1] == pytest.approx(16.0 * rate[0], rel=1e-14)


def test_matter_and_radiation_part_near_redshift_150() -> None:
    # Common practice: with the residual ionization of some 2e-4 to 4e-4, Compton scattering holds
    # the matter at the temperature of the radiation until z of about 150.
    cosmology = Cosmology(68.0, 0.0224, 0.142)

    def ratio(redshift: float) -> float:
        rate = compton_rate_per_s(
            cosmology.radiation_temperature_k(redshift), 3e-4, cosmology.helium_ratio()
        )
        return float(rate) / cosmology.hubble_rate_per_s(redshift)

    assert ratio(300.0) > 3.0
    assert 0.5 < ratio(140.0) < 2.0
    assert ratio(50.0) < 0.2


def saha_by_mpmath(density: float, temperature: float, energy: float) -> tuple[float, float, float]:
    """u, x_HII and x_HI from SI constants of scipy, 60 digits, by the textbook quadratic."""
    with mpmath.workdps(60):
        reduced = mpmath.mpf(si.m_e) * si.m_p / (mpmath.mpf(si.m_e) + si.m_p)
        kt = mpmath.mpf(si.k) * temperature
        states = (2 * mpmath.pi * reduced * kt / mpmath.mpf(si.h) ** 2) ** mpmath.mpf(1.5)
        s = states * mpmath.exp(-mpmath.mpf(energy) * si.e / kt) / (mpmath.mpf(density) * 10**6)
        # x^2 + S x - S = 0; the small root of the pair without cancellation is 60 digits' business.
        ionized = (mpmath.sqrt(s * s + 4 * s) - s) / 2
        neutral = ionized**2 / s
        return float(mpmath.log(ionized / neutral)), float(ionized), float(neutral)


@pytest.mark.parametrize(
    ("density", "temperature"),
    [(1000.0, 4900.0), (500.0, 3734.0), (250.0, 3000.0), (2e-7, 2.7255), (1e5, 2e4), (1e-6, 1e6)],
)
def test_saha_is_precise_at_both_ends(density: float, temperature: float) -> None:
    expected, ionized, neutral = saha_by_mpmath(density, temperature, ENERGY_EV)
    odds = float(saha_log_odds(density, temperature, ENERGY_EV))
    # The exponent I/kT carries the constants' last digits, and u is their sum.
    assert odds == pytest.approx(expected, rel=1e-11, abs=1e-8)
    if expected > -700.0:  # else it leaves the doubles
        assert 1.0 / (1.0 + math.exp(-odds)) == pytest.approx(ionized, rel=1e-7)
    assert 1.0 / (1.0 + math.exp(odds)) == pytest.approx(neutral, rel=1e-7)


def test_hydrogen_is_half_ionized_near_3700_k() -> None:
    # Common practice: Saha equilibrium halves hydrogen near 3700 K at the cosmic density, far below
    # I/k = 158,000 K, for there are 1e9 photons per nucleus.
    cosmology = Cosmology(68.0, 0.0224, 0.142)
    redshift = np.linspace(1200.0, 1600.0, 4001)
    odds = saha_log_odds(
        cosmology.hydrogen_density_cm3(redshift),
        cosmology.radiation_temperature_k(redshift),
        ENERGY_EV,
    )
    half = redshift[np.argmin(np.abs(odds))]
    assert cosmology.radiation_temperature_k(float(half)) == pytest.approx(3730.0, abs=30.0)


@given(st.floats(1e-12, 1e12), st.floats(1.0, 1e7), st.floats(0.1, 60.0))
def test_saha_obeys_the_law_of_mass_action(
    density: float, temperature: float, energy: float
) -> None:
    odds = float(saha_log_odds(density, temperature, energy))
    # ln of x^2/(1 - x) = u + ln x_HII, with ln x_HII = -ln(1 + e^-u); linear in ln n_H, slope -1.
    thinner = float(saha_log_odds(density / 10.0, temperature, energy))
    action = odds - np.logaddexp(0.0, -odds)
    assert thinner - np.logaddexp(0.0, -thinner) - action == pytest.approx(
        math.log(10.0), abs=1e-13 * max(100.0, abs(action))
    )
    assert thinner > odds
    assert float(saha_log_odds(density, 1.01 * temperature, energy)) > odds


def test_saha_stays_finite_in_a_vacuum() -> None:
    odds = saha_log_odds(np.array([1e-300, 1e-200]), 1e8, ENERGY_EV)
    assert np.all(np.isfinite(odds))
    assert odds[0] - odds[1] == pytest.approx(100.0 * math.log(10.0), rel=1e-12)


@pytest.mark.parametrize(
    ("values", "name"),
    [
        ((0.0, 3000.0, 13.6), "hydrogen_density_cm3 = 0"),
        ((np.array([1.0, -1.0]), 3000.0, 13.6), "hydrogen_density_cm3 = -1"),
        ((1.0, 0.0, 13.6), "temperature_k = 0"),
        ((1.0, math.nan, 13.6), "temperature_k = nan"),
        ((1.0, 3000.0, math.inf), "ionization_energy_ev = inf"),
    ],
)
def test_saha_refuses_what_is_not_positive(values: tuple[float, float, float], name: str) -> None:
    with pytest.raises(InputError, match=f"{name}: must be positive and finite"):
        saha_log_odds(*values)
