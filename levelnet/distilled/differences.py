"""Derivatives of a history with helium: differences along the steps of one run."""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray
from ..atomic.physics import Scales
from ..background.cosmology import Cosmology
from ..background.parameters import COSMOLOGICAL, hubble_derivatives
from ..background.quadrature import Quadrature
from ..errors import RangeError, SolveError
from ..kernels.effective import (
    DONE,
    DRIVE_DENSITY,
    DRIVE_HELIUM,
    DRIVE_SCALE,
    DRIVE_TEMPERATURE,
    OUT_OF_RANGE,
)
from ..kernels.effective_plasma import Plasma
from ..kernels.plasma_steps import repeated_history
from .fast import Sensitivities, fractions
from .observables import electron_slopes
from .plasma import PlasmaRun, electrons_of
from .prepared import rate_names
from .table import EffectiveTable
from .universe import CONSTANTS, make_drive

# Change of the ln of what a parameter moves most, and how many times less of a temperature, on
# which equilibria hang by I/kT: halving it moves derivatives of x_e, T_m and the observables by up
# to 3e-7 of the largest.
_STEP, _OF_TEMPERATURE = 1e-4, 5.0
# Spacing in ln a of the differences that give the slopes of d ln H by the parameters.
_SPACING = 2e-3
_STENCIL = np.array([1.0, -8.0, 8.0, -1.0]) / 12.0


class _Push:
    """What each parameter does to a plasma: the cosmological, then the ln of the rate scales."""

    def __init__(self, table: EffectiveTable, cosmology: Cosmology, plasma: Plasma) -> None:
        rates, n = rate_names(table), len(COSMOLOGICAL)
        self.names = (*COSMOLOGICAL, *(f"ln {name}" for name in rates))
        drive = make_drive(cosmology, Scales(), (0.0, 0.0), len(rates))
        # Constants do not change with levels of helium.
        self.drive = np.delete(drive, np.arange(n, n + len(CONSTANTS)), axis=0)
        today, count = plasma.universe.today, len(plasma.universe.log_hubble)
        nodes = today[3] + today[4] * np.arange(count)
        self.hubble = np.zeros((len(self.names), count, 2))
        self.hubble[:n, :, 0] = hubble_derivatives(cosmology, np.exp(-nodes)).T
        for k, weight in zip((-2, -1, 1, 2), _STENCIL, strict=True):
            there = hubble_derivatives(cosmology, np.exp(-nodes - k * _SPACING)).T
            self.hubble[:n, :, 1] += weight / _SPACING * there
        self.steps = self._steps(float(today[2]))

    def _steps(self, helium: float) -> FloatArray:
        """Change of each parameter."""
        moved = np.max(np.abs(self.hubble[:, :, 0]), axis=1)
        for column, size in (
            (DRIVE_DENSITY, 1.0),
            (DRIVE_HELIUM, 1.0 / helium),
            (DRIVE_TEMPERATURE, _OF_TEMPERATURE),
        ):
            moved = np.maximum(moved, size * np.abs(self.drive[:, column]))
        moved[self.drive[:, DRIVE_SCALE] >= 0.0] = 1.0
        none = moved == 0.0
        return np.where(none, 0.0, _STEP / np.where(none, 1.0, moved))

    def moved(self, plasma: Plasma, p: int, by: float) -> Plasma:
        """Plasma with parameter number `p` changed, along a straight line in what it moves."""
        universe, drive = plasma.universe, self.drive[p]
        today = universe.today.copy()
        today[0] += by * drive[DRIVE_TEMPERATURE]
        today[5] *= np.exp(by * drive[DRIVE_TEMPERATURE])
        today[1] *= np.exp(by * drive[DRIVE_DENSITY])
        today[2] += by * drive[DRIVE_HELIUM]
        universe = universe._replace(
            today=today, log_hubble=universe.log_hubble + by * self.hubble[p]
        )
        hydrogen, k = plasma.hydrogen, int(drive[DRIVE_SCALE])
        if k >= len(hydrogen.scale):
            constants = hydrogen.constants.copy()
            constants[0] *= np.exp(by)
            hydrogen = hydrogen._replace(constants=constants)
        elif k >= 0:
            scale = hydrogen.scale.copy()
            scale[k] += by
            hydrogen = hydrogen._replace(scale=scale)
        return plasma._replace(universe=universe, hydrogen=hydrogen)


def plasma_sensitivities(
    table: EffectiveTable,
    cosmology: Cosmology,
    redshift: FloatArray,
    run: PlasmaRun,
    grid: Quadrature,
    thomson: float,
) -> Sensitivities:
    """Derivatives of a run with helium.

    Parameters
    ----------
    table : EffectiveTable
        With helium.
    cosmology : Cosmology
        The background.
    redshift : ndarray, descending
        Outputs of the run.
    run : PlasmaRun
        The run.
    grid : Quadrature
        Where it knows the points of the observables.
    thomson : float, dimensionless
        Thomson cross section over the measured one.

    Raises
    ------
    RangeError
        If a history with a parameter a little off leaves the table.

    Notes
    -----
    Central differences of histories along the same start and steps, and with each ion followed in
    the same way there, so that neither step control nor rounding shows; what lines remember is
    differentiated as well. Parameters act on ln H, ln n_H, f_He, ln T_r and the rates along
    straight lines with exact slopes, whatever their value or its limits.
    """
    push = _Push(table, cosmology, run.plasma)
    slope, at_grid = _slopes(run, push, -np.log1p(redshift), grid.points)
    ratio, by_ratio = cosmology.helium_ratio(), push.drive[:, DRIVE_HELIUM]
    redshift_of, horizon, damping = electron_slopes(
        cosmology,
        grid,
        electrons_of(run.grid_state, cosmology),
        _of_electrons(run.grid_state, at_grid, ratio, by_ratio),
        (1.0 + 2.0 * ratio, 2.0 * by_ratio),
        thomson,
    )
    matter = cosmology.cmb_temperature_k * (1.0 + redshift) * np.exp(run.state[:, 1])
    return Sensitivities(
        push.names,
        _of_electrons(run.state, slope, ratio, by_ratio),
        matter[:, None] * (slope[:, 1] + push.drive[:, DRIVE_TEMPERATURE]),
        redshift_of,
        horizon,
        damping,
        *_of_helium(run.state, slope),
    )


def _slopes(
    run: PlasmaRun, push: _Push, outputs: FloatArray, points: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Derivatives of the states at outputs and grid, shapes (n, 4, n_parameters)."""
    states = np.empty_like(run.state), np.empty_like(run.grid_state)
    n = len(push.names)
    found = np.zeros((*states[0].shape, n)), np.zeros((*states[1].shape, n))
    for p, step in enumerate(push.steps):
        if step == 0.0:
            continue
        for sign in (1.0, -1.0):
            plasma = push.moved(run.plasma, p, sign * step)
            status = repeated_history(plasma, outputs, points, run.steps, *states)
            if status != DONE:
                _complain(status, push.names[p])
            for into, state in zip(found, states, strict=True):
                into[:, :, p] += sign / (2.0 * step) * state
    return found


def _complain(status: int, name: str) -> None:
    if status == OUT_OF_RANGE:
        raise RangeError(
            f"sensitivities: by {name}: histories a little off leave the table in T_m/T_r"
        )
    raise SolveError(f"sensitivities: by {name}: histories a little off cannot take the same steps")


def _of_helium(state: FloatArray, slope: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Derivatives of x_HeI, x_HeII and x_HeIII, from those of (u, v, a, b)."""
    charged, neutral = (one[:, None] for one in fractions(state[:, 2]))
    double, single = (one[:, None] for one in fractions(state[:, 3]))
    ionized = charged * neutral * slope[:, 2]
    again = charged * double * single * slope[:, 3]
    return -ionized, single * ionized - again, double * ionized + again


def _of_electrons(
    state: FloatArray, slope: FloatArray, helium: float, by_helium: FloatArray
) -> FloatArray:
    """Derivatives of x_e, shape (n, n_parameters); helium = n_He/n_H."""
    ionized, neutral = (one[:, None] for one in fractions(state[:, 0]))
    charged, _ = (one[:, None] for one in fractions(state[:, 2]))
    double, _ = (one[:, None] for one in fractions(state[:, 3]))
    _, single, twice = _of_helium(state, slope)
    result = ionized * neutral * slope[:, 0] + helium * (single + 2.0 * twice)
    total: FloatArray = result + charged * (1.0 + double) * by_helium
    return total
