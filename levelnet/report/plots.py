"""The figures of one history; each function takes a History and returns a matplotlib Figure."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray
from ..distilled.fast import FastHistory
from ..history.result import Channels, History
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_SHORT = 5.0  # the largest over the smallest of an axis whose ticks are spaced evenly
_CURVES = 5  # channels drawn one by one; the rest is summed into one curve


def history_figure(history: History | FastHistory) -> Figure:
    """Ionized and neutral fraction, and both temperatures, against redshift.

    Parameters
    ----------
    history : History or FastHistory
        Any result.

    Returns
    -------
    matplotlib Figure
        Left: fractions of hydrogen nuclei (dimensionless, logarithmic). Right: T_m and T_r in K.
    """
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 2.9)
        left, right = figure.subplots(1, 2)
        _draw_fractions(left, history)
        _draw_temperatures(right, history)
        style.panel_letter(left, "a")
        style.panel_letter(right, "b")
        # Outside, since over a short range curves run anywhere.
        drawn = [axes.get_legend_handles_labels() for axes in (left, right)]
        handles, labels = ([*first, *second] for first, second in zip(*drawn, strict=True))
        figure.legend(handles, labels, loc="outside upper center")
    return figure


def _draw_fractions(axes: Axes, history: History | FastHistory) -> None:
    redshift = history.redshift
    for values, label, colour, dash in (
        (history.free_electron_fraction, r"free electrons, $x_e = n_e/n_\mathrm{H}$", "BLUE", "-"),
        (history.neutral_hydrogen_fraction, r"neutral hydrogen, $x_\mathrm{HI}$", "ORANGE", "--"),
    ):
        # Logarithms of what is not positive do not exist; a gap says so.
        shown = np.where(values > 0.0, values, np.nan)
        axes.plot(redshift, shown, dash, color=getattr(style, colour), label=label)
    axes.set_yscale("log")
    smallest = np.minimum(history.free_electron_fraction, history.neutral_hydrogen_fraction)
    # Far above recombination the neutral fraction falls without end.
    axes.set_ylim(max(0.3 * float(np.min(smallest)), 1e-8), 3.0)
    axes.set_xlim(float(redshift[-1]), float(redshift[0]))
    axes.set_xlabel(r"redshift $z$")
    axes.set_ylabel("fraction of hydrogen nuclei")
    if isinstance(history, History):
        _mark_redshift(axes, history.milestones.half_ionized_redshift, "$x_e = 0.5$")


def _draw_temperatures(axes: Axes, history: History | FastHistory) -> None:
    stretch = 1.0 + history.redshift
    axes.loglog(
        stretch, history.radiation_temperature_k, "--", color=style.AMBER, label=r"radiation $T_r$"
    )
    axes.loglog(stretch, history.matter_temperature_k, "-", color=style.BLUE, label=r"matter $T_m$")
    axes.set_xlim(float(stretch[-1]), float(stretch[0]))
    for which in ("x", "y"):
        _plain_numbers(axes, which)
    axes.set_xlabel(r"$1 + z$")
    axes.set_ylabel("temperature (K)")


def channel_figure(history: History) -> Figure:
    """Shares of the net recombinations by channel, at each redshift and cumulative.

    Parameters
    ----------
    history : History
        Any result. Beyond the five largest channels the rest is summed into one curve.

    Returns
    -------
    matplotlib Figure
        Left: share of the net rate at that redshift. Right: share of all since the start.
    """
    peak = history.milestones.visibility_peak_redshift
    return shares_figure(history.channels, history.redshift, peak)


def shares_figure(
    channels: Channels, redshift: FloatArray, peak: float, ground: str = "1s"
) -> Figure:
    """Shares of channels at each redshift, and cumulative.

    Parameters
    ----------
    channels : Channels
        Beyond the five largest the rest is summed into one curve.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending; what is drawn begins where shares are known.
    peak : float, dimensionless
        Where the visibility peaks; NaN marks nothing.
    ground : str
        The ground state in words.

    Returns
    -------
    matplotlib Figure
        As of :func:`channel_figure`.
    """
    known = np.isfinite(channels.share).all(axis=1)
    start = float(redshift[int(np.argmax(known))])
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.2)
        left, right = figure.subplots(1, 2)
        for axes, shares, letter in (
            (left, channels.share, "a"),
            (right, channels.cumulative_share, "b"),
        ):
            curves = _grouped(channels, shares)
            for k, (label, values) in enumerate(curves):
                axes.plot(
                    redshift,
                    values,
                    color=style.SERIES[k % len(style.SERIES)],
                    linestyle=style.DASHES[k % len(style.DASHES)],
                    label=label,
                )
            axes.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
            axes.set_xlim(float(redshift[-1]), start)
            axes.set_ylim(*_share_limits([np.nan_to_num(values) for _, values in curves]))
            axes.set_xlabel(r"redshift $z$")
            _mark_redshift(axes, peak, "peak of $g$", at_top=True)
            style.panel_letter(axes, letter)
        left.set_ylabel(f"share of the net rate to {ground} at $z$")
        right.set_ylabel(r"cumulative share down to $z$")
        # Outside, since with many lines no corner is free.
        figure.legend(*left.get_legend_handles_labels(), loc="outside upper center", ncols=3)
    return figure


def _grouped(channels: Channels, shares: FloatArray) -> list[tuple[str, FloatArray]]:
    """Curves to draw with their labels; small channels are summed to keep the legend short."""
    names = [_channel_label(name) for name in channels.names]
    if len(names) <= _CURVES + 1:
        return list(zip(names, shares.T, strict=True))
    # Ranked by the cumulative share, so that both panels draw the same curves.
    size = np.max(np.abs(np.nan_to_num(channels.cumulative_share)), axis=0)
    top = np.sort(np.argsort(-size, kind="stable")[:_CURVES])
    rest = np.setdiff1d(np.arange(len(names)), top)
    curves = [(names[k], shares[:, k]) for k in top]
    return [*curves, (f"other {len(rest)} lines", shares[:, rest].sum(axis=1))]


def _channel_label(name: str) -> str:
    greek = {"2p-1s": r" (Ly-$\alpha$)", "3p-1s": r" (Ly-$\beta$)", "4p-1s": r" (Ly-$\gamma$)"}
    return name + (" (two photons)" if name == "2s-1s" else greek.get(name, ""))


def _share_limits(curves: list[FloatArray]) -> tuple[float, float]:
    """Limits that show 0 to 1, and what lies outside where a net flow is reversed."""
    low, high = min(0.0, float(np.min(curves))), max(1.0, float(np.max(curves)))
    margin = 0.03 * (high - low)
    return low - margin, high + margin


def visibility_figure(history: History) -> Figure:
    """Visibility function and optical depth near the peak.

    Parameters
    ----------
    history : History
        Any result.

    Returns
    -------
    matplotlib Figure
        g(eta) in Mpc^-1 against redshift, with its peak, its full width at half maximum and z_*
        where the history reaches them. Dots are outputs, the curve between them interpolates ln g.
    """
    with style.house_style():
        figure = style.new_figure(style.ONE_COLUMN_IN, 2.8)
        axes = figure.subplots()
        redshift, curve = _smooth_visibility(history)
        axes.plot(redshift, curve, "-", color=style.BLUE)
        limits = _visible_range(redshift, curve)
        inside = (history.redshift >= limits[0]) & (history.redshift <= limits[1])
        axes.plot(history.redshift[inside], history.visibility[inside], ".", color=style.BLUE, ms=3)
        axes.set_xlim(*limits)
        axes.set_ylim(0.0, 1.3 * float(np.max(curve)) or 1.0)
        axes.set_xlabel(r"redshift $z$")
        axes.set_ylabel(r"visibility $g(\eta)$ (Mpc$^{-1}$)")
        _mark_visibility(axes, history, redshift, curve)
    return figure


def _smooth_visibility(history: History) -> tuple[FloatArray, FloatArray]:
    """Redshift (ascending) and g on a fine grid; ln g is nearly a parabola, so it is splined."""
    from scipy.interpolate import CubicSpline

    redshift, values = history.redshift[::-1], history.visibility[::-1]
    # Far above z_* the factor exp(-tau) makes ln g fall without end: nothing to see, and no spline.
    seen = np.flatnonzero(values > 1e-9 * np.max(values))
    if len(seen) < 4:
        return redshift, values
    inner = slice(int(seen[0]), int(seen[-1]) + 1)
    if not np.all(values[inner] > 0.0):
        return redshift, values
    fine = np.linspace(redshift[inner][0], redshift[inner][-1], 3000)
    return fine, np.exp(CubicSpline(redshift[inner], np.log(values[inner]))(fine))


def _visible_range(redshift: FloatArray, curve: FloatArray) -> tuple[float, float]:
    """Where the curve is worth a look: above 1 % of its peak, or everything without a peak."""
    above = np.flatnonzero(curve > 1e-2 * np.max(curve))
    if len(above) < 2:
        return float(redshift[0]), float(redshift[-1])
    return float(redshift[above[0]]), float(redshift[above[-1]])


def _half_maximum(redshift: FloatArray, curve: FloatArray) -> tuple[float, float]:
    """Redshifts left and right of the peak where the curve is half of it."""
    top = int(np.argmax(curve))
    half = 0.5 * float(curve[top])
    # np.interp wants an ascending first argument: left of the peak it is, right of it reversed.
    left = np.interp(half, curve[: top + 1], redshift[: top + 1])
    right = np.interp(half, curve[top:][::-1], redshift[top:][::-1])
    return float(left), float(right)


def _mark_visibility(axes: Axes, history: History, redshift: FloatArray, curve: FloatArray) -> None:
    marks = history.milestones
    lines = []
    top = int(np.argmax(curve))
    peak = float(curve[top])
    if np.isfinite(marks.visibility_peak_redshift):
        axes.axvline(
            marks.visibility_peak_redshift, color=style.GREY, linewidth=0.8, linestyle="--"
        )
        lines.append(f"peak $z$ = {marks.visibility_peak_redshift:.1f}")
    if np.isfinite(marks.visibility_width):
        ends = _half_maximum(redshift, curve)
        arrow = {"arrowstyle": "<->", "color": style.ORANGE, "shrinkA": 0.0, "shrinkB": 0.0}
        axes.annotate("", (ends[0], 0.5 * peak), (ends[1], 0.5 * peak), arrowprops=arrow)
        lines.append(f"FWHM $\\Delta z$ = {marks.visibility_width:.1f}")
    if np.isfinite(marks.last_scattering_redshift):
        lines.append(f"$\\tau = 1$ at $z_*$ = {marks.last_scattering_redshift:.1f}")
    # Above the curve and left of the peak, where nothing is drawn.
    axes.text(0.03, 0.97, "\n".join(lines), transform=axes.transAxes, va="top", fontsize=7.5)


def _mark_redshift(axes: Axes, redshift: float, label: str, at_top: bool = False) -> None:
    low, high = sorted(axes.get_xlim())
    if not low < redshift < high:  # also false for NaN
        return
    axes.axvline(redshift, color=style.GREY, linewidth=0.8, linestyle=":", zorder=0)
    axes.annotate(
        label,
        (redshift, 0.97 if at_top else 0.03),
        xycoords=("data", "axes fraction"),
        xytext=(2, 0),
        textcoords="offset points",
        rotation=90,
        fontsize=6.5,
        color=style.GREY,
        va="top" if at_top else "bottom",
    )


def _plain_numbers(axes: Axes, which: str) -> None:
    """Write 20, 100, 1000 on a logarithmic axis rather than powers of ten; x or, if short, y."""
    from matplotlib.ticker import (
        LogLocator,
        MaxNLocator,
        NullFormatter,
        NullLocator,
        StrMethodFormatter,
    )  # fmt: skip

    axis = axes.xaxis if which == "x" else axes.yaxis
    low, high = sorted(axis.get_view_interval())
    if high < _SHORT * low:  # hardly any of 1, 2 and 5 lies in it
        axis.set_major_locator(MaxNLocator(5, min_n_ticks=3))
        axis.set_minor_locator(NullLocator())
    elif which == "y":
        return
    else:
        axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axis.set_major_formatter(StrMethodFormatter("{x:g}"))
    axis.set_minor_formatter(NullFormatter())
