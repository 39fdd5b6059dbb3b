"""Hydrogenic photoionization and radiative recombination, spontaneous and stimulated.

One quadrature rule over the electron energy serves every temperature, level and process, so that
emission and absorption balance on each of its nodes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..errors import InputError
from ..kernels import radial
from .bound_bound import N_MAX, quantum_numbers
from .detailed_balance import (
    absorption_from_spontaneous,
    photoionization_from_recombination,
    thermal_volume_cm3,
)
from .electron_grid import ElectronGrid, electron_grid, maxwell_factor
from .hydrogenic import log_continuum_start
from .levels import ionization_scale_ev, reduced_mass_ratio
from .radiation import Occupation, planck_occupation

__all__ = [
    "BoundFree",
    "ElectronGrid",
    "bound_free",
    "electron_grid",
    "maxwell_factor",
    "photoionization_cross_section",
    "photoionization_rate",
    "photon_energy_ev",
    "recombination_coefficient",
    "recombination_weights",
    "thermal_volume_cm3",
]

_HIGHEST_ELECTRON_ENERGY = 100.0


@dataclass(frozen=True, slots=True, eq=False)
class BoundFree:
    """Photoionization of every level (n, l) with n <= n_max, on the nodes of the rule.

    Attributes
    ----------
    n_max, charge : int, dimensionless
        Highest principal quantum number, nuclear charge.
    grid : ElectronGrid
        The quadrature rule.
    cross_section_cm2 : tuple of ndarray, cm^2
        Element n - 1 has shape (n, n_nodes), l along the first axis, or (1, n_nodes) for a whole
        shell; read-only.
    """

    n_max: int
    charge: int
    grid: ElectronGrid
    cross_section_cm2: tuple[FloatArray, ...]


def bound_free(n_max: int, charge: int = 1) -> BoundFree:
    """Compute the cross sections of every level with n <= n_max.

    Parameters
    ----------
    n_max : int, dimensionless
        1 to 1000; memory is 400 n_max^2 bytes.
    charge : int, dimensionless
        Nuclear charge, 1 to 30.

    References
    ----------
    Burgess 1965, Mem. R. Astron. Soc. 69, 1.
    """
    if not 1 <= n_max <= N_MAX:
        raise InputError(f"n_max = {n_max}: allowed are 1 to {N_MAX}")
    grid = electron_grid()
    shells = tuple(_shell_cross_section(n, grid.energy, charge) for n in range(1, n_max + 1))
    for shell in shells:
        shell.flags.writeable = False
    return BoundFree(n_max, charge, grid, shells)


def photoionization_cross_section(
    n: ArrayLike, l: ArrayLike, electron_energy: ArrayLike, charge: int = 1
) -> FloatArray:
    """Photoionization cross section of a hydrogenic level, summed over l' = l - 1 and l + 1.

    Parameters
    ----------
    n, l : array_like of int, dimensionless
        Level: 1 <= n <= 1000, 0 <= l < n.
    electron_energy : array_like, dimensionless
        Energy of relative motion of the freed electron in units of the ion's own chi, 0 (threshold)
        to 100; the photon has chi (1/n^2 + electron_energy). All arguments broadcast.
    charge : int, dimensionless
        Nuclear charge, 1 to 30; sigma scales as charge^-2 and (m_e/mu)^2.

    Returns
    -------
    ndarray (a float for scalars), cm^2
        Relative error below 1e-11 up to n = 500; 0 where below about 1e-320.

    Notes
    -----
    sigma = (4 pi alpha a0^2/3) (n^2/Z^2) sum of l_> / (2l+1) (1 + n^2 k^2) g(n, l; k, l')^2.

    References
    ----------
    Burgess 1965, Mem. R. Astron. Soc. 69, 1; Stobbe 1930, Ann. Phys. 7, 661 (both from memory,
    verified in the tests with Coulomb wave functions).

    Examples
    --------
    >>> print(f"{photoionization_cross_section(1, 0, 0.0):.3e}")
    6.311e-18
    """
    n_all, l_all = quantum_numbers("level", n, l)
    energy = np.asarray(electron_energy, float)
    bad = ~((energy >= 0.0) & (energy <= _HIGHEST_ELECTRON_ENERGY))
    if bad.any():
        raise InputError(
            f"electron_energy = {energy[bad].flat[0]:g}: "
            f"allowed are 0 to {_HIGHEST_ELECTRON_ENERGY:g} chi"
        )
    n_all, l_all, energy = np.broadcast_arrays(n_all, l_all, energy)
    sigma = np.empty(energy.shape)
    for shell in np.unique(n_all):
        here = n_all == shell
        nodes, position = np.unique(energy[here], return_inverse=True)
        sigma[here] = _shell_cross_section(int(shell), nodes, charge)[l_all[here], position]
    return sigma[()]


def recombination_weights(
    atom: BoundFree,
    radiation_temperature_k: float | None = None,
    occupation: Occupation | None = None,
) -> FloatArray:
    """What turns a cross section into spectral recombination, for every shell at once.

    Parameters
    ----------
    atom : BoundFree
        Cross sections.
    radiation_temperature_k : float, K, optional
        Temperature of the blackbody that stimulates recombination; None: no stimulated part.
    occupation : callable, optional
        Photon occupation number as a function of photon energy in eV, in place of a blackbody.

    Returns
    -------
    ndarray, shape (n_max, n_nodes), cm^-2 s^-1
        W = (8 pi nu^2/c^2) (1 + f) d(nu), so that alpha_nl(T_m) = thermal_volume_cm3(T_m) (2l+1)
        times the sum over nodes of maxwell_factor(T_m) W sigma_nl; row n - 1 is shell n.

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209 (relation of recombination to photoionization).
    """
    energy_ev = photon_energy_ev(np.arange(1, atom.n_max + 1), atom.grid, atom.charge)
    enhancement = 1.0 + _occupation_number(energy_ev, radiation_temperature_k, occupation)
    return _mode_rate(energy_ev, atom.grid, atom.charge) * enhancement


def photon_energy_ev(n: IntArray, grid: ElectronGrid, charge: int = 1) -> FloatArray:
    """Energy chi (1/n^2 + energy) of the photon at each node, in eV, shape n.shape + (n_nodes,)."""
    binding = np.asarray(n, float)[..., None] ** -2
    return ionization_scale_ev(charge) * (binding + grid.energy)


def recombination_coefficient(
    n: ArrayLike,
    l: ArrayLike,
    matter_temperature_k: ArrayLike,
    radiation_temperature_k: ArrayLike | None = None,
    charge: int = 1,
    *,
    occupation: Occupation | None = None,
) -> FloatArray:
    """Radiative recombination coefficient onto a hydrogenic level.

    Parameters
    ----------
    n, l : array_like of int, dimensionless
        Level: 1 <= n <= 1000, 0 <= l < n.
    matter_temperature_k : array_like, K
        Temperature of the electrons, 0.02 to 1e5 K times charge^2.
    radiation_temperature_k : array_like, K, optional
        Temperature of the blackbody that stimulates recombination; None: no stimulated part. All
        arguments broadcast.
    charge : int, dimensionless
        Nuclear charge, 1 to 30.
    occupation : callable, optional
        Photon occupation number as a function of photon energy in eV, in place of a blackbody. It
        should be smooth in the logarithm of the electron energy.

    Returns
    -------
    ndarray (a float for scalars), cm^3/s
        Relative error below 1e-10 up to n = 500.

    Notes
    -----
    alpha = (2l+1) (h^2 / 2 pi mu k T_m)^(3/2)
    int (8 pi nu^2/c^2) sigma (1 + f) e^(-E_e/kT_m) d(nu), with E_e the electron energy.

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209; Burgess 1965, Mem. R. Astron. Soc. 69, 1.

    Examples
    --------
    >>> print(f"{recombination_coefficient(2, 0, 1e4):.2e}")
    2.34e-14
    """
    temperatures = [matter_temperature_k]
    if radiation_temperature_k is not None:
        temperatures.append(radiation_temperature_k)
    levels = quantum_numbers("level", n, l)
    n_all, l_all, *kelvin = np.broadcast_arrays(*levels, *temperatures)
    grid = electron_grid()
    energy_ev = photon_energy_ev(n_all, grid, charge)
    radiation = kelvin[1][..., None] if len(kelvin) > 1 else None
    enhancement = 1.0 + _occupation_number(energy_ev, radiation, occupation)
    spontaneous = _mode_rate(energy_ev, grid, charge) * _on_nodes(n_all, l_all, grid.energy, charge)
    captured = maxwell_factor(grid, kelvin[0], charge) * spontaneous * enhancement
    volume = thermal_volume_cm3(kelvin[0], charge)
    alpha: FloatArray = (2.0 * l_all + 1.0) * volume * captured.sum(axis=-1)
    return alpha[()]


def photoionization_rate(
    n: ArrayLike,
    l: ArrayLike,
    radiation_temperature_k: ArrayLike | None = None,
    charge: int = 1,
    *,
    occupation: Occupation | None = None,
) -> FloatArray:
    """Photoionization rate of a hydrogenic level in a blackbody or a given field.

    Parameters
    ----------
    n, l : array_like of int, dimensionless
        Level: 1 <= n <= 1000, 0 <= l < n.
    radiation_temperature_k : array_like, K
        Temperature of the blackbody, 0.02 to 1e5 K times charge^2; broadcasts against n and l.
    charge : int, dimensionless
        Nuclear charge, 1 to 30.
    occupation : callable, optional
        Photon occupation number as a function of photon energy in eV, in place of a blackbody. It
        must have fallen to nothing 25 chi above the threshold and be smooth in the logarithm of
        the electron energy.

    Returns
    -------
    ndarray (a float for scalars), s^-1
        Underflows to 0 in a cold field.

    Notes
    -----
    For a blackbody from :func:`recombination_coefficient` by detailed balance; it equals
    int (8 pi nu^2/c^2) sigma f d(nu).

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209.
    """
    if (radiation_temperature_k is None) == (occupation is None):
        raise InputError("photoionization: give radiation_temperature_k or occupation, one of them")
    n_all, l_all = quantum_numbers("level", n, l)
    if radiation_temperature_k is not None:
        temperature = np.asarray(radiation_temperature_k, float)
        alpha = recombination_coefficient(n_all, l_all, temperature, temperature, charge)
        binding_ev = ionization_scale_ev(charge) / n_all.astype(float) ** 2
        weight = 2.0 * (2.0 * l_all + 1.0)
        rate = photoionization_from_recombination(alpha, weight, binding_ev, temperature, charge)
        return rate[()]
    grid = electron_grid()
    energy_ev = photon_energy_ev(n_all, grid, charge)
    spontaneous = _mode_rate(energy_ev, grid, charge) * _on_nodes(n_all, l_all, grid.energy, charge)
    field = _occupation_number(energy_ev, None, occupation)
    total: FloatArray = absorption_from_spontaneous(spontaneous, field).sum(axis=-1)
    return total[()]


def _occupation_number(
    energy_ev: FloatArray, radiation_temperature_k: ArrayLike | None, occupation: Occupation | None
) -> FloatArray:
    if radiation_temperature_k is not None and occupation is not None:
        raise InputError("give radiation_temperature_k or occupation, not both")
    if occupation is not None:
        return _checked_occupation(occupation, energy_ev)
    if radiation_temperature_k is None:
        return np.zeros_like(energy_ev)
    return planck_occupation(energy_ev, radiation_temperature_k)


def _checked_occupation(occupation: Occupation, energy_ev: FloatArray) -> FloatArray:
    if not callable(occupation):
        raise InputError("occupation: a function of the photon energy in eV is needed")
    number = np.asarray(occupation(energy_ev), float)
    if number.shape not in {(), energy_ev.shape} or not np.all((number >= 0.0) & (number < np.inf)):
        raise InputError(
            "occupation: must give a finite number from 0 up for each photon energy it is given"
        )
    return np.broadcast_to(number, energy_ev.shape)


def _mode_rate(energy_ev: FloatArray, grid: ElectronGrid, charge: int) -> FloatArray:
    # (8 pi nu^2/c^2) d(nu) of each node: photons through 1 cm^2 in 1 s at one photon per mode.
    inverse_wavelength = energy_ev / (const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S)
    width_hz = grid.weight * (ionization_scale_ev(charge) / const.PLANCK_EV_S)
    rate: FloatArray = 8.0 * np.pi * inverse_wavelength**2 * width_hz
    return rate


def _on_nodes(n: IntArray, l: IntArray, energy: FloatArray, charge: int) -> FloatArray:
    # Cross sections of many levels at the same energies, shape n.shape + energy.shape.
    sigma = np.empty(n.shape + energy.shape)
    for shell in np.unique(n):
        here = n == shell
        sigma[here] = _shell_cross_section(int(shell), energy, charge)[l[here]]
    return sigma


def _shell_cross_section(n: int, energy: FloatArray, charge: int) -> FloatArray:
    # Every l of shell n, shape (n, n_energies), in cm^2.
    sigma = np.empty((n, len(energy)))
    radial.bound_free_strengths(n, energy, log_continuum_start(n, energy), sigma)
    length_squared = (const.BOHR_RADIUS_CM / (charge * reduced_mass_ratio(charge))) ** 2
    sigma *= 4.0 * np.pi * const.FINE_STRUCTURE / 3.0 * length_squared
    return sigma
