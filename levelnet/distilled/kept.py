"""Which levels a distilled network keeps, and which setups it cannot stand for."""

from __future__ import annotations

import operator
from collections.abc import Iterable
from typing import TYPE_CHECKING

from .. import constants as const
from ..atomic.physics import UNCHANGED, Physics, scales
from ..background.cosmology import Cosmology
from ..errors import InputError
from ..escape.helium_lines import kept_terms
from ..escape.lines import Lines
from ..escape.treatment import SobolevFeedback
from ..history.atom import open_lyman_lines
from ..history.helium_atom import higher_lines
from ..history.setup import Setup
from ..network.helium import KeptTerms
from ..network.reduced import KeptLevels

if TYPE_CHECKING:
    from .table import EffectiveTable

HELIUM_FRACTIONS = 0.02, 0.6
"""Helium by mass in the two far cosmologies of a certificate."""

KeptChoice = tuple[tuple[int, int], ...]


def needed_levels(setup: Setup) -> KeptChoice:
    """2s, 2p, every np whose Lyman line is open, and what else talks to the ground state."""
    lyman = {(n, 1) for n in range(2, open_lyman_lines(setup) + 2)}
    return tuple(sorted({(2, 0), *lyman, *setup.lines.field_levels}))


def choose_kept(setup: Setup, kept: Iterable[tuple[int, ...]] | None) -> KeptChoice:
    """Check a choice of kept levels.

    Parameters
    ----------
    setup : Setup
        The run; its open Lyman lines say which levels must be kept.
    kept : iterable of (n, l), or None
        Levels to keep; None: those needed.

    Returns
    -------
    tuple of (n, l)
        Sorted by n, then l.

    Raises
    ------
    InputError
        If a level does not exist in the setup's atom, or one that is needed is missing: what is
        eliminated cannot talk to the ground state.
    """
    top, needed = setup.hydrogen.highest_resolved, needed_levels(setup)
    whole = top < setup.hydrogen.n_max
    chosen = _pairs(kept, needed, top, ", resolved in l" if whole else "")
    _check_needed(
        chosen,
        needed,
        "2s, 2p, every np with an open Lyman line and every level with two-photon or Raman "
        "transitions",
    )
    return chosen


def choose_ion_kept(setup: Setup, kept: Iterable[tuple[int, ...]] | None) -> KeptChoice:
    """Check a choice of kept levels of He II, as :func:`choose_kept`; 2s and 2p are needed."""
    needed = (2, 0), (2, 1)
    chosen = _pairs(kept, needed, setup.helium.n_max, "")
    _check_needed(chosen, needed, "2s and 2p")
    return chosen


def choose_terms(setup: Setup, kept: Iterable[tuple[int, ...]] | None) -> KeptTerms:
    """Check a choice of kept terms of He I.

    Parameters
    ----------
    setup : Setup
        The run; ``lines.helium_higher_lines`` says which n 1P must be kept.
    kept : iterable of (n, l, spin), or None
        Terms to keep; None: those needed.

    Returns
    -------
    tuple of (n, l, spin)
        Sorted.
    """
    top = setup.helium.n_max
    needed = kept_terms(top, higher_lines(setup))
    if kept is None:
        return tuple(sorted(needed))
    try:
        chosen = {(operator.index(n), operator.index(l), operator.index(s)) for n, l, s in kept}
    except (TypeError, ValueError):
        raise InputError("kept: give triples of whole numbers (n, l, spin) for He I") from None
    for n, l, spin in sorted(chosen):
        if not (2 <= n <= top and 0 <= l < n and spin in {0, 1}):
            raise InputError(
                f"kept = {(n, l, spin)}: allowed are (n, l, spin) with 2 <= n <= {top}, "
                "0 <= l < n, spin 0 or 1"
            )
    _check_needed(chosen, needed, "2 1S, 2 1P, 2 3S, 2 3P and every n 1P with an open line")
    return tuple(sorted(chosen))


def _pairs(
    kept: Iterable[tuple[int, ...]] | None, needed: KeptChoice, top: int, remark: str
) -> KeptChoice:
    """Kept levels of a hydrogenic atom, sorted; None: those needed."""
    if kept is None:
        return tuple(sorted(needed))
    try:
        chosen = {(operator.index(n), operator.index(l)) for n, l in kept}
    except (TypeError, ValueError):
        raise InputError("kept: give pairs of whole numbers (n, l)") from None
    for n, l in sorted(chosen):
        if not (2 <= n <= top and 0 <= l < n):
            raise InputError(
                f"kept = {(n, l)}: allowed are (n, l) with 2 <= n <= {top}, 0 <= l < n{remark}"
            )
    return tuple(sorted(chosen))


def _check_needed(
    chosen: Iterable[tuple[int, ...]], needed: Iterable[tuple[int, ...]], all_needed: str
) -> None:
    missing = sorted(set(needed) - set(chosen))
    if missing:
        numbers = "(n, l)" if len(missing[0]) == 2 else "(n, l, spin)"
        raise InputError(f"kept: {numbers} = {missing[0]} is missing; {all_needed} must be kept")


def check_kept(setup: Setup, kept: KeptLevels) -> None:
    """Refuse a setup whose lines need levels that a table does not keep."""
    missing = sorted(set(needed_levels(setup)) - set(kept))
    if missing:
        raise InputError(
            f"lines: (n, l) = {missing[0]} talks to the ground state, and this table does not keep "
            "it; distill the setup with these lines"
        )


def check_lines(lines: Lines) -> None:
    """Refuse treatments whose memory the histories made from a table do not have."""
    if lines.hydrogen == SobolevFeedback.name:
        raise InputError(
            f'lines.hydrogen = "{lines.hydrogen}": histories from a table remember nothing of the '
            'lines above; allowed are "closed", "open", "sobolev" and, more slowly, "transfer"; '
            "levelnet solve has it"
        )


def recombines(table: EffectiveTable, cosmology: Cosmology) -> bool:
    """Whether helium recombines too: the table has its levels, and there is some."""
    return table.helium is not None and cosmology.helium_ratio() > 0.0


def check_no_field(setup: Setup) -> None:
    """Refuse to distil helium together with a field: no history from the table has both."""
    if setup.helium_recombines and setup.lines.transfer is not None:
        raise InputError(
            'lines.hydrogen = "transfer": a table with levels of helium has no histories with a '
            'field; allowed there are "closed", "open" and "sobolev"; levelnet solve has both'
        )


def check_helium(
    table: EffectiveTable, cosmology: Cosmology, lines: Lines, physics: Physics
) -> None:
    """Refuse what a table with levels of helium does not hold, or its certificate not cover."""
    if not recombines(table, cosmology):
        if table.helium is None and lines.helium is not None:
            raise InputError(
                f'lines.helium = "{lines.helium}": this table holds no levels of helium; distil '
                "the setup with helium.n_max = 2 or above"
            )
        return
    there = table.setup.lines
    for name in ("helium", "helium_higher_lines", "helium_continuum"):
        if getattr(lines, name) != getattr(there, name):
            raise InputError(
                f"lines.{name}: the table was distilled with other lines of helium; distil the "
                "setup with these"
            )
    if physics != Physics():
        raise InputError(
            "fine_structure_change, electron_mass_change: not known for levels of helium, and the "
            "table holds them"
        )
    _check_two_photon(lines)
    if lines.transfer is not None:
        raise InputError(
            'lines.hydrogen = "transfer": not with a table that holds levels of helium; levelnet '
            "solve has both"
        )
    own, asked = (_mass_fraction(one) for one in (table.setup.cosmology, cosmology))
    low, high = min(own, HELIUM_FRACTIONS[0]), max(own, HELIUM_FRACTIONS[1])
    if not low * (1.0 - 1e-12) <= asked <= high * (1.0 + 1e-12):
        raise InputError(
            f"helium_mass_fraction = {asked:g}: the histories of this table were checked from "
            f"{low:g} to {high:g}; allowed are these and 0"
        )


def _mass_fraction(cosmology: Cosmology) -> float:
    mass = const.HELIUM_HYDROGEN_MASS_RATIO * cosmology.helium_ratio()
    return mass / (1.0 + mass)


def check_without_helium(table: EffectiveTable, who: str) -> None:
    """Refuse a table with levels of helium for what knows hydrogen alone."""
    if table.helium is not None:
        raise InputError(
            f"{who}: knows hydrogen alone, and this table holds levels of helium; distil the setup "
            "with helium.n_max = 0"
        )


def check_without_field(lines: Lines) -> None:
    """Refuse what only a whole history can answer."""
    check_lines(lines)
    if lines.transfer is not None:
        raise InputError(
            f'lines.hydrogen = "{lines.hydrogen}": the field has a history of its own; allowed '
            'here are "closed", "open" and "sobolev"'
        )


def check_overrides(setup: Setup) -> None:
    """Refuse overrides that a table could not carry to the histories made from it."""
    for one in setup.rates.table:
        if one.selector.process in {"escape", "compton"}:
            raise InputError(
                f'{one.where}: selector "{one.selector.text}": a table of effective rates holds no '
                f"{one.selector.process} rates; such an override needs levelnet solve"
            )


def check_helium_setup(setup: Setup) -> None:
    """Refuse what a table holds for hydrogen alone, where helium has levels."""
    if not setup.helium_recombines:
        return
    if scales(setup.physics, charge=2) != UNCHANGED:
        raise InputError(
            "[physics]: with levels of helium a table takes the measured constants; such a history "
            "needs levelnet solve"
        )
    _check_two_photon(setup.lines)


def _check_two_photon(lines: Lines) -> None:
    if lines.two_photon != "spontaneous":
        raise InputError(
            f'lines.two_photon = "{lines.two_photon}": with levels of helium a table takes decay '
            'by two photons as "spontaneous"; such a history needs levelnet solve'
        )
