"""What to know before relying on a history."""

from __future__ import annotations

from ..atomic.physics import scales
from ..escape.family import TREATMENTS
from ..escape.left_out import left_out
from ..escape.treatment import LineTreatment
from .helium import COLDEST_K
from .setup import Setup

# Overridden rates that the notes list one by one; the setup holds all.
_NOTED = 20


def _of_helium(setup: Setup) -> list[str]:
    if setup.cosmology.helium_ratio() == 0.0:
        levels = setup.helium.n_max > 0
        return ["there is no helium" + ": [helium] and its lines change nothing" * levels]
    if not setup.helium_recombines:
        return [
            "helium is neutral and inert: x_e misses its electrons above z ~ 1600, where they count"
        ]
    higher = setup.lines.helium_higher_lines or "closed"
    coldest_k = COLDEST_K * scales(setup.physics, charge=2).energy
    notes = [
        f"helium: levels to n_max = {setup.helium.n_max}, below T_r = {coldest_k:.4g} K held as it "
        "is; no collisions",
        f'helium lines: "{setup.lines.helium or "sobolev"}", n 1P-1 1S with n >= 3: "{higher}"',
    ]
    if setup.lines.helium in {None, "sobolev"}:
        notes.append(
            "helium lines assume: no hydrogen absorbs inside them; from z ~ 2200 down it does, and "
            "ends the recombination of He II near z = 1800 (Switzer & Hirata 2008, "
            "Phys. Rev. D 77, 083006), here far too late"
        )
    if higher == "free":
        notes.append(
            "helium lines n 1P-1 1S with n >= 3, each on its own: every further n adds escape, so "
            "that x_e does not converge with helium.n_max"
        )
    if not setup.accuracy.interpolate:
        notes.append("helium is interpolated in T_r though accuracy.interpolate is false")
    if setup.lines.two_photon != "spontaneous":
        notes.append(
            "helium: two-photon decay of 2 1S and of 2s of He II stimulated by the blackbody, "
            "without absorption of the real field"
        )
    if setup.helium.helium_ion == "saha":
        notes.append("He III recombines in Saha equilibrium: x_e up to 1e-3 low near z = 6000")
    return notes


def notes_of(
    setup: Setup, chosen: LineTreatment, warnings: tuple[str, ...] = ()
) -> tuple[str, ...]:
    """What a user must know before relying on a history, or on what is made from it.

    Parameters
    ----------
    setup : Setup
        What was computed.
    chosen : LineTreatment
        The treatment of the resonance lines that was used.
    warnings : tuple of str
        Limits crossed by its figures, where there are any (:mod:`levelnet.history.limits`).

    Returns
    -------
    tuple of str
        One statement each; overridden rates come last, with their sources.
    """
    notes = [
        *_of_helium(setup),
        "excited levels are quasi-steady; there are no collisions and no reionization",
        f'lines: "{chosen.name}"'
        if type(chosen) in {type(one) for one in TREATMENTS}
        else "lines: by a treatment of one's own, which no file names",
    ]
    top, n_max = setup.hydrogen.highest_resolved, setup.hydrogen.n_max
    if top < n_max:
        notes.insert(
            2,
            f"shells n = {top + 1} to {n_max} are populated by statistical weight over l "
            f"(resolve_l_to = {top})",
        )
    notes += [f"lines assume: {text}" for text in chosen.assumes]
    notes += [f"lines hold for: {text}" for text in chosen.holds_for]
    notes += warnings
    notes += left_out(setup.lines)
    table = setup.rates.table
    notes += [f"rate overridden: {one.text} ({one.source})" for one in table[:_NOTED]]
    if len(table) > _NOTED:
        notes.append(f"rates overridden: {len(table) - _NOTED} more, listed in the setup")
    return tuple(notes)
