"""One history from a table, in a millisecond, with its derivatives."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from ..arrays import FloatArray
from ..atomic.physics import Physics, scales
from ..background.cosmology import Cosmology
from ..background.parameters import COSMOLOGICAL
from ..background.quadrature import Quadrature
from ..errors import InputError, Outcome, RangeError, SolveError
from ..escape.lines import Lines
from ..kernels.effective import (
    NO_START,
    OUT_OF_RANGE,
    STEP_TOO_SMALL,
    TOO_MANY_STEPS,
    Atom,
    effective_history,
)
from ..pieces import Pieces
from .differences import plasma_sensitivities
from .fast import FastHistory, Sensitivities, fractions
from .kept import check_helium, recombines
from .notes import table_notes
from .observables import Observables, observe_electrons, observe_run, table_quadrature
from .plasma import PlasmaRun, electrons_of, electrons_with, helium_of, run_plasma
from .prepared import choose_physics, make_atom, rate_names, scale_factors
from .table import EffectiveTable
from .universe import CONSTANTS, make_drive, make_universe
from .with_field import field_setup, history_with_field

# Local error allowed in a step over the error asked of x_e; with it x_e was measured to a quarter.
_LOCAL = 2.0
# Derivatives follow the computed history, so their error is a few times its own.
_LOCAL_SENSITIVE = 0.5
# With levels of helium: what is asked of x_e over this. That by H_0 then errs by 2e-6 at z = 20.
_TIGHTER = 8.0
# The start carries the first-order lag behind equilibrium; what it leaves out is the square of it.
_START = 0.1
_FIRST_STEP, _MAX_STEPS = 1e-3, 20_000
_TIGHTEST, _LOOSEST = 1e-11, 1e-3
_COUNT = 2000


class Run(NamedTuple):
    """What the kernel gave.

    Attributes
    ----------
    state : ndarray, shape (n, 2)
        u = ln(x_HII/x_HI) and v = ln(T_m/T_r).
    slope : ndarray, shape (n, 2 n_parameters)
        Their derivatives, u first.
    grid_state, grid_slope : ndarray
        The same at the points of the observables.
    report : ndarray
        As :func:`levelnet.kernels.effective.effective_history`.
    """

    state: FloatArray
    slope: FloatArray
    grid_state: FloatArray
    grid_slope: FloatArray
    report: FloatArray


def history_from_table(  # noqa: PLR0913 (each is a choice of the caller)
    table: EffectiveTable,
    cosmology: Cosmology,
    *,
    redshifts: ArrayLike | None = None,
    lines: Lines | None = None,
    two_photon_rate_per_s: float | None = None,
    relative: float = 1e-6,
    sensitivities: bool = False,
    observables: bool = False,
    rate_scales: Mapping[str, float] | None = None,
    fine_structure_change: float | None = None,
    electron_mass_change: float | None = None,
    pieces: Pieces | None = None,
) -> FastHistory:
    """Compute the history of one cosmology from a table of effective rates.

    Parameters
    ----------
    table : EffectiveTable
        From :func:`levelnet.distill`.
    cosmology : Cosmology
        Any; it need not be the table's.
    redshifts : array_like, dimensionless, optional
        Output redshifts in any order, one or more, with T_r inside the table;
        None: 2000, evenly spaced in ln(1 + z), over the grid of the table's setup.
    lines : Lines, optional
        Line treatment; None: the table's. Every open Lyman line must start from a kept level, and
        so must all that a resolved field ("transfer") talks to; it takes seconds, and knows no
        derivatives.
    two_photon_rate_per_s : float, s^-1, optional
        2s-1s decay rate before any change of constants; None: the table's.
    relative : float, 1e-11 to 1e-3 (dimensionless)
        Error of x_e from stepping and interpolation.
    sensitivities : bool
        Also give the derivatives of everything, z_*, r_s and k_D among them: exact ones of hydrogen
        alone, differences along the same steps with levels of helium (see Notes).
    observables : bool
        Also give z_*, r_s and k_D.
    rate_scales : mapping of str to float, dimensionless, optional
        Factors on effective rates, named as :func:`rate_names` names them.
    fine_structure_change, electron_mass_change : float, -0.2 to 0.2 (dimensionless), optional
        Relative changes of constants; None: those of the table.
    pieces : Pieces, optional
        Where a resolved field keeps what takes long, such as
        ``levelnet.pieces.FolderPieces(folder)``: a run that was killed goes on, to the same bits.

    Returns
    -------
    FastHistory
        Fractions and temperatures at every output, descending in redshift.

    Raises
    ------
    InputError
        For arguments out of range, lines that do not close on the kept levels, redshifts the table
        does not hold (RangeError), or hydrogen that is nowhere in Saha equilibrium inside it.
    SolveError
        If the integration did not reach the last redshift.

    Notes
    -----
    The equations, the start and the step method are those of :func:`levelnet.solve`. Helium is
    neutral unless the table holds its levels. There is no reionization. Safe in threads.

    Derivatives of hydrogen alone solve the variational equation along the computed history; they
    are no differences. With levels of helium they are central differences of histories with the
    same start and steps; those by changes of constants are not known. See :class:`Sensitivities`
    for their errors. With ten parameters they take some thirty times as long as the history alone,
    those of hydrogen alone three times.

    References
    ----------
    Ali-Haimoud & Hirata 2010, Phys. Rev. D 82, 063521 (effective multilevel atom); Hairer & Wanner
    1996, Solving Ordinary Differential Equations II (Rosenbrock and Radau methods).
    """
    if not isinstance(table, EffectiveTable) or not isinstance(cosmology, Cosmology):
        raise InputError("an EffectiveTable (levelnet.read reads one) and a Cosmology are needed")
    if not _TIGHTEST <= relative <= _LOOSEST:
        raise InputError(f"relative = {relative:g}: allowed are {_TIGHTEST:g} to {_LOOSEST:g}")
    physics = choose_physics(table, fine_structure_change, electron_mass_change)
    redshift = _redshifts(table, redshifts)
    chosen = table.setup.lines if lines is None else lines
    check_helium(table, cosmology, chosen, physics)
    if chosen.transfer is not None:
        if sensitivities or rate_scales:
            raise InputError(
                'lines.hydrogen = "transfer": neither sensitivities nor rate_scales are known with '
                "a resolved field"
            )
        setup = field_setup(
            table, cosmology, chosen, two_photon_rate_per_s, relative, physics, redshift
        )
        return history_with_field(table, setup, redshift, observables, pieces)
    factors = scale_factors(table, rate_scales)
    atom = make_atom(table, lines, two_photon_rate_per_s, physics, factors)
    _check_range(atom, cosmology, redshift)
    notes = table_notes(table, cosmology, chosen, two_photon_rate_per_s)
    if recombines(table, cosmology):
        asked, thomson = (observables or sensitivities, sensitivities), scales(physics).thomson
        return _with_helium(table, atom, cosmology, redshift, relative, asked, thomson, notes)
    drive = _drive(table, cosmology, physics) if sensitivities else None
    outputs = -np.log1p(redshift)
    wanted = observables or sensitivities
    grid = table_quadrature(atom, cosmology, float(outputs[-1])) if wanted else None
    run = _run(atom, cosmology, outputs, grid, drive, relative)
    if grid is None:
        return _assemble(cosmology, redshift, run, None, None, notes)
    seen, slopes = observe_run(
        cosmology, grid, run.grid_state, run.grid_slope, drive, scales(physics).thomson
    )
    if drive is None:
        return _assemble(cosmology, redshift, run, seen, None, notes)
    names = (*COSMOLOGICAL, *CONSTANTS, *(f"ln {name}" for name in rate_names(table)))
    found = _sensitivities(cosmology, redshift, run, drive, names, slopes)
    return _assemble(cosmology, redshift, run, seen, found, notes)


def _with_helium(
    table: EffectiveTable,
    atom: Atom,
    cosmology: Cosmology,
    redshift: FloatArray,
    relative: float,
    wanted: tuple[bool, bool],
    thomson: float,
    notes: tuple[str, ...],
) -> FastHistory:
    """Hydrogen and helium together; wanted: observables, and derivatives, which need them."""
    outputs = -np.log1p(redshift)
    grid = table_quadrature(atom, cosmology, float(outputs[-1])) if wanted[0] else None
    asked = relative / _TIGHTER if wanted[1] else relative
    run = run_plasma(table, atom, cosmology, outputs, grid, asked)
    if run.status:
        _complain(run.status, atom, run.report)
    seen = found = None
    if grid is not None:
        electrons = electrons_of(run.grid_state, cosmology)
        early = 1.0 + 2.0 * cosmology.helium_ratio()
        seen = observe_electrons(cosmology, grid, electrons, thomson, early)
        if wanted[1]:
            found = plasma_sensitivities(table, cosmology, redshift, run, grid, thomson)
    history = _assemble(cosmology, redshift, run, seen, found, notes)
    helium = helium_of(run.state)
    electrons = electrons_with(history.ionized_hydrogen_fraction, helium, cosmology)
    return dataclasses.replace(history, free_electron_fraction=electrons, helium=helium)


def _redshifts(table: EffectiveTable, asked: ArrayLike | None) -> FloatArray:
    """Output redshifts, descending."""
    if asked is None:
        grid = table.setup.grid
        ends = math.log1p(grid.redshift_start), math.log1p(grid.redshift_end)
        redshift = np.expm1(np.linspace(*ends, _COUNT))
        redshift[[0, -1]] = grid.redshift_start, grid.redshift_end
        return redshift
    try:
        redshift = np.atleast_1d(np.array(asked, dtype=float))
    except (TypeError, ValueError):
        redshift = np.array([np.nan])
    if redshift.ndim != 1 or not len(redshift) or not np.all(np.isfinite(redshift)):
        raise InputError("redshifts: one finite number or a plain sequence of them is needed")
    if np.any(redshift[1:] >= redshift[:-1]):
        redshift = np.unique(redshift)[::-1]
    return np.ascontiguousarray(redshift)


def _check_range(atom: Atom, cosmology: Cosmology, redshift: FloatArray) -> None:
    """RangeError where the table does not hold T_r."""
    today = cosmology.cmb_temperature_k
    low, high = (math.exp(float(x + atom.constants[1])) for x in atom.span[:2])
    for z in (float(redshift[0]), float(redshift[-1])):
        radiation_k = today * (1.0 + z)
        if z < 0.0 or not low * (1.0 - 1e-12) <= radiation_k <= high * (1.0 + 1e-12):
            raise RangeError(
                f"redshifts: {z:g}: T_r = {radiation_k:g} K is outside the table; it holds "
                f"{low:g} to {high:g} K, redshifts {max(0.0, low / today - 1.0):.5g} to "
                f"{high / today - 1.0:.5g}"
            )


def _drive(table: EffectiveTable, cosmology: Cosmology, physics: Physics) -> FloatArray:
    changes = physics.fine_structure_change, physics.electron_mass_change
    return make_drive(cosmology, scales(physics), changes, len(rate_names(table)))


def _run(
    atom: Atom,
    cosmology: Cosmology,
    s: FloatArray,
    grid: Quadrature | None,
    drive: FloatArray | None,
    relative: float,
) -> Run:
    """Call the kernel; SolveError or InputError where it did not reach the end."""
    # From the hottest place a start may be looked for down to the end.
    first = math.log(cosmology.cmb_temperature_k) - float(atom.span[1] + atom.constants[1])
    universe = make_universe(cosmology, min(first, float(s[0])), float(s[-1]), drive)
    points = np.empty(0) if grid is None else grid.points
    n = 2 * len(universe.drive)
    run = Run(
        np.empty((len(s), 2)),
        np.empty((len(s), n)),
        np.empty((len(points), 2)),
        np.empty((len(points), n)),
        np.zeros(6),
    )
    status = effective_history(
        atom,
        universe,
        s,
        points,
        math.sqrt(_START * relative),
        (_LOCAL if drive is None else _LOCAL_SENSITIVE) * relative,
        _FIRST_STEP,
        _MAX_STEPS,
        *run,
    )
    if status:
        _complain(status, atom, run.report)
    return run


def _complain(status: int, atom: Atom, report: FloatArray) -> None:
    if status == NO_START:
        top = math.exp(float(atom.span[1] + atom.constants[1]))
        raise InputError(
            "lines, two_photon_rate_per_s: hydrogen is not in Saha equilibrium anywhere below "
            f"T_r = {top:g} K, the end of the table, to the accuracy asked"
        )
    reached = math.expm1(-float(report[4]))
    if status == OUT_OF_RANGE:
        low, high = (math.exp(float(y)) for y in atom.span[2:])
        raise RangeError(
            f"T_m/T_r leaves the table below redshift {reached:g}; it holds {low:g} to {high:g}"
        )
    outcome = {TOO_MANY_STEPS: Outcome.STEP_LIMIT, STEP_TOO_SMALL: Outcome.STEP_TOO_SMALL}[status]
    raise SolveError(f"{outcome.value} (redshift {reached:g})")


def _assemble(
    cosmology: Cosmology,
    redshift: FloatArray,
    run: Run | PlasmaRun,
    seen: Observables | None,
    found: Sensitivities | None,
    notes: tuple[str, ...],
) -> FastHistory:
    ionized, neutral = fractions(run.state[:, 0])
    radiation = cosmology.cmb_temperature_k * (1.0 + redshift)
    return FastHistory(
        Outcome.CONVERGED,
        redshift,
        ionized,
        ionized,
        neutral,
        radiation * np.exp(run.state[:, 1]),
        radiation,
        math.expm1(-float(run.report[0])),
        int(run.report[2]),
        int(run.report[3]),
        seen,
        found,
        notes=notes,
    )


def _sensitivities(
    cosmology: Cosmology,
    redshift: FloatArray,
    run: Run,
    drive: FloatArray,
    names: tuple[str, ...],
    slopes: FloatArray,
) -> Sensitivities:
    n = len(drive)
    ionized, neutral = fractions(run.state[:, 0])
    matter = cosmology.cmb_temperature_k * (1.0 + redshift) * np.exp(run.state[:, 1])
    return Sensitivities(
        names,
        (ionized * neutral)[:, None] * run.slope[:, :n],
        matter[:, None] * (run.slope[:, n:] + drive[:, 0]),
        *slopes,
    )
