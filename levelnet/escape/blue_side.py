"""What feeds a line from above: photons of the next line up, redshifted since they left it.

The field is told as its distortion u, the occupation number over that of the blackbody at the same
frequency and T_r. Expansion shifts both alike, so that u travels unchanged: the blue side of line
n sees at ln a = s the red side of line n + 1 at s - ln(E_{n+1}/E_n).

References
----------
Chluba & Sunyaev 2007, Astron. Astrophys. 475, 109 (feedback among the Lyman lines).
"""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray


class BlueSide(NamedTuple):
    """The field on the blue side of every line at one time.

    Attributes
    ----------
    log_distortion : ndarray, shape (n_lines,), dimensionless
        ln u; 0 is the blackbody. In a cold field u itself leaves the doubles.
    slope : ndarray, shape (n_lines,)
        d ln u/d ln a.
    hubble_slope : float
        d ln H / d ln a.
    """

    log_distortion: FloatArray
    slope: FloatArray
    hubble_slope: float


def log_red_side(
    log_departure: FloatArray, exponent: FloatArray, depth: FloatArray, log_blue: FloatArray
) -> FloatArray:
    """Ln of the distortion on the red side of lines.

    Parameters
    ----------
    log_departure : ndarray, shape (n_lines,), dimensionless
        Ln of the population of the upper level over its Boltzmann population at T_r.
    exponent : ndarray, shape (n_lines,), dimensionless
        Line energy over k T_r.
    depth : ndarray, shape (n_lines,), dimensionless
        Sobolev optical depth.
    log_blue : ndarray, shape (n_lines,), dimensionless
        The same of the blue side.

    Returns
    -------
    ndarray, shape (n_lines,), dimensionless
        ln[u_L (1 - exp(-tau)) + u_blue exp(-tau)], with u_L that of the line's own source
        function, 1/(g_u x_l/(g_l x_u) - 1), over the blackbody.

    References
    ----------
    Sobolev 1960, Moving Envelopes of Stars (from memory).
    """
    own = log_departure + np.log(-np.expm1(-exponent))
    own -= np.log1p(-np.exp(log_departure - exponent))
    with np.errstate(divide="ignore"):
        return np.asarray(np.logaddexp(own + np.log(-np.expm1(-depth)), log_blue - depth))


Knots = tuple[int, list[float], list[float]]


@dataclass(slots=True, eq=False)
class Past:
    """The red sides of all lines at every accepted step so far: what a run remembers.

    Attributes
    ----------
    delay : ndarray, shape (n_lines,), dimensionless
        ln(E of the line above / E); infinite for the highest, which sees the blackbody.
    time : list of float
        ln a, ascending.
    red : list of ndarray, each of shape (n_lines,)
        Ln of the distortions there.
    """

    delay: FloatArray
    time: list[float] = field(default_factory=list)
    red: list[FloatArray] = field(default_factory=list)

    @staticmethod
    def of(energy_ev: FloatArray) -> Past:
        """Nothing remembered yet of lines with these energies (eV, ascending)."""
        delay = np.append(np.diff(np.log(energy_ev)), np.inf)
        return Past(np.asarray(delay))

    @property
    def longest_step(self) -> float:
        """No step may be longer, or its end would need what lies inside it."""
        return float(np.min(self.delay, initial=np.inf))

    def remember(self, time: float, red: FloatArray) -> None:
        """Add an accepted step."""
        self.time.append(time)
        self.red.append(red)

    def blue_side(self, time: float, hubble_slope: float) -> BlueSide:
        """The field on the blue side of every line; the blackbody where nothing is remembered."""
        count = len(self.delay)
        value, slope = np.zeros((2, count))
        for line in range(count - 1):
            then = time - float(self.delay[line])
            if self.time and then > self.time[0]:
                value[line], slope[line] = self.at(then, line + 1)
        return BlueSide(value, slope, hubble_slope)

    def at(self, time: float, line: int) -> tuple[float, float]:
        """Of one line: the cubic through the four nearest remembered steps, and its slope."""
        return self.sum(self.knots(time), line)

    def sum(self, knots: Knots, line: int) -> tuple[float, float]:
        """What `at` gives, from the knots of that time."""
        first, weights, rises = knots
        value = slope = 0.0
        for k, (weight, rise) in enumerate(zip(weights, rises, strict=True)):
            red = float(self.red[first + k][line])
            value, slope = value + weight * red, slope + rise * red
        return value, slope

    def knots(self, time: float) -> Knots:
        """First of the four nearest remembered steps; what each counts in value and in slope."""
        first = min(max(0, bisect_right(self.time, time) - 2), max(0, len(self.time) - 4))
        knots = self.time[first : first + 4]
        weights, rises = [], []
        for k, knot in enumerate(knots):
            weight, rise = 1.0, 0.0
            for j, other in enumerate(knots):
                if j != k:
                    rise = (rise * (time - other) + weight) / (knot - other)
                    weight *= (time - other) / (knot - other)
            weights.append(weight)
            rises.append(rise)
        return first, weights, rises

    def until(self, count: int) -> Past:
        """What was remembered after the first `count` steps."""
        return Past(self.delay, self.time[:count], self.red[:count])
