"""Patterns of terms of He I, as selectors of rates have them.

``2 3P`` is one term, ``2`` every term of n = 2, ``3-10``, ``3-*`` or ``*`` a range of n (``*``: every
excited term), each with a multiplicity (1 or 3) and a letter or ``[l=25]`` behind a space where that
is meant: ``3-* 1D``, ``* 3``, ``30 3[l=25]``. Lines to the ground state tell the levels J of 2 3P
apart: ``2 3P1``, ``2 3P2``.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from ..arrays import BoolArray, IntArray
from ..errors import InputError
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
_LONGEST = 40


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
        short = text if len(text) <= _LONGEST else f"{text[:_LONGEST]}..."
        raise InputError(f'{column} = "He I {short}": is no pattern of terms; allowed are {_FORMS}')
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
