"""Two photons at once: ns and nd -> 1s by two-photon decay or Raman scattering, at second order.

With the harder photon of energy E and E_1s = 0, both are the same matrix element,

    M = sum_p R(1s,p) R(p,nl) [1/(E_p - E) + 1/(E_p - (Delta - E))],    Delta = E_nl,

over every p state, the continuum included: below Delta the softer photon, Delta - E, is emitted
too, above it E - Delta is absorbed. The sum is a finite one over the eigenstates of the Hamiltonian
in a Sturmian basis. M has poles where E is the energy of a Lyman line, for there the second order
is two steps of the first: nl -> n'p -> 1s. At n' = n phase space cancels the pole.
"""

from __future__ import annotations

from math import pi
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError, RangeError
from .bound_bound import einstein_a, quantum_numbers
from .levels import ionization_scale_ev
from .sturmian import SturmianBasis, gap_hartree, scaled_amplitude, virtual_states

N_MAX = 10
"""Highest n of the initial level for which the accuracy is tested."""
HIGHEST_INTERMEDIATE = 50
"""Highest n' of the resonances that the basis holds; photons beyond them are refused."""

# Squared ratio of the photon sums over polarization and direction, nl -> 1s, to those of ns -> 1s.
_ANGULAR = {0: 1.0, 2: 0.4}
# Bound states up to 60p come out to 1e-12 (energy) and 1e-11 (dipole integrals).
_BASIS = SturmianBasis(0.12, 300)


class Resonances(NamedTuple):
    """Double poles of a spectrum at Lyman lines; both arrays have the shape of the n' asked.

    Attributes
    ----------
    photon_energy_ev : ndarray, eV
        Energy of the Lyman line n'p-1s, where the harder photon meets the pole.
    strength_per_s2 : ndarray, s^-2
        (nu - nu_0)^2 dW/dnu at the pole.
    """

    photon_energy_ev: FloatArray
    strength_per_s2: FloatArray


def two_photon_spectrum_per_s_hz(
    n: int, l: int, photon_energy_ev: ArrayLike, lowest_intermediate: int = 2
) -> FloatArray:
    """Spontaneous two-photon decay of hydrogen, (n, l) -> 1s: dW/dnu, in s^-1 per Hz.

    Parameters
    ----------
    n, l : int, dimensionless
        Initial level: ns with 2 <= n <= 10, or nd with 3 <= n <= 10.
    photon_energy_ev : array_like, any shape, eV, 0 to the energy Delta of the level above 1s
        Energy of one of the two photons, the harder one by custom; E and Delta - E give the same.
    lowest_intermediate : int, dimensionless, 2 to n
        Intermediate p states below this n' are left out. With 2, the default, none is; with n, none
        of the cascades is in, but neither is their interference: a definition, not a rate.

    Returns
    -------
    ndarray, shape of `photon_energy_ev`, s^-1 Hz^-1
        Decays per second and Hz, each with one photon in the lower and one in the upper half: the
        total rate is the integral over the upper half alone.

    Raises
    ------
    InputError
        For any other level, or an energy outside its range.

    Notes
    -----
    dW/dnu = (16/27) alpha^6 C_l w^3 (Delta - w)^3 M^2 with w in hartree, C_s = 1 and C_d = 2/5.
    Non-relativistic, reduced mass in the energies (in dW/dnu it cancels). M errs by less than 5e-11
    of the sum of magnitudes of its terms, so dW/dnu by 2e-11 in most places and by more next to the
    zeros of M. Relativity counts at order alpha^2 = 5e-5.

    The rate is the undamped one. At n' < n it has double poles, the one-photon cascades
    nl -> n'p -> 1s: infinite there (or as large as rounding leaves it), and no rate within some
    natural widths of it. The last digits of E at a distance d from a pole cost 4e-16 E/d of the
    rate. A network that has the cascades must leave the poles out: :func:`lyman_resonances`. Where
    line energies are measured ones, shift E with the line: only the distance matters.

    References
    ----------
    Goeppert-Mayer 1931, Ann. Phys. 401, 273; Chluba & Sunyaev 2008, A&A 480, 629 (both from
    memory).

    Examples
    --------
    >>> print(f"{two_photon_spectrum_per_s_hz(3, 0, 6.0):.4e}")
    1.7775e-15
    """
    n, l = _checked_level(n, l)
    if lowest_intermediate not in range(2, n + 1):
        raise InputError(f"lowest_intermediate = {lowest_intermediate}: allowed are 2 to n = {n}")
    energy_ev = _checked_energy(photon_energy_ev, 0.0, _delta_ev(n))
    return _spectrum(l, n, energy_ev, lowest_intermediate)


def raman_spectrum_per_s_hz(n: int, l: int, photon_energy_ev: ArrayLike) -> FloatArray:
    """Raman scattering on hydrogen, (n, l) + photon -> 1s + harder photon: dW/dnu, s^-1 per Hz.

    Parameters
    ----------
    n, l : int, dimensionless
        Initial level: ns with 2 <= n <= 10, or nd with 3 <= n <= 10.
    photon_energy_ev : array_like, any shape, eV
        Energy of the harder photon, that goes out: from the energy Delta of the level above 1s
        (where the rate is 0) to that of the Lyman line 50p-1s, 13.5928 eV. The other photon has
        photon_energy_ev - Delta.

    Returns
    -------
    ndarray, shape of `photon_energy_ev`, s^-1 Hz^-1
        Scatterings per second, per Hz of either photon and per unit occupation number of the
        softer one, that comes in; stimulation by photons like the harder one is not in it.

    Raises
    ------
    InputError
        For any other level, or an energy outside its range.

    Notes
    -----
    The formula of :func:`two_photon_spectrum_per_s_hz` with |Delta - w|: M continues analytically
    from emission of the softer photon to its absorption. Accuracy and poles as there; the poles
    stand at n' > n, absorption nl -> n'p followed by the Lyman line n'p-1s.

    References
    ----------
    Hirata 2008, Phys. Rev. D 78, 023001 (from memory).

    Examples
    --------
    >>> print(f"{raman_spectrum_per_s_hz(2, 0, 11.0):.4e}")
    1.1590e-14
    """
    n, l = _checked_level(n, l)
    limit_ev = _delta_ev(HIGHEST_INTERMEDIATE)
    energy_ev = _checked_energy(photon_energy_ev, _delta_ev(n), limit_ev)
    return _spectrum(l, n, energy_ev)


def second_order_matrix_element(n: int, l: int, photon_energy_ev: ArrayLike) -> FloatArray:
    """Matrix element M of (n, l) -> 1s with two photons, with its sign, in atomic units.

    Parameters
    ----------
    n, l : int, dimensionless
        Initial level: ns with 2 <= n <= 10, or nd with 3 <= n <= 10.
    photon_energy_ev : array_like, any shape, eV, 0 to 13.5928 eV (50p-1s)
        Energy of the harder photon: two-photon decay below the energy Delta of the level above 1s,
        Raman scattering above it. Hydrogen with its reduced mass.

    Returns
    -------
    ndarray, shape of `photon_energy_ev`, in units of a_0^2/hartree
        Both units are those of the reduced mass. Radial functions are positive next to the nucleus.
        Where M changes its sign between two poles the spectrum has a zero; M is infinite at 0 and
        at Delta, the spectrum is not.

    Raises
    ------
    InputError
        For any other level, or an energy outside its range.

    References
    ----------
    Goeppert-Mayer 1931, Ann. Phys. 401, 273 (from memory).

    Examples
    --------
    >>> print(f"{second_order_matrix_element(2, 0, 5.099359):.3f}")
    -47.122
    """
    n, l = _checked_level(n, l)
    energy_ev = _checked_energy(photon_energy_ev, 0.0, _delta_ev(HIGHEST_INTERMEDIATE))
    fraction = energy_ev / _delta_ev(n)
    amplitude = scaled_amplitude(virtual_states(n, l, _BASIS), fraction)
    with np.errstate(divide="ignore"):
        element: FloatArray = amplitude / (fraction * (1.0 - fraction) * gap_hartree(n))
    return element


def lyman_resonances(n: int, l: int, n_intermediate: ArrayLike) -> Resonances:
    """Double poles of the two-photon (n' < n) and Raman (n' > n) spectra of (n, l) -> 1s.

    Parameters
    ----------
    n, l : int, dimensionless
        Initial level: ns with 2 <= n <= 10, or nd with 3 <= n <= 10.
    n_intermediate : array_like of int, any shape, dimensionless
        n' of the intermediate levels n'p, 2 to 1000 and not n.

    Returns
    -------
    Resonances
        For each n', in eV and s^-2.

    Raises
    ------
    InputError
        For any other level.

    Notes
    -----
    With nu_0 the frequency of the line n'p-1s, dW/dnu = S/(nu - nu_0)^2 + (interference, of order
    1/(nu - nu_0)). For n' < n, S = A(nl->n'p) A(n'p->1s)/(2 pi)^2 (on angular frequency: over
    2 pi): the cascade of two lines, each a Lorentzian, far outside its natural width. For n' > n
    the first factor is the absorption per unit occupation, A(n'p->nl) 3/(2l + 1).

    References
    ----------
    Bethe & Salpeter 1957, Quantum Mechanics of One- and Two-Electron Atoms, sec. 59 (from memory),
    for the coefficients A; the limit is tested against the spectra.

    Examples
    --------
    >>> poles = lyman_resonances(3, 0, 2)
    >>> print(f"{poles.photon_energy_ev:.4f} eV, {poles.strength_per_s2:.4e} s^-2")
    10.1987 eV, 1.0019e+14 s^-2
    """
    n, l = _checked_level(n, l)
    middle, _ = quantum_numbers("intermediate level", n_intermediate, 1)
    if np.any(middle == n):
        raise InputError(f"n_intermediate = {n}: no pole where it equals n of the level itself")
    lower, upper = np.minimum(middle, n), np.maximum(middle, n)
    below = middle < n
    line = einstein_a(upper, np.where(below, l, 1), lower, np.where(below, 1, l))
    first = np.where(below, line, line * 3.0 / (2 * l + 1))
    strength = first * einstein_a(middle, 1, 1, 0) / (2.0 * pi) ** 2
    return Resonances(level_energy_ev(middle), strength[()])


def level_energy_ev(n: ArrayLike) -> FloatArray:
    """Energy of level n of hydrogen above 1s, in eV; non-relativistic, with the reduced mass."""
    binding: FloatArray = ionization_scale_ev() / np.asarray(n, dtype=float) ** 2
    return ionization_scale_ev() - binding


def _spectrum(l: int, n: int, energy_ev: FloatArray, lowest_intermediate: int = 2) -> FloatArray:
    fraction = energy_ev / _delta_ev(n)
    amplitude = scaled_amplitude(virtual_states(n, l, _BASIS, lowest_intermediate), fraction)
    scale = 16.0 / 27.0 * const.FINE_STRUCTURE**6 * _ANGULAR[l] * gap_hartree(n) ** 4
    rate: FloatArray = scale * np.abs(fraction * (1.0 - fraction)) * amplitude**2
    return rate


def _delta_ev(n: int) -> float:
    return float(level_energy_ev(n))


def _checked_level(n: int, l: int) -> tuple[int, int]:
    numbers = quantum_numbers("level", n, l)
    if numbers[0].size != 1:
        raise InputError(f"level: n and l are single numbers, not of shape {numbers[0].shape}")
    n, l = int(numbers[0].item()), int(numbers[1].item())
    if not 2 <= n <= N_MAX or l not in _ANGULAR:
        raise InputError(
            f"level n = {n}, l = {l}: allowed are l = 0 and 2 (ns, nd) with 2 <= n <= {N_MAX}"
        )
    return n, l


def _checked_energy(photon_energy_ev: ArrayLike, lowest_ev: float, highest_ev: float) -> FloatArray:
    energy_ev = np.asarray(photon_energy_ev, dtype=np.float64)
    inside = (energy_ev >= lowest_ev) & (energy_ev <= highest_ev)
    if not np.all(inside):
        raise RangeError(
            f"photon_energy_ev = {energy_ev[~inside].flat[0]:g}: allowed are {lowest_ev:.8g} to "
            f"{highest_ev:.8g} eV"
        )
    return energy_ev
