"""Integrands of the observables over time, the events among them, and how both change.

An observable is a functional of ln(sigma_T n_e), ln H and ln R; its change is kept as weights on
these three at every time, shape (3, n), from which all derivatives follow.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cached_property
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from .cosmology import Cosmology
from .parameters import baryon_loading
from .quadrature import Place, Quadrature, early_quadrature, root

# x_e at the lowest redshift above which the optical depth from there says nothing about z_*.
_LITTLE = 0.01
# Integrands over s, and the power of sigma_T n_e in each.
DEPTH, DRAG, SOUND, DAMPING, TIME = range(5)
_POWER = (1.0, 1.0, 0.0, -1.0, 0.0)

Found = tuple[float, FloatArray]
"""A value, and its change by ln(sigma_T n_e), ln H and ln R at each of n times: shape (3, n)."""


class Event(NamedTuple):
    """A place in time, and how its s changes: weights, shape (3, n)."""

    place: Place
    shift: FloatArray


class Scattering:
    """All integrands at the n times from a = 0 to the end, and the events among them.

    Before the grid n_e/n_H is `early`.
    """

    def __init__(
        self,
        cosmology: Cosmology,
        grid: Quadrature,
        ionized: FloatArray,
        thomson: float,
        early: float = 1.0,
    ) -> None:
        early_s, self.early_weights = early_quadrature(cosmology, float(grid.edges[0]))
        self.cosmology, self.grid, self.n_early = cosmology, grid, len(early_s)
        self.s = np.concatenate([early_s, grid.points])
        self.last_fraction = float(ionized[-1])
        growth = np.exp(-self.s)
        electrons_cm3 = cosmology.hydrogen_density_cm3(0.0) * growth**3
        electrons_cm3[: self.n_early] *= early
        electrons_cm3[self.n_early :] *= ionized
        per_mpc = opacity_per_mpc(electrons_cm3, growth, thomson)
        # d eta = c ds/(a H).
        rate = cosmology.unbounded_hubble_rate_per_s(growth)
        step_mpc = const.SPEED_OF_LIGHT_CM_S / const.CM_PER_MPC * growth / rate
        load = baryon_loading(cosmology) / growth
        shape = load**2 / (1.0 + load) + 16.0 / 15.0
        self.value = np.stack(
            [
                per_mpc * step_mpc,
                per_mpc * step_mpc / load,
                step_mpc / np.sqrt(3.0 * (1.0 + load)),
                step_mpc * shape / (6.0 * (1.0 + load) * per_mpc),
                1.0 / rate,
            ]
        )
        part = load / (1.0 + load)
        by_shape = part**2 * (2.0 + load) / shape - part
        nothing = np.zeros_like(load)
        self.by_load = np.stack([nothing, nothing - 1.0, -0.5 * part, by_shape, nothing])
        self.log_opacity = np.log(per_mpc[self.n_early :])

    def late(self, row: int) -> FloatArray:
        """Give integrand `row` at the points of the grid."""
        return np.asarray(self.value[row, self.n_early :])

    def change(self, row: int, weight: FloatArray) -> FloatArray:
        """Change of the sum of an integrand by weights: by ln(sigma_T n_e), ln H and ln R."""
        moved = self.value[row] * weight
        return np.stack([_POWER[row] * moved, -moved, self.by_load[row] * moved])

    def at(self, place: Place, order: int = 0) -> FloatArray:
        """Weights of the value at `place`; order as in the quadrature's."""
        return np.concatenate([np.zeros(self.n_early), self.grid.at(place, order)])

    def after(self, place: Place) -> FloatArray:
        """Weights of the integral from `place` to the end."""
        return np.concatenate([np.zeros(self.n_early), self.grid.after(place)])

    def until(self, place: Place) -> FloatArray:
        """Weights of the integral from a = 0 to `place`."""
        return np.concatenate([self.early_weights, self.grid.until(place)])

    def integral(self, row: int, event: Event) -> Found:
        """Integral from a = 0 up to an event, and its change."""
        weight = self.until(event.place)
        now = float(self.value[row] @ self.at(event.place))
        return float(self.value[row] @ weight), self.change(row, weight) + now * event.shift

    @cached_property
    def last(self) -> Event | None:
        """Where tau is 1."""
        return self._unit_depth(DEPTH)

    @cached_property
    def drag(self) -> Event | None:
        """Where the drag depth is 1."""
        return self._unit_depth(DRAG)

    def _unit_depth(self, row: int) -> Event | None:
        per_log = self.late(row)
        above = self.grid.to_end(per_log)
        if not above[0] > 1.0 or self.last_fraction >= _LITTLE:
            return None
        panel = int(np.flatnonzero(above > 1.0)[-1])
        inside = self.grid.function(per_log, panel, -1)
        place = Place(panel, root(lambda x: float(above[panel]) - 1.0 - inside(x)))
        # The depth is held at 1: ds/dp = (d depth/dp)/(d depth/d|s|).
        now = float(self.value[row] @ self.at(place))
        return Event(place, self.change(row, self.after(place)) / now)

    def why_no_depth(self, row: int) -> str:
        """Why the depth of an integrand reaches 1 nowhere; "" where it does."""
        most = float(self.grid.to_end(self.late(row))[0])
        name = "drag depth" if row == DRAG else "optical depth"
        low, high = (math.expm1(-float(self.grid.edges[k])) for k in (-1, 0))
        if not most > 1.0:
            return f"from z = {low:.4g} up to {high:.4g} the {name} comes to {most:.3g}, not to 1"
        if self.last_fraction >= _LITTLE:
            return (
                f"at the lowest redshift, {low:.4g}, x_e is {self.last_fraction:.2g}; end the grid "
                f"where it is below {_LITTLE:g}"
            )
        return ""

    def why_no_width(self) -> str:
        """Why g has no full width; "" where it has."""
        if self.peak is None:
            return "the visibility is largest at an end of the grid"
        if self.half_maximum(self.peak) is None:
            return "the visibility does not fall to half its maximum inside the grid"
        return ""

    @cached_property
    def log_visibility(self) -> FloatArray:
        """Give ln g at the points, g in Mpc^-1."""
        depth = self.grid.to_end_from(self.late(DEPTH), self.grid.points)
        return np.asarray(self.log_opacity - depth)

    def visibility_change(self, place: Place) -> FloatArray:
        """Change of ln g at a fixed place."""
        change = -self.change(DEPTH, self.after(place))
        change[0] += self.at(place)
        return change

    def visibility_slope(self, panel: int) -> Callable[[float], float]:
        """Slope of ln g by s across a panel."""
        opacity = self.grid.function(self.log_opacity, panel, 1)
        depth = self.grid.function(self.late(DEPTH), panel)
        return lambda x: opacity(x) + depth(x)

    @cached_property
    def peak(self) -> Event | None:
        """Where ln g is largest."""
        top = int(np.argmax(self.log_visibility))
        n_panels = len(self.grid.edges) - 1
        panel = top // (len(self.grid.points) // n_panels)
        slope = self.visibility_slope(panel)
        # Between the outermost nodes and the edge of the panel, the peak may be next door.
        panel += (slope(1.0) > 0.0) - (slope(-1.0) < 0.0)
        if not 0 <= panel < n_panels or top in {0, len(self.grid.points) - 1}:
            return None
        place = Place(panel, root(self.visibility_slope(panel)))
        curve = self.grid.function(self.log_opacity, panel, 2)(place.x)
        curve += self.grid.function(self.late(DEPTH), panel, 1)(place.x)
        moved = self.change(DEPTH, self.at(place))
        moved[0] += self.at(place, 1)
        return Event(place, -moved / curve)

    def half_maximum(self, peak: Event) -> tuple[Event, Event] | None:
        """Where g is half of its maximum, before and after; None where it stays above."""
        level = float(self.log_visibility @ self.grid.at(peak.place)) - math.log(2.0)
        left, right = self.grid.edge_values(self.log_visibility)
        top, x = peak.place
        before = np.flatnonzero(left[: top + 1] < level)
        after = np.flatnonzero(right[top:] < level)
        if not len(before) or not len(after):
            return None
        first, last = int(before[-1]), top + int(after[0])
        # At a maximum: its own shift does not count.
        by_peak = self.visibility_change(peak.place)
        return (
            self._level(first, (-1.0, x if first == top else 1.0), level, by_peak),
            self._level(last, (x if last == top else -1.0, 1.0), level, by_peak),
        )

    def _level(
        self, panel: int, between: tuple[float, float], level: float, by_level: FloatArray
    ) -> Event:
        """Where ln g passes `level`, which itself changes by `by_level`."""
        height = self.grid.function(self.log_visibility, panel)
        place = Place(panel, root(lambda x: height(x) - level, *between))
        slope = self.visibility_slope(panel)(place.x)
        return Event(place, (by_level - self.visibility_change(place)) / slope)


def opacity_per_mpc(
    electrons_cm3: FloatArray, growth: FloatArray, thomson: float = 1.0
) -> FloatArray:
    """D tau/d eta in Mpc^-1 (comoving), same shape as the arguments.

    Parameters
    ----------
    electrons_cm3 : ndarray, cm^-3
        n_e, proper.
    growth : ndarray, dimensionless
        1 + redshift.
    thomson : float, dimensionless
        Thomson cross section over the measured one.
    """
    cross_section_cm2 = const.THOMSON_CROSS_SECTION_CM2 * thomson
    return np.asarray(cross_section_cm2 * electrons_cm3 / growth * const.CM_PER_MPC)
