"""How a quantity approaches its limit as the ladder of levels grows, and how well that is known.

Every quantity is carried as its logarithm y(n), n the highest level of the truncated atom. What
the levels above n would add falls like their recombination coefficients. For a shell whose binding
energy is far below kT these go as n^-3 exp(t) E_1(t), t = chi/(n^2 kT) (Kramers' cross sections),
that is n^-3 (ln n + c) and the same times n^-2, n^-4, ...; summed from n + 1 upwards, with
N = n + 1/2 (midpoint rule):

    y(n) = L + N^-2 (a ln N + b) + N^-4 (c ln N + d) + ...

This is the law used. It leaves out how the share of atoms that reach the ground state from shell n
depends on n, so its error is not taken from itself but from what else the rungs allow: shorter
laws, the law without the longest rung, and a power law L + C N^-p with free exponent.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.interpolate import PchipInterpolator

from ..arrays import BoolArray, FloatArray, IntArray, frozen_array
from ..errors import InputError

FEWEST_RUNGS = 4
"""Rungs that an extrapolation needs: a law of three numbers, and one rung to doubt it with."""

# (power, logarithm) of the terms of the law, in the order in which more rungs allow them.
_TERMS = ((0, 0), (2, 1), (2, 0), (4, 1), (4, 0))
# Exponents among which the power law is sought; a slower approach than the lowest has no limit
# that the rungs could tell.
_LOWEST_EXPONENT, _HIGHEST_EXPONENT = 0.1, 12.0
# Error bar over the largest difference among the laws. With few rungs the laws are few and may err
# alike. Over the ladders of ``python -m benchmarks.levels`` errors stay below 0.75 of the bar.
_DOUBT_OF_FEW, _DOUBT = 4.0, 1.5
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
        Values and error bars. The bar is 1.5 times (with four rungs 4 times) the largest difference
        from the law of any of the others named above, plus the noise as the law amplifies it.

    Raises
    ------
    InputError
        If there are fewer rungs.

    References
    ----------
    Kramers 1923, Phil. Mag. 46, 836 (cross sections; from memory).
    """
    check_rung_count(len(n_max))
    rungs: FloatArray = n_max.astype(np.float64) + 0.5
    n_terms = min(len(_TERMS), len(rungs) - 1)
    best, amplified = _shell_law(rungs, logarithms, n_terms, to + 0.5)
    others = [_shell_law(rungs[:-1], logarithms[:-1], n_terms, to + 0.5)[0]]
    others += [_shell_law(rungs, logarithms, k, to + 0.5)[0] for k in range(3, n_terms)]
    power, exponent = _power_law(rungs, logarithms, to + 0.5)
    doubt = _DOUBT_OF_FEW if len(rungs) == FEWEST_RUNGS else _DOUBT
    spread = doubt * np.max(np.abs(np.array([*others, power]) - best), axis=0)
    step = np.abs(logarithms[-1] - logarithms[-2])
    fitted = (step > _SIGNAL_TO_NOISE * noise) & np.isfinite(power)
    # What 1/N or anything steeper could still add, given the last step.
    left = step / (rungs[-1] / rungs[-2] - 1.0)
    spread = np.where(np.isfinite(power), spread, np.abs(best - logarithms[-1]))
    return Carried(
        np.where(fitted, best, logarithms[-1]),
        np.where(fitted, spread + amplified * noise, np.maximum(left, spread) + noise),
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
        longest it follows the law.

    Returns
    -------
    error, bar : ndarray, shape (n_quantities,)
        The error, and how well it is known.

    Raises
    ------
    InputError
        If `at` is below the shortest rung.
    """
    if at < n_max[0]:
        raise InputError(f"n_max = {at}: below the shortest rung, {n_max[0]}")
    limit = carry(n_max, logarithms, noise)
    errors = logarithms - limit.value
    if at <= n_max[-1]:
        return _between(np.log(n_max + 0.5), errors, np.log(at + 0.5)), limit.bar
    error = carry(n_max, logarithms, noise, float(at)).value - limit.value
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(limit.fitted, error / errors[-1], 1.0)
    return error, np.abs(share) * limit.bar


def _between(places: FloatArray, errors: FloatArray, at: float) -> FloatArray:
    """Interpolate errors between rungs: their logarithms, with the sign of the nearest longer."""
    if at in places:
        return np.asarray(errors[np.flatnonzero(places == at)[0]])
    sign = np.sign(errors[np.searchsorted(places, at)])
    size = np.log(np.maximum(np.abs(errors), 1e-300))
    return np.asarray(sign * np.exp(PchipInterpolator(places, size)(at)))


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


def _terms(rungs: FloatArray, count: int) -> FloatArray:
    """First `count` terms of the law at each N, shape (n_rungs, count); those of N = inf are 0."""
    columns = [
        np.where(np.isinf(rungs) & (power > 0), 0.0, rungs**-power * np.log(rungs) ** logarithm)
        for power, logarithm in _TERMS[:count]
    ]
    return np.column_stack(columns)


def _shell_law(
    rungs: FloatArray, logarithms: FloatArray, count: int, to: float
) -> tuple[FloatArray, float]:
    """The law with `count` terms through as many rungs, the longest; and what it makes of noise."""
    with np.errstate(invalid="ignore"):  # 0 * inf at N = inf, which is 0
        target = _terms(np.array([to]), count)[0]
    matrix = _terms(rungs[-count:], count)
    scale = np.abs(matrix).max(axis=0)
    weights = np.linalg.solve((matrix / scale).T, target / scale)
    return weights @ logarithms[-count:], float(np.abs(weights).sum())


def _power_law(
    rungs: FloatArray, logarithms: FloatArray, to: float
) -> tuple[FloatArray, FloatArray]:
    """L + C N^-p through the three longest rungs at `to`, and p; NaN where there is none."""
    first, second, third = rungs[-3:]
    step = logarithms[-1] - logarithms[-2]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = (logarithms[-2] - logarithms[-3]) / step

    def ratio_of(p: FloatArray) -> FloatArray:
        before, after = p * np.log(second / first), p * np.log(third / second)
        return np.asarray(np.expm1(before) / -np.expm1(-after))

    low = np.full(len(ratio), _LOWEST_EXPONENT)
    high = np.full(len(ratio), _HIGHEST_EXPONENT)
    exists = (ratio > ratio_of(low)) & (ratio < ratio_of(high))
    for _ in range(60):  # halvings: down to rounding
        middle = 0.5 * (low + high)
        above = ratio_of(middle) > ratio
        low, high = np.where(above, low, middle), np.where(above, middle, high)
    p = np.where(exists, 0.5 * (low + high), np.nan)
    # y(to) - y(third) = step (third^-p - to^-p) / (second^-p - third^-p)
    gained = 1.0 - (third / to) ** p
    return logarithms[-1] + step * gained / np.expm1(p * np.log(third / second)), p
