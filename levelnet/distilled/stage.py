"""Tables of effective rates of one stage of helium: He I, or the hydrogenic He II.

Stored as those of hydrogen are (:mod:`levelnet.distilled.table`), over the temperatures at which
helium recombines.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.detailed_balance import SahaCoefficients, saha_coefficients
from ..atomic.physics import Scales
from ..kernels.effective import Atom
from ..network.rates import RateConstants
from ..network.reduced import KeptLevels
from ..network.scaled import scaled_levels
from ..numerics.chebyshev import ChebyshevSeries
from .effective import EffectiveRates
from .patches import Ranges, fit_patches
from .series import position_in, rates_at
from .species import AtomName


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
    saha = stage_saha(stage, ion_weight)
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


def stage_rates(
    stage: StageTable,
    radiation_temperature_k: ArrayLike,
    matter_temperature_k: ArrayLike,
    atom: AtomName,
    factor: Scales,
) -> EffectiveRates:
    """Rates of a stage at many temperatures; RangeError outside its range.

    Parameters
    ----------
    stage : StageTable
        The table.
    radiation_temperature_k, matter_temperature_k : array_like, K
        Broadcast.
    atom : "He I" or "He II"
        Whose table it is.
    factor : Scales
        What changed constants do to it.
    """
    place = position_in(
        stage, radiation_temperature_k, matter_temperature_k, factor.energy, f"the table of {atom}"
    )
    neutral = atom == "He I"
    kept = KeptLevels(
        stage.n,
        stage.l,
        stage.statistical_weight,
        stage.energy_ev,
        stage.ionization_energy_ev,
        1.0 if neutral else 2.0,
        stage.spin if neutral else None,
    )
    saha = stage_saha(stage, 2.0 if neutral else 1.0)
    return rates_at(stage, scaled_levels(kept, factor), saha, factor, place)


def stage_saha(stage: StageTable, ion_weight: float) -> SahaCoefficients:
    """Saha coefficients of the kept levels; `ion_weight` is that of the ion above them."""
    return saha_coefficients(stage.statistical_weight / ion_weight, stage.ionization_energy_ev, 2)
