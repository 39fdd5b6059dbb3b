"""The figures of a table of effective rates: the rates themselves, and its measured errors."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray
from ..distilled.about import level_names, pair_names
from ..distilled.certificate import Certificate
from ..distilled.series import COLLISIONS_K
from ..distilled.table import EffectiveTable
from . import style
from .figures import check_place, save_drawn

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_RATIOS = (0.01, 0.1, 0.5, 1.0, 2.0, 4.0)
_LEVELS = 4  # drawn one by one; more would not be told apart
_POINTS = 300


def save_table_figures(
    table: EffectiveTable,
    folder: str | Path,
    force: bool = False,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write the figures of `table` as SVG and PDF into `folder`, made where it is missing.

    Parameters
    ----------
    table : EffectiveTable
        Any table; the figure of errors needs a certificate.
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
    names = ("rates",) if table.certificate is None else ("rates", "certificate")
    paths = tuple(Path(folder) / f"{name}.{end}" for name in names for end in style.FORMATS)
    check_place(folder, paths, force)
    figures = {"rates": rate_figure(table)}
    if table.certificate is not None:
        figures["certificate"] = certificate_figure(table.certificate, table.tolerance)
    return save_drawn(figures, folder, progress)


def rate_figure(table: EffectiveTable) -> Figure:
    """Effective rates against T_r.

    Parameters
    ----------
    table : EffectiveTable
        Any table.

    Returns
    -------
    matplotlib Figure
        Upper row: recombination into the first two kept levels (cm^3/s) at several T_m/T_r. Lower
        row: photoionization (1/s), and exchange downwards (1/s), with their Boltzmann factors kept
        out.
    """
    low, high = table.radiation_range_k
    # Ends a rounding inside the table.
    kelvin = np.geomspace(low * (1.0 + 1e-12), high * (1.0 - 1e-12), _POINTS)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 5.4)
        panels = figure.subplots(2, 2, sharex=True)
        for k, axes in enumerate(panels[0]):
            _draw_recombination(axes, table, kelvin, k)
        _draw_photoionization(panels[1, 0], table, kelvin)
        _draw_exchange(panels[1, 1], table, kelvin)
        for axes, letter in zip(panels.flat, "abcd", strict=True):
            axes.set_xscale("log")
            axes.set_yscale("log")
            axes.set_xlim(low, high)
            style.panel_letter(axes, letter)
        for axes in panels[1]:
            axes.set_xlabel(r"radiation temperature $T_r$ (K)")
        handles, labels = panels[0, 0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside upper center", ncols=len(labels))
    return figure


def _draw_recombination(axes: Axes, table: EffectiveTable, kelvin: FloatArray, level: int) -> None:
    for k, ratio in enumerate(_shown_ratios(table)):
        covered = kelvin * ratio <= np.maximum(COLLISIONS_K * table.scales.energy, kelvin)
        inside = kelvin[covered]
        values = table.effective_rates(inside, inside * ratio).recombination[:, level]
        axes.plot(
            inside,
            values,
            color=style.SERIES[k % len(style.SERIES)],
            linestyle=style.DASHES[k % len(style.DASHES)],
            label=f"$T_m/T_r$ = {ratio:g}",
        )
    name = level_names(table.kept)[level]
    axes.set_ylabel(rf"recombination into {name} (cm$^3$ s$^{{-1}}$)")


def _shown_ratios(table: EffectiveTable) -> list[float]:
    low, high = math.exp(table.ratio_low) * (1 - 1e-9), math.exp(table.ratio_high) * (1 + 1e-9)
    return [ratio for ratio in _RATIOS if low <= ratio <= high]


def _draw_photoionization(axes: Axes, table: EffectiveTable, kelvin: FloatArray) -> None:
    logs = table.effective_rates(kelvin, kelvin).log_photoionization
    depth_k = table.saha.ionization_k * table.scales.energy
    for k, name in enumerate(level_names(table.kept)[:_LEVELS]):
        values = np.exp(logs[:, k] + depth_k[k] / kelvin)
        axes.plot(kelvin, values, color=style.SERIES[k], linestyle=style.DASHES[k], label=name)
    axes.set_ylabel(r"photoionization $\times\, e^{I/kT_r}$ (s$^{-1}$)")
    axes.legend(loc="upper left")


def _draw_exchange(axes: Axes, table: EffectiveTable, kelvin: FloatArray) -> None:
    logs = table.effective_rates(kelvin, kelvin).log_exchange
    barrier_k = table.barrier_k * table.scales.energy
    for k, name in enumerate(pair_names(table)[:_LEVELS]):
        down = logs[:, table.upper[k], table.lower[k]]
        if not np.isfinite(down).all():
            continue
        lower, upper = name.split("-")
        axes.plot(
            kelvin,
            np.exp(down + barrier_k[k] / kelvin),
            color=style.SERIES[k],
            linestyle=style.DASHES[k],
            label=f"{upper} to {lower}",
        )
    axes.set_ylabel(r"exchange $\times\, e^{E_b/kT_r}$ (s$^{-1}$)")
    if axes.get_legend_handles_labels()[0]:
        axes.legend(loc="upper left")


def certificate_figure(certificate: Certificate, tolerance: float) -> Figure:
    """Measured errors of a table.

    Parameters
    ----------
    certificate : Certificate
        Of the table.
    tolerance : float, dimensionless
        Error that was asked of each logarithm; drawn as a line.

    Returns
    -------
    matplotlib Figure
        Left: largest and rms error of the logarithm of each rate (dimensionless). Right: relative
        error of x_e of distilled histories against the full network.
    """
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.2)
        left, right = figure.subplots(1, 2)
        _draw_rate_errors(left, certificate, tolerance)
        _draw_history_errors(right, certificate)
        style.panel_letter(left, "a")
        style.panel_letter(right, "b")
    return figure


def _draw_rate_errors(axes: Axes, certificate: Certificate, tolerance: float) -> None:
    place = np.arange(len(certificate.rate_names))
    for errors, label, mark, colour in (
        (certificate.largest_error, "largest", "o", style.ORANGE),
        (certificate.rms_error, "rms", "s", style.BLUE),
    ):
        shown = np.where(errors > 0.0, errors, np.nan)
        axes.plot(shown, place, mark, color=colour, ms=4, label=label)
    axes.axvline(tolerance, color=style.GREY, linestyle="--", linewidth=1.0, label="asked")
    axes.set_xscale("log")
    axes.set_yticks(place, certificate.rate_names)
    axes.set_ylim(len(place) - 0.4, -0.6)
    axes.set_xlabel("error of the natural logarithm")
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=3)


def _draw_history_errors(axes: Axes, certificate: Certificate) -> None:
    for k, (name, errors) in enumerate(
        zip(certificate.cosmologies, certificate.history_error, strict=True)
    ):
        label = "cosmology of the setup" if k == 0 else f"far cosmology {k}"
        if not np.isfinite(errors).any():
            label += " (no history)"
        shown = np.where(errors != 0.0, np.abs(errors), np.nan)
        axes.plot(
            certificate.redshift,
            shown,
            color=style.SERIES[k],
            linestyle=style.DASHES[k],
            label=label,
            gid=name,
        )
    axes.set_yscale("log")
    axes.set_xlim(float(certificate.redshift[-1]), float(certificate.redshift[0]))
    axes.set_xlabel(r"redshift $z$")
    axes.set_ylabel(r"relative error of $x_e$")
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=1)
