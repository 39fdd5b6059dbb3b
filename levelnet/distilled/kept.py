"""Which levels a distilled network keeps, and which setups it cannot stand for."""

from __future__ import annotations

import operator
from collections.abc import Iterable
from typing import TYPE_CHECKING

from .. import constants as const
from ..atomic.physics import UNCHANGED, Physics, scales
from ..background.cosmology import Cosmology
from ..errors import InputError
from ..escape.lines import Lines
from ..escape.treatment import SobolevFeedback
from ..history.atom import open_lyman_lines
from ..history.setup import Setup
from ..network.reduced import KeptLevels

if TYPE_CHECKING:
    from .table import EffectiveTable

HELIUM_FRACTIONS = 0.1, 0.4
"""Helium by mass in the two far cosmologies of a certificate."""

KeptChoice = tuple[tuple[int, int], ...]


def needed_levels(setup: Setup) -> KeptChoice:
    """2s, 2p, every np whose Lyman line is open, and what else talks to the ground state."""
    lyman = {(n, 1) for n in range(2, open_lyman_lines(setup) + 2)}
    return tuple(sorted({(2, 0), *lyman, *setup.lines.field_levels}))


def choose_kept(setup: Setup, kept: Iterable[tuple[int, int]] | None) -> KeptChoice:
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
    needed = needed_levels(setup)
    if kept is None:
        return tuple(sorted(needed))
    top = setup.hydrogen.highest_resolved
    try:
        chosen = {(operator.index(n), operator.index(l)) for n, l in kept}
    except (TypeError, ValueError):
        raise InputError("kept: give pairs of whole numbers (n, l)") from None
    bad = sorted(level for level in chosen if not 2 <= level[0] <= top or not _l_fits(level))
    if bad:
        raise InputError(
            f"kept = {bad[0]}: allowed are (n, l) with 2 <= n <= {top}, 0 <= l < n"
            + (", resolved in l" if top < setup.hydrogen.n_max else "")
        )
    missing = sorted(set(needed) - chosen)
    if missing:
        raise InputError(
            f"kept: (n, l) = {missing[0]} is missing; 2s, 2p, every np with an open Lyman line and "
            "every level with two-photon or Raman transitions must be kept"
        )
    return tuple(sorted(chosen))


def _l_fits(level: tuple[int, int]) -> bool:
    return 0 <= level[1] < level[0]


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
        _refuse_helium(who)


def check_exported_setup(setup: Setup) -> None:
    """Refuse to make for export what exports do not know."""
    if setup.helium_recombines:
        _refuse_helium("export")


def _refuse_helium(who: str) -> None:
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
