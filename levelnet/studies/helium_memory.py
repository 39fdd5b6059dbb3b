"""Helium along a frozen history, as an adjoint needs it: at stages, and what its lines remember.

A line that is lit by another one sees what that one sent at an earlier time, interpolated between
edges. Each edge therefore has weights of its own: of ln of the red side of every line there, and
of ln of the depth of the continuum.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..escape.helium_past import HeliumPast
from ..escape.helium_treatment import Seen
from ..history.equations import ionized_and_neutral
from ..history.helium import HeliumEquations, HeliumFractions
from ..history.helium_explicit import Explicit, explicit_rates
from ..history.ion_network import Around
from ..history.local import Local
from .frozen import FrozenHistory
from .helium_response import (
    Response,
    by_state,
    flow_response,
    ion_flow_response,
    red_response,
)


class HeliumStage(NamedTuple):
    """Helium at one stage.

    Attributes
    ----------
    around, fractions : Around, HeliumFractions
        Where.
    seen : Seen
        What the lines of He I see.
    locals : tuple of Local
        He I and, where it has levels, He II.
    responses : tuple of Response
        Of the net flows of both.
    explicit : Explicit
        What the rates of change hang on besides.
    """

    around: Around
    fractions: HeliumFractions
    seen: Seen
    locals: tuple[Local, ...]
    responses: tuple[Response, ...]
    explicit: Explicit


class HeliumEdge(NamedTuple):
    """What one edge leaves to lines below; `responses` of the red sides, by line."""

    around: Around
    fractions: HeliumFractions
    seen: Seen
    local: Local
    responses: dict[int, Response]
    by_state: dict[int, FloatArray]
    continuum_by_state: FloatArray


def helium_stages(history: FrozenHistory) -> list[HeliumStage | None]:
    """Every stage in order of time; None where helium is held as it is."""
    helium = history.equations.helium
    assert helium is not None
    found: list[HeliumStage | None] = []
    for step, (times, states) in enumerate(
        zip(history.solution.times, history.solution.stages, strict=True)
    ):
        knowing = helium.knowing(step + 1)
        for time, state in zip(times.tolist(), states, strict=True):
            around = history.equations.helium_around(time, state)
            found.append(_stage(knowing, around, state[2:]))
    return found


def _stage(helium: HeliumEquations, around: Around, state: FloatArray) -> HeliumStage | None:
    if helium.held(around.radiation_temperature_k):
        return None
    x, seen = helium.fractions(state), helium.seen(around)
    first = helium.first_local(around, state)
    solved, found = [first], [flow_response(helium.first, first, seen)]
    if helium.second is not None:
        conditions = helium.second.conditions(around, x.double, x.single)
        solved.append(helium.second.solve(conditions))
        found.append(ion_flow_response(helium.second, solved[1]))
    flows = np.zeros(2)
    flows[: len(solved)] = [one.solution.net_flow for one in solved]
    explicit = explicit_rates(helium, around, state, flows)
    return HeliumStage(around, x, seen, tuple(solved), tuple(found), explicit)


@dataclass(slots=True, eq=False)
class HeliumMemory:
    """The adjoint of what lines remember; n_scalars along axis 0.

    Attributes
    ----------
    history : FrozenHistory
        The history.
    past : HeliumPast
        What it remembers.
    stages : list of HeliumStage or None
        Of :func:`helium_stages`.
    red, continuum : ndarray, shape (n_scalars, n_edges, n_lines)
        Weights of ln of the red sides and of ln of the depth of the continuum at the edges.
    edges : dict of int to HeliumEdge
        Edges that were asked about.
    """

    history: FrozenHistory
    past: HeliumPast
    stages: list[HeliumStage | None]
    red: FloatArray
    continuum: FloatArray
    edges: dict[int, HeliumEdge] = field(default_factory=dict)

    @staticmethod
    def of(
        history: FrozenHistory, stages: list[HeliumStage | None], n_scalars: int
    ) -> HeliumMemory | None:
        """None where no line is lit by another."""
        helium = history.equations.helium
        if helium is None or helium.past is None:
            return None
        shape = n_scalars, len(history.solution.edges), len(helium.past.lines.names)
        return HeliumMemory(history, helium.past, stages, np.zeros(shape), np.zeros(shape))

    def told(self, step: int, weight: FloatArray) -> None:
        """Pass on what the stages of a step saw."""
        for k in range(3):
            stage = self.stages[3 * step + k]
            if stage is None:
                continue
            on_first = weight[:, k, 2:] @ stage.explicit.by_flows[:, 0]
            seen = np.outer(on_first, stage.responses[0].field)
            self._pass_on(step + 1, stage.around.log_scale, stage.seen, seen)

    def by_edge(self, edge: int) -> FloatArray:
        """Derivative by the state at an edge, shape (n_scalars, n)."""
        result = np.zeros((len(self.red), self.history.solution.start.size))
        red, continuum = self.red[:, edge], self.continuum[:, edge]
        if not (red.any() or continuum.any()):
            return result
        here = self.edges[edge] = self._edge(edge)
        result += np.outer(continuum.sum(axis=1), here.continuum_by_state)
        seen = np.zeros_like(red)
        for line, response in here.responses.items():
            result += np.outer(red[:, line], here.by_state[line])
            seen += np.outer(red[:, line], response.field)
        self._pass_on(edge, here.around.log_scale, here.seen, seen)
        return result

    def _pass_on(self, known: int, time: float, seen: Seen, weight: FloatArray) -> None:
        """From fields that lines see to the red sides they come from, `known` edges remembered."""
        blue = seen.blue
        if blue is None or blue.by_sent is None or blue.by_past_continuum is None:
            return
        past = self.past.red.until(known)
        for line, above in enumerate(self.past.lines.lit_by.tolist()):
            if above < 0 or not (blue.by_sent[line] or blue.by_past_continuum[line]):
                continue
            first, shares, _ = past.knots(time - float(past.delay[line]))
            for k, share in enumerate(shares, start=first):
                by = share * weight[:, line]
                self.red[:, k, above] += by * blue.by_sent[line]
                self.continuum[:, k, above] += by * blue.by_past_continuum[line]

    def _edge(self, edge: int) -> HeliumEdge:
        equations, solution = self.history.equations, self.history.solution
        assert equations.helium is not None
        helium = equations.helium.knowing(edge)
        time, state = float(solution.edges[edge]), solution.state_at(edge)
        around = equations.helium_around(time, state)
        x, seen = helium.fractions(state[2:]), helium.seen(around)
        local = helium.first_local(around, state[2:])
        ionized, _ = ionized_and_neutral(float(state[0]))
        conditions = equations.local(time, state).conditions
        electrons = equations.electrons_by(conditions, state)
        lines = np.flatnonzero(self.red[:, edge].any(axis=0)).tolist()
        responses = {line: red_response(helium.first, local, seen, line) for line in lines}
        states = {
            line: by_state(one.slopes, x, ionized, electrons) for line, one in responses.items()
        }
        continuum = np.zeros(len(state))
        continuum[0] = -ionized  # it goes as n_HI
        return HeliumEdge(around, x, seen, local, responses, states, continuum)
