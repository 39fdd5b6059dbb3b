"""What one reduction of He I hangs on: the derivative of any sum of its results by every rate.

As for hydrogen (:mod:`levelnet.network.weights`), a pair of levels enters by its net flow times the
difference of the fates of its two ends. Kept levels have fates too, 1 for themselves and 0 for the
others, and populations, what the exchange out of them feeds; so lines between eliminated levels,
from kept levels and among them are one formula. T_r is never so low here that a rate leaves the
doubles.
"""

from __future__ import annotations

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.helium_transitions import block_start, helium_blocks
from .helium import HeliumLadders, Reduction, factor_helium, line_rates, reduce_factored
from .weights import NodeWeights


def add_helium_node_weights(
    ladders: HeliumLadders,
    radiation_temperature_k: float,
    by_result: FloatArray,
    total: NodeWeights,
) -> None:
    """Add the derivatives at one T_r to `total`.

    Parameters
    ----------
    ladders : HeliumLadders
        He I.
    radiation_temperature_k : float, K
        T_r.
    by_result : ndarray, shape (n_sets, n_pairs + n_kept * n_energies)
        Derivative of each sum by what :func:`levelnet.network.helium.reduce_helium` gives.
    total : NodeWeights
        Added to; `bound_bound` has one column for each place of
        :func:`levelnet.atomic.helium_transitions.helium_places`.
    """
    here = factor_helium(ladders, radiation_temperature_k)
    reduced = reduce_factored(ladders, here)
    n_kept, n_sets = len(ladders.kept), len(by_result)
    lower, upper = np.triu_indices(n_kept, 1)
    by_spectrum = by_result[:, len(lower) :].reshape(n_sets, n_kept, -1) / reduced.spectrum
    captured = by_spectrum @ here.captured.T
    # Populations that stand for the kept levels: set, level reached, level left.
    kept = np.zeros((n_sets, n_kept, n_kept))
    talk = reduced.exchange[upper, lower] > 0.0
    lower, upper, by_exchange = lower[talk], upper[talk], by_result[:, : len(talk)][:, talk]
    kept[:, lower, upper] = by_exchange / reduced.exchange[upper, lower]
    out = np.array([lines.out for lines in here.kept_lines])
    populations = _populations(ladders, here, captured + kept @ out)
    total.bound_free[...] += np.einsum("ka,ska->sa", reduced.fates, captured)
    lost = populations * here.photoionization_per_s
    total.bound_free[...] -= np.einsum("ka,ska->sa", reduced.fates, lost)
    populations[:, :, ladders.kept_position] = kept
    _add_lines(ladders, radiation_temperature_k, reduced.fates, populations, total.bound_bound)


def _populations(ladders: HeliumLadders, here: Reduction, source: FloatArray) -> FloatArray:
    """Eliminated levels fed by `source`, shape (n_sets, n_kept, n_levels); kept ones are 0."""
    result = np.zeros(source.shape)
    for side, inside in zip(here.interior, ladders.interior, strict=True):
        if side is None:
            continue
        fed = source[:, :, inside.position].reshape(-1, len(inside.position))
        fed = np.where(inside.idle, 0.0, fed)
        found = side.weight * side.fates(fed / side.weight)
        result[:, :, inside.position] = found.reshape(*source.shape[:2], -1)
    return result


def _add_lines(
    ladders: HeliumLadders,
    temperature_k: float,
    fates: FloatArray,
    populations: FloatArray,
    out: FloatArray,
) -> None:
    kt = const.BOLTZMANN_EV_K * temperature_k
    for spin, l in helium_blocks(ladders.lines):
        block = ladders.lines.block(spin, l)
        rows, columns = (ladders.levels.series(k, spin) for k in (l, l + 1))
        # The ground state is no end of these lines, and the triplets have no level n = 1.
        rows = rows[ladders.levels.n[rows] > 1]
        first = len(block) - len(rows)
        own, other = rows[:, None], columns[None, :]
        up, back = line_rates(ladders, own, other, block[first:], kt)
        flow = populations[:, :, rows, None] * up - populations[:, :, None, columns] * back
        gain = fates[:, None, columns] - fates[:, rows, None]
        start = block_start(ladders.lines, spin, l)
        part = out[:, start : start + block.size].reshape(len(out), *block.shape)
        part[:, first:] += np.einsum("skab,kab->sab", flow, gain)
