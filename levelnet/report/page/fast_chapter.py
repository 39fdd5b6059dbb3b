"""The chapter of a history made from a table of effective rates."""

from __future__ import annotations

from ...distilled.fast import FastHistory
from ...history.samples import sample_rows
from ...history.setup import Setup
from ..plots import history_figure
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .wording import (
    asked_section,
    number,
    observable_label,
    one_line,
    origin_section,
    trust_section,
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
    rows = tuple(
        (
            f"{z[k]:.2f}",
            f"{x_e[k]:.6e}",
            f"{history.neutral_hydrogen_fraction[k]:.6e}",
            f"{history.matter_temperature_k[k]:.6g}",
            f"{history.radiation_temperature_k[k]:.6g}",
        )
        for k in sample_rows(z)
    )
    found: list[Block] = []
    if history.observables is not None:
        seen = history.observables
        found.append(
            Facts(
                (
                    (
                        observable_label("last_scattering_redshift"),
                        number(seen.last_scattering_redshift, ".3f"),
                    ),
                    (
                        observable_label("sound_horizon_mpc"),
                        number(seen.sound_horizon_mpc, ".4f", "Mpc (comoving)"),
                    ),
                    (
                        observable_label("damping_per_mpc"),
                        number(seen.damping_per_mpc, ".6f", "per Mpc (comoving)"),
                    ),
                )
            )
        )
    head = ("z", "x_e = n_e/n_H", "x_HI", "T_m (K)", "T_r (K)")
    found.append(Table("The history at some redshifts", head, rows))
    steps = [
        ("steps", f"{history.n_steps} ({history.n_rejected} rejected)"),
        ("start", f"Saha equilibrium at z = {history.start_redshift:.2f}"),
    ]
    if history.field is not None:
        steps.append(("error of x_e from the frequency step", f"{history.frequency_error:.1e}"))
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
            Section(f"{prefix}-found", "What came out", tuple(found)),
            Section(f"{prefix}-figures", "Figures", _fast_pictures(history, prefix)),
            trust_section(prefix, (Facts(tuple(steps)),), notes),
            origin_section(prefix, origin),
        ),
    )


def _fast_pictures(history: FastHistory, prefix: str) -> tuple[Picture, ...]:
    z, x_e = history.redshift, history.free_electron_fraction
    title = "Ionization and temperatures"
    said = (
        f"Left: free electrons per hydrogen nucleus fall from {x_e[0]:.4g} at z = {z[0]:g} to "
        f"{x_e[-1]:.3g} at z = {z[-1]:g}, on a logarithmic axis. Right: matter and radiation "
        f"temperature against 1 + z; at z = {z[-1]:g} matter is at "
        f"{history.matter_temperature_k[-1]:.4g} K."
    )
    return (picture(history_figure(history), f"{prefix}-history", title, said),)
