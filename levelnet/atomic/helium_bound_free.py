"""Photoionization of He I and radiative recombination to it, on hydrogen's electron grid.

Ground state: a published fit. Excited s, p, d: quantum-defect method. Higher l: hydrogenic, at the
true threshold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import BoolArray, FloatArray, frozen_array
from ..errors import RangeError
from ..tables import read_table
from .bound_free import bound_free
from .coulomb_functions import RadialGrid, bound_functions, free_function, radial_grid
from .detailed_balance import photoionization_from_recombination, thermal_volume_cm3
from .electron_grid import COLDEST_K, HOTTEST_K, ElectronGrid, electron_grid
from .helium_levels import HeliumLevels, quantum_defect
from .helium_lines import channel_factors
from .levels import reduced_mass_ratio
from .radiation import planck_occupation

ION_WEIGHT = 2.0
"""Statistical weight of He+ in its ground state."""

_FIT = "helium/photoionization_fits"
_FIT_UP_TO_EV = 5e4
_DIRECT_L = 2
# Highest n computed directly; above it, the ratio to hydrogen is that at this n. All of _DIRECT_N
# share one radial grid for electrons with n k up to _SLOW_NK; faster ones need grids of their own,
# and for them the ratio settles at n = 10/k.
_DIRECT_N = (100, 70, 50)
_SLOW_NK = 0.8
_FAST_N, _FAST_NK, _LEAST_N = 30, 10.0, 6


@dataclass(frozen=True, slots=True, eq=False)
class HeliumBoundFree:
    """Photoionization of every level of He I into He+(1s), on the nodes of the rule.

    Attributes
    ----------
    levels : HeliumLevels
        The levels.
    grid : ElectronGrid
        The quadrature rule; energies in units of `levels.chi_ev`.
    cross_section_cm2 : ndarray, shape (n_levels, n_nodes), cm^2
        Read-only.
    """

    levels: HeliumLevels
    grid: ElectronGrid
    cross_section_cm2: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make the array read-only."""
        frozen_array(self, "cross_section_cm2", (len(self.levels), len(self.grid.energy)))


def helium_bound_free(levels: HeliumLevels) -> HeliumBoundFree:
    """Compute the photoionization cross sections of every level of He I.

    Parameters
    ----------
    levels : HeliumLevels
        Levels up to n = 100. In the hydrogenic limit nothing published is used.

    Returns
    -------
    HeliumBoundFree
        1 1S: the fit of Verner et al. 1996, a few per cent. s, p, d: quantum-defect method with the
        defect continued above the threshold (kept at its value at chi beyond chi). For fast
        electrons and n above 10/k to 30 the ratio to hydrogen is that of a lower n: within 2 per
        cent below chi, 20 per cent of what is next to nothing above it; recombination coefficients
        of single levels within 0.3 per cent, their sum 1e-6. Channels of the levels n = 2 carry the
        factors of the lines they continue (:func:`levelnet.atomic.helium_lines.channel_factors`, up
        to 3.7 per cent). l from 3: hydrogenic. Case-B totals lie 0.2 per cent (1e3 K) to 0.8 per
        cent (2.5e4 K) above those of Hummer & Storey 1998, with hydrogen's shells added above
        n_max: without them n_max = 30 is 8.8 per cent low at 1e3 K.

    Notes
    -----
    sigma = (4 pi^2 alpha / 3) a^2 omega sum of l_> / (2l+1) <u_nl|r|u_kl'>^2 in atomic units, with
    free functions of unit energy density.

    References
    ----------
    Verner, Ferland, Korista & Yakovlev 1996, ApJ 465, 487; Burgess & Seaton 1960, MNRAS 120, 121
    (quantum-defect method); Burgess 1965, Mem. R. Astron. Soc. 69, 1 (hydrogenic).
    """
    grid = electron_grid()
    hydrogen = bound_free(levels.n_max).cross_section_cm2
    mass = reduced_mass_ratio() / reduced_mass_ratio(levels.nuclear_charge)
    sigma = np.empty((len(levels), len(grid.energy)))
    for i, (n, l) in enumerate(zip(levels.n, levels.l, strict=True)):
        sigma[i] = mass**2 * hydrogen[n - 1][l]
    for spin in (0, 1):
        for l, ratio in enumerate(_ratios(levels, spin, sigma, grid)):
            sigma[levels.series(l, spin)] *= ratio
    if levels.nuclear_charge == 2:
        energy_ev = levels.ionization_energy_ev[0] + levels.chi_ev * grid.energy
        sigma[0] = ground_state_cross_section(energy_ev)
    return HeliumBoundFree(levels, grid, sigma)


def ground_state_cross_section(photon_energy_ev: ArrayLike) -> FloatArray:
    """Photoionization cross section of 1 1S of He I.

    Parameters
    ----------
    photon_energy_ev : array_like, eV
        24.587 to 5e4 eV.

    Returns
    -------
    ndarray, shape of `photon_energy_ev`, cm^2
        A fit to measured and computed values, within a few per cent.

    References
    ----------
    Verner, Ferland, Korista & Yakovlev 1996, ApJ 465, 487 (coefficients from memory).
    """
    fit = {name: float(one[0]) for name, one in read_table(_FIT).numbers.items()}
    energy = np.asarray(photon_energy_ev, float)
    bad = ~((energy >= fit["threshold_ev"]) & (energy <= _FIT_UP_TO_EV))
    if bad.any():
        raise RangeError(
            f"photon_energy_ev = {energy[bad].flat[0]:g}: "
            f"allowed are {fit['threshold_ev']:g} to {_FIT_UP_TO_EV:g} eV"
        )
    x = energy / fit["e0_ev"] - fit["y0"]
    y = np.hypot(x, fit["y1"])
    shape = ((x - 1.0) ** 2 + fit["yw"] ** 2) * y ** (0.5 * fit["p"] - 5.5)
    sigma: FloatArray = 1e-18 * fit["sigma0_mb"] * shape
    return sigma * (1.0 + np.sqrt(y / fit["ya"])) ** -fit["p"]


def helium_recombination_cm3_per_s(
    atom: HeliumBoundFree,
    matter_temperature_k: float,
    radiation_temperature_k: float | None = None,
    captured: FloatArray | None = None,
) -> FloatArray:
    """Radiative recombination coefficients He+ + e -> every level of He I.

    Parameters
    ----------
    atom : HeliumBoundFree
        Cross sections.
    matter_temperature_k : float, K, 0.02 to 1e5
        Temperature of the electrons.
    radiation_temperature_k : float, K, optional
        Temperature of the blackbody that stimulates recombination; None: no stimulated part.
    captured : ndarray, shape (n_levels, n_nodes), s^-1, optional
        What :func:`captured_spectrum` gives for this very radiation temperature, where it is at
        hand; nothing checks that.

    Returns
    -------
    ndarray, shape (n_levels,), cm^3/s
        g/(g_e g_ion) (h^2 / 2 pi mu k T_m)^(3/2) int (8 pi nu^2/c^2) sigma (1 + f) e^(-E_e/kT_m)
        d(nu), g_e g_ion = 4.

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209.
    """
    if not COLDEST_K <= matter_temperature_k <= HOTTEST_K:
        raise RangeError(
            f"matter temperature {matter_temperature_k:g} K: "
            f"allowed are {COLDEST_K:g} to {HOTTEST_K:g} K"
        )
    levels, grid = atom.levels, atom.grid
    if captured is None:
        captured = captured_spectrum(atom, radiation_temperature_k)
    thermal_ev = const.BOLTZMANN_EV_K * matter_temperature_k
    with np.errstate(under="ignore"):
        total = captured @ np.exp(-grid.energy * levels.chi_ev / thermal_ev)
    volume = thermal_volume_cm3(matter_temperature_k, levels.nuclear_charge)
    coefficients: FloatArray = volume * total
    return coefficients


def captured_spectrum(
    atom: HeliumBoundFree, radiation_temperature_k: float | None = None
) -> FloatArray:
    """What electrons of each energy contribute to recombination, but for their number.

    Parameters
    ----------
    atom : HeliumBoundFree
        Cross sections.
    radiation_temperature_k : float, K, optional
        Of the blackbody that stimulates; None: none.

    Returns
    -------
    ndarray, shape (n_levels, n_nodes), s^-1
        g/(g_e g_ion) (8 pi nu^2/c^2) sigma (1 + f) d(nu), g_e g_ion = 4; recombination is its sum
        with exp(-E_e/kT_m) times the thermal volume.
    """
    levels, grid = atom.levels, atom.grid
    energy_ev = levels.ionization_energy_ev[:, None] + levels.chi_ev * grid.energy
    inverse_wavelength = energy_ev / (const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S)
    width_hz = grid.weight * (levels.chi_ev / const.PLANCK_EV_S)
    captured = 8.0 * np.pi * inverse_wavelength**2 * width_hz * atom.cross_section_cm2
    if radiation_temperature_k is not None:
        captured *= 1.0 + planck_occupation(energy_ev, radiation_temperature_k)
    weighted: FloatArray = (levels.statistical_weight / (2.0 * ION_WEIGHT))[:, None] * captured
    return weighted


def helium_photoionization_per_s(
    atom: HeliumBoundFree, radiation_temperature_k: float, captured: FloatArray | None = None
) -> FloatArray:
    """Photoionization rates of every level of He I in a blackbody, by detailed balance.

    Parameters
    ----------
    atom : HeliumBoundFree
        Cross sections.
    radiation_temperature_k : float, K, 0.02 to 1e5
        Temperature of the blackbody.
    captured : ndarray, shape (n_levels, n_nodes), s^-1, optional
        What :func:`captured_spectrum` gives for this very temperature, where it is at hand;
        nothing checks that.

    Returns
    -------
    ndarray, shape (n_levels,), s^-1
        Underflows to 0 in a cold field.

    References
    ----------
    Milne 1924, Phil. Mag. 47, 209.
    """
    levels = atom.levels
    kelvin = radiation_temperature_k
    alpha = helium_recombination_cm3_per_s(atom, kelvin, kelvin, captured)
    return photoionization_from_recombination(
        alpha,
        levels.statistical_weight / ION_WEIGHT,
        levels.ionization_energy_ev,
        radiation_temperature_k,
        levels.nuclear_charge,
    )


def _ratios(
    levels: HeliumLevels, spin: int, hydrogen: FloatArray, grid: ElectronGrid
) -> list[FloatArray]:
    """Cross sections of s, p, d over those of hydrogen: for each l, shape (n_states, n_nodes)."""
    series = [levels.series(l, spin) for l in range(min(_DIRECT_L, levels.n_max - 1) + 1)]
    n = [levels.n[one] for one in series]
    nu = [levels.effective_n[one] for one in series]
    ratios = [np.empty((len(one), len(grid.energy))) for one in series]
    slow: dict[int, tuple[RadialGrid, list[FloatArray]]] = {}
    for node, energy in enumerate(grid.energy):
        k = np.sqrt(energy)
        top = _highest_direct(k, levels.n_max)
        direct = [int(np.sum(one <= top)) for one in n]
        if top not in slow:
            slow[top] = _on_grid(nu, direct, 0.0)
        radial, bound = slow[top]
        if k * k * radial.edges[-1] > 2.0:  # faster than the field alone makes it
            radial, bound = _on_grid(nu, direct, float(k))
        squares = _squared_integrals(levels, spin, bound, float(energy), radial)
        for l, one in enumerate(series):
            omega = 0.5 * (nu[l] ** -2.0 + energy)[: direct[l]]
            sigma = _unit(levels) * omega * squares[l]
            ratio = sigma / hydrogen[one[: direct[l]], node]
            # Beyond, what is left of n is the density of levels, (n/nu)^3.
            density = (n[l] / nu[l]) ** 3
            ratios[l][: direct[l], node] = ratio
            ratios[l][direct[l] :, node] = (ratio / density[: direct[l]])[-1] * density[direct[l] :]
    return ratios


def _highest_direct(k: float, n_max: int) -> int:
    for n in _DIRECT_N:
        if n * k <= _SLOW_NK:
            return min(n, n_max)
    return int(min(n_max, _FAST_N, max(_LEAST_N, _FAST_NK / k)))


def _on_grid(
    nu: list[FloatArray], direct: list[int], k: float
) -> tuple[RadialGrid, list[FloatArray]]:
    states = [one[:count] for one, count in zip(nu, direct, strict=True)]
    grid = radial_grid(max(float(one.max(initial=1.0)) for one in states), k)
    return grid, [bound_functions(one, l, grid) for l, one in enumerate(states)]


def _squared_integrals(
    levels: HeliumLevels, spin: int, bound: list[FloatArray], energy: float, grid: RadialGrid
) -> list[FloatArray]:
    # Sum over l' of l_> / (2l+1) <r>^2 for each l, shape (n_states,).
    weight = (grid.nodes * grid.weights).ravel()
    free = []
    for l in range(len(bound) + 1):
        defect = 0.0 if levels.nuclear_charge == 1 else float(quantum_defect(l, spin, energy))
        free.append(weight * free_function(energy, l, defect, grid))
    total = []
    for l, functions in enumerate(bound):
        squared = np.zeros(len(functions))
        for l_free in (l - 1, l + 1)[l == 0 :]:
            channel = max(l, l_free) / (2.0 * l + 1.0) * (functions @ free[l_free]) ** 2
            if levels.nuclear_charge == 2:
                channel[_is_second(levels, l, spin)[: len(channel)]] *= _factor(l, spin, l_free)
            squared += channel
        total.append(squared)
    return total


def _is_second(levels: HeliumLevels, l: int, spin: int) -> BoolArray:
    return np.asarray(levels.n[levels.series(l, spin)] == 2)


def _factor(l: int, spin: int, l_free: int) -> float:
    # The continuum goes on from the lines of the series.
    return channel_factors().get(((2, l, spin), l_free), (0, 1.0))[1]


def _unit(levels: HeliumLevels) -> float:
    length = const.BOHR_RADIUS_CM / reduced_mass_ratio(levels.nuclear_charge)
    return 4.0 * np.pi**2 * const.FINE_STRUCTURE / 3.0 * length**2
