"""Every dipole transition of He I as one list, where its strength stands, and overrides on it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import InputError
from .helium_bound_free import HeliumBoundFree
from .helium_lines import HeliumLines
from .helium_selection import term_mask, term_pair_mask
from .overrides import Override


class HeliumTransitions(NamedTuple):
    """Every dipole transition between excited levels of He I.

    Attributes
    ----------
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions among the levels; which is the upper follows from the energies.
    place : ndarray of int, shape (n_transitions,)
        Where each stands among the strengths of the singlets, then those of the triplets.
    """

    upper: IntArray
    lower: IntArray
    place: IntArray


def helium_transitions(lines: HeliumLines) -> HeliumTransitions:
    """List the transitions, singlets first; the lines to the ground state are none of them."""
    levels, parts = lines.levels, []
    for spin, l in helium_blocks(lines):
        rows, columns = (levels.series(k, spin) for k in (l, l + 1))
        block = lines.block(spin, l)
        row, column = np.nonzero(block)
        place = block_start(lines, spin, l) + row * block.shape[1] + column
        ends = np.array([rows[row - len(block) + len(rows)], columns[column]])
        order = np.argsort(levels.energy_ev[ends], axis=0)
        lower, upper = np.take_along_axis(ends, order, axis=0)
        parts.append(np.stack([upper, lower, place])[:, row + l + 1 > 1])
    return HeliumTransitions(*np.concatenate(parts, axis=1))


def helium_places(lines: HeliumLines) -> int:
    """Number of places for strengths, those that are zero counted."""
    return sum(len(one.strength_per_s) for one in lines.ladders)


def helium_blocks(lines: HeliumLines) -> list[tuple[int, int]]:
    """Spin and lower l of every block of strengths."""
    return [(spin, l) for spin in (0, 1) for l in range(lines.levels.n_max - 1)]


def block_start(lines: HeliumLines, spin: int, l: int) -> int:
    """Place of the first strength of a block."""
    singlets, triplets = lines.ladders
    before = len(singlets.strength_per_s) if spin else 0
    return before + int((triplets if spin else singlets).offset[l])


def with_factors(lines: HeliumLines, factor: FloatArray) -> HeliumLines:
    """Lines with every strength times `factor`, shape (n_places,), dimensionless."""
    sides, start = [], 0
    for blocks in lines.ladders:
        strength = blocks.strength_per_s * factor[start : start + len(blocks.strength_per_s)]
        strength.flags.writeable = False
        sides.append(replace(blocks, strength_per_s=strength))
        start += len(strength)
    return replace(lines, ladders=(sides[0], sides[1]))


def with_helium_overrides(
    lines: HeliumLines, continuum: HeliumBoundFree, overrides: Sequence[Override]
) -> tuple[HeliumLines, HeliumBoundFree]:
    """Lines and continuum of He I with the factors of `overrides` on them.

    Parameters
    ----------
    lines, continuum : HeliumLines, HeliumBoundFree
        Of one atom; given back themselves where nothing is overridden.
    overrides : sequence of Override
        Of He I; those that act elsewhere than on its excited levels are passed over.

    Raises
    ------
    InputError
        If a row selects no line: between terms of one n it goes by their energies.
    """
    for_lines = [one for one in overrides if one.selector.process == "bound_bound"]
    for_levels = [one for one in overrides if one.selector.process == "bound_free"]
    if for_lines:
        found, factor = helium_transitions(lines), np.ones(helium_places(lines))
        for one in for_lines:
            mask = term_pair_mask(one.selector, lines.levels, found.upper, found.lower)
            if not mask.any():
                raise InputError(
                    f'{one.where}: selector "{one.selector.text}" matches no line of He I: the '
                    "upper term has the higher energy"
                )
            factor[found.place[mask]] *= one.factor
        lines = with_factors(lines, factor)
    if for_levels:
        levels = np.ones(len(continuum.levels))
        for one in for_levels:
            levels[term_mask(one.selector, continuum.levels)] *= one.factor
        sigma = continuum.cross_section_cm2 * levels[:, None]
        continuum = replace(continuum, cross_section_cm2=sigma)
    return lines, continuum
