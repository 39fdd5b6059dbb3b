"""How fast the upper levels of He I lines leave to anywhere but the ground state."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray
from .helium_lines import HeliumLines


@dataclass(frozen=True, slots=True, eq=False)
class OtherDecays:
    """Lines between excited levels that begin at one of some levels.

    Attributes
    ----------
    energy_ev : ndarray, shape (n_upper, n_others), eV
        Photon energies; 1 where there is no line.
    rate_per_s : ndarray, shape (n_upper, n_others), s^-1
        Rate per photon in the field: A of a line down, A g_above/g of a line up.
    spontaneous : ndarray, shape (n_upper, n_others), dimensionless
        1 for a line down, 0 for a line up.
    position : ndarray of int, shape (n_others,), dimensionless
        Of the other ends among the levels.
    """

    energy_ev: FloatArray
    rate_per_s: FloatArray
    spontaneous: FloatArray
    position: IntArray

    def total(self, radiation_temperature_k: float) -> tuple[FloatArray, FloatArray]:
        """Rates out of each level in a blackbody, and their slopes by ln T_r, s^-1."""
        exponent = self.energy_ev / (const.BOLTZMANN_EV_K * radiation_temperature_k)
        inverse = 1.0 / -np.expm1(-exponent)
        photons = np.exp(-exponent) * inverse
        total = np.sum(self.rate_per_s * (self.spontaneous + photons), axis=1)
        return total, np.sum(self.rate_per_s * exponent * photons * inverse, axis=1)

    def each(self, radiation_temperature_k: float) -> FloatArray:
        """Rates out of each level by every line, s^-1; shape (n_upper, n_others)."""
        exponent = self.energy_ev / (const.BOLTZMANN_EV_K * radiation_temperature_k)
        photons = np.exp(-exponent) / -np.expm1(-exponent)
        rates: FloatArray = self.rate_per_s * (self.spontaneous + photons)
        return rates


def other_decays(lines: HeliumLines, upper: IntArray) -> OtherDecays:
    """Collect every allowed line of some levels but the one to the ground state.

    Parameters
    ----------
    lines : HeliumLines
        Helium.
    upper : ndarray of int, shape (n_upper,)
        Positions of the levels.

    Returns
    -------
    OtherDecays
        Lines up to n_max of `lines`. Photoionization is left out: of 2 1P at 5500 K it is 0.5 per
        cent of the total.
    """
    levels = lines.levels
    weight, energy = levels.statistical_weight, levels.energy_ev
    shape = (len(upper), len(levels))
    gap, rate, spontaneous = np.ones(shape), np.zeros(shape), np.zeros(shape)
    for row, level in enumerate(upper.tolist()):
        for other in range(1, len(levels)):
            down = lines.einstein_a(level, other)
            up = lines.einstein_a(other, level) * weight[other] / weight[level]
            if down + up > 0.0:
                gap[row, other] = abs(energy[level] - energy[other])
                rate[row, other], spontaneous[row, other] = down + up, float(down > 0.0)
    used = rate.any(axis=0)
    position = np.flatnonzero(used)
    return OtherDecays(gap[:, used], rate[:, used], spontaneous[:, used], position)
