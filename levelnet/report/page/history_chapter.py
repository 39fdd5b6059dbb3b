"""The chapter of a history."""

from __future__ import annotations

import math

import numpy as np

from ...constants import SECONDS_PER_YEAR
from ...history.helium_through import through_text
from ...history.result import History
from ...history.samples import sample_rows
from ..figures import figure_makers
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .helium_parts import half_neutral, helium_line_tables
from .history_said import history_said
from .wording import (
    asked_section,
    number,
    one_line,
    origin_section,
    sentence,
    trust_section,
)

_CHANNELS = 8  # listed one by one
_LINE_FIGURES = (
    ("share", "share of the net flow"),
    ("optical_depth", "optical depth"),
    ("escape_probability", "escape"),
    ("absorption_chance", "chance of absorption"),
    ("source_change", "source change"),
    ("recoil_gain", "recoil gain"),
    ("unseen_feedback", "unseen feedback"),
)


def history_chapter(history: History, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a history.

    Parameters
    ----------
    history : History
        Any, converged or not.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    setup = history.setup
    return Chapter(
        name=prefix,
        title=one_line(setup.title),
        what="Ionization history with level populations",
        file=origin.name,
        ok=history.outcome.ok,
        outcome=history.outcome.value,
        answers=(_answer(history),),
        sections=(
            asked_section(prefix, setup),
            Section(f"{prefix}-found", "What came out", _found(history)),
            Section(f"{prefix}-figures", "Figures", _pictures(history, prefix)),
            trust_section(prefix, _trust(history), history.notes),
            origin_section(prefix, origin),
        ),
    )


def _answer(history: History) -> str:
    marks = history.milestones
    parts = [
        f"{what} at z = {value:.2f}"
        for what, value in (
            ("hydrogen is half ionized", marks.half_ionized_redshift),
            ("the optical depth is 1", marks.last_scattering_redshift),
            ("the visibility peaks", marks.visibility_peak_redshift),
        )
        if math.isfinite(value)
    ]
    end = f"x_e = {history.free_electron_fraction[-1]:.6g} at z = {history.redshift[-1]:g}"
    return sentence("; ".join([*parts, end]))


def _found(history: History) -> tuple[Block, ...]:
    marks = history.milestones
    years = SECONDS_PER_YEAR
    helium = (
        ("helium is half neutral", number(half_neutral(history), ".1f")),
        ("He II recombined through", through_text(history) or "not known from these outputs"),
    )
    events = Facts(
        (
            *(helium if history.helium is not None else ()),
            ("last scattering, tau = 1", number(marks.last_scattering_redshift, ".3f")),
            ("its time", number(marks.last_scattering_time_s / years, ",.0f", "years")),
            ("peak of the visibility", number(marks.visibility_peak_redshift, ".3f")),
            ("full width at half maximum", number(marks.visibility_width, ".3f")),
            ("half ionized, x_e = 0.5", number(marks.half_ionized_redshift, ".3f")),
            ("from x_e = 0.9 to 0.1", number(marks.transition_duration_s / years, ",.0f", "years")),
        )
    )
    return events, _samples(history), _channels(history)


def _samples(history: History) -> Table:
    columns = [
        ("x_e = n_e/n_H", history.free_electron_fraction, ".6e"),
        ("x_HI", history.neutral_hydrogen_fraction, ".6e"),
        ("T_m (K)", history.matter_temperature_k, ".6g"),
        ("T_r (K)", history.radiation_temperature_k, ".6g"),
        ("tau", history.optical_depth, ".4g"),
    ]
    if history.helium is not None:
        columns[2:2] = [
            ("He II/He", history.singly_ionized_helium_fraction, ".4e"),
            ("He III/He", history.doubly_ionized_helium_fraction, ".4e"),
        ]
    rows = tuple(
        (f"{history.redshift[k]:.2f}", *(f"{values[k]:{form}}" for _, values, form in columns))
        for k in sample_rows(history.redshift, "hydrogen" if history.helium is None else "both")
    )
    return Table("The history at some redshifts", ("z", *(head for head, _, _ in columns)), rows)


def _channels(history: History) -> Table:
    channels = history.channels
    shares = channels.cumulative_share[-1]
    order = np.argsort(-np.abs(shares), kind="stable").tolist()
    rows = [(channels.names[k], number(100.0 * shares[k], ".4f")) for k in order[:_CHANNELS]]
    if rest := order[_CHANNELS:]:
        rows.append((f"{len(rest)} more", number(100.0 * shares[rest].sum(), ".4f")))
    caption = f"How atoms reached the ground state, all down to z = {history.redshift[-1]:g}"
    return Table(caption, ("channel", "share (%)"), tuple(rows))


def _pictures(history: History, prefix: str) -> tuple[Picture, ...]:
    said = history_said(history)
    return tuple(
        picture(make, f"{prefix}-{key}", *said[key]) for key, make in figure_makers(history).items()
    )


def _trust(history: History) -> tuple[Block, ...]:
    how = history.diagnostics
    nodes = (
        f"{how.nodes} nodes, error of the rates off the nodes {how.interpolation_error:.1e}"
        if how.nodes
        else "direct, no interpolation"
    )
    rows = [
        ("steps", f"{how.steps} ({how.rejected_steps} rejected), {how.evaluations} evaluations"),
        ("reduced network", nodes),
        ("start", f"z = {how.handover_redshift:.2f}, {how.handover_departure:.1e} off Saha"),
        ("conservation of atoms", f"{how.conservation_error:.1e} (relative, largest)"),
        (
            "slowest relaxation",
            f"{how.slowest_relaxation_hubble:.3g} Hubble rates; quasi-steady needs far above 1",
        ),
    ]
    if how.frequency_step > 0.0:
        rows += [
            ("frequency step", f"{how.frequency_step:.2e} in ln nu"),
            ("error of x_e from it", f"{how.frequency_error:.1e} (estimate)"),
            ("photon number", f"balanced to {how.photon_number_error:.1e} in each step"),
            ("atom number", f"balanced to {how.atom_number_error:.1e} in each step"),
        ]
    if history.helium is not None:
        helium = history.helium
        rows += [
            ("helium: reduced networks", f"{helium.interpolation_error:.1e} off the nodes"),
            ("helium: conservation", f"{helium.conservation_error:.1e}"),
            ("charge and nuclei", f"closed to {helium.closure_error:.1e}"),
        ]
    return (Facts(tuple(rows)), *_line_tables(history), *helium_line_tables(history))


def _line_tables(history: History) -> tuple[Table, ...]:
    """Validity figures of the line with the largest share; the file holds those of all."""
    lines = history.lines
    if not lines.names:
        return ()
    line = int(np.argmax(np.max(np.abs(lines.share), axis=0)))
    head = ("z", *(said for _, said in _LINE_FIGURES))
    rows = tuple(
        (
            f"{history.redshift[k]:.2f}",
            *(f"{getattr(lines, name)[k, line]:.2e}" for name, _ in _LINE_FIGURES),
        )
        for k in sample_rows(history.redshift)
    )
    return (Table(f"Validity figures of {lines.names[line]}, the strongest line", head, rows),)
