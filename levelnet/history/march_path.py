"""The way of a march: background and interior of the atom, sampled once along a reference history.

The reference (Sobolev) fixes T_m to a few 1e-4; recombination follows the true T_m by its slope, so
that the march needs no network.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.interpolate import CubicSpline

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..background.matter import compton_rate_per_s
from ..kernels.transfer import Path
from ..numerics.stepping import Trajectory
from .equations import SlowEquations

# Distance in ln a of the samples of the interior: cubic pieces are then good to 1e-9.
_SPACING = 0.004
_NEVER = -700.0  # ln of a rate that is zero


def make_path(
    equations: SlowEquations, reference: Trajectory, start: float, end: float, decay: bool
) -> Path:
    """Sample the background and the interior from `start` to `end` in ln a.

    Parameters
    ----------
    equations : SlowEquations
        Cosmology, interior, 2s-1s rate.
    reference : Trajectory
        Its v gives the T_m to sample at, and its helium the electrons of helium.
    start, end : float
        ln a.
    decay : bool
        Whether 2s decays to the ground state beside the field.
    """
    count = max(8, math.ceil((end - start) / _SPACING)) + 1
    nodes = np.linspace(start, end, count)
    along = CubicSpline(reference.time, reference.state)(nodes)
    lower, upper = np.triu_indices(len(equations.reduced.kept), 1)
    stored = np.array(
        [_sample(equations, s, y, lower, upper, decay) for s, y in zip(nodes, along, strict=True)]
    )
    series = CubicSpline(nodes, stored).c.transpose(1, 0, 2)
    kept, cosmology, lines = equations.reduced.kept, equations.cosmology, equations.lines
    today, helium = cosmology.cmb_temperature_k, cosmology.helium_ratio()
    compton = float(compton_rate_per_s(today, 1.0, helium)) * (2.0 + helium)
    return Path(
        start,
        float(nodes[1] - nodes[0]),
        np.ascontiguousarray(series),
        lower,
        upper,
        kept.statistical_weight / 2.0,
        kept.energy_ev,
        const.BOLTZMANN_EV_K * today,
        float(cosmology.hydrogen_density_cm3(0.0)),
        helium,
        compton * equations.scales.compton_rate,
        8.0 * math.pi / float(lines.wavelength_cm[0]) ** 3,
        _scattering_unit(float(lines.einstein_a_per_s[0]), float(lines.energy_ev[0])),
    )


def _scattering_unit(einstein_a_per_s: float, energy_ev: float) -> float:
    """Diffusion in ln nu at unit distance from Lyman-alpha over n_1s k T_m, in cm^3 s^-1 eV^-1.

    n_1s c sigma k T_m/(m_H c^2), with sigma = (3 lambda^2/8 pi) A phi of the coherent part in the
    Lorentz wing, phi = (A/4 pi^2)/(nu - nu_0)^2.
    """
    wavelength_cm = const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S / energy_ev
    frequency_hz = energy_ev / const.PLANCK_EV_S
    cross_section = 3.0 * wavelength_cm**2 / (8.0 * math.pi)
    wing = (einstein_a_per_s / (2.0 * math.pi * frequency_hz)) ** 2
    rest_ev = const.HYDROGEN_ATOM_MASS_G * const.SPEED_OF_LIGHT_CM_S**2
    rest_ev *= const.BOLTZMANN_EV_K / const.BOLTZMANN_ERG_K
    return const.SPEED_OF_LIGHT_CM_S * cross_section * wing / rest_ev


def _sample(
    equations: SlowEquations,
    time: float,
    state: FloatArray,
    lower: IntArray,
    upper: IntArray,
    decay: bool,
) -> FloatArray:
    lag = float(state[1])
    around = equations.background(time)
    radiation_k, kept = around.radiation_temperature_k, equations.reduced.kept
    rates = equations.reduced.rates(radiation_k, radiation_k * math.exp(lag))
    kt = const.BOLTZMANN_EV_K * radiation_k
    lift = rates.log_photoionization + np.log(kept.statistical_weight / 2.0) - kept.energy_ev / kt
    down = rates.exchange[upper, lower]
    two_photon = _NEVER
    if decay and equations.two_photon_rate_per_s > 0.0:
        two_photon = math.log(equations.decay_rate_per_s(radiation_k))
    return np.concatenate(
        [
            np.log(rates.recombination),
            rates.recombination_slope_matter,
            lift,
            np.log(np.maximum(down, math.exp(_NEVER))),
            [equations.helium_electrons(state), math.log(around.hubble_rate_per_s)],
            [lag, two_photon],
        ]
    )
