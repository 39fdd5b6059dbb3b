"""Matter in the radiation: Compton heating, and the Saha equilibrium of hydrogen."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError

_COMPTON_PER_K4 = (
    8.0
    * const.THOMSON_CROSS_SECTION_CM2
    * const.RADIATION_ERG_CM3_K4
    / (3.0 * const.ELECTRON_MASS_G * const.SPEED_OF_LIGHT_CM_S)
)
# 2 pi mu k/h^2 with the reduced mass of electron and proton: one over the squared thermal
# wavelength of relative motion, per kelvin.
_REDUCED_MASS_G = const.ELECTRON_MASS_G / (1.0 + const.ELECTRON_PROTON_MASS_RATIO)
_WAVELENGTH_PER_CM2_K = (
    2.0 * math.pi * _REDUCED_MASS_G * const.BOLTZMANN_ERG_K / const.PLANCK_ERG_S**2
)


def compton_rate_per_s(
    radiation_temperature_k: ArrayLike, electron_fraction: ArrayLike, helium_ratio: ArrayLike
) -> FloatArray:
    """Rate at which Compton scattering pulls the matter temperature to that of the radiation.

    Parameters
    ----------
    radiation_temperature_k : float or ndarray, K, not negative
        Radiation temperature T_r.
    electron_fraction : float or ndarray, dimensionless, not negative
        x_e = n_e/n_H.
    helium_ratio : float or ndarray, dimensionless, not negative
        f_He = n_He/n_H.

    Returns
    -------
    ndarray, broadcast shape, s^-1
        Gamma in dT_m/dt = -2 H T_m + Gamma (T_r - T_m).

    Notes
    -----
    Gamma = 8 sigma_T a T_r^4/(3 m_e c) x_e/(1 + f_He + x_e): the energy that electrons gain, shared
    by all particles; electrons slow against light, photons soft against m_e c^2. Arguments are not
    checked: the function stands inside the right-hand side of the history.

    References
    ----------
    Weymann 1965, Phys. Fluids 8, 2112; Peebles 1968, ApJ 153, 1 (from memory).
    """
    electrons = np.asarray(electron_fraction, dtype=float)
    temperature = np.asarray(radiation_temperature_k, dtype=float)
    share = electrons / (1.0 + np.asarray(helium_ratio, dtype=float) + electrons)
    rate: FloatArray = _COMPTON_PER_K4 * temperature**4 * share
    return rate


def saha_log_odds(
    hydrogen_density_cm3: ArrayLike, temperature_k: ArrayLike, ionization_energy_ev: float
) -> FloatArray:
    """Ionization of pure hydrogen in Saha equilibrium, as u = ln(x_HII/x_HI).

    Parameters
    ----------
    hydrogen_density_cm3 : float or ndarray, cm^-3, positive
        Hydrogen nuclei, ionized or not.
    temperature_k : float or ndarray, K, positive
        Temperature of matter and radiation.
    ionization_energy_ev : float, eV, positive
        Ionization energy of the ground state.

    Returns
    -------
    ndarray, broadcast shape, dimensionless
        u; x_HI = 1/(1 + e^u) and x_HII = 1/(1 + e^-u) are then precise however small. All electrons
        come from hydrogen.

    Raises
    ------
    InputError
        If an argument is not positive and finite.

    Notes
    -----
    x^2/(1 - x) = S = n_Q exp(-I/kT)/n_H, n_Q = (2 pi mu kT/h^2)^(3/2), weights 2 g_HII/g_HI = 1.
    With x = 2/(1 + sqrt(1 + 4/S)) this is u = ln(S)/2 + asinh(sqrt(S)/2), without cancellation; S,
    which leaves the doubles below 220 K, enters by its logarithm.

    References
    ----------
    Saha 1920, Phil. Mag. 40, 472 (from memory).
    """
    density = _positive("hydrogen_density_cm3", hydrogen_density_cm3)
    temperature = _positive("temperature_k", temperature_k)
    energy = _positive("ionization_energy_ev", ionization_energy_ev)
    log_s = (
        1.5 * np.log(_WAVELENGTH_PER_CM2_K * temperature)
        - np.log(density)
        - energy / (const.BOLTZMANN_EV_K * temperature)
    )
    # asinh(e^half/2) is `half` to rounding from about 20 on; the exponential overflows at 709.
    half = 0.5 * log_s
    steep = np.arcsinh(0.5 * np.exp(np.minimum(half, 300.0)))
    odds: FloatArray = half + np.where(half > 300.0, half, steep)
    return odds


def _positive(name: str, values: ArrayLike) -> FloatArray:
    array = np.asarray(values, dtype=float)
    good = (array > 0.0) & (array < np.inf)
    if not np.all(good):
        raise InputError(f"{name} = {array[~good].flat[0]:g}: must be positive and finite")
    return array
