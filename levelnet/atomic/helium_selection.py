"""What selectors of rates pick among the levels and lines of He I."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ..arrays import BoolArray, IntArray
from .helium_levels import HeliumLevels, term_numbers
from .selection import Selector
from .term_patterns import TermPattern, line_selected


def term_mask(selector: Selector, levels: HeliumLevels) -> BoolArray:
    """Terms whose recombination and photoionization are selected, shape (n_levels,)."""
    if selector.process != "bound_free" or not isinstance(selector.upper, TermPattern):
        return np.zeros(len(levels), dtype=np.bool_)
    return selector.upper.matches(levels.n, levels.l, levels.spin)


def term_pair_mask(
    selector: Selector, levels: HeliumLevels, upper: IntArray, lower: IntArray
) -> BoolArray:
    """Dipole transitions between excited terms that are selected.

    Parameters
    ----------
    selector : Selector
        What is wanted.
    levels : HeliumLevels
        Every term.
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in `levels` of both ends, the upper one higher in energy.
    """
    above, below = selector.upper, selector.lower
    between = isinstance(above, TermPattern) and isinstance(below, TermPattern)
    if selector.process != "bound_bound" or not between or selector.to_ground:
        return np.zeros(len(upper), dtype=np.bool_)
    assert isinstance(above, TermPattern) and isinstance(below, TermPattern)
    masks = (
        side.matches(levels.n[ends], levels.l[ends], levels.spin[ends])
        for side, ends in ((above, upper), (below, lower))
    )
    return np.logical_and(*masks)


def ground_line_mask(selector: Selector, lines: Sequence[str]) -> BoolArray:
    """Lines to the ground state, such as "2 3P1-1 1S", whose A or escape is selected."""
    pattern = selector.upper
    acts = selector.process == "escape" or selector.to_ground
    if not acts or not isinstance(pattern, TermPattern):
        return np.zeros(len(lines), dtype=np.bool_)
    uppers = [name.partition("-")[0] for name in lines]
    chosen = [
        line_selected(pattern, *term_numbers(one), int(one[-1]) if one[-1].isdigit() else None)
        for one in uppers
    ]
    return np.array(chosen, dtype=np.bool_)
