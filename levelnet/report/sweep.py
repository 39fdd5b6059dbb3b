"""The figure of a sweep: every history at once."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray
from ..studies.sweep_record import Sweep
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

FEW = 7
"""Cases that are told apart by colour and dash, with a legend."""
_LEGEND_PT = 6.5
_LONGEST_TEXT = 20  # letters of a value


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
        case that may be used, less 1, in per cent, at its redshifts. Few cases are named by their
        numbers and by what tells them apart; of more the colour runs through the cases in order.
    """
    drawn = drawn_cases(sweep)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.1)
        left, right = figure.subplots(1, 2)
        names = case_names(sweep, drawn, 72.0 * figure.get_figwidth())
        for place, (k, name) in enumerate(zip(drawn, names, strict=True)):
            look = _look(place, len(drawn))
            redshift, x_e = case_curve(sweep, k)
            left.plot(redshift, x_e, label=name, **look)
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
        elif len(drawn) <= FEW:
            handles, labels = left.get_legend_handles_labels()
            figure.legend(handles, labels, loc="outside upper center", ncols=3, fontsize=_LEGEND_PT)
    return figure


def short_keys(keys: Sequence[str]) -> tuple[str, ...]:
    """Swept keys by their last parts, or as they are where two would then be the same."""
    last = tuple(key.rpartition(".")[2] for key in keys)
    return last if len(set(last)) == len(last) else tuple(keys)


def case_names(sweep: Sweep, drawn: Sequence[int], width_pt: float) -> list[str]:
    """Names of cases in a legend: their numbers, and what tells them apart.

    Parameters
    ----------
    sweep : Sweep
        Any.
    drawn : sequence of int
        Positions of the cases that are shown.
    width_pt : float, points
        Of the figure. Where one name would be wider, all are numbers alone.
    """
    telling = [
        (key, column)
        for key, column in zip(short_keys(sweep.swept), sweep.columns, strict=True)
        if len({str(column[k]) for k in drawn}) > 1  # "nan" where it is left out
    ]
    long = [
        f"{k}: " + ", ".join(f"{key} {_value(column[k])}" for key, column in telling) for k in drawn
    ]
    room_pt = width_pt - 4.0 * _LEGEND_PT  # what is left beside the stroke of the legend
    if telling and max(style.text_width_pt(one, _LEGEND_PT) for one in long) < room_pt:
        return long
    return [f"case {k}" for k in drawn]


def _value(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.6g}" if np.isfinite(value) else "left out"
    text = " ".join(str(value).split()).replace("$", r"\$")
    return text if len(text) <= _LONGEST_TEXT else f"{text[:_LONGEST_TEXT]}..."


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
    if count <= FEW:
        return {"color": style.SERIES[place], "linestyle": style.DASHES[place]}
    import matplotlib

    shade = matplotlib.colormaps["cividis"](place / (count - 1))
    return {"color": shade, "linewidth": 0.7, "alpha": 0.8}


def _say_empty(axes: Axes) -> None:
    axes.text(0.5, 0.5, "no case gave a history", transform=axes.transAxes, ha="center")
