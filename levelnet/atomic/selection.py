"""Selectors of rates, one language for all who name rates: process, upper level, lower level.

A level pattern is ``3d`` (one level), ``3`` (every l of n = 3), ``3-10`` or ``3-*`` (a range of n),
or ``*`` (every excited level), each with an orbital letter or ``[l=25]`` behind it where one l is
meant: ``3-10p``, ``*d``. A whole shell has no l, so only patterns without one select it. Levels are
those of hydrogen unless the species stands before: ``He II 3d``, and ``He I 2 3P`` with the
patterns of :mod:`levelnet.atomic.term_patterns`.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np

from ..arrays import BoolArray, IntArray
from ..errors import InputError, cut_short
from .levels import ORBITAL_LETTERS, LevelSet
from .term_patterns import ENDLESS as _ENDLESS
from .term_patterns import (
    GROUND_TERM,
    HeliumSize,
    TermPattern,
    in_helium,
    term_patterns,
    terms_overlap,
)

PROCESSES = ("bound_bound", "bound_free", "two_photon", "escape", "compton", "absorption")
"""What a selector may name first."""

_N = r"\d{1,6}"
_PATTERN = re.compile(
    rf"(?:(?P<all>\*)|(?P<low>{_N})(?:-(?P<high>\*|{_N}))?)"
    rf"(?:(?P<letter>[{ORBITAL_LETTERS}])|\[l=(?P<l>{_N})\])?"
)
_FORMS = (
    "3d, 3, 3-10, 3-* or *, each with an orbital letter or [l=25] behind it where one l is meant"
)


class AtomSize(NamedTuple):
    """What atoms have: levels of hydrogen to `n_max`, in l to `resolve_l_to`, open Lyman lines."""

    n_max: int
    resolve_l_to: int
    lyman_lines: int
    helium: HeliumSize = HeliumSize()


ANY_ATOM = AtomSize(
    _ENDLESS, _ENDLESS, _ENDLESS, HeliumSize(_ENDLESS, _ENDLESS, absorption=True, ion=True)
)


@dataclass(frozen=True, slots=True)
class LevelPattern:
    """Levels with low <= n <= high, of one l or, where l is None, of every l and whole shells."""

    low: int
    high: int
    l: int | None

    def matches(self, n: IntArray, l: IntArray) -> BoolArray:
        """True where (n, l) is selected; n and l broadcast, l = -1 is a whole shell."""
        chosen = (n >= self.low) & (n <= self.high)
        return np.asarray(chosen if self.l is None else chosen & (l == self.l))

    def inside(self, atom: AtomSize) -> LevelPattern:
        """The same, without what the atom does not have; may be empty (low above high)."""
        top = atom.n_max if self.l is None else min(atom.n_max, atom.resolve_l_to)
        low = self.low if self.l is None else max(self.low, self.l + 1)
        return LevelPattern(low, min(self.high, top), self.l)

    def common(self, other: LevelPattern) -> LevelPattern | None:
        """Levels in both patterns; None where there are none."""
        if self.high < other.low or other.high < self.low:
            return None
        if None not in {self.l, other.l} and self.l != other.l:
            return None
        l = other.l if self.l is None else self.l
        both = LevelPattern(max(self.low, other.low), min(self.high, other.high), l)
        both = both.inside(ANY_ATOM)
        return both if both.low <= both.high else None


@dataclass(frozen=True, slots=True)
class Selector:
    """Rates of one process; :func:`parse_selector` makes and checks it.

    Attributes
    ----------
    process : str
        One of `PROCESSES`.
    upper, lower : LevelPattern, of He I TermPattern, or None
        bound_bound has both, bound_free and escape `upper`, the others neither.
    text : str
        As written: "bound_bound 3-10p 2s".
    species : str
        "H I", "He I" or "He II".
    """

    process: str
    upper: LevelPattern | TermPattern | None
    lower: LevelPattern | TermPattern | None
    text: str
    species: str = "H I"

    @property
    def to_ground(self) -> bool:
        """Whether lines of He I to its ground state are selected, by their Einstein A."""
        return isinstance(self.lower, TermPattern) and self.lower.low == 1

    @property
    def transition(self) -> tuple[int, int, int, int] | None:
        """(n, l) of the upper and of the lower level where exactly one transition is named."""
        if self.process != "bound_bound" or self.species != "H I":
            return None
        if self.upper is None or self.lower is None:
            return None
        (n, top, l), (m, last, k) = ((one.low, one.high, one.l) for one in (self.upper, self.lower))
        return (n, l, m, k) if n == top and m == last and l is not None and k is not None else None

    def exists_in(self, atom: AtomSize) -> bool:
        """Whether the atom has a rate that this selects."""
        helium = atom.helium
        if self.process == "absorption":
            return helium.absorption
        if self.species == "He I":
            return in_helium(self.process, self.upper, self.lower, helium)
        if self.species == "He II":
            atom = AtomSize(helium.n_max, helium.n_max, 1)
            return helium.ion and self._in_hydrogenic(atom)
        return self._in_hydrogenic(atom)

    def _in_hydrogenic(self, atom: AtomSize) -> bool:
        if not isinstance(self.upper, LevelPattern):
            return True
        if self.process == "escape":
            top = min(atom.n_max, atom.lyman_lines + 1)
            return self.upper.low <= min(self.upper.high, top)
        upper = self.upper.inside(atom)
        if not isinstance(self.lower, LevelPattern):
            return upper.low <= upper.high
        return _has_pair(upper, self.lower.inside(atom))

    def overlaps(self, other: Selector) -> bool:
        """Whether some atom has a rate that both select."""
        if (self.process, self.species) != (other.process, other.species):
            return False
        if self.upper is None or other.upper is None:
            return True
        one, two = (self.upper, self.lower), (other.upper, other.lower)
        if self.species == "He I":
            return terms_overlap(one, two)
        upper, lower = (_common(*ends) for ends in zip(one, two, strict=True))
        if lower is None or upper is None:
            return upper is not None and self.lower is None
        return _has_pair(upper, lower)


def _common(one: object, two: object) -> LevelPattern | None:
    if isinstance(one, LevelPattern) and isinstance(two, LevelPattern):
        return one.common(two)
    return None


def _has_pair(upper: LevelPattern, lower: LevelPattern) -> bool:
    """Whether there is a dipole pair: n_upper > n_lower, l differing by 1.

    The highest n of each side allow the most l, so they decide.
    """
    n = upper.high
    m = min(lower.high, n - 1)
    if n < upper.low or m < lower.low:
        return False
    if upper.l is not None and lower.l is not None:
        return abs(upper.l - lower.l) == 1 and upper.l < n and lower.l < m
    if upper.l is not None:  # some l of the lower level is a neighbour
        return upper.l < n and upper.l - 1 < m
    return lower.l is None or lower.l < m  # l + 1 fits below n, since l < m < n


def parse_selector(process: str, upper: str, lower: str) -> Selector:
    """Make a selector from the three cells of a row.

    Parameters
    ----------
    process : str
        "bound_bound" (both patterns: every dipole pair with n_upper > n_lower >= 2), "bound_free"
        (`upper`: recombination and photoionization of a level), "two_photon" (`upper` 2s or empty),
        "escape" (`upper`: 2p, 3-10p, ... of the line np-1s) or "compton" (neither).
        "absorption" (neither) is that of H I 1s inside the lines of He I and between them.
    upper, lower : str
        Level patterns; empty where the process has none. With "He I" or "He II" in front, rates of
        helium; `lower` need not say it again. bound_bound of He I: every line between excited terms
        from the upper to the lower by energy, or, with `lower` "1 1S", the Einstein A of lines to
        the ground state; two_photon: ``He I 2 1S``, ``He II 2s``; escape: ``He I 2 1P``,
        ``He I 2 3P1``, ``He II 2p``.

    Returns
    -------
    Selector
        What is selected.

    Raises
    ------
    InputError
        If it is no selector, or none that could select anything in any atom.
    """
    if process not in PROCESSES:
        raise InputError(f'process "{cut_short(process)}": allowed are {", ".join(PROCESSES)}')
    text = " ".join(part for part in (process, upper, lower) if part)
    species, upper, lower = _species_of(upper, lower)
    if species != "H I" and process in {"compton", "absorption"}:
        raise InputError(f'upper = "{species}": {process} has one rate; leave it empty')
    made = _parsed(process, upper, lower, text, species)
    return made if species == "H I" else replace(made, species=species)


def _species_of(upper: str, lower: str) -> tuple[str, str, str]:
    """Species of a row, and its patterns without it."""
    ends = [re.fullmatch(r"(?:(He II|He I)(?!\w)\s*)?(.*)", text) for text in (upper, lower)]
    named = [end[1] for end in ends if end is not None]
    if lower and named[1] is not None and named[1] != named[0]:
        raise InputError(f'lower = "{cut_short(lower)}": upper is of {named[0] or "H I"}')
    first, second = (end[2] if end is not None else "" for end in ends)
    return named[0] or "H I", first, second


def _parsed(process: str, upper: str, lower: str, text: str, species: str) -> Selector:
    if species == "He I":
        return _existing(Selector(process, *term_patterns(process, upper, lower), text, species))
    if process == "bound_bound":
        if re.match(r"1(?!\d)", lower):
            raise InputError(
                f'lower = "{cut_short(lower)}": lines to the ground state act through their '
                "escape; use process escape"
            )
        return _existing(
            Selector(process, _pattern("upper", upper), _pattern("lower", lower), text)
        )
    if lower:
        raise InputError(f'lower = "{cut_short(lower)}": {process} takes none; leave it empty')
    if process == "bound_free":
        return _existing(Selector(process, _pattern("upper", upper), None, text))
    if process == "escape":
        return _existing(Selector(process, _p_levels(upper), None, text))
    if species != "H I" and process == "two_photon":
        upper = upper or "2s"
    allowed = {"2s", ""} if process == "two_photon" else {""}
    if upper not in allowed:
        what = "allowed is 2s, or nothing" if process == "two_photon" else "leave it empty"
        raise InputError(f'upper = "{cut_short(upper)}": {process} has one rate; {what}')
    return Selector(process, None, None, text)


def check_exists(selector: Selector, atom: AtomSize, where: str) -> None:
    """Raise InputError, which begins with `where`, if the atom has no rate that is selected."""
    if not selector.exists_in(atom):
        raise InputError(
            f'{where}: selector "{selector.text}" matches nothing in {_what(selector, atom)}'
        )


def _what(selector: Selector, atom: AtomSize) -> str:
    """What was searched, for messages."""
    helium = atom.helium
    if selector.process == "absorption":
        return 'these lines; it acts where helium recombines and lines.helium = "continuum"'
    if selector.species == "H I":
        return (
            f"hydrogen with n_max = {atom.n_max}, resolve_l_to = {atom.resolve_l_to} and "
            f"lyman_lines = {atom.lyman_lines}"
        )
    if not helium.n_max:
        return "helium, which is inert with helium.n_max = 0 or a helium fraction of 0"
    if selector.species == "He II":
        return (
            f"He II with helium.n_max = {helium.n_max}"
            if helium.ion
            else 'He II, which has no levels with helium_ion = "saha"'
        )
    off = "" if helium.intercombination else ", 2 3P1-1 1S off"
    return (
        f"He I with helium.n_max = {helium.n_max} and lines to {GROUND_TERM} from n 1P up to "
        f"n = {min(helium.n_max, helium.resonance_to)}{off}"
    )


def level_mask(selector: Selector, levels: LevelSet) -> BoolArray:
    """Levels whose recombination and photoionization are selected, shape (n_levels,)."""
    if selector.process != "bound_free" or not isinstance(selector.upper, LevelPattern):
        return np.zeros(len(levels), dtype=np.bool_)
    return selector.upper.matches(levels.n, levels.l)


def pair_mask(selector: Selector, levels: LevelSet, upper: IntArray, lower: IntArray) -> BoolArray:
    """Dipole transitions that are selected.

    Parameters
    ----------
    selector : Selector
        What is wanted.
    levels : LevelSet
        Every level.
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in `levels` of both ends of dipole transitions.

    Returns
    -------
    ndarray of bool, shape (n_transitions,)
        False throughout for any process but bound_bound.
    """
    above, below = selector.upper, selector.lower
    if selector.process != "bound_bound" or not (
        isinstance(above, LevelPattern) and isinstance(below, LevelPattern)
    ):
        return np.zeros(len(upper), dtype=np.bool_)
    chosen = above.matches(levels.n[upper], levels.l[upper])
    return chosen & below.matches(levels.n[lower], levels.l[lower])


def line_mask(selector: Selector, n_upper: IntArray) -> BoolArray:
    """Lyman lines, given by the n of their upper levels, whose escape is selected."""
    n = np.asarray(n_upper)
    if selector.process != "escape" or not isinstance(selector.upper, LevelPattern):
        return np.zeros(len(n), dtype=np.bool_)
    return selector.upper.matches(n, np.ones_like(n))


def _existing(selector: Selector) -> Selector:
    if not selector.exists_in(ANY_ATOM):
        raise InputError(
            f'selector "{selector.text}": selects nothing in any atom; a dipole transition goes '
            "from a higher n to a lower one and changes l by 1, and l is below n"
        )
    return selector


def _p_levels(text: str) -> LevelPattern:
    pattern = _pattern("upper", text)
    if pattern.l not in {None, 1}:
        raise InputError(f'upper = "{text}": lines to the ground state start from p levels')
    return LevelPattern(pattern.low, pattern.high, 1)


def _pattern(column: str, text: str) -> LevelPattern:
    found = _PATTERN.fullmatch(text)
    if found is None:
        raise InputError(
            f'{column} = "{cut_short(text)}": is no level pattern; allowed are {_FORMS}'
        )
    low = int(found["low"] or 2)
    high = _ENDLESS if "*" in {found["all"], found["high"]} else int(found["high"] or low)
    letter, number = found["letter"], found["l"]
    l = ORBITAL_LETTERS.index(letter) if letter else None if number is None else int(number)
    if not 2 <= low <= high:
        raise InputError(
            f'{column} = "{text}": excited levels have n from 2 up, and a range ascends'
        )
    if l is not None and l >= high:
        raise InputError(f'{column} = "{text}": is no level; l = {l} needs n of at least {l + 1}')
    return LevelPattern(low, high, l)
