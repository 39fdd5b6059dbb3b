"""Photon occupation numbers of the radiation field."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError

Occupation = Callable[[FloatArray], FloatArray]
"""Photon occupation number (dimensionless) as a function of photon energy (eV)."""


def planck_occupation(energy_ev: ArrayLike, temperature_k: ArrayLike) -> FloatArray:
    """Photon occupation number of a blackbody, 1/(exp(E/kT) - 1).

    Parameters
    ----------
    energy_ev : array_like, eV
        Photon energy, above 0.
    temperature_k : array_like, K
        Temperature, 0 or above; broadcasts against `energy_ev`. At 0 there are no photons.

    Returns
    -------
    ndarray, dimensionless
        From 0 (where it would underflow) to kT/E at low energies, to rounding at both ends.
    """
    energy, temperature = np.asarray(energy_ev, float), np.asarray(temperature_k, float)
    if not (energy > 0.0).all():
        raise InputError(f"energy_ev = {np.min(energy):g}: photon energies must be above 0 eV")
    if not (temperature >= 0.0).all():
        raise InputError(f"temperature_k = {np.min(temperature):g}: must be 0 K or above")
    with np.errstate(divide="ignore", under="ignore", over="ignore"):
        reduced = energy / (const.BOLTZMANN_EV_K * temperature)
        # e^-x / (1 - e^-x) cannot overflow, unlike 1 / (e^x - 1).
        occupation: FloatArray = np.exp(-reduced) / -np.expm1(-reduced)
    return occupation
