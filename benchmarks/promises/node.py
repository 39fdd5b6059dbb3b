"""One node of a table, as the library makes it, and how right it is (P4, P7, P8).

Three levels are kept, 2s, 2p and 3p, so that a node is assembly, factorization, three adjoint
solutions, and rates at 40 matter temperatures. The adjoint way is the library's own; the way it is
held against solves for the populations that a source makes, and adds up what they send on.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from levelnet.arrays import FloatArray
from levelnet.network.assembly import (
    FactoredInterior,
    Workspace,
    factor_interior,
    recombination_coefficients,
)
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.rates import assemble_rates, rate_constants, stack
from levelnet.network.reduced import ReducedRates
from levelnet.network.reduction import (
    Node,
    all_fates,
    exchange_pairs,
    log_exchange,
    log_spectrum,
    reduce_at,
)

KEPT = ((2, 0), (2, 1), (3, 1))
TEMPERATURE_K = 3000.0
MATTER_K = TEMPERATURE_K * np.linspace(0.2, 1.0, 40)
# Below this T_r exchange over the barrier from 2s to 2p nears the end of the doubles.
_EXCHANGE_FROM_K = 300.0


class Errors(NamedTuple):
    """Largest over the temperatures.

    Attributes
    ----------
    imbalance : float
        |sink.x / sum s - 1|, x the populations that the source s makes.
    mismatch : float
        Relative difference of effective rates, by populations against by adjoint solutions.
    """

    imbalance: float
    mismatch: float


class NodeMaker:
    """One atom with the buffers that its nodes reuse."""

    def __init__(self, n_max: int) -> None:
        self.n_max = n_max
        self.ladder = hydrogen_ladder(n_max, "measured", KEPT)
        self.pairs = exchange_pairs(self.ladder)
        self.constants = rate_constants(self.ladder, self.pairs)
        self.work = Workspace.of(self.ladder)
        self.captures = np.zeros((len(MATTER_K), len(KEPT)))

    def make(self) -> None:
        """Make the node at TEMPERATURE_K and effective captures at every T_m; this is timed."""
        node = reduce_at(self.ladder, self.pairs, TEMPERATURE_K, self.work)
        for row, matter_k in zip(self.captures, MATTER_K.tolist(), strict=True):
            row[:] = self._rates(node, TEMPERATURE_K, matter_k).recombination

    def factored(self, radiation_k: float = TEMPERATURE_K) -> FactoredInterior:
        """Factor the interior into the common buffers."""
        return factor_interior(self.ladder, radiation_k, self.work)

    def errors(self, temperatures_k: tuple[float, ...]) -> Errors:
        """Largest imbalance and mismatch over the temperatures, T_m down to T_r/5."""
        imbalance = mismatch = 0.0
        for radiation_k in temperatures_k:
            factored = self.factored(radiation_k)
            fates = all_fates(factored)
            node = Node(
                log_exchange(factored, self.pairs, fates),
                log_spectrum(self.ladder, radiation_k, fates),
            )
            del fates
            for matter_k in (radiation_k, 0.5 * radiation_k, 0.2 * radiation_k):
                adjoint = self._rates(node, radiation_k, matter_k)
                forward, off = self._captures(factored, matter_k)
                imbalance = max(imbalance, off)
                mismatch = max(mismatch, largest(forward, adjoint.recombination))
            if radiation_k >= _EXCHANGE_FROM_K:
                apart = ~np.eye(len(KEPT), dtype=bool)
                exchange = self._exchange(factored)
                mismatch = max(mismatch, largest(exchange[apart], adjoint.exchange[apart]))
        return Errors(imbalance, mismatch)

    def error_of_captures(self) -> float:
        """Largest difference of what :meth:`make` left from captures by populations."""
        factored, every = self.factored(), range(0, len(MATTER_K), 13)
        return max(
            largest(self._captures(factored, float(MATTER_K[k]))[0], self.captures[k])
            for k in every
        )

    def _rates(self, node: Node, radiation_k: float, matter_k: float) -> ReducedRates:
        value = stack(node)
        return assemble_rates(self.constants, value, np.zeros_like(value), radiation_k, matter_k)

    def _captures(self, factored: FactoredInterior, matter_k: float) -> tuple[FloatArray, float]:
        """Effective captures from the populations that recombination makes, and the imbalance."""
        inside = self.ladder.interior
        alpha = recombination_coefficients(self.ladder, factored.radiation_temperature_k, matter_k)
        source = np.where(inside.idle, 0.0, alpha[inside.position])
        population = populations_of(factored, source)
        sink = factored.photoionization + factored.to_kept.sum(axis=0)
        captures = alpha[self.ladder.kept_position] + factored.to_kept @ population
        return captures, abs(float(sink @ population / source.sum()) - 1.0)

    def _exchange(self, factored: FactoredInterior) -> FloatArray:
        """Rates between kept levels, from the populations that each of them makes."""
        ladder, rates = self.ladder, np.zeros((len(KEPT), len(KEPT)))
        for own, lines in enumerate(factored.kept_lines):
            sent = np.zeros(len(ladder.levels))
            sent[lines.position] = np.exp(lines.log_out)
            source = np.where(ladder.interior.idle, 0.0, sent[ladder.interior.position])
            through = factored.to_kept @ populations_of(factored, source)
            rates[own] = sent[ladder.kept_position] + through
        return rates


def populations_of(factored: FactoredInterior, source: FloatArray) -> FloatArray:
    """Populations that a source makes, shape (n_unknowns,)."""
    return np.asarray(factored.weight * factored.feed(source[None])[0])


def largest(value: FloatArray, reference: FloatArray) -> float:
    """Largest relative difference; infinite where a value is no number."""
    error = float(np.max(np.abs(value / reference - 1.0)))
    return error if np.isfinite(error) else np.inf
