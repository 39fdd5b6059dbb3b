"""Whole shells: what the levels of one n become where l is populated by statistical weight.

In the symmetric form of the network, strength S = A sqrt(g_u / g_l), a whole shell is the
projection of its levels on the unit vector sqrt(g_nl / g_n), g_n = 2 n^2:

    shell n  <-> level (n', l'):  sum over l = l' +- 1 of S sqrt(g_nl / g_n)
    shell n  <-> shell n':        sum over all pairs of   S sqrt(g_nl g_n'l' / (g_n g_n'))
    sigma_n = sum over l of (2l + 1) sigma_nl / n^2

These are the averages over the upper and the sums over the lower levels of a line, exactly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from .bound_bound import DipoleBlocks
from .bound_free import BoundFree


@dataclass(frozen=True, slots=True, eq=False)
class Shells:
    """Lines of whole shells; symmetric strengths A sqrt(g_upper / g_lower) in s^-1.

    Attributes
    ----------
    n : ndarray of int, shape (n_shells,)
        The shells, ascending: all above the highest n that is resolved in l.
    to_levels : ndarray, shape (n_shells, n_resolved)
        Lines to every level below them, in the order of the LevelSet, the ground state first.
    among : ndarray, shape (n_shells, n_shells)
        Lines to one another; symmetric, zero diagonal.
    """

    n: IntArray
    to_levels: FloatArray
    among: FloatArray

    def __len__(self) -> int:
        """Count the shells."""
        return len(self.n)


def whole_shells(
    lines: DipoleBlocks, continuum: BoundFree, resolve_l_to: int
) -> tuple[DipoleBlocks, BoundFree, Shells]:
    """Average the shells above `resolve_l_to` over l.

    Parameters
    ----------
    lines : DipoleBlocks
        Every line up to the highest shell.
    continuum : BoundFree
        Cross sections up to the highest shell.
    resolve_l_to : int, dimensionless
        Highest n that stays resolved in l, 1 to ``lines.n_max``.

    Returns
    -------
    lines : DipoleBlocks
        Those among resolved levels.
    continuum : BoundFree
        With one row for each whole shell.
    shells : Shells
        Lines of the whole shells; empty where every level is resolved.
    """
    n = np.arange(resolve_l_to + 1, lines.n_max + 1)
    n_levels = resolve_l_to * (resolve_l_to + 1) // 2
    shells = Shells(n, np.zeros((len(n), n_levels)), np.zeros((len(n), len(n))))
    if len(n):
        for l in range(lines.n_max - 1):
            _add_block(lines.block(l), l, resolve_l_to, shells)
        shells.among[...] += shells.among.T.copy()
        lines = _lowest(lines, resolve_l_to)
        continuum = _averaged(continuum, resolve_l_to)
    for array in (shells.n, shells.to_levels, shells.among):
        array.flags.writeable = False
    return lines, continuum, shells


def _add_block(block: FloatArray, l: int, top: int, shells: Shells) -> None:
    """Add the lines between l (rows) and l + 1 (columns) to those of the shells."""
    n = shells.n.astype(float)
    root, root_above = np.sqrt(2.0 * l + 1.0) / n, np.sqrt(2.0 * l + 3.0) / n
    # The first row and column of a shell, and how many shells have these l.
    row, column = max(top - l, 0), max(top - l - 1, 0)
    if l < top:
        position = np.arange(l + 1, top + 1) * np.arange(l, top) // 2 + l
        shells.to_levels[:, position] += block[:row, column:].T * root_above[:, None]
        position = np.arange(l + 2, top + 1) * np.arange(l + 1, top) // 2 + l + 1
        shells.to_levels[:, position] += block[row:, :column] * root[:, None]
    first, second = len(n) - (len(block) - row), len(n) - (block.shape[1] - column)
    scale = np.outer(root[first:], root_above[second:])
    shells.among[first:, second:] += block[row:, column:] * scale


def _lowest(lines: DipoleBlocks, top: int) -> DipoleBlocks:
    """Lines among levels n <= `top`, copied, so that the rest can be given up."""
    blocks = [lines.block(l)[: top - l, : top - l - 1].ravel() for l in range(top - 1)]
    offset = np.concatenate([[0], np.cumsum([len(block) for block in blocks])]).astype(np.int64)
    strengths = np.concatenate([np.zeros(0), *blocks])
    strengths.flags.writeable = False
    return DipoleBlocks(top, lines.charge, strengths, offset)


def _averaged(continuum: BoundFree, top: int) -> BoundFree:
    rows = list(continuum.cross_section_cm2[:top])
    for sigma in continuum.cross_section_cm2[top:]:
        n = len(sigma)
        mean = ((2.0 * np.arange(n) + 1.0) / n**2)[None, :] @ sigma
        mean.flags.writeable = False
        rows.append(mean)
    return BoundFree(continuum.n_max, continuum.charge, continuum.grid, tuple(rows))
