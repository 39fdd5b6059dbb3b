"""Helium at the output redshifts: fractions, populations of every level, figures."""

from __future__ import annotations

import math

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..network.assembly import Workspace, factor_interior
from ..network.helium_populations import helium_populations
from ..network.populations import LevelPopulations, populations
from ..network.scaled import as_measured, scaled_levels
from .course import state_at
from .equations import SlowEquations
from .helium import HeliumEquations
from .helium_atom import HeliumAtoms
from .helium_moment import HeliumMoment
from .helium_record import HeliumFigures
from .helium_validity import helium_line_figures
from .integrate import Integrated
from .outcome import relaxation_hubble
from .result import Channels, Levels, SpeciesPopulations

_SMALLEST_LOG = math.log(1e-300)
# Levels of helium count for the outcome while so much of it is ionized.
_COUNTS = 1e-6


def helium_moments(integrated: Integrated, redshift: FloatArray) -> list[HeliumMoment]:
    """Helium at the output redshifts; nothing where it is inert."""
    atoms = integrated.helium
    if atoms is None:
        return []
    work = None if atoms.second is None else Workspace.of(atoms.second)
    return [_moment(integrated, atoms, work, z) for z in redshift.tolist()]


def _moment(
    integrated: Integrated, atoms: HeliumAtoms, work: Workspace | None, redshift: float
) -> HeliumMoment:
    log_scale = -math.log1p(redshift)
    state, equations = state_at(integrated, log_scale), integrated.equations
    around = equations.helium_around(log_scale, state)
    x, electrons = HeliumEquations.fractions(state[2:]), equations.electron_fraction(state)
    one, scales = atoms.equations.first, atoms.equations.scales
    conditions = as_measured(one.conditions(around, x.single, x.neutral), scales)
    if atoms.equations.held(around.radiation_temperature_k):
        held = [_ground_alone(len(atoms.first.levels), x.neutral)]
        if atoms.second is not None:
            held.append(_ground_alone(len(atoms.second.levels), x.single))
        return HeliumMoment(x, None, tuple(held), math.inf, electrons)
    first = atoms.equations.first_local(around, state[2:])
    found = [helium_populations(atoms.first, first.solution.log_population, conditions)]
    slowest = relaxation_hubble(first) if min(x.neutral, x.single) > _COUNTS else math.inf
    two = atoms.equations.second
    if two is not None and atoms.second is not None and work is not None:
        conditions = two.conditions(around, x.double, x.single)
        second = two.solve(conditions)
        conditions = as_measured(conditions, scales)
        factored = factor_interior(atoms.second, conditions.radiation_temperature_k, work)
        found.append(populations(factored, second.solution.log_population, conditions))
        if min(x.double, x.single) > _COUNTS:
            slowest = min(slowest, relaxation_hubble(second))
    settling = -float(atoms.equations.rates(around, state[2:]).by_own[0, 0])
    return HeliumMoment(x, first, tuple(found), slowest, electrons, settling)


def _ground_alone(count: int, fraction: float) -> LevelPopulations:
    """Levels of helium that is held: the ground state alone is known."""
    log_population = np.full(count, -np.inf)
    log_population[0] = math.log(fraction)
    return LevelPopulations(log_population, np.full(count, np.nan), 0.0)


def helium_species(
    atoms: HeliumAtoms, ratio: float, moments: list[HeliumMoment]
) -> tuple[SpeciesPopulations, ...]:
    """Populations of He I, and of He II where it has levels, per hydrogen nucleus.

    Parameters
    ----------
    atoms : HeliumAtoms
        The atoms.
    ratio : float, dimensionless
        Helium nuclei per hydrogen nucleus.
    moments : list of HeliumMoment
        Helium at every output.
    """
    scales = atoms.equations.scales
    named: list[tuple[str, Levels]] = [("He I", scaled_levels(atoms.first.levels, scales))]
    if atoms.second is not None:
        named.append((atoms.second.species, scaled_levels(atoms.second.levels, scales)))
    made = []
    for k, (name, levels) in enumerate(named):
        log_population = np.array([one.levels[k].log_population for one in moments])
        log_population += math.log(ratio)
        known = log_population >= _SMALLEST_LOG
        population = np.where(known, np.exp(np.where(known, log_population, 0.0)), 0.0)
        departure = np.array([one.levels[k].log_departure for one in moments])
        made.append(SpeciesPopulations(name, levels, population, departure))
    return tuple(made)


def helium_figures(
    integrated: Integrated,
    atoms: HeliumAtoms,
    moments: list[HeliumMoment],
    redshift: FloatArray,
    closure: float,
) -> HeliumFigures:
    """Channels, lines and how it went; `closure` is the miss in the sums of fractions."""
    network, handover = atoms.equations.first, integrated.handover
    ratio = integrated.equations.cosmology.helium_ratio()
    flow = np.full((len(moments), len(network.reduced.kept)), np.nan)
    for k, one in enumerate(moments):
        if one.first is not None:
            flow[k] = ratio * one.first.solution.flow
    return HeliumFigures(
        _channel_names(atoms),
        flow,
        np.array([one.settling_hubble for one in moments]),
        helium_line_figures(integrated, atoms, moments, redshift),
        handover.helium_departure,
        handover.helium_ion_departure,
        atoms.nodes,
        atoms.interpolation_error,
        max(level.conservation_error for one in moments for level in one.levels),
        closure,
    )


def helium_channels(integrated: Integrated, redshift: FloatArray) -> Channels:
    """How He II reached the ground state of He I, at the outputs and added up from the hand-over.

    Parameters
    ----------
    integrated : Integrated
        A run with helium.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts.

    Returns
    -------
    Channels
        Rates per hydrogen nucleus; shares are added up over the change of x_HeI. 0 where helium is
        held.
    """
    atoms, times = integrated.helium, -np.log1p(redshift)
    assert atoms is not None
    ratio = integrated.equations.cosmology.helium_ratio()
    net = ratio * np.array([_first_flow(integrated, atoms, s, None) for s in times.tolist()])
    trajectory = integrated.trajectory
    steps = zip(trajectory.time.tolist(), trajectory.state, strict=True)
    flow = np.array([_first_flow(integrated, atoms, s, y) for s, y in steps])
    gain = [HeliumEquations.fractions(y[2:]).neutral for y in trajectory.state]
    slope = CubicSpline(trajectory.time, gain)(trajectory.time, 1)
    added = CubicSpline(trajectory.time, slope[:, None] * _shares(flow)).antiderivative()
    so_far = added(np.maximum(times, trajectory.time[0]))
    begun = (so_far.sum(axis=1) > 0.0)[:, None]
    cumulative = np.where(begun, _shares(so_far), _shares(net))
    return Channels(_channel_names(atoms), net, _shares(net), cumulative)


def _first_flow(
    integrated: Integrated, atoms: HeliumAtoms, log_scale: float, state: FloatArray | None
) -> FloatArray:
    """Net flow to the ground state of He I by channel, s^-1 per helium nucleus; 0 if held."""
    state = state_at(integrated, log_scale) if state is None else state
    around = integrated.equations.helium_around(log_scale, state)
    if atoms.equations.held(around.radiation_temperature_k):
        return np.zeros(len(atoms.first.kept_position))
    return atoms.equations.first_local(around, state[2:]).solution.flow


def _shares(flow: FloatArray) -> FloatArray:
    total = flow.sum(axis=1, keepdims=True)
    return np.asarray(np.divide(flow, total, out=np.zeros_like(flow), where=total != 0.0))


def _channel_names(atoms: HeliumAtoms) -> tuple[str, ...]:
    levels = atoms.first.levels
    return tuple(f"{levels.name(int(k))}-{levels.name(0)}" for k in atoms.first.kept_position)


def closure_error(
    equations: SlowEquations, electrons: FloatArray, hydrogen: FloatArray, helium: FloatArray
) -> float:
    """Largest miss in the sums of fractions, and in the charge over x_e.

    Parameters
    ----------
    equations : SlowEquations
        The run.
    electrons : ndarray, shape (n_redshift,), dimensionless
        x_e.
    hydrogen, helium : ndarray, shapes (2, n_redshift) and (3, n_redshift), dimensionless
        Fractions by charge, from 0.
    """
    ratio = equations.cosmology.helium_ratio()
    charge = hydrogen[1] + ratio * (helium[1] + 2.0 * helium[2])
    misses = hydrogen.sum(axis=0) - 1.0, helium.sum(axis=0) - 1.0, charge / electrons - 1.0
    return float(np.max(np.abs(misses)))
