"""How the rates of change of helium are put together from its two net flows, to first order.

    d(a, b)/ds = B (F_1, F_2) + pull of b to Saha equilibrium,

with the pull in place of the levels of He II where :mod:`levelnet.history.helium` says so, and both
fading where helium is held.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from .helium import HeliumEquations
from .ion_network import Around


class Explicit(NamedTuple):
    """Derivatives of (da/ds, db/ds), state and both flows held; shape (2,) each.

    Attributes
    ----------
    by_flows : ndarray, shape (2, 2), s
        B.
    by_temperature, by_electrons, by_hubble : ndarray, dimensionless
        By ln of T_r and T_m in step, of n_e, and of H.
    """

    by_flows: FloatArray
    by_temperature: FloatArray
    by_electrons: FloatArray
    by_hubble: FloatArray


def explicit_rates(
    helium: HeliumEquations, around: Around, state: FloatArray, flows: FloatArray
) -> Explicit:
    """Derivatives at (a, b), given the net flows F_1 and F_2 there, shape (2,), in s^-1."""
    x, hubble = helium.fractions(state), around.hubble_rate_per_s
    full, slope = helium.fading(around)
    levels, _ = helium.part_of_levels(float(state[1]))
    # Of b the pull alone, without its levels.
    pull = np.array(helium.saha_pull(around, float(state[1]))) * (1.0 - levels)
    unhurried = np.array(
        [
            [-1.0 / (x.neutral * x.charged), 0.0],
            [levels / x.single, -levels * (1.0 / x.double + 1.0 / x.single)],
        ]
    )
    by_flows = unhurried / hubble
    rate = by_flows @ flows
    of_levels = rate.copy()
    rate[1] += pull[0]
    return Explicit(
        full * by_flows,
        np.array([0.0, full * pull[4]]) + slope * rate,
        np.array([0.0, full * pull[3]]),
        -full * of_levels,
    )
