"""From integrated slow variables to a History: populations, channels, line figures, observables."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..atomic.levels import level_name
from ..background.conditions import Conditions
from ..background.quadrature import quadrature
from ..background.scattering import opacity_per_mpc
from ..errors import SolveError
from ..network.assembly import (
    FactoredInterior,
    Workspace,
    factor_interior,
    interior_photoionization,
)
from ..network.populations import LevelPopulations, populations
from ..network.scaled import as_measured, scaled_levels
from ..network.tabulation import TabulatedReduction
from ..numerics.stepping import Trajectory
from ..pieces import Pieces
from .course import electron_fraction_at, state_at
from .equations import ionized_and_neutral
from .helium_limits import helium_limit_notes
from .helium_moment import HeliumMoment
from .helium_outputs import (
    closure_error,
    helium_figures,
    helium_moments,
    helium_species,
)
from .integrate import Integrated, Progress
from .level_pieces import KeptLevels, LevelsAt
from .limits import field_notes, limit_notes
from .local import Local
from .notes import notes_of
from .observables import milestones, optical_depth
from .outcome import outcome_of, relaxation_hubble
from .result import (
    Channels,
    Diagnostics,
    History,
    Milestones,
    SpeciesPopulations,
)
from .setup import Setup
from .start import COLDEST_K, equilibrium_state
from .validity import Steps, line_figures, steps_of

_SMALLEST_LOG = math.log(1e-300)
_HELIUM = ("neutral", "singly_ionized", "doubly_ionized")


class _Output(NamedTuple):
    """Everything at one output redshift."""

    local: Local
    levels: LevelPopulations
    lost_per_s: FloatArray
    relaxation_hubble: float


def assemble_history(
    setup: Setup, integrated: Integrated, tell: Progress, pieces: Pieces | None = None
) -> History:
    """Work out all that was asked from the slow variables, and what to know about it.

    Where the integration ended early the history ends there, with the outcome saying why.
    """
    trajectory = integrated.trajectory
    reached = -np.log1p(integrated.redshift) <= trajectory.time[-1] + 1e-12
    reached |= integrated.redshift >= integrated.handover.redshift
    redshift = integrated.redshift[reached]
    if not len(redshift):
        raise SolveError(trajectory.outcome.value, outcome=trajectory.outcome)
    kept = KeptLevels(setup, len(redshift), pieces)
    outputs = _outputs(integrated, redshift, kept, tell)
    moments = helium_moments(integrated, redshift)
    every = [one.relaxation_hubble for one in outputs]
    slowest = min([*every, *(one.relaxation_hubble for one in moments)], default=math.inf)
    outcome = outcome_of(setup, integrated, [slowest])
    conditions = [o.local.conditions for o in outputs]
    arrays, marks = history_arrays(setup, integrated, redshift, conditions, moments)
    electron_fraction = arrays["free_electron_fraction"]
    ground = arrays["neutral_hydrogen_fraction"]
    steps = steps_of(integrated)
    figures = line_figures(
        integrated, steps, redshift, [o.local for o in outputs], [o.lost_per_s for o in outputs]
    )
    chosen = integrated.equations.treatment
    warnings = limit_notes(redshift, ground / electron_fraction, figures, chosen)
    if integrated.field is not None:
        warnings += field_notes(integrated.field.frequency_step, integrated.field.frequency_error)
    species: tuple[SpeciesPopulations, ...] = (_species(integrated, outputs),)
    figures_of_helium, atoms = None, integrated.helium
    if atoms is not None:
        species += helium_species(atoms, setup.cosmology.helium_ratio(), moments)
        hydrogen = np.array([ground, arrays["ionized_hydrogen_fraction"]])
        helium = np.array([arrays[f"{name}_helium_fraction"] for name in _HELIUM])
        closure = closure_error(integrated.equations, electron_fraction, hydrogen, helium)
        figures_of_helium = helium_figures(integrated, atoms, moments, redshift, closure)
        treatment = atoms.equations.first.treatment
        warnings += helium_limit_notes(redshift, figures_of_helium.lines, treatment)
    return History(
        setup,
        outcome,
        redshift,
        **arrays,
        species=species,
        channels=channels(
            integrated,
            steps,
            redshift,
            np.array([o.local.solution.flow for o in outputs]),
            setup.accuracy.relative,
        ),
        lines=figures,
        milestones=marks,
        diagnostics=_diagnostics(integrated, outputs, slowest),
        notes=notes_of(setup, chosen, warnings),
        field=None if integrated.field is None else integrated.field.field,
        helium=figures_of_helium,
    )


def history_arrays(
    setup: Setup,
    integrated: Integrated,
    redshift: FloatArray,
    conditions: list[Conditions],
    moments: list[HeliumMoment],
) -> tuple[dict[str, FloatArray], Milestones]:
    """All arrays of a history over redshift, by their names there, and its milestones.

    Parameters
    ----------
    setup, integrated
        The run.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Outputs that were reached.
    conditions : list of Conditions, length n_redshift
        At these.
    moments : list of HeliumMoment
        Helium at these; empty where it is inert.
    """
    electron_fraction = np.array([c.electron_fraction for c in conditions])
    hydrogen_cm3 = np.array([c.hydrogen_density_cm3 for c in conditions])
    depth, visibility, marks = _seen(integrated, redshift, hydrogen_cm3 * electron_fraction)
    helium = _helium_fractions(moments, len(redshift))
    arrays = {
        "free_electron_fraction": electron_fraction,
        "ionized_hydrogen_fraction": np.array([c.ionized_fraction for c in conditions]),
        "neutral_hydrogen_fraction": np.array([c.ground_fraction for c in conditions]),
        **{f"{name}_helium_fraction": helium[k] for k, name in enumerate(_HELIUM)},
        "matter_temperature_k": np.array([c.matter_temperature_k for c in conditions]),
        "radiation_temperature_k": np.array([c.radiation_temperature_k for c in conditions]),
        "hydrogen_density_cm3": hydrogen_cm3,
        "hubble_rate_per_s": np.array([c.hubble_rate_per_s for c in conditions]),
        "cosmic_time_s": np.asarray(setup.cosmology.cosmic_time_s(redshift)),
        "optical_depth": depth,
        "visibility": visibility,
    }
    return arrays, marks


def _helium_fractions(moments: list[HeliumMoment], count: int) -> FloatArray:
    """Neutral, singly and doubly ionized part of the helium nuclei, shape (3, count)."""
    if moments:
        return np.array([one.fractions[:3] for one in moments]).T
    return np.array([np.ones(count), np.zeros(count), np.zeros(count)])


def _outputs(
    integrated: Integrated, redshift: FloatArray, kept: KeptLevels, tell: Progress
) -> list[_Output]:
    work = Workspace.of(integrated.ladder)
    found = []
    for k, z in enumerate(redshift.tolist()):
        local = local_at(integrated, z)
        levels, lost_per_s = kept.at(z, partial(_levels_at, integrated, local, work))
        found.append(_Output(local, levels, lost_per_s, relaxation_hubble(local)))
        tell("level populations", (k + 1) / len(redshift))
    return found


def _levels_at(integrated: Integrated, local: Local, work: Workspace) -> LevelsAt:
    factored, levels = _solved(integrated, local, work)
    return LevelsAt(levels, _lost_per_s(factored))


def local_at(integrated: Integrated, redshift: float) -> Local:
    """Kept levels at one output redshift."""
    log_scale = -math.log1p(redshift)
    return integrated.equations.local(log_scale, state_at(integrated, log_scale))


def solve_levels(
    integrated: Integrated, redshift: float, work: Workspace
) -> tuple[Local, FactoredInterior, LevelPopulations]:
    """Kept levels, factored interior and populations of every level at one output redshift."""
    local = local_at(integrated, redshift)
    return local, *_solved(integrated, local, work)


def _solved(
    integrated: Integrated, local: Local, work: Workspace
) -> tuple[FactoredInterior, LevelPopulations]:
    measured = as_measured(local.conditions, integrated.equations.scales)
    factored = factor_interior(integrated.ladder, measured.radiation_temperature_k, work)
    return factored, populations(factored, local.solution.log_population, measured)


def _seen(
    integrated: Integrated, redshift: FloatArray, electrons_cm3: FloatArray
) -> tuple[FloatArray, FloatArray, Milestones]:
    """Optical depth, visibility in Mpc^-1, and the milestones of the whole range."""
    equations = integrated.equations
    cosmology, thomson = equations.cosmology, equations.scales.thomson
    depth, marks = np.zeros(len(redshift)), Milestones(*(math.nan,) * 6)
    start = max(integrated.handover.redshift, float(redshift[0]))
    if start > redshift[-1]:  # not where the run ended before anything happened
        grid = quadrature(cosmology, -math.log1p(start), -math.log1p(float(redshift[-1])))
        electrons = electron_fraction_at(integrated, grid.points)
        depth = optical_depth(cosmology, grid, electrons, redshift, thomson)
        marks = milestones(cosmology, grid, electrons, thomson)
    visibility = opacity_per_mpc(electrons_cm3, 1.0 + redshift, thomson) * np.exp(-depth)
    return depth, visibility, marks


def _species(integrated: Integrated, outputs: list[_Output]) -> SpeciesPopulations:
    log_population = np.array([o.levels.log_population for o in outputs])
    population = np.where(log_population < _SMALLEST_LOG, 0.0, np.exp(log_population))
    log_departure = np.array([o.levels.log_departure for o in outputs])
    ladder = integrated.ladder
    levels = scaled_levels(ladder.levels, integrated.equations.scales)
    return SpeciesPopulations(ladder.species, levels, population, log_departure)


def channels(
    integrated: Integrated, steps: Steps, redshift: FloatArray, net: FloatArray, relative: float
) -> Channels:
    """Channels from the net flows to the ground state, shape (n_redshift, n_kept), s^-1."""
    kept = integrated.ladder.kept
    levels = zip(kept.n.tolist(), kept.l.tolist(), strict=True)
    names = tuple(f"{level_name(n, l)}-1s" for n, l in levels)
    share = net / net.sum(axis=1, keepdims=True)
    cumulative = _cumulative(integrated.trajectory, steps.share)(-np.log1p(redshift))
    total = cumulative.sum(axis=1, keepdims=True)
    # At the hand-over nothing has been added up yet: the share of that moment stands in.
    begun = total > 0.0
    cumulative = np.where(begun, cumulative / np.where(begun, total, 1.0), share)
    quiet = _outputs_in_equilibrium(integrated, redshift, relative)
    share[:quiet] = cumulative[:quiet] = np.nan
    return Channels(names, net, share, cumulative)


def _outputs_in_equilibrium(integrated: Integrated, redshift: FloatArray, relative: float) -> int:
    """How many outputs, from the first, lie where hydrogen is in Saha equilibrium.

    There its lag behind the expansion is below a tenth of what is asked of x_e, and the net flow to
    the ground state, the difference of two flows that are equal, is zero to rounding and tolerance.
    """
    kelvin = integrated.equations.cosmology.radiation_temperature_k(redshift)
    low, high = 0, int(np.sum(kelvin >= COLDEST_K))
    while low < high:
        middle = (low + high) // 2
        lag = equilibrium_state(integrated.equations, -math.log1p(float(redshift[middle])))[1]
        low, high = (middle + 1, high) if abs(lag) < 0.1 * relative else (low, middle)
    return low


def _cumulative(trajectory: Trajectory, share: FloatArray) -> Callable[[FloatArray], FloatArray]:
    """Net recombinations per hydrogen nucleus since the hand-over, by channel, over ln a.

    The share of each channel is integrated over the change of x_HI: early on, where the equations
    are stiff, the net flow itself holds the local error times the relaxation rate.
    """
    if len(trajectory.time) < 2:
        return lambda s: np.zeros((len(s), share.shape[1]))
    neutral = np.array([ionized_and_neutral(u)[1] for u in trajectory.state[:, 0].tolist()])
    gain = CubicSpline(trajectory.time, neutral).derivative()(trajectory.time)
    total = CubicSpline(trajectory.time, gain[:, None] * share).antiderivative()
    return lambda s: np.asarray(total(np.maximum(s, trajectory.time[0])))


def _lost_per_s(factored: FactoredInterior) -> FloatArray:
    """Rate at which each kept level goes anywhere but to the ground state, s^-1."""
    ladder = factored.ladder
    lines = np.array([np.exp(one.log_out).sum() for one in factored.kept_lines])
    photo = interior_photoionization(ladder, factored.radiation_temperature_k)
    return np.asarray(lines + photo[ladder.kept_position])


def _diagnostics(integrated: Integrated, outputs: list[_Output], slowest: float) -> Diagnostics:
    trajectory, reduced = integrated.trajectory, integrated.measured
    nodes, error = 0, 0.0
    if isinstance(reduced, TabulatedReduction):
        nodes, error = reduced.n_nodes, reduced.interpolation_error
    return Diagnostics(
        integrated.handover.redshift,
        integrated.handover.departure,
        len(trajectory.time) - 1 if integrated.field is None else integrated.field.steps,
        trajectory.rejected,
        trajectory.evaluations,
        nodes,
        error,
        max((o.levels.conservation_error for o in outputs), default=0.0),
        slowest,
        **_field_figures(integrated),
    )


def _field_figures(integrated: Integrated) -> dict[str, float]:
    run = integrated.field
    names = "photon_number_error", "atom_number_error", "frequency_step", "frequency_error"
    return {} if run is None else {name: getattr(run, name) for name in names}
