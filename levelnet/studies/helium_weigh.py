"""Derivatives by every rate of helium, from the weights of an adjoint."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..atomic.helium_transitions import HeliumTransitions, helium_places, helium_transitions
from ..atomic.helium_widths import OtherDecays
from ..background.parameters import (
    COSMOLOGICAL,
    TEMPERATURE,
    helium_derivatives,
    hydrogen_derivatives,
)
from ..escape.helium_lines import HeliumGroundLines
from ..history.integrate import Progress
from ..network.assembly import Workspace
from ..network.helium import HeliumLadders, HeliumReduction
from ..network.helium_weights import add_helium_node_weights
from ..network.ladder import Ladder
from ..network.reduction import exchange_pairs
from ..network.tabulation import TabulatedReduction
from ..network.transitions import n_places, transitions
from ..network.weights import NodeWeights, add_node_weights
from .frozen import FrozenHistory
from .helium_memory import HeliumMemory, HeliumStage
from .helium_response import Response, by_parameter
from .helium_weighing import HeliumWeights, IonWeights
from .sensitivity import (
    Flowing,
    NodeResults,
    helium_electrons,
    helium_table,
    hubble_at,
    hubble_of,
    ladder_table,
    node_results,
)


class Helium(NamedTuple):
    """What helium adds to a weighing: derivatives dJ by its rates, and by each parameter."""

    weights: HeliumWeights
    ion: IonWeights | None
    parameter: FloatArray


class _Points(NamedTuple):
    """Quantities of one ion along the history, and what each counts, (n_scalars, n_points)."""

    flowing: list[Flowing]
    responses: list[Response]
    weights: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class _Along:
    """One history with its adjoint; `weight` has shape (n_scalars, n_points, 4)."""

    history: FrozenHistory
    stages: list[HeliumStage | None]
    memory: HeliumMemory | None
    weight: FloatArray


def weigh_helium(
    history: FrozenHistory,
    stages: list[HeliumStage | None],
    memory: HeliumMemory | None,
    weight: FloatArray,
    tell: Progress,
) -> Helium:
    """Sum up the derivatives by the rates of helium.

    Parameters
    ----------
    history : FrozenHistory
        The history.
    stages : list of HeliumStage or None
        Helium at its stages.
    memory : HeliumMemory or None
        That of the adjoint that gave `weight`, afterwards.
    weight : ndarray, shape (n_scalars, n_points, 4)
        Of the rates of change at the stages.
    tell : callable
        Progress.
    """
    along = _Along(history, stages, memory, weight)
    first = _points(along, 0)
    ladders, lines = _atom(history)
    found = helium_transitions(ladders.lines)
    table = history.equations.helium.first.reduced if history.equations.helium else None
    assert isinstance(table, HeliumReduction)
    results = node_results(helium_table(table), first.flowing, first.weights)
    by_node = _first_nodes(ladders, results, tell)
    by_node.bound_bound[...] += _by_widths(first, lines, ladders, found)
    made = HeliumWeights(
        ladders.levels,
        found.upper,
        found.lower,
        lines.names,
        ladders.kept_position[lines.upper],
        by_node.bound_bound[:, found.place],
        by_node.bound_free,
        _summed(first, "strength"),
        _summed(first, "escape"),
        _summed(first, "two_photon"),
        _summed(first, "absorption") + _remembered_absorption(along),
    )
    return Helium(made, _second(along, tell), _parameters(along))


def _atom(history: FrozenHistory) -> tuple[HeliumLadders, HeliumGroundLines]:
    atoms = history.integrated.helium
    assert atoms is not None
    return atoms.first, atoms.equations.first.lines


def _points(along: _Along, ion: int) -> _Points:
    """Net flows at the stages; of He I the red sides at the edges too."""
    flowing, responses, weights = [], [], []
    for k, stage in enumerate(along.stages):
        if stage is None:
            continue
        flowing.append(Flowing(stage.locals[ion].conditions, stage.responses[ion].gradient))
        responses.append(stage.responses[ion])
        weights.append(along.weight[:, k, 2:] @ stage.explicit.by_flows[:, ion])
    memory = along.memory
    if ion == 0 and memory is not None:
        for edge, here in memory.edges.items():
            for line, response in here.responses.items():
                flowing.append(Flowing(here.local.conditions, response.gradient))
                responses.append(response)
                weights.append(memory.red[:, edge, line])
    return _Points(flowing, responses, np.array(weights).reshape(len(weights), -1).T)


def _summed(points: _Points, name: str) -> FloatArray:
    values = np.array([getattr(one, name) for one in points.responses])
    return np.asarray(points.weights @ values)


def _by_widths(
    points: _Points, lines: HeliumGroundLines, ladders: HeliumLadders, found: HeliumTransitions
) -> FloatArray:
    """DJ by line strengths through the widths of the upper levels of lines to the ground state."""
    result = np.zeros((len(points.weights), helium_places(ladders.lines)))
    others: OtherDecays = lines.others
    place = {
        frozenset(ends): k
        for *ends, k in zip(
            found.upper.tolist(), found.lower.tolist(), found.place.tolist(), strict=True
        )
    }
    upper = ladders.kept_position[lines.upper].tolist()
    position = others.position.tolist()
    row, column = np.nonzero(others.rate_per_s)
    where = np.array(
        [place[frozenset((upper[i], position[k]))] for i, k in zip(row, column, strict=True)],
        dtype=np.int64,
    )
    each = np.zeros((len(points.weights), len(row)))
    for (conditions, _), response, weight in zip(
        points.flowing, points.responses, points.weights.T, strict=True
    ):
        if response.others.any():
            rates = others.each(conditions.radiation_temperature_k)
            share = response.others[:, None] * rates / rates.sum(axis=1, keepdims=True)
            each += np.outer(weight, share[row, column])
    # A line may lead to two upper levels, or to one of which two lines lead down.
    for total, own in zip(result, each, strict=True):
        np.add.at(total, where, own)
    return result


def _first_nodes(ladders: HeliumLadders, results: NodeResults, tell: Progress) -> NodeWeights:
    count = results.by_result.shape[1]
    total = NodeWeights(
        np.zeros((count, helium_places(ladders.lines))), np.zeros((count, len(ladders.levels)))
    )
    temperatures = results.temperature_k.tolist()
    for k, (temperature_k, by) in enumerate(zip(temperatures, results.by_result, strict=True)):
        if by.any():
            add_helium_node_weights(ladders, temperature_k, by, total)
        tell("weighing helium", (k + 1) / len(temperatures))
    return total


def _second(along: _Along, tell: Progress) -> IonWeights | None:
    """Rates of He II, where it has levels."""
    helium, atoms = along.history.equations.helium, along.history.integrated.helium
    assert helium is not None and atoms is not None
    if helium.second is None or atoms.second is None:
        return None
    table, ladder = helium.second.reduced, atoms.second
    assert isinstance(table, TabulatedReduction)
    points = _points(along, 1)
    results = node_results(ladder_table(table), points.flowing, points.weights)
    by_node = _second_nodes(ladder, results, tell)
    found = transitions(ladder)
    return IonWeights(
        ladder.levels,
        found.upper,
        found.lower,
        by_node.bound_bound[:, found.place],
        by_node.bound_free,
        _summed(points, "escape")[:, 0],
        _summed(points, "two_photon"),
    )


def _second_nodes(ladder: Ladder, results: NodeResults, tell: Progress) -> NodeWeights:
    count = results.by_result.shape[1]
    total = NodeWeights(np.zeros((count, n_places(ladder))), np.zeros((count, len(ladder.levels))))
    pairs, work = exchange_pairs(ladder), Workspace.of(ladder)
    temperatures = results.temperature_k.tolist()
    for k, (temperature_k, by) in enumerate(zip(temperatures, results.by_result, strict=True)):
        if by.any():
            add_node_weights(ladder, pairs, temperature_k, by, total, work)
        tell("weighing the helium ion", (k + 1) / len(temperatures))
    return total


def _remembered_absorption(along: _Along) -> FloatArray:
    """DJ by ln of the cross section of H I 1s through the depths remembered."""
    if along.memory is None:
        return np.zeros(len(along.weight))
    total: FloatArray = along.memory.continuum.sum(axis=(1, 2))
    return total


def _parameters(along: _Along) -> FloatArray:
    """DJ by each parameter of the cosmology through the rates of change of helium."""
    history, cosmology = along.history, along.history.setup.cosmology
    electrons, hubble = helium_electrons(history), hubble_of(history)
    hydrogen, ratio = hydrogen_derivatives(cosmology), helium_derivatives(cosmology)
    f = cosmology.helium_ratio()
    result = np.zeros((len(along.weight), len(COSMOLOGICAL)))
    for k, stage in enumerate(along.stages):
        if stage is None:
            continue
        by_ratio = electrons[k] / (f * stage.around.electrons_per_helium)
        by_density = hydrogen + by_ratio * ratio
        explicit = stage.explicit
        rates = np.outer(explicit.by_electrons, by_density)
        rates += np.outer(explicit.by_hubble, hubble[k])
        rates[:, TEMPERATURE] += explicit.by_temperature / cosmology.cmb_temperature_k
        for ion, response in enumerate(stage.responses):
            by = by_parameter(response.slopes, cosmology, hubble[k], by_ratio)
            rates += np.outer(explicit.by_flows[:, ion], by)
        result += along.weight[:, k, 2:] @ rates
    return result + _remembered_parameters(along)


def _remembered_parameters(along: _Along) -> FloatArray:
    """The same through what lines remember."""
    memory, cosmology = along.memory, along.history.setup.cosmology
    result = np.zeros((len(along.weight), len(COSMOLOGICAL)))
    if memory is None:
        return result
    f, edges = cosmology.helium_ratio(), along.history.solution.edges
    hubble = hubble_at(along.history, edges)
    for edge, here in memory.edges.items():
        by_ratio = here.fractions.electrons / (f * here.around.electrons_per_helium)
        for line, response in here.responses.items():
            by = by_parameter(response.slopes, cosmology, hubble[edge], by_ratio)
            result += np.outer(memory.red[:, edge, line], by)
        # The continuum goes as n_HI/H.
        by = hydrogen_derivatives(cosmology) - hubble[edge]
        result += np.outer(memory.continuum[:, edge].sum(axis=1), by)
    return result
