"""Which rates an answer hangs on: the derivative of scalars by every rate at once, by an adjoint.

The history is solved once more by collocation on the steps that the integration chose. One sweep
backwards over them gives weights that turn changes of the equations at each stage into changes of
the scalar J; the reduced network enters through its values at the nodes in T_r, where each exact
reduction is differentiated in turn. What comes out is the derivative of the history as computed,
interpolation included.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..atomic.levels import level_name
from ..atomic.physics import UNCHANGED, scales
from ..background.last_scattering import ionized_redshift
from ..background.parameters import COSMOLOGICAL, helium_mass_fraction
from ..errors import InputError
from ..escape.family import treatment as member
from ..escape.resolved import ResolvedField
from ..escape.treatment import LineTreatment
from ..history.cost import check_memory
from ..history.integrate import Progress
from ..history.notes import notes_of
from ..history.outcome import outcome_of, relaxation_hubble
from ..history.setup import Setup
from ..network.assembly import Workspace
from ..network.reduction import exchange_pairs
from ..network.transitions import line_places, n_places, transitions
from ..network.weights import NodeWeights, add_node_weights
from ..numerics.collocation import adjoint
from ..numerics.threads import one_blas_thread
from ..pieces import Pieces
from .frozen import FrozenHistory, freeze
from .helium_memory import HeliumMemory, helium_stages
from .helium_weigh import Helium, weigh_helium
from .helium_weighing import over
from .scalars import Scalars, scalars_of
from .sensitivity import StageRates, hydrogen_results, line_parameters, stage_rates, stages
from .targets import Target, parse_target
from .weigh_pieces import KeptWeights
from .weighing import Weighing


class _Direct(NamedTuple):
    """Derivatives dJ by what stands outside the reduced network; n_scalars along the first axis."""

    two_photon: FloatArray
    escape: FloatArray
    compton: FloatArray
    parameter: FloatArray


def weigh(
    setup: Setup,
    targets: str | Sequence[str],
    *,
    progress: Progress | None = None,
    pieces: Pieces | None = None,
    line_treatment: LineTreatment | None = None,
) -> Weighing:
    """Weigh every rate of one history.

    Parameters
    ----------
    setup : Setup
        The history; its output redshifts do not matter, but its lowest one does (optical depths
        start there).
    targets : str or sequence of str
        Scalars J: "x_e(900)", "T_m(100)", the observables of
        :mod:`levelnet.background.last_scattering`, "optical_depth(200)", or "line(3d-2p)": net
        transitions in a line per hydrogen nucleus, summed over the history.
    progress : callable, optional
        ``progress(stage, fraction)``.
    pieces : Pieces, optional
        Store of reduced networks, as for :func:`levelnet.solve`.
    line_treatment : LineTreatment, optional
        In place of the one the setup names, as for :func:`levelnet.solve`; without memory.

    Returns
    -------
    Weighing
        d ln J / d ln R for every rate R, and for the parameters of the cosmology.

    Raises
    ------
    InputError
        For an unknown target, or one the history does not reach.
    SolveError
        If the history did not converge.

    Notes
    -----
    J is that of the collocated history; it differs from :func:`levelnet.solve` by no more than
    ``setup.accuracy.relative``. Derivatives are exact to rounding for it, first order in the
    change of a rate. Lines of He I that light one another hand weights back to the steps that they
    remember. The start in Saha equilibrium has no part in derivatives: only that of a line strength
    by the temperature of the radiation misses 1e-6 by it.

    References
    ----------
    Cacuci 1981, J. Math. Phys. 22, 2794 (adjoint sensitivities; from memory).
    """
    tell = progress or (lambda stage, fraction: None)
    if not isinstance(setup, Setup):
        raise InputError(f"setup: a Setup is needed, not {type(setup).__name__}")
    listed = [targets] if isinstance(targets, str) else list(targets)
    if not listed or not all(isinstance(text, str) for text in listed):
        raise InputError("targets: name at least one, such as x_e(900), as text")
    chosen = line_treatment or member(setup.lines.hydrogen)
    parsed = check_weighable(setup, listed, chosen)
    check_memory(setup, more_bytes=len(parsed) * bytes_per_target(setup))
    with one_blas_thread():
        history = freeze(setup, *reach(setup, parsed), tell, pieces, chosen)
        scalars = scalars_of(history, parsed)
        for target, value in zip(parsed, scalars.value.tolist(), strict=True):
            if not np.isfinite(value):
                raise InputError(f"target {target.name}: the history does not reach it")
        return _assemble(setup, history, parsed, scalars, tell, pieces)


def check_weighable(
    setup: Setup, targets: Sequence[str], chosen: LineTreatment | None = None
) -> list[Target]:
    """Read targets; InputError for what can be refused before anything is computed.

    Parameters
    ----------
    setup : Setup
        The history.
    targets : sequence of str
        As for :func:`weigh`.
    chosen : LineTreatment, optional
        That of the Lyman lines, in place of the one the setup names.
    """
    parsed = [parse_target(text) for text in targets]
    _check_constants(setup)
    _check_targets(setup, parsed)
    _check_memory_free(chosen or member(setup.lines.hydrogen))
    return parsed


def reach(
    setup: Setup, targets: Sequence[Target]
) -> tuple[list[float], tuple[tuple[int, int], ...], float]:
    """Redshifts that must be step ends, levels that must be kept, where to start at the latest."""
    redshifts = [t.redshift for t in targets if t.kind in {"x_e", "T_m"}]
    keeps = {level for t in targets if t.kind == "line" for level in (t.upper, t.lower)}
    integral = any(t.kind not in {"x_e", "T_m"} for t in targets)
    # Integrals start where everything is ionized, and the history with them.
    ionized = ionized_redshift(setup.cosmology, setup.helium_recombines)
    return redshifts, tuple(sorted(keeps - {(1, 0)})), ionized if integral else 0.0


def bytes_per_target(setup: Setup) -> float:
    """Memory that the derivatives of one target take: one of each line, twice for a while."""
    top, highest = setup.hydrogen.highest_resolved, setup.hydrogen.n_max
    shells, helium = highest - top, setup.helium.n_max if setup.helium_recombines else 0
    # Singlets and triplets of He I, and He II.
    rates = top**3 / 3.0 + shells * top**2 / 2.0 + shells**2 + helium**3
    return 2.0 * 8.0 * rates


def _check_constants(setup: Setup) -> None:
    if setup.helium_recombines and scales(setup.physics, charge=2) != UNCHANGED:
        raise InputError(
            "[physics]: with levels of helium a weighing takes the measured constants; "
            "set helium.n_max = 0 to weigh hydrogen alone"
        )


def _check_memory_free(chosen: LineTreatment) -> None:
    if getattr(chosen, "sees_blue_side", False) or isinstance(chosen, ResolvedField):
        raise InputError(
            f'lines.hydrogen = "{chosen.name}": a weighing has no memory of the field; '
            'weigh with "sobolev"'
        )


def _check_targets(setup: Setup, targets: Sequence[Target]) -> None:
    """Raise InputError for what the atom has not, photons that stay, and integrals of nothing."""
    top, lyman = setup.hydrogen.highest_resolved, setup.atom_size.lyman_lines
    end = setup.grid.redshift_end
    for target in targets:
        if target.kind == "optical_depth" and target.redshift <= end:
            raise InputError(
                f"target {target.name}: the optical depth starts at grid.redshift_end = {end:g}; "
                "give a redshift above it"
            )
        if target.kind != "line":
            continue
        if target.upper[0] > top:
            raise InputError(
                f"target {target.name}: the atom has levels resolved in l up to n = {top} only"
            )
        if target.lower == (1, 0) and target.upper[1] == 1 and target.upper[0] > lyman + 1:
            raise InputError(
                f"target {target.name}: that line is closed; lines.lyman_lines = {lyman} opens "
                f"those up to {level_name(lyman + 1, 1)}-1s"
            )


def _assemble(
    setup: Setup,
    history: FrozenHistory,
    targets: Sequence[Target],
    scalars: Scalars,
    tell: Progress,
    pieces: Pieces | None,
) -> Weighing:
    ladder = history.integrated.ladder
    flat, helium = _adjoint(history, scalars, tell)
    rates = stage_rates(history)
    direct = _direct(history, scalars, flat, rates)
    if helium is not None:
        direct.parameter[...] += helium.parameter
    by_rate = _by_rates(history, scalars, flat[:, :, 0], rates.scale, tell, pieces)
    found = transitions(ladder)
    value = scalars.value
    names, places, by_log = _parameters(history)
    parameter = direct.parameter[:, places] * by_log / value[:, None]
    slow = (relaxation_hubble(one.local) for one in stages(history))
    return Weighing(
        setup,
        outcome_of(setup, history.integrated, slow),
        tuple(t.name for t in targets),
        tuple(t.unit for t in targets),
        value,
        ladder.levels,
        found.upper,
        found.lower,
        history.equations.lines.names,
        ladder.kept_position[history.equations.lines.upper],
        tuple(names),
        by_rate.bound_bound[:, found.place] / value[:, None],
        by_rate.bound_free / value[:, None],
        direct.escape / value[:, None],
        direct.two_photon / value,
        direct.compton / value,
        parameter,
        None if helium is None else over(helium.weights, value),
        None if helium is None else over(helium.ion, value),
        notes=notes_of(setup, history.equations.treatment),
    )


def _adjoint(
    history: FrozenHistory, scalars: Scalars, tell: Progress
) -> tuple[FloatArray, Helium | None]:
    """Weights of the rates of change, shape (n_scalars, n_points, n), and what helium adds."""
    count, n_states = len(scalars.value), history.solution.start.size
    if history.equations.helium is None:
        weight, _ = adjoint(history.solution, scalars.by_state)
        return weight.reshape(count, -1, n_states), None
    along = helium_stages(history)
    memory = HeliumMemory.of(history, along, count)
    weight, _ = adjoint(history.solution, scalars.by_state, memory)
    flat = weight.reshape(count, -1, n_states)
    return flat, weigh_helium(history, along, memory, flat, tell)


def _direct(
    history: FrozenHistory, scalars: Scalars, weight: FloatArray, rates: StageRates
) -> _Direct:
    by_u, by_v = weight[:, :, 0], weight[:, :, 1]
    made = _Direct(
        by_u @ rates.two_photon,
        by_u @ rates.escape,
        by_v @ rates.compton,
        np.einsum("spx,pxq->sq", weight[:, :, :2], rates.parameter) + scalars.by_parameter,
    )
    for line in scalars.lines:
        channels = np.array([one.channel for one in line.gradient])
        own = line.weight @ channels
        made.two_photon[line.scalar] += own[0]
        made.escape[line.scalar] += own[history.equations.lines.upper]
        made.parameter[line.scalar] += line_parameters(history, line)
    return made


def _by_rates(
    history: FrozenHistory,
    scalars: Scalars,
    weight: FloatArray,
    scale: FloatArray,
    tell: Progress,
    pieces: Pieces | None,
) -> NodeWeights:
    """DJ by the ln of every line strength and cross section; `scale` is that of the stages."""
    here = stages(history)
    sources = [hydrogen_results(history, weight * scale, [one.gradient for one in here])]
    for line in scalars.lines:
        own = np.zeros_like(weight)
        own[line.scalar] = line.weight
        sources.append(hydrogen_results(history, own, line.gradient))
    by_result = np.sum([source.by_result for source in sources], axis=0)
    ladder = history.integrated.ladder
    total = NodeWeights(
        np.zeros((len(weight), n_places(ladder))),
        np.zeros((len(weight), len(ladder.levels))),
    )
    pairs, work = exchange_pairs(ladder), Workspace.of(ladder)
    temperatures = sources[0].temperature_k.tolist()
    kept = KeptWeights(pieces, history.setup, sources[0].temperature_k, by_result, total)
    for count, temperature_k in enumerate(temperatures):
        if count >= kept.done and np.any(by_result[count]):
            add_node_weights(ladder, pairs, temperature_k, by_result[count], total, work)
            kept.note(count + 1)
        tell("weighing rates", (count + 1) / len(temperatures))
    for line in scalars.lines:
        if line.ends is not None:
            upper, lower = line.ends
            place = line_places(ladder, upper, ladder.kept_position[[lower]])
            total.bound_bound[line.scalar, place] += scalars.value[line.scalar]
    return total


def _parameters(history: FrozenHistory) -> tuple[list[str], list[int], FloatArray]:
    """Names as in the setup, places among `COSMOLOGICAL`, and dp/d ln (what is named).

    Parameters that are 0 have no logarithm and are left out.
    """
    cosmology = history.setup.cosmology
    mass = helium_mass_fraction(cosmology)
    values = {name: getattr(cosmology, name) for name in COSMOLOGICAL}
    names, by_log = list(COSMOLOGICAL), values | {"helium_mass_fraction": mass}
    nucleon = cosmology.helium_nucleon_fraction
    if nucleon is not None:
        at = names.index("helium_mass_fraction")
        names[at] = "helium_nucleon_fraction"
        # Both are monotonic in f_He: d ln f_He is d ln Y/(1 - Y) for either.
        by_log["helium_mass_fraction"] = mass * (1.0 - mass) / (1.0 - nucleon)
    places = [k for k, name in enumerate(COSMOLOGICAL) if by_log[name] != 0.0]
    slopes = np.array([by_log[COSMOLOGICAL[k]] for k in places])
    return [names[k] for k in places], places, slopes
