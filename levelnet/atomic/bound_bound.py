"""Hydrogenic electric-dipole lines: Einstein coefficients, singly and as dense blocks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..errors import InputError
from ..kernels import radial
from .hydrogenic import bound_start
from .levels import reduced_mass_ratio

N_MAX = 1000
"""Highest principal quantum number up to which the accuracy is tested."""


def quantum_numbers(what: str, n: ArrayLike, l: ArrayLike, n_max: int = N_MAX) -> list[IntArray]:
    """Broadcast n and l of levels `what`; InputError unless 0 <= l < n <= n_max."""
    n_l = np.broadcast_arrays(*(_whole_numbers(what, value) for value in (n, l)))
    bad = (n_l[0] < 1) | (n_l[0] > n_max) | (n_l[1] < 0) | (n_l[1] >= n_l[0])
    if bad.any():
        first = np.flatnonzero(bad)[0]
        raise InputError(
            f"{what}: n = {n_l[0].flat[first]}, l = {n_l[1].flat[first]} is no level; "
            f"allowed are 1 <= n <= {n_max} and 0 <= l < n"
        )
    return list(n_l)


def einstein_a(
    n: ArrayLike, l: ArrayLike, n_lower: ArrayLike, l_lower: ArrayLike, charge: int = 1
) -> FloatArray:
    """Spontaneous decay rate of a hydrogenic line (n, l) -> (n_lower, l_lower).

    Parameters
    ----------
    n, l : array_like of int, dimensionless
        Upper level: n <= 1000, 0 <= l < n.
    n_lower, l_lower : array_like of int, dimensionless
        Lower level: 1 <= n_lower < n, l_lower = l - 1 or l + 1. All four broadcast.
    charge : int, dimensionless
        Nuclear charge, 1 (hydrogen) to 30; also sets the reduced mass.

    Returns
    -------
    ndarray (a float for scalars), s^-1
        Averaged over upper and summed over lower magnetic and spin states. Relative error below
        1e-13 at n <= 120 and 1e-12 at n = 1000, the constants aside.

    Raises
    ------
    InputError
        Where the two levels are no electric-dipole pair with n > n_lower.

    Notes
    -----
    A = (4/3) alpha^3 omega^3 l_> / (2l+1) R^2 Z^4 mu/m_e per atomic unit of time, with
    omega = (1/n_lower^2 - 1/n^2)/2. Non-relativistic.

    References
    ----------
    Bethe & Salpeter 1957, Quantum Mechanics of One- and Two-Electron Atoms, sec. 59-63 (from
    memory).

    Examples
    --------
    >>> print(f"{einstein_a(2, 1, 1, 0):.4e}")
    6.2649e+08
    """
    upper, lower = (
        quantum_numbers("upper level", n, l),
        quantum_numbers("lower level", n_lower, l_lower),
    )
    n_u, l_u, n_l, l_l = np.broadcast_arrays(*upper, *lower)
    bad = (n_u <= n_l) | (np.abs(l_u - l_l) != 1)
    if bad.any():
        first = np.flatnonzero(bad)[0]
        raise InputError(
            f"line ({n_u.flat[first]}, {l_u.flat[first]}) -> "
            f"({n_l.flat[first]}, {l_l.flat[first]}): "
            "allowed are n > n_lower and l_lower = l - 1 or l + 1"
        )
    flat = [values.flatten() for values in (n_u, l_u, n_l, l_l)]
    integral = bound_start(flat[0], flat[2])
    radial.line_integrals(flat[0], flat[1], flat[2], flat[3], integral)
    omega = transition_frequency(n_u, n_l)
    angular = np.maximum(l_u, l_l) / (2.0 * l_u + 1.0)
    rate: FloatArray = (
        strength_scale(charge) * omega**3 * angular * integral.reshape(n_u.shape) ** 2
    )
    return rate[()]


def transition_frequency(n_upper: IntArray, n_lower: IntArray) -> FloatArray:
    """Angular frequency (1/n_lower^2 - 1/n_upper^2)/2 in atomic units, for charge 1."""
    upper, lower = n_upper.astype(float), n_lower.astype(float)
    frequency: FloatArray = 0.5 * (upper - lower) * (upper + lower) / (upper * lower) ** 2
    return frequency


def strength_scale(charge: int = 1) -> float:
    """Return (4/3) alpha^3 Z^4 (mu/m_e) per atomic unit of time, in s^-1."""
    scale = 4.0 / 3.0 * const.FINE_STRUCTURE**3 / const.ATOMIC_TIME_S * reduced_mass_ratio(charge)
    return scale * charge**4


@dataclass(frozen=True, slots=True, eq=False)
class DipoleBlocks:
    """Every electric-dipole line among levels n <= n_max, as dense blocks over (n, n') for each l.

    Attributes
    ----------
    n_max, charge : int, dimensionless
        Highest principal quantum number, nuclear charge.
    strength_per_s : ndarray, shape (n_strengths,), s^-1
        All blocks one after the other, read-only; see :meth:`block`.
    offset : ndarray of int, shape (n_max,)
        Where each block starts; the last element is n_strengths.
    """

    n_max: int
    charge: int
    strength_per_s: FloatArray
    offset: IntArray

    def block(self, l: int) -> FloatArray:
        """Symmetric strengths between (n, l), n = l+1..n_max, and (n', l+1), n' = l+2..n_max.

        Parameters
        ----------
        l : int, dimensionless
            0 to n_max - 2.

        Returns
        -------
        ndarray, shape (n_max - l, n_max - l - 1), s^-1
            A sqrt(g_upper / g_lower), whichever of the two levels is the upper; 0 where n = n'. A
            read-only view. For l = 0 the first row holds the Lyman lines.
        """
        if not 0 <= l <= self.n_max - 2:
            raise InputError(f"block l = {l}: allowed are 0 to n_max - 2 = {self.n_max - 2}")
        values = self.strength_per_s[self.offset[l] : self.offset[l + 1]]
        return values.reshape(self.n_max - l, self.n_max - l - 1)


def dipole_blocks(n_max: int, charge: int = 1, out: FloatArray | None = None) -> DipoleBlocks:
    """Compute every electric-dipole line among levels n <= n_max.

    Parameters
    ----------
    n_max : int, dimensionless
        2 to 1000; memory is 8 n_max^3 / 3 bytes.
    charge : int, dimensionless
        Nuclear charge, 1 to 30.
    out : ndarray, shape (at least n_strengths,), optional
        Contiguous buffer to write into; a reused one is several times faster than fresh memory. The
        records made from it share it.

    Returns
    -------
    DipoleBlocks
        Relative error as for :func:`einstein_a`.

    References
    ----------
    Infeld & Hull 1951, Rev. Mod. Phys. 23, 21 (recurrence); see :mod:`levelnet.kernels.radial`.
    """
    if not 2 <= n_max <= N_MAX:
        raise InputError(f"n_max = {n_max}: allowed are 2 to {N_MAX}")
    rows = n_max - np.arange(n_max - 1, dtype=np.int64)
    offset = np.concatenate([[0], np.cumsum(rows * (rows - 1))])
    if out is None:
        out = np.empty(offset[-1])
    if len(out) < offset[-1]:
        raise InputError(f"out: {len(out)} elements, n_max = {n_max} needs {offset[-1]}")
    strengths = out[: offset[-1]].view()
    radial.dipole_blocks(n_max, _scaled_starts(n_max, charge), offset, strengths)
    strengths.flags.writeable = False
    return DipoleBlocks(n_max, charge, strengths, offset)


def _scaled_starts(n_max: int, charge: int) -> FloatArray:
    # The recurrence is linear: what depends on (n, n') alone goes into its start.
    lower, upper = np.triu_indices(n_max, 1)
    lower, upper = lower + 1, upper + 1
    factor = np.sqrt(strength_scale(charge) * transition_frequency(upper, lower) ** 3)
    starts = np.zeros((n_max + 1, n_max + 1))
    starts[lower, upper] = factor * bound_start(upper, lower)
    return starts


def _whole_numbers(what: str, value: ArrayLike) -> IntArray:
    numbers = np.asarray(value)
    if np.issubdtype(numbers.dtype, np.floating) and np.all(numbers == np.round(numbers)):
        numbers = numbers.astype(np.int64)
    if not np.issubdtype(numbers.dtype, np.integer):
        raise InputError(f"{what}: quantum numbers must be whole numbers, not {value!r}")
    return numbers.astype(np.int64)
