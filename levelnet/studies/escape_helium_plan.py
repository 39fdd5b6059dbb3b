"""Which treatments and switches of the lines of He I a study of the escape compares."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable

from ..atomic.species import INTERCOMBINATION_PER_S
from ..errors import InputError
from ..escape.lines import HeliumContinuum, Lines
from ..history.setup import Setup
from .escape_plan import Plan, Variant, checked_order, ways

HELIUM_SWITCHES = {
    "intercombination": "2 3P1 -> 1 1S (591 A)",
    "continuum": "H I absorbs inside the lines and between them; Doppler cores",
    "wings": "the incoherent part of the wings makes and destroys photons; comes with continuum",
    "diffusion": "coherent scattering shifts photons into the wings; comes with wings",
    "feedback": "photons of 584 A reach 591 A, and these 2 3S",
    "higher_lines": "n 1P -> 1 1S with n from 3, each lit by the next one above",
}
"""Switches of the lines of He I, in the order in which they are added by default."""

_NEEDS = {"wings": "continuum", "diffusion": "wings"}
_CORE = frozenset({"intercombination", "feedback", "continuum"})


def helium_plan(setup: Setup, order: Iterable[str] | None = None) -> Plan:
    """Plan a study of the lines of He I.

    Parameters
    ----------
    setup : Setup
        With levels of helium. Hydrogen has the Lyman lines of the setup by Sobolev; which treatment
        of either atom it names does not count. Where its intercombination line is off, the default
        rate stands for it.
    order : iterable of str, optional
        The switches, each once, in the order in which they are added; the default is that of
        :data:`HELIUM_SWITCHES`.

    Raises
    ------
    InputError
        If helium is inert, or the order is none.
    """
    if not setup.helium_recombines:
        none = setup.cosmology.helium_ratio() == 0.0
        key = "cosmology.helium_mass_fraction" if none else "helium.n_max"
        allowed = "above 0" if none else "from 2"
        raise InputError(f"{key} = 0: helium has no lines to compare; allowed is {allowed}")
    switches = checked_order(order, HELIUM_SWITCHES, _NEEDS)
    found: list[Variant] = []
    switched_on: list[frozenset[str]] = []

    def place(on: frozenset[str], name: str, **chosen: object) -> int:
        lines = dataclasses.replace(helium_lines(setup.lines, on), **chosen)  # type: ignore[arg-type]
        rate = (setup.helium.intercombination_rate_per_s or INTERCOMBINATION_PER_S) * (
            "intercombination" in on
        )
        for k, one in enumerate(found):
            if (one.lines, one.intercombination_rate_per_s) == (lines, rate):
                return k
        found.append(Variant(name, lines, rate))
        switched_on.append(on)
        return len(found) - 1

    line, best = frozenset({"intercombination"}), _CORE | {"wings", "diffusion"}
    complete = HeliumContinuum(redistribution="complete")
    treatments = (
        place(line, "Sobolev"),
        place(line, "Sobolev, higher lines free", helium_higher_lines="free"),
        place(line | {"feedback"}, "Sobolev with feedback"),
        place(_CORE, "continuum, complete redistribution", helium_continuum=complete),
        place(_CORE, "continuum, Doppler core"),
        place(_CORE | {"wings"}, "continuum, partial redistribution"),
        place(best, "continuum, partial redistribution, diffusion"),
        place(
            best,
            "continuum, partial redistribution, diffusion, higher lines free",
            helium_higher_lines="free",
        ),
    )
    asked = ways(switches, _NEEDS, lambda on, name: place(on, f"helium {name}"))
    return Plan(
        tuple(found), tuple(switched_on), treatments, *asked[:2], switches, *asked[2:], None
    )


def helium_lines(lines: Lines, chosen: frozenset[str]) -> Lines:
    """Lines of He I with these switches on, and no others; hydrogen by Sobolev.

    Parameters
    ----------
    lines : Lines
        Gives what is no switch.
    chosen : frozenset of str
        From :data:`HELIUM_SWITCHES`, each with what it needs.
    """
    fed, continuum = "feedback" in chosen, None
    if "continuum" in chosen:
        continuum = HeliumContinuum(
            redistribution="partial" if "wings" in chosen else "doppler",
            feedback=fed,
            diffusion="diffusion" in chosen,
        )
    return dataclasses.replace(
        lines,
        hydrogen="sobolev",
        two_photon="spontaneous",
        transfer=None,
        helium="continuum" if continuum else "sobolev_feedback" if fed else "sobolev",
        helium_continuum=continuum,
        helium_higher_lines="feedback" if "higher_lines" in chosen else "closed",
    )
