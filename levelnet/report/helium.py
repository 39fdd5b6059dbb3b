"""Figures of helium: its fractions, departures of the levels of He I, and how its lines fare."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..arrays import BoolArray, FloatArray
from ..atomic.helium_levels import HeliumLevels
from ..errors import InputError
from ..history.helium_record import HeliumLineFigures
from ..history.result import History
from . import style
from .departures import output_row

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_PANELS_AT = (2600.0, 2300.0, 2000.0, 1800.0)
_LETTERS = "SPD"
# Fractions below are drawn no more; lines of smaller share at all redshifts neither.
_LEAST_FRACTION, _LEAST_SHARE = 1e-6, 1e-3
_LIMIT = 0.1  # per cent of x_e: where a history carries a warning


def helium_figure(history: History) -> Figure:
    """Fractions of helium, and the free electrons that they make.

    Parameters
    ----------
    history : History
        A result with levels of helium.

    Returns
    -------
    matplotlib Figure
        Left: x_HeI, x_HeII and x_HeIII of helium nuclei, logarithmic. Right: electrons per hydrogen
        nucleus while helium recombines, with what each stage alone would give.

    Raises
    ------
    InputError
        If helium is inert.
    """
    _of_helium(history)
    z, ratio = history.redshift, history.setup.cosmology.helium_ratio()
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 2.9)
        left, right = figure.subplots(1, 2)
        for values, label, colour, dash in (
            (history.neutral_helium_fraction, r"He I", style.BLUE, "-"),
            (history.singly_ionized_helium_fraction, r"He II", style.ORANGE, "--"),
            (history.doubly_ionized_helium_fraction, r"He III", style.GREEN, "-."),
        ):
            shown = np.where(values > _LEAST_FRACTION, values, np.nan)
            left.plot(z, shown, dash, color=colour, label=label)
        left.set_yscale("log")
        left.set_ylim(_LEAST_FRACTION, 3.0)
        left.set_ylabel("fraction of helium nuclei")
        left.legend(loc="lower right")
        right.plot(z, history.free_electron_fraction, "-", color=style.BLUE)
        for count, label in ((0, "He I"), (1, "He II"), (2, "He III")):
            right.axhline(1.0 + count * ratio, color=style.GREY, linewidth=0.6, linestyle=":")
            right.annotate(
                label, (0.98, 1.0 + count * ratio), xycoords=("axes fraction", "data"),
                xytext=(0, 2), textcoords="offset points", ha="right", fontsize=6.5,
                color=style.GREY,
            )  # fmt: skip
        right.set_ylim(0.95, 1.0 + 2.25 * ratio)
        right.set_ylabel(r"free electrons, $x_e = n_e/n_\mathrm{H}$")
        for axes, letter in ((left, "a"), (right, "b")):
            axes.set_xlim(*_shown_range(history))
            axes.set_xlabel(r"redshift $z$")
            style.panel_letter(axes, letter)
    return figure


def helium_departures_figure(
    history: History, redshifts: tuple[float, ...] | None = None
) -> Figure:
    """Curves of ln b against n for S, P and D terms of He I, one panel per redshift.

    Parameters
    ----------
    history : History
        A result with levels of helium.
    redshifts : tuple of float or None, dimensionless
        One to four; the nearest outputs are drawn. None: 2600, 2300, 2000 and 1800 as far as the
        outputs reach, or the highest output.

    Returns
    -------
    matplotlib Figure
        Singlets: full lines; triplets: broken ones. The ground state is left out.

    Raises
    ------
    InputError
        If helium is inert, or a redshift lies outside the outputs.
    """
    levels, rows = _of_helium(history), helium_panel_rows(history, redshifts)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 4.8 if len(rows) > 2 else 2.7)
        shape = (2, 2) if len(rows) > 2 else (1, len(rows))
        panels = figure.subplots(*shape, sharex=True, squeeze=False).ravel()
        for axes, row, letter in zip(panels, rows, "abcd", strict=False):
            _draw_departures(axes, levels, history.log_departures("He I")[row])
            style.panel_letter(axes, letter)
            where = f"He I, $z$ = {history.redshift[row]:.4g}, $T_m$ = " + (
                f"{history.matter_temperature_k[row]:.4g} K"
            )
            axes.set_title(where, fontsize=7.5, loc="right", pad=4.0)
        for axes in panels[len(rows) :]:
            axes.set_visible(False)
        figure.legend(*panels[0].get_legend_handles_labels(), loc="outside upper center", ncols=6)
        figure.supxlabel(r"principal quantum number $n$", fontsize=8.5)
        figure.supylabel(r"departure coefficient, $\ln b$", fontsize=8.5)
    return figure


def helium_panel_rows(history: History, redshifts: tuple[float, ...] | None = None) -> list[int]:
    """Indices of the outputs that :func:`helium_departures_figure` draws, each once, ascending."""
    high, low = float(history.redshift[0]), float(history.redshift[-1])
    if redshifts is None:
        redshifts = tuple(z for z in _PANELS_AT if low <= z <= high) or (high,)
    if not 1 <= len(redshifts) <= len(_PANELS_AT):
        raise InputError(f"redshifts: {len(redshifts)} given, allowed are 1 to {len(_PANELS_AT)}")
    return sorted({output_row(history, z) for z in redshifts})


def helium_lines_figure(history: History) -> Figure:
    """How the lines of He I to its ground state fare, and what their treatment leaves out.

    Parameters
    ----------
    history : History
        A result with levels of helium.

    Returns
    -------
    matplotlib Figure
        (a) Share of the net flow. (b) Escape probability; dotted: Sobolev's. (c) Absorption by
        hydrogen within the width that is thick to absorption. (d) Estimated change of x_e, in per
        cent, by escape with all that is known of it (full) and by feedback that is left out
        (dotted); grey: where a history carries no warning. Left out where that is not estimated.

    Raises
    ------
    InputError
        If helium is inert.
    """
    _of_helium(history)
    assert history.helium is not None
    lines = history.helium.lines
    with style.house_style():
        judged = lines_judged(history)
        figure = style.new_figure(style.TWO_COLUMNS_IN, 4.8 if judged else 2.9)
        panels = figure.subplots(2, 2, sharex=True).ravel() if judged else figure.subplots(1, 3)
        for k, line in enumerate(_shown_lines(history, lines)):
            _draw_line(panels, history.redshift, lines, line, style.SERIES[k % len(style.SERIES)])
        titles = (
            r"share of the net flow to $1\,^1S$",
            "escape probability",
            "depth of H I inside the line",
            "left out: change of $x_e$ (%)",
        )
        panels[1].set_yscale("log")
        panels[2].set_yscale("log")
        panels[2].axhline(1.0, color=style.GREY, linewidth=0.6, linestyle=":")
        if judged:
            panels[3].axhspan(-_LIMIT, _LIMIT, color=style.GREY, alpha=0.25, linewidth=0.0)
        seen = history.redshift[history.neutral_helium_fraction > _LEAST_FRACTION]
        low, high = _shown_range(history)
        high = float(seen[0]) if len(seen) and seen[0] > low else high
        for axes, title, letter in zip(panels, titles, "abcd", strict=False):
            axes.set_ylabel(title)
            axes.set_xlim(low, high)
            style.panel_letter(axes, letter)
        figure.legend(*panels[0].get_legend_handles_labels(), loc="outside upper center", ncols=5)
        figure.supxlabel(r"redshift $z$", fontsize=8.5)
    return figure


def _draw_line(
    panels: FloatArray, redshift: FloatArray, lines: HeliumLineFigures, line: int, colour: str
) -> None:
    depth = lines.optical_depth[:, line]
    sobolev = -np.expm1(-depth) / depth
    panels[0].plot(redshift, lines.share[:, line], color=colour, label=lines.names[line])
    panels[1].plot(redshift, lines.escape_probability[:, line], color=colour)
    panels[1].plot(redshift, sobolev, ":", color=colour, linewidth=1.0)
    panels[2].plot(redshift, lines.continuum_in_line[:, line], color=colour)
    if len(panels) > 3:
        panels[3].plot(redshift, 100.0 * lines.escape_error[:, line], color=colour)
        panels[3].plot(redshift, 100.0 * lines.feedback_error[:, line], ":", color=colour)


def lines_judged(history: History) -> bool:
    """Whether any line that is drawn has an estimate of what its treatment leaves out."""
    if history.helium is None:
        return False
    lines, (low, high) = history.helium.lines, _shown_range(history)
    inside = (history.redshift >= low) & (history.redshift <= high)
    shown = _shown_lines(history, lines)
    left_out = lines.escape_error[inside][:, shown], lines.feedback_error[inside][:, shown]
    return any(bool(np.isfinite(one).any()) for one in left_out)


def _of_helium(history: History) -> HeliumLevels:
    """Levels of He I; InputError where it has none."""
    if history.helium is None:
        raise InputError("helium.n_max = 0: helium is inert in this history; nothing to draw")
    levels = history.levels("He I")
    assert isinstance(levels, HeliumLevels)
    return levels


def _shown_range(history: History) -> tuple[float, float]:
    """From where helium is neutral up to where the outputs begin."""
    z = history.redshift
    left = z[history.singly_ionized_helium_fraction > _LEAST_FRACTION]
    low = float(left[-1]) if len(left) else float(z[-1])
    return (low, float(z[0])) if low < z[0] else (float(z[-1]), float(z[0]))


def _shown_lines(history: History, lines: HeliumLineFigures) -> list[int]:
    low, high = _shown_range(history)
    inside: BoolArray = (history.redshift >= low) & (history.redshift <= high)
    share = np.nan_to_num(lines.share[inside])
    # In equilibrium shares are those of rounding: each counts by the flow there.
    largest = np.max(np.abs(share[share.sum(axis=1) > 0.5]), axis=0, initial=0.0)
    return np.flatnonzero(largest > _LEAST_SHARE).tolist()[::-1]


def _draw_departures(axes: Axes, levels: HeliumLevels, log_departure: FloatArray) -> None:
    marker = "o" if levels.n_max <= 12 else None
    for spin, dash in ((0, "-"), (1, "--")):
        for l, colour in enumerate((style.BLUE, style.ORANGE, style.GREEN)):
            chosen = (levels.l == l) & (levels.spin == spin) & (levels.n > 1)
            if chosen.any():
                axes.plot(
                    levels.n[chosen], log_departure[chosen], dash, color=colour, marker=marker,
                    markersize=2.5, label=rf"$n\,^{2 * spin + 1}${_LETTERS[l]}",
                )  # fmt: skip
    axes.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
    axes.set_xscale("log")
    axes.set_xlim(1.9, max(levels.n_max, 3) * 1.05)
    ticks = [k for k in (2, 3, 5, 10, 20, 30, 50, 100) if k <= levels.n_max]
    axes.set_xticks(ticks, [str(k) for k in ticks])
    axes.set_xticks([], minor=True)
