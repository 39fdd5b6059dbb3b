"""Figures of what a study of truncations rests on: the check of its law, the role of l."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray
from ..studies.level_records import LevelStudy
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

SMALLEST = 1e-10
"""Relative errors below are numerical noise."""

_SIGNED_DECADES = 1e-4  # where an axis with both signs becomes linear, over its largest value


def check_figure(study: LevelStudy) -> Figure:
    """What the shorter rungs foresee of the longest, and the exponent of the approach.

    Parameters
    ----------
    study : LevelStudy
        A study with rungs held out.

    Returns
    -------
    matplotlib Figure
        Left: foreseen over actual x_e of each rung held out, less 1, over its error bar. Right:
        exponent p of C (n_max + 1/2)^-p through the three longest rungs. Both dimensionless.
    """
    held = study.held_out
    assert held is not None
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 2.9)
        left, right = figure.subplots(1, 2)
        seen = held.foreseen.free_electron_fraction
        actual = study.rungs.free_electron_fraction[-len(held.n_max) :]
        misses = np.log(seen.value / actual) / seen.relative_error
        for k, (n, miss) in enumerate(zip(held.n_max.tolist(), misses, strict=True)):
            label = rf"$n_\mathrm{{max}}$ = {n}, held out"
            left.plot(
                study.redshift, miss, linestyle=style.DASHES[k], color=style.SERIES[k], label=label
            )
        left.axhspan(-1.0, 1.0, color=style.GREY, alpha=0.2, linewidth=0.0, label="error bar")
        size = max(2.0, 1.1 * float(np.max(np.abs(misses))))
        left.set_ylim(-size, size)
        left.set_ylabel(r"(foreseen $-$ actual) $\ln x_e$ / error bar")
        left.legend(loc="lower right", fontsize=6.5, labelspacing=0.25)
        exponent = study.limit.free_electron_fraction.exponent
        right.plot(study.redshift, exponent, color=style.BLUE)
        right.set_ylabel(r"exponent $p$ of $n_\mathrm{max}^{-p}$")
        for axes, letter in ((left, "a"), (right, "b")):
            axes.set_xlim(float(study.redshift[-1]), float(study.redshift[0]))
            axes.set_xlabel(r"redshift $z$")
            style.panel_letter(axes, letter)
    return figure


def resolve_figure(study: LevelStudy) -> Figure:
    """What statistical populations inside the higher shells do to x_e.

    Parameters
    ----------
    study : LevelStudy
        A study with rungs of resolve_l_to.

    Returns
    -------
    matplotlib Figure
        x_e(l resolved up to n)/x_e(every l resolved) - 1 over redshift, at the longest n_max, with
        its sign: logarithmic over four decades on both sides of zero, linear between.
    """
    resolved = study.resolved
    assert resolved is not None
    with style.house_style():
        figure = style.new_figure(style.ONE_COLUMN_IN, 3.0)
        axes = figure.subplots()
        whole = study.rungs.free_electron_fraction[-1]
        changes = resolved.free_electron_fraction / whole - 1.0
        labels = [rf"$n \leq {top}$" for top in resolved.resolve_l_to.tolist()]
        draw_rungs(axes, study.redshift, changes, labels)
        top = max(float(np.max(np.abs(changes))), SMALLEST)
        linear = 10.0 ** np.ceil(np.log10(_SIGNED_DECADES * top))  # at a tick
        axes.set_yscale("symlog", linthresh=linear)
        low, high = float(np.min(changes)), float(np.max(changes))
        axes.set_ylim(min(2.0 * low, -2.0 * linear), max(2.0 * high, 2.0 * linear))
        axes.axhline(0.0, color=style.GREY, linewidth=0.6, zorder=0)
        axes.set_ylabel(r"$\Delta x_e / x_e$ from whole shells")
        axes.legend(loc="best", fontsize=6.5, title=r"$l$ resolved", title_fontsize=6.5)
    return figure


def draw_rungs(axes: Axes, redshift: FloatArray, values: FloatArray, labels: list[str]) -> None:
    """One curve a rung, from light to dark."""
    from matplotlib import colormaps

    shades = colormaps["cividis"](np.linspace(0.88, 0.0, len(labels)))
    for k, label in enumerate(labels):
        dash: Any = style.DASHES[k % len(style.DASHES)]
        axes.plot(redshift, values[k], color=shades[k], linestyle=dash, linewidth=1.2, label=label)
    axes.set_xlim(float(redshift[-1]), float(redshift[0]))
    axes.set_xlabel(r"redshift $z$")
