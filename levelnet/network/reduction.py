"""Exact reduction of one ladder onto its kept levels, at one T_r or tabulated over ln T_r.

At one T_r the interior enters through the fates P_K^i (chance that an atom in interior level K
reaches kept level i first):

    exchange   R_ij = R_ij(direct) + sum_K R_iK P_K^j
    capture    A_i(T_m, T_r) = lambda^3(T_m) sum_e exp(-e/kT_m) G_ie(T_r),
               G_ie = sum over all levels of P^i times the spectral recombination into it.

Matter temperature enters only through the electron energies e of the quadrature, so G gives every
T_m exactly; B_i follows by detailed balance at T_m = T_r. What is stored is ln G and ln of the
exchange, the latter downward in energy and with the smallest Boltzmann factor of its detour kept
out, so that it stays in the doubles down to the coldest field. Diagonals are formed as sums
afterwards.

References
----------
Ali-Haimoud & Hirata 2010, Phys. Rev. D 82, 063521; Burgin 2009, Bull. Lebedev Phys. Inst. 36, 110.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import dijkstra

from .. import constants as const
from ..arrays import BoolArray, FloatArray, IntArray
from ..atomic.bound_free import recombination_weights
from .assembly import FactoredInterior, Workspace, factor_interior
from .ladder import Ladder

# Tables are split at this T_r. Below it, exchange over a high barrier leaves the doubles (with
# {2s, 2p} kept it is e^-986 of an ordinary rate); what is left of it is the Boltzmann factor.
WARM_K = 30.0
# Barriers over kT up to which exchange is still computed: chances of both halves of the detour are
# products of Boltzmann factors down to e^-600.
_HIGHEST_BARRIER = 600.0


@dataclass(frozen=True, slots=True, eq=False)
class Node:
    """The reduction at one T_r.

    Attributes
    ----------
    log_exchange : ndarray, shape (n_pairs,)
        ln of the downward exchange rate (s^-1) times exp(barrier / kT_r), of each pair of kept
        levels;
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
        Energy from the upper level up to the nearest interior level it can go through; 0 where a
        direct line exists.
    """

    lower: IntArray
    upper: IntArray
    barrier_ev: FloatArray


def exchange_pairs(ladder: Ladder) -> Pairs:
    """List the pairs of kept levels and the barrier between them."""
    lower, upper = np.triu_indices(len(ladder.kept), 1)
    climb = _least_climbs_ev(ladder)
    barrier = climb[upper, lower]
    # A pair that no detour joins does not talk; its barrier means nothing.
    return Pairs(lower, upper, np.where(np.isfinite(barrier), barrier, 0.0))


def _least_climbs_ev(ladder: Ladder) -> FloatArray:
    """Least sum of climbs from each kept level to each other through the interior, eV.

    Falls cost nothing, each climb costs its energy: in a cold field an atom that must climb out of
    a level competes with all that fall from it. No detour needs more than two shells above the
    kept. Kept levels begin and end detours but do not pass them on, so each stands twice in the
    graph. Shape (n_kept, n_kept), infinite where there is no way.
    """
    top = min(ladder.n_max, int(ladder.kept.n.max()) + 2)
    n, l = ladder.levels.n, ladder.levels.l
    reach = np.flatnonzero((n > 1) & (n <= top))
    shell = ladder.levels.shell[reach]
    allowed = np.abs(np.subtract.outer(l[reach], l[reach])) == 1
    allowed |= np.logical_or.outer(shell, shell)
    one, other = np.nonzero(allowed & (n[reach][:, None] != n[reach][None, :]))
    start, end = reach[one], reach[other]
    energy, size, kept = ladder.levels.energy_ev, len(n), ladder.kept_position
    cost = np.maximum(0.0, energy[end] - energy[start])
    ends_here = np.isin(end, kept)
    graph = sparse.csr_array(
        (cost, (start, np.where(ends_here, end + size, end))), shape=(2 * size, 2 * size)
    )
    return np.asarray(dijkstra(graph, indices=kept)[:, kept + size])


def reduce_at(
    ladder: Ladder, pairs: Pairs, radiation_temperature_k: float, workspace: Workspace | None = None
) -> Node:
    """Reduce the network at one T_r: one factorization, one right side per kept level."""
    factored = factor_interior(ladder, radiation_temperature_k, workspace)
    fates = all_fates(factored)
    return Node(
        log_exchange(factored, pairs, fates),
        log_spectrum(ladder, radiation_temperature_k, fates),
    )


def all_fates(factored: FactoredInterior) -> FloatArray:
    """Chance of each level to reach each kept level first, shape (n_kept, n_levels); own is 1."""
    ladder = factored.ladder
    fates = np.zeros((len(ladder.kept), len(ladder.levels)))
    if ladder.interior.n_unknowns:
        fates[:, ladder.interior.position] = factored.fates(factored.to_kept)
    fates[:, ladder.kept_position] = np.eye(len(ladder.kept))
    return fates


def log_exchange(factored: FactoredInterior, pairs: Pairs, fates: FloatArray) -> FloatArray:
    """Ln of the downward exchange of each pair times exp(barrier / kT_r), shape (n_pairs,)."""
    ladder = factored.ladder
    kt = const.BOLTZMANN_EV_K * factored.radiation_temperature_k
    through = fates.copy()
    through[:, ladder.kept_position] = 0.0  # a kept level is an exit of its own
    log_total = np.full((len(ladder.kept), len(ladder.kept)), -np.inf)
    for upper, lines in enumerate(factored.kept_lines):
        reach = through[:, lines.position]
        detour = np.full(len(ladder.kept), -np.inf)
        if reach.any():
            top = lines.log_out[reach.any(axis=0)].max()
            with np.errstate(divide="ignore"):
                # A line up to another kept level may be far stronger; it has no part in the detour.
                detour = top + np.log(reach @ np.exp(np.minimum(lines.log_out - top, 0.0)))
        log_direct = dict(zip(lines.position.tolist(), lines.log_out.tolist(), strict=True))
        for lower, own in enumerate(ladder.kept_position.tolist()):
            log_total[upper, lower] = np.logaddexp(detour[lower], log_direct.get(own, -np.inf))
    return np.asarray(log_total[pairs.upper, pairs.lower] + pairs.barrier_ev / kt)


def beyond_doubles(pairs: Pairs, coldest_k: float) -> BoolArray:
    """Pairs whose exchange leaves the doubles somewhere between `coldest_k` and WARM_K."""
    kt = const.BOLTZMANN_EV_K * coldest_k
    found: BoolArray = pairs.barrier_ev > _HIGHEST_BARRIER * kt
    return found & (coldest_k < WARM_K)


def log_spectrum(ladder: Ladder, temperature_k: float, fates: FloatArray) -> FloatArray:
    """Ln of the spectral capture into each kept level, shape (n_kept, n_energies)."""
    weights = recombination_weights(ladder.bound_free, temperature_k)
    weighted = fates * (0.5 * ladder.levels.statistical_weight)
    spectrum = np.zeros((len(ladder.kept), weights.shape[1]))
    for n, place in ladder.by_n():
        shell = weighted[:, place] @ ladder.bound_free.cross_section_cm2[n - 1]
        spectrum += shell * weights[n - 1]
    return np.log(np.maximum(spectrum, 1e-300))
