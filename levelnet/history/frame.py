"""Variables measured from where they go in equilibrium, so that wide steps follow them.

While an ion is near Saha equilibrium the ln of its ratio falls steeply, as -I/(k T_r), and steps
must be short for that alone. Measured from

    1.5 s - I e^s/(k T_0),

which is the ln of that ratio in Saha equilibrium at T_r = T_0 e^-s but for ln n_e/n_H and a
constant, what is left changes slowly. From the time on at which the ion leaves equilibrium, the
origin goes on in a straight line, which costs no step anything. Nothing but the length of steps
hangs on it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..numerics.stepping import Linearize, Rate, Slopes, Trajectory
from .equations import SlowEquations

# T_r in K, in units of the atom's energies, down to which x_HII/x_HI, x_HeII/x_HeI and
# x_HeIII/x_HeII are followed by the origin; the last stays near equilibrium to the end of helium.
# Chosen by counting steps (n_max 6): 3800 to 5000 K for the first and 6500 to 7500 K for the second
# differ by 1 per cent of them.
_LEAVES_K = 5000.0, 7500.0, 1500.0


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """Where the variables are measured from; n is 2, with helium 4.

    Attributes
    ----------
    exponent : ndarray, shape (n,), dimensionless
        I/(k T_0) of each variable; 0: it is measured from 0.
    leaves : ndarray, shape (n,), dimensionless
        ln a from which the origin goes in a straight line.
    """

    exponent: FloatArray
    leaves: FloatArray

    def breaks(self, start: float, end: float) -> list[float]:
        """Times between these at which the origin is not smooth: steps have to end there."""
        inside = self.leaves[(self.exponent > 0.0) & (self.leaves > start) & (self.leaves < end)]
        return [float(one) for one in np.unique(inside)]

    def origin(self, time: float) -> FloatArray:
        """Where the variables are measured from at ln a = `time`, shape (n,)."""
        until = np.minimum(time, self.leaves)
        value = 1.5 * until - self.exponent * np.exp(until)
        return np.where(self.exponent > 0.0, value + (time - until) * self.slope(time), 0.0)

    def slope(self, time: float) -> FloatArray:
        """Its derivative by ln a, shape (n,)."""
        steep = 1.5 - self.exponent * np.exp(np.minimum(time, self.leaves))
        return np.where(self.exponent > 0.0, steep, 0.0)

    def curvature(self, time: float) -> FloatArray:
        """Its second derivative, shape (n,)."""
        return np.where(time < self.leaves, -self.exponent * np.exp(time), 0.0)

    def rate(self, rate: Rate) -> Rate:
        """Give the right-hand side in this frame."""
        return lambda time, state: rate(time, state + self.origin(time)) - self.slope(time)

    def linearize(self, linearize: Linearize) -> Linearize:
        """Give the linearized right-hand side in this frame."""

        def moving(time: float, state: FloatArray) -> Slopes:
            here, slope = linearize(time, state + self.origin(time)), self.slope(time)
            drift = here.drift + here.matrix @ slope - self.curvature(time)
            return Slopes(here.rate - slope, here.matrix, drift)

        return moving

    def absolute(self, found: Trajectory) -> Trajectory:
        """Give a trajectory in this frame as one of the variables themselves."""
        origin = np.array([self.origin(time) for time in found.time.tolist()])
        return replace(found, state=found.state + origin)


def frame_of(equations: SlowEquations) -> Frame:
    """Give the frame of a run; without helium the variables are measured from 0."""
    if equations.helium is None:
        return Frame(np.zeros(2), np.zeros(2))
    kept, helium = equations.reduced.kept, equations.helium
    hydrogen_ev = float(kept.energy_ev[0] + kept.ionization_energy_ev[0])
    ionization_ev = np.array([hydrogen_ev, *helium.ionization_ev])
    unit = np.array([equations.scales.energy, *(2 * (helium.scales.energy,))])
    now_k = equations.cosmology.cmb_temperature_k
    exponent, leaves = np.zeros((2, 4))
    ions = [0, 2, 3]
    exponent[ions] = ionization_ev / (const.BOLTZMANN_EV_K * now_k)
    leaves[ions] = -np.log(np.array(_LEAVES_K) * unit / now_k)
    return Frame(exponent, leaves)
