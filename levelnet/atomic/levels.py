"""The levels of a hydrogenic atom or ion: quantum numbers, weights, energies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import BoolArray, FloatArray, IntArray, frozen_array
from ..errors import InputError

ORBITAL_LETTERS = "spdfghiklmnoqrtuvwxyz"
"""Letters of l = 0, 1, ...: after s, p, d they run from f, without j and without s and p."""


def level_name(n: int, l: int) -> str:
    """Spectroscopic name of a level: "2s", "3d", or "n=60" for a whole shell (l = -1).

    Letters after s, p, d run from f without j.
    """
    if l < 0:
        return f"n={n}"
    return f"{n}{ORBITAL_LETTERS[l]}" if l < len(ORBITAL_LETTERS) else f"{n}[l={l}]"


# Mass numbers of the most abundant isotopes from lithium to zinc (common practice).
_MASS_NUMBERS = (
    *(7, 9, 11, 12, 14, 16, 19, 20, 23, 24, 27, 28, 31, 32, 35, 40, 39, 40, 45, 48, 51, 52, 55, 56),
    *(59, 58, 63, 64),
)
# By nuclear charge: measured ionization energy in cm^-1, and n^3 times the Lamb shift of ns in Hz.
_MEASURED = {
    1: (const.HYDROGEN_IONIZATION_PER_CM, const.HYDROGEN_1S_LAMB_SHIFT_HZ),
    2: (const.HELIUM_ION_IONIZATION_PER_CM, 8.0 * const.HELIUM_ION_2S_LAMB_SHIFT_HZ),
}
HIGHEST_CHARGE = 2 + len(_MASS_NUMBERS)
"""Highest nuclear charge for which a nuclear mass is known here; (Z alpha)^2 is 0.05 there."""


def reduced_mass_ratio(charge: int = 1) -> float:
    """Reduced mass of electron and nucleus over the electron mass, mu/m_e (dimensionless).

    Parameters
    ----------
    charge : int, 1 to 30
        Nuclear charge: 1 for hydrogen, 2 for the helium ion, more for other one-electron ions.

    Notes
    -----
    Proton and alpha particle by their measured masses; heavier nuclei by the mass number of the
    most abundant isotope in atomic mass units, which errs by less than 1e-7 of mu. Non-relativistic
    formulas err by some (charge alpha)^2.
    """
    if not isinstance(charge, (int, np.integer)) or not 1 <= charge <= HIGHEST_CHARGE:
        raise InputError(
            f"charge = {charge!r}: allowed are whole numbers from 1 to {HIGHEST_CHARGE}"
        )
    if charge == 1:
        return 1.0 / (1.0 + const.ELECTRON_PROTON_MASS_RATIO)
    if charge == 2:
        return 1.0 / (1.0 + 1.0 / const.ALPHA_ELECTRON_MASS_RATIO)
    return 1.0 / (1.0 + const.ELECTRON_MASS_U / _MASS_NUMBERS[charge - 3])


def ionization_scale_ev(charge: int = 1) -> float:
    """Return chi = h c R_inf Z^2 mu/m_e, in eV: 13.59829 for hydrogen."""
    return const.RYDBERG_EV * charge**2 * reduced_mass_ratio(charge)


def binding_energy_ev(n: IntArray, l: IntArray, energies: str, charge: int = 1) -> FloatArray:
    """Energy that ionizes each level (n, l), in eV.

    Parameters
    ----------
    n, l : ndarray of int, any one shape
        Quantum numbers, n >= 1, 0 <= l < n.
    energies : "measured" or "nonrelativistic"
        "nonrelativistic": chi/n^2. "measured": centroid over j of the fine structure, less the Lamb
        shift of the s levels; the ground state takes the measured ionization energy.
    charge : int
        Nuclear charge; "measured" is known for hydrogen and for the helium ion.

    Notes
    -----
    Averaging the Dirac fine structure over j with weights 2j + 1 gives
    chi/n^2 [1 + (Z alpha/n)^2 (n/(l + 1/2) - 3/4)] for l > 0, and n/1 in place of n/(l + 1/2) for l
    = 0 (Bethe & Salpeter 1957, Quantum Mechanics of One- and Two-Electron Atoms, sec. 12-13; from
    memory). Good to 0.003 cm^-1 for n = 2 and 3 of hydrogen against the measured levels, to 0.02
    cm^-1 for n = 2 of the helium ion.
    """
    n_float, l_float = np.asarray(n, float), np.asarray(l, float)
    plain = ionization_scale_ev(charge) / n_float**2
    if energies == "nonrelativistic":
        return plain
    if charge not in _MEASURED:
        raise InputError('energies = "measured": known for hydrogen and the helium ion only')
    ground_per_cm, lamb_hz = _MEASURED[charge]
    orbit = np.where(l_float > 0, n_float / (l_float + 0.5), n_float)
    shifted = plain * (1.0 + (charge * const.FINE_STRUCTURE / n_float) ** 2 * (orbit - 0.75))
    lamb = lamb_hz * const.PLANCK_EV_S / n_float**3
    ground = ground_per_cm * const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S
    return np.where(n_float == 1, ground, shifted - np.where(l_float == 0, lamb, 0.0))


@dataclass(frozen=True, slots=True, eq=False)
class LevelSet:
    """Levels as arrays, ordered by n and then l; every array has shape (n_levels,).

    Attributes
    ----------
    n, l : ndarray of int
        Quantum numbers; l = -1 stands for a whole shell, every l of it populated by its weight.
    statistical_weight : ndarray, dimensionless
        2 (2l + 1), or 2 n^2 for a whole shell; electron spin counted, nuclear spin not.
    energy_ev : ndarray, eV
        Energy above the ground state.
    ionization_energy_ev : ndarray, eV
        Energy that ionizes the level.
    """

    n: IntArray
    l: IntArray
    statistical_weight: FloatArray
    energy_ev: FloatArray
    ionization_energy_ev: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.n),)
        for name in ("n", "l"):
            frozen_array(self, name, shape, np.int64)
        for name in ("statistical_weight", "energy_ev", "ionization_energy_ev"):
            frozen_array(self, name, shape)

    def __len__(self) -> int:
        """Count the levels."""
        return len(self.n)

    @property
    def shell(self) -> BoolArray:
        """True where an entry is a whole shell, shape (n_levels,)."""
        return np.asarray(self.l < 0)

    def index(self, n: int, l: int) -> int:
        """Position of level (n, l) along the last axis of populations."""
        found = np.flatnonzero((self.n == n) & (self.l == l))
        if not len(found):
            raise InputError(f"level n = {n}, l = {l}: not among the {len(self)} levels")
        return int(found[0])


def hydrogenic_levels(
    n_max: int,
    energies: str = "nonrelativistic",
    charge: int = 1,
    resolve_l_to: int | None = None,
) -> LevelSet:
    """Every level (n, l) with 1 <= n <= n_max, ordered by n and then l.

    Parameters
    ----------
    n_max : int
        Highest n.
    energies : "measured" or "nonrelativistic"
        As for :func:`binding_energy_ev`.
    charge : int
        Nuclear charge.
    resolve_l_to : int, optional
        Above this n whole shells stand in place of levels, each at the mean energy of its levels
        by weight.
    """
    top = n_max if resolve_l_to is None else resolve_l_to
    n = np.repeat(np.arange(1, top + 1), np.arange(1, top + 1))
    l = np.concatenate([np.arange(k) for k in range(1, top + 1)])
    shell = np.arange(top + 1, n_max + 1)
    weight = np.concatenate([2.0 * (2.0 * l + 1.0), 2.0 * shell.astype(float) ** 2])
    binding = binding_energy_ev(n, l, energies, charge)
    binding = np.concatenate(
        [binding, [_mean_binding_ev(k, energies, charge) for k in shell.tolist()]]
    )
    return LevelSet(
        np.concatenate([n, shell]),
        np.concatenate([l, np.full_like(shell, -1)]),
        weight,
        binding[0] - binding,
        binding,
    )


def _mean_binding_ev(n: int, energies: str, charge: int) -> float:
    l = np.arange(n)
    return float(
        np.average(binding_energy_ev(np.full_like(l, n), l, energies, charge), weights=2 * l + 1)
    )
