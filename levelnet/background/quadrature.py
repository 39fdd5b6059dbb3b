"""Integrals, values and slopes of smooth functions of s = ln a on Gauss-Legendre panels."""

from __future__ import annotations

import itertools
import math
import operator
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.polynomial import legendre
from scipy.optimize import brentq

from ..arrays import FloatArray, IntArray
from ..errors import InputError
from .cosmology import Cosmology

# Panels in ln a while hydrogen recombines and outside, the T_r between which it does, and nodes in
# each panel. On a step as steep as Saha's, values and integrals are then good to 1e-11.
_FINE, _COARSE, _NODES = 0.03, 0.1, 8
_RECOMBINING_K = (5500.0, 1600.0)
# Earlier, where everything is smooth: panels of a unit from ln a = -20, and a remainder in a.
_FIRST = -20.0
_EARLY_NODES = 10


class Place(NamedTuple):
    """A place on the panels: panel number, and -1 to 1 from its left to its right edge."""

    panel: int
    x: float


class _Rule(NamedTuple):
    """Nodes and weights on -1 to 1, and matrices from node values to Legendre coefficients.

    `orders` holds those of the integral from -1 (order -1), of the value (0), and of both
    derivatives (1, 2).
    """

    nodes: FloatArray
    weights: FloatArray
    orders: dict[int, FloatArray]


@lru_cache(maxsize=1)
def _rule() -> _Rule:
    nodes, weights = legendre.leggauss(_NODES)
    # The Gauss sum of P_m times a polynomial of the panel is exact.
    degree = np.arange(_NODES)[:, None]
    fit: FloatArray = (degree + 0.5) * weights * legendre.legvander(nodes, _NODES - 1).T
    integral: FloatArray = legendre.legint(fit, lbnd=-1.0).astype(np.float64)
    slope, curve = (legendre.legder(fit, order).astype(np.float64) for order in (1, 2))
    return _Rule(nodes, weights, {-1: integral, 0: fit, 1: slope, 2: curve})


def _polynomials(x: float) -> list[float]:
    """Legendre polynomials P_0 to P_8 at x; numpy's take ten times as long for a single x."""
    values = [1.0, x]
    for m in range(1, _NODES):
        values.append(((2 * m + 1) * x * values[m] - m * values[m - 1]) / (m + 1))
    return values


@dataclass(frozen=True, slots=True, eq=False)
class Quadrature:
    """Gauss-Legendre panels over a history; s = ln a, dimensionless.

    Attributes
    ----------
    edges : ndarray, shape (n_panels + 1,)
        Panel edges in s, ascending.
    points : ndarray, shape (n_points,)
        Nodes in s, ascending; eight in each panel. A function is known by its values here.
    """

    edges: FloatArray
    points: FloatArray

    def panels(self, values: FloatArray) -> FloatArray:
        """Integral over each panel, shape (n_panels,), of a function with `values` at points."""
        half = 0.5 * np.diff(self.edges)
        return np.asarray(half * (values.reshape(-1, _NODES) @ _rule().weights))

    def to_end(self, values: FloatArray) -> FloatArray:
        """Integral from each left edge to the last edge, shape (n_panels,)."""
        return np.cumsum(self.panels(values)[::-1])[::-1]

    def to_end_from(self, values: FloatArray, log_scale: FloatArray) -> FloatArray:
        """Integral from each s = `log_scale` on the panels to the last edge, same shape (n,)."""
        panel = self._panel(log_scale)
        left = self.to_end(values)[panel] - self.curve(values, log_scale, -1)
        # Rounding would leave something at the end itself.
        return np.where(log_scale >= self.edges[-1], 0.0, left)

    def curve(self, values: FloatArray, log_scale: FloatArray, order: int = 0) -> FloatArray:
        """Function at each s = `log_scale` on the panels, shape (n,); orders as in `at`."""
        panel = self._panel(log_scale)
        half = 0.5 * np.diff(self.edges)[panel]
        x = (log_scale - self.edges[panel]) / half - 1.0
        fit = _rule().orders[order] @ values.reshape(-1, _NODES).T
        return np.asarray(legendre.legval(x, fit[:, panel], tensor=False) / half**order)

    def at(self, place: Place, order: int = 0) -> FloatArray:
        """Weights on the points, shape (n_points,), of the value at `place` (order 0).

        Order 1 and 2 give the derivatives by s, order -1 the integral from the left edge of the
        panel. Exact for a polynomial of degree 7 on the panel.
        """
        half = 0.5 * (self.edges[place.panel + 1] - self.edges[place.panel])
        weights = np.zeros(len(self.points))
        at = slice(place.panel * _NODES, (place.panel + 1) * _NODES)
        matrix = _rule().orders[order]
        weights[at] = np.array(_polynomials(place.x)[: len(matrix)]) @ matrix / half**order
        return weights

    def after(self, place: Place) -> FloatArray:
        """Weights on the points of the integral from `place` to the last edge."""
        whole = self._weights()
        whole[: place.panel * _NODES] = 0.0
        return whole - self.at(place, -1)

    def until(self, place: Place) -> FloatArray:
        """Weights on the points of the integral from the first edge to `place`."""
        whole = self._weights()
        whole[place.panel * _NODES :] = 0.0
        return whole + self.at(place, -1)

    def edge_values(self, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values at the left and at the right edge of each panel, shape (n_panels,) each."""
        fit = values.reshape(-1, _NODES) @ _rule().orders[0].T
        signs = (-1.0) ** np.arange(_NODES)
        return fit @ signs, fit.sum(axis=1)

    def function(self, values: FloatArray, panel: int, order: int = 0) -> Callable[[float], float]:
        """Give a function of x, -1 to 1 across `panel`, from its values; orders as in `at`."""
        half = 0.5 * (self.edges[panel + 1] - self.edges[panel])
        piece = values[panel * _NODES : (panel + 1) * _NODES]
        fit = (_rule().orders[order] @ piece / half**order).tolist()
        return lambda x: sum(map(operator.mul, fit, _polynomials(x)))

    def log_scale(self, place: Place) -> float:
        """Give s at `place`."""
        low, high = self.edges[place.panel : place.panel + 2].tolist()
        return float(0.5 * (low + high + (high - low) * place.x))

    def place(self, log_scale: float) -> Place | None:
        """Where s = `log_scale` is; None outside the panels."""
        if not self.edges[0] <= log_scale <= self.edges[-1]:
            return None
        panel = int(self._panel(np.array(log_scale)))
        low, high = self.edges[panel : panel + 2].tolist()
        return Place(panel, (2.0 * log_scale - low - high) / (high - low))

    def _panel(self, log_scale: FloatArray) -> IntArray:
        return np.asarray(np.searchsorted(self.edges[1:-1], log_scale, side="right"))

    def _weights(self) -> FloatArray:
        half = 0.5 * np.diff(self.edges)
        return np.asarray((half[:, None] * _rule().weights).ravel())


def quadrature(cosmology: Cosmology, start_s: float, end_s: float) -> Quadrature:
    """Panels from `start_s` to `end_s`, fine where hydrogen recombines.

    Parameters
    ----------
    cosmology : Cosmology
        The background; its T_0 says where hydrogen recombines (T_r of 5500 to 1600 K).
    start_s, end_s : float, dimensionless
        First and last ln a.

    Raises
    ------
    InputError
        If they do not ascend or are not finite.
    """
    if not -math.inf < start_s < end_s < math.inf:
        raise InputError(f"start_s = {start_s:g} must be below end_s = {end_s:g}, both finite")
    middle = [math.log(cosmology.cmb_temperature_k / k) for k in _RECOMBINING_K]
    joints = sorted(middle + _joint(cosmology))
    stops = [start_s, *(one for one in joints if start_s < one < end_s), end_s]
    pieces = [np.array([start_s])]
    for low, high in itertools.pairwise(stops):
        fine = middle[0] < 0.5 * (low + high) < middle[1]
        count = max(1, math.ceil((high - low) / (_FINE if fine else _COARSE)))
        pieces.append(np.linspace(low, high, count + 1)[1:])
    edges = np.concatenate(pieces)
    half, centre = 0.5 * np.diff(edges), 0.5 * (edges[1:] + edges[:-1])
    points = centre[:, None] + half[:, None] * _rule().nodes
    return Quadrature(edges, points.ravel())


@lru_cache(maxsize=1)
def _early_rule() -> tuple[FloatArray, FloatArray]:
    """Nodes and weights on 0 to 1."""
    nodes, weights = legendre.leggauss(_EARLY_NODES)
    return 0.5 * (nodes + 1.0), 0.5 * weights


def early_quadrature(cosmology: Cosmology, end_s: float) -> tuple[FloatArray, FloatArray]:
    """Nodes in s and weights of integrals over ds from a = 0 to `end_s` (dimensionless).

    For integrands that are powers of a times something smooth at the very beginning.
    """
    nodes, weights = _early_rule()
    stops = [_FIRST, *(one for one in _joint(cosmology) if _FIRST < one < end_s), end_s]
    s, weighed = [_FIRST + np.log(nodes)], [weights / nodes]
    for low, high in itertools.pairwise(stops):
        count = math.ceil(high - low)
        width = (high - low) / count
        edges = low + width * np.arange(count)
        s.append((edges[:, None] + width * nodes).ravel())
        weighed.append(np.tile(width * weights, count))
    return np.concatenate(s), np.concatenate(weighed)


def _joint(cosmology: Cosmology) -> list[float]:
    """Give s where a tabulated expansion ends, and H may jump."""
    table = cosmology.expansion_redshift
    return [] if table is None else [-math.log1p(table[-1])]


def root(function: Callable[[float], float], low: float = -1.0, high: float = 1.0) -> float:
    """Where a function that changes its sign between `low` and `high` is zero."""
    left, right = function(low), function(high)
    if left * right >= 0.0:  # to rounding, the zero is one of the ends
        return low if abs(left) < abs(right) else high
    return float(brentq(function, low, high, xtol=1e-15))
