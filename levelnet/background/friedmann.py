"""Friedmann's law: the expansion rate that follows from the densities."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from .. import constants as const
from .neutrinos import (
    MassiveNeutrino,
    Number,
    energy_ratio,
    energy_ratio_slope,
    share_neutrinos,
)

# 100 km/s/Mpc in s^-1; densities in units of Omega h^2 go with it.
HUBBLE_100_PER_S = 1e7 / const.CM_PER_MPC
# Mass density of Omega h^2 = 1, g/cm^3.
CRITICAL_DENSITY_G_CM3 = 3.0 * HUBBLE_100_PER_S**2 / (8.0 * math.pi * const.GRAVITATION_CM3_G_S2)


def photon_density_h2(temperature_k: float) -> float:
    """Omega h^2 (dimensionless) of blackbody photons of a temperature in K."""
    mass_density = const.RADIATION_ERG_CM3_K4 * temperature_k**4 / const.SPEED_OF_LIGHT_CM_S**2
    return mass_density / CRITICAL_DENSITY_G_CM3


@dataclass(frozen=True, slots=True)
class FriedmannLaw:
    """Densities today in units of Omega h^2 (dimensionless), and the rate they give.

    Attributes
    ----------
    radiation, matter, curvature, dark_energy : float, dimensionless
        Photons with massless neutrinos; baryons with dark matter; curvature; dark energy.
    w0, wa : float, dimensionless
        Dark energy w(a) = w0 + wa (1 - a).
    massive : tuple of MassiveNeutrino
        Massive neutrinos.
    """

    radiation: float
    matter: float
    curvature: float
    dark_energy: float
    w0: float
    wa: float
    massive: tuple[MassiveNeutrino, ...]

    def square(self, growth: Number) -> Number:
        """(H/100 km/s/Mpc)^2, dimensionless, at growth = 1 + redshift (float or ndarray)."""
        x = growth
        total = x * x * ((self.radiation * x + self.matter) * x + self.curvature)
        total = total + self.dark_energy_h2(x)
        for density, ratio in self.massive:
            total = total + density * x**4 * energy_ratio(ratio / x)
        return total

    def rate_per_s(self, growth: Number) -> Number:
        """H in s^-1 at growth = 1 + redshift (float or ndarray)."""
        if isinstance(growth, float):
            return HUBBLE_100_PER_S * math.sqrt(self.square(growth))
        return HUBBLE_100_PER_S * np.sqrt(self.square(growth))

    def log_slope(self, growth: Number) -> Number:
        """Return dln H/dln(1 + z), dimensionless, at growth = 1 + redshift (float or ndarray)."""
        x = growth
        slope = x * x * ((4.0 * self.radiation * x + 3.0 * self.matter) * x + 2.0 * self.curvature)
        pressure = 3.0 * (1.0 + self.w0 + self.wa - self.wa / x)
        slope = slope + pressure * self.dark_energy_h2(x)
        for density, ratio in self.massive:
            y = ratio / x
            slope = slope + density * x**4 * energy_ratio(y) * (4.0 - energy_ratio_slope(y))
        return 0.5 * slope / self.square(x)

    def dark_energy_h2(self, growth: Number) -> Number:
        """Dark energy density in units of Omega h^2 = 1 today (dimensionless).

        References
        ----------
        Chevallier & Polarski 2001, Int. J. Mod. Phys. D 10, 213; Linder 2003, PRL 90, 091301
        (from memory): (1+z)^(3 (1 + w0 + wa)) exp(-3 wa z/(1 + z)).
        """
        power: Number = growth ** (3.0 * (1.0 + self.w0 + self.wa))
        if self.wa == 0.0:
            return self.dark_energy * power
        exponent = -3.0 * self.wa * (1.0 - 1.0 / growth)
        if isinstance(exponent, float):
            return self.dark_energy * power * math.exp(exponent)
        return self.dark_energy * power * np.exp(exponent)


def friedmann_law(
    *,
    total_h2: float,
    matter_h2: float,
    curvature_density: float,
    cmb_temperature_k: float,
    effective_neutrinos: float,
    neutrino_masses_ev: tuple[float, ...],
    dark_energy: tuple[float, float],
) -> FriedmannLaw:
    """Close the budget with dark energy.

    Parameters
    ----------
    total_h2, matter_h2 : float, dimensionless
        h^2, and Omega h^2 of baryons with dark matter.
    curvature_density, effective_neutrinos : float, dimensionless
        Omega_k and N_eff.
    cmb_temperature_k : float, K
        Photon temperature today.
    neutrino_masses_ev : tuple of float, eV
        Masses.
    dark_energy : tuple of float, dimensionless
        w0 and wa.
    """
    photons = photon_density_h2(cmb_temperature_k)
    massless, massive = share_neutrinos(
        neutrino_masses_ev, effective_neutrinos, photons, cmb_temperature_k
    )
    curvature = curvature_density * total_h2
    heavy = sum(density * energy_ratio(ratio) for density, ratio in massive)
    return FriedmannLaw(
        radiation=photons + massless,
        matter=matter_h2,
        curvature=curvature,
        dark_energy=total_h2 - curvature - matter_h2 - photons - massless - heavy,
        w0=dark_energy[0],
        wa=dark_energy[1],
        massive=massive,
    )
