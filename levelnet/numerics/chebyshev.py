"""Chebyshev interpolation of many smooth functions of one variable at once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.fft import dct, idct

from ..arrays import FloatArray
from ..errors import RangeError


def chebyshev_nodes(low: float, high: float, count: int) -> FloatArray:
    """Nodes of the first kind on [low, high], ascending, shape (count,)."""
    angle = np.pi * (np.arange(count)[::-1] + 0.5) / count
    return 0.5 * (low + high) + 0.5 * (high - low) * np.cos(angle)


@dataclass(frozen=True, slots=True, eq=False)
class ChebyshevSeries:
    """Series of `n_functions` functions on one interval.

    Attributes
    ----------
    low, high : float
        The interval.
    coefficients : ndarray, shape (n_nodes, n_functions)
        Coefficients of T_0, T_1, ...
    """

    low: float
    high: float
    coefficients: FloatArray

    @staticmethod
    def fit(low: float, high: float, values: FloatArray) -> ChebyshevSeries:
        """Interpolate `values`, shape (n_nodes, n_functions), given at :func:`chebyshev_nodes`."""
        coefficients = dct(values[::-1], type=2, axis=0) / len(values)
        coefficients[0] *= 0.5
        return ChebyshevSeries(low, high, coefficients)

    @property
    def nodes(self) -> FloatArray:
        """Where the values were given, shape (n_nodes,)."""
        return chebyshev_nodes(self.low, self.high, len(self.coefficients))

    @property
    def values_at_nodes(self) -> FloatArray:
        """The values there, shape (n_nodes, n_functions)."""
        count = len(self.coefficients)
        scaled = self.coefficients * count
        scaled[0] *= 2.0
        values: FloatArray = idct(scaled, type=2, axis=0)[::-1]
        return values

    def interpolation_weights(self, x: FloatArray) -> FloatArray:
        """Weight of the value at each node in the interpolated value at each `x` inside.

        Parameters
        ----------
        x : ndarray, shape (n_points,)
            Places between `low` and `high`.

        Returns
        -------
        ndarray, shape (n_points, n_nodes)
            Each row sums to 1.
        """
        middle, half = 0.5 * (self.low + self.high), 0.5 * (self.high - self.low)
        angle = np.arccos(np.clip((x - middle) / half, -1.0, 1.0))
        order = np.arange(len(self.coefficients))
        unit = ChebyshevSeries.fit(self.low, self.high, np.eye(len(order))).coefficients
        weights: FloatArray = np.cos(angle[:, None] * order) @ unit
        return weights

    def evaluate(self, x: float) -> tuple[FloatArray, FloatArray]:
        """Values and derivatives at `x`, each of shape (n_functions,); RangeError outside."""
        middle, half = 0.5 * (self.low + self.high), 0.5 * (self.high - self.low)
        t = (x - middle) / half
        if not abs(t) <= 1.0 + 1e-12:  # so that NaN is outside too
            raise RangeError(f"{x:g}: outside the interpolated range {self.low:g} to {self.high:g}")
        t = min(1.0, max(-1.0, t))
        order = np.arange(len(self.coefficients))
        angle = np.arccos(t)
        basis = np.empty((2, len(order)))
        np.cos(order * angle, out=basis[0])
        # dT_k/dt = k U_{k-1}; the ends are the limits k^2 (+-1)^(k-1).
        if 1.0 - abs(t) < 1e-14:
            basis[1] = order**2 * np.where(order % 2 == 0, np.sign(t), 1.0)
        else:
            basis[1] = order * np.sin(order * angle) / np.sin(angle)
        value, slope = basis @ self.coefficients
        return value, slope / half
