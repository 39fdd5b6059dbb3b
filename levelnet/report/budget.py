"""The error budget on paper: the band of x_e(z), and what each group of rates puts into it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray
from ..studies.budget_record import ErrorBudget
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_CURVES = 6


def band_figure(budget: ErrorBudget) -> Figure:
    """Relative 1-sigma error of x_e(z), and the groups of rates it comes from.

    Parameters
    ----------
    budget : ErrorBudget
        With x_e at two redshifts or more.

    Returns
    -------
    matplotlib Figure
        Left: the band in per cent, and the signed contributions of the largest groups. Right: sizes
        of the same, logarithmic. Groups are ranked by their largest contribution; those beyond six
        are added in quadrature.
    """
    band = budget.band()
    redshift, sigma = band.redshift, 100.0 * band.sigma
    curves = _ranked_curves(budget.groups, band.contribution)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.4)
        left, right = figure.subplots(1, 2, sharex=True)
        left.fill_between(redshift, -sigma, sigma, color=style.GREY, alpha=0.25, linewidth=0.0)
        left.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
        left.plot([], [], color=style.GREY, alpha=0.4, linewidth=6.0, label=r"all, 1$\sigma$")
        right.plot(redshift, _seen(sigma), color=style.GREY, alpha=0.4, linewidth=4.0)
        for k, (name, values, signed) in enumerate(curves):
            look = {"color": style.SERIES[k], "linestyle": style.DASHES[k]}
            if signed:
                left.plot(redshift, 100.0 * values, label=name, **look)
            right.plot(redshift, _seen(100.0 * values), label=None if signed else name, **look)
        right.set_yscale("log")
        for axes, letter in ((left, "a"), (right, "b")):
            axes.set_xlim(float(redshift[-1]), float(redshift[0]))
            axes.set_xlabel(r"redshift $z$")
            style.panel_letter(axes, letter)
        left.set_ylabel(r"$\Delta x_e/x_e$ (per cent)")
        right.set_ylabel(r"|$\Delta x_e/x_e$| (per cent)")
        _decades(right)
        handles = [axes.get_legend_handles_labels() for axes in (left, right)]
        figure.legend(
            [one for some, _ in handles for one in some],
            [one for _, some in handles for one in some],
            loc="outside upper center",
            ncols=3,
        )
    return figure


def _ranked_curves(
    groups: Sequence[str], contribution: FloatArray
) -> list[tuple[str, FloatArray, bool]]:
    """Curves to draw: name, contribution, and whether it has a sign: a sum of squares has not."""
    size = np.max(np.abs(contribution), axis=0, initial=0.0)
    order = [int(k) for k in np.argsort(-size, kind="stable") if size[k] > 0.0]
    curves = [(groups[k], contribution[:, k], True) for k in order[:_CURVES]]
    rest = order[_CURVES:]
    if rest:
        together = np.sqrt(np.sum(contribution[:, rest] ** 2, axis=1))
        curves.append((f"{len(rest)} more", together, False))
    return curves


def _seen(values: FloatArray) -> FloatArray:
    """Sizes for a logarithmic axis: what is 0 leaves a gap."""
    return np.where(values != 0.0, np.abs(values), np.nan)


def _decades(axes: Axes) -> None:
    """Not more than six decades, so that what matters is not squeezed together."""
    low, high = axes.get_ylim()
    axes.set_ylim(max(low, 1e-6 * high), high)
