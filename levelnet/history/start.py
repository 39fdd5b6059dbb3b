"""Where Saha equilibrium hands over to the integration, and by how much it errs there."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from ..arrays import FloatArray
from ..atomic.detailed_balance import log_saha_factor
from ..background.matter import saha_log_odds
from ..errors import InputError
from .equations import SlowEquations
from .ion_network import Around

# T_r between which a hand-over is looked for, in steps of 5 per cent; at the upper end hydrogen is
# in Saha equilibrium in any cosmology the setup admits.
COLDEST_K, _HOTTEST_K, _FACTOR = 1100.0, 25_000.0, 1.05
# The same with helium, in units of its energies: its tables end there.
_COLDEST_HELIUM_K, _HOTTEST_HELIUM_K = 8000.0, 27_500.0
# Least ln(n_e/n_H) of Saha equilibrium from COLDEST_K on.
_FEWEST_ELECTRONS = -200.0


@dataclass(frozen=True, slots=True)
class Handover:
    """The start of the integration.

    Attributes
    ----------
    redshift : float, dimensionless
        Where Saha equilibrium is left.
    departure : float, dimensionless
        Lag of the neutral fraction there behind Saha equilibrium, relative.
    helium_departure, helium_ion_departure : float, dimensionless
        Those of x_HeI and of x_HeII/x_HeIII; 0 without helium.
    """

    redshift: float
    departure: float
    helium_departure: float = 0.0
    helium_ion_departure: float = 0.0


def equilibrium_state(equations: SlowEquations, log_scale: float) -> tuple[FloatArray, float]:
    """Saha equilibrium with its first-order lag behind the expansion.

    Parameters
    ----------
    equations : SlowEquations
        The run.
    log_scale : float
        s = ln a.

    Returns
    -------
    state : ndarray, shape (2,), with helium (4,)
        y_Saha + J^-1 dy_Saha/ds, J the Jacobian and v_Saha = ln(T_m/T_r) of matter that the
        radiation does not heat, which falls as 1/a: the lag of ionization behind the expansion,
        v = -H/Gamma, and what the cooler matter does to ionization.
    lag : float
        The lag of u behind the expansion alone, (du_Saha/ds)/(d(du/ds)/du); infinite where nothing
        holds hydrogen in equilibrium.
    """
    state, lag = _lagging(equations, log_scale)
    return state, float(lag[0])


def ion_lags(equations: SlowEquations, log_scale: float) -> FloatArray:
    """Lags behind Saha equilibrium of ln(x_HII/x_HI), ln(x_HeII+III/x_HeI), ln(x_HeIII/x_HeII).

    Each behind the expansion alone; shape (3,), without helium (1,).
    """
    return np.delete(_lagging(equations, log_scale)[1], 1)


def _lagging(equations: SlowEquations, log_scale: float) -> tuple[FloatArray, FloatArray]:
    """State with its lag, and the lag of each variable behind the expansion alone."""
    step = 1e-4
    drift = saha_state(equations, log_scale + step) - saha_state(equations, log_scale - step)
    drift /= 2.0 * step
    state = saha_state(equations, log_scale)
    matrix, _ = equations.jacobian(log_scale, state)
    held = np.diag(matrix)
    lag = np.where(held == 0.0, np.inf, drift / np.where(held == 0.0, 1.0, held))
    if matrix[0, 0] == 0.0:
        return state, lag
    drift[1] = 1.0  # Saha equilibrium has v = 0, and -1 stands in dv/ds
    moving = held != 0.0  # below its range helium stands still
    shift = np.zeros(len(state))
    shift[moving] = np.linalg.solve(matrix[np.ix_(moving, moving)], drift[moving])
    return state + shift, lag


def saha_state(equations: SlowEquations, log_scale: float) -> FloatArray:
    """Saha equilibrium of every ion at T_m = T_r, as a state."""
    around = equations.background(log_scale)
    # The network's own ionization energy, so that equilibrium is the same in both.
    kept = equations.reduced.kept
    ionization = float(kept.energy_ev[0] + kept.ionization_energy_ev[0])
    temperature = around.radiation_temperature_k
    if equations.helium is None:
        # Density counts per thermal volume, which goes as the mass of the electron to -3/2.
        density = around.hydrogen_density_cm3 * equations.scales.reduced_mass**-1.5
        return np.array([float(saha_log_odds(density, temperature, ionization)), 0.0])
    helium, ratio = equations.helium, equations.cosmology.helium_ratio()
    log_hydrogen = -float(log_saha_factor(2.0, ionization, temperature))
    log_hydrogen += 1.5 * math.log(equations.scales.reduced_mass)

    def state(log_electrons: float) -> FloatArray:
        electrons = math.exp(log_electrons)
        place = Around(
            temperature,
            temperature,
            ratio * around.hydrogen_density_cm3,
            around.hubble_rate_per_s,
            electrons / ratio,
            around.hubble_slope,
        )
        first, second = (helium.saha_log_ratio(stage, place) for stage in (0, 1))
        odds = log_hydrogen - math.log(around.hydrogen_density_cm3) - log_electrons
        return np.array([odds, 0.0, first + np.logaddexp(0.0, second), second])

    def excess(log_electrons: float) -> float:
        return math.log(equations.electron_fraction(state(log_electrons))) - log_electrons

    # n_e/n_H cannot be above 1 + 2 f_He; by a rounding it may.
    most = math.log1p(2.0 * ratio) + 1e-9
    found = float(brentq(excess, _FEWEST_ELECTRONS, most, xtol=1e-15, rtol=1e-15))
    return state(found)


def find_handover(equations: SlowEquations, tolerance: float) -> Handover:
    """Lowest redshift where the lag behind Saha equilibrium is within `tolerance`.

    With helium, where that of each of its ions is too; or the highest redshift that its tables
    reach, if there it still is not (the state there has the lag to first order).

    Raises
    ------
    InputError
        If hydrogen is never close enough to equilibrium (no channel to the ground state to speak
        of).
    """
    helium = equations.helium
    if helium is None:
        return hydrogen_handover(equations, tolerance)

    def excess(log_growth: float) -> float:
        lag = ion_lags(equations, -log_growth)
        # Held in Saha equilibrium the second ionization starts anywhere.
        watched = lag if helium.second else lag[:2]
        return math.log(float(np.max(np.abs(watched))) / tolerance)

    today = float(equations.cosmology.radiation_temperature_k(0.0))
    unit = helium.scales.energy
    low, high = (math.log(unit * k / today) for k in (_COLDEST_HELIUM_K, _HOTTEST_HELIUM_K))
    below = low
    while excess(below) > 0.0 and below < high:
        low, below = below, min(below + math.log(_FACTOR), high)
    redshift = math.expm1(below)
    if low < below and excess(below) < 0.0:
        redshift = math.expm1(brentq(excess, low, below, xtol=1e-3))
        redshift = min(math.ceil(redshift / 10.0) * 10.0, math.expm1(high))
    return _handover(equations, redshift)


def hydrogen_handover(equations: SlowEquations, tolerance: float) -> Handover:
    """Lowest redshift where the lag of hydrogen is within `tolerance`, whatever helium does."""

    def excess(log_growth: float) -> float:
        lag = abs(equilibrium_state(equations, -log_growth)[1])
        return math.log(lag / tolerance)

    today = float(equations.cosmology.radiation_temperature_k(0.0))
    low = math.log(COLDEST_K / today)
    if excess(low) < 0.0:
        return _handover(equations, math.expm1(low))
    while math.exp(low) * today < _HOTTEST_K:
        high = low + math.log(_FACTOR)
        if excess(high) < 0.0:
            redshift = math.expm1(brentq(excess, low, high, xtol=1e-3))
            # Round up, so that the tolerance holds and the start is a plain number.
            unit = 10.0 ** math.floor(math.log10(redshift) - 2.0)
            return _handover(equations, math.ceil(redshift / unit) * unit)
        low = high
    raise InputError(
        "lines, hydrogen.two_photon_rate_per_s: hydrogen has no channel to the ground state strong "
        f"enough to be in Saha equilibrium at T_r = {_HOTTEST_K:g} K"
    )


def _handover(equations: SlowEquations, redshift: float) -> Handover:
    return Handover(redshift, *np.abs(ion_lags(equations, -math.log1p(redshift))).tolist())
