"""What the history looks like to an observer: optical depth, visibility, last scattering.

Every integral runs over the integrated range only, from the lowest redshift of the run upwards;
there is no reionization in it.

    tau(z) = int_{z_end}^{z} c sigma_T n_e / (H (1 + z)) dz,     g(eta) = (d tau/d eta) exp(-tau)
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from .. import constants as const
from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from .result import Milestones

# Points per unit of ln(1 + z); doubling them moves the milestones by less than 1e-7.
_DENSITY = 1500
# x_e at the lowest redshift above which the optical depth from there says nothing about z_*.
_LITTLE = 0.01


@dataclass(frozen=True, slots=True, eq=False)
class Visibility:
    """Optical depth and visibility as smooth functions of ln(1 + z).

    Attributes
    ----------
    log_growth : ndarray, shape (n_points,)
        ln(1 + z), ascending.
    electron_fraction : ndarray, shape (n_points,), dimensionless
        n_e/n_H.
    optical_depth : CubicSpline
        tau over ln(1 + z).
    log_visibility : CubicSpline
        ln g, g in Mpc^-1, over ln(1 + z).
    """

    log_growth: FloatArray
    electron_fraction: FloatArray
    optical_depth: CubicSpline
    log_visibility: CubicSpline


def dense_growth(low: float, high: float) -> FloatArray:
    """An even grid in ln(1 + z) fine enough for every observable."""
    return np.linspace(low, high, max(16, int(_DENSITY * (high - low)) + 1))


def visibility(
    cosmology: Cosmology,
    log_growth: FloatArray,
    electron_fraction: FloatArray,
    thomson: float = 1.0,
) -> Visibility:
    """Integrate the optical depth upwards from the lowest redshift.

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    log_growth : ndarray, shape (n_points,)
        ln(1 + z), ascending and dense.
    electron_fraction : ndarray, shape (n_points,), dimensionless
        n_e/n_H there.
    thomson : float, dimensionless
        Thomson cross section over the measured one.

    References
    ----------
    Hu & Sugiyama 1996, Astrophys. J. 471, 542 (definitions).
    """
    redshift = np.expm1(log_growth)
    electrons = cosmology.hydrogen_density_cm3(redshift) * electron_fraction
    per_cm = thomson * const.THOMSON_CROSS_SECTION_CM2 * electrons
    per_log = per_cm * const.SPEED_OF_LIGHT_CM_S / cosmology.hubble_rate_per_s(redshift)
    depth = CubicSpline(log_growth, per_log).antiderivative()
    per_mpc = per_cm / (1.0 + redshift) * const.CM_PER_MPC
    log_g = np.log(per_mpc) - depth(log_growth)
    return Visibility(log_growth, electron_fraction, depth, CubicSpline(log_growth, log_g))


def milestones(cosmology: Cosmology, seen: Visibility) -> Milestones:
    """Sum up a history in a few numbers; NaN where the grid does not reach the event."""
    x = seen.log_growth
    last = float("nan")
    if seen.electron_fraction[0] < _LITTLE:  # else most of the optical depth lies below the grid
        depth = seen.optical_depth
        last = _crossing(x, depth(x) - 1.0, lambda y: float(depth(y)) - 1.0)
    peak, width = _peak_and_width(x, seen.log_visibility)
    begin, half, end = (_ionized_to(seen, level) for level in (0.9, 0.5, 0.1))
    duration = _time(cosmology, end) - _time(cosmology, begin)
    return Milestones(last, peak, width, half, _time(cosmology, last), duration)


def _ionized_to(seen: Visibility, level: float) -> float:
    """Highest redshift where x_e falls through `level`; NaN where the grid does not reach it."""
    x, excess = seen.log_growth, seen.electron_fraction - level
    curve = CubicSpline(x, excess)
    return _crossing(x, excess, lambda y: float(curve(y)))


def _time(cosmology: Cosmology, redshift: float) -> float:
    return float(cosmology.cosmic_time_s(redshift)) if np.isfinite(redshift) else float("nan")


def _crossing(x: FloatArray, values: FloatArray, function: Callable[[float], float]) -> float:
    """Highest redshift where `function` of ln(1 + z) rises through zero; NaN where it does not."""
    found = np.flatnonzero((values[:-1] < 0.0) & (values[1:] >= 0.0))
    if not len(found):
        return float("nan")
    root = brentq(function, x[found[-1]], x[found[-1] + 1], xtol=1e-14)
    return float(np.expm1(root))


def _peak_and_width(x: FloatArray, log_visibility: CubicSpline) -> tuple[float, float]:
    """Redshift of the visibility peak, and the full width at half maximum."""
    values = log_visibility(x)
    top = int(np.argmax(values))
    if top in {0, len(x) - 1}:
        return float("nan"), float("nan")
    slope = log_visibility.derivative()
    peak = brentq(lambda y: float(slope(y)), x[top - 1], x[top + 1], xtol=1e-14)
    level = float(log_visibility(peak)) - np.log(2.0)

    def above(y: float) -> float:
        return float(log_visibility(y)) - float(level)

    low = np.flatnonzero(values[:top] < level)
    high = np.flatnonzero(values[top:] < level)
    if not len(low) or not len(high):
        return float(np.expm1(peak)), float("nan")
    left = brentq(above, x[low[-1]], x[low[-1] + 1], xtol=1e-14)
    right = brentq(above, x[top + high[0] - 1], x[top + high[0]], xtol=1e-14)
    return float(np.expm1(peak)), float(np.expm1(right) - np.expm1(left))
