"""What a flow out of the kept levels hangs on: its derivatives by every rate, by one solve.

A flow is phi = l.d, with d the departures of the kept levels from Boltzmann equilibrium with the
ground state. With the fates y = (M + K)^-T l,

    d phi = dl.d + y.(dr - d(M + K) d).

For the net flow to the ground state l = K^T 1, y_i is the chance that an atom put into level i ends
in the ground state, and dl.d - y.dK d = z.(dK d), z = 1 - y the chance that it is ionized again
first. Both are solved for, so that neither is a difference. A pair of levels enters by its net flow
times the difference of the two fates.

A distorted field enters by its excess source e: d phi = -(1 - y).de for the net flow.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy.linalg import lapack

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from .coupling import GroundCoupling
from .reduced import KeptLevels, ReducedRates
from .solve import KeptSolution


class FlowSlopes(NamedTuple):
    """Derivatives of a flow, s^-1 per unit of the logarithm named."""

    ln_radiation_temperature: float
    ln_matter_temperature: float
    ln_hydrogen_density: float
    ln_hubble_rate: float
    ln_electron_fraction: float
    ln_ionized_fraction: float
    ln_ground_fraction: float


class FlowGradient(NamedTuple):
    """Derivatives of one flow by the rates it hangs on, conditions held; all in s^-1.

    Attributes
    ----------
    capture : ndarray, shape (n_kept,)
        By ln A_i.
    ionization : ndarray, shape (n_kept,)
        By ln B_i, negative.
    net_capture : ndarray, shape (n_kept,)
        Their sum, by a common factor on A_i and B_i: small where the two are near balance, and
        formed without their difference.
    lift : ndarray, shape (n_kept,)
        By ln x_B,i, negative: what photoionization takes of the Boltzmann populations.
    exchange : ndarray, shape (n_kept, n_kept)
        By ln R_ij, one direction.
    loss : ndarray, shape (n_kept, n_kept), dimensionless
        By K_ij, its source with it.
    excess : ndarray, shape (n_kept,), dimensionless
        By the excess source of each level.
    channel : ndarray, shape (n_kept,)
        By ln of a common factor on all that leads from level i to the ground state and back.
    """

    capture: FloatArray
    ionization: FloatArray
    net_capture: FloatArray
    lift: FloatArray
    exchange: FloatArray
    loss: FloatArray
    excess: FloatArray
    channel: FloatArray


def less(gradient: FlowGradient, share: float, other: FlowGradient) -> FlowGradient:
    """Gradient of a flow less `share` times that of another."""
    parts = zip(gradient, other, strict=True)
    return FlowGradient(*(one - share * two for one, two in parts))


def net_flow_gradient(
    rates: ReducedRates, coupling: GroundCoupling, solution: KeptSolution
) -> FlowGradient:
    """Gradient of the net flow to the ground state."""
    photo = np.exp(rates.log_photoionization)
    ends = np.stack([coupling.loss.sum(axis=0), photo], axis=1)
    fate, ionized_again = _fates(solution, ends)
    gain = np.where(
        np.add.outer(fate, fate) < 1.0,
        np.subtract.outer(fate, fate),
        -np.subtract.outer(ionized_again, ionized_again),
    )
    return _gradient(rates, photo, solution, fate, gain, ionized_again)


def channel_gradient(
    rates: ReducedRates, coupling: GroundCoupling, solution: KeptSolution, channel: int
) -> FlowGradient:
    """Gradient of the net flow to the ground state out of one kept level."""
    (fate,) = _fates(solution, coupling.loss[channel][:, None])
    own = np.zeros(len(fate))
    own[channel] = 1.0
    gain = np.subtract.outer(fate, fate)
    photo = np.exp(rates.log_photoionization)
    return _gradient(rates, photo, solution, fate, gain, own - fate)


def departure_gradient(rates: ReducedRates, solution: KeptSolution, kept: int) -> FlowGradient:
    """Gradient of the departure of one kept level; times s, for it is no flow."""
    ends = np.zeros((len(solution.departure), 1))
    ends[kept, 0] = 1.0
    (fate,) = _fates(solution, ends)
    photo = np.exp(rates.log_photoionization)
    return _gradient(rates, photo, solution, fate, np.subtract.outer(fate, fate), -fate)


def times(gradient: FlowGradient, factor: float) -> FlowGradient:
    """Gradient of a multiple."""
    return FlowGradient(*(factor * part for part in gradient))


def line_gradient(
    rates: ReducedRates, solution: KeptSolution, upper: int, lower: int, down: float, up: float
) -> FlowGradient:
    """Gradient of the net flow in the line between two kept levels, the line's own rates held.

    Parameters
    ----------
    rates, solution : ReducedRates, KeptSolution
        The kept levels.
    upper, lower : int
        Positions of both levels.
    down, up : float, s^-1
        Rates of the line alone in both directions.
    """
    ends = np.zeros((len(solution.departure), 1))
    ends[upper, 0], ends[lower, 0] = down, -up
    (fate,) = _fates(solution, ends)
    photo = np.exp(rates.log_photoionization)
    return _gradient(rates, photo, solution, fate, np.subtract.outer(fate, fate), -fate)


def _fates(solution: KeptSolution, ends: FloatArray) -> FloatArray:
    """(M + K)^-T of each column of `ends`, one row each."""
    # Exits differ by hundreds of decades; scaled to 1, pivoting does not lose the slow ones.
    exits = np.diagonal(solution.matrix)[:, None]
    fates: FloatArray = lapack.dgesv(solution.matrix.T / exits, ends / exits)[2].T
    return fates


def _gradient(
    rates: ReducedRates,
    photo: FloatArray,
    solution: KeptSolution,
    fate: FloatArray,
    gain: FloatArray,
    kept_back: FloatArray,
) -> FlowGradient:
    d = solution.departure
    return FlowGradient(
        fate * solution.capture,
        -fate * (solution.lift + photo * d),
        fate * (solution.recombination - photo * d),
        -fate * solution.lift,
        -rates.exchange * d[:, None] * gain,
        np.multiply.outer(kept_back, d),
        -kept_back,
        kept_back * solution.flow,
    )


def flow_slopes(
    kept: KeptLevels,
    rates: ReducedRates,
    coupling: GroundCoupling,
    conditions: Conditions,
    gradient: FlowGradient,
) -> FlowSlopes:
    """Derivatives of a flow by the conditions, from those by the rates."""
    kt = const.BOLTZMANN_EV_K * conditions.radiation_temperature_k
    by_column = float((gradient.loss * coupling.slope_column).sum())
    by_radiation = (
        gradient.capture @ rates.recombination_slope_radiation
        + gradient.ionization @ rates.photoionization_slope
        + gradient.lift @ (kept.energy_ev / kt)
        + (gradient.exchange * rates.exchange_slope).sum()
        + (gradient.loss * coupling.slope_temperature).sum()
    )
    captured, lifted = float(gradient.capture.sum()), float(gradient.lift.sum())
    if coupling.excess_by_ground is not None:
        lifted += float(gradient.excess @ coupling.excess_by_ground)
    return FlowSlopes(
        float(by_radiation),
        float(gradient.capture @ rates.recombination_slope_matter),
        captured + by_column,
        -by_column,
        captured,
        captured,
        by_column + lifted,
    )
