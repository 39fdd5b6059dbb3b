"""Two-photon decay 2s -> 1s of hydrogen and hydrogenic ions, from the second-order matrix element.

The sum over all intermediate p states, continuum included, is a finite sum over the eigenstates of
the Hamiltonian in a Sturmian basis. For another initial state only its radial function and energy
change, and its poles (states between it and the ground state) need care; 2s has none.
"""

from __future__ import annotations

import functools
from math import pi
from typing import NamedTuple

import numpy as np
from scipy.linalg import eigh
from scipy.special import eval_genlaguerre, gammaln, roots_laguerre

from .. import constants as const
from ..arrays import FloatArray
from ..errors import RangeError
from .levels import reduced_mass_ratio

# At this exponent the 2p function itself is in the basis, and 18 functions give the total to 1e-13;
# more change nothing but the run time.
_BASIS_EXPONENT = 1.0  # lambda, in inverse Bohr radii
_BASIS_SIZE = 18
_N_NODES = 32
# Beyond h nu/kT = 40 a photon mode holds less than 1e-17 photons.
_CUTOFF = 40.0
_LOWEST_K, _HIGHEST_K = 1e-3, 1e6
_ENERGY_1S, _ENERGY_2S = -0.5, -0.125  # hartree
_GAP = _ENERGY_2S - _ENERGY_1S


class _PseudoStates(NamedTuple):
    """What the amplitude needs: see :func:`_amplitude`."""

    degenerate: float
    weight: FloatArray
    pole: FloatArray


def two_photon_rate(charge: int = 1) -> float:
    """Total rate of 2s -> 1s + two photons, in s^-1: 8.22487 for hydrogen.

    Parameters
    ----------
    charge : int, 1 to 30
        Nuclear charge: 1 for hydrogen, 2 for the helium ion.

    Returns
    -------
    float, s^-1
        Non-relativistic, with the reduced mass of the ion; scales as Z^6 mu/m_e.

    Notes
    -----
    Good to 1e-12 as a non-relativistic number; relativity takes off about 3.5e-5 Z^2 of it.

    References
    ----------
    Breit & Teller 1940, ApJ 91, 215; Klarsfeld 1969, Phys. Lett. A 30, 382 (both from memory).
    """
    return _total_infinite_mass() * charge**6 * reduced_mass_ratio(charge)


def two_photon_profile(y: float | FloatArray) -> FloatArray:
    """Spectral profile dA/dy of the 2s -> 1s two-photon decay of hydrogen, in s^-1.

    Parameters
    ----------
    y : float or ndarray, any shape, dimensionless, 0 to 1
        Frequency of one of the two photons over that of the whole transition, nu/nu_21.

    Returns
    -------
    ndarray, shape of `y`, s^-1
        Photons per second and unit y; the integral over 0 to 1 is twice :func:`two_photon_rate`,
        and y and 1 - y give the same.

    Raises
    ------
    RangeError
        If any `y` lies outside 0 to 1.

    References
    ----------
    Spitzer & Greenstein 1951, ApJ 114, 407.
    """
    y = np.asarray(y, dtype=np.float64)
    inside = (y >= 0.0) & (y <= 1.0)
    if not np.all(inside):
        raise RangeError(f"y = {y[~inside].flat[0]:g}: the photon frequency ratio runs from 0 to 1")
    return reduced_mass_ratio() * _profile_infinite_mass(y * (1.0 - y))


def stimulated_two_photon_factor(
    temperature_k: float | FloatArray, transition_energy_ev: float
) -> FloatArray:
    """Factor by which a blackbody field speeds up the 2s -> 1s two-photon decay.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.
    transition_energy_ev : float, eV, positive
        Energy of 2s above 1s, shared by the two photons.

    Returns
    -------
    ndarray, shape of `temperature_k`, dimensionless
        (1/2) int_0^1 phi(y) (1 + f(y)) (1 + f(1 - y)) dy, at least 1; within 1e-13.

    Raises
    ------
    RangeError
        If a temperature lies outside its range, or the energy is not positive.

    Notes
    -----
    phi is the profile over the total rate, f(y) = 1/(exp(u y) - 1) with u = h nu_21/kT. Because
    (1 + f(y)) (1 + f(1 - y)) = (1 + f(y) + f(1 - y)) / (1 - exp(-u)) and phi is symmetric, the
    factor is (1 + int_0^1 phi f dy) / (1 - exp(-u)).

    References
    ----------
    Chluba & Sunyaev 2006, A&A 446, 39.
    """
    ratio = _photon_ratio(temperature_k, transition_energy_ev)
    absorbed, _ = _stimulation_integrals(ratio)
    return (1.0 + absorbed) / -np.expm1(-ratio)


def stimulated_two_photon_slope(
    temperature_k: float | FloatArray, transition_energy_ev: float
) -> FloatArray:
    """Return the derivative d ln(factor)/d ln T of :func:`stimulated_two_photon_factor`.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.
    transition_energy_ev : float, eV, positive
        Energy of 2s above 1s.

    Returns
    -------
    ndarray, shape of `temperature_k`, dimensionless
        The derivative of the integral itself, not a difference; not negative.

    Raises
    ------
    RangeError
        If a temperature lies outside its range, or the energy is not positive.

    References
    ----------
    Derived from the formula of :func:`stimulated_two_photon_factor`.
    """
    ratio = _photon_ratio(temperature_k, transition_energy_ev)
    absorbed, growth = _stimulation_integrals(ratio)
    return growth / (1.0 + absorbed) + ratio * np.exp(-ratio) / -np.expm1(-ratio)


def _photon_ratio(temperature_k: float | FloatArray, transition_energy_ev: float) -> FloatArray:
    """Return u = h nu_21/kT after checking both arguments."""
    temperature = np.asarray(temperature_k, dtype=np.float64)
    inside = (temperature >= _LOWEST_K) & (temperature <= _HIGHEST_K)
    if not np.all(inside):
        raise RangeError(
            f"temperature_k = {temperature[~inside].flat[0]:g}: allowed are {_LOWEST_K:g} to "
            f"{_HIGHEST_K:g} K"
        )
    if not 0.0 < transition_energy_ev < np.inf:
        raise RangeError(
            f"transition_energy_ev = {transition_energy_ev:g}: must be positive, in eV"
        )
    return transition_energy_ev / (const.BOLTZMANN_EV_K * temperature)


def _stimulation_integrals(ratio: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return int phi f dy and its derivative by ln T, for each u = h nu_21/kT.

    In t = u y the occupation varies on a scale of 1 whatever the temperature, and phi/y is smooth;
    so one Gauss rule on 0 to min(u, 40) serves all temperatures (the nearest poles, t = 2 pi i and
    the 3p resonance at y = -0.185, never come closer to the interval).
    """
    nodes, weights = _gauss_rule()
    t = np.minimum(ratio, _CUTOFF)[..., None] * nodes
    y = t / ratio[..., None]
    occupation = 1.0 / np.expm1(t)
    phi = _profile_infinite_mass(y * (1.0 - y)) / _total_infinite_mass()
    absorbed = phi * occupation
    step = np.minimum(1.0, _CUTOFF / ratio)
    return step * (absorbed @ weights), step * ((absorbed * (1.0 + occupation) * t) @ weights)


@functools.cache
def _gauss_rule() -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights on 0 to 1."""
    nodes, weights = np.polynomial.legendre.leggauss(_N_NODES)
    return 0.5 * (nodes + 1.0), 0.5 * weights


@functools.cache
def _total_infinite_mass() -> float:
    """Half the integral of the profile, s^-1, for an infinitely heavy nucleus of charge 1."""
    nodes, weights = _gauss_rule()
    return 0.5 * float(_profile_infinite_mass(nodes * (1.0 - nodes)) @ weights)


def _profile_infinite_mass(s: FloatArray) -> FloatArray:
    """Profile dA/dy in s^-1 at s = y (1 - y) for an infinitely heavy nucleus of charge 1."""
    scale = 8.0 / (27.0 * pi) * const.FINE_STRUCTURE**6 * _GAP**5 / const.ATOMIC_TIME_S
    return scale * s * _amplitude(s) ** 2


def _amplitude(s: FloatArray) -> FloatArray:
    """Second-order matrix element times y (1 - y) Delta, in a.u., at s = y (1 - y).

    With M = sum_k R(1s,k) R(k,2s) [1/(D_k + y Delta) + 1/(D_k + (1 - y) Delta)], D_k = E_k - E_2s
    and d = D_k/Delta, the bracket is (2 d + 1)/(d (d + 1) + s)/Delta: a function of s alone. The
    degenerate state 2p (d = 0) gives 1/s exactly, so the product has no pole at y = 0 or 1.
    """
    states = _pseudo_states()
    s = np.asarray(s)
    return states.degenerate + s * ((1.0 / (states.pole + s[..., None])) @ states.weight)


@functools.cache
def _pseudo_states() -> _PseudoStates:
    """Diagonalise the p Hamiltonian and form the dipole products 1s - k - 2s."""
    hamiltonian, overlap = _p_hamiltonian()
    energy, vectors = eigh(hamiltonian, overlap)
    product = (_dipole_integrals(1) @ vectors) * (_dipole_integrals(2) @ vectors)
    # The lowest is 2p, degenerate with 2s: its energy difference is 0, not a rounding error.
    excess = (energy[1:] - _ENERGY_2S) / _GAP
    return _PseudoStates(
        float(product[0]), product[1:] * (2.0 * excess + 1.0), excess * (excess + 1.0)
    )


def _p_hamiltonian() -> tuple[FloatArray, FloatArray]:
    """Hamiltonian and overlap of the p Sturmian functions, in a.u.

    The functions N_k x^2 exp(-x/2) L_k^(3)(x), x = lambda r, are normalised to <k|1/r|k> = 1. They
    obey H|k> = [-lambda^2/8 + ((k + 2) lambda/2 - 1)/r] |k>, so that both matrices are tridiagonal
    and known in closed form (Rotenberg 1970, Adv. At. Mol. Phys. 6, 233; from memory).
    """
    k = np.arange(_BASIS_SIZE, dtype=np.float64)
    beside = -np.sqrt((k[:-1] + 1.0) * (k[:-1] + 4.0))
    overlap = np.diag(2.0 * (k + 2.0)) + np.diag(beside, 1) + np.diag(beside, -1)
    overlap /= _BASIS_EXPONENT
    potential = np.diag(0.5 * _BASIS_EXPONENT * (k + 2.0) - 1.0)
    return potential - _BASIS_EXPONENT**2 / 8.0 * overlap, overlap


def _dipole_integrals(n: int) -> FloatArray:
    """Integrals <ns|r|k> over the p Sturmian functions, shape (_BASIS_SIZE,), in a.u.

    Gauss-Laguerre in t = (1/n + lambda/2) r is exact: the rest is a polynomial.
    """
    nodes, weights = roots_laguerre(_BASIS_SIZE)
    decay = 1.0 / n + 0.5 * _BASIS_EXPONENT
    r = nodes / decay
    x = _BASIS_EXPONENT * r
    k = np.arange(_BASIS_SIZE)[:, None]
    norm = np.exp(0.5 * (gammaln(k + 1.0) - gammaln(k + 4.0)))
    basis = norm * x**2 * eval_genlaguerre(k, 3, x)
    state = 2.0 * n**-2.5 * r * eval_genlaguerre(n - 1, 1, 2.0 * r / n)
    integrals: FloatArray = basis @ (weights * r * state) / decay
    return integrals
