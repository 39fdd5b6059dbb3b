"""Escape probability of a line with a Voigt profile inside which a continuum absorbs.

References
----------
Hjerting 1938, Astrophys. J. 88, 508; Harris 1948, Astrophys. J. 108, 112 (Voigt function as a
series in the damping; from memory, held against ``scipy.special.voigt_profile``).
"""

from __future__ import annotations

import functools
import math
from typing import NamedTuple

import numpy as np
from scipy.special import dawsn

from ..arrays import FloatArray
from ..errors import InputError
from ..kernels.continuum_escape import (
    FARTHEST,
    SCALE,
    cells_to,
    escape_of_lines,
    reach_of_line,
)
from ..kernels.diffusive_escape import escape_with_diffusion

# Cells in a unit of u: twice as wide ones, and these, are extrapolated (order 2 to order 4).
_PER_UNIT = 36
_ASYMPTOTIC = 12.0
# Cells in u with diffusion: of first order where that has ceased.
_DIFFUSIVE_PER_UNIT = 80
LARGEST_DAMPING = 0.03
"""Series of the profile to the third power of the damping: within 1e-6 up to here."""


class Chance(NamedTuple):
    """Escape probability of one line and its derivatives; dimensionless.

    Attributes
    ----------
    value : float
        P.
    by_depth, by_continuum : float
        dP/d ln tau and dP/d ln c.
    by_damping : float
        dP/da.
    """

    value: float
    by_depth: float
    by_continuum: float
    by_damping: float


def continuum_escape(depth: float, continuum: float, damping: float) -> Chance:
    """Escape probability with a continuum inside the line.

    Parameters
    ----------
    depth : float, dimensionless
        Sobolev optical depth tau of the line, not negative.
    continuum : float, dimensionless
        Optical depth c of the continuum per Doppler width, not negative.
    damping : float, dimensionless
        Voigt parameter a, width over 4 pi times the Doppler width; 0 to 0.03. 0: pure Doppler.

    Returns
    -------
    Chance
        (1 - e^-tau)/tau to 1e-12 at c = 0; otherwise within 5e-5 of the equation's solution for
        c <= 0.1, 3e-4 for c <= 3.

    Raises
    ------
    InputError
        Outside the range.

    Notes
    -----
    dh/dy = (tau phi + c) h - c from h = 1 on the blue side, P = int phi h dy: statistical
    equilibrium of the line with complete redistribution over phi and a blackbody continuum.

    Examples
    --------
    >>> print(f"{continuum_escape(1.0, 0.0, 1e-3).value:.6f}")
    0.632121
    """
    if not (0.0 <= depth < np.inf and 0.0 <= continuum < np.inf):
        raise InputError(
            f"optical depth {depth:g} of the line, {continuum:g} of the continuum: "
            "must be 0 or above"
        )
    if not 0.0 <= damping <= LARGEST_DAMPING:
        raise InputError(f"damping = {damping:g}: allowed are 0 to {LARGEST_DAMPING:g}")
    return Chance(*continuum_escapes(np.array([[depth, continuum, damping]]))[0].tolist())


def continuum_escapes(columns: FloatArray) -> FloatArray:
    """Give the same for many lines at once; dampings up to 0.03, which the caller sees to.

    Parameters
    ----------
    columns : ndarray of float64, shape (n_lines, 3), C-ordered, dimensionless
        Depth, continuum and damping of each line.

    Returns
    -------
    ndarray, shape (n_lines, 4), dimensionless
        The parts of Chance.

    Raises
    ------
    InputError
        If a number of a line is negative, infinite or none.
    """
    found = np.empty((len(columns), 4))
    half = _PER_UNIT // 2
    if escape_of_lines(columns, half, _cells(half), _cells(_PER_UNIT), found):
        raise InputError(
            "optical depth of a line, of the continuum inside it, or damping: negative, infinite "
            "or not a number"
        )
    return found


def diffusive_escape(
    depth: float, continuum: float, damping: float, incoherent: float
) -> tuple[Chance, float]:
    """Escape probability where coherent scattering shifts photons by Doppler widths.

    Parameters
    ----------
    depth, continuum : float, dimensionless
        As in :func:`continuum_escape`.
    damping : float, dimensionless
        Voigt parameter of the whole natural width; 0 to 0.03.
    incoherent : float, dimensionless
        Part p of the absorbed photons that is lost to other levels; above 0, below 1.

    Returns
    -------
    Chance
        P, within 2e-3; at c = 0 within 1/(p tau) of 1/tau, for thick lines alone (p tau >> 1).
    float
        dP/dp.

    Notes
    -----
    Of f_o, the source function of what other levels send back, Q/(p tau) = P_o is the escape
    probability; the line's own f_L - f_bb is 1 - (1 - p) P_o of f_o - f_bb, so that
    P = p P_o/(1 - (1 - p) P_o).

    References
    ----------
    Hirata & Switzer 2008, Phys. Rev. D 77, 083007 (coherent scattering in He I lines; from memory);
    Rybicki & dell'Antonio 1994, Astrophys. J. 427, 603 (diffusion; from memory).
    """
    reach = reach_of_line(depth, continuum, damping * incoherent)
    half = cells_to(reach, _DIFFUSIVE_PER_UNIT)
    cells, out = _cells(_DIFFUSIVE_PER_UNIT), np.empty(5)
    line = np.array([depth, continuum, damping, incoherent])
    escape_with_diffusion(line, half, cells, np.empty((8, 2 * half)), out)
    left = 1.0 - (1.0 - incoherent) * out[0] / (incoherent * depth)
    value = out[0] / (depth * left)
    # By Q, and by tau and p at constant Q.
    by_q = 1.0 / (depth * left**2)
    by_p = -by_q * out[0] ** 2 / (depth * incoherent**2)
    return (
        Chance(
            value,
            float(by_q * (out[1] - out[0])),
            float(by_q * out[2]),
            float(by_q * out[3]),
        ),
        float(by_q * out[4] + by_p),
    )


@functools.cache
def _cells(per_unit: int) -> FloatArray:
    """Widths, and the series of the normalized profile times them; shape (n_cells, 5)."""
    step = 1.0 / per_unit
    count = cells_to(FARTHEST, per_unit) + 2
    u = (np.arange(count) + 0.5) * step
    y, width = SCALE * np.sinh(u), SCALE * np.cosh(u) * step
    core, wing = np.exp(-(y**2)), _wing(y)
    series = np.stack([core, wing[0], (1.0 - 2.0 * y**2) * core, wing[1]], axis=1)
    cells = np.empty((count, 5))
    cells[:, 0], cells[:, 1:] = width, series * (width / math.sqrt(math.pi))[:, None]
    return cells


def _wing(y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """H_1 and H_3 = -H_1''/6 of H(a, y) = sum a^k H_k(y), with H_1 = -(2/sqrt pi) F'."""
    near = np.minimum(y, _ASYMPTOTIC)
    slope = 1.0 - 2.0 * near * dawsn(near)
    third = 4.0 * (near**2 - 1.0) + 4.0 * near * (3.0 - 2.0 * near**2) * dawsn(near)
    far = np.maximum(y, _ASYMPTOTIC)
    first_far, third_far, term = np.zeros_like(y), np.zeros_like(y), np.ones_like(y)
    for k in range(1, 14):
        term = term * (2 * k - 1) / (2.0 * far**2)
        first_far += term
        third_far -= term * (2 * k) * (2 * k + 1) / (6.0 * far**2)
    scale = 2.0 / math.sqrt(math.pi)
    return (
        scale * np.where(y < _ASYMPTOTIC, -slope, first_far),
        scale * np.where(y < _ASYMPTOTIC, third / 6.0, third_far),
    )
