"""Two photons at once: ns and nd -> 1s by two-photon decay or Raman scattering, at second order.

With the harder photon of energy E and E_1s = 0, both are the same matrix element,

    M = sum_p R(1s,p) R(p,nl) [1/(E_p - E) + 1/(E_p - (Delta - E))],    Delta = E_nl,

over every p state, the continuum included: below Delta the softer photon, Delta - E, is emitted
too, above it E - Delta is absorbed. The sum is a finite one over the eigenstates of the Hamiltonian
in a Sturmian basis. M has poles where E is the energy of a Lyman line, for there the second order
contains the first twice over: nl -> n'p -> 1s. At n' = n the pole is cancelled by the phase space.
"""

from __future__ import annotations

import functools
from math import pi
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike
from scipy.linalg import eigh
from scipy.special import eval_genlaguerre, gammaln, roots_laguerre

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError, RangeError
from .bound_bound import einstein_a, quantum_numbers
from .levels import ionization_scale_ev

N_MAX = 10
"""Highest n of the initial level for which the accuracy is tested."""
HIGHEST_INTERMEDIATE = 50
"""Highest n' of the resonances that the basis holds; photons beyond them are refused."""

_ENERGY_1S = -0.5  # hartree
# An eigenvalue as near as this to a bound level is that level: rounding leaves 5e-13, relative.
_CONVERGED = 1e-11
# Squared ratio of the photon sums over polarization and direction, nl -> 1s, to those of ns -> 1s.
_ANGULAR = {0: 1.0, 2: 0.4}


class SturmianBasis(NamedTuple):
    """A basis for the p states: see :func:`_p_hamiltonian`."""

    exponent: float  # lambda, in inverse Bohr radii
    size: int


# Bound states up to 60p come out to 1e-12 (energy) and 1e-11 (dipole integrals).
_BASIS = SturmianBasis(0.12, 300)


class VirtualStates(NamedTuple):
    """What the matrix element nl -> 1s needs of its intermediate p states."""

    degenerate: float  # R(1s,np) R(np,nl), in a.u.
    weight: FloatArray  # (2 h - 1) R(1s,p) R(p,nl) of the others, in a.u.
    pole: FloatArray  # h = (E_p - E_1s)/Delta of the others


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
    Non-relativistic, reduced mass in the energies (in dW/dnu it cancels); relative error below
    1e-10 off the poles (and off the zeros of M), as a non-relativistic number.

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
    1.7796e-15
    """
    _check_level(n, l)
    if not 2 <= lowest_intermediate <= n:
        raise InputError(f"lowest_intermediate = {lowest_intermediate}: allowed are 2 to n = {n}")
    energy_ev = _checked_energy(photon_energy_ev, 0.0, level_energy_ev(n))
    return _spectrum(l, n, energy_ev, lowest_intermediate)


def raman_spectrum_per_s_hz(n: int, l: int, photon_energy_ev: ArrayLike) -> FloatArray:
    """Raman scattering on hydrogen, (n, l) + photon -> 1s + harder photon: dW/dnu, s^-1 per Hz.

    Parameters
    ----------
    n, l : int, dimensionless
        Initial level: ns with 2 <= n <= 10, or nd with 3 <= n <= 10.
    photon_energy_ev : array_like, any shape, eV
        Energy of the harder photon, that goes out: from the energy Delta of the level above 1s (0
        there) to that of the Lyman line 50p-1s, 13.5928 eV. The other has photon_energy_ev - Delta.

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
    The formula of :func:`two_photon_spectrum_per_s_hz` with Delta - w = -(energy absorbed), which
    it continues analytically: dW/dnu changes its sign there by the photon's phase space alone.
    Relative error and poles as there; the poles stand at n' > n.

    References
    ----------
    Hirata 2008, Phys. Rev. D 78, 023001 (from memory).

    Examples
    --------
    >>> print(f"{raman_spectrum_per_s_hz(2, 0, 11.0):.4e}")
    1.5402e-14
    """
    _check_level(n, l)
    limit = level_energy_ev(HIGHEST_INTERMEDIATE)
    energy_ev = _checked_energy(photon_energy_ev, level_energy_ev(n), limit)
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
        Both scaled to the reduced mass. Radial functions are positive next to the nucleus. A sign
        that changes between poles means a spectrum with a zero there; at 0 and Delta it is infinite.

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
    _check_level(n, l)
    limit = level_energy_ev(HIGHEST_INTERMEDIATE)
    energy_ev = _checked_energy(photon_energy_ev, 0.0, limit)
    fraction = energy_ev / level_energy_ev(n)
    amplitude = scaled_amplitude(virtual_states(n, l, _BASIS), fraction)
    with np.errstate(divide="ignore"):
        element: FloatArray = amplitude / (fraction * (1.0 - fraction) * _gap(n))
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
    10.1987 eV, 1.0018e+14 s^-2
    """
    _check_level(n, l)
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


def scaled_amplitude(states: VirtualStates, fraction: FloatArray) -> FloatArray:
    """Return y (1 - y) Delta M in a.u., at y = `fraction`, the energy of one photon over Delta.

    The bracket of M is (2 h - 1)/((h - y) (h - 1 + y))/Delta for the state at h. The degenerate
    state, at h = 1, gives 1/(y (1 - y))/Delta exactly, so the product has no pole at y = 0 or 1.
    Poles elsewhere give an infinity.
    """
    rest = 1.0 - fraction
    total = np.zeros_like(fraction)
    with np.errstate(divide="ignore"):
        for weight, pole in zip(states.weight, states.pole, strict=True):
            total += weight / ((pole - fraction) * (pole - rest))
    amplitude: FloatArray = states.degenerate + fraction * rest * total
    return amplitude


@functools.cache
def virtual_states(
    n: int, l: int, basis: SturmianBasis, lowest_intermediate: int = 2
) -> VirtualStates:
    """Form the dipole products 1s - p - nl of the p states in a basis, from that n' upwards."""
    energy, vectors = p_states(basis)
    product = (dipole_integrals(1, 0, basis) @ vectors) * (dipole_integrals(n, l, basis) @ vectors)
    pole = (energy - _ENERGY_1S) / _gap(n)
    others = np.arange(len(pole)) >= lowest_intermediate - 2
    others[n - 2] = False
    weight = product * (2.0 * pole - 1.0)
    return VirtualStates(float(product[n - 2]), weight[others], pole[others])


@functools.cache
def p_states(basis: SturmianBasis) -> tuple[FloatArray, FloatArray]:
    """Energies, ascending, and vectors of the p states in a basis; n'p is number n' - 2."""
    energy, vectors = eigh(*_p_hamiltonian(basis))
    bound = -0.5 / (np.arange(basis.size) + 2.0) ** 2
    # Exact, so that resonances stand where they belong, and np is degenerate with nl.
    converged = np.isclose(energy, bound, rtol=_CONVERGED, atol=0.0)
    return np.where(converged, bound, energy), vectors


def _p_hamiltonian(basis: SturmianBasis) -> tuple[FloatArray, FloatArray]:
    """Hamiltonian and overlap of the p Sturmian functions, in a.u.

    The functions N_k x^2 exp(-x/2) L_k^(3)(x), x = lambda r, are normalised to <k|1/r|k> = 1. They
    obey H|k> = [-lambda^2/8 + ((k + 2) lambda/2 - 1)/r] |k>, so that both matrices are tridiagonal
    and known in closed form (Rotenberg 1970, Adv. At. Mol. Phys. 6, 233; from memory).
    """
    k = np.arange(basis.size, dtype=np.float64)
    beside = -np.sqrt((k[:-1] + 1.0) * (k[:-1] + 4.0))
    overlap = np.diag(2.0 * (k + 2.0)) + np.diag(beside, 1) + np.diag(beside, -1)
    overlap /= basis.exponent
    potential = np.diag(0.5 * basis.exponent * (k + 2.0) - 1.0)
    return potential - basis.exponent**2 / 8.0 * overlap, overlap


def dipole_integrals(n: int, l: int, basis: SturmianBasis) -> FloatArray:
    """Integrals <nl|r|k> over the p Sturmian functions, shape (size,), in a.u.

    Gauss-Laguerre in t = (1/n + lambda/2) r is exact: the rest is a polynomial.
    """
    nodes, weights = roots_laguerre((basis.size + n) // 2 + 2)
    decay = 1.0 / n + 0.5 * basis.exponent
    r = nodes / decay
    x = basis.exponent * r
    k = np.arange(basis.size)[:, None]
    norm = np.exp(0.5 * (gammaln(k + 1.0) - gammaln(k + 4.0)))
    functions = norm * x**2 * eval_genlaguerre(k, 3, x)
    scale = 2.0 / n**2 * np.exp(0.5 * (gammaln(n - l) - gammaln(n + l + 1.0)))
    radial = scale * r * (2.0 * r / n) ** l * eval_genlaguerre(n - l - 1, 2 * l + 1, 2.0 * r / n)
    integrals: FloatArray = functions @ (weights * r * radial) / decay
    return integrals


def _spectrum(l: int, n: int, energy_ev: FloatArray, lowest_intermediate: int = 2) -> FloatArray:
    fraction = energy_ev / level_energy_ev(n)
    amplitude = scaled_amplitude(virtual_states(n, l, _BASIS, lowest_intermediate), fraction)
    scale = 16.0 / 27.0 * const.FINE_STRUCTURE**6 * _ANGULAR[l] * _gap(n) ** 4
    rate: FloatArray = scale * np.abs(fraction * (1.0 - fraction)) * amplitude**2
    return rate


def _gap(n: int) -> float:
    """Energy of level n above 1s, in hartree."""
    return 0.5 - 0.5 / n**2


def _check_level(n: int, l: int) -> None:
    quantum_numbers("level", n, l)
    if not 2 <= n <= N_MAX or l not in _ANGULAR:
        raise InputError(
            f"level n = {n}, l = {l}: allowed are l = 0 and 2 (ns, nd) with 2 <= n <= {N_MAX}"
        )


def _checked_energy(photon_energy_ev: ArrayLike, lowest: float, highest: float) -> FloatArray:
    energy_ev = np.asarray(photon_energy_ev, dtype=np.float64)
    inside = (energy_ev >= lowest) & (energy_ev <= highest)
    if not np.all(inside):
        raise RangeError(
            f"photon_energy_ev = {energy_ev[~inside].flat[0]:g}: allowed are {lowest:.8g} to "
            f"{highest:.8g} eV"
        )
    return energy_ev
