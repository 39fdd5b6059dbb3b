"""From what a reduction stores to rates, their inverses and their slopes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..atomic.detailed_balance import (
    SahaCoefficients,
    log_upward_ratio,
    saha_coefficients,
    thermal_volume_cm3,
)
from ..atomic.electron_grid import COLDEST_K
from ..atomic.levels import ionization_scale_ev
from ..errors import RangeError
from .ladder import Ladder
from .reduced import ReducedRates
from .reduction import Node, Pairs

NEVER = -700.0
"""Stored in place of the logarithm of an exchange rate that is zero."""


@dataclass(frozen=True, slots=True, eq=False)
class RateConstants:
    """What turns stored logarithms into rates and does not depend on temperature.

    Attributes
    ----------
    n_kept : int
        Number of kept levels.
    lower, upper : ndarray of int, shape (n_pairs,)
        Pairs of kept levels.
    barrier_k, rise_k : ndarray, shape (n_pairs,), K
        Barrier and energy difference of each pair over the Boltzmann constant.
    log_weight_ratio : ndarray, shape (n_pairs,)
        ln of the weight of the upper level over that of the lower.
    electron_k : ndarray, shape (n_energies, 1), K
        Electron energies of the quadrature over the Boltzmann constant.
    volume_1k_cm3 : float, cm^3
        Cube of the thermal wavelength at 1 K.
    saha : SahaCoefficients
        Of the kept levels.
    """

    n_kept: int
    lower: IntArray
    upper: IntArray
    barrier_k: FloatArray
    rise_k: FloatArray
    log_weight_ratio: FloatArray
    electron_k: FloatArray
    volume_1k_cm3: float
    saha: SahaCoefficients


def rate_constants(ladder: Ladder, pairs: Pairs) -> RateConstants:
    """Prepare the constants of one ladder."""
    kept, lower, upper = ladder.kept, pairs.lower, pairs.upper
    weights = kept.statistical_weight[upper], kept.statistical_weight[lower]
    scale = ionization_scale_ev(ladder.charge) / const.BOLTZMANN_EV_K
    return RateConstants(
        len(kept),
        lower,
        upper,
        pairs.barrier_ev / const.BOLTZMANN_EV_K,
        (kept.energy_ev[upper] - kept.energy_ev[lower]) / const.BOLTZMANN_EV_K,
        log_upward_ratio(*weights, 0.0, 1.0),
        ladder.bound_free.grid.energy[:, None] * scale,
        float(thermal_volume_cm3(1.0, ladder.charge)),
        saha_coefficients(kept.statistical_weight, kept.ionization_energy_ev, ladder.charge),
    )


def stack(node: Node) -> FloatArray:
    """One vector per node, shape (n_pairs + n_kept * n_energies,)."""
    return np.concatenate([np.maximum(node.log_exchange, NEVER), node.log_spectrum.ravel()])


def assemble_rates(
    constants: RateConstants,
    value: FloatArray,
    slope: FloatArray,
    radiation_k: float,
    matter_k: float,
) -> ReducedRates:
    """Rates from a stacked node and its derivative by ln T_r, both of shape (n_stored,)."""
    n_pairs = len(constants.lower)
    if not matter_k >= COLDEST_K:
        raise RangeError(
            f"T_m = {matter_k:g} K: recombination is known down to {COLDEST_K:g} K; "
            "end the grid at a higher redshift"
        )
    spectrum = np.exp(value[n_pairs:]).reshape(constants.n_kept, -1)
    spectrum_slope = spectrum * slope[n_pairs:].reshape(constants.n_kept, -1)
    # Both temperatures at once: columns are T_m and T_r.
    temperature = np.array([matter_k, radiation_k])
    reach = constants.electron_k / temperature
    spread = np.exp(-reach)
    total = spectrum @ spread
    slope_radiation = (spectrum_slope @ spread) / total
    slope_matter = (spectrum @ (reach * spread)) / total - 1.5
    capture = total * (constants.volume_1k_cm3 * temperature**-1.5)
    log_saha = constants.saha.log_factor(radiation_k)
    exchange, exchange_slope = _exchange(constants, value[:n_pairs], slope[:n_pairs], radiation_k)
    return ReducedRates(
        capture[:, 0],
        slope_radiation[:, 0],
        slope_matter[:, 0],
        np.log(capture[:, 1]) - log_saha,
        slope_radiation[:, 1]
        + slope_matter[:, 1]
        + (1.5 + constants.saha.ionization_k / radiation_k),
        exchange,
        exchange_slope,
    )


def _exchange(
    constants: RateConstants, log_rate: FloatArray, slope: FloatArray, radiation_k: float
) -> tuple[FloatArray, FloatArray]:
    """R_ij and d ln R_ij / d ln T_r, the upward direction by detailed balance."""
    i, j = constants.lower, constants.upper
    rate, rate_slope = np.zeros((2, constants.n_kept, constants.n_kept))
    barrier, rise = constants.barrier_k / radiation_k, constants.rise_k / radiation_k
    log_down = log_rate - barrier
    rate[j, i] = np.exp(log_down)
    rate[i, j] = np.exp(log_down + constants.log_weight_ratio - rise)
    rate_slope[j, i] = slope + barrier
    rate_slope[i, j] = slope + barrier + rise
    return rate, rate_slope


def largest_rate_error(
    constants: RateConstants, value: FloatArray, truth: FloatArray, log_temperature: float
) -> float:
    """Largest error in the ln of any rate, for matter as warm as the field and colder by 3."""
    radiation_k = float(np.exp(log_temperature))
    n_pairs = len(constants.lower)
    worst = float(np.max(np.abs(value[:n_pairs] - truth[:n_pairs]), initial=0.0))
    for matter_k in (radiation_k, radiation_k / 3.0):
        spread = np.exp(-constants.electron_k[:, 0] / matter_k)
        capture, exact = (
            np.exp(stored[n_pairs:].reshape(constants.n_kept, -1)) @ spread
            for stored in (value, truth)
        )
        worst = max(worst, float(np.max(np.abs(np.log(capture / exact)))))
    return worst
