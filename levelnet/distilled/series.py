"""A table's power series at some temperatures: the one place where they are evaluated.

With x = ln T_r and y = ln(T_m/T_r), a table holds ln A_i(T_r, T_r) over x, the departure h_i of
ln A_i = ln A_i(T_r, T_r) + y h_i(x, y), so that T_m = T_r is exact, and the ln of the downward
exchange rates with the Boltzmann factor of their barrier kept out. Photoionization is never stored:
it follows from ln A_i(T_r, T_r) by detailed balance.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple, TypeAlias

import numpy as np
from numpy.typing import ArrayLike

from ..arrays import BoolArray, FloatArray, IntArray
from ..atomic.detailed_balance import SahaCoefficients
from ..atomic.physics import Scales
from ..errors import RangeError
from ..network.reduced import KeptLevels
from .effective import NEVER, EffectiveRates

if TYPE_CHECKING:
    from .stage import StageTable
    from .table import EffectiveTable

    Stored: TypeAlias = "EffectiveTable | StageTable"

COLLISIONS_K = 8000.0
"""Matter above this and above the radiation would be ionized by collisions, which are left out."""

SLACK = 1e-12
"""Temperatures may miss the ends of a table by this much in the logarithm: rounding."""


class LocalSeries(NamedTuple):
    """A table's series at some temperatures; leading axes are those of the temperatures.

    Attributes
    ----------
    equilibrium, equilibrium_slope : ndarray, shape (..., n_kept)
        ln A_i(T_r, T_r) and its derivative by x.
    departure, departure_slope_x, departure_slope_y : ndarray, shape (..., n_kept)
        h_i and its derivatives.
    exchange, exchange_slope : ndarray, shape (..., n_pairs)
        ln of the downward exchange rate times exp(barrier/kT_r), and its derivative by x.
    """

    equilibrium: FloatArray
    equilibrium_slope: FloatArray
    departure: FloatArray
    departure_slope_x: FloatArray
    departure_slope_y: FloatArray
    exchange: FloatArray
    exchange_slope: FloatArray


def position_in(
    table: Stored,
    radiation_temperature_k: ArrayLike,
    matter_temperature_k: ArrayLike,
    unit: float,
    name: str = "the table",
) -> tuple[FloatArray, FloatArray]:
    """Place x, y in a table; RangeError outside it.

    Parameters
    ----------
    table : EffectiveTable or StageTable
        The table.
    radiation_temperature_k, matter_temperature_k : array_like, K
        Broadcast.
    unit : float, dimensionless
        Factor by which changed constants scale energies.
    name : str
        What messages call the table.
    """
    radiation, matter = np.broadcast_arrays(
        np.asarray(radiation_temperature_k, float), np.asarray(matter_temperature_k, float)
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        x = np.log(radiation / unit)
        y = np.log(matter / radiation)
    low, high = math.exp(table.log_low) * unit, math.exp(table.log_high) * unit
    refuse_outside(
        (x >= table.log_low - SLACK) & (x <= table.log_high + SLACK),
        radiation,
        "T_r = {:g} K",
        f"{low:g} to {high:g} K",
        name,
    )
    refuse_outside(
        (y >= table.ratio_low - SLACK) & (y <= table.ratio_high + SLACK),
        matter / radiation,
        "T_m/T_r = {:g}",
        f"{math.exp(table.ratio_low):g} to {math.exp(table.ratio_high):g}",
        name,
    )
    hottest = COLLISIONS_K * unit
    refuse_outside(
        matter <= np.maximum(hottest, radiation) * (1.0 + SLACK),
        matter,
        "T_m = {:g} K",
        f"up to {hottest:g} K or T_r, whichever is higher; collisional ionization is left out",
        name,
    )
    return x, y


def refuse_outside(
    good: BoolArray, value: FloatArray, text: str, allowed: str, name: str = "the table"
) -> None:
    """Raise RangeError, one line, with the first value that is not good."""
    bad = ~np.asarray(good, bool)
    if bad.any():
        raise RangeError(f"{text.format(value[bad].flat[0])}: outside {name}; allowed: {allowed}")


def local_series(table: Stored, x: FloatArray, y: FloatArray) -> LocalSeries:
    """Evaluate a table's series and their slopes at places inside it."""
    n_x, n_y = table.departure.shape[:2]
    i, t, stretch_x = _cell(x, table.log_low, table.log_high, n_x)
    j, u, stretch_y = _cell(y, table.ratio_low, table.ratio_high, n_y)
    power_t, slope_t = _powers(t, table.equilibrium.shape[-1])
    power_u, slope_u = _powers(u, table.equilibrium.shape[-1])
    equilibrium, exchange, departure = (
        table.equilibrium[i],
        table.exchange[i],
        table.departure[i, j],
    )
    along_y = np.einsum("...kpq,...q->...kp", departure, power_u)
    by_y = np.einsum("...kpq,...q->...kp", departure, slope_u)
    return LocalSeries(
        _sum(equilibrium, power_t),
        _sum(equilibrium, slope_t) * stretch_x,
        _sum(along_y, power_t),
        _sum(along_y, slope_t) * stretch_x,
        _sum(by_y, power_t) * stretch_y,
        _sum(exchange, power_t),
        _sum(exchange, slope_t) * stretch_x,
    )


def exchange_of(
    table: Stored, stored: FloatArray, temperature_k: float | FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Ln of the exchange rates down and up, measured constants; -inf where there are none."""
    # A series that stands for NEVER is a constant; nothing real comes near it.
    down = np.where(stored > NEVER + 1.0, stored - table.barrier_k / temperature_k, -np.inf)
    return down, down + table.log_weight_ratio - table.rise_k / temperature_k


def rates_at(
    table: Stored,
    kept: KeptLevels,
    saha: SahaCoefficients,
    factor: Scales,
    place: tuple[FloatArray, FloatArray],
) -> EffectiveRates:
    """Rates of a table at places x, y inside it.

    Parameters
    ----------
    table : EffectiveTable or StageTable
        The table, of an atom with the measured constants.
    kept : KeptLevels
        Its kept levels, with the constants in use.
    saha : SahaCoefficients
        Of the kept levels with the measured constants.
    factor : Scales
        What changed constants do.
    place : tuple of ndarray
        x and y, of one shape.
    """
    x, y = place
    here, temperature_k = local_series(table, x, y), np.exp(x)[..., None]
    down, up = exchange_of(table, here.exchange, temperature_k)
    n = len(kept)
    exchange = np.full((*np.shape(x), n, n), -np.inf)
    exchange[..., table.upper, table.lower] = down
    exchange[..., table.lower, table.upper] = up
    return EffectiveRates(
        kept,
        here.equilibrium + y[..., None] * here.departure + math.log(factor.recombination),
        here.equilibrium - saha.log_factor(temperature_k) + math.log(factor.line_rate),
        exchange + math.log(factor.line_rate),
    )


def _sum(coefficients: FloatArray, power: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("...kp,...p->...k", coefficients, power))


def _cell(x: FloatArray, low: float, high: float, count: int) -> tuple[IntArray, FloatArray, float]:
    """Cell of each x, position t in it from -1 to 1, and dt/dx."""
    place = (np.asarray(x) - low) * (count / (high - low))
    cell = np.clip(np.floor(place), 0, count - 1).astype(np.int64)
    return cell, np.clip(2.0 * (place - cell) - 1.0, -1.0, 1.0), 2.0 * count / (high - low)


def _powers(t: FloatArray, count: int) -> tuple[FloatArray, FloatArray]:
    """Powers of t and their derivatives, shape (..., count)."""
    order = np.arange(count)
    power = t[..., None] ** order
    slope = np.zeros_like(power)
    slope[..., 1:] = order[1:] * power[..., :-1]
    return power, slope
