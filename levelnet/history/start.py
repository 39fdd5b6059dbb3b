"""Where Saha equilibrium hands over to the integration, and by how much it errs there."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from ..arrays import FloatArray
from ..background.matter import saha_log_odds
from ..errors import InputError
from .equations import SlowEquations

# T_r between which a hand-over is looked for, in steps of 5 per cent; at the upper end hydrogen is
# in Saha equilibrium in any cosmology the setup admits.
_COLDEST_K, _HOTTEST_K, _FACTOR = 1100.0, 25_000.0, 1.05


@dataclass(frozen=True, slots=True)
class Handover:
    """The start of the integration.

    Attributes
    ----------
    redshift : float, dimensionless
        Where Saha equilibrium is left.
    departure : float, dimensionless
        Lag of the neutral fraction there behind Saha equilibrium, relative.
    """

    redshift: float
    departure: float


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
    state : ndarray, shape (2,)
        (u_Saha, 0) + J^-1 (du_Saha/ds, 1), J the Jacobian: the lag of ionization behind the
        expansion, v = -H/Gamma, and what the cooler matter does to ionization.
    lag : float
        The lag of u behind the expansion alone, (du_Saha/ds)/(d(du/ds)/du); infinite where nothing
        holds hydrogen in equilibrium.
    """

    def saha(s: float) -> float:
        around = equations.background(s)
        # The network's own ionization energy, so that equilibrium is the same in both.
        kept = equations.reduced.kept
        ionization = float(kept.energy_ev[0] + kept.ionization_energy_ev[0])
        # Density counts per thermal volume, which goes as the mass of the electron to -3/2.
        density = around.hydrogen_density_cm3 * equations.scales.reduced_mass**-1.5
        return float(saha_log_odds(density, around.radiation_temperature_k, ionization))

    step = 1e-4
    drift = (saha(log_scale + step) - saha(log_scale - step)) / (2.0 * step)
    state = np.array([saha(log_scale), 0.0])
    matrix, _ = equations.jacobian(log_scale, state)
    if matrix[0, 0] == 0.0:
        return state, math.inf
    shift = np.linalg.solve(matrix, np.array([drift, 1.0]))
    return state + shift, float(drift / matrix[0, 0])


def find_handover(equations: SlowEquations, tolerance: float) -> Handover:
    """Lowest redshift where the lag behind Saha equilibrium is within `tolerance`.

    Raises
    ------
    InputError
        If hydrogen is never close enough to equilibrium (no channel to the ground state to speak
        of).
    """

    def excess(log_growth: float) -> float:
        lag = abs(equilibrium_state(equations, -log_growth)[1])
        return math.log(lag / tolerance)

    today = float(equations.cosmology.radiation_temperature_k(0.0))
    low = math.log(_COLDEST_K / today)
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
    return Handover(redshift, abs(equilibrium_state(equations, -math.log1p(redshift))[1]))
