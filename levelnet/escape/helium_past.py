"""What feeds a line of He I from above: what an earlier line let go and hydrogen left over.

On the way from one line to the next the distortion u - 1 of the field falls by exp(-D), D the depth
of the H I continuum. That depth grows like n_HI, by a factor of about e^30 per unit of ln a near
z = 2000; between its values at both ends it is taken to grow exponentially.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from .blue_side import Past
from .helium_lines import HeliumGroundLines


class HeliumBlueSide(NamedTuple):
    """The field on the blue side of every line at one time; arrays of shape (n_lines,).

    Attributes
    ----------
    log_distortion : ndarray, dimensionless
        ln u; 0 is the blackbody.
    slope : ndarray
        d ln u/d ln a with the populations held.
    by_continuum : ndarray
        d ln u/d ln n_HI.
    hubble_slope : float
        d ln H/d ln a.
    by_sent, by_past_continuum : ndarray, dimensionless, or None
        d ln u/d ln of what the line above sent, and of the depth of the continuum there and then;
        None: not asked for.
    """

    log_distortion: FloatArray
    slope: FloatArray
    by_continuum: FloatArray
    hubble_slope: float
    by_sent: FloatArray | None = None
    by_past_continuum: FloatArray | None = None


@dataclass(frozen=True, slots=True, eq=False)
class HeliumPast:
    """Red sides of the lines, and the continuum there, at every accepted step so far.

    Attributes
    ----------
    lines : HeliumGroundLines
        The lines.
    red : Past
        Ln of the distortions on the red sides.
    continuum : Past
        Ln of the depth of the continuum per ln nu at each line.
    """

    lines: HeliumGroundLines
    red: Past
    continuum: Past

    @staticmethod
    def of(lines: HeliumGroundLines) -> HeliumPast:
        """Nothing remembered yet."""
        log_energy = np.log(lines.energy_ev)
        fed = lines.lit_by >= 0
        delay = np.where(fed, log_energy[lines.lit_by] - log_energy, np.inf)
        return HeliumPast(lines, Past(delay), Past(delay))

    @property
    def longest_step(self) -> float:
        """No step in ln a may be longer, or its end would need what lies inside it."""
        return self.red.longest_step

    def remember(self, time: float, red: FloatArray, continuum: FloatArray) -> None:
        """Add an accepted step: ln u on the red sides, depth of the continuum per ln nu."""
        self.red.remember(time, red)
        self.continuum.remember(time, np.log(np.maximum(continuum, 1e-300)))

    def blue_side(
        self, time: float, hubble_slope: float, continuum: FloatArray | None
    ) -> HeliumBlueSide:
        """The field on the blue side of every line.

        Parameters
        ----------
        time : float
            ln a.
        hubble_slope : float
            d ln H/d ln a.
        continuum : ndarray, shape (n_lines,), or None
            Depth of the H I continuum per ln nu at each line, now; None: nothing absorbs.
        """
        value, slope, by, by_sent, by_past = np.zeros((5, len(self.lines.names)))
        for line, above in enumerate(self.lines.lit_by.tolist()):
            delay = float(self.red.delay[line])
            then = time - delay
            if above < 0 or not self.red.time or then <= self.red.time[0]:
                continue
            knots = self.red.knots(then)  # both remember at the same times
            value[line], slope[line] = self.red.sum(knots, above)
            by_sent[line] = 1.0
            if continuum is not None:
                past = self.continuum.sum(knots, above)
                now = math.log(max(float(continuum[line]), 1e-300)), -3.0 - hubble_slope
                sent = value[line], slope[line]
                left = attenuated(delay, past, now, sent)
                value[line], slope[line], by[line], by_past[line], by_sent[line] = left
        return HeliumBlueSide(value, slope, by, hubble_slope, by_sent, by_past)

    def until(self, count: int) -> HeliumPast:
        """What was remembered after the first `count` steps."""
        return HeliumPast(self.lines, self.red.until(count), self.continuum.until(count))


def attenuated(
    delay: float, past: tuple[float, float], now: tuple[float, float], sent: tuple[float, float]
) -> tuple[float, float, float, float, float]:
    """Ln u after the continuum, its slope in ln a, and by ln n_HI now, by ln n_HI then, by `sent`.

    `past` and `now` are ln of the depth per ln nu and its slope in ln a, `sent` that of u.
    """
    rise = now[0] - past[0]
    start, end = math.exp(past[0]), math.exp(now[0])
    # Mean of an exponential between its ends, and its derivatives by ln of either.
    if abs(rise) > 1e-3:
        mean = (end - start) / rise
        by_end, by_start = (end - mean) / rise, (mean - start) / rise
    else:
        mean = start * (1.0 + rise * (0.5 + rise / 6.0))
        by_end, by_start = start * (0.5 + rise / 3.0), start * (0.5 + rise / 6.0)
    depth = delay * mean
    left, filled = sent[0] - depth, -math.expm1(-depth)
    value = float(np.logaddexp(left, math.log(filled))) if filled > 0.0 else left
    of_sent = math.exp(left - value)
    by_depth = math.exp(-depth - value) - of_sent
    slope = of_sent * sent[1] + by_depth * delay * (by_end * now[1] + by_start * past[1])
    return value, slope, by_depth * delay * by_end, by_depth * delay * by_start, of_sent
