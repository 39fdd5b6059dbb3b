"""Energy density of neutrinos, massless and massive.

Convention: ``effective_neutrinos`` is shared equally among S = max(3, number of masses) species,
each a Fermi-Dirac gas of temperature T_nu = (4/11)^(1/3) (N_eff/S)^(1/4) T. So the relativistic
energy density is N_eff (7/8) (4/11)^(4/3) times that of the photons whatever the masses, and three
species with N_eff = 3.046 weigh sum(m)/93.0 eV today (in units of Omega h^2), close to the 93.14 eV
of the full decoupling calculation (Mangano et al. 2005, Nucl. Phys. B 729, 221; the figure, and the
convention in Planck Collaboration 2014, A&A 571, A16, from memory). Scaling each density by N_eff/S
at the temperature (4/11)^(1/3) T instead would weigh sum(m)/92.6 eV.
"""

from __future__ import annotations

import functools
import math
from typing import NamedTuple, TypeVar

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from .patches import Patches, patches

Number = TypeVar("Number", float, FloatArray)

# Energy density of one massless species at the temperature (4/11)^(1/3) T over that of the photons.
NEUTRINO_PHOTON_RATIO = 7.0 / 8.0 * (4.0 / 11.0) ** (4.0 / 3.0)

# Below and above these mass-to-temperature ratios the series in `_small` and `_large` leave out
# less than 1e-12.
_SMALL, _LARGE = 1e-3, 1e3
_NORM = 120.0 / (7.0 * math.pi**4)
_ZETA_3, _ZETA_5, _ZETA_7 = 1.2020569031595942, 1.0369277551433699, 1.0083492773819228
# Gamma(k) eta(k) = integral of x^(k-1)/(e^x + 1), for k = 3, 5, 7.
_MOMENTS = (1.5 * _ZETA_3, 22.5 * _ZETA_5, 708.75 * _ZETA_7)


class MassiveNeutrino(NamedTuple):
    """Species of one mass.

    Attributes
    ----------
    density_h2 : float, dimensionless
        Omega h^2 that all species of this mass would have today if they were massless.
    mass_temperature_ratio : float, dimensionless
        m c^2/(k T_nu) today.
    """

    density_h2: float
    mass_temperature_ratio: float


def share_neutrinos(
    masses_ev: tuple[float, ...],
    effective_neutrinos: float,
    photon_density_h2: float,
    cmb_temperature_k: float,
) -> tuple[float, tuple[MassiveNeutrino, ...]]:
    """Share N_eff among the species.

    Parameters
    ----------
    masses_ev : tuple of float, eV
        Masses, 0 = massless; species up to three that are not named are massless.
    effective_neutrinos : float, dimensionless
        N_eff.
    photon_density_h2 : float, dimensionless
        Omega_gamma h^2 today.
    cmb_temperature_k : float, K
        Photon temperature today.

    Returns
    -------
    massless_density_h2 : float, dimensionless
        Omega h^2 of the massless species today.
    massive : tuple of MassiveNeutrino
        One entry per distinct positive mass.
    """
    species = max(3, len(masses_ev))
    share = effective_neutrinos / species
    one_density_h2 = NEUTRINO_PHOTON_RATIO * share * photon_density_h2
    temperature_k = cmb_temperature_k * (4.0 / 11.0) ** (1.0 / 3.0) * share**0.25
    positive = [mass for mass in masses_ev if mass > 0.0]
    massive = tuple(
        MassiveNeutrino(
            positive.count(mass) * one_density_h2, mass / (const.BOLTZMANN_EV_K * temperature_k)
        )
        for mass in sorted(set(positive))
    )
    return one_density_h2 * (species - len(positive)), massive


def energy_ratio(mass_temperature_ratio: Number) -> Number:
    """Energy density of a Fermi-Dirac gas over that of massless particles of its temperature.

    Parameters
    ----------
    mass_temperature_ratio : float or ndarray, dimensionless
        y = m c^2/(k T), positive.

    Returns
    -------
    float or ndarray, dimensionless
        f(y), 1 at y = 0 and 0.3173 y for large y.

    Notes
    -----
    f(y) = (120/7 pi^4) int_0^inf x^2 sqrt(x^2 + y^2)/(e^x + 1) dx, computed on a grid in ln y and
    interpolated by quintic splines of ln f; relative error below 1e-11, its slope below 1e-9.

    References
    ----------
    Komatsu et al. 2011, ApJS 192, 18, eq. 25-26 (the integral; their fit is not used).
    """
    if isinstance(mass_temperature_ratio, float):
        y: float = mass_temperature_ratio
        if y < _SMALL:
            return _small(y)
        if y > _LARGE:
            return _large(y)
        return math.exp(_log_ratio().value(math.log(y)))
    ratio = mass_temperature_ratio
    middle = np.exp(_log_ratio().values(np.log(np.clip(ratio, _SMALL, _LARGE))))
    small, large = ratio < _SMALL, ratio > _LARGE
    middle[small] = _small(ratio[small])
    middle[large] = _large(ratio[large])
    return middle


def energy_ratio_slope(mass_temperature_ratio: Number) -> Number:
    """Logarithmic slope dln f/dln y of :func:`energy_ratio`, between 0 and 1 (dimensionless).

    Parameters
    ----------
    mass_temperature_ratio : float or ndarray, dimensionless
        y = m c^2/(k T), positive.
    """
    if isinstance(mass_temperature_ratio, float):
        y: float = mass_temperature_ratio
        if y < _SMALL:
            return _small_slope(y)
        if y > _LARGE:
            return _large_slope(y)
        return _log_ratio().slope(math.log(y))
    ratio = mass_temperature_ratio
    middle = _log_ratio().slopes(np.log(np.clip(ratio, _SMALL, _LARGE)))
    small, large = ratio < _SMALL, ratio > _LARGE
    middle[small] = _small_slope(ratio[small])
    middle[large] = _large_slope(ratio[large])
    return middle


def _small(y: Number) -> Number:
    return 1.0 + 5.0 / (7.0 * math.pi**2) * y * y


def _small_slope(y: Number) -> Number:
    return 10.0 / (7.0 * math.pi**2) * y * y / _small(y)


def _large(y: Number) -> Number:
    # sqrt(x^2 + y^2) expanded in x/y.
    first, second, third = _MOMENTS
    return _NORM * (first * y + 0.5 * second / y - 0.125 * third / (y * y * y))


def _large_slope(y: Number) -> Number:
    first, second, third = _MOMENTS
    weighed = first * y - 0.5 * second / y + 0.375 * third / (y * y * y)
    return _NORM * weighed / _large(y)


@functools.cache
def _log_ratio() -> Patches:
    """Spline of ln f over ln y from `_SMALL` to `_LARGE`."""
    from scipy.interpolate import PPoly, make_interp_spline

    # The trapezoidal rule in ln x: the integrand is analytic within pi/2 of the real axis, so its
    # error is about exp(-pi^2/step), 1e-21 here.
    x = np.exp(np.arange(-14.0, 5.0, 0.2))
    log_y = np.linspace(math.log(_SMALL), math.log(_LARGE), 401)
    energy = np.sqrt(x**2 + np.exp(2.0 * log_y)[:, None])
    ratio = 0.2 * _NORM * (energy @ (x**3 / (np.exp(x) + 1.0)))
    return patches(PPoly.from_spline(make_interp_spline(log_y, np.log(ratio), k=5)))
