"""The relations between a rate and its inverse, and the only place that states them.

In equilibrium at one temperature every process balances its inverse. Emission and recombination
are computed from the atom; absorption and photoionization follow here, so that thermal equilibrium
holds to rounding whatever the error of the rates.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError
from .levels import reduced_mass_ratio

ELECTRON_WEIGHT = 2.0


def thermal_volume_cm3(temperature_k: ArrayLike, charge: int = 1) -> FloatArray:
    """Cube of the thermal wavelength of relative motion, (h^2 / 2 pi mu k T)^(3/2), in cm^3.

    Parameters
    ----------
    temperature_k : array_like, K
        Matter temperature, above 0.
    charge : int
        Nuclear charge, 1 to 30; it sets the reduced mass mu.

    References
    ----------
    Saha 1920, Phil. Mag. 40, 472; 4.1424e-16 T^(-3/2) cm^3 for infinite nuclear mass.
    """
    temperature = _positive_temperature(temperature_k)
    mass_g = const.ELECTRON_MASS_G * reduced_mass_ratio(charge)
    momentum_squared = 2.0 * np.pi * mass_g * const.BOLTZMANN_ERG_K * temperature
    volume: FloatArray = (const.PLANCK_ERG_S / np.sqrt(momentum_squared)) ** 3
    return volume


def log_upward_ratio(
    weight_upper: ArrayLike, weight_lower: ArrayLike, energy_ev: ArrayLike, temperature_k: ArrayLike
) -> FloatArray:
    """Natural logarithm of upward over downward rate, ln[(g_u/g_l) exp(-E/kT)]; always finite.

    Arguments as for :func:`upward_rate`.
    """
    temperature = _positive_temperature(temperature_k)
    weights = np.asarray(weight_upper, float) / np.asarray(weight_lower, float)
    ratio: FloatArray = np.log(weights) - np.asarray(energy_ev) / (
        const.BOLTZMANN_EV_K * temperature
    )
    return ratio


def upward_rate(
    downward_rate: ArrayLike,
    weight_upper: ArrayLike,
    weight_lower: ArrayLike,
    energy_ev: ArrayLike,
    temperature_k: ArrayLike,
) -> FloatArray:
    """Rate of the inverse of a downward transition at one temperature.

    Parameters
    ----------
    downward_rate : array_like, any unit
        Rate or rate coefficient of upper -> lower, stimulated part included.
    weight_upper, weight_lower : array_like, dimensionless
        Statistical weights.
    energy_ev : array_like, eV
        Energy of the upper level above the lower.
    temperature_k : array_like, K
        Temperature of what drives the transition (radiation or electrons), above 0.

    Returns
    -------
    ndarray, unit of `downward_rate`
        R_up = R_down (g_u/g_l) exp(-E/kT); all arguments broadcast. Underflows to 0.

    References
    ----------
    Einstein 1917, Phys. Z. 18, 121.
    """
    log_ratio = log_upward_ratio(weight_upper, weight_lower, energy_ev, temperature_k)
    return np.asarray(downward_rate, float) * _exp(log_ratio)


class SahaCoefficients(NamedTuple):
    """What :func:`log_saha_factor` needs of the levels: offset - 1.5 ln T + ionization / T.

    Attributes
    ----------
    offset : ndarray, dimensionless
        ln[(g/2) lambda^3(1 K)], lambda^3 in cm^3.
    ionization_k : ndarray, K
        Ionization energy over the Boltzmann constant.
    """

    offset: FloatArray
    ionization_k: FloatArray

    def log_factor(self, temperature_k: float | FloatArray) -> FloatArray:
        """ln[(g/2) lambda^3 exp(I/kT)] at positive temperatures, unchecked."""
        factor: FloatArray = (
            self.offset - 1.5 * np.log(temperature_k) + self.ionization_k / temperature_k
        )
        return factor


def saha_coefficients(
    statistical_weight: ArrayLike, ionization_energy_ev: ArrayLike, charge: int = 1
) -> SahaCoefficients:
    """Prepare the Saha factors of many levels; arguments as for :func:`log_saha_factor`."""
    weight = np.asarray(statistical_weight, float) / ELECTRON_WEIGHT
    return SahaCoefficients(
        np.log(weight * thermal_volume_cm3(1.0, charge)),
        np.asarray(ionization_energy_ev, float) / const.BOLTZMANN_EV_K,
    )


def log_saha_factor(
    statistical_weight: ArrayLike,
    ionization_energy_ev: ArrayLike,
    temperature_k: ArrayLike,
    charge: int = 1,
) -> FloatArray:
    """Natural logarithm of n_level / (n_electron n_ion) in equilibrium, with the volume in cm^3.

    Parameters
    ----------
    statistical_weight : array_like, dimensionless
        Weight g of the level, electron spin counted, nuclear spin not: 2 (2l + 1).
    ionization_energy_ev : array_like, eV
        Energy I that ionizes the level.
    temperature_k : array_like, K
        Temperature, above 0; all arguments broadcast.
    charge : int
        Nuclear charge, 1 to 30.

    Returns
    -------
    ndarray, dimensionless
        ln[(g/2) (h^2 / 2 pi mu k T)^(3/2) e^(I/kT) / cm^3]; finite at any temperature, where the
        factor itself overflows below 220 K for the ground state of hydrogen.

    References
    ----------
    Saha 1920, Phil. Mag. 40, 472.
    """
    levels = saha_coefficients(statistical_weight, ionization_energy_ev, charge)
    return levels.log_factor(_positive_temperature(temperature_k))


def photoionization_from_recombination(
    coefficient_cm3_per_s: ArrayLike,
    statistical_weight: ArrayLike,
    ionization_energy_ev: ArrayLike,
    temperature_k: ArrayLike,
    charge: int = 1,
) -> FloatArray:
    """Photoionization rate of a level in a blackbody, from its recombination coefficient.

    Parameters
    ----------
    coefficient_cm3_per_s : array_like, cm^3/s
        Recombination coefficient with matter and radiation both at `temperature_k`, stimulated part
        included.
    statistical_weight, ionization_energy_ev, temperature_k, charge
        As for :func:`log_saha_factor`.

    Returns
    -------
    ndarray, s^-1
        beta = alpha / [(g/2) (h^2 / 2 pi mu k T)^(3/2) e^(I/kT)]; underflows to 0.

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209.
    """
    log_factor = log_saha_factor(statistical_weight, ionization_energy_ev, temperature_k, charge)
    # Divided by two roots, because the factor itself overflows long before the rate underflows.
    root = _exp(-0.5 * log_factor)
    return np.asarray(coefficient_cm3_per_s, float) * root * root


def absorption_from_spontaneous(spontaneous_rate: ArrayLike, occupation: ArrayLike) -> FloatArray:
    """Absorption rate, in any field, of the inverse of a spontaneous emission per unit weight.

    Parameters
    ----------
    spontaneous_rate : array_like, s^-1
        Rate of spontaneous emission at one photon energy, per unit of statistical weight of the
        state that absorbs.
    occupation : array_like, dimensionless
        Photon occupation number f at that energy; 0 or above, broadcasts.

    Returns
    -------
    ndarray, s^-1
        spontaneous_rate * f; emission including its stimulated part is spontaneous_rate * (1 + f).

    References
    ----------
    Einstein 1917, Phys. Z. 18, 121.
    """
    rate: FloatArray = np.asarray(spontaneous_rate, float) * np.asarray(occupation, float)
    return rate


def _exp(exponent: FloatArray) -> FloatArray:
    with np.errstate(under="ignore"):
        result: FloatArray = np.exp(exponent)
    return result


def _positive_temperature(temperature_k: ArrayLike) -> FloatArray:
    temperature = np.asarray(temperature_k, float)
    if not ((temperature > 0.0) & np.isfinite(temperature)).all():
        raise InputError(f"temperature_k = {np.min(temperature):g}: must be above 0 K and finite")
    return temperature
