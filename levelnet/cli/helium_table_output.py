"""Helium of a table of effective rates, and of a history made from one, for people and scripts."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from .output import row

if TYPE_CHECKING:
    from ..arrays import FloatArray
    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..network.reduced import KeptLevels


def helium_values(table: EffectiveTable) -> dict[str, Any] | None:
    """Collect what the summary of a table shows of helium; None: neutral and inert."""
    stage, ion, lines = table.helium, table.helium_ion, table.helium_lines
    if stage is None or lines is None:
        return None
    return {
        "n_max": table.setup.helium.n_max,
        "lines": table.setup.lines.helium or "sobolev",
        "line_names": list(lines.names),
        "helium_ion": table.setup.helium.helium_ion,
        "n_coefficients": stage.size + (0 if ion is None else ion.size),
        "n_escape_coefficients": lines.escape.size if lines.absorbs else 0,
    }


def helium_lines(table: EffectiveTable) -> list[str]:
    """Return the lines of the summary of a table that are about helium."""
    values = helium_values(table)
    if values is None:
        return []
    text = (
        f"n_max = {values['n_max']}, lines {values['lines']} ({len(values['line_names'])}), He II "
        f"{values['helium_ion']}, {values['n_coefficients']} coefficients"
    )
    if values["n_escape_coefficients"]:
        text += f", {values['n_escape_coefficients']} of the escape"
    return [row("helium", text)]


def kept_names(kept: KeptLevels) -> list[str]:
    """Names of kept levels, such as 2s; of terms of He I such as 2 3P."""
    from ..atomic.helium_levels import term_name
    from ..distilled.about import level_names

    if kept.spin is None:
        return level_names(kept)
    terms = zip(kept.n.tolist(), kept.l.tolist(), kept.spin.tolist(), strict=True)
    return [term_name(*term) for term in terms]


def fraction_values(history: FastHistory) -> dict[str, FloatArray]:
    """Fractions of helium under the names of their fields; nothing where it is inert."""
    helium = history.helium
    if helium is None:
        return {}
    return {name: getattr(helium, name) for name in helium.__slots__}


def fraction_columns(history: FastHistory) -> tuple[tuple[str, ...], list[FloatArray]]:
    """Heads and values of the columns of helium in a summary."""
    values = list(fraction_values(history).values())
    return ("x_HeI", "x_HeII", "x_HeIII")[: len(values)], values
