"""From a setup to the atom of one run: its ladder, kept levels and resonance lines."""

from __future__ import annotations

import numpy as np

from ..atomic.bound_bound import einstein_a
from ..atomic.levels import level_name
from ..atomic.overridden import transition_factors
from ..atomic.overrides import Override
from ..atomic.physics import UNCHANGED, Scales
from ..escape.treatment import ResonanceLines
from ..network.ladder import Ladder, hydrogen_ladder
from ..network.reduced import KeptLevels
from .setup import Setup


def open_lyman_lines(setup: Setup) -> int:
    """How many Lyman lines exchange photons with the ground state."""
    count = setup.lines.lyman_lines
    highest = setup.hydrogen.n_max - 1
    return highest if isinstance(count, str) else count


def build_ladder(
    setup: Setup, n_max: int | None = None, keeps: tuple[tuple[int, int], ...] = ()
) -> Ladder:
    """Hydrogen of this setup; 2s, 2p and every np whose Lyman line is open are kept.

    Parameters
    ----------
    setup : Setup
        The run.
    n_max : int, optional
        A smaller atom than asked, for estimates.
    keeps : tuple of (n, l), optional
        Further levels to keep, as a line treatment may ask.
    """
    top = n_max or setup.hydrogen.n_max
    count = min(open_lyman_lines(setup), top - 1)
    kept = {(2, 0), *((n, 1) for n in range(2, count + 2))}
    kept |= {level for level in keeps if level[0] <= top}
    resolved = min(setup.hydrogen.highest_resolved, top)
    return hydrogen_ladder(top, setup.hydrogen.energies, tuple(kept), resolved, setup.rates.network)


def lyman_lines(ladder: Ladder, count: int | None = None) -> ResonanceLines:
    """Give the first `count` Lyman lines among the kept levels; None: all of them."""
    return resonance_lines(ladder.kept, count)


def resonance_lines(
    kept: KeptLevels,
    count: int | None = None,
    scales: Scales = UNCHANGED,
    overrides: tuple[Override, ...] = (),
) -> ResonanceLines:
    """Lyman lines from kept np levels.

    Parameters
    ----------
    kept : KeptLevels
        The kept levels, energies already scaled.
    count : int, optional
        How many lines, from Lyman-alpha up; None: one from every kept np level.
    scales : Scales, optional
        What changed constants do to the rates.
    overrides : tuple of Override, optional
        Factors on lines among excited levels, which broaden the upper level.
    """
    highest = np.inf if count is None else count + 1
    upper = np.flatnonzero((kept.l == 1) & (kept.n <= highest))
    n = kept.n[upper]
    decay = [_decay_rate_per_s(k, overrides) for k in n.tolist()]
    return ResonanceLines(
        tuple(f"{level_name(k, 1)}-1s" for k in n.tolist()),
        upper,
        einstein_a(n, np.ones_like(n), np.ones_like(n), np.zeros_like(n)) * scales.line_rate,
        kept.energy_ev[upper],
        kept.statistical_weight[upper] / 2.0,
        np.array(decay) * scales.line_rate,
    )


def _decay_rate_per_s(n: int, overrides: tuple[Override, ...]) -> float:
    """Spontaneous decay rate of level np in all its lines."""
    to_s, to_d = np.arange(1, n), np.arange(3, n)
    total = 0.0
    for lower, l in ((to_s, 0), (to_d, 2)):
        factor = transition_factors(overrides, *np.broadcast_arrays(n, 1, lower, l))
        total += float(np.sum(einstein_a(n, 1, lower, l) * factor))
    return total
