"""Validity figures of the lines as ``solve`` and ``show`` print them."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..history.result import History

_COLUMNS = {
    "share": ("share", "{:.2e}"),
    "optical_depth": ("depth", "{:.2e}"),
    "escape_probability": ("escape", "{:.2e}"),
    "absorption_chance": ("absorbed", "{:.1e}"),
    "source_change": ("source change", "{:.1e}"),
    "recoil_gain": ("recoil gain", "{:.1e}"),
    "log_blue_side": ("ln u blue", "{:.3g}"),
    "log_red_side": ("ln u red", "{:.3g}"),
}


def line_rows(history: History, rows: Sequence[int]) -> list[tuple[str, ...]]:
    """Table of figures of the line with the largest share; its first row names the columns.

    Parameters
    ----------
    history : History
        With at least one open line.
    rows : sequence of int
        Positions of the outputs, a row each.
    """
    lines = history.lines
    line = int(abs(lines.share).max(axis=0).argmax())
    table = [(lines.names[line], *(head for head, _ in _COLUMNS.values()))]
    for k in rows:
        shown = [form.format(getattr(lines, name)[k, line]) for name, (_, form) in _COLUMNS.items()]
        table.append((f"{history.redshift[k]:.2f}", *shown))
    return table


def line_values(history: History, rows: Sequence[int]) -> dict[str, Any]:
    """Every figure at the same outputs, by line and name."""
    lines = history.lines
    figures = [one.name for one in dataclasses.fields(lines) if one.name != "names"]
    return {
        name: {figure: getattr(lines, figure)[rows, k] for figure in figures}
        for k, name in enumerate(lines.names)
    }
