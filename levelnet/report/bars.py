"""Horizontal bars of sizes that span many decades, with signs."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MOST_BARS = 10  # more would not be legible in half a page's height
_ROUNDING_POWER = -7  # what is smaller than this part of the largest may be rounding
_ROUNDING = 10.0**_ROUNDING_POWER


def draw_bars(
    axes: Axes, names: Sequence[str], values: Sequence[float], nothing: str = "all are 0"
) -> None:
    """Draw horizontal bars of sizes, the first on top.

    What is 0, NaN or at the level of rounding has words in place of a bar; without any bar the
    panel says `nothing`.
    """
    from matplotlib.ticker import NullFormatter

    sizes = np.nan_to_num(np.abs(np.array(values, dtype=float)))
    top = float(sizes.max(initial=0.0))
    if top == 0.0:
        axes.text(0.5, 0.5, nothing, transform=axes.transAxes, ha="center", va="center")
        axes.set_xticks([])
        axes.set_yticks([])
        return
    seen = sizes >= _ROUNDING * top
    # Two decades at least in all, or small differences look large.
    low = float(np.clip(0.3 * sizes[seen].min(), _ROUNDING * top, 0.025 * top))
    for place, value in enumerate(values):
        if seen[place]:
            _draw_bar(axes, place, value, low)
        text = _signed(value) if seen[place] else _in_words(value)
        axes.annotate(
            text,
            (max(float(sizes[place]), low), place),
            xytext=(2, 0),
            textcoords="offset points",
            va="center",
            fontsize=6.0,
        )
    axes.set_xscale("log")
    axes.xaxis.set_minor_formatter(NullFormatter())
    # Room for the numbers behind the bars.
    axes.set_xlim(low, top * (top / low) ** 0.45)
    axes.set_yticks(range(len(names)), names)
    axes.set_ylim(max(len(names), MOST_BARS // 2) - 0.4, -0.6)
    axes.tick_params(axis="y", length=0)


def _draw_bar(axes: Axes, place: int, value: float, low: float) -> None:
    negative = value < 0.0
    axes.barh(
        place,
        abs(value) - low,
        left=low,
        height=0.7,
        color="white" if negative else style.BLUE,
        edgecolor=style.ORANGE if negative else style.BLUE,
        hatch="//////" if negative else None,
        linewidth=0.8,
    )


def _in_words(value: float) -> str:
    """Say why there is no bar."""
    if value == 0.0:
        return "0"
    return (
        rf"below $10^{{{_ROUNDING_POWER}}}$ of the largest" if np.isfinite(value) else "undefined"
    )


def _signed(value: float) -> str:
    """Two digits and the sign, in the notation of papers."""
    if 1e-3 <= abs(value) < 1e3:
        return f"{value:+.2g}".replace("-", "\N{MINUS SIGN}")
    digits, _, power = f"{value:+.1e}".partition("e")
    return rf"${digits}\times10^{{{int(power)}}}$"


def sign_legend(figure: Figure) -> None:
    """Say which bars are positive and which negative."""
    from matplotlib.patches import Patch

    signs = [
        Patch(facecolor=style.BLUE, edgecolor=style.BLUE, label="positive"),
        Patch(facecolor="white", edgecolor=style.ORANGE, hatch="//////", label="negative"),
    ]
    figure.legend(handles=signs, loc="outside upper center", ncols=2)
