"""Which atom a ladder of truncations belongs to, and which ladders of helium tell something."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Sequence
from typing import Literal

from ..atomic.species import HELIUM_N_MAX, HIGHEST_N
from ..errors import InputError
from ..escape.lines import HIGHEST_FED
from ..history.setup import Setup
from .convergence import check_rung_count

Atom = Literal["hydrogen", "helium"]
"""Whose n_max grows from rung to rung; that of the other is the setup's on every rung."""

HIGHEST: dict[Atom, int] = {"hydrogen": HIGHEST_N, "helium": HELIUM_N_MAX}
"""Highest n_max that can be computed."""

_LOWEST = 3


def n_max_of(setup: Setup, atom: Atom) -> int:
    """n_max of one atom of a setup."""
    return setup.hydrogen.n_max if atom == "hydrogen" else setup.helium.n_max


def with_n_max(setup: Setup, n_max: int) -> Setup:
    """The setup with another n_max of helium."""
    return dataclasses.replace(setup, helium=dataclasses.replace(setup.helium, n_max=n_max))


def check_helium_ladder(
    setup: Setup, rungs: Sequence[int], resolve: Sequence[int], low_n: int
) -> None:
    """Raise InputError for a ladder of helium that tells nothing, in one line.

    Parameters
    ----------
    setup : Setup
        With helium.
    rungs, resolve : sequence of int
        n_max of each rung; whole shells to be tried, which helium does not have.
    low_n : int
        Levels of hydrogen up to this n have their populations recorded.
    """
    if not setup.helium_recombines:
        raise InputError(
            f"helium.n_max = {setup.helium.n_max}: no helium recombines in this setup; a ladder of "
            "helium needs levels and some helium"
        )
    if setup.hydrogen.n_max < low_n:
        raise InputError(
            f"hydrogen.n_max = {setup.hydrogen.n_max}: the lowest allowed is {low_n} (populations "
            f"of hydrogen to n = {low_n} are recorded)"
        )
    if setup.lines.transfer is not None:
        raise InputError(
            'lines.hydrogen = "transfer": the study holds errors to 1e-8, which a frequency grid '
            'does not reach; take "sobolev", with which truncation is nearly the same'
        )
    if resolve:
        raise InputError("resolve: whole shells are for hydrogen; every level of helium has its l")
    higher = setup.lines.helium_higher_lines
    if higher == "free":
        raise InputError(
            'lines.helium_higher_lines = "free": every rung would open further lines, and isolated '
            'lines add escape without end; take "closed" or "feedback"'
        )
    lowest = HIGHEST_FED if higher == "feedback" else _LOWEST
    text = ", ".join(str(value) for value in rungs)
    if any(a >= b for a, b in itertools.pairwise(rungs)):
        raise InputError(f"rungs = {text}: each must be larger than the one before")
    if rungs and not lowest <= rungs[0] <= rungs[-1] <= HELIUM_N_MAX:
        raise InputError(f"rungs = {text}: allowed for helium are {lowest} to {HELIUM_N_MAX}")
    check_rung_count(len(rungs))
