"""One rung of a ladder of truncations: a history with its low levels and observables.

A rung is computed by itself, in whichever process, with one BLAS thread: its numbers do not depend
on the other rungs nor on the number of workers. What rungs share is what costs nothing to share.
They ask for the same temperatures, since those stand on a lattice (``history/integrate.py``). The
hand-over depends on the lowest levels only and comes out the same for all; finding it takes 0.06 s
of the 1.1 s of a short rung, and the atomic data 0.09 s of 4 s at n_max = 200, less than bringing
either to another process. The factorised blocks cannot be shared: every level added to the atom
changes the total outflow of every other level, which is the diagonal of the rate matrix.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..atomic.physics import scales
from ..background.last_scattering import Observed, ionized_redshift, observe
from ..background.quadrature import quadrature
from ..errors import Outcome, SolveError
from ..history.course import electron_fraction_at, state_at
from ..history.integrate import Integrated, integrate_history, output_redshifts
from ..history.level_pieces import setup_key
from ..history.outcome import outcome_of, relaxation_hubble
from ..history.outputs import solve_levels
from ..history.setup import Setup
from ..network.assembly import Workspace
from ..numerics.threads import one_blas_thread
from ..pieces import Pieces, code_digest
from .helium_ladder import Atom, with_n_max
from .record_pieces import recalled

LOW_N = 4
"""Levels up to this n have their populations recorded."""

# Largest step of the grid of a study in ln(1 + z). Errors over a range are read at the redshifts
# of the grid and by splines between: at this step neither depends on what the setup delivers.
_STEP = 0.03


class RungResult(NamedTuple):
    """What one rung gives.

    Attributes
    ----------
    electron_fraction, matter_temperature_k : ndarray, shape (n_redshift,)
        n_e/n_H and T_m in K.
    observable_names, observable_units : tuple of str, length n_observables
        As in :class:`levelnet.background.last_scattering.Observed`.
    observable : ndarray, shape (n_observables,)
        In these units; NaN where the grid does not reach the event.
    population : ndarray, shape (n_population_redshift, n_low_levels)
        Atoms per hydrogen nucleus in the levels up to n = LOW_N.
    outcome : Outcome
        How the run ended.
    """

    electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable_names: tuple[str, ...]
    observable_units: tuple[str, ...]
    observable: FloatArray
    population: FloatArray
    outcome: Outcome


def study_setup(setup: Setup, also: Iterable[float] = ()) -> Setup:
    """The setup on the grid of a study.

    Parameters
    ----------
    setup : Setup
        Any; one that is dense enough comes back as it is.
    also : iterable of float, dimensionless
        Redshifts that the grid is to hold too; those outside the outputs are left out.

    Returns
    -------
    Setup
        Its grid holds the output redshifts, what else is asked, and as many between, evenly spaced
        in ln(1 + z), that no step in it exceeds 0.03.
    """
    outputs = output_redshifts(setup)
    inside = {float(z) for z in also if outputs[-1] <= z <= outputs[0]}
    places = np.array(sorted({*outputs.tolist(), *inside}, reverse=True))
    x = np.log1p(places)
    counts = np.ceil(-np.diff(x) / _STEP - 1e-9).astype(int)
    if len(places) == len(outputs) and np.all(counts <= 1):
        return setup
    more = [np.linspace(x[k], x[k + 1], n + 1)[1:-1] for k, n in enumerate(counts.tolist())]
    grid = tuple(sorted({*places.tolist(), *np.expm1(np.concatenate(more)).tolist()}, reverse=True))
    return dataclasses.replace(setup, grid=dataclasses.replace(setup.grid, redshifts=grid))


def rung_setup(
    setup: Setup,
    n_max: int,
    resolve_l_to: int | None,
    relative: float,
    atom: Atom = "hydrogen",
) -> Setup:
    """The setup of one rung; where `resolve_l_to` is None every level is resolved in l."""
    if atom == "helium":
        accuracy = dataclasses.replace(setup.accuracy, relative=relative)
        return dataclasses.replace(with_n_max(setup, n_max), accuracy=accuracy)
    return dataclasses.replace(
        setup,
        hydrogen=dataclasses.replace(setup.hydrogen, n_max=n_max, resolve_l_to=resolve_l_to),
        accuracy=dataclasses.replace(setup.accuracy, relative=relative),
    )


def compute_rung(
    setup: Setup,
    population_redshift: tuple[float, ...],
    pieces: Pieces | None,
    optical_depth_to: tuple[float, ...] = (),
) -> RungResult:
    """Compute one rung: the task of a worker.

    Parameters
    ----------
    setup : Setup
        Of this rung; see :func:`rung_setup`.
    population_redshift : tuple of float, dimensionless
        Output redshifts at which the populations are solved.
    pieces : Pieces or None
        Where reduced networks are kept.
    optical_depth_to : tuple of float, dimensionless
        Redshifts Z for optical_depth(Z).

    Raises
    ------
    SolveError
        If the run ended before its last output.

    Notes
    -----
    A finished rung is among the pieces, so that a ladder that was killed does not run it again.
    """
    key = setup_key(
        "rung", setup, code_digest(("studies/rung",)), population_redshift, optical_depth_to
    )
    return recalled(
        pieces, key, RungResult, lambda: _rung(setup, population_redshift, pieces, optical_depth_to)
    )


def _rung(
    setup: Setup,
    population_redshift: tuple[float, ...],
    pieces: Pieces | None,
    optical_depth_to: tuple[float, ...],
) -> RungResult:
    with one_blas_thread():
        integrated = integrate_observed(setup, pieces)
        if not integrated.trajectory.outcome.ok:
            outcome = integrated.trajectory.outcome
            text = f"rung n_max = {setup.hydrogen.n_max}: {outcome.value}"
            if setup.helium_recombines:
                text = f"helium n_max = {setup.helium.n_max}, {text}"
            raise SolveError(text, outcome=outcome)
        redshift = integrated.redshift
        times = (-np.log1p(redshift)).tolist()
        states = np.array([state_at(integrated, s) for s in times])
        here = (integrated.equations.local(s, y) for s, y in zip(times, states, strict=True))
        outcome = outcome_of(setup, integrated, map(relaxation_hubble, here))
        seen = observed(setup, integrated, optical_depth_to)
        radiation_k = setup.cosmology.radiation_temperature_k(redshift)
        return RungResult(
            np.array([integrated.equations.electron_fraction(one) for one in states]),
            radiation_k * np.exp(states[:, 1]),
            seen.names,
            seen.units,
            seen.value,
            _low_populations(integrated, population_redshift),
            outcome,
        )


def observables_of(setup: Setup, pieces: Pieces | None = None) -> Observed:
    """What an observer makes of a setup's history: every observable, with derivatives.

    Parameters
    ----------
    setup : Setup
        The run.
    pieces : Pieces, optional
        Store of reduced networks.

    Raises
    ------
    SolveError
        If the run ended before its last output.
    """
    with one_blas_thread():
        integrated = integrate_observed(setup, pieces)
        outcome = integrated.trajectory.outcome
        if not outcome.ok:
            raise SolveError(outcome.value, outcome=outcome)
        return observed(setup, integrated, ())


def integrate_observed(
    setup: Setup, pieces: Pieces | None, keeps: tuple[tuple[int, int], ...] = ()
) -> Integrated:
    """Integrate from where observables start, or know the network from there."""
    start = _ionized_redshift(setup)
    return integrate_history(setup, lambda *_: None, pieces, keeps=keeps, start_above=start)


def _ionized_redshift(setup: Setup) -> float:
    """Redshift from which integrals start: with helium, where its own energies say so."""
    found = ionized_redshift(setup.cosmology, setup.helium_recombines)
    if not setup.helium_recombines:
        return found
    return (1.0 + found) * scales(setup.physics, charge=2).energy - 1.0


def observed(setup: Setup, integrated: Integrated, optical_depth_to: tuple[float, ...]) -> Observed:
    """What an observer makes of the history, in equilibrium above its start."""
    redshift = integrated.redshift
    ionized = _ionized_redshift(setup)
    start = max(ionized, integrated.handover.redshift, float(redshift[0]))
    ends = -math.log1p(start), -math.log1p(float(redshift[-1]))
    grid = quadrature(setup.cosmology, *ends)
    electrons = electron_fraction_at(integrated, grid.points)
    thomson = integrated.equations.scales.thomson
    helium = setup.cosmology.helium_ratio() if setup.helium_recombines else 0.0
    return observe(
        setup.cosmology,
        grid,
        electrons,
        thomson,
        optical_depth_to,
        early_electron_fraction=1.0 + 2.0 * helium,
    )


def _low_populations(integrated: Integrated, redshift: tuple[float, ...]) -> FloatArray:
    work = Workspace.of(integrated.ladder)
    low = np.flatnonzero(integrated.ladder.levels.n <= LOW_N)
    found = [solve_levels(integrated, z, work)[2].log_population[low] for z in redshift]
    return np.exp(np.array(found))
