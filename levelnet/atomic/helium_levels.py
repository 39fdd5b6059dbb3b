"""The levels of neutral helium: one electron outside He+, singlets and triplets.

Two ladders, spin 0 and spin 1, that no electric-dipole line connects. Each is ordered as hydrogen
is, by n and then l; all singlets come first. The triplets begin at n = 2.
"""

from __future__ import annotations

import functools
import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..errors import InputError
from ..tables import read_table
from .levels import ORBITAL_LETTERS, reduced_mass_ratio

N_MAX = 100
"""Highest n up to which the accuracy of levels, lines and cross sections is tested."""

PER_CM_EV = const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S
SERIES_L = 3
"""Highest l whose levels are published terms and series of quantum defects."""

# Dipole polarizability of He+(1s) in cubic Bohr radii, (9/2)/Z^4 with Z = 2 (closed form).
_CORE_POLARIZABILITY = 9.0 / 32.0
# The series are fits to bound levels; continued above the threshold they are kept within one chi.
_DEFECTS_UP_TO = 1.0
_NAME = re.compile(r"(\d+) ([13])([A-Z])(\d?)")


def term_name(n: int, l: int, spin: int) -> str:
    """Spectroscopic name of a term: "2 1P", "3 3D"; "30 3[l=25]" beyond the letters."""
    letter = ORBITAL_LETTERS[l].upper() if l < len(ORBITAL_LETTERS) else f"[l={l}]"
    return f"{n} {2 * spin + 1}{letter}"


def term_numbers(name: str) -> tuple[int, int, int]:
    """Read (n, l, spin) from the name of a term or of one of its levels ("2 3P", "2 3P1")."""
    found = _NAME.fullmatch(name)
    l = ORBITAL_LETTERS.find(found[3].lower()) if found else -1
    if found is None or not 0 <= l < int(found[1]):
        raise InputError(f'helium level "{name}": no term; allowed are names as "2 1P" or "2 3P1"')
    return int(found[1]), l, (int(found[2]) - 1) // 2


@dataclass(frozen=True, slots=True, eq=False)
class HeliumLevels:
    """Terms of He I as arrays of shape (n_levels,): singlets by n and l, then triplets.

    Attributes
    ----------
    n_max : int, dimensionless
        Highest principal quantum number.
    nuclear_charge : int, dimensionless
        2; 1 in the hydrogenic limit. It sets the reduced mass alone: the core has charge 1.
    n, l, spin : ndarray of int, dimensionless
        Quantum numbers of the outer electron, and total spin 0 or 1.
    statistical_weight : ndarray, dimensionless
        (2 spin + 1)(2l + 1). The ion has weight 2: Saha factors take half of it.
    energy_ev : ndarray, eV
        Energy above 1 1S.
    ionization_energy_ev : ndarray, eV
        Energy that ionizes the level and leaves He+ in its ground state.
    """

    n_max: int
    nuclear_charge: int
    n: IntArray
    l: IntArray
    spin: IntArray
    statistical_weight: FloatArray
    energy_ev: FloatArray
    ionization_energy_ev: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.n),)
        for name in ("n", "l", "spin"):
            frozen_array(self, name, shape, np.int64)
        for name in ("statistical_weight", "energy_ev", "ionization_energy_ev"):
            frozen_array(self, name, shape)

    def __len__(self) -> int:
        """Count the levels."""
        return len(self.n)

    @property
    def chi_ev(self) -> float:
        """Unit of energy h c R_inf mu/m_e, in eV: 13.60383 for helium."""
        return const.RYDBERG_EV * reduced_mass_ratio(self.nuclear_charge)

    @property
    def effective_n(self) -> FloatArray:
        """Effective quantum number sqrt(chi / ionization energy), shape (n_levels,)."""
        number: FloatArray = np.sqrt(self.chi_ev / self.ionization_energy_ev)
        return number

    def index(self, n: int, l: int, spin: int) -> int:
        """Position of a level along the last axis of populations."""
        found = np.flatnonzero((self.n == n) & (self.l == l) & (self.spin == spin))
        if not len(found):
            raise InputError(
                f"helium level n = {n}, l = {l}, spin = {spin}: not among the {len(self)} levels"
            )
        return int(found[0])

    def series(self, l: int, spin: int) -> IntArray:
        """Positions of the levels of one l and spin, by ascending n."""
        return np.flatnonzero((self.l == l) & (self.spin == spin))

    def name(self, index: int) -> str:
        """Spectroscopic name of a level."""
        return term_name(int(self.n[index]), int(self.l[index]), int(self.spin[index]))


def helium_levels(n_max: int, hydrogenic: bool = False) -> HeliumLevels:
    """Every term (n, l, spin) of He I with n <= n_max.

    Parameters
    ----------
    n_max : int, dimensionless
        2 to 100.
    hydrogenic : bool
        True: all quantum defects zero and the nucleus of hydrogen, the limit in which everything
        computed from these levels must equal hydrogen.

    Returns
    -------
    HeliumLevels
        l up to 3: the published terms up to n = 10 (0.01 cm^-1), above them series of quantum
        defects (better than 0.003 cm^-1). From l = 4: hydrogenic with the polarization of the core,
        within 0.006 cm^-1 of the published terms, which are rounded to 0.01. Fine structure is
        averaged.

    Notes
    -----
    I = chi/n^2 + chi alpha_d <r^-4>, alpha_d = 9/32 a0^3 the polarizability of He+ and
    <r^-4> = (3 n^2 - l(l+1)) / (2 n^5 (l-1/2) l (l+1/2) (l+1) (l+3/2)).

    References
    ----------
    NIST Atomic Spectra Database; Drake, Springer Handbook of Atomic, Molecular, and Optical
    Physics, and Drake & Martin 1998, Can. J. Phys. 76, 679 (series); Bethe & Salpeter 1957,
    Quantum Mechanics of One- and Two-Electron Atoms (mean value of r^-4, from memory).
    """
    if not isinstance(n_max, int | np.integer) or not 2 <= n_max <= N_MAX:
        raise InputError(f"helium n_max = {n_max!r}: allowed are whole numbers from 2 to {N_MAX}")
    n, l = np.tril_indices(n_max)
    n, spin = n + 1, np.repeat([0, 1], [len(n), len(n) - 1])
    n, l = np.concatenate([n, n[1:]]), np.concatenate([l, l[1:]])
    charge = 1 if hydrogenic else 2
    chi_ev = const.RYDBERG_EV * reduced_mass_ratio(charge)
    binding = chi_ev / n.astype(float) ** 2
    if not hydrogenic:
        high = l > SERIES_L
        binding[high] *= 1.0 + _polarization(n[high], l[high])
        for position in np.flatnonzero(~high):
            binding[position] = _series_binding_ev(*(int(q[position]) for q in (n, l, spin)))
    weight = (2.0 * spin + 1.0) * (2.0 * l + 1.0)
    return HeliumLevels(int(n_max), charge, n, l, spin, weight, binding[0] - binding, binding)


def quantum_defect(l: int, spin: int, energy: ArrayLike) -> FloatArray:
    """Quantum defect of a series of He I at an energy of the outer electron, bound or free.

    Parameters
    ----------
    l, spin : int, dimensionless
        Series; from l = 4 the defect is taken as 0.
    energy : array_like, in units of chi
        -1/n*^2 of a bound level, k^2 of a free electron. Above 1 the value at 1 is given: the
        series are known from bound levels.

    Returns
    -------
    ndarray, dimensionless
        d0 - d2 energy + d4 energy^2.

    References
    ----------
    Drake & Martin 1998, Can. J. Phys. 76, 679; Seaton 1983, Rep. Prog. Phys. 46, 167 (one function
    of energy on both sides of the threshold).
    """
    clipped = np.minimum(np.asarray(energy, float), _DEFECTS_UP_TO)
    d0, d2, d4 = _series().get((l, spin), (0.0, 0.0, 0.0))
    defect: FloatArray = d0 - d2 * clipped + d4 * clipped**2
    return defect


def _polarization(n: IntArray, l: IntArray) -> FloatArray:
    # alpha_d n^2 <r^-4>: the shift over chi/n^2.
    n_float, l_float = n.astype(float), l.astype(float)
    below = (l_float - 0.5) * l_float * (l_float + 0.5) * (l_float + 1.0) * (l_float + 1.5)
    above = 3.0 * n_float**2 - l_float * (l_float + 1.0)
    shift: FloatArray = _CORE_POLARIZABILITY * above / (2.0 * n_float**3 * below)
    return shift


def _series_binding_ev(n: int, l: int, spin: int) -> float:
    published = _published_binding_ev().get((n, l, spin))
    if published is not None:
        return published
    number = float(n)
    for _ in range(20):  # each pass gains a factor of n^3/(2 d2), above 1e4 where this is used
        number = n - float(quantum_defect(l, spin, -(number**-2)))
    return const.RYDBERG_EV * reduced_mass_ratio(2) / number**2


@functools.cache
def _series() -> dict[tuple[int, int], tuple[float, float, float]]:
    numbers = read_table("helium/quantum_defects").numbers
    rows = zip(
        *(np.nan_to_num(numbers[name]).tolist() for name in ("l", "spin", "d0", "d2", "d4")),
        strict=True,
    )
    return {(int(l), int(spin)): (d0, d2, d4) for l, spin, d0, d2, d4 in rows}


@functools.cache
def _published_binding_ev() -> dict[tuple[int, int, int], float]:
    table = read_table("helium/energy_levels")
    energy_ev = table.numbers["energy_per_cm"] * PER_CM_EV
    names = table.texts["level"]
    return {
        term_numbers(name): float(energy_ev[-1] - energy)
        for name, energy in zip(names[:-1], energy_ev[:-1], strict=True)
    }
