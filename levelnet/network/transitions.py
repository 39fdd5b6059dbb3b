"""Every dipole transition of a ladder as one list, and where its strength stands."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ..arrays import IntArray
from .ladder import Ladder, level_position


class Transitions(NamedTuple):
    """Every dipole transition between excited levels, whole shells among them.

    Attributes
    ----------
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in the LevelSet.
    place : ndarray of int, shape (n_transitions,)
        Where each stands among all strengths: those of the dipole blocks, then those of whole
        shells to levels, then among whole shells.
    """

    upper: IntArray
    lower: IntArray
    place: IntArray


def n_places(ladder: Ladder) -> int:
    """Number of places for strengths, those that are zero counted."""
    shells = ladder.shells
    return len(ladder.dipole.strength_per_s) + shells.to_levels.size + shells.among.size


def transitions(ladder: Ladder) -> Transitions:
    """List the transitions of a ladder: by the lower l of both ends, then those of whole shells."""
    parts = [_block_transitions(ladder, l) for l in range(ladder.resolve_l_to - 1)]
    first, shells = ladder.shell_position, ladder.shells
    start = len(ladder.dipole.strength_per_s)
    shell, level = np.nonzero(shells.to_levels)
    place = start + shell * shells.to_levels.shape[1] + level
    parts.append(np.stack([first[shell], level, place])[:, level > 0])
    high, low = np.tril_indices(len(shells), -1)
    start += shells.to_levels.size
    parts.append(np.stack([first[high], first[low], start + high * len(shells) + low]))
    return Transitions(*np.concatenate(parts, axis=1))


def _block_transitions(ladder: Ladder, l: int) -> IntArray:
    strength = ladder.dipole.block(l)
    row, column = np.nonzero(strength)
    n, other = row + l + 1, column + l + 2
    own = level_position(n, np.full_like(n, l))
    partner = level_position(other, np.full_like(n, l + 1))
    rises = other > n
    place = ladder.dipole.offset[l] + row * strength.shape[1] + column
    ends = np.where(rises, partner, own), np.where(rises, own, partner)
    listed: IntArray = np.stack([*ends, place])
    return listed[:, n > 1]  # the Lyman lines act through their escape


def line_places(ladder: Ladder, kept: int, position: IntArray) -> IntArray:
    """Where the lines of a kept level to levels at `position` stand among the strengths."""
    n, l = int(ladder.kept.n[kept]), int(ladder.kept.l[kept])
    other, orbit = ladder.levels.n[position], ladder.levels.l[position]
    offset, top = ladder.dipole.offset, ladder.resolve_l_to
    place = offset[min(l, top - 2)] + (n - l - 1) * (top - l - 1) + other - l - 2
    if l > 0:
        below = offset[l - 1] + (other - l) * (top - l) + n - l - 1
        place = np.where(orbit > l, place, below)
    row = (position - int(ladder.shell_position[0])) if len(ladder.shells) else 0
    shell = len(ladder.dipole.strength_per_s) + row * ladder.shells.to_levels.shape[1]
    return np.asarray(np.where(orbit < 0, shell + ladder.kept_position[kept], place))
