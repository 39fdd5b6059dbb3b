"""The 2s-1s two-photon channel to the ground state, as a coupling."""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray
from ..atomic.two_photon import stimulated_two_photon_factor, stimulated_two_photon_slope
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling, blackbody_coupling
from ..network.reduced import KeptLevels
from ..network.solve import log_boltzmann_populations

STIMULATED_NOTE = (
    "two_photon = stimulated: stimulated 2s-1s decay without the absorption of line photons by 1s -> 2s; "
    "the two are about a per cent in x_e each and of opposite sign (Kholupenko & Ivanchik 2006, "
    "Astron. Lett. 32, 795)"
)


def two_photon_coupling(
    kept: KeptLevels, conditions: Conditions, rate_per_s: float, mode: str
) -> GroundCoupling:
    """Couple 2s to the ground state.

    Parameters
    ----------
    kept : KeptLevels
        The kept levels; 2s is the first.
    conditions : Conditions
        Temperatures and fractions.
    rate_per_s : float, s^-1
        Spontaneous rate.
    mode : "spontaneous" or "stimulated"
        Without or with stimulation by the blackbody.

    Returns
    -------
    GroundCoupling
        Net flow Lambda (x_2s - x_B), x_B in Boltzmann equilibrium with the ground state at T_r.

    References
    ----------
    Chluba & Sunyaev 2006, Astron. Astrophys. 446, 39 (stimulated decay).
    """
    factor, slope = 1.0, 0.0
    if mode == "stimulated":
        at = conditions.radiation_temperature_k, float(kept.energy_ev[0])
        factor = float(stimulated_two_photon_factor(*at))
        slope = float(stimulated_two_photon_slope(*at))
    first = np.zeros(len(kept))
    first[0] = rate_per_s * factor
    boltzmann: FloatArray = np.exp(
        log_boltzmann_populations(
            kept, conditions.radiation_temperature_k, conditions.ground_fraction
        )
    )
    return blackbody_coupling(first, np.zeros(len(kept)), first * slope, boltzmann)
