"""What a page says of the figures of a history to somebody who does not see them."""

from __future__ import annotations

import math

import numpy as np

from ...arrays import FloatArray
from ...atomic.levels import LevelSet, level_name
from ...history.helium_record import HeliumFigures
from ...history.result import History
from ...history.samples import helium_rows
from ..departures import output_row, panel_rows
from ..helium import helium_panel_rows, lines_judged
from .helium_parts import half_neutral, strongest_lines
from .wording import most_through, spectrum_said

Said = dict[str, tuple[str, str]]
"""Title and text alternative of figures by their names."""


def history_said(history: History) -> Said:
    """Title and text alternative of each figure of a history."""
    row = output_row(history, None)  # the one that the map shows
    levels = history.levels("H I")
    excited = history.log_departures("H I")[row, levels.n > 1]
    said = {
        "history": ("Ionization and temperatures", _ionization(history)),
        "departure-map": (
            "Departure coefficients over n and l",
            f"Natural logarithm of the departure coefficient of every excited level at "
            f"z = {history.redshift[row]:.4g}, as a map: from {excited.min():.3g} to "
            f"{excited.max():.3g}; 0 is Saha-Boltzmann equilibrium at the matter temperature.",
        ),
        "departure-curves": (
            "Departure coefficients against n",
            "The same logarithm against n for l = 0, 1 and 2 and for the mean over l, a panel for "
            f"each redshift. {departures_text(history, 'H I', panel_rows(history))}",
        ),
        "channels": (
            "How atoms reach the ground state",
            "Shares of the channels at each redshift (a) and since the start (b). "
            f"{most_through(history.channels)}",
        ),
        "visibility": ("Visibility", _visibility(history)),
    }
    if history.field is not None:
        said["spectrum"] = spectrum_said(history.field)
    return said if history.helium is None else said | _helium_said(history, history.helium)


def _ionization(history: History) -> str:
    z, x_e, matter = history.redshift, history.free_electron_fraction, history.matter_temperature_k
    return (
        f"(a) Free electrons per hydrogen nucleus fall from {x_e[0]:.4g} at z = {z[0]:g} to "
        f"{x_e[-1]:.3g} at z = {z[-1]:g}, and neutral hydrogen rises to "
        f"{history.neutral_hydrogen_fraction[-1]:.4g}, on a logarithmic axis. (b) Matter and "
        f"radiation temperature against 1 + z; at z = {z[-1]:g} matter is at {matter[-1]:.4g} K "
        f"and radiation at {history.radiation_temperature_k[-1]:.4g} K."
    )


def _visibility(history: History) -> str:
    marks, z = history.milestones, history.redshift
    text = "The visibility function g against redshift; "
    if not math.isfinite(marks.visibility_peak_redshift):
        top = int(np.argmax(history.visibility))
        return (
            f"{text}the outputs, z = {z[0]:g} to {z[-1]:g}, do not reach its peak. It is largest "
            f"at z = {z[top]:.4g}, {history.visibility[top]:.3g} per Mpc."
        )
    text += f"it peaks at z = {marks.visibility_peak_redshift:.1f}"
    if math.isfinite(marks.visibility_width):
        return f"{text} with a full width at half maximum of {marks.visibility_width:.1f}."
    return f"{text}; the outputs do not reach half of that on both sides."


def departures_text(history: History, species: str, rows: list[int]) -> str:
    """Say the range of ln b of the excited levels at some outputs, with the levels at its ends."""
    levels, every = history.levels(species), history.log_departures(species)
    excited = np.flatnonzero(levels.n > 1)
    parts = []
    for row in rows:
        values: FloatArray = every[row, excited]
        if not np.isfinite(values).any():
            parts.append(f"at z = {history.redshift[row]:.4g} there are none")
            continue
        ends = [int(excited[np.nanargmin(values)]), int(excited[np.nanargmax(values)])]
        low, high = (
            f"{every[row, k]:.3g} ("
            + (
                level_name(int(levels.n[k]), int(levels.l[k]))
                if isinstance(levels, LevelSet)
                else levels.name(k)
            )
            + ")"
            for k in ends
        )
        parts.append(f"at z = {history.redshift[row]:.4g} from {low} to {high}")
    return f"Over all excited levels it runs {'; '.join(parts)}."


def _helium_said(history: History, figures: HeliumFigures) -> Said:
    z, twice = history.redshift, history.doubly_ionized_helium_fraction
    neutral, once = history.neutral_helium_fraction, history.singly_ionized_helium_fraction
    half = half_neutral(history)
    when = (
        f"Half of it is neutral at z = {half:.0f}."
        if math.isfinite(half)
        else "The outputs do not reach the redshift at which half of it is neutral."
    )
    rows = helium_panel_rows(history)
    left_out = (
        "Share of the net flow, escape probability, absorption by hydrogen and what the treatment "
        "leaves out, against redshift."
        if lines_judged(history)
        else "Share of the net flow, escape probability and absorption by hydrogen against "
        "redshift; what the treatment leaves out is not estimated over these outputs, and no panel "
        "shows it."
    )
    return {
        "helium": (
            "Ionization of helium",
            f"Fractions of the helium nuclei against redshift: at z = {z[0]:g} {twice[0]:.3g} are "
            f"He III, {once[0]:.3g} He II; at z = {z[-1]:g} {neutral[-1]:.4g} are He I. {when}",
        ),
        "helium-departures": (
            "Departure coefficients of He I",
            "Natural logarithm of the departure coefficients of singlet and triplet S, P and D "
            "terms against n, a panel for each redshift. "
            f"{departures_text(history, 'He I', rows)}",
        ),
        "helium-lines": (
            "Lines of He I to its ground state",
            f"{left_out}{_strongest_text(history, figures)}",
        ),
    }


def _strongest_text(history: History, figures: HeliumFigures) -> str:
    rows, lines = helium_rows(history.redshift), figures.lines
    if not rows:
        return ""
    best = strongest_lines(lines.share[rows])[0]
    row = rows[int(np.argmax(np.abs(lines.share[rows, best])))]
    return (
        f" The strongest is {lines.names[best]}, with {100.0 * lines.share[row, best]:.3g} % at "
        f"z = {history.redshift[row]:.0f}."
    )
