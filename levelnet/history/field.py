"""A run whose radiation field is resolved in frequency: one march of field, levels and ionization.

The march itself (`history/march.py`) needs no network (`history/march_path.py`). Helium is taken
from the reference history: what the field does to hydrogen does not reach it.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..atomic.physics import scales
from ..escape.cells import frequency_cells
from ..escape.frequency_step import fitted_step
from ..escape.resolved import FieldRecord, ResolvedField, log_distortion
from ..kernels import transfer as kernel
from ..kernels.transfer import Cells, Path
from ..numerics.stepping import Trajectory
from ..pieces import Pieces
from .equations import SlowEquations
from .march import Marched, Way, make_way, march
from .march_path import make_path
from .result import RadiationField
from .setup import Setup

# ln a between points of the trajectory, which is interpolated in between.
_POINTS = 2e-3
_MOST_SPECTRA = 50
# A march and its coarser companion that take less together are quickly done again.
_LONG_S = 40.0


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


def resolve_field(
    setup: Setup,
    equations: SlowEquations,
    reference: Trajectory,
    redshift: FloatArray,
    pieces: Pieces | None,
    advance: Callable[[float], None],
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
    pieces : Pieces or None
        Where stretches of a long march are kept.
    advance : callable
        Called now and then with the fraction that is done.
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
    ways = [_way(setup, equations, path, state, step, outputs) for step in (asked, 2.0 * asked)]
    marched, coarse = _march(ways, pieces, advance)
    points = _points(marched, outputs)
    recorded = replace(
        equations,
        treatment=ResolvedField.of(_record(setup, equations, marched)),
        two_photon_mode=setup.lines.two_photon,
    )
    return FieldRun(
        recorded,
        _trajectory(marched, points, reference),
        _field(equations, ways[0].cells, marched),
        ways[0].cells.step,
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


def _way(
    setup: Setup,
    equations: SlowEquations,
    path: Path,
    state: FloatArray,
    asked: float,
    outputs: FloatArray,
) -> Way:
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
    return make_way(cells, path, state, float(outputs[-1]), wanted)


def _march(
    ways: list[Way], pieces: Pieces | None, advance: Callable[[float], None]
) -> list[Marched]:
    """March each way, one after the other; kept on the way where that takes long."""
    total = sum(way.seconds for way in ways)
    kept, before, done = pieces if total > _LONG_S else None, 0.0, []

    def tell(fraction: float) -> None:
        advance((before + fraction * way.seconds) / total)

    for way in ways:
        done.append(march(way, kept, tell))
        before += way.seconds
    return done


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
