"""The chapter of a history."""

from __future__ import annotations

import math

import numpy as np

from ...constants import SECONDS_PER_YEAR
from ...history.result import History, RadiationField
from ...history.samples import sample_rows
from ..figures import make_figures
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .helium_parts import half_neutral, helium_line_tables, helium_said
from .wording import (
    asked_section,
    largest_distortion,
    most_through,
    number,
    one_line,
    origin_section,
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
    text = "; ".join([*parts, end])
    return text[0].upper() + text[1:] + "."


def _found(history: History) -> tuple[Block, ...]:
    marks = history.milestones
    years = SECONDS_PER_YEAR
    helium = (("helium is half neutral", number(half_neutral(history), ".1f")),)
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
    rows = [(channels.names[k], f"{100.0 * shares[k]:.4f}") for k in order[:_CHANNELS]]
    if rest := order[_CHANNELS:]:
        rows.append((f"{len(rest)} more", f"{100.0 * shares[rest].sum():.4f}"))
    caption = f"How atoms reached the ground state, all down to z = {history.redshift[-1]:g}"
    return Table(caption, ("channel", "share (%)"), tuple(rows))


def _pictures(history: History, prefix: str) -> tuple[Picture, ...]:
    said = _said(history)
    return tuple(
        picture(figure, f"{prefix}-{key}", *said[key])
        for key, figure in make_figures(history).items()
    )


def _said(history: History) -> dict[str, tuple[str, str]]:
    """Title and text alternative of each figure."""
    z, x_e, marks = history.redshift, history.free_electron_fraction, history.milestones
    matter = history.matter_temperature_k
    species = history.species[0]
    row = int(np.argmin(np.abs(z - _middle(marks.visibility_peak_redshift, z))))
    excited = species.log_departure[row, species.levels.n > 1]
    spectra = "" if history.field is None else _spectrum(history.field)
    return {
        "history": (
            "Ionization and temperatures",
            f"Left: free electrons per hydrogen nucleus fall from {x_e[0]:.4g} at z = {z[0]:g} to "
            f"{x_e[-1]:.3g} at z = {z[-1]:g}, and neutral hydrogen rises to "
            f"{history.neutral_hydrogen_fraction[-1]:.4g}, on a logarithmic axis. Right: matter "
            f"and radiation temperature against 1 + z; at z = {z[-1]:g} matter is at "
            f"{matter[-1]:.4g} K and radiation at {history.radiation_temperature_k[-1]:.4g} K.",
        ),
        "departure-map": (
            "Departure coefficients over n and l",
            f"Natural logarithm of the departure coefficient of every excited level at "
            f"z = {z[row]:.0f}, as a map: from {excited.min():.3g} to {excited.max():.3g}; 0 is "
            "Saha-Boltzmann equilibrium at the matter temperature.",
        ),
        "departure-curves": (
            "Departure coefficients against n",
            "The same logarithm against n for l = 0, 1 and 2 and for the mean over l, a panel for "
            "each of a few redshifts.",
        ),
        "channels": (
            "How atoms reach the ground state",
            "Shares of the channels at each redshift (left) and since the start (right). "
            f"{most_through(history.channels)}",
        ),
        "visibility": (
            "Visibility",
            f"The visibility function g against redshift; it peaks at "
            f"z = {number(marks.visibility_peak_redshift, '.1f')} with a full width at half "
            f"maximum of {number(marks.visibility_width, '.1f')}.",
        ),
        "spectrum": ("Spectrum of the radiation field", spectra),
        **({} if history.helium is None else helium_said(history)),
    }


def _middle(peak: float, redshift: np.ndarray) -> float:
    return peak if math.isfinite(peak) else float(redshift[len(redshift) // 2])


def _spectrum(field: RadiationField) -> str:
    return (
        "Occupation number of photons over that of the blackbody, against photon energy from half "
        "of Lyman-alpha to the Lyman limit, and close to Lyman-alpha, at a few redshifts. "
        f"{largest_distortion(field)}"
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
