"""Two-photon decay 2 1S -> 1 1S of He I: published distribution, interpolated by its poles."""

from __future__ import annotations

import functools

import numpy as np

from ..arrays import FloatArray
from ..errors import RangeError
from ..tables import read_table
from .helium_levels import helium_levels
from .two_photon import stimulated_two_photon_factor, stimulated_two_photon_slope

# Continuum states between 2 1S and infinity stand as one pole, at this fraction of the energy of
# the transition above 2 1S. Chosen once: of 0.6, 1, 2, 3 and 5 the one that fits the table best, to
# 1.1e-5, twice its rounding (the others 2.3e-5 to 3.7e-5). Normalized to 1 it is within 8e-5 of it
# (the others 3e-4 to 6e-4).
_CONTINUUM_POLE = 0.6
_N_NODES = 64


def helium_two_photon_profile(y: float | FloatArray) -> FloatArray:
    """Spectral profile of the two-photon decay of 2 1S of He I over its total rate.

    Parameters
    ----------
    y : float or ndarray, any shape, dimensionless, 0 to 1
        Energy of one of the two photons over that of the transition.

    Returns
    -------
    ndarray, shape of `y`, dimensionless
        Its integral over 0 to 1/2 is 1. Within 1e-4 of the published values, which end at y = 0.25;
        beyond, about 1e-3.

    Raises
    ------
    RangeError
        If any `y` lies outside 0 to 1.

    Notes
    -----
    With w = y (1 - y) the profile is w^3 M^2, and M = sum over intermediate states of
    c / (d (1 + d) + w), with d the energy of the state above 2 1S over that of the transition. Kept
    are 2 1P, 3 1P, the limit of the series and one continuum state; the four c are fitted.

    References
    ----------
    Derevianko & Johnson 1997, Phys. Rev. A 56, 1288 (values); Breit & Teller 1940, ApJ 91, 215
    (form).
    """
    y = np.asarray(y, dtype=np.float64)
    inside = (y >= 0.0) & (y <= 1.0)
    if not np.all(inside):
        raise RangeError(f"y = {y[~inside].flat[0]:g}: the photon energy ratio runs from 0 to 1")
    return _unscaled(y) / _total()


def helium_two_photon_factor(temperature_k: float | FloatArray) -> FloatArray:
    """Factor by which a blackbody field speeds up the two-photon decay of 2 1S of He I.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.

    Returns
    -------
    ndarray, shape of `temperature_k`, dimensionless
        At least 1; as exact as the profile, about 1e-4 of what is above 1.

    References
    ----------
    Chluba & Sunyaev 2006, A&A 446, 39 (for hydrogen; see
    :func:`levelnet.atomic.two_photon.stimulated_two_photon_factor`).
    """
    return stimulated_two_photon_factor(
        temperature_k, transition_energy_ev(), helium_two_photon_profile
    )


def helium_two_photon_slope(temperature_k: float | FloatArray) -> FloatArray:
    """Return d ln(factor)/d ln T of :func:`helium_two_photon_factor`, dimensionless.

    Parameters
    ----------
    temperature_k : float or ndarray, any shape, K, 1e-3 to 1e6
        Temperature of the blackbody field.

    References
    ----------
    Derived from the formula of :func:`helium_two_photon_factor`.
    """
    return stimulated_two_photon_slope(
        temperature_k, transition_energy_ev(), helium_two_photon_profile
    )


@functools.cache
def transition_energy_ev() -> float:
    """Energy of 2 1S above 1 1S, in eV."""
    levels = helium_levels(2)
    return float(levels.energy_ev[levels.index(2, 0, 0)])


def _unscaled(y: FloatArray) -> FloatArray:
    w = y * (1.0 - y)
    profile: FloatArray = w**3 * (_poles(w) @ _strengths()) ** 2
    return profile


def _poles(w: FloatArray) -> FloatArray:
    # Shape w.shape + (4,).
    levels = helium_levels(3)
    start = transition_energy_ev()
    states = levels.energy_ev[[levels.index(2, 1, 0), levels.index(3, 1, 0)]]
    above = np.append(states, levels.ionization_energy_ev[0]) / start - 1.0
    above = np.append(above, _CONTINUUM_POLE)
    terms: FloatArray = 1.0 / (above * (1.0 + above) + w[..., None])
    return terms


@functools.cache
def _strengths() -> FloatArray:
    numbers = read_table("helium/two_photon_distribution").numbers
    w, published = numbers["y"] * (1.0 - numbers["y"]), numbers["distribution"]
    amplitude = np.sqrt(published / w**3)
    # All values have the same number of decimals: the same absolute error.
    accuracy = 2.0 * published / amplitude
    found = np.linalg.lstsq(_poles(w) * accuracy[:, None], amplitude * accuracy, rcond=None)
    return np.asarray(found[0], float)


@functools.cache
def _total() -> float:
    nodes, weights = np.polynomial.legendre.leggauss(_N_NODES)
    return 0.25 * float(_unscaled(0.5 * (nodes + 1.0)) @ weights)  # half of the whole range
