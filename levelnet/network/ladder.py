"""One species' ladder of levels: its lines, its continuum, and which levels are kept."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from .. import constants as const
from ..arrays import BoolArray, FloatArray, IntArray
from ..atomic.bound_bound import DipoleBlocks, dipole_blocks
from ..atomic.bound_free import BoundFree, bound_free
from ..atomic.levels import LevelSet, hydrogenic_levels, ionization_scale_ev
from ..atomic.overridden import with_overrides
from ..atomic.overrides import Override
from ..errors import InputError
from ..numerics.block_system import BlockShape
from .reduced import KeptLevels


@dataclass(frozen=True, slots=True, eq=False)
class Interior:
    """The levels to be eliminated, ordered by l and then n.

    Attributes
    ----------
    first_n : ndarray of int, shape (n_max,)
        Lowest n of each block l; every n from there to n_max is in the block.
    shape : BlockShape
        Sizes and offsets.
    n, l : ndarray of int, shape (n_unknowns,)
        Quantum numbers.
    position : ndarray of int, shape (n_unknowns,)
        Where each unknown stands in the LevelSet.
    idle : ndarray of bool, shape (n_unknowns,)
        Kept levels that lie inside a block: they take no part in the elimination.
    """

    first_n: IntArray
    shape: BlockShape
    n: IntArray
    l: IntArray
    position: IntArray
    idle: BoolArray


@dataclass(frozen=True, slots=True, eq=False)
class Ladder:
    """One species: levels, dipole lines, photoionization, and the split into kept and interior.

    Attributes
    ----------
    species : str
        "H I".
    charge : int
        Nuclear charge.
    n_max : int
        Highest n.
    levels : LevelSet
        Every level, the ground state first.
    energy_excess_ev : ndarray, shape (n_levels,), eV
        Energy of each level (relative to the continuum) above its non-relativistic energy.
    dipole : DipoleBlocks
        Symmetric line strengths.
    bound_free : BoundFree
        Cross sections.
    kept : KeptLevels
        The kept levels.
    kept_position : ndarray of int, shape (n_kept,)
        Where they stand in `levels`.
    interior : Interior
        The others, without the ground state.
    """

    species: str
    charge: int
    n_max: int
    levels: LevelSet
    energy_excess_ev: FloatArray
    dipole: DipoleBlocks
    bound_free: BoundFree
    kept: KeptLevels
    kept_position: IntArray
    interior: Interior


def level_position(n: IntArray, l: IntArray) -> IntArray:
    """Where (n, l) stands in a LevelSet ordered by n and then l."""
    return np.asarray(n) * (np.asarray(n) - 1) // 2 + np.asarray(l)


@lru_cache(maxsize=2)
def _atomic_data(n_max: int, charge: int) -> tuple[DipoleBlocks, BoundFree]:
    """Lines and continuum of one atom: the same for every choice of energies and kept levels."""
    return dipole_blocks(n_max, charge), bound_free(n_max, charge)


def hydrogen_ladder(
    n_max: int,
    energies: str,
    kept: tuple[tuple[int, int], ...],
    overrides: tuple[Override, ...] = (),
) -> Ladder:
    """Build the ladder of hydrogen.

    Parameters
    ----------
    n_max : int
        Highest principal quantum number.
    energies : "measured" or "nonrelativistic"
        Level energies.
    kept : tuple of (n, l)
        Levels to keep: those that talk to the ground state, and any other asked for.
    overrides : tuple of Override, optional
        Factors on lines and cross sections.

    Returns
    -------
    Ladder
        Levels, lines and continuum.
    """
    levels = hydrogenic_levels(n_max, energies)
    lines, continuum = with_overrides(*_atomic_data(n_max, 1), overrides, n_max)
    n, l = (np.array(x) for x in zip(*sorted(kept), strict=True))
    if np.any((n < 2) | (n > n_max) | (l < 0) | (l >= n)):
        raise InputError(
            f"kept levels {kept}: allowed are (n, l) with 2 <= n <= {n_max}, 0 <= l < n"
        )
    position = level_position(n, l)
    plain = ionization_scale_ev(1) / levels.n.astype(float) ** 2
    return Ladder(
        "H I",
        1,
        n_max,
        levels,
        plain - levels.ionization_energy_ev,
        lines,
        continuum,
        KeptLevels(
            n,
            l,
            levels.statistical_weight[position],
            levels.energy_ev[position],
            levels.ionization_energy_ev[position],
        ),
        position,
        _interior(n_max, set(kept)),
    )


def _interior(n_max: int, kept: set[tuple[int, int]]) -> Interior:
    first = []
    for l in range(n_max):
        n = max(l + 1, 2)
        while (n, l) in kept:
            n += 1
        first.append(min(n, n_max + 1))
    sizes = [n_max + 1 - n for n in first]
    l_all = np.repeat(np.arange(n_max), sizes)
    n_all = np.concatenate([np.arange(n, n_max + 1) for n in first])
    idle = np.array(
        [level in kept for level in zip(n_all.tolist(), l_all.tolist(), strict=True)],
        dtype=np.bool_,
    )
    return Interior(
        np.array(first),
        BlockShape.of(sizes),
        n_all,
        l_all,
        level_position(n_all, l_all),
        idle,
    )


def lines_of(ladder: Ladder, n: int, l: int) -> tuple[IntArray, FloatArray]:
    """Dipole partners of level (n, l) among the excited levels.

    Returns
    -------
    position : ndarray of int, shape (n_partners,)
        Where the partners stand in `ladder.levels`.
    strength : ndarray, shape (n_partners,), s^-1
        Symmetric strength A sqrt(g_u/g_l).
    """
    positions, strengths = [], []
    if l + 1 < ladder.n_max:
        partner = np.arange(l + 2, ladder.n_max + 1)
        positions.append(level_position(partner, np.full_like(partner, l + 1)))
        strengths.append(ladder.dipole.block(l)[n - l - 1])
    if l > 0 and n > l:
        partner = np.arange(max(l, 2), ladder.n_max + 1)
        positions.append(level_position(partner, np.full_like(partner, l - 1)))
        strengths.append(ladder.dipole.block(l - 1)[partner - l, n - l - 1])
    position, strength = np.concatenate(positions), np.concatenate(strengths)
    real = strength > 0.0
    return position[real], strength[real]


def transition_over_kt(
    ladder: Ladder, lower: IntArray, upper: IntArray, temperature_k: float
) -> tuple[FloatArray, FloatArray]:
    """Return (x0, x): non-relativistic and actual energy of lines over kT, both positive."""
    kt = const.BOLTZMANN_EV_K * temperature_k
    n_lower, n_upper = ladder.levels.n[lower].astype(float), ladder.levels.n[upper].astype(float)
    plain = ionization_scale_ev(ladder.charge) * (n_lower**-2.0 - n_upper**-2.0) / kt
    shift = (ladder.energy_excess_ev[upper] - ladder.energy_excess_ev[lower]) / kt
    return plain, plain + shift
