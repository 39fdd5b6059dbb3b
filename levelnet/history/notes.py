"""What to know before relying on a history."""

from __future__ import annotations

from collections.abc import Sequence

from ..atomic.overrides import Override
from ..atomic.physics import scales
from ..escape.family import TREATMENTS, treatment
from ..escape.left_out import helium_left_out, left_out
from ..escape.lines import Lines
from ..escape.treatment import LineTreatment
from .helium import COLDEST_K
from .setup import Setup

# Overridden rates that the notes list one by one; the setup holds all.
_NOTED = 20


def _of_helium(setup: Setup, lines: Lines, helium_ratio: float, n_max: int) -> list[str]:
    if helium_ratio == 0.0:
        return ["there is no helium" + ": [helium] and its lines change nothing" * (n_max > 0)]
    if not n_max:
        return [
            "helium is neutral and inert: x_e misses its electrons above z ~ 1600, where they count"
        ]
    higher = lines.helium_higher_lines or "closed"
    coldest_k = COLDEST_K * scales(setup.physics, charge=2).energy
    notes = [
        f"helium: levels to n_max = {n_max}, below T_r = {coldest_k:.4g} K held as it "
        "is; no collisions",
        f'helium lines: "{lines.helium or "sobolev"}", n 1P-1 1S with n >= 3: "{higher}"',
        *helium_left_out(lines),
    ]
    if higher == "free":
        notes.append(
            "helium lines n 1P-1 1S with n >= 3, each on its own: every further n adds escape, so "
            "that x_e does not converge with helium.n_max"
        )
    if lines.two_photon != "spontaneous":
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
    ratio, levels = setup.cosmology.helium_ratio(), setup.helium.n_max
    notes = standing_notes(setup, setup.lines, ratio, levels, chosen, warnings)
    if setup.helium_recombines and not setup.accuracy.interpolate:
        notes.append("helium is interpolated in T_r though accuracy.interpolate is false")
    return (*notes, *override_notes(setup.rates.table))


def override_notes(overrides: Sequence[Override]) -> list[str]:
    """Overridden rates with their sources, one statement each; of many, how many there are."""
    notes = [f"rate overridden: {one.text} ({one.source})" for one in overrides[:_NOTED]]
    if len(overrides) > _NOTED:
        notes.append(f"rates overridden: {len(overrides) - _NOTED} more, listed in the setup")
    return notes


def standing_notes(
    setup: Setup,
    lines: Lines,
    helium_ratio: float,
    helium_n_max: int,
    chosen: LineTreatment | None = None,
    warnings: tuple[str, ...] = (),
) -> list[str]:
    """What holds for a choice of atoms and lines before anything is computed, and warnings.

    Parameters
    ----------
    setup : Setup
        Its atoms.
    lines : Lines
        How line photons escape, the setup's or others.
    helium_ratio : float, dimensionless
        Helium nuclei per hydrogen nucleus.
    helium_n_max : int
        Highest n of helium; 0 where it is inert.
    chosen : LineTreatment, optional
        The treatment of the resonance lines; None: the one that `lines` names.
    warnings : tuple of str
        As for :func:`notes_of`.

    Returns
    -------
    list of str
        What is left out of the atoms, what each treatment assumes and leaves out and where it
        holds, with published sizes.
    """
    notes = [
        *_of_helium(setup, lines, helium_ratio, helium_n_max),
        "excited levels are quasi-steady; there are no collisions and no reionization",
    ]
    top, n_max = setup.hydrogen.highest_resolved, setup.hydrogen.n_max
    if top < n_max:
        notes.append(
            f"shells n = {top + 1} to {n_max} are populated by statistical weight over l "
            f"(resolve_l_to = {top})"
        )
    used = chosen or treatment(lines.hydrogen)
    known = type(used) in {type(one) for one in TREATMENTS}
    own = "lines: by a treatment of one's own, which no file names"
    notes.append(f'lines: "{used.name}"' if known else own)
    notes += [f"lines assume: {text}" for text in used.assumes]
    notes += [f"lines hold for: {text}" for text in used.holds_for]
    return [*notes, *warnings, *left_out(lines)]
