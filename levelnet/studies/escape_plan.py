"""Which line treatments and switches a study of the escape compares, and how they hang together."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable
from typing import Literal, NamedTuple

from ..errors import InputError
from ..escape.lines import Lines, Transfer
from ..history.setup import Setup

STIMULATED = ", 2s decay stimulated"
"""How the name of a treatment ends whose 2s-1s decay the blackbody stimulates."""

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
    """One of the setups that are compared: it differs from the others in its lines only."""

    name: str
    lines: Lines


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
    switches = tuple(SWITCHES) if order is None else _checked(tuple(order))
    found = [Variant(name, lines) for name, lines in _without_field(setup.lines)]
    treatments = tuple(range(len(found)))
    places: dict[frozenset[str], int] = {}

    def having(chosen: Iterable[str], name: str) -> int:
        on = frozenset(chosen)
        if on not in places:
            places[on] = len(found)
            found.append(Variant(name, transfer_lines(setup.lines, on)))
        return places[on]

    base = having((), "transfer without switches")
    reference = having(switches, "transfer with every switch")
    alone = tuple(having(_with_needs(one), _alone_name(one)) for one in switches)
    removed = tuple(
        having(set(switches) - _with_needing(one), f"transfer without {one}") for one in switches
    )
    cumulative = tuple(
        having(switches[:count], f"transfer with the first {count} switches")
        for count in range(1, len(switches) + 1)
    )
    whole = found[reference]
    coarser = Variant(f"{whole.name}, cells twice as wide", _coarser(variant_setup(setup, whole)))
    return Plan(
        tuple(found),
        (*(frozenset[str]() for _ in treatments), *places),
        treatments,
        base,
        reference,
        switches,
        alone,
        removed,
        cumulative,
        coarser,
    )


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
    try:
        return dataclasses.replace(setup, lines=one.lines)
    except InputError as error:
        raise InputError(f"{one.name}: {error}") from None


def _coarser(setup: Setup) -> Lines:
    assert setup.lines.transfer is not None
    wider = dataclasses.replace(setup.lines.transfer, frequency_step=2.0 * setup.frequency_step)
    return dataclasses.replace(setup.lines, transfer=wider)


def _without_field(lines: Lines) -> list[tuple[str, Lines]]:
    found = []
    for name, one in _TREATMENTS.items():
        plain = dataclasses.replace(one, lyman_lines=lines.lyman_lines)
        found.append((name, plain))
        if name != _WITHOUT_STIMULATION:
            found.append((name + STIMULATED, dataclasses.replace(plain, two_photon="stimulated")))
    return found


def _checked(order: tuple[str, ...]) -> tuple[str, ...]:
    known = ", ".join(SWITCHES)
    text = ", ".join(order)
    unknown = [name for name in order if name not in SWITCHES]
    if unknown:
        raise InputError(f'order: "{unknown[0]}" is no switch; they are {known}')
    if sorted(order) != sorted(SWITCHES):
        raise InputError(f"order = {text}: each switch once is needed: {known}")
    for name, needed in _NEEDS.items():
        if order.index(name) < order.index(needed):
            raise InputError(f"order = {text}: {name} comes with {needed}, so after it")
    return order


def _alone_name(switch: str) -> str:
    needed = _NEEDS.get(switch)
    return (
        f"transfer with {switch} alone" if needed is None else f"transfer with {needed}, {switch}"
    )


def _with_needs(switch: str) -> set[str]:
    return {switch, _NEEDS.get(switch, switch)}


def _with_needing(switch: str) -> set[str]:
    return {switch, *(name for name, needed in _NEEDS.items() if needed == switch)}
