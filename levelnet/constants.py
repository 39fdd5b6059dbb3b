"""Physical constants in cgs, with energies in eV: CODATA 2022, frozen.

They are frozen rather than imported so that a new edition inside a library cannot change a
result unseen; ``tests/unit/test_constants.py`` holds them against ``scipy.constants``. Each output
file names :data:`CODATA_EDITION`.

References
----------
Mohr, Newell, Taylor & Tiesinga 2025, Rev. Mod. Phys. 97, 025002 (CODATA 2022; values as shipped in
``scipy.constants`` 1.17). The SI defining constants are exact.
"""

from math import pi

CODATA_EDITION = "CODATA 2022"

# Exact by definition of the SI.
SPEED_OF_LIGHT_CM_S = 2.99792458e10
PLANCK_ERG_S = 6.62607015e-27
BOLTZMANN_ERG_K = 1.380649e-16
ERG_PER_EV = 1.602176634e-12
# Exact by definition of the IAU 2012 astronomical unit.
CM_PER_MPC = 3.0856775814913673e24
# Julian year, exact.
SECONDS_PER_YEAR = 365.25 * 86400.0

# Measured (CODATA 2022).
RYDBERG_PER_CM = 109737.31568157  # infinite mass
FINE_STRUCTURE = 7.2973525643e-3
ELECTRON_MASS_G = 9.1093837139e-28
ELECTRON_PROTON_MASS_RATIO = 5.446170214889e-4
ALPHA_ELECTRON_MASS_RATIO = 7294.29954171
ELECTRON_MASS_U = 5.485799090441e-4
BOHR_RADIUS_CM = 5.29177210544e-9
ATOMIC_TIME_S = 2.4188843265864e-17
THOMSON_CROSS_SECTION_CM2 = 6.6524587051e-25
GRAVITATION_CM3_G_S2 = 6.67430e-8

# Atomic masses of the neutral atoms in units of u (AME 2020, as rounded in the trade).
HYDROGEN_MASS_U = 1.007825
HELIUM_MASS_U = 4.002603

# Derived.
BOLTZMANN_EV_K = BOLTZMANN_ERG_K / ERG_PER_EV
PLANCK_EV_S = PLANCK_ERG_S / ERG_PER_EV
RYDBERG_EV = PLANCK_EV_S * SPEED_OF_LIGHT_CM_S * RYDBERG_PER_CM
RADIATION_ERG_CM3_K4 = (
    8.0 * pi**5 * BOLTZMANN_ERG_K**4 / (15.0 * (SPEED_OF_LIGHT_CM_S * PLANCK_ERG_S) ** 3)
)
PROTON_MASS_G = ELECTRON_MASS_G / ELECTRON_PROTON_MASS_RATIO
HYDROGEN_ATOM_MASS_G = PROTON_MASS_G + ELECTRON_MASS_G
HELIUM_HYDROGEN_MASS_RATIO = HELIUM_MASS_U / HYDROGEN_MASS_U

# Measured ionization energy of hydrogen, 109678.77174307 cm^-1 (NIST Atomic Spectra Database,
# ground state of H I; the value agrees with 13.598434599702 eV in the mendeleev package to 1e-9
# eV).
HYDROGEN_IONIZATION_PER_CM = 109678.77174307
# Lamb shift of the hydrogen 1s level, 8172.8 MHz (from memory; scaled as n^-3 for the ns levels,
# which reproduces the measured 2s level to 0.001 cm^-1).
HYDROGEN_1S_LAMB_SHIFT_HZ = 8.1728e9

# Measured ionization energy of He II, 438908.8789 cm^-1 or 54.417765 eV (NIST Atomic Spectra
# Database, from memory).
HELIUM_ION_IONIZATION_PER_CM = 438908.8789
# Interval 2s-2p1/2 of He II, 14041.1 MHz (van Wijngaarden, Holuj & Drake 2000, Phys. Rev. A 63,
# 012505; from memory), taken as the Lamb shift of 2s and, as n^-3, of every ns from it.
HELIUM_ION_2S_LAMB_SHIFT_HZ = 1.40411e10
