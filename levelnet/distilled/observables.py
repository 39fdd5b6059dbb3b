"""Last scattering, sound horizon and damping scale of a fast history, with their derivatives.

Definitions, limits and sources: :mod:`levelnet.background.last_scattering`. tau starts at the
lowest redshift asked for. The history starts at the hottest T_r of the table, where the neutral
fraction is below 1e-8; helium is neutral throughout unless the table holds its levels.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from ..background.last_scattering import observe
from ..background.parameters import COSMOLOGICAL
from ..background.quadrature import Quadrature, quadrature
from ..kernels.effective import DRIVE_COMPTON, Atom

# Relative change of n_e/n_H before the history whose effect is a derivative.
_EARLY = 1e-3


@dataclass(frozen=True, slots=True)
class Observables:
    """What an observer measures of a history.

    Attributes
    ----------
    last_scattering_redshift : float
        z_*, where tau = 1; NaN where the history ends too early to say.
    sound_horizon_mpc : float, Mpc (comoving)
        r_s at z_*.
    damping_per_mpc : float, Mpc^-1 (comoving)
        k_D at z_*.
    """

    last_scattering_redshift: float
    sound_horizon_mpc: float
    damping_per_mpc: float


def table_quadrature(atom: Atom, cosmology: Cosmology, end: float) -> Quadrature:
    """Panels from the hottest T_r of the table to s = `end`."""
    start = math.log(cosmology.cmb_temperature_k) - float(atom.span[1] + atom.constants[1])
    return quadrature(cosmology, start + 1e-9, end)


def observe_electrons(
    cosmology: Cosmology,
    grid: Quadrature,
    electrons: FloatArray,
    thomson: float,
    early: float = 1.0,
) -> Observables:
    """z_*, r_s and k_D from n_e/n_H (dimensionless) at the points of `grid`, and `early` before."""
    names = tuple(Observables.__slots__)
    seen = observe(cosmology, grid, electrons, thomson, names=names, early_electron_fraction=early)
    return Observables(*seen.value.tolist())


def electron_slopes(
    cosmology: Cosmology,
    grid: Quadrature,
    electrons: FloatArray,
    by: FloatArray,
    early: tuple[float, FloatArray],
    thomson: float,
) -> FloatArray:
    """Derivatives of z_*, r_s and k_D by the parameters, shape (3, n_parameters).

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    grid : Quadrature
        Where the history is known.
    electrons : ndarray, shape (n_points,), dimensionless
        n_e/n_H there.
    by : ndarray, shape (n_points, n_parameters)
        Its derivatives; the first parameters are those of a cosmology.
    early : float and ndarray, shape (n_parameters,)
        n_e/n_H before the grid, and its derivatives.
    thomson : float
        Thomson cross section over the measured one.
    """
    names = tuple(Observables.__slots__)
    seen = observe(cosmology, grid, electrons, thomson, (), names, early[0])
    slopes = seen.gradient @ (by / electrons[:, None])
    slopes[:, : len(COSMOLOGICAL)] += seen.by_parameter
    # k_D alone hangs on what is before the grid, and smoothly.
    more, less = (
        observe(cosmology, grid, electrons, thomson, (), names, early[0] * (1.0 + change)).value
        for change in (_EARLY, -_EARLY)
    )
    slopes += np.outer((more - less) / (2.0 * _EARLY * early[0]), early[1])
    return slopes


def observe_run(
    cosmology: Cosmology,
    grid: Quadrature,
    state: FloatArray,
    slope: FloatArray,
    drive: FloatArray | None,
    thomson: float,
) -> tuple[Observables, FloatArray]:
    """z_*, r_s and k_D, and their derivatives, shape (3, n_parameters).

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    grid : Quadrature
        Where the history is known.
    state, slope : ndarray, shapes (n_points, 2) and (n_points, 2 n_parameters)
        u and v there and their derivatives.
    drive : ndarray, shape (n_parameters, 7), or None
        What the parameters do.
    thomson : float
        Thomson cross section over the measured one.
    """
    small = np.exp(-np.abs(state[:, 0]))
    ionized = np.where(state[:, 0] > 0.0, 1.0, small) / (1.0 + small)
    neutral = np.where(state[:, 0] > 0.0, small, 1.0) / (1.0 + small)
    seen = observe(cosmology, grid, ionized, thomson, names=tuple(Observables.__slots__))
    found = Observables(*seen.value.tolist())
    if drive is None:
        return found, np.zeros((3, 0))
    n, first = len(drive), len(COSMOLOGICAL)
    slopes = seen.gradient @ (neutral[:, None] * slope[:, :n])
    slopes[:, :first] += seen.by_parameter
    # sigma_T goes as alpha^2/m_e^2; the column holds ln(sigma_T/m_e), alpha^2/m_e^3.
    by_constants = drive[first : first + 2, DRIVE_COMPTON] * np.array([1.0, 2.0 / 3.0])
    slopes[:, first : first + 2] += np.outer(seen.by_thomson, by_constants)
    return found, slopes
