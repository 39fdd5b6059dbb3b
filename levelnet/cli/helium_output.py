"""Helium of a history, for the summary and for scripts."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..arrays import FloatArray, IntArray
    from ..history.result import History

_FRACTIONS = (
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)
_COLUMNS = {
    "share": ("share", "{:.2e}"),
    "optical_depth": ("depth", "{:.2e}"),
    "escape_probability": ("escape", "{:.2e}"),
    "incoherent_fraction": ("incoherent", "{:.1e}"),
    "thick_width_absorption": ("thick width", "{:.1e}"),
    "continuum_in_line": ("H I in it", "{:.1e}"),
    "escape_change": ("escape change", "{:+.1e}"),
    "escape_error": ("x_e by that", "{:+.1e}"),
    "log_blue_side": ("ln u blue", "{:.3g}"),
    "log_red_side": ("ln u red", "{:.3g}"),
}
_HOW = (
    "handover_departure",
    "handover_ion_departure",
    "nodes",
    "interpolation_error",
    "conservation_error",
    "closure_error",
)


def helium_values(history: History, rows: list[int] | IntArray) -> dict[str, Any] | None:
    """Fractions at some outputs and how it went, under the names of the fields; None: inert."""
    if history.helium is None:
        return None
    from ..history.helium_through import recombined_through
    from ..history.samples import helium_rows

    found: dict[str, Any] = {"n_max": history.setup.helium.n_max}
    found |= {name: getattr(history, name)[rows] for name in _FRACTIONS}
    found |= {name: getattr(history.helium, name) for name in _HOW}
    lines, rows = history.helium.lines, helium_rows(history.redshift)
    figures = [one.name for one in dataclasses.fields(lines) if one.name != "names"]
    figures_of_lines = {
        name: {figure: getattr(lines, figure)[rows, k] for figure in figures}
        for k, name in enumerate(lines.names)
    }
    found["recombined_through"] = recombined_through(history)
    return found | {"line_redshift": history.redshift[rows], "line_figures": figures_of_lines}


def helium_fraction_columns(history: History) -> dict[str, FloatArray]:
    """Fractions of helium nuclei under their symbols; nothing where helium is inert."""
    if history.helium is None:
        return {}
    names = "x_HeI", "x_HeII", "x_HeIII"
    return {name: getattr(history, one) for name, one in zip(names, _FRACTIONS, strict=True)}


def helium_line_rows(history: History) -> list[tuple[str, ...]]:
    """Table of figures of the two lines with the largest shares; first rows name the columns.

    Nothing where helium is inert or no output lies where He I recombines.
    """
    from ..history.samples import helium_rows

    rows = helium_rows(history.redshift)
    if history.helium is None or not rows:
        return []
    lines = history.helium.lines
    table: list[tuple[str, ...]] = []
    for line in _largest(lines.share[rows])[:2]:
        table.append((lines.names[line], *(head for head, _ in _COLUMNS.values())))
        for k in rows:
            values = {name: float(getattr(lines, name)[k, line]) for name in _COLUMNS}
            # What is left of a field after the continuum is nothing long before it is no number.
            kept = {name: 0.0 if abs(one) < 1e-12 else one for name, one in values.items()}
            shown = [form.format(kept[name]) for name, (_, form) in _COLUMNS.items()]
            table.append((f"{history.redshift[k]:.2f}", *shown))
    return table


def _largest(share: FloatArray) -> Sequence[int]:
    order: Sequence[int] = (-abs(share).max(axis=0)).argsort(kind="stable").tolist()
    return order


def helium_text(history: History) -> str:
    """How it went, for one line of a summary; empty where helium is inert."""
    how = history.helium
    if how is None:
        return ""
    # NaN where the outputs do not reach it.
    import numpy as np

    ends = {"left": np.nan, "right": np.nan}
    half = float(np.interp(0.5, history.neutral_helium_fraction, history.redshift, **ends))
    return (
        ("" if np.isnan(half) else f"half neutral at z = {half:.0f}; ")
        + f"hand-over lags {how.handover_departure:.1e} and "
        f"{how.handover_ion_departure:.1e}; charge and nuclei to {how.closure_error:.0e}"
    )
