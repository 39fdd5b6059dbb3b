"""A cosmology as the compiled history sees it, with what each parameter does to it."""

from __future__ import annotations

import math

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.physics import Scales
from ..background.cosmology import Cosmology
from ..background.parameters import (
    COSMOLOGICAL,
    TEMPERATURE,
    helium_derivatives,
    hubble_derivatives,
    hydrogen_derivatives,
)
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
    by_hubble = np.zeros((count, len(drive)))
    by_hubble[:, : len(COSMOLOGICAL)] = hubble_derivatives(cosmology, growth)
    return Universe(today, log_hubble, drive, by_hubble)


def make_drive(
    cosmology: Cosmology, scales: Scales, changes: tuple[float, float], n: int
) -> FloatArray:
    """What each parameter does: the cosmological, the constants, then `n` ln scale factors.

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
    background, constants, factors = np.split(drive, np.cumsum([len(COSMOLOGICAL), len(CONSTANTS)]))
    drive[:, DRIVE_SCALE] = -1.0
    background[:, DRIVE_DENSITY] = hydrogen_derivatives(cosmology)
    background[:, DRIVE_HELIUM] = helium_derivatives(cosmology)
    background[TEMPERATURE, DRIVE_TEMPERATURE] = 1.0 / cosmology.cmb_temperature_k
    by_structure, by_mass = constants
    structure, mass = (1.0 / (1.0 + change) for change in changes)
    by_structure[DRIVE_STRUCTURE], by_structure[DRIVE_COMPTON] = structure, 2.0 * structure
    # The reduced mass grows less than the electron: d ln mu/d ln m_e = mu/m_e.
    ratio = scales.reduced_mass / (1.0 + changes[1]) / (1.0 + const.ELECTRON_PROTON_MASS_RATIO)
    by_mass[DRIVE_MASS], by_mass[DRIVE_COMPTON] = mass * ratio, -3.0 * mass
    factors[:, DRIVE_SCALE] = np.arange(n)
    return drive
