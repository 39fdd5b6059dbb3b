"""Errors of the helium in a table, against exact reductions at random temperatures."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..escape.helium_lines import HeliumGroundLines
from ..escape.helium_past import HeliumPast
from ..history.helium import HeliumEquations
from ..history.helium_atom import HeliumAtoms
from ..network.assembly import Workspace
from ..network.helium import helium_rate_constants, reduce_helium
from ..network.rates import RateConstants, rate_constants, stack
from ..network.reduction import exchange_pairs, reduce_at
from .effective import log_capture
from .series import local_series
from .stage import StageTable
from .table import EffectiveTable

_SEED, _POINTS, _RATIOS = 20_260_102, 12, 8


class Errors(NamedTuple):
    """Names of rates, and the largest and rms errors of their logarithms; shape (n_rates,)."""

    names: tuple[str, ...]
    largest: FloatArray
    rms: FloatArray


def fresh_equations(helium: HeliumAtoms | None) -> HeliumEquations | None:
    """Equations of helium that remember nothing yet; None without helium."""
    if helium is None:
        return None
    equations = helium.equations
    if equations.past is None:
        return equations
    lines = equations.first.lines
    assert isinstance(lines, HeliumGroundLines)
    return dataclasses.replace(equations, past=HeliumPast.of(lines))


def helium_errors(table: EffectiveTable, helium: HeliumAtoms) -> Errors:
    """Measure the errors of a table's helium.

    Parameters
    ----------
    table : EffectiveTable
        With helium.
    helium : HeliumAtoms
        The atoms that were distilled.
    """
    stage, ion, lines = table.helium, table.helium_ion, table.helium_lines
    assert stage is not None and lines is not None
    ladders = helium.first
    terms = [ladders.levels.name(int(k)) for k in ladders.kept_position]
    found = [
        _stage_errors(
            stage,
            helium_rate_constants(ladders),
            lambda kelvin: reduce_helium(ladders, kelvin),
            ("He I", terms),
        )
    ]
    if ion is not None and helium.second is not None:
        ladder, pairs = helium.second, exchange_pairs(helium.second)
        work = Workspace.of(ladder)
        found.append(
            _stage_errors(
                ion,
                rate_constants(ladder, pairs),
                lambda kelvin: stack(reduce_at(ladder, pairs, kelvin, work)),
                ("He II", ["2s", "2p"]),
            )
        )
    if lines.absorbs:
        names = tuple(f"He I escape {name}" for name in lines.names)
        found.append(Errors(names, lines.escape_error, lines.escape_rms))
    return Errors(
        tuple(name for one in found for name in one.names),
        np.concatenate([one.largest for one in found]),
        np.concatenate([one.rms for one in found]),
    )


def _stage_errors(
    stage: StageTable,
    constants: RateConstants,
    reduce: Callable[[float], FloatArray],
    called: tuple[str, list[str]],
) -> Errors:
    """Compare recombination and downward exchange of one stage."""
    random = np.random.default_rng(_SEED)
    n_pairs, errors = len(stage.lower), []
    for x in random.uniform(stage.log_low, stage.log_high, _POINTS).tolist():
        node, y = reduce(math.exp(x)), random.uniform(stage.ratio_low, stage.ratio_high, _RATIOS)
        here = local_series(stage, np.full(_RATIOS, x), y)
        recombination = here.equilibrium + y[:, None] * here.departure
        captured = recombination - log_capture(constants, node, np.exp(x + y))
        errors.append(np.hstack([captured, here.exchange - node[:n_pairs]]))
    all_errors = np.concatenate(errors)
    species, terms = called
    pairs = zip(stage.upper.tolist(), stage.lower.tolist(), strict=True)
    names = (
        *(f"{species} recombination {term}" for term in terms),
        *(f"{species} exchange {terms[upper]} to {terms[lower]}" for upper, lower in pairs),
    )
    return Errors(
        names, np.abs(all_errors).max(axis=0), np.sqrt(np.mean(np.square(all_errors), axis=0))
    )
