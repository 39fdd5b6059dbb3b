"""Derivatives by the rates of He I ranked, and summed over groups that atomic physicists name."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from ..arrays import FloatArray
from .groups import Transition
from .helium_weighing import HeliumWeights


def line_weights(helium: HeliumWeights, at: int) -> dict[str, dict[str, float]]:
    """Of each line to 1 1S of one target: by its Einstein A ("strength") and by its "escape"."""
    pairs = zip(helium.lines, helium.strength[at], helium.escape[at], strict=True)
    return {name: {"strength": float(a), "escape": float(p)} for name, a, p in pairs}


def top_terms(helium: HeliumWeights, at: int, count: int) -> tuple[Transition, ...]:
    """Terms with the largest derivatives by their cross sections, largest first."""
    return _ranked(helium.bound_free[at], helium.levels.name, count)


def top_helium_transitions(helium: HeliumWeights, at: int, count: int) -> tuple[Transition, ...]:
    """Dipole transitions between excited terms with the largest derivatives, largest first.

    Names are those of spectroscopy: "2 1P-2 1S".
    """

    def name(k: int) -> str:
        ends = int(helium.upper[k]), int(helium.lower[k])
        return "-".join(helium.levels.name(end) for end in ends)

    return _ranked(helium.bound_bound[at], name, count)


def helium_shares(helium: HeliumWeights, at: int) -> dict[str, float]:
    """Sums over groups of rates of one target: each dipole line stands in one of them.

    Returns
    -------
    dict
        Dimensionless derivatives by a common factor on the group.
    """
    levels, lines = helium.levels, helium.bound_bound[at]
    spin, low = levels.spin[helium.upper], levels.n[helium.upper] == 2
    first, to_two = low & (levels.n[helium.lower] == 2), levels.n[helium.lower] == 2
    shares: dict[str, float] = {}
    names = (("singlets", "2 1P-2 1S"), ("triplets", "2 3P-2 3S"))
    for number, (kind, resonance) in enumerate(names):
        own = spin == number
        shares[resonance] = float(lines[own & first].sum())
        shares[f"other lines of {kind} to n = 2"] = float(lines[own & to_two & ~first].sum())
        shares[f"lines among higher {kind}"] = float(lines[own & ~to_two].sum())
    for number, (kind, _) in enumerate(names):
        cross = helium.bound_free[at][levels.spin == number]
        shares[f"cross sections of {kind}"] = float(cross.sum())
    return shares


def _ranked(weights: FloatArray, name: Callable[[int], str], count: int) -> tuple[Transition, ...]:
    order = np.argsort(-np.abs(weights), kind="stable")[:count].tolist()
    return tuple(Transition(name(k), float(weights[k])) for k in order if weights[k] != 0.0)
