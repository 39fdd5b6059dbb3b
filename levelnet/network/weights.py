"""What one reduction hangs on: the derivative of any sum of its results by every rate.

The results of a reduction, ln of exchange and of spectral capture, are sums over the fates P^i that
solve A P^i = r^i. A change of a rate R_ab moves a sum phi of them by

    d phi = sum_i x^i_a (P^i_b - P^i_a) dR_ab,      A^T x^i = d phi/d P^i,

so that a pair of levels, whose two directions change together by detailed balance, enters by its
net flow times the difference of the fates of its two ends. Kept levels are part of it with P^i = 1
at level i and 0 at the others.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.bound_free import recombination_weights
from ..kernels.assembly import geometric_means, pair_weights
from .assembly import FactoredInterior, Workspace, factor_interior, rate_blocks
from .ladder import Ladder
from .line_rates import block_lines, half_angle_tables, shell_means, shell_rates
from .reduction import Node, Pairs, all_fates, log_exchange, log_spectrum
from .transitions import line_places


class NodeWeights(NamedTuple):
    """Derivatives of sums of the results of one reduction.

    Attributes
    ----------
    bound_bound : ndarray, shape (n_sets, n_places)
        By the ln of each line strength, both directions together.
    bound_free : ndarray, shape (n_sets, n_levels)
        By the ln of each level's cross section.
    """

    bound_bound: FloatArray
    bound_free: FloatArray


def add_node_weights(
    ladder: Ladder,
    pairs: Pairs,
    radiation_temperature_k: float,
    by_result: FloatArray,
    total: NodeWeights,
    workspace: Workspace | None = None,
) -> None:
    """Add the derivatives at one T_r to `total`.

    Parameters
    ----------
    ladder : Ladder
        The atom.
    pairs : Pairs
        Pairs of its kept levels.
    radiation_temperature_k : float, K
        T_r.
    by_result : ndarray, shape (n_sets, n_pairs + n_kept * n_energies)
        Derivative of each sum by the results of the reduction, stacked as `rates.stack` does.
    total : NodeWeights
        Added to.
    workspace : Workspace, optional
        Buffers to reuse.
    """
    factored = factor_interior(ladder, radiation_temperature_k, workspace)
    fates = all_fates(factored)
    node = Node(
        log_exchange(factored, pairs, fates),
        log_spectrum(ladder, radiation_temperature_k, fates),
    )
    n_pairs, n_kept = len(pairs.lower), len(ladder.kept)
    by_spectrum = by_result[:, n_pairs:].reshape(len(by_result), n_kept, -1)
    captured = _captured(ladder, radiation_temperature_k, by_spectrum * np.exp(-node.log_spectrum))
    kept = _kept_feed(pairs, node, by_result[:, :n_pairs], factored)
    source = captured.copy()
    for k, lines in enumerate(factored.kept_lines):
        source[:, :, lines.position] += kept.flow(k, lines.log_out)
    feed = _feed(factored, source[:, :, ladder.interior.position])
    add_lines = _add_cold_lines if factored.is_cold else _add_lines
    total.bound_free[...] += np.einsum("ka,ska->sa", fates, captured)
    _add_photoionization(factored, fates, feed, total.bound_free)
    _add_kept_lines(factored, fates, kept, feed, total.bound_bound)
    add_lines(factored, fates, feed, total.bound_bound)


class _KeptFeed(NamedTuple):
    """Populations that stand for the kept levels: `amount` over exp(`log_unit`).

    The unit is the effective exchange rate itself, which may leave the doubles.
    """

    amount: FloatArray  # (n_sets, n_kept, n_kept): set, kept level reached, kept level left
    log_unit: FloatArray  # (n_kept, n_kept): reached, left

    def flow(self, kept: int, log_rate: FloatArray) -> FloatArray:
        """Flow out of one kept level at exp(`log_rate`), shape (n_sets, n_kept, n_rates)."""
        rate = np.exp(np.minimum(log_rate - self.log_unit[:, kept, None], 700.0))
        return self.amount[:, :, kept, None] * rate


def _kept_feed(
    pairs: Pairs, node: Node, by_exchange: FloatArray, factored: FactoredInterior
) -> _KeptFeed:
    n_kept = len(factored.ladder.kept)
    amount = np.zeros((len(by_exchange), n_kept, n_kept))
    unit = np.zeros((n_kept, n_kept))
    kt = const.BOLTZMANN_EV_K * factored.radiation_temperature_k
    talk = np.isfinite(node.log_exchange)
    lower, upper = pairs.lower[talk], pairs.upper[talk]
    amount[:, lower, upper] = by_exchange[:, talk]
    unit[lower, upper] = node.log_exchange[talk] - pairs.barrier_ev[talk] / kt
    return _KeptFeed(amount, unit)


def _captured(ladder: Ladder, temperature_k: float, by_spectrum: FloatArray) -> FloatArray:
    """Spectral recombination into each level, weighed: shape (n_sets, n_kept, n_levels)."""
    weights = recombination_weights(ladder.bound_free, temperature_k)
    captured = np.zeros((*by_spectrum.shape[:2], len(ladder.levels)))
    for n, place in ladder.by_n():
        sigma = ladder.bound_free.cross_section_cm2[n - 1]
        captured[:, :, place] = (by_spectrum * weights[n - 1]) @ sigma.T
    return captured * (0.5 * ladder.levels.statistical_weight)


def _feed(factored: FactoredInterior, source: FloatArray) -> FloatArray:
    """Populations of the interior fed by `source`, over their weights; idle levels take nothing."""
    if not source.shape[-1]:
        return source
    flat = source.reshape(-1, source.shape[-1]).copy()
    flat[:, factored.ladder.interior.idle] = 0.0
    return factored.feed(flat).reshape(source.shape)


def _add_photoionization(
    factored: FactoredInterior, fates: FloatArray, feed: FloatArray, out: FloatArray
) -> None:
    position = factored.ladder.interior.position
    lost = feed * (factored.weight * factored.photoionization)
    out[:, position] -= np.einsum("ka,ska->sa", fates[:, position], lost)


def _add_kept_lines(
    factored: FactoredInterior,
    fates: FloatArray,
    kept: _KeptFeed,
    feed: FloatArray,
    out: FloatArray,
) -> None:
    """Lines with a kept level at one end or both."""
    ladder = factored.ladder
    populations = np.zeros((*feed.shape[:2], len(ladder.levels)))
    populations[:, :, ladder.interior.position] = feed * factored.weight
    for k, lines in enumerate(factored.kept_lines):
        outward = kept.flow(k, lines.log_out)
        inward = populations[:, :, lines.position] * np.exp(lines.log_in)
        counted = np.ones(len(lines.position), dtype=np.bool_)
        for other, position in enumerate(ladder.kept_position.tolist()):
            here = np.flatnonzero(lines.position == position)
            inward[:, :, here] = kept.flow(other, lines.log_in[here])
            counted[here] = other > k  # a line between two kept levels stands in both lists
        gain = fates[:, lines.position] - fates[:, ladder.kept_position[k], None]
        weight = np.einsum("ska,ka->sa", outward - inward, gain)
        place = line_places(ladder, k, lines.position)
        out[:, place[counted]] += weight[:, counted]


def _add_lines(
    factored: FactoredInterior, fates: FloatArray, feed: FloatArray, out: FloatArray
) -> None:
    """Lines inside the interior, in the symmetric form."""
    ladder, inside = factored.ladder, factored.ladder.interior
    kt = const.BOLTZMANN_EV_K * factored.radiation_temperature_k
    tables = half_angle_tables(ladder, kt)
    blocks = slice(inside.shape.n_unknowns)
    root = np.exp(factored.log_root_weight)
    upward, downward = np.empty((2, inside.shape.n_unknowns))
    coupling = np.empty(inside.shape.n_couplings)
    lines = block_lines(ladder, tables, root[blocks], kt)
    geometric_means(*lines, upward, downward, coupling)
    fate = fates[:, inside.position]
    pair_weights(
        lines.top,
        lines.first_n,
        lines.strength_start,
        lines.start,
        lines.coupling_start,
        lines.root_weight,
        coupling,
        np.ascontiguousarray(feed[:, :, blocks]),
        np.ascontiguousarray(fate[:, blocks]),
        out,
    )
    if len(ladder.shells):
        means = shell_means(ladder, *tables, kt)
        inner, outer = root[blocks], root[inside.shape.n_unknowns :]
        to_blocks = means[0] * np.outer(outer, inner)
        among = means[1] * np.outer(outer, outer)
        _add_shell_lines(factored, fate, feed, (to_blocks, to_blocks, among), out)


def _add_cold_lines(
    factored: FactoredInterior, fates: FloatArray, feed: FloatArray, out: FloatArray
) -> None:
    """Lines inside the interior, where weights leave the doubles."""
    ladder, inside = factored.ladder, factored.ladder.interior
    fate, top = fates[:, inside.position], ladder.resolve_l_to
    above, below = rate_blocks(ladder, factored.radiation_temperature_k)
    for l, (up, down) in enumerate(zip(above, below, strict=True)):
        x, y = inside.shape.part(feed, l)[..., None], inside.shape.part(feed, l + 1)[..., None, :]
        p, q = inside.shape.part(fate, l)[:, :, None], inside.shape.part(fate, l + 1)[:, None, :]
        weight = np.einsum("skab,kab->sab", up * x - down.T * y, q - p)
        begin, end = ladder.dipole.offset[l : l + 2]
        block = out[:, begin:end].reshape(len(out), top - l, top - l - 1)
        block[:, inside.first_n[l] - l - 1 :, inside.first_n[l + 1] - l - 2 :] += weight
    if len(ladder.shells):
        rates = shell_rates(ladder, factored.radiation_temperature_k)
        _add_shell_lines(factored, fate, feed, (rates.into, rates.out, rates.among), out)


def _add_shell_lines(
    factored: FactoredInterior,
    fate: FloatArray,
    feed: FloatArray,
    rates: tuple[FloatArray, FloatArray, FloatArray],
    out: FloatArray,
) -> None:
    """Lines of whole shells: rates up and down by (shell, level), and from row to column among."""
    ladder, inside = factored.ladder, factored.ladder.interior
    up, down, among = rates
    n_blocks, start = inside.shape.n_unknowns, len(ladder.dipole.strength_per_s)
    levels, shells = ladder.shells.to_levels.shape[1], len(ladder.shells)
    middle = start + shells * levels
    to_levels = out[:, start:middle].reshape(-1, shells, levels)
    to_shells = out[:, middle:].reshape(-1, shells, shells)
    position = inside.position[:n_blocks]
    for chance, by_set in zip(fate, feed.transpose(1, 0, 2), strict=True):
        low, high = chance[:n_blocks], chance[n_blocks:]
        for s, x in enumerate(by_set):
            flow = up * x[:n_blocks] - down * x[n_blocks:, None]
            to_levels[s][:, position] += flow * np.subtract.outer(high, low)
            # Row and column are the shells left and reached; each pair is counted below the
            # diagonal.
            flow = among * x[n_blocks:, None] - among.T * x[n_blocks:]
            to_shells[s] += np.tril(flow * -np.subtract.outer(high, high), -1)
