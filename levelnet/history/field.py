"""A run whose radiation field is resolved in frequency: one march of field, levels and ionization.

The interior of the atom is sampled along a reference history (Sobolev, which fixes T_m to a few
1e-4), so that the march itself needs no network: recombination follows the true T_m by its slope.
Helium is taken from that history: what the field does to hydrogen it feels through n_e alone.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..atomic.physics import scales
from ..background.matter import compton_rate_per_s
from ..errors import Outcome, SolveError
from ..escape.cells import frequency_cells
from ..escape.frequency_step import fitted_step
from ..escape.resolved import FieldRecord, ResolvedField, log_distortion
from ..kernels import transfer as kernel
from ..kernels.transfer import Cells, Path, Room, Track
from ..numerics.stepping import Trajectory
from .equations import SlowEquations
from .result import RadiationField
from .setup import Setup

# Distance in ln a of the samples of the interior: cubic pieces are then good to 1e-9.
_SPACING = 0.004
# ln a between records of what the field does, and between points of the trajectory; both are
# interpolated in between.
_RECORD, _POINTS = 1e-3, 2e-3
_MOST_SPECTRA = 50
_MOST_ITERATIONS = 20
# With fewer there is nothing to return.
_FEWEST_STEPS = 3
# Of the change of x_HI in a step.
_TOLERANCE = 1e-9
_NEVER = -700.0


class FieldRun(NamedTuple):
    """A history with its field.

    Attributes
    ----------
    equations : SlowEquations
        With the treatment that holds the record of the field.
    trajectory : Trajectory
        Points of the history, every asked output among them.
    field : RadiationField
        Spectra.
    frequency_step, frequency_error : float, dimensionless
        d ln nu, and the largest relative change of x_e at the outputs on a grid twice as coarse.
    photon_number_error, atom_number_error : float, dimensionless
        Largest relative imbalance in any step.
    steps : int
        Steps of the march; the trajectory has fewer points.
    """

    equations: SlowEquations
    trajectory: Trajectory
    field: RadiationField
    frequency_step: float
    frequency_error: float
    photon_number_error: float
    atom_number_error: float
    steps: int


class Marched(NamedTuple):
    """What one march gave.

    Attributes
    ----------
    time, state : ndarray, shapes (n_steps + 1,) and (n_steps + 1, 2)
        ln a, and u and v there.
    middle : ndarray, shape (n_records,)
        ln a of the records.
    spectrum_time : ndarray, shape (n_spectra,)
        ln a of the spectra.
    track : Track
        Records, spectra, report.
    outcome : Outcome
        How it ended.
    """

    time: FloatArray
    state: FloatArray
    middle: FloatArray
    spectrum_time: FloatArray
    track: Track
    outcome: Outcome


def make_room(cells: Cells) -> Room:
    """Work space for a grid."""
    n_levels, n_cells = cells.weight.shape
    n_scattering = len(cells.conductance) - 1
    cell, levels = np.zeros((6, n_cells)), np.zeros((2, n_levels, n_cells))
    return Room(
        cell[0],
        cell[1],
        levels[0],
        levels[1],
        cell[2],
        cell[3],
        cell[4],
        cell[5],
        np.zeros(n_scattering),
        np.zeros((n_scattering, n_levels + 2)),
        np.zeros(len(cells.line_cell)),
    )


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
            [equations.helium_electrons(state), math.log(around.hubble_rate_per_s), lag],
            [two_photon],
        ]
    )


def march(
    cells: Cells, path: Path, start: float, state: FloatArray, end: float, spectra: FloatArray
) -> Marched:
    """March from equilibrium at `start` to `end` in ln a, keeping the field near `spectra`."""
    n_steps = math.ceil((end - start) / cells.step)
    stride = max(1, round(_RECORD / cells.step))
    n_records = (n_steps - 1) // stride + 1
    n, n_lines = len(path.weight_ratio), len(cells.line_cell)
    wanted = np.clip(np.rint((spectra - start) / cells.step), 1, n_steps).astype(np.int64)
    track = Track(
        np.zeros((n_steps + 1, 2)),
        np.zeros((n_records, n, n)),
        np.zeros((n_records, n)),
        np.zeros((n_records, n_lines, 2)),
        np.zeros((len(wanted), len(cells.offset))),
        np.zeros(4),
    )
    first = np.array([start, *state])
    status = kernel.march(
        cells, path, first, stride, wanted, _TOLERANCE, _MOST_ITERATIONS, make_room(cells), track
    )
    if status == kernel.SINGULAR:
        raise SolveError(Outcome.SINGULAR.value)
    done = int(track.report[0])
    outcome = Outcome.CONVERGED if status == kernel.DONE else Outcome.STEP_TOO_SMALL
    if done < _FEWEST_STEPS:
        raise SolveError(outcome.value, outcome=outcome)
    step = np.arange(done + 1, dtype=float)
    return Marched(
        start + cells.step * step,
        track.state[: done + 1],
        start + cells.step * (step[:done:stride] + 0.5),
        start + cells.step * wanted[wanted <= done].astype(float),
        track,
        outcome,
    )


def resolve_field(
    setup: Setup,
    equations: SlowEquations,
    reference: Trajectory,
    redshift: FloatArray,
) -> FieldRun:
    """Work out a history together with its field.

    Parameters
    ----------
    setup : Setup
        The run.
    equations : SlowEquations
        Its equations while the field is a blackbody.
    reference : Trajectory
        Their solution from the start down to the last output, or nearly.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending.
    """
    start, state = float(reference.time[0]), reference.state[0, :2]
    outputs = -np.log1p(redshift)
    outputs = outputs[outputs > start]
    end = float(outputs[-1]) if len(outputs) else start + 10.0 * _POINTS
    asked = setup.frequency_step
    path = make_path(
        equations,
        reference,
        start,
        end,
        setup.lines.two_photon != "distorted",
    )
    fine, coarse = (
        _march(setup, equations, path, state, end, step, outputs) for step in (asked, 2.0 * asked)
    )
    cells, marched = fine
    points = _points(marched, outputs)
    shared = points[points <= coarse[1].time[-1]]
    there, less = (
        1.0 / (1.0 + np.exp(-CubicSpline(one.time, one.state[:, 0])(shared)))
        for one in (marched, coarse[1])
    )
    recorded = replace(
        equations,
        treatment=ResolvedField.of(_record(setup, equations, marched)),
        two_photon_mode=setup.lines.two_photon,
    )
    return FieldRun(
        recorded,
        _trajectory(marched, points, reference),
        _field(equations, cells, marched),
        cells.step,
        float(np.max(np.abs(there / less - 1.0))),
        float(marched.track.report[2]),
        float(marched.track.report[3]),
        len(marched.time) - 1,
    )


def _march(
    setup: Setup,
    equations: SlowEquations,
    path: Path,
    state: FloatArray,
    end: float,
    asked: float,
    outputs: FloatArray,
) -> tuple[Cells, Marched]:
    factor = scales(setup.physics)
    cells = frequency_cells(
        equations.reduced.kept,
        equations.lines,
        setup.lines,
        fitted_step(asked),
        setup.two_photon_rate_per_s,
        factor.two_photon_rate,
    )
    wanted = outputs[:: max(1, math.ceil(len(outputs) / _MOST_SPECTRA))]
    return cells, march(cells, path, path.start, state, end, wanted)


def _points(marched: Marched, outputs: FloatArray) -> FloatArray:
    """Times of the trajectory: every output that was reached, and enough in between."""
    start, end = float(marched.time[0]), float(marched.time[-1])
    reached = outputs[outputs <= end]
    last = float(reached[-1]) if len(reached) else end
    between = np.linspace(start, last, max(8, math.ceil((last - start) / _POINTS)) + 1)
    # Neither doubled nor nearly so.
    apart = np.min(np.abs(np.subtract.outer(between, reached)), axis=1, initial=np.inf)
    points: FloatArray = np.union1d(between[apart > 0.05 * _POINTS], [start, *reached])
    return points


def _trajectory(marched: Marched, points: FloatArray, reference: Trajectory) -> Trajectory:
    """Hydrogen and T_m as marched; helium, which the field does not touch, by the reference."""
    state = CubicSpline(marched.time, marched.state)(points)
    if reference.state.shape[1] > 2:
        helium = CubicSpline(reference.time, reference.state[:, 2:])(points)
        state = np.concatenate([state, helium], axis=1)
    return Trajectory(points, state, marched.outcome, 0, int(marched.track.report[1]))


def _record(setup: Setup, equations: SlowEquations, marched: Marched) -> FieldRecord:
    count, track, lines = len(marched.middle), marched.track, equations.lines
    radiation_k = equations.cosmology.cmb_temperature_k * np.exp(-marched.middle)
    through_field = setup.lines.two_photon == "distorted"
    return FieldRecord(
        radiation_k,
        track.loss[:count],
        track.source[:count],
        log_distortion(track.sides[:count], lines.energy_ev[:, None], radiation_k[:, None, None]),
        equations.two_photon_rate_per_s if through_field else 0.0,
        setup.lines.field_resolves,
    )


def _field(equations: SlowEquations, cells: Cells, marched: Marched) -> RadiationField:
    when, first = np.unique(marched.spectrum_time, return_index=True)
    # At the end of a step packets stand at the upper edges of the cells they are about to enter.
    # The mean over a cell is better than either: where scattering is fast it alone is settled.
    edges = marched.track.spectra[first]
    energy_ev = cells.energy_ev * np.exp(cells.offset[1:])
    edge_ev = energy_ev * math.exp(-0.5 * cells.step)
    radiation_k = equations.cosmology.cmb_temperature_k * np.exp(-when)[:, None]
    found = log_distortion(0.5 * (edges[:, 1:] + edges[:, :-1]), energy_ev, radiation_k)
    core = cells.line_cell - 1  # a thick line is as its red side
    found[:, core] = log_distortion(edges[:, core], edge_ev[core], radiation_k)
    return RadiationField(np.expm1(-when), energy_ev, found)
