"""The full network with changed constants of nature."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy import constants

from levelnet import solve
from levelnet.atomic.physics import UNCHANGED, Physics, scales
from levelnet.errors import RangeError
from levelnet.history.atom import build_ladder
from levelnet.history.result import History
from levelnet.network.scaled import ScaledReduction, with_scales
from levelnet.network.tabulation import live_reduction, tabulate
from tests.small_runs import small_setup
from tests.tolerances import ROUND_OFF


def test_nothing_changed_is_the_same_object() -> None:
    live = live_reduction(build_ladder(small_setup(4)))
    assert with_scales(live, UNCHANGED) is live


def test_range_of_a_scaled_table_is_refused_in_one_line() -> None:
    table = tabulate(build_ladder(small_setup(3)), 1000.0, 3000.0, 1e-6)
    scaled = ScaledReduction(table, scales(Physics(0.1, 0.0)))
    scaled.rates(3500.0, 3500.0)
    with pytest.raises(RangeError, match=r"outside the tabulated 1000 to 3000 K .*over 1.21"):
        scaled.rates(1100.0, 1100.0)


def early_history(**physics: float) -> History:
    return solve(
        small_setup(
            6,
            grid={"redshift_start": 3000.0, "redshift_end": 1500.0, "n_redshifts": 12},
            physics=physics,
        )
    )


CHANGES = pytest.mark.parametrize("change", [(0.0, 0.0), (0.05, 0.0), (0.0, 0.1), (-0.04, 0.06)])


@CHANGES
def test_equilibrium_holds_with_changed_constants(change: tuple[float, float]) -> None:
    # Saha-Boltzmann above the hand-over: every departure vanishes, which takes populations,
    # thermal volume, energies and rates to have moved together. T_m is behind T_r by H/Gamma, under
    # 6e-7 at z = 3000, and departures are relative to T_m: times I/kT = 20.
    history = early_history(fine_structure_change=change[0], electron_mass_change=change[1])
    assert np.abs(history.log_departures("H I")[0]).max() < 1.2e-5
    energy = history.levels("H I").energy_ev
    plain = build_ladder(small_setup(6)).levels.energy_ev
    factor = scales(history.setup.physics).energy
    assert energy == pytest.approx(plain * factor, rel=ROUND_OFF)


@CHANGES
def test_neutral_fraction_is_that_of_the_saha_equation(change: tuple[float, float]) -> None:
    # Saha 1920, Phil. Mag. 40, 472, by hand with scipy's constants: binding energy times alpha^2 m,
    # electron of the changed mass.
    history = early_history(fine_structure_change=change[0], electron_mass_change=change[1])
    a, electron = 1.0 + change[0], 1.0 + change[1]
    changed = electron * constants.m_e * constants.m_p / (electron * constants.m_e + constants.m_p)
    m = changed * (1.0 / constants.m_e + 1.0 / constants.m_p)
    kelvin = history.radiation_temperature_k[0]
    volume = (constants.h**2 / (2.0 * np.pi * changed * constants.k * kelvin)) ** 1.5 * 1e6
    binding = 13.598434599702 * a**2 * m * constants.e  # NIST Atomic Spectra Database
    ionized = history.ionized_hydrogen_fraction[0]
    odds = volume * history.hydrogen_density_cm3[0] * ionized
    expected = odds * np.exp(binding / (constants.k * kelvin))
    ratio = history.neutral_hydrogen_fraction[0] / ionized
    assert ratio == pytest.approx(expected, rel=1.2e-5)  # lag of T_m, as above


def test_temperatures_part_later_with_lighter_electrons() -> None:
    # Compton heating goes as m_e^-3 (Thomson cross section m_e^-2, recoil m_e^-1): in the thermal
    # limit T_r - T_m = T_r H/Gamma, to first order in it.
    plain, changed = early_history(), early_history(electron_mass_change=-0.1)
    lag = [
        1.0 - one.matter_temperature_k[0] / one.radiation_temperature_k[0]
        for one in (plain, changed)
    ]
    # x_e is 1 to 1e-5 in both; the lag of 4e-7 is a difference of doubles.
    assert lag[1] / lag[0] == pytest.approx(0.9**3, rel=1e-5)


def test_setup_keeps_its_physics_in_text() -> None:
    from levelnet.history.setup import parse_setup

    setup = small_setup(5, physics={"electron_mass_change": 0.01})
    assert parse_setup(setup.to_toml()) == setup
    assert dataclasses.replace(setup, physics={}).digest != setup.digest
