"""The figures of a study of truncations, and their files."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray, IntArray
from ..studies.convergence import truncation_error
from ..studies.level_records import LevelStudy
from ..studies.levels import carry_all, logarithm, n_held_out
from . import style
from .figures import check_place, save_drawn
from .level_checks import SMALLEST, check_figure, draw_rungs, resolve_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_REDSHIFTS = {
    "hydrogen": (1400.0, 1100.0, 800.0, 500.0, 200.0, 50.0),
    "helium": (2800.0, 2500.0, 2200.0, 2000.0, 1800.0, 1600.0),
}
_BEYOND = 4.0  # the law is drawn up to so many times the longest rung
_POINTS = 25
_LONGEST = 3  # rungs shown where the limit is shown from near
_SLOW = 850.0  # redshift below which truncation errors are large
_LOWEST_EDGE = 1e-2  # of a band in a logarithmic panel, over its curve


def save_level_figures(
    study: LevelStudy,
    folder: str | Path,
    force: bool = False,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write the figures of `study` as SVG and PDF into `folder`, made where it is missing.

    Parameters
    ----------
    study : LevelStudy
        Any study; the figure of l needs rungs of resolve_l_to.
    folder : str or Path
        Where to.
    force : bool
        Replace figures that exist.
    progress : callable or None
        ``progress(stage, fraction)``.

    Returns
    -------
    tuple of Path
        The files.

    Raises
    ------
    InputError
        If a file exists and `force` is not set, or `folder` is a file.
    """
    resolved = study.resolved is not None
    names = check_figures(folder, len(study.rungs.n_max), resolved, force)
    makers = {
        "levels": level_figure,
        "levels-check": check_figure,
        "levels-resolve": resolve_figure,
    }
    return save_drawn({name: makers[name](study) for name in names}, folder, progress)


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
    wanted = [z for z in _REDSHIFTS[study.atom] if low <= z <= high] or [float(low)]
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
    axes.set_xlabel(rf"highest level $n_\mathrm{{max}}$ of {study.atom}")
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
