"""A history with its radiation field from a table: seconds instead of milliseconds."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from ..arrays import FloatArray
from ..atomic.physics import Physics
from ..background.cosmology import Cosmology
from ..background.last_scattering import ionized_redshift
from ..background.quadrature import quadrature
from ..errors import SolveError
from ..escape.lines import Lines
from ..history.course import Course, electron_fraction_at, state_at
from ..history.integrate import handover_of, march_field, slow_equations
from ..history.limits import field_notes
from ..history.setup import Accuracy, Grid, Setup
from ..pieces import Pieces
from .fast import FastHistory, fractions
from .kept import check_kept
from .notes import table_notes
from .observables import Observables, observe_electrons
from .table import EffectiveTable


def field_setup(
    table: EffectiveTable,
    cosmology: Cosmology,
    lines: Lines,
    two_photon_rate_per_s: float | None,
    relative: float,
    physics: Physics,
    redshift: FloatArray,
) -> Setup:
    """Put the choices of a history from a table together, checked as those of a setup file.

    Parameters
    ----------
    table, cosmology, two_photon_rate_per_s, relative
        As for :func:`levelnet.history_from_table`.
    lines : Lines
        With ``hydrogen = "transfer"``.
    physics : Physics
        Constants.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending.
    """
    hydrogen = table.setup.hydrogen
    if two_photon_rate_per_s is not None:
        hydrogen = dataclasses.replace(hydrogen, two_photon_rate_per_s=two_photon_rate_per_s)
    limits = float(redshift[0]) + 1.0, float(redshift[-1])
    setup = dataclasses.replace(
        table.setup,
        cosmology=cosmology,
        hydrogen=hydrogen,
        lines=lines,
        grid=Grid(redshift_start=limits[0], redshift_end=limits[1]),
        accuracy=Accuracy(relative=max(relative, 1e-9)),
        physics=physics,
    )
    check_kept(setup, table.kept)
    return setup


def history_with_field(
    table: EffectiveTable,
    setup: Setup,
    redshift: FloatArray,
    observables: bool,
    pieces: Pieces | None,
) -> FastHistory:
    """March a history with its field through the interior that a table holds.

    Parameters
    ----------
    table : EffectiveTable
        The interior.
    setup : Setup
        From :func:`field_setup`.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending.
    observables : bool
        Also give z_*, r_s and k_D.
    pieces : Pieces or None
        Where stretches of a long march are kept.
    """
    changes = setup.physics.fine_structure_change, setup.physics.electron_mass_change
    equations = slow_equations(setup, table.with_constants(*changes))
    handover = handover_of(setup, equations)
    run = march_field(
        setup, equations, (handover, handover), redshift, lambda stage, fraction: None, pieces
    )
    outcome = run.trajectory.outcome
    if not outcome.ok:
        raise SolveError(outcome.value, outcome=outcome)
    course = Course(run.equations, handover, run.trajectory)
    state = np.array([state_at(course, s) for s in -np.log1p(redshift)])
    ionized, neutral = fractions(state[:, 0])
    radiation_k = setup.cosmology.cmb_temperature_k * (1.0 + redshift)
    return FastHistory(
        outcome,
        redshift,
        ionized,
        ionized,
        neutral,
        radiation_k * np.exp(state[:, 1]),
        radiation_k,
        handover.redshift,
        run.steps,
        0,
        _observables(setup, course, float(redshift[-1])) if observables else None,
        None,
        run.field,
        run.frequency_error,
        (
            *table_notes(table, setup.cosmology, setup.lines, setup.two_photon_rate_per_s),
            *field_notes(run.frequency_step, run.frequency_error),
            f"field: frequency step {run.frequency_step:.3g}; in a step photons are off by at most "
            f"{run.photon_number_error:.1e}, atoms by {run.atom_number_error:.1e}, relative",
        ),
    )


def _observables(setup: Setup, course: Course, end: float) -> Observables:
    """z_*, r_s and k_D, from where hydrogen is ionized down to the last output."""
    cosmology = setup.cosmology
    grid = quadrature(cosmology, -math.log1p(ionized_redshift(cosmology)), -math.log1p(end))
    electrons = electron_fraction_at(course, grid.points)
    return observe_electrons(cosmology, grid, electrons, course.equations.scales.thomson)
