"""Which line treatments and switches a study of the escape compares, and how they hang together."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Iterable
from typing import Literal, NamedTuple

from ..errors import InputError, cut_short
from ..escape.frequency_step import coarsest_step, fitted_step, highest_line
from ..escape.lines import COARSEST_STEP, Lines, Transfer
from ..history.setup import Setup

SWITCHES = {
    "stimulated": "2s-1s decay stimulated by the blackbody",
    "absorption": "1s -> 2s absorbs the real, distorted field; comes with stimulated",
    "feedback": "photons of the higher Lyman lines reach the lower ones",
    "excited_two_photon": "ns and nd decay by two photons, and absorb two",
    "raman": "Raman scattering from 2s, 3s, 3d",
    "scattering": "diffusion with recoil in the wings of Lyman-alpha",
}
"""Switches of the field resolved in frequency, in the order in which they are added by default."""

# The field absorbed by 1s -> 2s is that which stimulates: the setup has no other combination.
_NEEDS = {"absorption": "stimulated"}
_TREATMENTS = {
    "closed": Lines(hydrogen="closed"),
    "open": Lines(hydrogen="open"),
    "Sobolev": Lines(hydrogen="sobolev"),
    "Sobolev with feedback": Lines(hydrogen="sobolev_feedback"),
}
# Where every line photon escapes, 2s-1s decay has no part.
_WITHOUT_STIMULATION = "open"


class Variant(NamedTuple):
    """One of the setups that are compared: it differs from the others in its lines only.

    Attributes
    ----------
    name : str
        What it is called.
    lines : Lines
        Its lines.
    intercombination_rate_per_s : float or None, s^-1
        Rate of 2 3P1 -> 1 1S; None: that of the setup.
    """

    name: str
    lines: Lines
    intercombination_rate_per_s: float | None = None


class Ways(NamedTuple):
    """Positions of variants by the ways to ask for a switch, as in :class:`Plan`."""

    base: int
    reference: int
    alone: tuple[int, ...]
    removed: tuple[int, ...]
    cumulative: tuple[int, ...]


class Plan(NamedTuple):
    """All variants of a study, each once, by their positions.

    Attributes
    ----------
    variants : tuple of Variant
        What is run.
    switched_on : tuple of frozenset of str
        Switches that are on in each; none in treatments without a field.
    treatments : tuple of int
        Treatments without a field, from the simplest on.
    base, reference : int
        No switch, and all of them.
    switches : tuple of str
        In the order in which they are added.
    alone, removed, cumulative : tuple of int
        For each switch: added to the base, taken from the reference (in both cases with what cannot
        be without it), and the base with this and all switches before it.
    coarser : Variant or None
        The reference with frequency cells twice as wide.
    """

    variants: tuple[Variant, ...]
    switched_on: tuple[frozenset[str], ...]
    treatments: tuple[int, ...]
    base: int
    reference: int
    switches: tuple[str, ...]
    alone: tuple[int, ...]
    removed: tuple[int, ...]
    cumulative: tuple[int, ...]
    coarser: Variant | None = None

    @property
    def species(self) -> str:
        """Whose lines the variants differ in: "H I" or "He I"."""
        return "H I" if self.variants[0].intercombination_rate_per_s is None else "He I"


def escape_plan(setup: Setup, order: Iterable[str] | None = None) -> Plan:
    """Plan a study of a setup.

    Parameters
    ----------
    setup : Setup
        Its lyman_lines, frequency step and highest two-photon n are kept; which treatment it names
        does not count.
    order : iterable of str, optional
        The switches, each once, in the order in which they are added; the default is that of
        :data:`SWITCHES`.

    Raises
    ------
    InputError
        If the order lacks a switch, has an unknown one, or puts one before what it needs.
    """
    switches = checked_order(order, SWITCHES, _NEEDS)
    found = [Variant(name, lines) for name, lines in _without_field(setup.lines)]
    treatments = tuple(range(len(found)))
    places: dict[frozenset[str], int] = {}

    def having(on: frozenset[str], name: str) -> int:
        if on not in places:
            places[on] = len(found)
            found.append(Variant(f"transfer {name}", transfer_lines(setup.lines, on)))
        return places[on]

    asked = ways(switches, _NEEDS, having)
    whole = found[asked.reference]
    _check_step(variant_setup(setup, whole))
    coarser = Variant(f"{whole.name}, cells twice as wide", _coarser(variant_setup(setup, whole)))
    switched_on = (*(frozenset[str]() for _ in treatments), *places)
    return Plan(tuple(found), switched_on, treatments, *asked[:2], switches, *asked[2:], coarser)


def ways(
    switches: tuple[str, ...], needs: dict[str, str], having: Callable[[frozenset[str], str], int]
) -> Ways:
    """Ask for every variant that the switches need, first, last and in order.

    Parameters
    ----------
    switches : tuple of str
        In the order in which they are added.
    needs : dict of str to str
        What a switch cannot be without.
    having : callable
        ``having(on, name)`` gives the position of the variant with these switches on.
    """
    every = frozenset(switches)
    base, reference = having(frozenset(), "without switches"), having(every, "with every switch")
    alone = []
    for one in switches:
        on = _with_needs(one, needs)
        name = ", ".join(name for name in switches if name in on)
        alone.append(having(on, f"with {name}" + (" alone" if len(on) == 1 else "")))
    removed = [
        having(every - {other for other in switches if one in _with_needs(other, needs)},
               f"without {one}")
        for one in switches
    ]  # fmt: skip
    cumulative = [
        having(frozenset(switches[:count]), f"with the first {count} switches")
        for count in range(1, len(switches) + 1)
    ]
    return Ways(base, reference, tuple(alone), tuple(removed), tuple(cumulative))


def transfer_lines(lines: Lines, chosen: frozenset[str]) -> Lines:
    """The field resolved in frequency with these switches on, and no others.

    Parameters
    ----------
    lines : Lines
        Gives what is no switch.
    chosen : frozenset of str
        From :data:`SWITCHES`; "absorption" only with "stimulated".
    """
    two_photon: Literal["spontaneous", "stimulated", "distorted"] = "spontaneous"
    if "stimulated" in chosen:
        two_photon = "distorted" if "absorption" in chosen else "stimulated"
    booleans = {
        name: name in chosen for name in SWITCHES if name not in {"stimulated", "absorption"}
    }
    transfer = dataclasses.replace(lines.transfer or Transfer(), **booleans)
    return dataclasses.replace(lines, hydrogen="transfer", two_photon=two_photon, transfer=transfer)


def variant_setup(setup: Setup, one: Variant) -> Setup:
    """The setup with the lines of a variant; InputError, with its name, where they do not fit."""
    rate, helium = one.intercombination_rate_per_s, setup.helium
    if rate is not None:
        helium = dataclasses.replace(helium, intercombination_rate_per_s=rate)
    try:
        return dataclasses.replace(setup, lines=one.lines, helium=helium)
    except InputError as error:
        raise InputError(f"{one.name}: {error}") from None


def _check_step(setup: Setup) -> None:
    """Refuse a step, by the name the user gave it, of which twice as much would be refused."""
    most = min(coarsest_step(setup.accuracy.relative), COARSEST_STEP) / 2.0
    # The last digit of a half may be lost: what stands for it is not refused.
    if setup.frequency_step > most * (1.0 + 1e-12):
        raise InputError(
            f"lines.transfer.frequency_step = {setup.frequency_step:g}: the study also runs cells "
            "twice as wide to tell its error, so that at accuracy.relative = "
            f"{setup.accuracy.relative:g} it allows up to {math.floor(most * 1e6) / 1e6:g}"
        )
    # And these on a grid twice as coarse once more, as every field is.
    apart = highest_line(fitted_step(4.0 * setup.frequency_step)) - 1
    if setup.atom_size.lyman_lines > apart:
        raise InputError(
            f"lines.transfer.frequency_step = {setup.frequency_step:g}: the study also runs cells "
            f"twice as wide to tell its error, which tell {apart} Lyman lines apart, and "
            f"lines.lyman_lines = {setup.atom_size.lyman_lines}"
        )


def _coarser(setup: Setup) -> Lines:
    assert setup.lines.transfer is not None
    wider = dataclasses.replace(setup.lines.transfer, frequency_step=2.0 * setup.frequency_step)
    return dataclasses.replace(setup.lines, transfer=wider)


def _without_field(lines: Lines) -> list[tuple[str, Lines]]:
    found = []
    for name, one in _TREATMENTS.items():
        plain = dataclasses.replace(
            lines, hydrogen=one.hydrogen, two_photon="spontaneous", transfer=None
        )
        found.append((name, plain))
        if name != _WITHOUT_STIMULATION:
            stimulated = dataclasses.replace(plain, two_photon="stimulated")
            found.append((f"{name}, 2s decay stimulated", stimulated))
    return found


def checked_order(
    order: Iterable[str] | None, switches: Iterable[str], needs: dict[str, str]
) -> tuple[str, ...]:
    """The order in which switches are added; InputError where it is none.

    Parameters
    ----------
    order : iterable of str or None
        None: that of `switches`.
    switches : iterable of str
        Each of them.
    needs : dict of str to str
        What a switch cannot be without.
    """
    every = tuple(switches)
    given = every if order is None else tuple(order)
    known, text = ", ".join(every), ", ".join(given)
    unknown = [name for name in given if name not in every]
    if unknown:
        raise InputError(f'order: "{cut_short(unknown[0])}" is no switch; they are {known}')
    if sorted(given) != sorted(every):
        raise InputError(f"order = {text}: each switch once is needed: {known}")
    for name, needed in needs.items():
        if given.index(name) < given.index(needed):
            raise InputError(f"order = {text}: {name} comes with {needed}, so after it")
    return given


def _with_needs(switch: str, needs: dict[str, str]) -> frozenset[str]:
    """A switch, what it needs, and what that needs."""
    found = [switch]
    while found[-1] in needs:
        found.append(needs[found[-1]])
    return frozenset(found)
