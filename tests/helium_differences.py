"""Scalars of a frozen history with helium and one rate changed, to hold a weighing."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np

from levelnet.arrays import FloatArray, IntArray
from levelnet.atomic.helium_transitions import helium_places, with_factors
from levelnet.atomic.helium_widths import other_decays
from levelnet.escape.helium_lines import HeliumGroundLines, with_strengths
from levelnet.escape.helium_past import HeliumPast
from levelnet.history.helium import HeliumEquations
from levelnet.history.setup import Setup
from levelnet.network.helium import HeliumLadders, HeliumReduction, reduce_helium
from levelnet.numerics.chebyshev import ChebyshevSeries
from levelnet.studies.frozen import FrozenHistory, freeze, on_steps
from levelnet.studies.scalars import scalars_of
from levelnet.studies.targets import parse_target
from levelnet.studies.weigh import reach
from tests.frozen_differences import tabulated_again, with_cross_sections
from tests.frozen_differences import with_strengths as with_ladder_strengths
from tests.small_helium import helium_setup

TARGETS = ("x_e(2300)", "x_e(1800)", "T_m(1700)")
PARSED = [parse_target(name) for name in TARGETS]
GRID = {"redshift_start": 2600.0, "redshift_end": 1700.0, "redshifts": (2600.0, 1700.0)}
LINES: dict[str, dict[str, Any]] = {
    "sobolev": {"helium": "sobolev"},
    "continuum": {
        "helium": "continuum",
        "helium_continuum": {"redistribution": "partial", "feedback": True},
    },
    "feedback": {"helium": "sobolev_feedback", "helium_higher_lines": "feedback"},
    "complete": {
        "helium": "continuum",
        "helium_continuum": {"redistribution": "complete", "feedback": True},
    },
}


def lit_setup(kind: str, n_max: int = 3, relative: float = 1e-4, **parts: Any) -> Setup:
    """Setup of a short history through the recombination of He II to He I."""
    chosen = {"grid": GRID, "lines": LINES[kind]} | parts
    return helium_setup(n_max, relative, **chosen)


@lru_cache(maxsize=2)
def frozen_helium(kind: str) -> FrozenHistory:
    """One on frozen steps."""
    setup = lit_setup(kind)
    return freeze(setup, *reach(setup, PARSED), lambda stage, fraction: None)


def helium_strengths(ladders: HeliumLadders, place: IntArray, factor: float) -> HeliumLadders:
    """He I with some line strengths changed."""
    by_place = np.ones(helium_places(ladders.lines))
    by_place[place] = factor
    return dataclasses.replace(ladders, lines=with_factors(ladders.lines, by_place))


def helium_cross_sections(ladders: HeliumLadders, levels: IntArray, factor: float) -> HeliumLadders:
    """He I with some cross sections changed."""
    sigma = ladders.bound_free.cross_section_cm2.copy()
    sigma[levels] *= factor
    changed = dataclasses.replace(ladders.bound_free, cross_section_cm2=sigma)
    return dataclasses.replace(ladders, bound_free=changed)


def with_ladders(helium: HeliumEquations, ladders: HeliumLadders) -> HeliumEquations:
    """The same nodes, and widths of the lines to the ground state, with another atom."""
    first = helium.first
    table, lines = first.reduced, first.lines
    assert isinstance(table, HeliumReduction) and isinstance(lines, HeliumGroundLines)
    values = np.array([reduce_helium(ladders, k) for k in np.exp(table.series.nodes).tolist()])
    series = ChebyshevSeries.fit(table.series.low, table.series.high, values)
    upper = ladders.kept_position[lines.upper]
    lines = dataclasses.replace(lines, others=other_decays(ladders.lines, upper))
    reduced = dataclasses.replace(table, series=series)
    return with_lines(
        dataclasses.replace(helium, first=dataclasses.replace(first, reduced=reduced)), lines
    )


def with_lines(helium: HeliumEquations, lines: HeliumGroundLines) -> HeliumEquations:
    """Other lines to the ground state."""
    first = dataclasses.replace(helium.first, lines=lines)
    past = None if helium.past is None else HeliumPast.of(lines)
    return dataclasses.replace(helium, first=first, past=past)


def with_strength(helium: HeliumEquations, line: int, factor: float) -> HeliumEquations:
    """One Einstein A to the ground state changed."""
    lines = helium.first.lines
    assert isinstance(lines, HeliumGroundLines)
    by_line = np.ones(len(lines.names))
    by_line[line] = factor
    return with_lines(helium, with_strengths(lines, by_line))


def with_absorption(helium: HeliumEquations, factor: float) -> HeliumEquations:
    """The cross section of H I 1s changed in and between the lines."""
    lines = helium.first.lines
    assert isinstance(lines, HeliumGroundLines)
    sigma = factor * lines.hydrogen_cross_section_cm2
    return with_lines(helium, dataclasses.replace(lines, hydrogen_cross_section_cm2=sigma))


def with_two_photon(helium: HeliumEquations, ion: str, factor: float) -> HeliumEquations:
    """Two-photon decay of "first" or "second" changed."""
    network = getattr(helium, ion)
    changed = dataclasses.replace(network, decay_rate_per_s=factor * network.decay_rate_per_s)
    return dataclasses.replace(helium, **{ion: changed})


def with_ion(run: FrozenHistory, factor: float, place: IntArray, levels: IntArray) -> Any:
    """He II with some line strengths and cross sections changed."""
    atoms, helium = run.integrated.helium, run.equations.helium
    assert atoms is not None and atoms.second is not None and helium is not None
    assert helium.second is not None
    ladder = with_cross_sections(with_ladder_strengths(atoms.second, place, factor), levels, factor)
    table: Any = helium.second.reduced
    second = dataclasses.replace(helium.second, reduced=tabulated_again(table, ladder))
    return dataclasses.replace(helium, second=second)


def log_scalars(run: FrozenHistory, targets: Any = PARSED, **changes: Any) -> FloatArray:
    """Ln of every target on the same steps; changes are fields of the equations."""
    setup, integrated = run.setup, run.integrated
    if "cosmology" in changes:
        setup = dataclasses.replace(setup, cosmology=changes["cosmology"])
    equations = dataclasses.replace(run.equations, **changes)
    integrated = dataclasses.replace(integrated, equations=equations)
    return np.log(scalars_of(on_steps(setup, integrated, run.solution.edges), targets).value)


def helium_slope(of_log_factor: Callable[[float], FloatArray], step: float = 0.02) -> FloatArray:
    """Derivative at 0 by central differences of two sizes, Richardson-extrapolated (order 4)."""
    near, far = ((of_log_factor(h) - of_log_factor(-h)) / (2.0 * h) for h in (step, 2.0 * step))
    return (4.0 * near - far) / 3.0
