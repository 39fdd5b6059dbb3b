"""Helium with changed constants of nature, and with two-photon decays that the blackbody speeds up.

Powers of alpha and of the electron mass are counted by dimension; what the formulas of the package
give with other constants put into them is the independent way.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
import pytest
from scipy import constants as si

from levelnet import constants as const
from levelnet.atomic import helium_bound_free as continuum
from levelnet.atomic import helium_lines as module
from levelnet.atomic.bound_bound import dipole_blocks
from levelnet.atomic.bound_free import photoionization_cross_section
from levelnet.atomic.helium_levels import helium_levels
from levelnet.atomic.helium_two_photon import helium_two_photon_factor, helium_two_photon_slope
from levelnet.atomic.physics import UNCHANGED, Physics, scales
from levelnet.atomic.two_photon import stimulated_two_photon_factor, two_photon_rate
from levelnet.background.conditions import Conditions
from levelnet.escape.helium_lines import helium_ground_lines
from levelnet.escape.helium_treatment import Seen
from levelnet.history.helium_atom import HeliumAtoms, build_helium
from levelnet.history.ion_network import Around
from levelnet.network.assembly import Workspace, factor_interior
from levelnet.network.helium_populations import helium_populations
from levelnet.network.populations import populations
from levelnet.network.scaled import as_measured
from levelnet.pieces import MemoryPieces
from levelnet.studies.rung import observables_of
from tests.small_helium import helium_history, helium_setup
from tests.small_helium_lines import small_ladders
from tests.tolerances import EQUILIBRIUM, ROUND_OFF

_PIECES = MemoryPieces()
CHANGES = ((0.1, 0.0), (0.0, 0.15), (-0.08, 0.05))
_ALPHA_MASS_KG = si.physical_constants["alpha particle mass"][0]


@lru_cache(maxsize=8)
def atoms(alpha: float = 0.0, electron: float = 0.0, decay: str = "spontaneous") -> HeliumAtoms:
    physics = {"fine_structure_change": alpha, "electron_mass_change": electron}
    setup = helium_setup(4, 1e-5, physics=physics, lines={"two_photon": decay})
    return build_helium(setup, 27_000.0, lambda *_: None, _PIECES)


def reduced_mass(electron: float) -> float:
    """Reduced mass of the changed electron and an alpha particle over that of the measured one."""
    changed = (1.0 + electron) * si.m_e
    return changed / si.m_e * (1.0 + si.m_e / _ALPHA_MASS_KG) / (1.0 + changed / _ALPHA_MASS_KG)


# ---- single rates


def test_nothing_changed_is_exactly_one() -> None:
    assert scales(Physics(), charge=2) == UNCHANGED
    assert UNCHANGED.line_to_ground("magnetic dipole") == UNCHANGED.cross_section == 1.0


@pytest.mark.parametrize("change", CHANGES)
def test_factors_are_what_the_formulas_give(
    change: tuple[float, float], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Computed here: the formulas of lines and cross sections with the changed constants in them.

    Units of time go as 1/(a^2 m), of length as 1/(a m). Quantum defects are pure numbers.
    """
    factor, levels = scales(Physics(*change), charge=2), helium_levels(3)
    a, m = 1.0 + change[0], factor.reduced_mass
    assert m == pytest.approx(reduced_mass(change[1]), rel=1e-12)
    plain = module._computed(levels, 1, dipole_blocks(3)).block(0)
    cross = continuum._unit(levels)
    monkeypatch.setattr(const, "FINE_STRUCTURE", const.FINE_STRUCTURE * a)
    monkeypatch.setattr(const, "ATOMIC_TIME_S", const.ATOMIC_TIME_S / (a**2 * m))
    monkeypatch.setattr(const, "BOHR_RADIUS_CM", const.BOHR_RADIUS_CM / (a * m))
    changed = module._computed(levels, 1, dipole_blocks(3)).block(0)
    np.testing.assert_allclose(changed, plain * factor.line_rate, rtol=ROUND_OFF)
    assert continuum._unit(levels) / cross == pytest.approx(factor.cross_section, rel=ROUND_OFF)
    assert factor.energy == pytest.approx(a**2 * m, rel=ROUND_OFF)


def test_forbidden_lines_have_powers_of_their_own() -> None:
    """Closed form: mc^2 alpha^11/972 for the magnetic dipole line 2s-1s of hydrogen (Drake 1971).

    So 11 for its kind; 9 = 5 + 4 for the other two. As powers of Z, which enters as Z alpha but in
    the gap between 2 1P and 2 3P1 (Z, not Z^2), these are the published Z^10, Z^8 and Z^10 (Drake
    1971, Phys. Rev. A 3, 908; Drake 1969, Astrophys. J. 158, 1199; from memory).
    """
    factor = scales(Physics(fine_structure_change=0.1), charge=2)
    for kind, power in (
        ("resonance", 5),
        ("intercombination", 9),
        ("magnetic quadrupole", 9),
        ("magnetic dipole", 11),
    ):
        assert factor.line_to_ground(kind) == pytest.approx(1.1**power, rel=ROUND_OFF)
    ladders, physics = small_ladders("free"), Physics(fine_structure_change=0.1)
    usual = helium_ground_lines(ladders, True, "free")
    changed = helium_ground_lines(ladders, True, "free", physics=physics)
    powers = {"2 3S-1 1S": 11, "2 3P1-1 1S": 9, "2 3P2-1 1S": 9}
    for k, name in enumerate(usual.names):
        ratio = changed.einstein_a_per_s[k] / usual.einstein_a_per_s[k]
        assert ratio == pytest.approx(1.1 ** powers.get(name, 5), rel=1e-13), name
    np.testing.assert_allclose(changed.energy_ev, usual.energy_ev * 1.21, rtol=ROUND_OFF)
    assert changed.lit_by.tolist() == usual.lit_by.tolist()
    assert changed.names == usual.names


@pytest.mark.parametrize("change", CHANGES)
def test_hydrogen_inside_the_lines_changes_too(change: tuple[float, float]) -> None:
    """Closed form: alpha a0^2, energies over the binding energy of the changed hydrogen."""
    lines = helium_ground_lines(small_ladders(), True, physics=Physics(*change))
    a, electron = 1.0 + change[0], 1.0 + change[1]
    m = electron * (1.0 + si.m_e / si.m_p) / (1.0 + electron * si.m_e / si.m_p)
    chi_ev = 13.598287 * a**2 * m  # non-relativistic, as the cross section
    wanted = photoionization_cross_section(1, 0, lines.energy_ev / chi_ev - 1.0) / (a * m**2)
    np.testing.assert_allclose(lines.hydrogen_cross_section_cm2, wanted, rtol=1e-6)


# ---- whole stages


def saha_conditions(found: HeliumAtoms, stage: int, temperature_k: float) -> Conditions:
    around = Around(temperature_k, temperature_k, 250.0, 1e-12, 13.0, -2.0)
    ratio = found.equations.saha_log_ratio(stage, around)
    ion = 1.0 / (1.0 + math.exp(-ratio))
    return found.equations.first.conditions(around, ion, ion * math.exp(-ratio))


@pytest.mark.parametrize("change", CHANGES)
@pytest.mark.parametrize("stage", [0, 1])
def test_saha_equilibrium_and_departures(change: tuple[float, float], stage: int) -> None:
    """Saha 1920, Phil. Mag. 40, 472, by hand with scipy's constants, and departures of 1."""
    found = atoms(*change)
    unit, m = found.equations.scales.energy, reduced_mass(change[1])
    temperature_k = (6500.0, 14_000.0)[stage] * unit
    conditions = saha_conditions(found, stage, temperature_k)
    mu = m * si.m_e / (1.0 + si.m_e / _ALPHA_MASS_KG)
    volume = (si.h**2 / (2.0 * np.pi * mu * si.k * temperature_k)) ** 1.5 * 1e6
    # NIST Atomic Spectra Database, eV.
    binding = (24.587389, 54.417765)[stage] * unit * si.e
    weight = (0.25, 1.0)[stage]
    wanted = weight * volume * 13.0 * 250.0 * math.exp(binding / (si.k * temperature_k))
    ratio = conditions.ground_fraction / conditions.ionized_fraction
    assert ratio == pytest.approx(wanted, rel=2e-6)
    first, second = found.equations.first, found.equations.second
    measured = as_measured(conditions, found.equations.scales)
    if stage == 0:
        local = first.solve(conditions, Seen(0.0))
        levels = helium_populations(found.first, local.solution.log_population, measured)
    else:
        assert second is not None and found.second is not None
        local = second.solve(conditions)
        work = Workspace.of(found.second)
        factored = factor_interior(found.second, measured.radiation_temperature_k, work)
        levels = populations(factored, local.solution.log_population, measured)
    assert np.abs(levels.log_departure).max() < EQUILIBRIUM


@pytest.mark.parametrize("stage", [0, 1])
def test_a_heavier_electron_changes_units_alone(stage: int) -> None:
    """Law: with alpha as it is every rate goes as m, at T as m, densities as m^3 and H as m."""
    usual, heavy = atoms(), atoms(0.0, 0.15)
    m = heavy.equations.scales.reduced_mass
    at = Conditions(
        *((5455.0, 5300.0), (12_000.0, 11_900.0))[stage], 119.0, 1.7e-13, 13.0, 0.6, 0.3
    )
    scaled = at._replace(
        radiation_temperature_k=at.radiation_temperature_k * m,
        matter_temperature_k=at.matter_temperature_k * m,
        hydrogen_density_cm3=at.hydrogen_density_cm3 * m**3,
        hubble_rate_per_s=at.hubble_rate_per_s * m,
    )
    flows = []
    for found, conditions in ((usual, at), (heavy, scaled)):
        one = (found.equations.first, found.equations.second)[stage]
        assert one is not None
        seen = Seen(0.0) if stage == 0 else None
        flows.append(one.solve(conditions, seen).solution.net_flow)
    assert flows[1] / flows[0] == pytest.approx(m, rel=1e-10)


@pytest.mark.parametrize("change", CHANGES)
def test_two_photon_decays_and_where_helium_is_held(change: tuple[float, float]) -> None:
    found, factor = atoms(*change), scales(Physics(*change), charge=2)
    eighth = (1.0 + change[0]) ** 8 * reduced_mass(change[1])
    first, second = found.equations.first, found.equations.second
    assert second is not None
    assert first.decay_rate_per_s == pytest.approx(51.02 * eighth, rel=1e-12)
    assert second.decay_rate_per_s == pytest.approx(two_photon_rate(2) * eighth, rel=1e-12)
    assert found.equations.coldest_k == pytest.approx(1400.0 * factor.energy, rel=ROUND_OFF)


# ---- stimulated decay


def test_blackbody_speeds_up_the_decay_of_both_stages() -> None:
    """Computed by the quadratures of the profiles themselves, at and between the nodes."""
    found = atoms(decay="stimulated")
    first, second = found.equations.first, found.equations.second
    assert first.stimulation is not None
    assert second is not None and second.stimulation is not None
    ion_ev = float(second.reduced.kept.energy_ev[0])
    for kelvin in (1400.0, 2345.0, 5455.0, 12_000.0, 27_000.0):
        value, slope = first.stimulation.evaluate(math.log(kelvin))
        assert value[0] == pytest.approx(math.log(helium_two_photon_factor(kelvin)), abs=1e-9)
        assert slope[0] == pytest.approx(float(helium_two_photon_slope(kelvin)), abs=1e-7)
        value, _ = second.stimulation.evaluate(math.log(kelvin))
        wanted = math.log(stimulated_two_photon_factor(kelvin, ion_ev))
        assert value[0] == pytest.approx(wanted, abs=1e-9)
    assert atoms().equations.first.stimulation is None


def test_stimulated_decay_is_in_the_coupling_with_its_inverse_and_slope() -> None:
    plain, fast = atoms(), atoms(decay="stimulated")
    conditions = saha_conditions(fast, 0, 6500.0)
    at = fast.equations.first.decay
    slow, quick = (one.equations.first.solve(conditions, Seen(0.0)) for one in (plain, fast))
    factor = float(helium_two_photon_factor(6500.0))
    added = quick.coupling.loss[at, at] - slow.coupling.loss[at, at]
    assert added == pytest.approx(51.02 * (factor - 1.0), rel=1e-6)
    assert 5e-3 < factor - 1.0 < 1e-2
    # Detailed balance: in equilibrium all that decays is absorbed again.
    levels = helium_populations(fast.first, quick.solution.log_population, conditions)
    assert np.abs(levels.log_departure).max() < EQUILIBRIUM
    step = 1e-4
    ends = []
    for sign in (1.0, -1.0):
        kelvin = 6500.0 * math.exp(sign * step)
        moved = fast.equations.first.solve(
            conditions._replace(radiation_temperature_k=kelvin), Seen(0.0)
        )
        ends.append(moved.coupling.loss[at, at])
    wanted = (ends[0] - ends[1]) / (2.0 * step)
    assert quick.coupling.slope_temperature[at, at] == pytest.approx(wanted, rel=1e-6)


def test_changed_constants_shift_the_temperature_of_stimulation() -> None:
    found = atoms(0.1, 0.0, "stimulated").equations.first.stimulation
    assert found is not None
    value, _ = found.evaluate(math.log(6500.0 * 1.21))
    assert value[0] == pytest.approx(math.log(helium_two_photon_factor(6500.0)), abs=1e-9)


# ---- whole histories


def test_stimulated_decay_changes_little_while_helium_recombines() -> None:
    """Published: all two-photon effects of He I together are a few 1e-4 of x_e.

    Hirata & Switzer 2008, Phys. Rev. D 77, 083007. This part, up to 0.6 per cent of a channel that
    carries little, must be less.
    """
    plain, fast = helium_history(), helium_history(two_photon="stimulated")
    change = fast.free_electron_fraction / plain.free_electron_fraction - 1.0
    helium = (plain.redshift >= 1800.0) & (plain.redshift <= 3500.0)
    assert -5e-5 < change[helium].min() < -1e-5
    assert any("stimulated by the blackbody" in note for note in fast.notes)


def test_observables_start_where_changed_helium_is_ionized() -> None:
    """Lowest energies: a start at fixed T_r would lie above what helium is tabulated for.

    Law: alpha and m so that energies halve, recombination moves to half the redshift or so.
    """
    grid = {"redshift_start": 1800.0, "redshift_end": 20.0, "n_redshifts": 20}
    physics = {"fine_structure_change": -0.2, "electron_mass_change": -0.2}
    setup = helium_setup(4, 1e-5, grid=grid, physics=physics, helium={"helium_ion": "saha"})
    found = observables_of(setup)
    place = found.value[found.names.index("last_scattering_redshift")]
    assert 0.4 * 1082.0 < place < 0.6 * 1082.0


def test_history_with_changed_constants() -> None:
    """Saha by hand (NIST energies, scipy's constants) where each ion is in equilibrium.

    Energies and temperatures scale together, so that He III recombines at 1 + z higher by a^2 m.
    """
    changed = helium_history(alpha=0.05, electron=-0.1)
    unit = 1.05**2 * reduced_mass(-0.1)
    for redshift, energy_ev, weight, ions in (
        (8000.0, 54.417765, 1.0, ("doubly_ionized", "singly_ionized")),
        (3500.0, 24.587389, 4.0, ("singly_ionized", "neutral")),
    ):
        k = int(np.flatnonzero(changed.redshift == redshift)[0])
        kelvin = changed.matter_temperature_k[k]
        electrons = changed.free_electron_fraction[k] * changed.hydrogen_density_cm3[k] * 1e6
        mu = 0.9 * si.m_e / (1.0 + 0.9 * si.m_e / _ALPHA_MASS_KG)
        wave = (2.0 * np.pi * mu * si.k * kelvin / si.h**2) ** 1.5
        boltzmann = math.exp(-energy_ev * unit * si.e / (si.k * kelvin))
        high, low = (getattr(changed, f"{ion}_helium_fraction")[k] for ion in ions)
        assert high / low == pytest.approx(weight * wave * boltzmann / electrons, rel=1e-4)
    assert changed.levels("He II").energy_ev[1] == pytest.approx(40.813 * unit, rel=1e-4)
    assert changed.outcome.ok
