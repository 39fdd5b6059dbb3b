"""What to know before relying on a history."""

from __future__ import annotations

from ..escape.family import TREATMENTS
from ..escape.left_out import left_out
from ..escape.treatment import LineTreatment
from .setup import Setup

# Overridden rates that the notes list one by one; the setup holds all.
_NOTED = 20


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
        "helium is neutral and inert: x_e misses its electrons above z ~ 1600, where they count",
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
