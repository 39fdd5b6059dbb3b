"""Two-photon decay 2s -> 1s of hydrogen and hydrogenic ions, from the second-order matrix element.

The matrix element is that of :mod:`levelnet.atomic.second_order`, in a smaller basis: 2s has no
level between it and the ground state, and so no resonances.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from math import pi

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..errors import RangeError
from .levels import reduced_mass_ratio
from .sturmian import SturmianBasis, scaled_amplitude, virtual_states

# At this exponent the 2p function itself is in the basis, and 18 functions give the total to 1e-13;
# more change nothing but the run time.
_BASIS = SturmianBasis(exponent=1.0, size=18)
_N_NODES = 32
# Beyond h nu/kT = 40 a photon mode holds less than 1e-17 photons.
_CUTOFF = 40.0
_LOWEST_K, _HIGHEST_K = 1e-3, 1e6
_GAP = 0.375  # of 2s above 1s, hartree


Profile = Callable[[FloatArray], FloatArray]
"""Two-photon profile over the total rate as a function of y; its integral over 0 to 1 is 2."""


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
    return reduced_mass_ratio() * _profile_infinite_mass(y)


def stimulated_two_photon_factor(
    temperature_k: float | FloatArray,
    transition_energy_ev: float,
    profile: Profile | None = None,
) -> FloatArray:
    """Factor by which a blackbody field speeds up the 2s -> 1s two-photon decay.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.
    transition_energy_ev : float, eV, positive
        Energy of 2s above 1s, shared by the two photons.
    profile : callable, optional
        Profile over the total rate, dimensionless, as a function of y; hydrogen's if not given.

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
    absorbed, _ = _stimulation_integrals(ratio, profile or _relative_profile)
    return (1.0 + absorbed) / -np.expm1(-ratio)


def stimulated_two_photon_slope(
    temperature_k: float | FloatArray,
    transition_energy_ev: float,
    profile: Profile | None = None,
) -> FloatArray:
    """Return the derivative d ln(factor)/d ln T of :func:`stimulated_two_photon_factor`.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.
    transition_energy_ev : float, eV, positive
        Energy of 2s above 1s.
    profile : callable, optional
        As for :func:`stimulated_two_photon_factor`.

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
    absorbed, growth = _stimulation_integrals(ratio, profile or _relative_profile)
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


def _stimulation_integrals(ratio: FloatArray, profile: Profile) -> tuple[FloatArray, FloatArray]:
    """Return int phi f dy and its derivative by ln T, for each u = h nu_21/kT.

    In t = u y the occupation varies on a scale of 1 whatever the temperature, and phi/y is smooth;
    so one Gauss rule on 0 to min(u, 40) serves all temperatures (the nearest poles, t = 2 pi i and
    the 3p resonance at y = -0.185, never come closer to the interval).
    """
    nodes, weights = _gauss_rule()
    t = np.minimum(ratio, _CUTOFF)[..., None] * nodes
    y = t / ratio[..., None]
    occupation = 1.0 / np.expm1(t)
    absorbed = profile(y) * occupation
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
    return 0.5 * float(_profile_infinite_mass(nodes) @ weights)


def _relative_profile(y: FloatArray) -> FloatArray:
    return _profile_infinite_mass(y) / _total_infinite_mass()


def _profile_infinite_mass(y: FloatArray) -> FloatArray:
    """Profile dA/dy in s^-1 for an infinitely heavy nucleus of charge 1."""
    scale = 8.0 / (27.0 * pi) * const.FINE_STRUCTURE**6 * _GAP**5 / const.ATOMIC_TIME_S
    return scale * y * (1.0 - y) * scaled_amplitude(virtual_states(2, 0, _BASIS), y) ** 2
