"""From Chebyshev series in ln T_r to local power series in ln T_r and ln(T_m/T_r)."""

from __future__ import annotations

import math
from typing import NamedTuple, Protocol

import numpy as np

from ..arrays import FloatArray
from ..errors import SolveError
from ..network.rates import RateConstants
from ..numerics.chebyshev import chebyshev_nodes

# Points in a cell, off its nodes, where a patch is held against the series; ends included.
_OFF_NODES = np.array([-1.0, -0.83, -0.43, 0.07, 0.59, 0.91, 1.0])
_MOST_CELLS = 400
DEGREE = 6
"""Degree of the patches: of 4 to 9, close to the fewest numbers at 1e-8 and cheap to evaluate."""


class Ranges(NamedTuple):
    """What a table covers: x = ln(T_r/K) and y = ln(T_m/T_r)."""

    log_low: float
    log_high: float
    ratio_low: float
    ratio_high: float


class Patches(NamedTuple):
    """The arrays of a table; see :class:`levelnet.distilled.table.EffectiveTable`."""

    equilibrium: FloatArray
    exchange: FloatArray
    departure: FloatArray


class Series(Protocol):
    """What patches are fitted to."""

    def evaluate(self, x: float) -> tuple[FloatArray, FloatArray]:
        """Values and slopes at x = ln T_r."""
        ...


def fit_patches(
    series: Series, constants: RateConstants, ranges: Ranges, tolerance: float
) -> Patches:
    """Fit patches, as many as it takes for `tolerance` (absolute, in each logarithm) off the nodes.

    Raises
    ------
    SolveError
        If that takes more than 400 cells along either axis.
    """
    source = _Source(series, constants, ranges)
    n_x, n_y = 6, 4
    while max(n_x, n_y) <= _MOST_CELLS:
        patches = source.fit(n_x, n_y)
        error_x, error_y = source.errors(patches, n_x, n_y)
        if max(error_x, error_y) <= tolerance:
            return patches
        n_x = _more(n_x, error_x, tolerance)
        n_y = _more(n_y, error_y, tolerance)
    raise SolveError(
        f"the table does not reach {tolerance:g} with {_MOST_CELLS} cells; loosen the tolerance"
    )


def _more(count: int, error: float, tolerance: float) -> int:
    """Cells for the next try: the error falls as the (degree + 1)th power of their width."""
    if error <= tolerance:
        return count
    growth = (error / tolerance) ** (1.0 / (DEGREE + 1))
    return math.ceil(count * float(min(2.0, max(1.03, growth))))


class _Source:
    """The functions to be fitted, evaluated from the series."""

    def __init__(self, series: Series, constants: RateConstants, ranges: Ranges) -> None:
        self.series, self.constants, self.ranges = series, constants, ranges
        self.nodes = chebyshev_nodes(-1.0, 1.0, DEGREE + 1)
        # Values at the nodes to powers of t.
        self.to_powers = np.linalg.inv(np.vander(self.nodes, increasing=True))

    def fit(self, n_x: int, n_y: int) -> Patches:
        """Patches through the Chebyshev nodes of each cell."""
        x, y = self._points(n_x, self.nodes, 0), self._points(n_y, self.nodes, 2)
        equilibrium, exchange, departure = self.values(x, y)
        m = DEGREE + 1
        kept = self.constants.n_kept
        one = equilibrium.reshape(n_x, m, -1)
        pair = exchange.reshape(n_x, m, len(self.constants.lower))
        both = departure.reshape(n_x, m, n_y, m, kept)
        v = self.to_powers
        return Patches(
            np.einsum("pa,xak->xkp", v, one),
            np.einsum("pa,xak->xkp", v, pair),
            np.einsum("pa,qb,xaybk->xykpq", v, v, both, optimize=True),
        )

    def errors(self, patches: Patches, n_x: int, n_y: int) -> tuple[float, float]:
        """Largest error of any logarithm off the nodes: along x, and along y."""
        y_off = self._points(n_y, _OFF_NODES, 2)
        power_off = np.vander(_OFF_NODES, DEGREE + 1, increasing=True)
        power_on = np.vander(self.nodes, DEGREE + 1, increasing=True)
        x_on, x_off = self._points(n_x, self.nodes, 0), self._points(n_x, _OFF_NODES, 0)
        y_on = self._points(n_y, self.nodes, 2)
        along_x = self._worst(patches, x_off, y_on, power_off, power_on)
        along_y = self._worst(patches, x_on, y_off, power_on, power_off)
        return along_x, along_y

    def _worst(
        self,
        patches: Patches,
        x: FloatArray,
        y: FloatArray,
        power_x: FloatArray,
        power_y: FloatArray,
    ) -> float:
        equilibrium, exchange, departure = self.values(x, y)
        fitted = np.einsum("xkp,ap->xak", patches.equilibrium, power_x).reshape(equilibrium.shape)
        pairs = np.einsum("xkp,ap->xak", patches.exchange, power_x).reshape(exchange.shape)
        both = np.einsum(
            "xykpq,ap,bq->xaybk", patches.departure, power_x, power_y, optimize=True
        ).reshape(departure.shape)
        log_a = np.abs(fitted - equilibrium)[:, None] + np.abs(y[:, None] * (both - departure))
        return float(max(log_a.max(), np.abs(pairs - exchange).max(initial=0.0)))

    def values(self, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Ln A_i(x, 0), shape (n_x, n_kept); ln exchange, (n_x, n_pairs); h, (n_x, n_y, n_kept)."""
        n_pairs, n_kept = len(self.constants.lower), self.constants.n_kept
        stored = np.array([self.series.evaluate(float(one))[0] for one in x])
        spectrum = np.exp(stored[:, n_pairs:]).reshape(len(x), n_kept, -1)
        equilibrium = np.empty((len(x), n_kept))
        departure = np.empty((len(x), len(y), n_kept))
        for k, temperature_k in enumerate(np.exp(x)):
            equilibrium[k], departure[k] = _capture(
                self.constants, spectrum[k], float(temperature_k), y
            )
        return equilibrium, stored[:, :n_pairs], departure

    def _points(self, count: int, positions: FloatArray, first: int) -> FloatArray:
        low, high = self.ranges[first : first + 2]
        width = (high - low) / count
        points = low + width * (np.arange(count)[:, None] + 0.5 * (positions + 1.0)).ravel()
        return np.clip(points, low, high)


def _capture(
    constants: RateConstants, spectrum: FloatArray, temperature_k: float, y: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Ln A_i at T_m = T_r, and h_i(y) = [ln A_i(T_m) - ln A_i(T_r)] / y without cancellation."""
    reach = constants.electron_k[:, 0] / temperature_k
    with np.errstate(under="ignore"):
        weight = spectrum * np.exp(-reach)
        total = weight.sum(axis=1)
        # Near y = 0: the ratio less one, by expm1. The weights are 0 where reach is cut off.
        change = np.expm1(
            -np.outer(np.expm1(-y), np.minimum(reach, 700.0)) * (np.abs(y) < 0.1)[:, None]
        )
        near = np.log1p(change @ (weight / total[:, None]).T)
        far = np.log(np.exp(-np.outer(np.exp(-y), reach)) @ spectrum.T / total)
    log_ratio = np.where((np.abs(y) < 0.1)[:, None], near, far) - 1.5 * y[:, None]
    log_a = np.log(total) + np.log(constants.volume_1k_cm3) - 1.5 * np.log(temperature_k)
    return log_a, log_ratio / y[:, None]
