"""Constants against scipy.constants (CODATA 2022) and astropy.constants."""

from math import pi

import astropy.constants
import pytest
import scipy.constants

from levelnet import constants as const
from tests.tolerances import CODATA, ROUND_OFF

EXACT = {
    "SPEED_OF_LIGHT_CM_S": scipy.constants.c * 1e2,
    "PLANCK_ERG_S": scipy.constants.h * 1e7,
    "BOLTZMANN_ERG_K": scipy.constants.k * 1e7,
    "ERG_PER_EV": scipy.constants.e * 1e7,
    "SECONDS_PER_YEAR": scipy.constants.Julian_year,
    # IAU 2012 resolution B2: 1 au = 149597870700 m; 1 pc = 648000/pi au.
    "CM_PER_MPC": 648000.0 / pi * 149597870700.0 * 1e8,
}

# Our name: (name in scipy, factor from SI to ours).
MEASURED = {
    "RYDBERG_PER_CM": ("Rydberg constant", 1e-2),
    "FINE_STRUCTURE": ("fine-structure constant", 1.0),
    "ELECTRON_MASS_G": ("electron mass", 1e3),
    "ELECTRON_PROTON_MASS_RATIO": ("electron-proton mass ratio", 1.0),
    "ALPHA_ELECTRON_MASS_RATIO": ("alpha particle-electron mass ratio", 1.0),
    "ELECTRON_MASS_U": ("electron mass in u", 1.0),
    "BOHR_RADIUS_CM": ("Bohr radius", 1e2),
    "ATOMIC_TIME_S": ("atomic unit of time", 1.0),
    "THOMSON_CROSS_SECTION_CM2": ("Thomson cross section", 1e4),
    "GRAVITATION_CM3_G_S2": ("Newtonian constant of gravitation", 1e3),
}


@pytest.mark.parametrize("name", EXACT)
def test_defined_constants_are_exact(name: str) -> None:
    assert getattr(const, name) == pytest.approx(EXACT[name], rel=ROUND_OFF)


@pytest.mark.parametrize("name", MEASURED)
def test_measured_constants_are_codata(name: str) -> None:
    key, factor = MEASURED[name]
    value, _unit, sigma = scipy.constants.physical_constants[key]
    ours, theirs = getattr(const, name), value * factor
    if "2022 CODATA" in str(scipy.constants.__doc__):
        assert ours == pytest.approx(theirs, rel=CODATA)
    else:
        # A later scipy brings a later edition. Its value moves by some standard deviations; a slip
        # of a digit would be far more than ten.
        assert ours == pytest.approx(theirs, abs=10.0 * sigma * factor)


def test_every_number_is_checked_here() -> None:
    derived = {
        "BOLTZMANN_EV_K",
        "PLANCK_EV_S",
        "RYDBERG_EV",
        "RADIATION_ERG_CM3_K4",
        "PROTON_MASS_G",
        "HYDROGEN_ATOM_MASS_G",
        "HELIUM_HYDROGEN_MASS_RATIO",
        "HYDROGEN_MASS_U",
        "HELIUM_MASS_U",
        "HYDROGEN_IONIZATION_PER_CM",
        "HYDROGEN_1S_LAMB_SHIFT_HZ",
        "HELIUM_ION_IONIZATION_PER_CM",
        "HELIUM_ION_2S_LAMB_SHIFT_HZ",
    }
    public = {name for name in vars(const) if name.isupper() and name != "CODATA_EDITION"}
    assert public == derived | set(EXACT) | set(MEASURED)


def test_derived_constants() -> None:
    known = scipy.constants.physical_constants
    assert const.BOLTZMANN_EV_K == pytest.approx(
        known["Boltzmann constant in eV/K"][0], rel=ROUND_OFF
    )
    assert const.PLANCK_EV_S == pytest.approx(known["Planck constant in eV/Hz"][0], rel=ROUND_OFF)
    assert const.RYDBERG_EV == pytest.approx(
        known["Rydberg constant times hc in eV"][0], rel=CODATA
    )
    assert const.PROTON_MASS_G == pytest.approx(known["proton mass"][0] * 1e3, rel=1e-9)
    # Radiation constant: 4 sigma / c, in erg cm^-3 K^-4 (factor 10 from J m^-3).
    radiation = 4.0 * scipy.constants.Stefan_Boltzmann / scipy.constants.c * 10.0
    assert const.RADIATION_ERG_CM3_K4 == pytest.approx(radiation, rel=ROUND_OFF)


def test_atomic_masses_are_the_nuclei_and_electrons_less_the_binding() -> None:
    known = scipy.constants.physical_constants
    electron = known["electron mass in u"][0]
    ev_per_u = known["atomic mass constant energy equivalent in MeV"][0] * 1e6
    hydrogen = known["proton mass in u"][0] + electron - 13.598 / ev_per_u
    # Both electrons of helium are bound by 24.587 + 54.418 eV (NIST Atomic Spectra Database).
    helium = known["alpha particle mass in u"][0] + 2.0 * electron - 79.005 / ev_per_u
    # Ours are rounded to six decimals.
    assert const.HYDROGEN_MASS_U == pytest.approx(hydrogen, abs=5e-7)
    assert const.HELIUM_MASS_U == pytest.approx(helium, abs=5e-7)
    # The mass in grams leaves out the binding energy, 1.4e-8 of the whole.
    assert const.HYDROGEN_ATOM_MASS_G == pytest.approx(
        hydrogen * known["atomic mass constant"][0] * 1e3, rel=2e-8
    )
    assert pytest.approx(const.HELIUM_MASS_U / const.HYDROGEN_MASS_U, rel=ROUND_OFF) == (
        const.HELIUM_HYDROGEN_MASS_RATIO
    )


def test_ionization_energy_of_hydrogen() -> None:
    to_ev = scipy.constants.h * scipy.constants.c * 1e2 / scipy.constants.e
    # NIST Atomic Spectra Database: 13.598434599702 eV. Digits beyond the eleventh depend on the
    # edition of hc used there.
    assert const.HYDROGEN_IONIZATION_PER_CM * to_ev == pytest.approx(13.598434599702, rel=1e-11)
    # Closed form: reduced mass, Dirac's alpha^2/4, less the Lamb shift; recoil terms of order
    # alpha^2 m_e/m_p = 3e-8 are left out.
    reduced = 1.0 / (1.0 + const.ELECTRON_PROTON_MASS_RATIO)
    dirac = const.RYDBERG_PER_CM * reduced * (1.0 + const.FINE_STRUCTURE**2 / 4.0)
    lamb = const.HYDROGEN_1S_LAMB_SHIFT_HZ / const.SPEED_OF_LIGHT_CM_S
    assert dirac - lamb == pytest.approx(const.HYDROGEN_IONIZATION_PER_CM, rel=3e-8)


def test_against_astropy() -> None:
    assert const.CM_PER_MPC == pytest.approx(astropy.constants.pc.cgs.value * 1e6, rel=ROUND_OFF)
    assert const.THOMSON_CROSS_SECTION_CM2 == pytest.approx(
        astropy.constants.sigma_T.cgs.value, rel=1e-9
    )
    assert const.GRAVITATION_CM3_G_S2 == pytest.approx(astropy.constants.G.cgs.value, rel=1e-4)


def test_facts_of_the_trade() -> None:
    # Common practice: 13.6 eV is about 158,000 K; 3.4 eV from n = 2; Lyman-alpha has 10.2 eV.
    ground = const.HYDROGEN_IONIZATION_PER_CM * const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S
    assert ground == pytest.approx(13.6, abs=0.05)
    assert ground / const.BOLTZMANN_EV_K == pytest.approx(158_000.0, abs=500.0)
    assert ground / 4.0 == pytest.approx(3.4, abs=0.05)
    assert 0.75 * ground == pytest.approx(10.2, abs=0.05)
