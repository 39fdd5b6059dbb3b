"""Constants (CODATA, cgs) and the expanding universe of the helium trial."""

from dataclasses import dataclass

import numpy as np
import scipy.constants as sc
from numpy.typing import NDArray

Array = NDArray[np.float64]

C = sc.c * 1e2
H_PLANCK = sc.h * 1e7
K_B = sc.k * 1e7
M_E = sc.m_e * 1e3
AMU = sc.atomic_mass * 1e3
WAVENUMBER = H_PLANCK * C  # erg per cm^-1
RYDBERG = sc.Rydberg * 1e-2 * WAVENUMBER  # erg, infinite mass
BOHR_AREA = (sc.physical_constants["Bohr radius"][0] * 1e2) ** 2
ATOMIC_TIME = sc.physical_constants["atomic unit of time"][0]
MASS_H, MASS_HE = 1.00782503 * AMU, 4.00260325 * AMU
GRAVITY = sc.G * 1e3
RADIATION = 8 * np.pi**5 * K_B**4 / (15 * H_PLANCK**3 * C**3)
HUNDRED = 1e7 / (sc.parsec * 1e2 * 1e6)  # 100 km/s/Mpc in s^-1


@dataclass(frozen=True)
class Cosmology:
    """Flat, massless neutrinos."""

    h: float
    omega_b: float
    omega_cdm: float
    t0: float
    y_p: float
    n_eff: float = 3.046

    def temperature(self, z: float) -> float:
        return self.t0 * (1 + z)

    @property
    def helium_ratio(self) -> float:
        return self.y_p / (1 - self.y_p) * MASS_H / MASS_HE

    def hydrogen_density(self, z: float) -> float:
        critical = 3 * HUNDRED**2 / (8 * np.pi * GRAVITY)
        return float((1 - self.y_p) * self.omega_b * critical / MASS_H * (1 + z) ** 3)

    def hubble(self, z: float) -> float:
        critical = 3 * HUNDRED**2 / (8 * np.pi * GRAVITY) * C**2
        photons = RADIATION * self.t0**4 / critical
        radiation = photons * (1 + 7 / 8 * (4 / 11) ** (4 / 3) * self.n_eff)
        matter = self.omega_b + self.omega_cdm
        rest = self.h**2 - matter - radiation
        return float(HUNDRED * np.sqrt(matter * (1 + z) ** 3 + radiation * (1 + z) ** 4 + rest))


def saha_log(
    atom_reduced_mass: float, weight_ratio: float, binding: float, temperature: float
) -> float:
    """ln S with n_upper... n_bound/(n_e n_ion) = S in cm^3; weight_ratio = g_bound/(2 g_ion)."""
    thermal = H_PLANCK**2 / (2 * np.pi * atom_reduced_mass * K_B * temperature)
    return float(np.log(weight_ratio) + 1.5 * np.log(thermal) + binding / (K_B * temperature))
