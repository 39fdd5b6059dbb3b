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


def check_figures(folder: str | Path, n_rungs: int, resolved: bool, force: bool) -> tuple[str, ...]:
    """Names of the figures of a study; InputError if `folder` cannot take them.

    Parameters
    ----------
    folder : str or Path
        Where to.
    n_rungs : int
        Rungs of n_max.
    resolved : bool
        Whether there are rungs of resolve_l_to.
    force : bool
        Replace figures that exist.
    """
    names = ["levels"]
    if n_held_out(n_rungs):
        names.append("levels-check")
    if resolved:
        names.append("levels-resolve")
    paths = tuple(Path(folder) / f"{name}.{end}" for name in names for end in style.FORMATS)
    check_place(folder, paths, force)
    return tuple(names)


def level_figure(study: LevelStudy) -> Figure:
    """Truncation error of x_e against n_max and against redshift.

    Parameters
    ----------
    study : LevelStudy
        Any study.

    Returns
    -------
    matplotlib Figure
        x_e(n_max)/x_e(all levels) - 1, dimensionless. (a): at a few redshifts, rungs as dots, the
        law beyond the longest dashed, with the band of its error bar. (b): towards all levels, in
        per cent, with the band of the error bar. (c): of each rung over redshift; shaded: the
        error bar of the limit.
    """
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 2.9)
        panels = figure.subplots(1, 3)
        _draw_by_level(panels[0], study)
        _draw_limit(panels[1], study)
        _draw_by_redshift(panels[2], study)
        for axes, letter in zip(panels, "abc", strict=True):
            style.panel_letter(axes, letter)
        ratio = r"x_e(n_\mathrm{max})\,/\,x_e(\infty) - 1"
        panels[0].set_ylabel(f"${ratio}$")
        panels[1].set_ylabel(f"${ratio}$ (%)")
        panels[2].set_ylabel(rf"$|\,{ratio}\,|$")
    return figure


def _shown_rows(study: LevelStudy) -> list[int]:
    low, high = study.redshift[-1], study.redshift[0]
    wanted = [z for z in _REDSHIFTS if low <= z <= high] or [float(low)]
    rows = {int(np.argmin(np.abs(study.redshift - z))) for z in wanted}
    return [k for k in sorted(rows) if study.limit.free_electron_fraction.fitted[k]]


def _beyond(study: LevelStudy, places: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Law of x_e at `places` from the longest rung on, less the limit, and its error bar there."""
    limit = study.limit.free_electron_fraction
    carried = [carry_all(study.rungs, study.noise, float(n)) for n in places[1:]]
    known = [one.free_electron_fraction for one in carried]
    last = study.rungs.free_electron_fraction[-1] / limit.value - 1.0
    curve = np.vstack([last, np.array([one.value for one in known]) / limit.value - 1.0])
    bar = np.vstack([np.zeros_like(last), [one.relative_error for one in known]])
    return curve, bar


def _truncation(study: LevelStudy, places: IntArray) -> tuple[FloatArray, FloatArray]:
    """Error of x_e cut at each of `places`, and its bar: as the verdict has them."""
    noise, logs = study.noise.free_electron_fraction, logarithm(study.rungs.free_electron_fraction)
    found = [truncation_error(study.rungs.n_max, logs, noise, n) for n in places.tolist()]
    return np.expm1([error for error, _ in found]), np.array([bar for _, bar in found])


def _draw_by_level(axes: Axes, study: LevelStudy) -> None:
    limit, rungs = study.limit.free_electron_fraction, study.rungs
    errors = rungs.free_electron_fraction / limit.value - 1.0
    longest = float(rungs.n_max[-1])
    beyond = np.unique(np.geomspace(longest, _BEYOND * longest, _POINTS).astype(int))
    curve, bar = _truncation(study, beyond)
    for j, k in enumerate(_shown_rows(study)):
        colour = style.SERIES[j]
        label = f"$z$ = {study.redshift[k]:.0f}"
        axes.plot(rungs.n_max, errors[:, k], "o-", color=colour, ms=3.0, label=label)
        axes.plot(beyond, curve[:, k], "--", color=colour, linewidth=1.0)
        # On a logarithmic axis a band that reaches zero would have no end.
        low = np.maximum(curve[:, k] - bar[:, k], _LOWEST_EDGE * np.abs(curve[:, k]))
        high = curve[:, k] + bar[:, k]
        axes.fill_between(beyond, low, high, color=colour, alpha=0.3, linewidth=0.0)
    axes.set_xscale("log")
    axes.set_yscale("log")
    _plain_ticks(axes, float(rungs.n_max[0]), _BEYOND * longest)
    shown = curve[-1, _shown_rows(study)]
    if shown.size:  # room for the legend
        axes.set_ylim(bottom=1e-4 * float(np.min(np.abs(shown))))
    axes.set_xlabel(r"highest level $n_\mathrm{max}$")
    if shown.size:
        axes.legend(loc="lower left", fontsize=6.5, labelspacing=0.25, handlelength=1.8)


def _draw_limit(axes: Axes, study: LevelStudy) -> None:
    """The longest rungs and the law over 1/n_max, down to 0 for all levels."""
    limit, rungs = study.limit.free_electron_fraction, study.rungs
    errors = 100.0 * (rungs.free_electron_fraction / limit.value - 1.0)
    inverse = np.linspace(1.0 / float(rungs.n_max[-1]), 0.0, _POINTS)
    with np.errstate(divide="ignore"):
        curve, bar = _beyond(study, 1.0 / inverse)
    # Of the curves of the other panel the last, where truncation matters most.
    shown = list(enumerate(_shown_rows(study)))
    late = [one for one in shown if study.redshift[one[1]] <= _SLOW]
    shown = late or shown[-1:]
    for (j, k), mark in zip(shown, "osD", strict=False):
        colour = style.SERIES[j]
        axes.plot(
            1.0 / rungs.n_max[-_LONGEST:], errors[-_LONGEST:, k], mark, color=colour, ms=3.5,
            label=f"$z$ = {study.redshift[k]:.0f}",
        )  # fmt: skip
        axes.plot(inverse, 100.0 * curve[:, k], "--", color=colour, linewidth=1.0)
        low, high = (100.0 * (curve[:, k] + sign * bar[:, k]) for sign in (-1.0, 1.0))
        axes.fill_between(inverse, low, high, color=colour, alpha=0.35, linewidth=0.0)
    axes.axhline(0.0, color=style.GREY, linewidth=0.6, zorder=0)
    # Room before infinity, so that its tick and the bands do not end in the corner.
    right = 1.08 / float(rungs.n_max[-_LONGEST:][0])
    axes.set_xlim(-0.06 * right, right)
    ticks = [*rungs.n_max[-_LONGEST:].tolist(), 3 * int(rungs.n_max[-1])]
    axes.set_xticks([0.0, *(1.0 / n for n in ticks)], [r"$\infty$", *(str(n) for n in ticks)])
    axes.set_xlabel(r"$n_\mathrm{max}$, drawn as $1/n_\mathrm{max}$")
    if shown:
        axes.legend(loc="upper left", fontsize=6.5)


def _plain_ticks(axes: Axes, low: float, high: float) -> None:
    """Ticks that read as numbers on a logarithmic axis of a decade or two."""
    from matplotlib.ticker import NullFormatter

    places = [n for n in (5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000) if low <= n <= high]
    axes.set_xticks(places, [str(n) for n in places])
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlim(0.9 * low, 1.05 * high)


def _draw_by_redshift(axes: Axes, study: LevelStudy) -> None:
    limit, rungs = study.limit.free_electron_fraction, study.rungs
    errors = np.abs(rungs.free_electron_fraction / limit.value - 1.0)
    shown = np.where(errors > SMALLEST, errors, np.nan)
    draw_rungs(axes, study.redshift, shown, [rf"{n}" for n in rungs.n_max.tolist()])
    axes.set_ylim(SMALLEST, max(3.0 * float(np.max(errors)), 10.0 * SMALLEST))
    axes.fill_between(
        study.redshift,
        SMALLEST / 10.0,
        limit.relative_error,
        color=style.GREY,
        alpha=0.35,
        linewidth=0.0,
        label="error bar",
    )
    axes.set_yscale("log")
    axes.legend(
        loc="lower left", fontsize=6.0, title=r"$n_\mathrm{max}$", title_fontsize=6.5,
        labelspacing=0.2, handlelength=2.2,
    )  # fmt: skip


def draw_rungs(axes: Axes, redshift: FloatArray, values: FloatArray, labels: list[str]) -> None:
    """One curve a rung, from light to dark."""
    from matplotlib import colormaps

    shades = colormaps["cividis"](np.linspace(0.88, 0.0, len(labels)))
    for k, label in enumerate(labels):
        dash: Any = style.DASHES[k % len(style.DASHES)]
        axes.plot(redshift, values[k], color=shades[k], linestyle=dash, linewidth=1.2, label=label)
    axes.set_xlim(float(redshift[-1]), float(redshift[0]))
    axes.set_xlabel(r"redshift $z$")


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
        axes.set_yscale("symlog", linthresh=_SIGNED_DECADES * top)
        low, high = float(np.min(changes)), float(np.max(changes))
        edge = 2.0 * _SIGNED_DECADES * top
        axes.set_ylim(min(2.0 * low, -edge), max(2.0 * high, edge))
        axes.axhline(0.0, color=style.GREY, linewidth=0.6, zorder=0)
        axes.set_ylabel(r"$\Delta x_e / x_e$ from whole shells")
        axes.legend(loc="best", fontsize=6.5, title=r"$l$ resolved", title_fontsize=6.5)
    return figure
