"""Lines of He I to its ground state among the kept levels, and which line lights which."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal, get_args

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.bound_free import photoionization_cross_section
from ..atomic.helium_ground import GroundLines, ground_lines
from ..atomic.helium_levels import HeliumLevels
from ..atomic.helium_widths import OtherDecays, other_decays
from ..atomic.levels import reduced_mass_ratio
from ..atomic.physics import Physics, scales
from ..atomic.species import INTERCOMBINATION_PER_S
from ..errors import InputError
from ..network.helium import HeliumLadders, KeptTerms
from .lines import HIGHEST_FED
from .treatment import ResonanceLines

HigherLines = Literal["free", "closed", "feedback"]
"""What becomes of n 1P -> 1 1S from n = 3: each escapes on its own, and the sum grows with every
line (A P does not depend on n), so that no history converges with n_max; none escapes; or each is
lit by the next line above, which takes back nearly all that it lets go."""

# Lines closer than this in ln nu are one line to what comes from above: 2 3P1 and 2 3P2 are 5e-7
# apart, a hundredth of their Doppler width; 7 1P and 6 1P 4e-3.
_SAME_LINE = 1e-4
_MEASURED = Physics()


def kept_terms(n_max: int, higher: HigherLines) -> KeptTerms:
    """Terms (n, l, spin) of He I that talk to its ground state.

    Parameters
    ----------
    n_max : int
        Highest n of the atom, 2 or above.
    higher : "free", "closed" or "feedback"
        What becomes of n 1P -> 1 1S from n = 3.
    """
    if higher not in get_args(HigherLines):
        raise InputError(f'higher lines = "{higher}": known are {get_args(HigherLines)}')
    highest = {"free": n_max, "closed": 2, "feedback": min(n_max, HIGHEST_FED)}[higher]
    resonance = tuple((n, 1, 0) for n in range(3, highest + 1))
    return ((2, 0, 0), (2, 1, 0), (2, 0, 1), (2, 1, 1), *resonance)


@dataclass(frozen=True, slots=True, eq=False)
class HeliumGroundLines(ResonanceLines):
    """Lines of He I to 1 1S, by energy; arrays of shape (n_lines,).

    Where one level J of a term radiates, `einstein_a_per_s` is its rate times its share of the
    term's weight and `weight_ratio` that of the term, so that depth and rate come out right with
    the population of the term.

    Attributes
    ----------
    ground_rate_per_s : ndarray, s^-1
        Einstein A to the ground state of what radiates.
    others : OtherDecays
        What else empties the upper levels.
    hydrogen_cross_section_cm2 : ndarray, cm^2
        Photoionization cross section of H I 1s at line centre (Stobbe 1930).
    next_above : ndarray of int
        The line that photons of this frequency have passed last; -1: none.
    lit_by : ndarray of int
        The same where its red side is this one's blue side; -1: it sees the blackbody.
    """

    ground_rate_per_s: FloatArray
    others: OtherDecays
    hydrogen_cross_section_cm2: FloatArray
    next_above: IntArray
    lit_by: IntArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        ResonanceLines.__post_init__(self)
        shape = (len(self.names),)
        frozen_array(self, "next_above", shape, int)
        frozen_array(self, "lit_by", shape, int)
        frozen_array(self, "ground_rate_per_s", shape)
        frozen_array(self, "hydrogen_cross_section_cm2", shape)

    @property
    def fed(self) -> bool:
        """Whether any line is lit by another."""
        return bool((self.lit_by >= 0).any())


def helium_ground_lines(
    ladders: HeliumLadders,
    feedback: bool,
    higher: HigherLines = "closed",
    intercombination_rate_per_s: float = INTERCOMBINATION_PER_S,
    physics: Physics = _MEASURED,
) -> HeliumGroundLines:
    """Lines to 1 1S from every kept level.

    Parameters
    ----------
    ladders : HeliumLadders
        He I with at least the levels of :func:`kept_terms` kept.
    feedback : bool
        2 1P (584 A) lights 2 3P1 and 2 3P2 (591 A), and these 2 3S.
    higher : "free", "closed" or "feedback"
        "feedback": each n 1P is lit by (n + 1) 1P, and 2 1P by 3 1P. Free lines see the blackbody
        and light nothing.
    intercombination_rate_per_s : float, s^-1
        Rate of 2 3P1 with the measured constants; 0 switches it off.
    physics : Physics
        Changed constants.
    """
    ground = ground_lines(ladders.levels, intercombination_rate_per_s)
    kept = ladders.kept_position.tolist()
    on = ground.rate_per_s > 0.0
    use = [i for i, level in enumerate(ground.level.tolist()) if level in kept and on[i]]
    use.sort(key=lambda i: float(ground.energy_ev[i]))
    factor, hydrogen = scales(physics, charge=2), scales(physics)
    level, energy = ground.level[use], ground.energy_ev[use] * factor.energy
    rate = ground.rate_per_s[use] * [factor.line_to_ground(ground.kind[i]) for i in use]
    n = ladders.levels.n[level]
    others = other_decays(ladders.lines, level)
    others = replace(
        others,
        energy_ev=others.energy_ev * factor.energy,
        rate_per_s=others.rate_per_s * factor.line_rate,
    )
    spontaneous = np.sum(others.rate_per_s * others.spontaneous, axis=1)
    hydrogen_chi_ev = const.RYDBERG_EV * reduced_mass_ratio(1) * hydrogen.energy
    cross_section = photoionization_cross_section(1, 0, energy / hydrogen_chi_ev - 1.0)
    above = _next_above(np.log(energy))
    return HeliumGroundLines(
        tuple(_name(ground, ladders.levels, i) for i in use),
        np.array([kept.index(one) for one in level.tolist()]),
        rate * ground.share[use],
        energy,
        ladders.levels.statistical_weight[level],  # the ground state has weight 1
        rate + spontaneous,
        rate,
        others,
        cross_section * hydrogen.cross_section,
        above,
        # What comes from n >= 3 is a choice of its own.
        np.where(np.where(n[above] > 2, higher == "feedback", feedback), above, -1),
    )


def with_strengths(lines: HeliumGroundLines, factor: FloatArray) -> HeliumGroundLines:
    """The same with the Einstein A of each line times `factor`, shape (n_lines,), dimensionless."""
    more = (factor - 1.0) * lines.ground_rate_per_s
    return replace(
        lines,
        einstein_a_per_s=factor * lines.einstein_a_per_s,
        ground_rate_per_s=lines.ground_rate_per_s + more,
        decay_rate_per_s=lines.decay_rate_per_s + more,
    )


def _name(ground: GroundLines, levels: HeliumLevels, line: int) -> str:
    kind, term = ground.kind[line], levels.name(int(ground.level[line]))
    j = {"intercombination": "1", "magnetic quadrupole": "2"}.get(kind, "")
    return f"{term}{j}-1 1S"


def _next_above(log_energy: FloatArray) -> IntArray:
    above = np.full(len(log_energy), -1)
    for line, own in enumerate(log_energy):
        higher = np.flatnonzero(log_energy > own + _SAME_LINE)
        if len(higher):
            # Of lines that are one, the highest: 2 3P1 lets the least through.
            one = log_energy < log_energy[higher[0]] + _SAME_LINE
            above[line] = np.flatnonzero(one)[-1]
    return above
