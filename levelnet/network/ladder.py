"""One species' ladder of levels: its lines, its continuum, and which levels are kept."""

from __future__ import annotations

from collections.abc import Iterator
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
from ..atomic.shells import Shells, whole_shells
from ..errors import InputError
from ..numerics.block_system import BlockShape
from .reduced import KeptLevels


@dataclass(frozen=True, slots=True, eq=False)
class Interior:
    """The levels to be eliminated, ordered by l and then n; whole shells last, as a border.

    Attributes
    ----------
    first_n : ndarray of int, shape (resolve_l_to,)
        Lowest n of each block l; every n from there to resolve_l_to is in the block.
    shape : BlockShape
        Sizes and offsets of the blocks.
    n, l : ndarray of int, shape (n_unknowns,)
        Quantum numbers; l = -1 for a whole shell.
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

    @property
    def n_unknowns(self) -> int:
        """Levels in blocks and whole shells together."""
        return len(self.n)


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
    resolve_l_to : int
        Highest n with levels resolved in l; above it stand whole shells.
    levels : LevelSet
        Every level, the ground state first, whole shells last.
    energy_excess_ev : ndarray, shape (n_levels,), eV
        Energy of each level (relative to the continuum) above its non-relativistic energy.
    dipole : DipoleBlocks
        Symmetric line strengths among levels resolved in l.
    shells : Shells
        Symmetric line strengths of whole shells.
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
    resolve_l_to: int
    levels: LevelSet
    energy_excess_ev: FloatArray
    dipole: DipoleBlocks
    shells: Shells
    bound_free: BoundFree
    kept: KeptLevels
    kept_position: IntArray
    interior: Interior

    @property
    def shell_position(self) -> IntArray:
        """Where the whole shells stand in `levels`, shape (n_shells,)."""
        return np.arange(len(self.levels) - len(self.shells), len(self.levels))

    def by_n(self) -> Iterator[tuple[int, slice]]:
        """Give each excited n with the place of its levels, or of its whole shell, in `levels`."""
        first = 1
        for n in range(2, self.n_max + 1):
            count = n if n <= self.resolve_l_to else 1
            yield n, slice(first, first + count)
            first += count


def level_position(n: IntArray, l: IntArray) -> IntArray:
    """Where (n, l), resolved in l, stands in a LevelSet ordered by n and then l."""
    return np.asarray(n) * (np.asarray(n) - 1) // 2 + np.asarray(l)


@lru_cache(maxsize=2)
def _atomic_data(n_max: int, charge: int) -> tuple[DipoleBlocks, BoundFree]:
    """Lines and continuum of one atom: the same for every choice of energies and kept levels."""
    return dipole_blocks(n_max, charge), bound_free(n_max, charge)


def hydrogen_ladder(
    n_max: int,
    energies: str,
    kept: tuple[tuple[int, int], ...],
    resolve_l_to: int | None = None,
    overrides: tuple[Override, ...] = (),
    charge: int = 1,
) -> Ladder:
    """Build the ladder of hydrogen, or of the helium ion.

    Parameters
    ----------
    n_max : int
        Highest principal quantum number.
    energies : "measured" or "nonrelativistic"
        Level energies.
    kept : tuple of (n, l)
        Levels to keep: those that talk to the ground state, and any other asked for; all resolved
        in l.
    resolve_l_to : int, optional
        Highest n with levels resolved in l, 2 to n_max; None: n_max.
    overrides : tuple of Override, optional
        Factors on lines and cross sections, those inside whole shells too.
    charge : int, dimensionless
        1: hydrogen; 2: the helium ion.

    Returns
    -------
    Ladder
        Levels, lines and continuum.
    """
    top = n_max if resolve_l_to is None else resolve_l_to
    if not 2 <= top <= n_max:
        raise InputError(f"resolve_l_to = {top}: allowed are 2 to n_max = {n_max}")
    n, l = (np.array(x) for x in zip(*sorted(kept), strict=True))
    if np.any((n < 2) | (n > top) | (l < 0) | (l >= n)):
        raise InputError(f"kept levels {kept}: allowed are (n, l) with 2 <= n <= {top}, 0 <= l < n")
    levels = hydrogenic_levels(n_max, energies, charge, resolve_l_to=top)
    resolved = with_overrides(*_atomic_data(n_max, charge), overrides, n_max)
    lines, continuum, shells = whole_shells(*resolved, top)
    position = level_position(n, l)
    plain = ionization_scale_ev(charge) / levels.n.astype(float) ** 2
    return Ladder(
        {1: "H I", 2: "He II"}[charge],
        charge,
        n_max,
        top,
        levels,
        plain - levels.ionization_energy_ev,
        lines,
        shells,
        continuum,
        KeptLevels(
            n,
            l,
            levels.statistical_weight[position],
            levels.energy_ev[position],
            levels.ionization_energy_ev[position],
        ),
        position,
        interior_of(top, shells.n, set(kept)),
    )


def interior_of(top: int, shells: IntArray, kept: set[tuple[int, int]], shift: int = 0) -> Interior:
    """Order the levels to be eliminated.

    Parameters
    ----------
    top : int
        Highest n resolved in l.
    shells : ndarray of int
        n of whole shells.
    kept : set of (n, l)
        Levels that are kept.
    shift : int
        What is added to positions, where other levels stand first.
    """
    first = []
    for l in range(top):
        n = max(l + 1, 2)
        while (n, l) in kept:
            n += 1
        first.append(min(n, top + 1))
    sizes = [top + 1 - n for n in first]
    l_all = np.repeat(np.arange(top), sizes)
    n_all = np.concatenate([np.arange(n, top + 1) for n in first])
    idle = np.array(
        [level in kept for level in zip(n_all.tolist(), l_all.tolist(), strict=True)],
        dtype=np.bool_,
    )
    return Interior(
        np.array(first),
        BlockShape.of(sizes),
        np.concatenate([n_all, shells]),
        np.concatenate([l_all, np.full_like(shells, -1)]),
        np.concatenate([level_position(n_all, l_all), top * (top - 1) // 2 + shells - 1]) + shift,
        np.concatenate([idle, np.zeros(len(shells), dtype=np.bool_)]),
    )


def lines_of(ladder: Ladder, n: int, l: int) -> tuple[IntArray, FloatArray]:
    """Dipole partners of level (n, l), resolved in l, among the excited levels and whole shells.

    Returns
    -------
    position : ndarray of int, shape (n_partners,)
        Where the partners stand in `ladder.levels`.
    strength : ndarray, shape (n_partners,), s^-1
        Symmetric strength A sqrt(g_u/g_l).
    """
    top = ladder.resolve_l_to
    own = int(level_position(np.asarray(n), np.asarray(l)))
    positions, strengths = [], []
    if l + 1 < top:
        partner = np.arange(l + 2, top + 1)
        positions.append(level_position(partner, np.full_like(partner, l + 1)))
        strengths.append(ladder.dipole.block(l)[n - l - 1])
    if l > 0 and n > l:
        partner = np.arange(max(l, 2), top + 1)
        positions.append(level_position(partner, np.full_like(partner, l - 1)))
        strengths.append(ladder.dipole.block(l - 1)[partner - l, n - l - 1])
    positions.append(ladder.shell_position)
    strengths.append(ladder.shells.to_levels[:, own])
    position, strength = np.concatenate(positions), np.concatenate(strengths)
    real = strength > 0.0
    return position[real], strength[real]


def line_groups(ladder: Ladder) -> Iterator[tuple[IntArray, IntArray, FloatArray]]:
    """Give every line between excited levels once: positions of both ends, symmetric strength.

    One group for each l (with l + 1), then those of whole shells with levels and with one another;
    arrays of shape (n_lines,), the first end nowhere above the second in a pair with a shell.
    """
    top = ladder.resolve_l_to
    for l in range(top - 1):
        n, other = np.meshgrid(
            np.arange(max(l + 1, 2), top + 1), np.arange(l + 2, top + 1), indexing="ij"
        )
        strength = ladder.dipole.block(l)[n - l - 1, other - l - 2]
        real = strength > 0.0
        own = level_position(n, np.full_like(n, l))[real]
        yield own, level_position(other, np.full_like(other, l + 1))[real], strength[real]
    shell, level = np.nonzero(ladder.shells.to_levels[:, 1:])
    first = len(ladder.levels) - len(ladder.shells)
    yield level + 1, shell + first, ladder.shells.to_levels[shell, level + 1]
    low, high = np.triu_indices(len(ladder.shells), 1)
    yield low + first, high + first, ladder.shells.among[low, high]


def transition_over_kt(
    ladder: Ladder, lower: IntArray, upper: IntArray, temperature_k: float
) -> tuple[FloatArray, FloatArray]:
    """Return (x0, x): non-relativistic and actual energy of lines over kT, both positive."""
    kt = const.BOLTZMANN_EV_K * temperature_k
    n_lower, n_upper = ladder.levels.n[lower].astype(float), ladder.levels.n[upper].astype(float)
    plain = ionization_scale_ev(ladder.charge) * (n_lower**-2.0 - n_upper**-2.0) / kt
    shift = (ladder.energy_excess_ev[upper] - ladder.energy_excess_ev[lower]) / kt
    return plain, plain + shift
