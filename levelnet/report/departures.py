"""Figures of departure coefficients: a map over (n, l) and curves against n."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray
from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..errors import InputError
from ..history.result import History
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.colors import Normalize
    from matplotlib.figure import Figure

_VECTOR_N_MAX = 60  # above, the cells of the map are drawn as pixels: 5e4 outlines choke a viewer
_N_PANELS = 4
_MOST_TICKS, _FEWEST_TICKS = 9, 3
_LETTERS = "spdf"


def _drawable(history: History, species: str) -> LevelSet:
    """Levels of a species with one level for each n and l."""
    levels = history.levels(species)
    if isinstance(levels, HeliumLevels):
        raise InputError(
            f'species "{species}": has two levels for each n and l; drawn here are "H I" and '
            '"He II", He I by levelnet.report.helium'
        )
    return levels


def departure_map_figure(
    history: History, redshift: float | None = None, species: str = "H I"
) -> Figure:
    """Map of ln b over (n, l) at one redshift, the ground state left out.

    Parameters
    ----------
    history : History
        Any result with populations of `species`.
    redshift : float or None, dimensionless
        The output redshift nearest to it is drawn; None takes the visibility peak.
    species : str
        "H I".

    Returns
    -------
    matplotlib Figure
        ln b (dimensionless) in colour, logarithmic in its size. One sign: cividis, yellow is far
        from equilibrium; both signs: a diverging map about 0. A whole shell has one colour for all
        its l; a line marks where they begin.

    Raises
    ------
    InputError
        If `redshift` lies outside the outputs, or the species is not in the history.
    """
    levels, row = _drawable(history, species), output_row(history, redshift)
    grid = _level_grid(levels, history.log_departures(species)[row])
    n_max = int(levels.n[-1])
    with style.house_style():
        figure = style.new_figure(style.ONE_COLUMN_IN, 3.0)
        axes = figure.subplots()
        norm, colours = _colour_scale(grid)
        mesh = axes.pcolormesh(
            np.arange(1.5, n_max + 1.0),
            np.arange(-0.5, n_max),
            np.ma.masked_invalid(grid),
            norm=norm,
            cmap=colours,
            rasterized=n_max > _VECTOR_N_MAX,
        )
        if np.any(levels.shell):
            _mark_shells(axes, int(levels.n[levels.shell].min()), n_max)
        bar = figure.colorbar(mesh, ax=axes, label=r"$\ln b_{nl}$", pad=0.03)
        ticks = _round_values(float(norm.vmin or 0.0), float(norm.vmax or 0.0))
        bar.set_ticks(ticks, labels=[_number(value) for value in ticks], minor=False)
        bar.minorticks_off()
        axes.set_xlabel(r"principal quantum number $n$")
        axes.set_ylabel(r"angular quantum number $l$")
        _whole_numbers(axes)
        axes.set_title(_conditions(history, row, species), fontsize=7.5)
    return figure


def _mark_shells(axes: Axes, lowest: int, n_max: int) -> None:
    """A line between levels with an l of their own and whole shells, and what is beyond it."""
    edge = lowest - 0.5
    axes.axvline(edge, color=style.BLACK, linewidth=0.9, linestyle="--")
    # In the empty corner above l = n - 1; on the side of the line that has room for it.
    left = edge > 0.5 * (n_max + 1.5)
    axes.annotate(
        f"whole shells\n($n \\geq {lowest}$)" + (r" $\rightarrow$" if left else ""),
        (edge, n_max - 1.0),
        xytext=(-3.0 if left else 3.0, 0.0),
        textcoords="offset points",
        horizontalalignment="right" if left else "left",
        verticalalignment="top",
        fontsize=6.5,
    )


def departure_curves_figure(
    history: History, redshifts: tuple[float, ...] | None = None, species: str = "H I"
) -> Figure:
    """Curves of ln b against n for l = 0, 1, 2 and for the mean over l, one panel per redshift.

    Parameters
    ----------
    history : History
        Any result with populations of `species`.
    redshifts : tuple of float or None, dimensionless
        Up to four; the nearest outputs are drawn. None spreads four over the history.
    species : str
        "H I".

    Returns
    -------
    matplotlib Figure
        The mean is ln of the mean of b over l with weights 2l + 1. Curves of one l end where
        levels have an l of their own; whole shells above, which have one b, are a series of theirs.

    Raises
    ------
    InputError
        If a redshift lies outside the outputs, or the species is not in the history.
    """
    levels, rows = _drawable(history, species), panel_rows(history, redshifts)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 4.6 if len(rows) > 2 else 2.5)
        shape = (2, 2) if len(rows) > 2 else (1, len(rows))
        panels = figure.subplots(*shape, sharex=True, squeeze=False).ravel()
        for axes, row, letter in zip(panels, rows, "abcd", strict=False):
            _draw_curves(axes, levels, history.log_departures(species)[row])
            style.panel_letter(axes, letter)
            axes.set_title(_conditions(history, row, species), fontsize=7.5, loc="right", pad=4.0)
        for axes in panels[len(rows) :]:
            axes.set_visible(False)
        panels[0].legend(loc="best")
        figure.supxlabel(r"principal quantum number $n$", fontsize=8.5)
        figure.supylabel(r"departure coefficient, $\ln b$", fontsize=8.5)
    return figure


def output_row(history: History, redshift: float | None) -> int:
    """Index of the output nearest to `redshift` (None: to the visibility peak)."""
    high, low = float(history.redshift[0]), float(history.redshift[-1])
    if redshift is None:
        peak = history.milestones.visibility_peak_redshift
        redshift = peak if low <= peak <= high else low
    if not low <= redshift <= high:
        raise InputError(f"redshift = {redshift:g}: the outputs run from {low:g} to {high:g}")
    return int(np.argmin(np.abs(history.redshift - redshift)))


def panel_rows(history: History, redshifts: tuple[float, ...] | None = None) -> list[int]:
    """Indices of the outputs that :func:`departure_curves_figure` draws, each once, ascending."""
    if redshifts is None:
        high, low = float(history.redshift[0]), float(history.redshift[-1])
        # The redshifts where the network changes its character, as far as the history has them.
        wanted = [z for z in (1400.0, 1100.0, 800.0, 200.0) if low <= z <= high]
        if len(wanted) < _N_PANELS:
            wanted = list(np.geomspace(1.0 + high, 1.0 + low, _N_PANELS) - 1.0)
        redshifts = tuple(float(np.clip(z, low, high)) for z in wanted)
    if not 1 <= len(redshifts) <= _N_PANELS:
        raise InputError(f"redshifts: {len(redshifts)} given, allowed are 1 to {_N_PANELS}")
    return sorted({output_row(history, z) for z in redshifts})


def _draw_curves(axes: Axes, levels: LevelSet, log_departure: FloatArray) -> None:
    n_max = int(levels.n[-1])
    marker = "o" if n_max <= 12 else None
    resolved = ~levels.shell
    n, mean = mean_over_l(levels, log_departure)
    shown = (n > 1) & np.isin(n, levels.n[resolved])
    axes.plot(n[shown], mean[shown], color=style.AMBER, lw=3.0, alpha=0.8, label="mean over $l$")
    for l in range(min(3, int(levels.l.max()) + 1)):
        chosen = (levels.l == l) & (levels.n > 1)
        axes.plot(
            levels.n[chosen],
            log_departure[chosen],
            color=(style.BLUE, style.ORANGE, style.GREEN)[l],
            linestyle=style.DASHES[l],
            marker=marker,
            markersize=2.5,
            label=f"$n${_LETTERS[l]}",
        )
    if not np.all(resolved):
        shell = levels.shell
        axes.plot(
            levels.n[shell], log_departure[shell], color=style.PURPLE, linestyle=(0, (1, 1)),
            linewidth=1.8, marker=marker if np.sum(shell) > 1 else "o", markersize=2.5,
            label="whole shells",
        )  # fmt: skip
    axes.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
    axes.set_xscale("log")
    axes.set_xlim(2.0, max(n_max, 3))
    ticks = [k for k in (2, 3, 5, 10, 20, 30, 50, 100, 200, 300, 500, 1000) if k <= n_max]
    axes.set_xticks(ticks, [str(k) for k in ticks])
    axes.set_xticks([], minor=True)


def mean_over_l(levels: LevelSet, log_departure: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Shells n and ln of the mean of b over l, weighted with 2l + 1; both of shape (n_shells,).

    Parameters
    ----------
    levels : LevelSet
        The levels, shape (n_levels,).
    log_departure : ndarray, shape (n_levels,), dimensionless
        ln b; may be far outside what exp can hold.
    """
    shells = np.unique(levels.n)
    mean = np.empty(len(shells))
    for k, n in enumerate(shells):
        chosen = levels.n == n
        weight = levels.statistical_weight[chosen]
        top = float(np.max(log_departure[chosen]))  # taken out, since b itself may overflow
        scaled = np.sum(weight * np.exp(log_departure[chosen] - top)) / np.sum(weight)
        mean[k] = top + np.log(scaled)
    return shells.astype(np.float64), mean


def _level_grid(levels: LevelSet, values: FloatArray) -> FloatArray:
    """Values on (l, n - 2) for n >= 2; NaN where no level is. A whole shell fills all its l."""
    n_max = int(levels.n[-1])
    grid = np.full((n_max, n_max - 1), np.nan)
    excited = (levels.n > 1) & ~levels.shell
    grid[levels.l[excited], levels.n[excited] - 2] = values[excited]
    for n, value in zip(levels.n[levels.shell], values[levels.shell], strict=True):
        grid[:n, n - 2] = value
    return grid


def _colour_scale(grid: FloatArray) -> tuple[Normalize, str]:
    """Scale that shows all decades of ln b: logarithmic away from 0, sign kept."""
    from matplotlib.colors import Normalize, SymLogNorm

    low, high = float(np.nanmin(grid)), float(np.nanmax(grid))
    size = max(abs(low), abs(high))
    if size == 0.0:
        return Normalize(-1.0, 1.0), "BrBG"
    # Linear below the smallest tenth of the levels, but not over more than five decades.
    linear = float(np.clip(np.nanquantile(np.abs(grid), 0.1), 1e-5 * size, size))
    if low < 0.0 < high:
        return SymLogNorm(linear, vmin=-size, vmax=size), "BrBG"
    return SymLogNorm(linear, vmin=low, vmax=high), "cividis" if high > 0.0 else "cividis_r"


def _round_values(low: float, high: float) -> list[float]:
    """Round values from `low` to `high`: as fine as leaves room for, each decade alike."""
    from matplotlib.ticker import MaxNLocator

    size = max(abs(low), abs(high))
    if size == 0.0:
        return [0.0]
    top = int(np.floor(np.log10(size)))
    for factors in ((1, 1.5, 2, 3, 4, 5, 7), (1, 2, 5), (1,)):
        sizes = [f * 10.0**k for k in range(top - 5, top + 1) for f in factors]
        values = sorted({sign * one for one in sizes for sign in (-1.0, 1.0)} | {0.0})
        inside = [one for one in values if low <= one <= high]
        # Close to 0 the scale is linear: ticks there would fall onto one another.
        kept = [one for one in inside if one == 0.0 or abs(one) > 0.02 * size or low * high > 0.0]
        if len(kept) <= _MOST_TICKS:
            break
    if len(kept) >= _FEWEST_TICKS:
        return kept
    # Less than a decade: evenly spaced values are finer than those above.
    even = MaxNLocator(5, min_n_ticks=_FEWEST_TICKS).tick_values(low, high)
    return [float(one) for one in even if low <= one <= high]


def _number(value: float) -> str:
    return f"{value:.6g}".replace("-", "\N{MINUS SIGN}")


def _whole_numbers(axes: Axes) -> None:
    from matplotlib.ticker import MaxNLocator

    axes.xaxis.set_major_locator(MaxNLocator(6, integer=True, min_n_ticks=1))
    axes.yaxis.set_major_locator(MaxNLocator(6, integer=True, min_n_ticks=1))


def _conditions(history: History, row: int, species: str) -> str:
    return (
        f"{species}, $z$ = {history.redshift[row]:.4g}, "
        f"$T_m$ = {history.matter_temperature_k[row]:.4g} K, "
        f"$x_e$ = {history.free_electron_fraction[row]:.3g}"
    )
