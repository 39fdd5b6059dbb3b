"""What each parameter of a cosmology does to its densities and to its expansion."""

from __future__ import annotations

import dataclasses

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from .cosmology import Cosmology
from .friedmann import photon_density_h2
from .neutrinos import NEUTRINO_PHOTON_RATIO, energy_ratio, energy_ratio_slope

COSMOLOGICAL = (
    "hubble_km_s_mpc",
    "baryon_density_h2",
    "matter_density_h2",
    "cmb_temperature_k",
    "helium_mass_fraction",
    "effective_neutrinos",
)
"""Parameters by which derivatives are given; the others are held, dark energy closes the budget.

Their count is the n_parameters of shapes.
"""

# Their places, in this order.
HUBBLE, BARYONS, MATTER, TEMPERATURE, HELIUM, NEUTRINOS = range(len(COSMOLOGICAL))


def helium_mass_fraction(cosmology: Cosmology) -> float:
    """True mass fraction (dimensionless), however the cosmology was given."""
    mass = const.HELIUM_HYDROGEN_MASS_RATIO * cosmology.helium_ratio()
    return mass / (1.0 + mass)


def hydrogen_derivatives(cosmology: Cosmology) -> FloatArray:
    """D ln n_H by each of `COSMOLOGICAL`, shape (n_parameters,); the same at any redshift."""
    result = np.zeros(len(COSMOLOGICAL))
    result[BARYONS] = 1.0 / cosmology.baryon_density_h2
    result[HELIUM] = -1.0 / (1.0 - helium_mass_fraction(cosmology))
    return result


def helium_derivatives(cosmology: Cosmology) -> FloatArray:
    """Df_He by each of `COSMOLOGICAL`, shape (n_parameters,)."""
    result = np.zeros(len(COSMOLOGICAL))
    left = 1.0 - helium_mass_fraction(cosmology)
    result[HELIUM] = 1.0 / (const.HELIUM_HYDROGEN_MASS_RATIO * left**2)
    return result


def baryon_loading(cosmology: Cosmology) -> float:
    """R = 3 rho_b/(4 rho_gamma) today (dimensionless); it falls as 1/(1 + z)."""
    photons = photon_density_h2(cosmology.cmb_temperature_k)
    return 0.75 * cosmology.baryon_density_h2 / photons


def loading_derivatives(cosmology: Cosmology) -> FloatArray:
    """D ln R by each of `COSMOLOGICAL`, shape (n_parameters,); the same at any redshift."""
    result = np.zeros(len(COSMOLOGICAL))
    result[BARYONS] = 1.0 / cosmology.baryon_density_h2
    result[TEMPERATURE] = -4.0 / cosmology.cmb_temperature_k
    return result


def hubble_derivatives(cosmology: Cosmology, growth: FloatArray) -> FloatArray:
    """D ln H by each of `COSMOLOGICAL`, per unit of each, shape (n_growth, n_parameters).

    Parameters
    ----------
    cosmology : Cosmology
        The background. A tabulated expansion does not move with the parameters: zeros.
    growth : ndarray, shape (n_growth,), dimensionless
        1 + redshift.
    """
    result = np.zeros((len(growth), len(COSMOLOGICAL)))
    if cosmology.expansion_redshift is not None:
        return result
    law = cosmology.law
    dark = dataclasses.replace(law, dark_energy=1.0).dark_energy_h2(growth)
    h, curvature = cosmology.hubble_km_s_mpc / 100.0, cosmology.curvature_density
    result[:, HUBBLE] = 0.02 * h * ((1.0 - curvature) * dark + curvature * growth**2)
    result[:, MATTER] = growth**3 - dark
    radiation = growth**4 - dark
    photons = photon_density_h2(cosmology.cmb_temperature_k)
    warmer = 4.0 * law.radiation * radiation + _massive(cosmology, growth, dark, 4.0)
    result[:, TEMPERATURE] = warmer / cosmology.cmb_temperature_k
    neff = cosmology.effective_neutrinos
    if neff > 0.0:
        massive = _massive(cosmology, growth, dark, 1.0)
        result[:, NEUTRINOS] = ((law.radiation - photons) * radiation + massive) / neff
    else:
        result[:, NEUTRINOS] = NEUTRINO_PHOTON_RATIO * photons * radiation
    return result * (0.5 / law.square(growth))[:, None]


def _massive(
    cosmology: Cosmology, growth: FloatArray, dark: FloatArray, power: float
) -> FloatArray:
    """What massive neutrinos add where their density grows as (T_nu)^`power` while relativistic.

    The mass over T_nu falls as 1/T and as N_eff^(-1/4): as the power/4 of either.
    """
    total = np.zeros_like(growth)
    for density, ratio in cosmology.law.massive:
        y, today = ratio / growth, np.array([ratio])
        early = energy_ratio(y) * (power - 0.25 * power * energy_ratio_slope(y)) * growth**4
        late = energy_ratio(today) * (power - 0.25 * power * energy_ratio_slope(today))
        total += density * (early - late * dark)
    return total
