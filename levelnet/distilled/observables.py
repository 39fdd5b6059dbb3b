"""Last scattering, sound horizon and damping scale of a fast history, with their derivatives.

    tau(z) = int_{z_end}^{z} c sigma_T n_e dz/(H (1 + z)),   tau(z_*) = 1,
    r_s = int_{z_*}^{inf} c_s dz/H,   c_s = c/sqrt(3 (1 + R)),   R = 3 rho_b/(4 rho_gamma),
    1/k_D^2 = int_0^{eta_*} d eta [R^2/(1 + R) + 16/15]/[6 (1 + R) a n_e sigma_T].

tau starts at the lowest redshift asked for: there is no reionization in it. Above the hottest T_r
of the table hydrogen counts as fully ionized (the neutral fraction is below 1e-8 there); helium is
neutral throughout. The tight-coupling formula of k_D is used up to z_*, as in the references,
although it ceases to hold there.

References
----------
Kaiser 1983, MNRAS 202, 1169 (16/15: with polarization); Hu & Sugiyama 1996, ApJ 471, 542.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from ..background.friedmann import photon_density_h2
from ..kernels.effective import DRIVE_COMPTON, DRIVE_DENSITY, DRIVE_TEMPERATURE, Atom
from .universe import hubble_derivatives

# Panels in ln a while hydrogen recombines and outside, the T_r between which it does, and
# Gauss-Legendre nodes in each panel.
_FINE, _COARSE, _NODES = 0.03, 0.1, 8
_RECOMBINING_K = (5500.0, 1600.0)
# Earlier, where everything is smooth: panels of a unit from ln a = -20, and a remainder in a.
_FIRST = -20.0
_EARLY_NODES = 10


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


class Quadrature(NamedTuple):
    """Gauss-Legendre panels over the table's part of a history.

    Attributes
    ----------
    edges : ndarray, shape (n_panels + 1,)
        Panel edges in s = ln a, ascending.
    points : ndarray, shape (n_panels * n_nodes,)
        Nodes, ascending.
    """

    edges: FloatArray
    points: FloatArray


@lru_cache(maxsize=1)
def _rule() -> tuple[FloatArray, FloatArray, FloatArray]:
    """Nodes and weights on [0, 1], and the matrix from node values to powers of t."""
    roots, weights = np.polynomial.legendre.leggauss(_NODES)
    nodes = np.array(0.5 * (roots + 1.0), dtype=np.float64)
    to_powers = np.linalg.inv(np.vander(nodes, increasing=True)).astype(np.float64)
    return nodes, 0.5 * weights, to_powers


@lru_cache(maxsize=1)
def _early_rule() -> tuple[FloatArray, FloatArray]:
    """Nodes and weights on [0, 1]."""
    nodes, weights = np.polynomial.legendre.leggauss(_EARLY_NODES)
    return 0.5 * (nodes + 1.0), 0.5 * weights


def quadrature(atom: Atom, cosmology: Cosmology, end: float) -> Quadrature:
    """Panels from the hottest T_r of the table to s = `end`."""
    start = math.log(cosmology.cmb_temperature_k) - float(atom.span[1] + atom.constants[1])
    stops = [start + 1e-9]
    stops += [math.log(cosmology.cmb_temperature_k / k) for k in _RECOMBINING_K]
    stops = [stops[0], *(one for one in stops[1:] if stops[0] < one < end), end]
    pieces = [np.array([stops[0]])]
    for low, high in itertools.pairwise(stops):
        middle_k = cosmology.cmb_temperature_k * math.exp(-0.5 * (low + high))
        fine = _RECOMBINING_K[1] < middle_k < _RECOMBINING_K[0]
        count = max(1, math.ceil((high - low) / (_FINE if fine else _COARSE)))
        pieces.append(np.linspace(low, high, count + 1)[1:])
    edges = np.concatenate(pieces)
    nodes = _rule()[0]
    points = edges[:-1, None] + np.diff(edges)[:, None] * nodes
    return Quadrature(edges, points.ravel())


class _Integrands(NamedTuple):
    """d tau/ds, d r_s/ds and d(1/k_D^2)/ds at the points, and d ln of each by the parameters."""

    value: FloatArray
    slope: FloatArray


def observe(
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
    used = np.zeros((0, 7)) if drive is None else drive
    small = np.exp(-np.abs(state[:, 0]))
    ionized = np.where(state[:, 0] > 0.0, 1.0, small) / (1.0 + small)
    neutral = np.where(state[:, 0] > 0.0, small, 1.0) / (1.0 + small)
    by_electrons = neutral[:, None] * slope[:, : len(used)]
    early_s, weight = _early(float(grid.edges[0]))
    n = len(early_s)
    found = _integrands(
        cosmology,
        np.concatenate([early_s, grid.points]),
        np.concatenate([np.ones(n), ionized]),
        np.concatenate([np.zeros((n, len(used))), by_electrons]),
        used,
        thomson,
    )
    late = _Integrands(found.value[:, n:], found.slope[:, n:])
    weighed = found.value[:, :n] * weight
    early = weighed.sum(axis=1), _weighed_sum(weighed, found.slope[:, :n])
    place = _last_scattering(grid, late.value[0])
    if place is None:
        nothing = float("nan")
        return Observables(nothing, nothing, nothing), np.full((3, len(used)), np.nan)
    return _at_last_scattering(grid, late, early, *place)


def _integrands(
    cosmology: Cosmology,
    s: FloatArray,
    ionized: FloatArray,
    by_electrons: FloatArray,
    drive: FloatArray,
    thomson: float,
) -> _Integrands:
    growth = np.exp(-s)
    rate = _hubble(cosmology, growth)
    load_today = 0.75 * cosmology.baryon_density_h2 / photon_density_h2(cosmology.cmb_temperature_k)
    load = load_today / growth
    electrons = float(cosmology.hydrogen_density_cm3(0.0)) * growth**3 * ionized
    per_cm = const.THOMSON_CROSS_SECTION_CM2 * thomson * electrons
    # d eta = c ds/(a H), comoving Mpc.
    step_mpc = const.SPEED_OF_LIGHT_CM_S / const.CM_PER_MPC * growth / rate
    per_mpc = per_cm / growth * const.CM_PER_MPC
    shape = load**2 / (1.0 + load) + 16.0 / 15.0
    value = np.stack(
        [
            per_mpc * step_mpc,
            step_mpc / np.sqrt(3.0 * (1.0 + load)),
            step_mpc * shape / (6.0 * (1.0 + load) * per_mpc),
        ]
    )
    n = len(drive)
    by_hubble = hubble_derivatives(cosmology, growth, n)
    # ln R by omega_b and T: d ln R = d ln omega_b - 4 d ln T; the sixth column is ln Gamma ~
    # ln(sigma_T/m_e).
    by_load = -4.0 * drive[:, DRIVE_TEMPERATURE]
    by_thomson = np.zeros(n)
    if n:
        by_load[1] += 1.0 / cosmology.baryon_density_h2
        by_thomson[6:8] = drive[6:8, DRIVE_COMPTON] * np.array([1.0, 2.0 / 3.0])
    depth = by_electrons + drive[:, DRIVE_DENSITY] + by_thomson
    r = load[:, None]
    by_shape = r**2 * (2.0 + r) / (1.0 + r) ** 2 / shape[:, None] - r / (1.0 + r)
    slope = np.stack(
        [
            depth - by_hubble,
            -by_hubble - 0.5 * r / (1.0 + r) * by_load,
            -by_hubble - depth + by_shape * by_load,
        ]
    )
    return _Integrands(value, slope)


def _hubble(cosmology: Cosmology, growth: FloatArray) -> FloatArray:
    """H in s^-1; above a tabulated expansion, Friedmann's law, as in the clock."""
    if cosmology.expansion_redshift is None:
        return np.asarray(cosmology._law.rate_per_s(growth))
    return np.asarray(cosmology._clock.rate_per_s(growth))


def _early(end: float) -> tuple[FloatArray, FloatArray]:
    """Nodes in s and weights of integrals over ds from a = 0 to s = `end`."""
    nodes, weights = _early_rule()
    edges = np.linspace(_FIRST, end, math.ceil(end - _FIRST) + 1)
    width = (edges[1] - edges[0]) * np.ones((len(edges) - 1, 1))
    s = np.concatenate([_FIRST + np.log(nodes), (edges[:-1, None] + width * nodes).ravel()])
    # At the very beginning every integrand but that of tau is a power of a.
    return s, np.concatenate([weights / nodes, (width * weights).ravel()])


def _weighed_sum(weighed: FloatArray, slope: FloatArray) -> FloatArray:
    """Sum over points of the derivatives by their weights, shape (n_integrals, n_parameters)."""
    return np.asarray((weighed[:, None, :] @ slope)[:, 0, :])


def _last_scattering(grid: Quadrature, per_log: FloatArray) -> tuple[int, float] | None:
    """Panel and place t in it where tau, summed up from the end, is 1."""
    _, weights, to_powers = _rule()
    width = np.diff(grid.edges)
    pieces = per_log.reshape(-1, _NODES)
    above = np.cumsum((width * (pieces @ weights))[::-1])[::-1]
    # The last panel must hold next to nothing, or tau from here says nothing about z_*.
    if not above[0] > 1.0 or above[-1] > 0.1:
        return None
    panel = int(np.flatnonzero(above > 1.0)[-1])
    missing = above[panel] - 1.0
    powers = to_powers @ pieces[panel] * width[panel]
    order = np.arange(1, _NODES + 1)
    t = 0.5
    for _ in range(50):
        step = (float((powers / order) @ t**order) - missing) / float(powers @ t ** (order - 1))
        t = min(1.0, max(0.0, t - step))
        if abs(step) < 1e-15:
            break
    return panel, t


def _at_last_scattering(
    grid: Quadrature,
    late: _Integrands,
    early: tuple[FloatArray, FloatArray],
    panel: int,
    t: float,
) -> tuple[Observables, FloatArray]:
    _, weights, to_powers = _rule()
    width = np.diff(grid.edges)
    powers = t ** np.arange(1, _NODES + 1) / np.arange(1, _NODES + 1)
    # Weights that integrate up to z_*, and to the end for what is left of tau.
    upto = np.zeros((len(width), _NODES))
    upto[:panel] = width[:panel, None] * weights
    upto[panel] = width[panel] * (powers @ to_powers)
    rest = (width[:, None] * weights - upto).ravel()
    here = t ** np.arange(_NODES) @ to_powers
    at = slice(panel * _NODES, (panel + 1) * _NODES)
    now = late.value[:, at] @ here
    total = late.value[1:] @ upto.ravel() + early[0][1:]
    s = grid.edges[panel] + width[panel] * t
    redshift = math.expm1(-s)
    damping = 1.0 / math.sqrt(total[1])
    # tau(s_*) = 1 held: ds_*/dp = (d tau/dp)/(d tau/d|s|).
    shift = (late.value[0] * rest) @ late.slope[0] / now[0]
    moved = _weighed_sum(late.value[1:] * upto.ravel(), late.slope[1:]) + early[1][1:]
    moved += now[1:, None] * shift
    slopes = np.stack([-(1.0 + redshift) * shift, moved[0], -0.5 * damping**3 * moved[1]])
    return Observables(redshift, float(total[0]), damping), slopes
