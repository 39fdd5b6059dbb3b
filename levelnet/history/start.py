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

# Redshifts between which a hand-over is looked for; Saha equilibrium of hydrogen holds at the upper
# end in any cosmology the setup admits.
_LOWEST, _HIGHEST = 400.0, 9000.0


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
        return float(
            saha_log_odds(around.hydrogen_density_cm3, around.radiation_temperature_k, ionization)
        )

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

    low, high = math.log1p(_LOWEST), math.log1p(_HIGHEST)
    if excess(high) > 0.0:
        raise InputError(
            "lines, hydrogen.two_photon_rate_per_s: hydrogen has no channel to the ground state "
            f"strong enough to be in Saha equilibrium at z = {_HIGHEST:g}"
        )
    if excess(low) < 0.0:
        return Handover(_LOWEST, abs(equilibrium_state(equations, -low)[1]))
    found = brentq(excess, low, high, xtol=1e-3)
    # Round up, so that the tolerance holds and the start is a plain number.
    redshift = math.ceil(math.expm1(found) / 10.0) * 10.0
    return Handover(redshift, abs(equilibrium_state(equations, -math.log1p(redshift))[1]))
