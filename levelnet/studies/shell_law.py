"""The laws that a ladder of truncations is fitted with: one that is used, others to doubt it with.

Every quantity is its logarithm y(n), n the highest level of the truncated atom. What the levels
above n would add falls like their recombination coefficients. For a shell whose binding energy is
far below kT these go as n^-3 exp(t) E_1(t), t = chi/(n^2 kT) (Kramers' cross sections), that is
n^-3 (ln n + c) and the same times n^-2, n^-4, ...; summed from n + 1 upwards, with N = n + 1/2
(midpoint rule):

    y(n) = L + N^-2 (a ln N + b) + N^-4 (c ln N + d) + ...

This is the law used. It leaves out how the share of atoms that reach the ground state from shell n
depends on n, so its error is not taken from itself but from what else the rungs allow: shorter
laws, the law without the longest rung, and a power law L + C N^-p with free exponent.
"""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray

# (power, logarithm) of the terms of the law, in the order in which more rungs allow them.
_TERMS = ((0, 0), (2, 1), (2, 0), (4, 1), (4, 0))
# Exponents among which the power law is sought; a slower approach than the lowest has no limit
# that the rungs could tell.
_LOWEST_EXPONENT, _HIGHEST_EXPONENT = 0.1, 12.0


def all_laws(rungs: FloatArray, logarithms: FloatArray, to: float) -> tuple[FloatArray, FloatArray]:
    """Carry quantities to `to` by every law that the rungs allow.

    Parameters
    ----------
    rungs : ndarray, shape (n_rungs,)
        N = n_max + 1/2 of each rung, ascending; four or more.
    logarithms : ndarray, shape (n_rungs, n_quantities)
        ln of each quantity on each rung.
    to : float
        N to carry to; may be infinite.

    Returns
    -------
    values : ndarray, shape (n_laws, n_quantities)
        The law used; the same without the longest rung; with fewer terms; last the power law,
        NaN where there is none.
    exponent : ndarray, shape (n_quantities,)
        Of the power law; NaN where there is none.

    References
    ----------
    Kramers 1923, Phil. Mag. 46, 836 (cross sections; from memory).
    """
    most = _term_count(rungs)
    values = [_shell_weights(rungs, most, to) @ logarithms[-most:]]
    values.append(_shell_weights(rungs[:-1], most, to) @ logarithms[-most - 1 : -1])
    values += [_shell_weights(rungs, k, to) @ logarithms[-k:] for k in range(3, most)]
    power, exponent = _power_law(rungs, logarithms, to)
    return np.array([*values, power]), exponent


def noise_factor(rungs: FloatArray, to: float, minus: float | None = None) -> float:
    """What the law used makes of the noise of the rungs at `to`, or between `to` and `minus`."""
    weights = _shell_weights(rungs, _term_count(rungs), to)
    if minus is not None:
        weights = weights - _shell_weights(rungs, _term_count(rungs), minus)
    return float(np.abs(weights).sum())


def _term_count(rungs: FloatArray) -> int:
    """Terms of the law used: one rung at least must be left to doubt it with."""
    return min(len(_TERMS), len(rungs) - 1)


def _terms(rungs: FloatArray, count: int) -> FloatArray:
    """First `count` terms of the law at each N, shape (n_rungs, count); those of N = inf are 0."""
    columns = [
        np.where(np.isinf(rungs) & (power > 0), 0.0, rungs**-power * np.log(rungs) ** logarithm)
        for power, logarithm in _TERMS[:count]
    ]
    return np.column_stack(columns)


def _shell_weights(rungs: FloatArray, count: int, to: float) -> FloatArray:
    """Weights of the `count` longest rungs in the law with as many terms, at `to`."""
    with np.errstate(invalid="ignore"):  # 0 * inf at N = inf, which is 0
        target = _terms(np.array([to]), count)[0]
    matrix = _terms(rungs[-count:], count)
    scale = np.abs(matrix).max(axis=0)
    return np.asarray(np.linalg.solve((matrix / scale).T, target / scale))


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
