"""A cosmology as the compiled history sees it, with what each parameter does to it."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.physics import Scales
from ..background.cosmology import Cosmology
from ..background.friedmann import photon_density_h2
from ..background.neutrinos import NEUTRINO_PHOTON_RATIO, energy_ratio, energy_ratio_slope
from ..kernels.effective import (
    DRIVE_COMPTON,
    DRIVE_DENSITY,
    DRIVE_HELIUM,
    DRIVE_MASS,
    DRIVE_SCALE,
    DRIVE_STRUCTURE,
    DRIVE_TEMPERATURE,
    N_DRIVES,
    Universe,
)

COSMOLOGICAL = (
    "hubble_km_s_mpc",
    "baryon_density_h2",
    "matter_density_h2",
    "cmb_temperature_k",
    "helium_mass_fraction",
    "effective_neutrinos",
)
CONSTANTS = ("fine_structure_change", "electron_mass_change")
# Spacing of the nodes of ln H in ln a: cubic Hermite pieces are then good to 1e-10.
_SPACING = 0.0125


def make_universe(
    cosmology: Cosmology, low: float, high: float, drive: FloatArray | None = None
) -> Universe:
    """Tabulate the background over s = ln a.

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    low, high : float, dimensionless
        Range of s.
    drive : ndarray, shape (n_parameters, 7), optional
        From :func:`make_drive`; None: no derivatives.
    """
    count = max(4, math.ceil((high - low) / _SPACING)) + 1
    nodes = np.linspace(low, high, count)
    growth = np.exp(-nodes)
    redshift = np.maximum(growth - 1.0, 0.0)
    log_hubble = np.empty((count, 2))
    log_hubble[:, 0] = np.log(cosmology.hubble_rate_per_s(redshift))
    log_hubble[:, 1] = -cosmology.hubble_log_slope(redshift)
    today = np.array(
        [
            math.log(cosmology.cmb_temperature_k),
            float(cosmology.hydrogen_density_cm3(0.0)),
            cosmology.helium_ratio(),
            low,
            (high - low) / (count - 1),
            cosmology.cmb_temperature_k,
        ]
    )
    if drive is None:
        return Universe(today, log_hubble, np.zeros((0, N_DRIVES)), np.zeros((count, 0)))
    return Universe(today, log_hubble, drive, hubble_derivatives(cosmology, growth, len(drive)))


def helium_mass_fraction(cosmology: Cosmology) -> float:
    """True mass fraction, however the cosmology was given."""
    mass = const.HELIUM_HYDROGEN_MASS_RATIO * cosmology.helium_ratio()
    return mass / (1.0 + mass)


def make_drive(
    cosmology: Cosmology, scales: Scales, changes: tuple[float, float], n: int
) -> FloatArray:
    """What each parameter does: the six cosmological, two constants, then `n` ln scale factors.

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    scales : Scales
        What the constants in use do.
    changes : tuple of float
        Relative changes of the fine-structure constant and of the electron mass in use.
    n : int
        Number of scale factors.
    """
    drive = np.zeros((len(COSMOLOGICAL) + len(CONSTANTS) + n, N_DRIVES))
    drive[:, DRIVE_SCALE] = -1.0
    fraction = helium_mass_fraction(cosmology)
    drive[1, DRIVE_DENSITY] = 1.0 / cosmology.baryon_density_h2
    drive[3, DRIVE_TEMPERATURE] = 1.0 / cosmology.cmb_temperature_k
    drive[4, DRIVE_DENSITY] = -1.0 / (1.0 - fraction)
    drive[4, DRIVE_HELIUM] = 1.0 / (const.HELIUM_HYDROGEN_MASS_RATIO * (1.0 - fraction) ** 2)
    structure, mass = (1.0 / (1.0 + change) for change in changes)
    drive[6, DRIVE_STRUCTURE], drive[6, DRIVE_COMPTON] = structure, 2.0 * structure
    # The reduced mass grows less than the electron: d ln mu/d ln m_e = mu/m_e.
    ratio = scales.reduced_mass / (1.0 + changes[1]) / (1.0 + const.ELECTRON_PROTON_MASS_RATIO)
    drive[7, DRIVE_MASS], drive[7, DRIVE_COMPTON] = mass * ratio, -3.0 * mass
    drive[8:, DRIVE_SCALE] = np.arange(n)
    return drive


def hubble_derivatives(cosmology: Cosmology, growth: FloatArray, n: int) -> FloatArray:
    """D ln H by each of `n` parameters, shape (n_growth, n); growth = 1 + redshift.

    The first six are the cosmological ones; dark energy closes the budget. A tabulated expansion
    does not move with the parameters.
    """
    result = np.zeros((len(growth), n))
    if n == 0 or cosmology.expansion_redshift is not None:
        return result
    law = cosmology._law
    dark = dataclasses.replace(law, dark_energy=1.0).dark_energy_h2(growth)
    h, curvature = cosmology.hubble_km_s_mpc / 100.0, cosmology.curvature_density
    result[:, 0] = 0.02 * h * ((1.0 - curvature) * dark + curvature * growth**2)
    result[:, 2] = growth**3 - dark
    radiation = growth**4 - dark
    photons = photon_density_h2(cosmology.cmb_temperature_k)
    result[:, 3] = 4.0 * law.radiation * radiation + _massive(cosmology, growth, dark, 4.0)
    result[:, 3] /= cosmology.cmb_temperature_k
    neff = cosmology.effective_neutrinos
    if neff > 0.0:
        massive = _massive(cosmology, growth, dark, 1.0)
        result[:, 5] = ((law.radiation - photons) * radiation + massive) / neff
    else:
        result[:, 5] = NEUTRINO_PHOTON_RATIO * photons * radiation
    return result * (0.5 / law.square(growth))[:, None]


def _massive(
    cosmology: Cosmology, growth: FloatArray, dark: FloatArray, power: float
) -> FloatArray:
    """What massive neutrinos add where their density grows as (T_nu)^`power` while relativistic.

    The mass over T_nu falls as 1/T and as N_eff^(-1/4): as the power/4 of either.
    """
    total = np.zeros_like(growth)
    for density, ratio in cosmology._law.massive:
        y, today = ratio / growth, np.array([ratio])
        early = energy_ratio(y) * (power - 0.25 * power * energy_ratio_slope(y)) * growth**4
        late = energy_ratio(today) * (power - 0.25 * power * energy_ratio_slope(today))
        total += density * (early - late * dark)
    return total
