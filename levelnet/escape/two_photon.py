"""The 2s-1s two-photon channel to the ground state, as a coupling."""

from __future__ import annotations

import math

from .. import constants as const
from ..atomic.two_photon import stimulated_two_photon_factor, stimulated_two_photon_slope
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling, with_decay
from ..network.reduced import KeptLevels

STIMULATED_NOTE = (
    "two_photon = stimulated: stimulated 2s-1s decay without the absorption of line photons by "
    "1s -> 2s; "
    "the two are about a per cent in x_e each and of opposite sign (Kholupenko & Ivanchik 2006, "
    "Astron. Lett. 32, 795)"
)


def with_two_photon(
    coupling: GroundCoupling,
    kept: KeptLevels,
    conditions: Conditions,
    rate_per_s: float,
    mode: str,
) -> GroundCoupling:
    """Add the 2s-1s channel to the coupling of the lines.

    Parameters
    ----------
    coupling : GroundCoupling
        Of the lines.
    kept : KeptLevels
        The kept levels; 2s is the first.
    conditions : Conditions
        Temperatures and fractions.
    rate_per_s : float, s^-1
        Spontaneous rate.
    mode : "spontaneous", "stimulated" or "distorted"
        Without or with stimulation by the blackbody; nothing is added where the coupling of the
        lines holds the channel already.

    Returns
    -------
    GroundCoupling
        With net flow Lambda (x_2s - x_B) added, x_B in Boltzmann equilibrium with the ground state
        at T_r.

    References
    ----------
    Chluba & Sunyaev 2006, Astron. Astrophys. 446, 39 (stimulated decay).
    """
    if mode == "distorted":
        return coupling
    slope = 0.0
    if mode == "stimulated":
        at = conditions.radiation_temperature_k, float(kept.energy_ev[0])
        rate_per_s *= float(stimulated_two_photon_factor(*at))
        slope = float(stimulated_two_photon_slope(*at))
    exponent = kept.energy_ev[0] / (const.BOLTZMANN_EV_K * conditions.radiation_temperature_k)
    boltzmann = conditions.ground_fraction * kept.statistical_weight[0] / 2.0 * math.exp(-exponent)
    return with_decay(coupling, 0, rate_per_s, slope, float(boltzmann))
