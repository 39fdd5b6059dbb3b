"""Escape of line photons by the expansion alone (Sobolev), as functions on arrays."""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray
from ..errors import InputError


def sobolev_optical_depth(
    einstein_a_per_s: FloatArray,
    wavelength_cm: FloatArray,
    weight_ratio: FloatArray,
    lower_density_cm3: float,
    hubble_rate_per_s: float,
) -> FloatArray:
    """Optical depth of a line in an expanding medium.

    Parameters
    ----------
    einstein_a_per_s : ndarray, shape (n_lines,), s^-1
        Spontaneous rate.
    wavelength_cm : ndarray, shape (n_lines,), cm
        Vacuum wavelength.
    weight_ratio : ndarray, shape (n_lines,), dimensionless
        g_upper / g_lower.
    lower_density_cm3 : float, cm^-3
        Density of the lower level.
    hubble_rate_per_s : float, s^-1
        Expansion rate.

    Returns
    -------
    ndarray, shape (n_lines,), dimensionless
        tau = (g_u/g_l) A lambda^3 n_l / (8 pi H). Stimulated emission, n_u g_l / (n_l g_u) below
        1e-8 for the Lyman lines of a recombining universe, is left out.

    References
    ----------
    Sobolev 1960, Moving Envelopes of Stars, Harvard University Press; Rybicki & dell'Antonio 1994,
    Astrophys. J. 427, 603 (from memory).
    """
    return (
        weight_ratio
        * einstein_a_per_s
        * wavelength_cm**3
        * (lower_density_cm3 / (8.0 * np.pi * hubble_rate_per_s))
    )


def escape_probability(optical_depth: FloatArray) -> FloatArray:
    """Probability that a line photon escapes by the expansion alone.

    Parameters
    ----------
    optical_depth : ndarray, any shape, dimensionless
        Sobolev optical depth, not negative.

    Returns
    -------
    ndarray, same shape, dimensionless
        P = (1 - exp(-tau)) / tau: between 0 and 1, 1 at zero depth, 1/tau at large depth.

    Raises
    ------
    InputError
        If an optical depth is negative or not a number.

    References
    ----------
    Sobolev 1960, Moving Envelopes of Stars, Harvard University Press (from memory).

    Examples
    --------
    >>> float(round(escape_probability(1.0), 6))
    0.632121
    """
    depth = np.asarray(optical_depth, dtype=np.float64)
    if not np.all(depth >= 0.0):
        raise InputError("optical_depth: negative or not a number; allowed are values from 0 up")
    safe = np.where(depth > 0.0, depth, 1.0)
    return np.where(depth > 0.0, -np.expm1(-safe) / safe, 1.0)


def escape_slope(optical_depth: FloatArray) -> FloatArray:
    """D ln P / d ln tau of the Sobolev escape probability: 0 at zero depth, -1 at large depth."""
    depth = np.asarray(optical_depth, dtype=np.float64)
    safe = np.where(depth > 1e-8, depth, 1.0)
    thick = safe * np.exp(-safe) / -np.expm1(-safe) - 1.0
    return np.where(depth > 1e-8, thick, -0.5 * depth)
