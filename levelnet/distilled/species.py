"""The atoms whose effective rates can be asked for, each ready to be reduced."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterable
from typing import Literal, NamedTuple, get_args

from ..arrays import FloatArray
from ..atomic.electron_grid import COLDEST_K, HOTTEST_K
from ..atomic.physics import Scales, scales
from ..errors import InputError
from ..history.setup import Setup
from ..network.helium import (
    KeptTerms,
    helium_ladders,
    helium_rate_constants,
    reduce_helium,
)
from ..network.rates import RateConstants
from ..network.reduced import KeptLevels
from .kept import choose_ion_kept, choose_kept, choose_terms
from .nodes import Atom, compute_node, prepared

AtomName = Literal["H I", "He I", "He II"]

# Boltzmann factors of the lines of He I, up to e^(4.8 eV / 2 kT_r), leave the doubles at 39 K.
_HELIUM_COLDEST_K = 50.0
_RULE_K = COLDEST_K, HOTTEST_K
_ION_K = 4.0 * COLDEST_K, 4.0 * HOTTEST_K
MATTER_K: dict[AtomName, tuple[float, float]] = {"H I": _RULE_K, "He I": _RULE_K, "He II": _ION_K}
"""Lowest and highest T_m with the measured constants, K: those of the rule over electrons."""
RADIATION_K: dict[AtomName, tuple[float, float]] = {
    **MATTER_K,
    "He I": (_HELIUM_COLDEST_K, HOTTEST_K),
}
"""The same of T_r."""


class Eliminated(NamedTuple):
    """An atom with the measured constants, its levels split into kept and eliminated.

    Attributes
    ----------
    kept : KeptLevels
        The kept levels.
    constants : RateConstants
        What turns nodes into rates.
    node : callable
        From T_r in K to what one reduction stores, shape (n_pairs + n_kept * n_energies,).
    """

    kept: KeptLevels
    constants: RateConstants
    node: Callable[[float], FloatArray]


def atom_name(name: str) -> AtomName:
    """Check the name of an atom; InputError where it is none."""
    for known in get_args(AtomName):
        if name == known:
            return known  # type: ignore[no-any-return]
    raise InputError(f'atom = "{name}": known are "H I", "He I", "He II"')


def scales_of(setup: Setup, atom: AtomName) -> Scales:
    """What changed constants do to an atom; its nucleus counts."""
    return scales(setup.physics, charge=1 if atom == "H I" else 2)


def eliminated(
    setup: Setup, kept: Iterable[tuple[int, ...]] | None, atom: AtomName
) -> Callable[[], Eliminated]:
    """Check at once what is asked of an atom of a setup, and give what builds it.

    Parameters
    ----------
    setup : Setup
        Its atoms and overrides.
    kept : iterable of (n, l), of He I (n, l, spin), or None
        Levels to keep; None: those needed.
    atom : str
        Which atom.
    """
    if atom == "H I":
        chosen = choose_kept(setup, kept)
        return functools.partial(_hydrogenic, Atom.of(setup.hydrogen, chosen, setup.rates.network))
    top = setup.helium.n_max
    if not top:
        raise InputError(
            f'atom = "{atom}": helium has no levels with helium.n_max = 0; allowed from '
            "helium.n_max = 2"
        )
    if atom == "He I":
        return functools.partial(_helium, setup, choose_terms(setup, kept))
    changed, levels = setup.rates.network_of("He II"), choose_ion_kept(setup, kept)
    ion = Atom(top, setup.hydrogen.energies, levels, top, changed, charge=2)
    return functools.partial(_hydrogenic, ion)


def _hydrogenic(atom: Atom) -> Eliminated:
    ladder, _, constants = prepared(atom)
    return Eliminated(ladder.kept, constants, lambda kelvin: compute_node(atom, kelvin)["node"])


def _helium(setup: Setup, terms: KeptTerms) -> Eliminated:
    changed = setup.rates.network_of("He I")
    ladders = helium_ladders(setup.helium.n_max, terms, overrides=changed)
    return Eliminated(
        ladders.kept, helium_rate_constants(ladders), functools.partial(reduce_helium, ladders)
    )
