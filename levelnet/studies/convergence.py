"""How a quantity approaches its limit as the ladder of levels grows, and how well that is known.

The laws stand in `shell_law`. An error bar is the range of all laws that the rungs allow, times a
doubt that has been measured (``python -m benchmarks.levels``).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import BoolArray, FloatArray, IntArray, frozen_array
from ..errors import InputError
from .shell_law import all_laws, noise_factor

FEWEST_RUNGS = 4
"""Rungs that an extrapolation needs: a law of three numbers, and one rung to doubt it with."""
LARGEST_STEP, SHORTEST_LADDER = 2.0, 50
"""Error bars have been measured on ladders with steps of this factor or less up to this n_max."""

# Error bar over the range of the laws. With few rungs the laws are few and may err alike. Measured
# on ladders of x_e with steps of a factor two or less and the longest rung 56, 96 or 192, chosen at
# random: the largest errors are 3.6 ranges with four rungs, 1.5 with five and 1.2 with more.
_DOUBTS = {4: 4.0, 5: 2.0}
_DOUBT = 1.3
# How many times longer than the longest rung an n_max may be that is still named.
_FURTHEST = 10
# Differences between rungs must exceed their noise by this factor before a law is fitted to them.
_SIGNAL_TO_NOISE = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Carried:
    """Quantities carried to an n_max beyond the rungs; every array has shape (n_quantities,).

    Attributes
    ----------
    value : ndarray
        y there.
    bar : ndarray
        Error bar of y: relative error of the quantity, from truncation alone.
    exponent : ndarray
        p of C N^-p through the three longest rungs; NaN where no law is fitted.
    fitted : ndarray of bool
        False where the rungs differ by no more than numerical noise, or approach no limit: there
        `value` is that of the longest rung.
    """

    value: FloatArray
    bar: FloatArray
    exponent: FloatArray
    fitted: BoolArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        for name in ("value", "bar", "exponent"):
            frozen_array(self, name, (len(self.value),))
        frozen_array(self, "fitted", (len(self.value),), bool)


def carry(
    n_max: IntArray, logarithms: FloatArray, noise: FloatArray, to: float = np.inf
) -> Carried:
    """Carry quantities from a ladder of truncations to a longer one, or to all levels.

    Parameters
    ----------
    n_max : ndarray of int, shape (n_rungs,)
        Rungs, ascending; at least `FEWEST_RUNGS`.
    logarithms : ndarray, shape (n_rungs, n_quantities)
        ln of each quantity on each rung.
    noise : ndarray, shape (n_quantities,)
        Numerical error of the difference between two rungs.
    to : float
        The n_max to carry to, beyond the longest rung; infinite by default.

    Returns
    -------
    Carried
        Values and error bars. The bar is the range of the laws, times 1.3 (2 with five rungs, 4
        with four), plus the noise as the law amplifies it. Measured to hold for x_e where each rung
        is at most twice the one before and the longest is 50 or more; elsewhere it is a guess.

    Raises
    ------
    InputError
        If there are fewer rungs.
    """
    check_rung_count(len(n_max))
    rungs: FloatArray = n_max.astype(np.float64) + 0.5
    found, exponent = all_laws(rungs, logarithms, to + 0.5)
    best, power = found[0], found[-1]
    spread = _doubt(len(rungs)) * np.ptp(found, axis=0)
    noisy = noise_factor(rungs, to + 0.5) * noise
    step = np.abs(logarithms[-1] - logarithms[-2])
    fitted = (step > _SIGNAL_TO_NOISE * noise) & np.isfinite(power)
    # What 1/N or anything steeper could still add, given the last step.
    left = step / (rungs[-1] / rungs[-2] - 1.0)
    spread = np.where(np.isfinite(power), spread, np.abs(best - logarithms[-1]))
    return Carried(
        np.where(fitted, best, logarithms[-1]),
        np.where(fitted, spread + noisy, np.maximum(left, spread) + noise),
        np.where(fitted, exponent, np.nan),
        fitted,
    )


def truncation_error(
    n_max: IntArray, logarithms: FloatArray, noise: FloatArray, at: int
) -> tuple[FloatArray, FloatArray]:
    """What cutting the atom at an n_max does to each quantity: ln of it over its limit.

    Parameters
    ----------
    n_max, logarithms, noise
        As for :func:`carry`.
    at : int
        The n_max, from the shortest rung up. Between rungs the error is interpolated, beyond the
        longest it follows the law, and every other law its own way down.

    Returns
    -------
    error, bar : ndarray, shape (n_quantities,)
        The error, and how well it is known: by the laws, and between rungs also by interpolation.

    Raises
    ------
    InputError
        If `at` is below the shortest rung.
    """
    if at < n_max[0]:
        raise InputError(f"n_max = {at}: below the shortest rung, {n_max[0]}")
    limit = carry(n_max, logarithms, noise)
    rungs: FloatArray = n_max.astype(np.float64) + 0.5
    if at > n_max[-1]:
        error, bar = _beyond(rungs, logarithms, noise, at + 0.5)
        return np.where(limit.fitted, error, 0.0), np.where(limit.fitted, bar, limit.bar)
    error, bar = _between(np.log(rungs), logarithms - limit.value, float(np.log(at + 0.5)))
    return error, bar + limit.bar


def _beyond(
    rungs: FloatArray, logarithms: FloatArray, noise: FloatArray, to: float
) -> tuple[FloatArray, FloatArray]:
    """Error and bar beyond the longest rung: each law lets the error it sees there fall its way."""
    limits, at_longest, there = (
        all_laws(rungs, logarithms, place)[0] for place in (np.inf, float(rungs[-1]), to)
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        errors = (logarithms[-1] - limits) * (there - limits) / (at_longest - limits)
    spread = _doubt(len(rungs)) * np.ptp(errors, axis=0)
    return errors[0], spread + noise_factor(rungs, to, np.inf) * noise


def _between(places: FloatArray, errors: FloatArray, at: float) -> tuple[FloatArray, FloatArray]:
    """Error and what interpolating puts into its bar, at a place (ln N) among the rungs.

    ln |error| is a cubic spline, and its bar what curvature may change between two rungs: the
    largest that the spline has on any rung, and no less than that of N^-2 ln N. Where errors change
    sign the interpolation is straight, and anything between the two rungs is within the bar.
    """
    after = max(int(np.searchsorted(places, at)), 1)
    left, right = at - places[after - 1], places[after] - at
    one, other = errors[after - 1 : after + 1]
    straight = (one * right + other * left) / (left + right)
    smooth = np.all(errors * np.sign(errors[0]) > 0.0, axis=0)
    spline = CubicSpline(places, np.log(np.where(smooth, np.abs(errors), 1.0)))
    error = np.where(smooth, np.sign(straight) * np.exp(spline(at)), straight)
    curvature = np.maximum(np.abs(spline(places, 2)).max(axis=0), at**-2.0)
    bar = np.where(smooth, np.abs(error) * curvature * left * right / 2.0, np.abs(one - other))
    on_rung = left * right == 0.0
    return (straight, 0.0 * bar) if on_rung else (error, bar)


def _doubt(n_rungs: int) -> float:
    """Error bar over the range of the laws."""
    return _DOUBTS.get(n_rungs, _DOUBT)


class Smallest(NamedTuple):
    """The smallest n_max that is good enough.

    Attributes
    ----------
    n_max : int or None
        None: not even ten times the longest rung is, or the error bar alone is too wide.
    beyond : bool
        True where it is longer than any rung, that is, by extrapolation.
    quantity : int
        Position of the quantity that decides.
    share : float
        Truncation error with its bar there, over what is allowed.
    """

    n_max: int | None
    beyond: bool
    quantity: int
    share: float


def smallest_n_max(
    n_max: IntArray, logarithms: FloatArray, noise: FloatArray, allowed: FloatArray
) -> Smallest:
    """Find the smallest n_max whose truncation error with its bar is within what is allowed.

    Parameters
    ----------
    n_max, logarithms, noise
        As for :func:`carry`.
    allowed : ndarray, shape (n_quantities,)
        Largest relative error of each quantity.

    Returns
    -------
    Smallest
        Not below the shortest rung: what shorter atoms do is not known.
    """

    def shares(at: int) -> FloatArray:
        error, bar = truncation_error(n_max, logarithms, noise, at)
        return np.asarray((np.abs(error) + bar) / allowed)

    found, beyond = first_to_pass(lambda at: bool(shares(at).max() <= 1.0), n_max)
    worst = shares(_FURTHEST * int(n_max[-1]) if found is None else found)
    return Smallest(found, beyond, int(np.argmax(worst)), float(worst.max()))


def first_to_pass(passes: Callable[[int], bool], n_max: IntArray) -> tuple[int | None, bool]:
    """Smallest n_max from the shortest rung up that passes, as do all above it.

    Parameters
    ----------
    passes : callable
        ``passes(n_max)``.
    n_max : ndarray of int, shape (n_rungs,)
        Rungs, ascending.

    Returns
    -------
    int or None, bool
        None where not even ten times the longest rung passes; and whether it is beyond the rungs.
    """
    low, high = int(n_max[0]) - 1, int(n_max[-1])
    if not passes(high):
        low, high = high, _FURTHEST * high
        if not passes(high):
            return None, True
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if passes(middle) else (middle, high)
    return high, bool(high > n_max[-1])


def check_rung_count(count: int) -> None:
    """Raise InputError if so few rungs allow no extrapolation."""
    if count < FEWEST_RUNGS:
        rungs = "1 rung" if count == 1 else f"{count} rungs"
        raise InputError(
            f"rungs: a ladder with {rungs} allows no extrapolation; {FEWEST_RUNGS} or more values "
            "of n_max are needed"
        )
