"""A smooth curve in pieces, quick for one number as well as for arrays."""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass
from typing import Any

from ..arrays import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Patches:
    """A piecewise polynomial; scipy evaluates arrays, plain Python single numbers.

    A scipy spline spends over 10 us on a single number, and the histories ask for single numbers
    thousands of times.

    Attributes
    ----------
    curve : scipy.interpolate.PPoly
        The curve, for arrays.
    knots : list of float
        Inner knots, ascending.
    starts : list of float
        Where each piece starts.
    pieces : list of list of float
        Coefficients of each piece, highest power first.
    """

    curve: Any
    knots: list[float]
    starts: list[float]
    pieces: list[list[float]]

    def value(self, x: float) -> float:
        """Evaluate at one number."""
        index = bisect_right(self.knots, x)
        step = x - self.starts[index]
        total = 0.0
        for coefficient in self.pieces[index]:
            total = total * step + coefficient
        return total

    def slope(self, x: float) -> float:
        """Evaluate the derivative at one number."""
        index = bisect_right(self.knots, x)
        step = x - self.starts[index]
        total = slope = 0.0
        for coefficient in self.pieces[index]:
            slope = slope * step + total
            total = total * step + coefficient
        return slope

    def values(self, x: FloatArray) -> FloatArray:
        """Evaluate on an array of any shape."""
        return self.curve(x)  # type: ignore[no-any-return]

    def slopes(self, x: FloatArray) -> FloatArray:
        """Evaluate the derivative on an array of any shape."""
        return self.curve(x, 1)  # type: ignore[no-any-return]


def patches(curve: Any) -> Patches:
    """Make patches of a scipy ``PPoly`` (or ``CubicSpline``)."""
    starts = curve.x[:-1].tolist()
    return Patches(curve, starts[1:], starts, curve.c.T.tolist())
