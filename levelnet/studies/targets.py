"""Names of what a study is asked about: "x_e(900)", "z_*", "optical_depth(1100)", "line(3d-2p)"."""

from __future__ import annotations

import math
import re
from typing import NamedTuple

from ..atomic.levels import level_name
from ..atomic.species import HIGHEST_N
from ..errors import InputError, cut_short
from ..quantities import ALIASES, AT_REDSHIFT, OBSERVABLES, at_redshift, known_targets

# As in the grid of a setup.
_HIGHEST_REDSHIFT = 10_000.0
_LETTERS = "".join(level_name(1, l)[-1] for l in range(21))


class Target(NamedTuple):
    """One scalar of a history.

    Attributes
    ----------
    name : str
        Canonical name: the same for every way to write it.
    kind : str
        "x_e", "T_m", "optical_depth", "line", or "observable".
    unit : str
        "1" where there is none.
    redshift : float, dimensionless
        Of "x_e", "T_m" and "optical_depth"; NaN otherwise.
    upper, lower : tuple of int
        (n, l) of both ends of "line"; (0, 0) otherwise.
    """

    name: str
    kind: str
    unit: str
    redshift: float = math.nan
    upper: tuple[int, int] = (0, 0)
    lower: tuple[int, int] = (0, 0)


def parse_target(text: str) -> Target:
    """Read a target as a person writes it.

    Parameters
    ----------
    text : str
        A name or an alias of :data:`levelnet.quantities.OBSERVABLES`; a quantity with its
        redshift (0 to 10000), as in "x_e(900)"; or a line with both levels in either order, as in
        "line(3d-2p)".

    Raises
    ------
    InputError
        If it is none of them.
    """
    match = re.fullmatch(r"\s*([\w*]+)\s*(?:\((.*)\))?\s*", text, re.ASCII)
    if match is None:
        raise InputError(f"{_given(text)} is not known; known are {known_targets()}")
    name, argument = ALIASES.get(match[1], match[1]), match[2]
    if name in OBSERVABLES:
        if argument is not None:
            raise InputError(f"{_given(text)}: {name} takes no argument")
        return Target(name, "observable", OBSERVABLES[name].unit)
    if name in AT_REDSHIFT:
        redshift = _redshift(text, match[1], argument)
        return Target(at_redshift(name, redshift), name, AT_REDSHIFT[name], redshift)
    if name == "line":
        return _line(text, argument)
    raise InputError(f"{_given(text)} is not known; known are {known_targets()}")


def _given(text: str) -> str:
    return f'target "{cut_short(text)}"'


def _redshift(text: str, name: str, argument: str | None) -> float:
    try:
        redshift = float(argument or "")
    except ValueError:
        redshift = math.nan
    if not 0.0 <= redshift <= _HIGHEST_REDSHIFT:
        raise InputError(
            f"{_given(text)}: a redshift from 0 to {_HIGHEST_REDSHIFT:g} is needed, as in "
            f"{name}(900)"
        )
    return redshift + 0.0  # not -0


def _line(text: str, argument: str | None) -> Target:
    level = rf"\s*(\d{{1,4}})([{_LETTERS}])\s*"
    match = re.fullmatch(f"{level}-{level}", argument or "")
    if match is None:
        raise InputError(f"{_given(text)}: two levels are needed, as in line(3d-2p)")
    ends = [(int(match[k]), _LETTERS.index(match[k + 1])) for k in (1, 3)]
    for n, l in ends:
        if not l < n <= HIGHEST_N:
            allowed = f"n is 1 to {HIGHEST_N} and l below n"
            raise InputError(f"{_given(text)}: there is no level {level_name(n, l)}; {allowed}")
    lower, upper = sorted(ends)
    dipole = lower[0] != upper[0] and abs(lower[1] - upper[1]) == 1
    if not dipole and (upper, lower) != ((2, 0), (1, 0)):
        raise InputError(
            f"{_given(text)}: no line: n must differ, and l by one; 2s-1s is the exception"
        )
    name = f"line({level_name(*upper)}-{level_name(*lower)})"
    return Target(name, "line", "1", math.nan, upper, lower)
