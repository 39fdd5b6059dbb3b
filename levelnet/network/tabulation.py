"""Reduced networks as the history sees them: reduced live, or tabulated over ln T_r."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..arrays import BoolArray, FloatArray
from ..errors import RangeError
from ..numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from .assembly import Workspace
from .ladder import Ladder
from .rates import RateConstants, assemble_rates, largest_rate_error, rate_constants, stack
from .reduced import KeptLevels, ReducedRates
from .reduction import WARM_K, Pairs, beyond_doubles, exchange_pairs, reduce_at


@dataclass(frozen=True, slots=True, eq=False)
class LiveReduction:
    """A reduced network that reduces anew at every evaluation; slow, and free of interpolation.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    pairs : Pairs
        Pairs of kept levels.
    constants : RateConstants
        What turns stored values into rates.
    """

    ladder: Ladder
    pairs: Pairs
    constants: RateConstants

    @property
    def kept(self) -> KeptLevels:
        """The kept levels."""
        return self.ladder.kept

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates; slopes in T_r by a fourth-order difference over 0.2 %."""
        step, here = 1e-3, math.log(radiation_temperature_k)
        exact = NodeSource(self.ladder, self.pairs, None, None, Workspace.of(self.ladder))
        source = HeldSource.of(exact, radiation_temperature_k * math.exp(-2.0 * step))
        around = [source(here + k * step) for k in (-2.0, -1.0, 1.0, 2.0)]
        slope = (around[0] - 8.0 * around[1] + 8.0 * around[2] - around[3]) / (12.0 * step)
        value = source(here)
        return assemble_rates(
            self.constants, value, slope, radiation_temperature_k, matter_temperature_k
        )


@dataclass(frozen=True, slots=True, eq=False)
class TabulatedReduction:
    """A reduced network interpolated in ln T_r.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    constants : RateConstants
        What turns stored values into rates.
    series : tuple of ChebyshevSeries
        ln of each exchange and spectral capture over ln T_r, one series per piece, coldest first.
    interpolation_error : float
        Largest error, at points off the nodes, of the ln of any exchange rate, capture or
        photoionization rate.
    """

    ladder: Ladder
    constants: RateConstants
    series: tuple[ChebyshevSeries, ...]
    interpolation_error: float

    @property
    def kept(self) -> KeptLevels:
        """The kept levels."""
        return self.ladder.kept

    @property
    def n_nodes(self) -> int:
        """Number of exact reductions behind the table."""
        return sum(len(piece.coefficients) for piece in self.series)

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates; RangeError outside the tabulated T_r."""
        x = math.log(radiation_temperature_k)
        low, high = self.series[0].low, self.series[-1].high
        if not low - 1e-12 <= x <= high + 1e-12:
            raise RangeError(
                f"T_r = {radiation_temperature_k:g} K: outside the tabulated {math.exp(low):g} to "
                f"{math.exp(high):g} K"
            )
        piece = next((one for one in self.series[:-1] if x < one.high), self.series[-1])
        value, slope = piece.evaluate(x)
        return assemble_rates(
            self.constants, value, slope, radiation_temperature_k, matter_temperature_k
        )


@dataclass(slots=True, eq=False)
class NodeSource:
    """Gives exact node values, from store where they are, and counts them.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    pairs : Pairs
        Pairs of kept levels.
    recall : callable or None
        ``recall(T_r, compute)`` gives the stored values or computes and stores them.
    on_node : callable or None
        Told after each node.
    """

    ladder: Ladder
    pairs: Pairs
    recall: Callable[[float, Callable[[float], FloatArray]], FloatArray] | None
    on_node: Callable[[], None] | None
    workspace: Workspace

    def __call__(self, log_temperature: float) -> FloatArray:
        """Stacked node values at exp(`log_temperature`) kelvin."""
        temperature_k = float(np.exp(log_temperature))
        value = self.recall(temperature_k, self._compute) if self.recall else None
        value = self._compute(temperature_k) if value is None else value
        if self.on_node is not None:
            self.on_node()
        return value

    def _compute(self, temperature_k: float) -> FloatArray:
        return stack(reduce_at(self.ladder, self.pairs, temperature_k, self.workspace))


@dataclass(frozen=True, slots=True, eq=False)
class HeldSource:
    """Node values with those pairs held constant whose exchange leaves the doubles.

    Attributes
    ----------
    source : NodeSource
        Exact values.
    held : ndarray of bool, shape (n_pairs,)
        The pairs.
    value : ndarray, shape (n_pairs,)
        What they are held at: ln of rate times exp(barrier/kT) at WARM_K; it hardly changes below.
    """

    source: NodeSource
    held: BoolArray
    value: FloatArray

    @staticmethod
    def of(source: NodeSource, coldest_k: float) -> HeldSource:
        """Hold what leaves the doubles between `coldest_k` and WARM_K."""
        held = beyond_doubles(source.pairs, coldest_k)
        edge = source(math.log(WARM_K)) if held.any() else np.zeros(len(held))
        return HeldSource(source, held, edge[: len(held)])

    def __call__(self, log_temperature: float) -> FloatArray:
        """Stacked node values at exp(`log_temperature`) kelvin."""
        values = self.source(log_temperature).copy()
        values[: len(self.held)] = np.where(self.held, self.value, values[: len(self.held)])
        return values


def node_count(low_k: float, high_k: float, tolerance: float) -> int:
    """First guess of the number of nodes: six per e-fold of T_r for 1e-8 (measured)."""
    return math.ceil(2.0 - 0.75 * math.log10(tolerance) * math.log(high_k / low_k))


def tabulate(
    ladder: Ladder,
    low_k: float,
    high_k: float,
    tolerance: float,
    on_node: Callable[[], None] | None = None,
    recall: Callable[[float, Callable[[float], FloatArray]], FloatArray] | None = None,
) -> TabulatedReduction:
    """Reduce at Chebyshev nodes in ln T_r until the error off the nodes is below `tolerance`.

    Parameters
    ----------
    ladder : Ladder
        The atom.
    low_k, high_k : float, K
        Range of T_r.
    tolerance : float, dimensionless
        Largest error in the ln of any rate.
    on_node : callable, optional
        Told after each reduction.
    recall : callable, optional
        ``recall(T_r, compute)`` gives stored node values or computes and stores them.

    Returns
    -------
    TabulatedReduction
        The table, with its measured error.
    """
    pairs = exchange_pairs(ladder)
    source = NodeSource(ladder, pairs, recall, on_node, Workspace.of(ladder))
    edges = [low_k, WARM_K, high_k] if low_k < WARM_K < high_k else [low_k, high_k]
    pieces, worst = [], 0.0
    for low, high in itertools.pairwise(edges):
        piece, error = _fit_piece(source, low, high, tolerance)
        pieces.append(piece)
        worst = max(worst, error)
    return TabulatedReduction(ladder, rate_constants(ladder, pairs), tuple(pieces), worst)


# Where the error is measured, as fractions of a piece: off every set of nodes, denser at the ends.
_CHECKS = (0.0071, 0.0413, 0.1237, 0.2719, 0.4873, 0.7331, 0.9717)
_MOST_NODES = 200


def _fit_piece(
    source: NodeSource, low_k: float, high_k: float, tolerance: float
) -> tuple[ChebyshevSeries, float]:
    """One piece of the table, refined until it is good enough, with its error off the nodes."""
    # The cold end of the warm piece must not slip below WARM_K by rounding.
    low, high = math.log(low_k) * (1 + 1e-15), math.log(high_k)
    held = HeldSource.of(source, low_k)
    truth = {x: held(x) for x in (low + (high - low) * part for part in _CHECKS)}
    constants = rate_constants(source.ladder, source.pairs)
    count = node_count(low_k, high_k, tolerance)
    while True:
        values = [held(x) for x in chebyshev_nodes(low, high, count)]
        series = ChebyshevSeries.fit(low, high, np.array(values))
        error = max(
            largest_rate_error(constants, series.evaluate(x)[0], exact, x)
            for x, exact in truth.items()
        )
        if error <= tolerance or count >= _MOST_NODES:
            return series, error
        count = math.ceil(1.3 * count)


def live_reduction(ladder: Ladder) -> LiveReduction:
    """Make a reduction of `ladder` that reduces anew at every evaluation."""
    pairs = exchange_pairs(ladder)
    return LiveReduction(ladder, pairs, rate_constants(ladder, pairs))
