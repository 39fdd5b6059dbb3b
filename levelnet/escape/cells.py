"""The frequency grid of the resolved field, and what levels and lines do in its cells."""

from __future__ import annotations

import functools
import math

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.second_order import (
    HIGHEST_INTERMEDIATE,
    level_energy_ev,
    raman_spectrum_per_s_hz,
    two_photon_spectrum_per_s_hz,
)
from ..atomic.two_photon import two_photon_rate
from ..kernels.transfer import Cells
from ..network.reduced import KeptLevels
from .frequency_step import highest_line
from .lines import RAMAN_LEVELS, Lines, Transfer
from .treatment import ResonanceLines

# ln(nu/nu_Lya) out to which scattering is followed: there it has fallen to 1e-4 of its effect.
_SCATTERING_REACH = 0.03
# Gauss points in a cell, and within how many cells of a line more are used.
_POINTS, _MORE_POINTS, _NEAR = 2, 8, 12


def frequency_cells(
    kept: KeptLevels,
    resonance: ResonanceLines,
    lines: Lines,
    step: float,
    two_photon_rate_per_s: float,
    rate_scale: float = 1.0,
) -> Cells:
    """Lay out the grid.

    Parameters
    ----------
    kept : KeptLevels
        The kept levels; all that ``lines.field_levels`` names must be among them.
    resonance : ResonanceLines
        The open Lyman lines.
    lines : Lines
        What takes part.
    step : float, dimensionless
        Width of a cell in ln nu, from :func:`fitted_step`.
    two_photon_rate_per_s : float, s^-1
        Spontaneous 2s-1s rate of the measured atom.
    rate_scale : float, dimensionless
        What changed constants do to second-order rates.

    Returns
    -------
    Cells
        For the kernels.
    """
    count, top = len(resonance.names), highest_line(step)
    lowest = math.floor(math.log(0.5) / step + 0.5)
    end = 0.5 * (level_energy_ev(top) + level_energy_ev(top + 1)) / level_energy_ev(2)
    number = np.arange(lowest, math.floor(math.log(float(end)) / step))
    offset = np.asarray(number * step, dtype=np.float64)
    growth: FloatArray = np.exp(3.0 * offset)
    chosen = lines.field_levels
    position = {level: k for k, level in enumerate(kept)}
    weight = np.zeros((len(chosen), len(number)))
    for k, name in enumerate(chosen):
        rates = _rates_in_cells(name, _ways(name, lines), step, lowest, len(number))
        weight[k] = rate_scale * rates
        if name == (2, 0):
            weight[k, number < 0] *= two_photon_rate_per_s / two_photon_rate()
    level = np.array([position[one] for one in chosen], dtype=np.int64)
    alpha_ev = float(resonance.energy_ev[0])
    upper_n = np.arange(2, count + 2)
    line_cell = np.rint(np.log(level_energy_ev(upper_n) / level_energy_ev(2)) / step) - lowest
    edge, conductance = _scattering(lines, step, lowest)
    return Cells(
        offset,
        growth,
        weight,
        level,
        kept.energy_ev[level] - alpha_ev,
        line_cell.astype(np.int64),
        resonance.upper.astype(np.int64),
        resonance.weight_ratio
        * resonance.einstein_a_per_s
        * resonance.wavelength_cm**3
        / (8.0 * np.pi),
        conductance,
        edge,
        alpha_ev,
        step,
        int(not _choice(lines).feedback),
    )


def _choice(lines: Lines) -> Transfer:
    assert lines.transfer is not None  # with `hydrogen = "transfer"` it always is there
    return lines.transfer


def _ways(level: tuple[int, int], lines: Lines) -> tuple[bool, bool]:
    """Whether a level decays by two photons through the field, and whether it scatters (Raman)."""
    choice = _choice(lines)
    if level == (2, 0):
        return lines.two_photon == "distorted", choice.raman
    return choice.excited_two_photon, choice.raman and level in RAMAN_LEVELS


def _scattering(lines: Lines, step: float, lowest: int) -> tuple[int, FloatArray]:
    """First cell with scattering and the conductances between them; nothing where it is off."""
    if not _choice(lines).scattering:
        return 0, np.zeros(1)
    reach = math.floor(_SCATTERING_REACH / step)
    low = np.arange(-reach, reach) * step
    # 1/delta^2 between two middles as a steady flux sees it: the mean of delta^2 in ln nu.
    mean = ((low + step) ** 3 - low**3) / (3.0 * step)
    middle = low + 0.5 * step
    stretch = np.expm1(middle) / middle
    conductance = np.exp(3.0 * middle) / (step * mean * stretch**2)
    return -reach - lowest, np.concatenate([[0.0], conductance, [0.0]])


@functools.lru_cache(maxsize=64)
def _rates_in_cells(
    level: tuple[int, int], ways: tuple[bool, bool], step: float, lowest: int, count: int
) -> FloatArray:
    """Second-order rate of a level integrated over each cell, s^-1; zero in the cells of lines."""
    n, l = level
    number = np.arange(lowest, lowest + count)
    own = math.log(float(level_energy_ev(n) / level_energy_ev(2)))
    poles = np.log(level_energy_ev(np.arange(2, HIGHEST_INTERMEDIATE)) / level_energy_ev(2)) / step
    rates = np.zeros(count)
    low, high = (number - 0.5) * step, (number + 0.5) * step
    spectra = (
        (ways[0], two_photon_spectrum_per_s_hz, own - math.log(2.0), own),
        (ways[1], raman_spectrum_per_s_hz, own, math.inf),
    )
    nearest = np.min(np.abs(number[:, None] - poles), axis=1)
    for wanted, spectrum, bottom, top in spectra:
        if not wanted:
            continue
        for points, where in ((_MORE_POINTS, nearest < _NEAR), (_POINTS, nearest >= _NEAR)):
            first, last = np.maximum(low, bottom), np.minimum(high, top)
            place = np.flatnonzero(where & (first < last))
            nodes, weights = np.polynomial.legendre.leggauss(points)
            middle = 0.5 * (first + last)[place, None]
            half = 0.5 * (last - first)[place, None]
            energy_ev = level_energy_ev(2) * np.exp(middle + half * nodes)
            values = spectrum(n, l, energy_ev) * energy_ev / const.PLANCK_EV_S
            rates[place] += (values * half) @ weights
    rates[(np.rint(poles[poles < number[-1] + 0.5]) - lowest).astype(int)] = 0.0
    rates.flags.writeable = False  # all who ask again get the same array
    return rates
