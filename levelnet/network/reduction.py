"""Exact reduction of one ladder onto its kept levels, at one T_r or tabulated over ln T_r.

At one T_r the interior enters through the fates P_K^i (chance that an atom in interior level K reaches kept
level i first):

    exchange   R_ij = R_ij(direct) + sum_K R_iK P_K^j
    capture    A_i(T_m, T_r) = lambda^3(T_m) sum_e exp(-e/kT_m) G_ie(T_r),
               G_ie = sum over all levels of P^i times the spectral recombination into it.

Matter temperature enters only through the electron energies e of the quadrature, so G gives every T_m
exactly; B_i follows by detailed balance at T_m = T_r. What is stored is ln G and ln of the exchange, the
latter downward in energy and with the smallest Boltzmann factor of its detour kept out, so that it stays
in the doubles down to the coldest field. Diagonals are formed as sums afterwards.

References
----------
Ali-Haimoud & Hirata 2010, Phys. Rev. D 82, 063521; Burgin 2009, Bull. Lebedev Phys. Inst. 36, 110.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..atomic.bound_free import recombination_weights, thermal_volume_cm3
from ..atomic.detailed_balance import log_saha_factor, log_upward_ratio
from ..atomic.levels import ionization_scale_ev
from ..numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from .assembly import FactoredInterior, Workspace, factor_interior
from .ladder import Ladder, level_position, lines_of
from .reduced import KeptLevels, ReducedRates


# Below this T_r exchange over a barrier is switched off: with {2s, 2p} kept it is below e^-900 of an
# ordinary rate. Tables are split here.
WARM_K = 30.0


@dataclass(frozen=True, slots=True, eq=False)
class Node:
    """The reduction at one T_r.

    Attributes
    ----------
    log_exchange : ndarray, shape (n_pairs,)
        ln of the downward exchange rate (s^-1) times exp(barrier / kT_r), of each pair of kept levels;
        -inf where they do not talk.
    log_spectrum : ndarray, shape (n_kept, n_energies)
        ln G_ie, in s^-1.
    """

    log_exchange: FloatArray
    log_spectrum: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Pairs:
    """Pairs of kept levels.

    Attributes
    ----------
    lower, upper : ndarray of int, shape (n_pairs,)
        Positions among the kept levels, the upper one later in order.
    barrier_ev : ndarray, shape (n_pairs,), eV
        Energy from the upper level up to the nearest interior level it can go through; 0 where a direct
        line exists.
    """

    lower: IntArray
    upper: IntArray
    barrier_ev: FloatArray


def exchange_pairs(ladder: Ladder) -> Pairs:
    """List the pairs of kept levels and the barrier between them."""
    inside = set(ladder.interior.position[~ladder.interior.idle].tolist())
    partners = [
        lines_of(ladder, int(n), int(l))[0].tolist()
        for n, l in zip(ladder.kept.n, ladder.kept.l, strict=True)
    ]
    energy = ladder.levels.energy_ev
    lower, upper = np.triu_indices(len(ladder.kept), 1)
    barrier = np.zeros(len(lower))
    for pair, (i, j) in enumerate(zip(lower.tolist(), upper.tolist(), strict=True)):
        own = int(ladder.kept_position[j])
        direct = int(ladder.kept_position[i]) in partners[j]
        falls = any(p in inside and energy[p] < energy[own] for p in partners[j])
        if not direct and not falls:
            barrier[pair] = _lowest_detour_ev(ladder, i, j, inside) - energy[own]
    return Pairs(lower, upper, barrier)


def _lowest_detour_ev(ladder: Ladder, lower: int, upper: int, inside: set[int]) -> float:
    """Smallest energy that lets an atom climb from one kept level to another through the interior."""
    goal = int(ladder.kept_position[lower])
    for top in range(int(ladder.kept.n[upper]) + 1, ladder.n_max + 1):
        seen, edge = set(), {int(ladder.kept_position[upper])}
        while edge:
            seen |= edge
            reached: set[int] = set()
            for level in edge:
                n, l = int(ladder.levels.n[level]), int(ladder.levels.l[level])
                reached |= set(lines_of(ladder, n, l)[0].tolist())
            if goal in reached:
                return float(ladder.levels.energy_ev[level_position(np.array(top), np.array(0))])
            edge = {p for p in reached if p in inside and ladder.levels.n[p] <= top} - seen
    return float(ladder.kept.energy_ev[upper])


def reduce_at(
    ladder: Ladder, pairs: Pairs, radiation_temperature_k: float, workspace: Workspace | None = None
) -> Node:
    """Reduce the network at one T_r: one factorization, one right side per kept level."""
    factored = factor_interior(ladder, radiation_temperature_k, workspace)
    fates = all_fates(factored)
    return Node(
        _log_exchange(factored, pairs, fates),
        _log_spectrum(ladder, radiation_temperature_k, fates),
    )


def all_fates(factored: FactoredInterior) -> FloatArray:
    """Chance of each level to reach each kept level first, shape (n_kept, n_levels); own is 1."""
    ladder = factored.ladder
    fates = np.zeros((len(ladder.kept), len(ladder.levels)))
    if ladder.interior.shape.n_unknowns:
        fates[:, ladder.interior.position] = factored.fates(factored.to_kept)
    fates[:, ladder.kept_position] = np.eye(len(ladder.kept))
    return fates


def _log_exchange(factored: FactoredInterior, pairs: Pairs, fates: FloatArray) -> FloatArray:
    ladder = factored.ladder
    kt = const.BOLTZMANN_EV_K * factored.radiation_temperature_k
    through = fates.copy()
    through[:, ladder.kept_position] = 0.0  # a kept level is an exit of its own
    log_total = np.full((len(ladder.kept), len(ladder.kept)), -np.inf)
    for upper, lines in enumerate(factored.kept_lines):
        top = lines.log_out[through[:, lines.position].any(axis=0)].max(initial=-np.inf)
        with np.errstate(divide="ignore"):
            detour = top + np.log(through[:, lines.position] @ np.exp(lines.log_out - top))
            log_direct = dict(zip(lines.position.tolist(), lines.log_out.tolist(), strict=True))
            for lower, own in enumerate(ladder.kept_position):
                direct = log_direct.get(int(own), -np.inf)
                log_total[upper, lower] = np.logaddexp(detour[lower], direct)
    log_rate = log_total[pairs.upper, pairs.lower] + pairs.barrier_ev / kt
    if factored.radiation_temperature_k < WARM_K:
        # A detour over a barrier is below the doubles there; its place is kept by a constant.
        log_rate[pairs.barrier_ev > 0.0] = 0.0
    return log_rate


def _log_spectrum(ladder: Ladder, temperature_k: float, fates: FloatArray) -> FloatArray:
    weights = recombination_weights(ladder.bound_free, temperature_k)
    weighted = fates * (0.5 * ladder.levels.statistical_weight)
    spectrum = np.zeros((len(ladder.kept), weights.shape[1]))
    for n in range(2, ladder.n_max + 1):
        first = n * (n - 1) // 2
        shell = weighted[:, first : first + n] @ ladder.bound_free.cross_section_cm2[n - 1]
        spectrum += shell * weights[n - 1]
    return np.log(np.maximum(spectrum, 1e-300))


@dataclass(frozen=True, slots=True, eq=False)
class LiveReduction:
    """A reduced network that reduces anew at every evaluation; slow, and free of interpolation.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    pairs : Pairs
        Pairs of kept levels.
    """

    ladder: Ladder
    pairs: Pairs

    @property
    def kept(self) -> KeptLevels:
        """The kept levels."""
        return self.ladder.kept

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates; slopes in T_r by a fourth-order difference over 0.2 %."""
        step = 1e-3
        offsets = (-2.0, -1.0, 1.0, 2.0)
        work = Workspace.of(self.ladder)
        around = [
            _stack(reduce_at(self.ladder, self.pairs, radiation_temperature_k * np.exp(k * step), work))
            for k in offsets
        ]
        slope = (around[0] - 8.0 * around[1] + 8.0 * around[2] - around[3]) / (12.0 * step)
        value = _stack(reduce_at(self.ladder, self.pairs, radiation_temperature_k, work))
        return _assemble_rates(
            self.ladder, self.pairs, value, slope, radiation_temperature_k, matter_temperature_k
        )


@dataclass(frozen=True, slots=True, eq=False)
class TabulatedReduction:
    """A reduced network interpolated in ln T_r.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    pairs : Pairs
        Pairs of kept levels.
    series : tuple of ChebyshevSeries
        ln of each exchange and spectral capture over ln T_r, one series per piece, coldest first.
    interpolation_error : float
        Largest error, at points off the nodes, of the ln of any exchange rate, capture or
        photoionization rate.
    """

    ladder: Ladder
    pairs: Pairs
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
        x = float(np.log(radiation_temperature_k))
        piece = next((one for one in self.series[:-1] if x < one.high), self.series[-1])
        value, slope = piece.evaluate(x)
        return _assemble_rates(
            self.ladder, self.pairs, value, slope, radiation_temperature_k, matter_temperature_k
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
        return _stack(reduce_at(self.ladder, self.pairs, temperature_k, self.workspace))


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
    return TabulatedReduction(ladder, pairs, tuple(pieces), worst)


# Where the error is measured, as fractions of a piece: off every set of nodes, denser at the ends.
_CHECKS = (0.0071, 0.0413, 0.1237, 0.2719, 0.4873, 0.7331, 0.9717)
_MOST_NODES = 200


def _fit_piece(
    source: NodeSource, low_k: float, high_k: float, tolerance: float
) -> tuple[ChebyshevSeries, float]:
    """One piece of the table, refined until it is good enough, with its error off the nodes."""
    # The cold end of the warm piece must not slip below WARM_K by rounding.
    low, high = math.log(low_k) * (1 + 1e-15), math.log(high_k)
    truth = {x: source(x) for x in (low + (high - low) * part for part in _CHECKS)}
    count = node_count(low_k, high_k, tolerance)
    while True:
        values = [source(x) for x in chebyshev_nodes(low, high, count)]
        series = ChebyshevSeries.fit(low, high, np.array(values))
        error = max(
            _rate_error(source.ladder, source.pairs, series.evaluate(x)[0], exact, x)
            for x, exact in truth.items()
        )
        if error <= tolerance or count >= _MOST_NODES:
            return series, error
        count = math.ceil(1.3 * count)


def _stack(node: Node) -> FloatArray:
    """One vector per node; pairs that do not talk are marked by a rate of e^-700."""
    return np.concatenate([np.maximum(node.log_exchange, -700.0), node.log_spectrum.ravel()])


def _rate_error(
    ladder: Ladder, pairs: Pairs, value: FloatArray, truth: FloatArray, log_temperature: float
) -> float:
    """Largest error in the ln of any rate, for matter as warm as the field and three times colder."""
    radiation_k = float(np.exp(log_temperature))
    n_pairs = len(pairs.lower)
    worst = float(np.max(np.abs(value[:n_pairs] - truth[:n_pairs]), initial=0.0))
    for matter_k in (radiation_k, radiation_k / 3.0):
        spread = _electron_spread(ladder, matter_k)
        capture, exact = (
            np.exp(v[n_pairs:].reshape(len(ladder.kept), -1)) @ spread for v in (value, truth)
        )
        worst = max(worst, float(np.max(np.abs(np.log(capture / exact)))))
    return worst


def _electron_spread(ladder: Ladder, temperature_k: float) -> FloatArray:
    """exp(-e/kT) on the electron energies of the quadrature."""
    return np.exp(-ladder.bound_free.grid.energy * (_chi_over_k(ladder) / temperature_k))


def _assemble_rates(
    ladder: Ladder,
    pairs: Pairs,
    value: FloatArray,
    slope: FloatArray,
    radiation_k: float,
    matter_k: float,
) -> ReducedRates:
    """From stored logarithms to rates, their inverses and slopes."""
    kept, n_pairs = ladder.kept, len(pairs.lower)
    spectrum = np.exp(value[n_pairs:].reshape(len(kept), -1))
    spectrum_slope = spectrum * slope[n_pairs:].reshape(len(kept), -1)
    # Both temperatures at once: columns are T_m and T_r.
    temperature = np.array([matter_k, radiation_k])
    reach = np.multiply.outer(ladder.bound_free.grid.energy, _chi_over_k(ladder) / temperature)
    spread = np.exp(-reach)
    total = spectrum @ spread
    slope_radiation = (spectrum_slope @ spread) / total
    slope_matter = (spectrum @ (reach * spread)) / total - 1.5
    capture = total * thermal_volume_cm3(temperature, ladder.charge)
    log_saha = log_saha_factor(
        kept.statistical_weight, kept.ionization_energy_ev, radiation_k, ladder.charge
    )
    kt = const.BOLTZMANN_EV_K * radiation_k
    return ReducedRates(
        capture[:, 0],
        slope_radiation[:, 0],
        slope_matter[:, 0],
        np.log(capture[:, 1]) - log_saha,
        slope_radiation[:, 1] + slope_matter[:, 1] + 1.5 + kept.ionization_energy_ev / kt,
        *_exchange_matrices(kept, pairs, value[:n_pairs], slope[:n_pairs], radiation_k),
    )


def _chi_over_k(ladder: Ladder) -> float:
    """Ionization scale of the ion in kelvin."""
    return ionization_scale_ev(ladder.charge) / const.BOLTZMANN_EV_K


def _exchange_matrices(
    kept: KeptLevels, pairs: Pairs, log_rate: FloatArray, slope: FloatArray, radiation_k: float
) -> tuple[FloatArray, FloatArray]:
    """R_ij and d ln R_ij / d ln T_r, the upward direction by detailed balance."""
    i, j = pairs.lower, pairs.upper
    rate, rate_slope = np.zeros((2, len(kept), len(kept)))
    kt = const.BOLTZMANN_EV_K * radiation_k
    barrier = pairs.barrier_ev / kt
    rise = kept.energy_ev[j] - kept.energy_ev[i]
    log_down = log_rate - barrier
    weights = kept.statistical_weight[j], kept.statistical_weight[i]
    rate[j, i] = np.exp(log_down)
    rate[i, j] = np.exp(log_down + log_upward_ratio(*weights, rise, radiation_k))
    rate_slope[j, i] = slope + barrier
    rate_slope[i, j] = slope + barrier + rise / kt
    return rate, rate_slope
