"""Tables of effective rates of one stage of helium: He I, or the hydrogenic He II.

Stored as those of hydrogen are (:mod:`levelnet.distilled.table`), over the temperatures at which
helium recombines.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.detailed_balance import saha_coefficients
from ..kernels.effective import Atom
from ..network.rates import RateConstants
from ..network.reduced import KeptLevels
from ..numerics.chebyshev import ChebyshevSeries
from .patches import Ranges, fit_patches


@dataclass(frozen=True, slots=True, eq=False)
class StageTable:
    """Effective rates of He I or He II.

    Attributes
    ----------
    n, l, spin : ndarray of int, shape (n_kept,)
        Quantum numbers; the spin of He II is 0 and says nothing.
    statistical_weight : ndarray, shape (n_kept,), dimensionless
        Of each kept level.
    energy_ev, ionization_energy_ev : ndarray, shape (n_kept,), eV
        Above the ground state, and to the continuum.
    log_low, log_high : float, dimensionless
        Range of x = ln(T_r/K).
    ratio_low, ratio_high : float, dimensionless
        Range of y = ln(T_m/T_r).
    equilibrium, exchange, departure : ndarray
        As in :class:`levelnet.distilled.table.EffectiveTable`.
    lower, upper : ndarray of int, shape (n_pairs,)
        Pairs of kept levels.
    barrier_k, rise_k, log_weight_ratio : ndarray, shape (n_pairs,)
        As there.
    """

    n: IntArray
    l: IntArray
    spin: IntArray
    statistical_weight: FloatArray
    energy_ev: FloatArray
    ionization_energy_ev: FloatArray
    log_low: float
    log_high: float
    ratio_low: float
    ratio_high: float
    equilibrium: FloatArray
    exchange: FloatArray
    departure: FloatArray
    lower: IntArray
    upper: IntArray
    barrier_k: FloatArray
    rise_k: FloatArray
    log_weight_ratio: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        n_x, n_kept, order = self.equilibrium.shape
        n_pairs, n_y = n_kept * (n_kept - 1) // 2, self.departure.shape[1]
        frozen_array(self, "equilibrium", (n_x, n_kept, order))
        frozen_array(self, "exchange", (n_x, n_pairs, order))
        frozen_array(self, "departure", (n_x, n_y, n_kept, order, order))
        for name in ("n", "l", "spin"):
            frozen_array(self, name, (n_kept,), np.int64)
        for name in ("statistical_weight", "energy_ev", "ionization_energy_ev"):
            frozen_array(self, name, (n_kept,))
        for name in ("lower", "upper"):
            frozen_array(self, name, (n_pairs,), np.int64)
        for name in ("barrier_k", "rise_k", "log_weight_ratio"):
            frozen_array(self, name, (n_pairs,))

    @property
    def ionization_ev(self) -> float:
        """Ionization energy of the ground state, eV."""
        return float(self.energy_ev[0] + self.ionization_energy_ev[0])

    @property
    def size(self) -> int:
        """How many coefficients it holds."""
        return self.equilibrium.size + self.exchange.size + self.departure.size


class Pieces:
    """Series of several pieces, end to end, as one."""

    def __init__(self, series: Sequence[ChebyshevSeries]) -> None:
        self.series = series

    def evaluate(self, x: float) -> tuple[FloatArray, FloatArray]:
        """Values and slopes at x; RangeError outside."""
        piece = next((one for one in self.series[:-1] if x < one.high), self.series[-1])
        return piece.evaluate(x)


def make_stage(
    kept: KeptLevels,
    series: Sequence[ChebyshevSeries],
    constants: RateConstants,
    ranges: Ranges,
    tolerance: float,
) -> StageTable:
    """Fit the patches of one stage; SolveError where they do not reach `tolerance`.

    Parameters
    ----------
    kept : KeptLevels
        The kept levels.
    series : sequence of ChebyshevSeries
        What is fitted, coldest first.
    constants : RateConstants
        What turns stored values into rates.
    ranges : Ranges
        What the table is to cover.
    tolerance : float, dimensionless
        Largest error of the ln of any rate against the series.
    """
    patches = fit_patches(Pieces(series), constants, ranges, tolerance)
    return StageTable(
        kept.n,
        kept.l,
        np.zeros(len(kept), dtype=np.int64) if kept.spin is None else kept.spin,
        kept.statistical_weight,
        kept.energy_ev,
        kept.ionization_energy_ev,
        *ranges,
        *patches,
        constants.lower,
        constants.upper,
        constants.barrier_k,
        constants.rise_k,
        constants.log_weight_ratio,
    )


def stage_atom(
    stage: StageTable,
    ground_weight: float,
    ion_weight: float,
    line: tuple[IntArray, FloatArray] = (np.zeros(0, dtype=np.int64), np.zeros((3, 0))),
    decay_rate_per_s: float = 0.0,
) -> Atom:
    """Pack a stage as the kernels see it.

    Parameters
    ----------
    stage : StageTable
        The table.
    ground_weight, ion_weight : float, dimensionless
        Statistical weights of the ground state and of the ion above it.
    line : ndarray of int, shape (n_lines,), and ndarray, shape (3, n_lines)
        Upper level of each line in Sobolev's treatment; A in s^-1, tau H/n_1 in cm^3/s, energy over
        the Boltzmann constant in K.
    decay_rate_per_s : float, s^-1
        Of the first kept level, by two photons.
    """
    saha = saha_coefficients(stage.statistical_weight / ion_weight, stage.ionization_energy_ev, 2)
    level = [
        np.log(stage.statistical_weight / ground_weight),
        stage.energy_ev / const.BOLTZMANN_EV_K,
        saha.offset,
        saha.ionization_k,
    ]
    constants = np.zeros(7)
    constants[0] = decay_rate_per_s
    return Atom(
        np.array([stage.log_low, stage.log_high, stage.ratio_low, stage.ratio_high]),
        np.array(stage.equilibrium),
        np.array(stage.exchange),
        np.array(stage.departure),
        np.array(stage.lower),
        np.array(stage.upper),
        np.stack([stage.barrier_k, stage.rise_k, stage.log_weight_ratio]),
        np.stack(level),
        np.array(line[0]),
        np.array(line[1]),
        2,
        np.zeros((1, 1)),
        np.zeros(len(stage.n) + len(stage.lower)),
        constants,
    )


def log_rates(
    stage: StageTable, radiation_k: FloatArray, ratio: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Ln of recombination (cm^3/s) and of downward exchange (s^-1, barrier kept out).

    Parameters
    ----------
    stage : StageTable
        The table.
    radiation_k, ratio : ndarray, shape (n_points,), K and dimensionless
        T_r and ln(T_m/T_r), inside the table.

    Returns
    -------
    ndarray, shapes (n_points, n_kept) and (n_points, n_pairs)
    """
    recombination, exchange = [], []
    n_x, n_y = stage.departure.shape[:2]
    order = np.arange(stage.equilibrium.shape[-1])
    for temperature_k, y in zip(radiation_k.tolist(), ratio.tolist(), strict=True):
        i, t = _cell(math.log(temperature_k), stage.log_low, stage.log_high, n_x)
        j, w = _cell(y, stage.ratio_low, stage.ratio_high, n_y)
        power_t, power_w = t**order, w**order
        departure = stage.departure[i, j] @ power_w @ power_t
        recombination.append(stage.equilibrium[i] @ power_t + y * departure)
        exchange.append(stage.exchange[i] @ power_t)
    return np.array(recombination), np.array(exchange)


def _cell(x: float, low: float, high: float, count: int) -> tuple[int, float]:
    place = (x - low) * count / (high - low)
    cell = min(max(int(place), 0), count - 1)
    return cell, 2.0 * (place - cell) - 1.0
