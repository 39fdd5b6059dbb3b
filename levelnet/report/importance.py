"""The map of a weighing: derivatives over (n, l) and over pairs of shells, one colour scale."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray, IntArray
from ..studies.groups import LevelMap, level_map, shell_map
from ..studies.weighing import Weighing
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.colors import SymLogNorm
    from matplotlib.figure import Figure

_DECADES = 5  # shown on each side of 0
_VECTOR_N_MAX = 40  # above, cells are drawn as pixels: 5e4 outlines choke a viewer
_TICKS = (0, 1, 2, 3, 5, 10, 20, 30, 50, 100, 200, 300, 500, 1000)
_FEW = 6  # up to this number each one is named
_NO_LEVEL = "#dcdcdc"


def importance_figure(weighing: Weighing, target: str, label: str) -> Figure:
    """Maps of the derivatives of one target.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.
    label : str
        What the target is called on the colour bar.

    Returns
    -------
    matplotlib Figure
        d ln J/d ln R (dimensionless) in colour, logarithmic in its size over five decades, teal
        positive, brown negative, white less, grey where there is nothing. Over (n, l): by the cross
        section of each level; by all dipole transitions out of it. Over shells: by all transitions
        from one to another.

    Raises
    ------
    InputError
        If the target was not weighed.
    """
    drawn = level_map(weighing, target)
    n, shells = shell_map(weighing, target)
    norm = _colour_scale(drawn.bound_free, drawn.out, shells)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 2.7)
        panels = figure.subplots(1, 3)
        figure.set_layout_engine("constrained", w_pad=0.06)
        _draw_levels(panels[0], drawn, drawn.bound_free, norm)
        _draw_levels(panels[1], drawn, drawn.out, norm)
        _draw_cells(panels[2], _edges(n), _edges(n), shells.T, norm)
        _ticks(panels[2], "y", n)
        panels[2].set_ylabel("lower shell $n$")
        if not len(weighing.upper):
            for axes in panels[1:]:
                axes.text(
                    0.5, 0.5, "no transitions", transform=axes.transAxes, ha="center", va="center"
                )
        for axes, letter, title in zip(
            panels,
            "abc",
            ("bound-free", "bound-bound, by level", "bound-bound, by shells"),
            strict=True,
        ):
            _ticks(axes, "x", n)
            axes.set_facecolor(_NO_LEVEL)
            style.panel_letter(axes, letter)
            axes.set_title(title, fontsize=7.5, loc="right", pad=4.0)
            axes.set_xlabel(r"upper shell $n$" if letter == "c" else r"principal number $n$")
        bar = figure.colorbar(panels[2].collections[0], ax=list(panels), pad=0.02, aspect=25)
        ticks = _decade_ticks(norm)
        bar.set_ticks(ticks, labels=[_power(value) for value in ticks], minor=False)
        bar.minorticks_off()
        bar.set_label(rf"$\partial\,\ln J\,/\,\partial\,\ln R$,  $J$ = {label}")
    return figure


def _draw_levels(axes: Axes, drawn: LevelMap, values: FloatArray, norm: SymLogNorm) -> None:
    """Cells over (n, l); whole shells stand in a strip of their own, over a gap, above all l."""
    whole = drawn.l < 0
    l = drawn.l[~whole]
    edges = _edges(l + 1)
    _draw_cells(axes, _edges(drawn.n), edges, values[:, ~whole].T, norm)
    axes.set_ylabel(r"angular number $l$")
    ticks = _round_numbers(l)
    places, names = [k + 1.0 for k in ticks], [str(k) for k in ticks]
    if whole.any():
        # A strip as high as a tenth of the panel, and a gap of half of that.
        gap = (edges[-1] / edges[0]) ** 0.05
        strip = edges[-1] * np.array([gap, gap**3])
        _draw_cells(axes, _edges(drawn.n), strip, values[:, whole].T, norm)
        places.append(float(np.sqrt(strip[0] * strip[1])))
        names.append("all")
    axes.set_yticks(places, names)
    axes.set_yticks([], minor=True)


def _draw_cells(
    axes: Axes, x: FloatArray, y: FloatArray, values: FloatArray, norm: SymLogNorm
) -> None:
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.pcolormesh(
        x,
        y,
        np.ma.masked_invalid(values),
        norm=norm,
        cmap="BrBG",
        rasterized=len(x) > _VECTOR_N_MAX,
    )


def _edges(numbers: IntArray) -> FloatArray:
    """Edges of the cells of whole numbers without gaps, in logarithmic axes."""
    return np.arange(numbers[0], numbers[-1] + 2) - 0.5


def _ticks(axes: Axes, which: str, numbers: IntArray) -> None:
    axis = axes.xaxis if which == "x" else axes.yaxis
    ticks = _round_numbers(numbers)
    axis.set_ticks(ticks, [str(k) for k in ticks])
    axis.set_ticks([], minor=True)


def _round_numbers(numbers: IntArray) -> list[int]:
    if numbers[-1] <= _FEW:
        return [int(k) for k in numbers]
    return [k for k in _TICKS if numbers[0] <= k <= numbers[-1]]


def _colour_scale(*maps: FloatArray) -> SymLogNorm:
    """Scale of decades on both sides of 0, wide enough for all maps."""
    from matplotlib.colors import SymLogNorm

    top = max(float(np.max(np.abs(one), where=np.isfinite(one), initial=0.0)) for one in maps)
    top = 10.0 ** np.ceil(np.log10(top)) if top > 0.0 else 1.0
    return SymLogNorm(top * 10.0**-_DECADES, linscale=1.0, vmin=-top, vmax=top)


def _decade_ticks(norm: SymLogNorm) -> list[float]:
    sizes = [float(norm.vmax or 1.0) * 10.0**-k for k in range(_DECADES + 1)]
    return [*(-one for one in sizes), 0.0, *reversed(sizes)]


def _power(value: float) -> str:
    if value == 0.0:
        return "0"
    sign = "+" if value > 0.0 else "-"
    return rf"${sign}10^{{{round(np.log10(abs(value)))}}}$"
