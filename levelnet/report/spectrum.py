"""Figure of the radiation field around the Lyman lines: its distortion at chosen redshifts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ..arrays import FloatArray
from ..atomic.levels import LevelSet, hydrogenic_levels
from ..atomic.physics import scales
from ..errors import InputError
from ..history.result import History, RadiationField
from ..history.setup import Setup
from . import style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_MOST_CURVES = len(style.DASHES)
_CURVES = 5
_EARLIEST, _LATEST = 1500.0, 700.0  # redshifts of the curves where none are asked for
_WINGS = 0.01  # half the width over frequency of the close view
_NAMES = (r"Ly $\alpha$", r"$\beta$", r"$\gamma$", r"$\delta$")
_MARKED_N = 10  # Lyman lines are marked up to this n
_LINES_MARKED = 8  # from there on the lines stand closer than the strokes that mark them


def spectrum_figure(history: History, redshifts: Sequence[float] | None = None) -> Figure:
    """Distortion of the radiation field at some redshifts: all of it, and around Lyman-alpha.

    Parameters
    ----------
    history : History
        A result that holds the field and the levels of "H I".
    redshifts : sequence of float or None, dimensionless
        As for :func:`draw_spectrum`; None spreads five over the spectra that are there.

    Returns
    -------
    matplotlib Figure
        u is the occupation number over that of the blackbody (dimensionless). Left: log10 u against
        photon energy in eV, the Lyman lines marked. Right: u over that in Lyman-alpha against the
        relative distance from it in frequency, to +-0.01.

    Raises
    ------
    InputError
        If the history holds no field, or a redshift lies outside its spectra.
    """
    if history.field is None:
        raise InputError("spectrum: this history holds no radiation field")
    hydrogen = history.levels("H I")
    assert isinstance(hydrogen, LevelSet)
    return field_figure(history.field, hydrogen, redshifts)


def field_figure(
    field: RadiationField, levels: LevelSet, redshifts: Sequence[float] | None = None
) -> Figure:
    """Distortion of a field at some redshifts; see :func:`spectrum_figure`.

    Parameters
    ----------
    field : RadiationField
        What to draw.
    levels : LevelSet
        Of hydrogen: their Lyman lines are marked.
    redshifts : sequence of float or None, dimensionless
        As for :func:`draw_spectrum`.
    """
    lines_ev, limit_ev = _lyman_energies_ev(levels)
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.2)
        left, right = figure.subplots(1, 2)
        draw_spectrum(left, field, redshifts)
        _mark_lines(left, lines_ev, limit_ev)
        draw_spectrum(right, field, redshifts, around_ev=float(lines_ev[0]))
        right.set_xlabel(r"$(\nu - \nu_\alpha) / \nu_\alpha$")
        right.set_ylabel(r"distortion over that in Ly $\alpha$")
        style.panel_letter(left, "a")
        style.panel_letter(right, "b")
        # Outside, since spectra fill either panel.
        figure.legend(*left.get_legend_handles_labels(), loc="outside upper center", ncols=5)
    return figure


def marked_levels(setup: Setup) -> LevelSet:
    """Levels of hydrogen whose Lyman lines a figure of a setup marks."""
    unit = scales(setup.physics).energy
    levels = hydrogenic_levels(min(setup.hydrogen.n_max, _MARKED_N), setup.hydrogen.energies)
    return replace(
        levels,
        energy_ev=levels.energy_ev * unit,
        ionization_energy_ev=levels.ionization_energy_ev * unit,
    )


def draw_spectrum(
    axes: Axes,
    field: RadiationField,
    redshifts: Sequence[float] | None = None,
    around_ev: float | None = None,
    half_width: float = _WINGS,
) -> None:
    """Draw the distortion u of a field at some redshifts, one labelled curve each.

    Over the whole field it is log10 u; around one photon energy, u over its value there.

    Parameters
    ----------
    axes : matplotlib Axes
        Where to; the legend is left to the caller.
    field : RadiationField
        What to draw.
    redshifts : sequence of float or None, dimensionless
        One to seven; the nearest spectra are drawn, each once. None spreads five over those from
        z = 1500 to 700, while hydrogen recombines, or over all if fewer than two lie there.
    around_ev : float or None, eV
        A photon energy within the field: the axis is the relative distance from it in frequency.
        None: the axis is photon energy, over the whole field.
    half_width : float, dimensionless
        How far the axis reaches to either side of `around_ev`, above 0 and below 1.

    Raises
    ------
    InputError
        If a redshift or `around_ev` lies outside the field, or a number is not allowed.
    """
    rows = _rows(field, redshifts)
    place, limits = _axis(field, around_ev, half_width)
    # One point beyond either end, so that curves run to the edge and the height fits what is seen.
    first = max(int(np.searchsorted(place, limits[0], "right")) - 1, 0)
    shown = slice(first, int(np.searchsorted(place, limits[1], "left")) + 1)
    for k, row in enumerate(rows):
        values = field.log_distortion[row, shown] / np.log(10.0)
        if around_ev is not None:
            middle = field.log_distortion[row, int(np.argmin(np.abs(place)))]
            values = np.exp(field.log_distortion[row, shown] - middle)
        axes.plot(
            place[shown],
            values,
            color=style.SERIES[k],
            linestyle=style.DASHES[k],
            linewidth=1.1,
            label=f"$z$ = {field.redshift[row]:.4g}",
        )
    axes.axhline(0.0, color=style.GREY, linewidth=0.5, zorder=0)
    axes.set_ylabel(r"distortion of the field, $\log_{10} u$")
    if around_ev is not None:
        axes.set_ylabel("distortion over that in the middle")
        axes.axvline(0.0, color=style.GREY, linewidth=0.8, linestyle=":", zorder=0)
        axes.locator_params(axis="x", nbins=5)  # more of these long numbers would touch
    axes.set_xlim(*limits)
    axes.set_xlabel("photon energy (eV)" if around_ev is None else r"$(\nu - \nu_0) / \nu_0$")


def _rows(field: RadiationField, redshifts: Sequence[float] | None) -> list[int]:
    """Indices of the spectra nearest to `redshifts`, each once, redshift descending."""
    count = len(field.redshift)
    if not count:
        raise InputError("spectrum: the field holds no spectra")
    if redshifts is None:
        inside = np.flatnonzero((field.redshift <= _EARLIEST) & (field.redshift >= _LATEST))
        first, last = (inside[0], inside[-1]) if len(inside) > 1 else (0, count - 1)
        return sorted(set(np.linspace(first, last, _CURVES).round().astype(int).tolist()))
    if not 1 <= len(redshifts) <= _MOST_CURVES:
        raise InputError(f"redshifts: {len(redshifts)} given, allowed are 1 to {_MOST_CURVES}")
    high, low = float(field.redshift[0]), float(field.redshift[-1])
    for one in redshifts:
        if not low <= one <= high:
            raise InputError(f"redshift = {one:g}: the spectra run from {low:g} to {high:g}")
    return sorted({int(np.argmin(np.abs(field.redshift - one))) for one in redshifts})


def _axis(
    field: RadiationField, around_ev: float | None, half_width: float
) -> tuple[FloatArray, tuple[float, float]]:
    """Position of every photon energy on the axis, and the limits of the axis."""
    energy = field.photon_energy_ev
    if len(energy) < 2:
        raise InputError(f"spectrum: a field at {len(energy)} photon energies is no curve")
    low, high = float(energy[0]), float(energy[-1])
    if around_ev is None:
        return energy, (low, high)
    if not low <= around_ev <= high:
        raise InputError(f"around_ev = {around_ev:g}: the field reaches from {low:g} to {high:g}")
    if not 0.0 < half_width < 1.0:
        raise InputError(f"half_width = {half_width:g}: must be above 0 and below 1")
    return (energy - around_ev) / around_ev, (-half_width, half_width)


def _lyman_energies_ev(levels: LevelSet) -> tuple[FloatArray, float]:
    """Photon energies of the Lyman lines, Lyman-alpha first, and of the Lyman limit, in eV."""
    upper = (levels.n > 1) & ((levels.l == 1) | levels.shell)
    return levels.energy_ev[upper], float(levels.ionization_energy_ev[0])


def _mark_lines(axes: Axes, lines_ev: FloatArray, limit_ev: float) -> None:
    """Dotted strokes at the lines and the limit, with names above the frame where there is room."""
    marks = [*lines_ev[:_LINES_MARKED].tolist(), limit_ev]
    names = list(_NAMES[: len(lines_ev)])
    names += [""] * (len(marks) - 1 - len(names)) + ["limit"]
    for place, name in zip(marks, names, strict=True):
        axes.axvline(place, color=style.GREY, linewidth=0.7, linestyle=":", zorder=0)
        axes.annotate(
            name,
            (place, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0.0, 2.5),
            textcoords="offset points",
            fontsize=6.5,
            color=style.GREY,
            horizontalalignment="center",
            verticalalignment="bottom",
        )
