"""The one integration: from a setup to its slow variables."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from ..arrays import FloatArray
from ..atomic.physics import scales
from ..errors import InputError, SolveError
from ..escape.blue_side import Past
from ..escape.family import treatment as member
from ..escape.resolved import ResolvedField
from ..escape.treatment import LineTreatment
from ..network.ladder import Ladder
from ..network.reduced import Reduced
from ..network.scaled import with_scales
from ..network.tabulation import TabulatedReduction, live_reduction, node_count, tabulate
from ..numerics.stepping import Trajectory, integrate
from ..pieces import Pieces, code_digest
from .atom import build_ladder, open_lyman_lines, resonance_lines
from .cost import lattice_below_k, table_tolerance
from .course import Course
from .equations import SlowEquations
from .field import FieldRun, resolve_field
from .frame import frame_of
from .helium import HeliumEquations
from .helium_atom import HeliumAtoms, Recall, build_helium, recall_from
from .setup import Setup
from .start import Handover, equilibrium_state, find_handover, hydrogen_handover

Progress = Callable[[str, float], None]

# Local error allowed in one step over the error asked of the whole. The equations forget, so local
# errors hardly add up: with 1.0 the neutral fraction was measured to 0.6 and x_e to 0.03 of what is
# asked.
_LOCAL = 0.5
# The same with helium, of ln(x_HII/x_HI), ln(T_m/T_r) and the two of helium: fractions above 1e-9
# were measured to 0.5 of what is asked, x_e to 0.02.
_LOCAL_PLASMA = 1.5, 0.5, 1.5, 1.0
# A bend of the frame (20 of curvature) inside a step, so close to its end, is worth 1e-11.
_SLIVER = 1e-6
# The logarithm of a rare ion may err by more, but by no more than this in a step.
_LOOSEST = 1e-3
# A march with a field, which takes equal steps, starts where the lag is so small; the reference
# that tells it T_m is integrated to this accuracy.
_FIELD_LAG, _REFERENCE = 1e-5, 1e-5
# It goes at least so far in ln a, wherever the outputs lie, and samples the interior so far beyond
# its end: more than a few of the widest steps.
_SHORTEST_MARCH, _BEYOND = 0.1, 0.05
# Size of the atom that finds the hand-over: it depends on the lowest levels only.
_SCOUT_N = 6


@dataclass(frozen=True, slots=True, eq=False)
class Integrated(Course):
    """The slow variables of one run, before populations are worked out.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    redshift : ndarray, shape (n_redshift,)
        Output redshifts, descending.
    measured : Reduced
        The reduced network with the measured constants; `equations` holds it with the setup's.
    field : FieldRun or None
        The march behind it, where the treatment resolves the field.
    helium : HeliumAtoms or None
        Helium, where it recombines.
    """

    ladder: Ladder
    redshift: FloatArray
    measured: Reduced
    field: FieldRun | None = None
    helium: HeliumAtoms | None = None


def integrate_history(
    setup: Setup,
    tell: Progress,
    pieces: Pieces | None = None,
    line_treatment: LineTreatment | None = None,
    *,
    keeps: tuple[tuple[int, int], ...] = (),
    start_above: float = 0.0,
) -> Integrated:
    """Integrate the slow variables of one run.

    Parameters
    ----------
    setup, tell, pieces, line_treatment
        As for :func:`levelnet.solve`.
    keeps : tuple of (n, l)
        Levels to keep from elimination besides those that the lines need.
    start_above : float, dimensionless
        A redshift above which the integration must start, though Saha equilibrium ends lower; a
        resolved field starts lower still, and the network is known up to here.
    """
    tell("atomic data", 0.0)
    chosen = line_treatment or member(setup.lines.hydrogen)
    resolved = isinstance(chosen, ResolvedField)
    if resolved != (setup.lines.transfer is not None):
        raise InputError(
            'line_treatment: lines.hydrogen = "transfer" goes with the field resolved in frequency '
            "alone, and that with no other; give the setup another treatment"
        )
    redshift = output_redshifts(setup)
    atoms = None
    if setup.helium_recombines:
        highest = max(float(redshift[0]), start_above)
        hottest_k = float(setup.cosmology.radiation_temperature_k(highest))
        atoms = build_helium(setup, hottest_k, tell, pieces)
    helium = None if atoms is None else atoms.equations
    scout = _scout(setup, chosen, helium)
    handover = handover_of(setup, scout)
    begin = handover_of_field(setup, scout) if resolved else handover
    if start_above > handover.redshift and not resolved:
        handover = replace(handover, redshift=start_above)
    ladder = build_ladder(setup, keeps=(*chosen.keeps, *setup.lines.field_levels, *keeps))
    factor = scales(setup.physics)
    reduced: Reduced = live_reduction(ladder)
    if setup.accuracy.interpolate:
        low, high = redshift[-1], max(redshift[0], handover.redshift, start_above)
        if resolved:
            low = _later(_march_redshifts(begin, redshift)[-1], _BEYOND)
        span = min(low, handover.redshift), high
        reduced = _table(setup, ladder, span, tell, pieces)
    equations = slow_equations(setup, with_scales(reduced, factor), chosen, helium)
    if resolved:
        run = march_field(setup, equations, (handover, begin), redshift, tell, pieces)
        found = run.equations, handover, run.trajectory, ladder, redshift, reduced, run
        return Integrated(*found, helium=atoms)
    trajectory = integrate_slow(setup, equations, handover, redshift, tell)
    return Integrated(equations, handover, trajectory, ladder, redshift, reduced, helium=atoms)


def setup_handover(setup: Setup, chosen: LineTreatment | None = None) -> Handover:
    """Where a run of hydrogen starts."""
    return handover_of(setup, _scout(setup, chosen, None))


def _scout(
    setup: Setup, chosen: LineTreatment | None, helium: HeliumEquations | None
) -> SlowEquations:
    """Equations with a small atom, to find hand-overs: only the lowest levels matter there."""
    keeps = () if chosen is None else chosen.keeps
    scout = build_ladder(setup, min(setup.hydrogen.n_max, _SCOUT_N), keeps)
    reduced = with_scales(live_reduction(scout), scales(setup.physics))
    return slow_equations(setup, reduced, chosen, helium)


def handover_of(setup: Setup, equations: SlowEquations) -> Handover:
    """Where a run with these equations starts."""
    if isinstance(equations.treatment, ResolvedField) and equations.helium is None:
        return handover_of_field(setup, equations)
    return find_handover(equations, 0.1 * setup.accuracy.relative)


def march_field(
    setup: Setup,
    equations: SlowEquations,
    handovers: tuple[Handover, Handover],
    redshift: FloatArray,
    tell: Progress,
    pieces: Pieces | None = None,
) -> FieldRun:
    """Integrate with the field: first without it, to know T_m, then everything together.

    Parameters
    ----------
    setup, equations, handovers
        The run, its equations while the field is a blackbody, where it starts, and where the field
        begins: there too, but with helium later.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending.
    tell : callable
        Progress.
    pieces : Pieces, optional
        Where stretches of a long march are kept, so that one that was killed goes on.

    Raises
    ------
    SolveError
        If the integration without the field, or the march, cannot be done.
    """
    handover, begin = handovers
    # Helium's electrons come from the reference, so that it has to be as good as the march.
    least = setup.accuracy.relative if equations.helium is not None else _REFERENCE
    relative = max(setup.accuracy.relative, least)
    redshift = _march_redshifts(begin, redshift)
    ends = np.union1d(redshift, [begin.redshift])[::-1]
    reference = integrate_slow(setup, equations, handover, ends, lambda *_: None, relative)
    if not reference.outcome.ok:
        raise SolveError(reference.outcome.value, outcome=reference.outcome)
    tell("radiation field", 0.0)
    first = int(np.argmin(np.abs(reference.time + math.log1p(begin.redshift))))
    later = replace(reference, time=reference.time[first:], state=reference.state[first:])
    run = resolve_field(
        setup, equations, later, redshift, pieces, lambda done: tell("radiation field", done)
    )
    before = reference.time[:first], reference.state[:first]
    whole = replace(
        run.trajectory,
        time=np.concatenate([before[0], run.trajectory.time]),
        state=np.concatenate([before[1], run.trajectory.state]),
    )
    return run._replace(trajectory=whole)


def handover_of_field(setup: Setup, equations: SlowEquations) -> Handover:
    """Where a resolved field begins; helium has recombined in part by then."""
    return hydrogen_handover(equations, max(0.1 * setup.accuracy.relative, _FIELD_LAG))


def _march_redshifts(handover: Handover, redshift: FloatArray) -> FloatArray:
    """Output redshifts, and one more where they would leave a march too short."""
    least = _later(handover.redshift, _SHORTEST_MARCH)
    return redshift if redshift[-1] <= least else np.append(redshift, least)


def _later(redshift: float, log_growth: float) -> float:
    """Redshift when the universe has grown by a factor exp(log_growth)."""
    return math.expm1(math.log1p(redshift) - log_growth)


def slow_equations(
    setup: Setup,
    reduced: Reduced,
    chosen: LineTreatment | None = None,
    helium: HeliumEquations | None = None,
) -> SlowEquations:
    """Equations of a setup on a reduced network that already has the setup's constants.

    Parameters
    ----------
    setup : Setup
        Cosmology, lines, two-photon channel, constants, overridden rates.
    reduced : Reduced
        The interior of the atom; only the setup's open Lyman lines are used of its np levels.
    chosen : LineTreatment, optional
        In place of the one the setup names.
    helium : HeliumEquations, optional
        Where helium recombines.
    """
    factor = scales(setup.physics)
    lines = resonance_lines(reduced.kept, open_lyman_lines(setup), factor, setup.rates.network)
    treatment = chosen or member(setup.lines.hydrogen)
    remembers = getattr(treatment, "sees_blue_side", False)
    return SlowEquations(
        setup.cosmology,
        reduced,
        lines,
        treatment,
        setup.two_photon_rate_per_s * factor.two_photon_rate,
        # The field absorbs what it has of 1s -> 2s: nothing, while it is a blackbody.
        "stimulated" if setup.lines.two_photon == "distorted" else setup.lines.two_photon,
        replace(factor, compton_rate=factor.compton_rate * setup.rates.compton_factor),
        setup.rates.escape_factors(reduced.kept.n[lines.upper]),
        Past.of(lines.energy_ev) if remembers else None,
        helium,
    )


def output_redshifts(setup: Setup) -> FloatArray:
    """Output redshifts, descending."""
    grid = setup.grid
    if grid.redshifts is not None:
        return np.array(sorted(set(grid.redshifts), reverse=True))
    ends = math.log1p(grid.redshift_start), math.log1p(grid.redshift_end)
    redshift = np.expm1(np.linspace(*ends, grid.n_redshifts))
    redshift[[0, -1]] = grid.redshift_start, grid.redshift_end
    return redshift


def _table(
    setup: Setup,
    ladder: Ladder,
    span: tuple[float, float],
    tell: Progress,
    pieces: Pieces | None,
) -> TabulatedReduction:
    """Reduce the network over the whole range of T_r of the run, from store where it can."""
    unit = scales(setup.physics).energy
    low, high = (setup.cosmology.radiation_temperature_k(float(z)) / unit for z in span)
    # Outwards to a lattice, so that runs of one atom share their nodes whatever the universe.
    low_k = lattice_below_k(float(low))
    high_k = 2.0 ** (math.ceil(4.0 * math.log2(float(high))) / 4.0)
    tolerance = table_tolerance(setup)
    expected = node_count(low_k, high_k, tolerance) + 7
    done = 0

    def on_node() -> None:
        nonlocal done
        done += 1
        tell("reducing the network", min(1.0, done / expected))

    return tabulate(ladder, low_k, high_k, tolerance, on_node, _recall(setup, ladder, pieces))


def _recall(setup: Setup, ladder: Ladder, pieces: Pieces | None) -> Recall | None:
    return recall_from(
        pieces,
        "reduction",
        code_digest(("constants", "kernels", "numerics", "atomic", "network")),
        ladder.species,
        ladder.charge,
        ladder.n_max,
        ladder.resolve_l_to,
        setup.hydrogen.energies,
        *ladder.kept.n.tolist(),
        *ladder.kept.l.tolist(),
        *(one.key for one in setup.rates.network),
    )


def _apart(time: float, outputs: list[float]) -> bool:
    """Whether a step that ends here leaves no sliver before an output."""
    return min(abs(time - one) for one in outputs) > _SLIVER


def integrate_slow(
    setup: Setup,
    equations: SlowEquations,
    handover: Handover,
    redshift: FloatArray,
    tell: Progress,
    relative: float | None = None,
) -> Trajectory:
    """Integrate from the hand-over to the last output; `relative` in place of the setup's."""
    start = -math.log1p(handover.redshift)
    state, _ = equilibrium_state(equations, start)
    outputs = [s for s in (-np.log1p(redshift)).tolist() if s > start]
    last = max(outputs, default=start)
    span = last - start if outputs else 1.0
    frame = frame_of(equations)

    def on_step(now: float, reached: FloatArray) -> None:
        equations.remember(now, reached + frame.origin(now))
        tell("integrating", (now - start) / span)

    equations.remember(start, state)

    asked = relative or setup.accuracy.relative

    def local_error(now: float, reached: FloatArray) -> FloatArray:
        if equations.helium is None:
            return np.full(len(reached), _LOCAL * asked)
        slack = equations.helium.slack((reached + frame.origin(now))[2:])
        local = asked * np.array(_LOCAL_PLASMA)
        local[2:] = np.maximum(local[2:], np.minimum(slack * local[2:], _LOOSEST))
        return local

    found = integrate(
        frame.rate(equations.rate),
        frame.linearize(equations.slopes),
        start,
        state - frame.origin(start),
        sorted([*outputs, *(s for s in frame.breaks(start, last) if _apart(s, outputs))]),
        local_error,
        first_step=1e-3,
        max_steps=setup.accuracy.max_steps,
        on_step=on_step,
        longest_step=equations.longest_step,
    )
    return frame.absolute(found)
