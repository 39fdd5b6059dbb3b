"""Patterns of terms of He I, as selectors of rates have them.

``2 3P`` is one term, ``2`` every term of n = 2, ``3-10``, ``3-*`` or ``*`` a range of n (``*``:
every excited term), each with a multiplicity (1 or 3) and a letter or ``[l=25]`` behind a space
where that is meant: ``3-* 1D``, ``* 3``, ``30 3[l=25]``. Lines to the ground state tell the levels
J of 2 3P apart: ``2 3P1``, ``2 3P2``.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import BoolArray, IntArray
from ..errors import InputError, cut_short
from .levels import ORBITAL_LETTERS

GROUND_TERM = "1 1S"
ENDLESS = 10**9  # n beyond any atom, for "3-*"

_N = r"\d{1,6}"
_PATTERN = re.compile(
    rf"(?:(?P<all>\*)|(?P<low>{_N})(?:-(?P<high>\*|{_N}))?)"
    rf"(?:\s+(?P<spin>[13])(?:(?P<letter>[{ORBITAL_LETTERS.upper()}])(?P<j>\d)?|\[l=(?P<l>{_N})\])?)?"
)
_FORMS = (
    "2 3P, 2, 3-10, 3-* or *, each with a multiplicity (1 or 3) and a letter or [l=25] behind a "
    "space where that is meant, as in 3-* 1D"
)


class HeliumSize(NamedTuple):
    """What helium has.

    Attributes
    ----------
    n_max : int
        Highest n; 0: helium is inert.
    resonance_to : int
        Highest n of n 1P whose line to 1 1S is open.
    intercombination : bool
        Whether 2 3P1-1 1S is on.
    absorption : bool
        Whether neutral hydrogen absorbs inside the lines.
    ion : bool
        Whether He II has levels.
    """

    n_max: int = 0
    resonance_to: int = 2
    intercombination: bool = True
    absorption: bool = False
    ion: bool = False


# Terms besides n 1P from which lines go to the ground state, with their levels J.
_FORBIDDEN = ((2, 0, 1, None), (2, 1, 1, 1), (2, 1, 1, 2))


@dataclass(frozen=True, slots=True)
class TermPattern:
    """Terms with low <= n <= high, of one spin and l or, where these are None, of every one.

    `j` is of one level of a term; only lines to the ground state know it.
    """

    low: int
    high: int
    spin: int | None
    l: int | None
    j: int | None = None

    def matches(self, n: IntArray, l: IntArray, spin: IntArray) -> BoolArray:
        """True where a term is selected; the arrays broadcast."""
        chosen = (n >= self.low) & (n <= self.high)
        if self.spin is not None:
            chosen = chosen & (spin == self.spin)
        return np.asarray(chosen if self.l is None else chosen & (l == self.l))

    def inside(self, n_max: int) -> TermPattern:
        """The same without what an atom has not; may be empty (low above high)."""
        low = self.low if self.l is None else max(self.low, self.l + 1)
        return TermPattern(low, min(self.high, n_max), self.spin, self.l, self.j)

    def common(self, other: TermPattern) -> TermPattern | None:
        """Terms in both patterns; None where there are none."""
        for one, two in ((self.spin, other.spin), (self.l, other.l), (self.j, other.j)):
            if None not in {one, two} and one != two:
                return None
        both = TermPattern(
            max(self.low, other.low),
            min(self.high, other.high),
            other.spin if self.spin is None else self.spin,
            other.l if self.l is None else self.l,
            other.j if self.j is None else self.j,
        ).inside(ENDLESS)
        return both if both.low <= both.high else None

    def pairs_with(self, lower: TermPattern) -> bool:
        """Whether some dipole line may go from here to `lower`, both inside an atom.

        Between terms of one n the energies decide, so that a line may be missing all the same.
        """
        if None not in {self.spin, lower.spin} and self.spin != lower.spin:
            return False
        if None not in {self.l, lower.l} and abs((self.l or 0) - (lower.l or 0)) != 1:
            return False
        return self.low <= self.high and lower.low <= min(lower.high, self.high)


def parse_term(column: str, text: str) -> TermPattern:
    """Make a pattern of excited terms; `column` is for messages."""
    found = _PATTERN.fullmatch(text)
    if found is None:
        raise InputError(
            f'{column} = "He I {cut_short(text)}": is no pattern of terms; allowed are {_FORMS}'
        )
    low = int(found["low"] or 2)
    high = ENDLESS if "*" in {found["all"], found["high"]} else int(found["high"] or low)
    letter, number = found["letter"], found["l"]
    l = ORBITAL_LETTERS.index(letter.lower()) if letter else None
    l = l if number is None else int(number)
    if not 2 <= low <= high:
        raise InputError(
            f'{column} = "He I {text}": excited terms have n from 2 up, and a range ascends'
        )
    if l is not None and l >= high:
        raise InputError(
            f'{column} = "He I {text}": is no term; l = {l} needs n of at least {l + 1}'
        )
    spin = None if found["spin"] is None else (int(found["spin"]) - 1) // 2
    j = None if found["j"] is None else int(found["j"])
    if j is not None and (low, high, l, spin) != (2, 2, 1, 1):
        raise InputError(f'{column} = "He I {text}": levels J are told apart of 2 3P alone')
    return TermPattern(low, high, spin, l, j)


def terms_overlap(one: tuple[object, object], two: tuple[object, object]) -> bool:
    """Whether some atom has a rate that both pairs of patterns, upper and lower, select."""
    both = [
        a.common(b)
        for a, b in zip(one, two, strict=True)
        if isinstance(a, TermPattern) and isinstance(b, TermPattern)
    ]
    if any(part is None for part in both):
        return False
    if len(both) < 2 or both[0] is None or both[1] is None:
        return True
    return both[1].low == 1 or both[0].pairs_with(both[1])


def in_helium(process: str, upper: object, lower: object, helium: HeliumSize) -> bool:
    """Whether helium has a rate of He I that patterns of terms select."""
    if not isinstance(upper, TermPattern) or not helium.n_max:
        return helium.n_max > 0
    to_ground = isinstance(lower, TermPattern) and lower.low == 1
    if process == "escape" or to_ground:
        top = min(helium.n_max, helium.resonance_to)
        lines = [*_FORBIDDEN, (upper.low, 1, 0, None)] if upper.low <= top else [*_FORBIDDEN]
        if not helium.intercombination:
            lines.remove((2, 1, 1, 1))
        return any(line_selected(upper, *line) for line in lines)
    inside = upper.inside(helium.n_max)
    if not isinstance(lower, TermPattern):
        return inside.low <= inside.high
    return inside.pairs_with(lower.inside(helium.n_max))


def line_selected(pattern: TermPattern, n: int, l: int, spin: int, j: int | None) -> bool:
    """Whether a pattern selects the line to the ground state from one term, or one J of it."""
    if pattern.j not in {None, j}:
        return False
    ends = (np.array(number) for number in (n, l, spin))
    return bool(pattern.matches(*ends))


def term_patterns(
    process: str, upper: str, lower: str
) -> tuple[TermPattern | None, TermPattern | None]:
    """Patterns of the cells of a row of He I, without the species.

    `lower` "1 1S" becomes a pattern of the ground state.
    """
    if process == "two_photon":
        if upper not in {"2 1S", ""} or lower:
            raise InputError(f'upper = "He I {cut_short(upper)}": two_photon is of 2 1S alone')
        return None, None
    above = parse_term("upper", upper)
    to_ground = process == "bound_bound" and lower == GROUND_TERM
    if above.j is not None and not to_ground and process != "escape":
        raise InputError(f'upper = "He I {upper}": only lines to {GROUND_TERM} tell J apart')
    if to_ground:
        return above, TermPattern(1, 1, 0, 0)
    if process == "bound_bound":
        below = parse_term("lower", lower)
        if below.j is not None:
            raise InputError(f'lower = "He I {lower}": only lines to {GROUND_TERM} tell J apart')
        return above, below
    if lower:
        raise InputError(f'lower = "{cut_short(lower)}": {process} takes none; leave it empty')
    return above, None
