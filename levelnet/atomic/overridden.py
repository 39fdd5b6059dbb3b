"""Lines and cross sections of an atom with overrides in them, strength by strength."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from ..arrays import BoolArray, FloatArray, IntArray
from .bound_bound import DipoleBlocks
from .bound_free import BoundFree
from .overrides import Override
from .selection import LevelPattern, Selector


def with_overrides(
    lines: DipoleBlocks,
    continuum: BoundFree,
    overrides: Sequence[Override],
    resolve_l_to: int,
) -> tuple[DipoleBlocks, BoundFree]:
    """Lines and continuum with the factors of `overrides` on them.

    A strength stands for a rate and its inverse, a cross section for recombination and
    photoionization, so that detailed balance holds whatever the factors are.

    Parameters
    ----------
    lines, continuum : DipoleBlocks, BoundFree
        Of one atom; they are not changed, and given back themselves where nothing is overridden.
    overrides : sequence of Override
        Those of other processes and those that match nothing here are passed over.
    resolve_l_to : int
        Above this n a level is part of a whole shell, which patterns with an l do not select.
    """
    for_lines = [one for one in overrides if one.selector.process == "bound_bound"]
    for_levels = [one for one in overrides if one.selector.process == "bound_free"]
    if for_lines:
        strength = lines.strength_per_s.copy()
        for l in range(lines.n_max - 1):
            here = [one for one in for_lines if _reaches(one.selector, l)]
            if here:
                first, end = lines.offset[l : l + 2]
                block = strength[first:end].reshape(lines.block(l).shape)
                block *= _line_factors(here, l, lines.n_max, resolve_l_to)
        strength.flags.writeable = False
        lines = replace(lines, strength_per_s=strength)
    if for_levels:
        shells = tuple(
            _shell(sigma, n, for_levels, resolve_l_to)
            for n, sigma in enumerate(continuum.cross_section_cm2, start=1)
        )
        continuum = replace(continuum, cross_section_cm2=shells)
    return lines, continuum


def transition_factors(
    overrides: Sequence[Override], n: IntArray, l: IntArray, n_lower: IntArray, l_lower: IntArray
) -> FloatArray:
    """Factor on each dipole transition (n, l) -> (n_lower, l_lower); l = -1 is a whole shell."""
    factor = np.ones(np.broadcast_shapes(*map(np.shape, (n, l, n_lower, l_lower))))
    for one in overrides:
        factor[_pairs(one.selector, n, l, n_lower, l_lower)] *= one.factor
    return factor


def _pairs(
    selector: Selector, n: IntArray, l: IntArray, n_lower: IntArray, l_lower: IntArray
) -> BoolArray:
    upper, lower = selector.upper, selector.lower
    if selector.process != "bound_bound" or not (
        isinstance(upper, LevelPattern) and isinstance(lower, LevelPattern)
    ):
        return np.zeros(np.broadcast_shapes(*map(np.shape, (n, l, n_lower, l_lower))), np.bool_)
    chosen = upper.matches(n, l) & lower.matches(n_lower, l_lower)
    return np.asarray(chosen & (np.asarray(n) > n_lower))


def _reaches(selector: Selector, l: int) -> bool:
    """Whether a selector of lines may select some between l and l + 1."""
    sides = selector.upper, selector.lower
    return all(side is not None and side.l in {None, l, l + 1} for side in sides)


def _line_factors(
    overrides: Sequence[Override], l: int, n_max: int, resolve_l_to: int
) -> FloatArray:
    """Factors on block l: (n, l) along the rows and (n', l + 1) along the columns."""
    n, m = np.arange(l + 1, n_max + 1)[:, None], np.arange(l + 2, n_max + 1)[None, :]
    of_n, of_m = np.where(n <= resolve_l_to, l, -1), np.where(m <= resolve_l_to, l + 1, -1)
    # Either may be the upper level; only one of the two differs from 1 anywhere.
    downward = transition_factors(overrides, n, of_n, m, of_m)
    upward = transition_factors(overrides, m, of_m, n, of_n)
    return downward * upward


def _shell(
    sigma: FloatArray, n: int, overrides: Sequence[Override], resolve_l_to: int
) -> FloatArray:
    """Cross sections of one shell; the same array where none is selected."""
    l = np.arange(n) if n <= resolve_l_to else np.full(n, -1)
    factor = np.ones(n)
    for one in overrides:
        if isinstance(one.selector.upper, LevelPattern):
            factor[one.selector.upper.matches(np.full(n, n), l)] *= one.factor
    if np.all(factor == 1.0):
        return sigma
    changed = sigma * factor[:, None]
    changed.flags.writeable = False
    return changed
