"""The chapter of a history made from a table of effective rates."""

from __future__ import annotations

from functools import partial

from ...distilled.fast import FastHistory
from ...history.samples import sample_rows
from ...history.setup import Setup
from ..plots import history_figure
from ..spectrum import field_figure, marked_levels
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .wording import (
    asked_section,
    number,
    observable_label,
    one_line,
    origin_section,
    spectrum_said,
    trust_section,
)

_OBSERVABLES = (
    ("last_scattering_redshift", ".3f", ""),
    ("sound_horizon_mpc", ".4f", "Mpc (comoving)"),
    ("damping_per_mpc", ".6f", "per Mpc (comoving)"),
)


def fast_chapter(history: FastHistory, setup: Setup, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a history made from a table.

    Parameters
    ----------
    history : FastHistory
        Any.
    setup : Setup
        That of the table with the cosmology of the history, as the file states it.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    z, x_e = history.redshift, history.free_electron_fraction
    notes = (
        *history.notes,
        "the error of the table it was made from stands in the certificate of that table",
    )
    return Chapter(
        name=prefix,
        title=one_line(setup.title),
        what="Ionization history from a table of effective rates",
        file=origin.name,
        ok=history.outcome.ok,
        outcome=history.outcome.value,
        answers=(f"x_e = {x_e[-1]:.6g} at z = {z[-1]:g}.",),
        sections=(
            asked_section(prefix, setup),
            Section(f"{prefix}-found", "What came out", _found(history)),
            Section(f"{prefix}-figures", "Figures", _pictures(history, setup, prefix)),
            trust_section(prefix, (_steps(history),), notes),
            origin_section(prefix, origin),
        ),
    )


def _found(history: FastHistory) -> tuple[Block, ...]:
    columns = [
        ("x_e = n_e/n_H", history.free_electron_fraction, ".6e"),
        ("x_HI", history.neutral_hydrogen_fraction, ".6e"),
        ("T_m (K)", history.matter_temperature_k, ".6g"),
        ("T_r (K)", history.radiation_temperature_k, ".6g"),
    ]
    if history.helium is not None:
        columns[2:2] = [
            ("He II/He", history.helium.singly_ionized_helium_fraction, ".4e"),
            ("He III/He", history.helium.doubly_ionized_helium_fraction, ".4e"),
        ]
    rows = tuple(
        (f"{history.redshift[k]:.2f}", *(f"{values[k]:{form}}" for _, values, form in columns))
        for k in sample_rows(history.redshift, "hydrogen" if history.helium is None else "both")
    )
    head = ("z", *(name for name, _, _ in columns))
    table = Table("The history at some redshifts", head, rows)
    seen = history.observables
    if seen is None:
        return (table,)
    facts = tuple(
        (observable_label(name), number(getattr(seen, name), form, unit))
        for name, form, unit in _OBSERVABLES
    )
    return Facts(facts), table


def _steps(history: FastHistory) -> Facts:
    rows = [
        ("steps", f"{history.n_steps} ({history.n_rejected} rejected)"),
        ("start", f"Saha equilibrium at z = {history.start_redshift:.2f}"),
    ]
    if history.field is not None:
        rows.append(("error of x_e from the frequency step", f"{history.frequency_error:.1e}"))
    return Facts(tuple(rows))


def _pictures(history: FastHistory, setup: Setup, prefix: str) -> tuple[Picture, ...]:
    z, x_e = history.redshift, history.free_electron_fraction
    said = (
        f"(a) Free electrons per hydrogen nucleus fall from {x_e[0]:.4g} at z = {z[0]:g} to "
        f"{x_e[-1]:.3g} at z = {z[-1]:g}, on a logarithmic axis. (b) Matter and radiation "
        f"temperature against 1 + z; at z = {z[-1]:g} matter is at "
        f"{history.matter_temperature_k[-1]:.4g} K."
    )
    title = "Ionization and temperatures"
    pictures = [picture(partial(history_figure, history), f"{prefix}-history", title, said)]
    if history.field is not None:
        make = partial(field_figure, history.field, marked_levels(setup))
        pictures.append(picture(make, f"{prefix}-spectrum", *spectrum_said(history.field)))
    return tuple(pictures)
