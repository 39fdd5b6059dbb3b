"""A run whose radiation field is resolved in frequency: one march of field, levels and ionization.

The march itself needs no network (`history/march_path.py`). Helium is taken from the reference
history: what the field does to hydrogen does not reach it.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..atomic.physics import scales
from ..errors import Outcome, SolveError
from ..escape.cells import frequency_cells
from ..escape.frequency_step import fitted_step
from ..escape.resolved import FieldRecord, ResolvedField, log_distortion
from ..kernels import transfer as kernel
from ..kernels.transfer import Cells, Path, Room, Track
from ..numerics.stepping import Trajectory
from .equations import SlowEquations
from .march_path import make_path
from .result import RadiationField
from .setup import Setup

# ln a between records of what the field does, and between points of the trajectory; both are
# interpolated in between.
_RECORD, _POINTS = 1e-3, 2e-3
_MOST_SPECTRA = 50
_MOST_ITERATIONS = 20
_FEWEST_RECORDS = 4  # for a cubic spline
# Of the change of x_HI in a step.
_TOLERANCE = 1e-9


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
        d ln nu, and the largest relative change of x_e on a grid twice as coarse; infinite where
        the march on that grid ended early.
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


def march(
    cells: Cells, path: Path, start: float, state: FloatArray, end: float, spectra: FloatArray
) -> Marched:
    """March from equilibrium at `start` past `end` in ln a, keeping the field near `spectra`."""
    stride = max(1, round(_RECORD / cells.step))
    # So far beyond that the last record is: K and s change by per cents from one to the next.
    n_steps = math.ceil((end - start) / cells.step) + stride
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
        raise SolveError(Outcome.SINGULAR.value, outcome=Outcome.SINGULAR)
    done = int(track.report[kernel.STEPS])
    outcome = Outcome.CONVERGED if status == kernel.DONE else Outcome.FIELD_NOT_SETTLED
    if done <= _FEWEST_RECORDS * stride:
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
        Output redshifts, descending, the last well below the start.
    """
    start, state = float(reference.time[0]), reference.state[0, :2]
    outputs = -np.log1p(redshift)
    outputs = outputs[outputs > start]
    end = float(outputs[-1])
    asked = setup.frequency_step
    path = make_path(
        equations,
        reference,
        start,
        end,
        setup.lines.two_photon != "distorted",
    )
    (cells, marched), (_, coarse) = (
        _march(setup, equations, path, state, end, step, outputs) for step in (asked, 2.0 * asked)
    )
    points = _points(marched, outputs)
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
        _frequency_error(marched, coarse, points),
        float(marched.track.report[kernel.PHOTON_ERROR]),
        float(marched.track.report[kernel.ATOM_ERROR]),
        len(marched.time) - 1,
    )


def _frequency_error(fine: Marched, coarse: Marched, points: FloatArray) -> float:
    if not coarse.outcome.ok:
        return math.inf
    there, less = (
        1.0 / (1.0 + np.exp(-CubicSpline(one.time, one.state[:, 0])(points)))
        for one in (fine, coarse)
    )
    return float(np.max(np.abs(there / less - 1.0)))


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
    # Evenly over the outputs, the first and the last among them.
    count = min(len(outputs), _MOST_SPECTRA)
    wanted = outputs[np.unique(np.linspace(0, len(outputs) - 1, count).round().astype(int))]
    return cells, march(cells, path, path.start, state, end, wanted)


def _points(marched: Marched, outputs: FloatArray) -> FloatArray:
    """Times of the trajectory: every output that was reached, and enough in between."""
    start, end = float(marched.time[0]), float(marched.time[-1])
    reached = outputs[outputs <= end]
    last = float(reached[-1]) if len(reached) else end
    between = np.linspace(start, last, max(8, math.ceil((last - start) / _POINTS)) + 1)
    # Neither doubled nor nearly so.
    near = 0.05 * _POINTS
    alone = np.searchsorted(reached, between - near) == np.searchsorted(reached, between + near)
    points: FloatArray = np.union1d(between[alone], [start, *reached])
    return points


def _trajectory(marched: Marched, points: FloatArray, reference: Trajectory) -> Trajectory:
    """Hydrogen and T_m as marched; helium, which the field does not touch, by the reference."""
    state = CubicSpline(marched.time, marched.state)(points)
    if reference.state.shape[1] > 2:
        helium = CubicSpline(reference.time, reference.state[:, 2:])(points)
        state = np.concatenate([state, helium], axis=1)
    return Trajectory(
        points, state, marched.outcome, 0, int(marched.track.report[kernel.ELIMINATIONS])
    )


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
