"""The figure of a sweep: every history at once."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray
from ..studies.sweep_record import Sweep
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_FEW = 7  # cases that are told apart by colour and dash, with a legend


def sweep_figure(sweep: Sweep) -> Figure:
    """x_e(z) of every case that gave one, and how far each is from the first.

    Parameters
    ----------
    sweep : Sweep
        Any; cases that failed are not drawn.

    Returns
    -------
    matplotlib Figure
        Left: x_e (dimensionless, logarithmic) against redshift. Right: x_e over that of the first
        case that may be used, less 1, in per cent, at its redshifts. Few cases are named; of more
        the colour runs through the cases in their order.
    """
    drawn = drawn_cases(sweep)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.1)
        left, right = figure.subplots(1, 2)
        for place, k in enumerate(drawn):
            look = _look(place, len(drawn))
            redshift, x_e = case_curve(sweep, k)
            left.plot(redshift, x_e, label=sweep.label(k), **look)
            first, difference = _difference(sweep, drawn[0], k)
            right.plot(first, difference, **look)
        left.set_yscale("log")
        left.set_ylabel(r"free electrons, $x_e = n_e/n_\mathrm{H}$")
        right.set_ylabel(r"$x_e\,/\,x_e(\mathrm{first}) - 1$ (%)")
        right.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
        for axes, letter in ((left, "a"), (right, "b")):
            axes.set_xlabel(r"redshift $z$")
            axes.margins(x=0.0)
            style.panel_letter(axes, letter)
        if not drawn:
            _say_empty(left)
        elif len(drawn) <= _FEW:
            handles, labels = left.get_legend_handles_labels()
            figure.legend(handles, labels, loc="outside upper center", ncols=2, fontsize=6.5)
    return figure


def drawn_cases(sweep: Sweep) -> list[int]:
    """Positions of the cases that have a history, the first being the first that is converged."""
    there = [k for k in range(len(sweep)) if len(case_curve(sweep, k)[0])]
    bad = set(sweep.not_ok)
    return sorted(there, key=lambda k: (k in bad, k))


def case_curve(sweep: Sweep, k: int) -> tuple[FloatArray, FloatArray]:
    """Redshift (descending) and x_e of one case, without what is not there."""
    redshift = sweep.redshift if sweep.redshift.ndim == 1 else sweep.redshift[k]
    x_e = sweep["free_electron_fraction"][k]
    there = np.isfinite(redshift) & (x_e > 0.0)  # false for NaN
    return redshift[there], x_e[there]


def _difference(sweep: Sweep, first: int, k: int) -> tuple[FloatArray, FloatArray]:
    """Redshift and difference in per cent; between outputs ln x_e is linear in ln(1 + z)."""
    redshift, base = case_curve(sweep, first)
    own, x_e = case_curve(sweep, k)
    if np.array_equal(own, redshift):
        return redshift, 100.0 * (x_e / base - 1.0)
    inside = (redshift >= own[-1]) & (redshift <= own[0])
    place = np.log1p(redshift[inside])
    values = np.exp(np.interp(place, np.log1p(own[::-1]), np.log(x_e[::-1])))
    return redshift[inside], 100.0 * (values / base[inside] - 1.0)


def _look(place: int, count: int) -> dict[str, Any]:
    """Colour and dash of a curve."""
    if count <= _FEW:
        return {"color": style.SERIES[place], "linestyle": style.DASHES[place]}
    import matplotlib

    shade = matplotlib.colormaps["cividis"](place / (count - 1))
    return {"color": shade, "linewidth": 0.7, "alpha": 0.8}


def _say_empty(axes: Axes) -> None:
    axes.text(0.5, 0.5, "no case gave a history", transform=axes.transAxes, ha="center")
