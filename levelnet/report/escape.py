"""The figures of a study of the escape of line photons, and their files."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray
from ..studies.escape_notes import asked_range
from ..studies.escape_records import EscapeStudy
from ..studies.escape_verdict import differences, switch_effects
from . import style
from .figures import check_place, save_drawn
from .plots import shares_figure
from .spectrum import field_figure, marked_levels

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_NAMES = ("escape", "escape-switches", "escape-channels")
_BEFORE = {"H I": "", "He I": "helium-"}
_SPECTRUM = "escape-spectrum"  # only of a reference that resolves the field
_SPECTRA_AT = (1500.0, 1300.0, 1100.0, 900.0, 700.0)
_LONG_NAME = 45  # letters of a name of which no three fit side by side
# Differences beyond are those of treatments that are no more than bounds.
_NEAR = {"H I": 0.1, "He I": 0.005}


def save_escape_figures(
    study: EscapeStudy,
    folder: str | Path,
    force: bool = False,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write the figures of `study` as SVG and PDF into `folder`, made where it is missing.

    Parameters
    ----------
    study : EscapeStudy
        Any study; the figure of spectra needs the field of the reference.
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
    studies = {one.species: one for one in (study, study.helium) if one is not None}
    names = check_escape_figures(folder, studies, study.field is not None, force)
    figures = treatment_figure, switch_figure, escape_channel_figure
    drawn = {
        f"{_BEFORE[species]}{name}": make(one)
        for species, one in studies.items()
        for name, make in zip(_NAMES, figures, strict=True)
    }
    if study.field is not None:
        drawn[_SPECTRUM] = escape_spectrum_figure(study)
    assert set(drawn) == set(names)
    return save_drawn(drawn, folder, progress)


def check_escape_figures(
    folder: str | Path, species: Iterable[str], with_field: bool, force: bool
) -> tuple[str, ...]:
    """Names of the figures of a study; InputError if `folder` cannot take them.

    Parameters
    ----------
    folder : str or Path
        Where to.
    species : iterable of str
        Whose lines it compares: "H I", "He I".
    with_field : bool
        Whether the study holds the field of its reference.
    force : bool
        Replace figures that exist.
    """
    names = [f"{_BEFORE[one]}{name}" for one in species for name in _NAMES]
    names += [_SPECTRUM] * with_field
    paths = tuple(Path(folder) / f"{name}.{end}" for name in names for end in style.FORMATS)
    check_place(folder, paths, force)
    return tuple(names)


def treatment_figure(study: EscapeStudy) -> Figure:
    """Each treatment without a field against the reference.

    Parameters
    ----------
    study : EscapeStudy
        Any study.

    Returns
    -------
    matplotlib Figure
        x_e over that of the reference, less 1, in per cent, against redshift. Left: all treatments.
        Right: those within 10 per cent, of He I 0.5; shaded: the numerical error of the reference.
    """
    names, values = study.variants.name, 100.0 * differences(study)
    places = study.treatments.tolist()
    low, high = asked_range(study)
    inside = (study.redshift >= low) & (study.redshift <= high)
    near = [k for k in places if np.max(np.abs(values[k, inside])) <= 100.0 * _NEAR[study.species]]
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.4)
        left, right = figure.subplots(1, 2)
        for axes, shown, letter in ((left, places, "a"), (right, near, "b")):
            looks = [places.index(k) for k in shown]
            _draw(axes, study, values[shown], [names[k] for k in shown], looks)
            style.panel_letter(axes, letter)
        bar = 100.0 * study.reference_error.free_electron_fraction
        right.fill_between(study.redshift, -bar, bar, color=style.GREY, alpha=0.35, linewidth=0.0)
        _fit(right, study, values[near] if near else values[[study.reference]])
        left.set_ylabel(r"$x_e\,/\,x_e(\mathrm{reference}) - 1$ (%)")
        columns = 3 if max(map(len, names)) < _LONG_NAME else 2
        figure.legend(*left.get_legend_handles_labels(), loc="outside upper center", ncols=columns)
    return figure


def switch_figure(study: EscapeStudy) -> Figure:
    """What adding each switch does to x_e, in the three ways to ask.

    Parameters
    ----------
    study : EscapeStudy
        Any study.

    Returns
    -------
    matplotlib Figure
        x_e over x_e without the switch, less 1, in per cent, against redshift. (a): added to none;
        (b): added to all others; (c): added to those before it in the order of the legend.
    """
    effects, names = switch_effects(study), study.switches.name
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 3.2)
        panels = figure.subplots(1, 3, sharey=True)
        curves = (effects.first, effects.last, effects.in_order)
        titles = ("added first", "added last", "added in order")
        for axes, values, title, letter in zip(panels, curves, titles, "abc", strict=True):
            _draw(axes, study, 100.0 * values, names, range(len(names)))
            axes.set_title(title, fontsize=8.0, pad=4.0)
            style.panel_letter(axes, letter)
        _fit(panels[0], study, 100.0 * np.vstack(curves))
        panels[0].set_ylabel(r"$\Delta x_e\,/\,x_e$ (%)")
        shown = [name.replace("_", " ") for name in names]
        handles, _ = panels[0].get_legend_handles_labels()
        figure.legend(handles, shown, loc="outside upper center", ncols=min(len(names), 6))
    return figure


def escape_channel_figure(study: EscapeStudy) -> Figure:
    """Shares of the channels of the reference; see :func:`levelnet.report.plots.shares_figure`."""
    if study.species == "He I":
        low, high = asked_range(study)
        inside = (study.redshift >= low) & (study.redshift <= high)
        rates = ("net_rate_per_s", "share", "cumulative_share")
        shown = {name: getattr(study.channels, name)[inside] for name in rates}
        channels = dataclasses.replace(study.channels, **shown)
        return shares_figure(channels, study.redshift[inside], np.nan, "$1\\,^1S$")
    seen = dict(
        zip(study.observable_names, study.variants.observable[study.reference], strict=True)
    )
    peak = float(seen.get("visibility_peak_redshift", np.nan))
    return shares_figure(study.channels, study.redshift, peak)


def escape_spectrum_figure(study: EscapeStudy) -> Figure:
    """The field of the reference around Lyman-alpha at a few redshifts.

    Parameters
    ----------
    study : EscapeStudy
        A study that holds the field of its reference.

    Returns
    -------
    matplotlib Figure
        As of :func:`levelnet.report.spectrum.field_figure`.
    """
    assert study.field is not None
    high, low = float(study.field.redshift[0]), float(study.field.redshift[-1])
    shown = [z for z in _SPECTRA_AT if low <= z <= high]
    return field_figure(study.field, marked_levels(study.setup), shown or None)


def _draw(
    axes: Axes,
    study: EscapeStudy,
    values: FloatArray,
    labels: Sequence[str],
    looks: Sequence[int],
) -> None:
    """One curve for each row of `values`; `looks` are the positions of colour and dash."""
    for curve, label, k in zip(values, labels, looks, strict=True):
        again, place = divmod(k, len(style.SERIES))
        dash: Any = style.DASHES[(place + again) % len(style.DASHES)]
        colour = style.SERIES[place]
        axes.plot(study.redshift, curve, color=colour, linestyle=dash, linewidth=1.2, label=label)
    axes.axhline(0.0, color=style.GREY, linewidth=0.6, zorder=0)
    low, high = asked_range(study)
    axes.set_xlim(low, high)
    axes.set_xlabel(r"redshift $z$")


def _fit(axes: Axes, study: EscapeStudy, values: FloatArray) -> None:
    """Height of the panel: that of the curves inside the range that is shown."""
    low, high = asked_range(study)
    inside = values[:, (study.redshift >= low) & (study.redshift <= high)]
    bottom, top = min(0.0, float(np.min(inside))), max(0.0, float(np.max(inside)))
    margin = 0.06 * (top - bottom) or 1.0
    axes.set_ylim(bottom - margin, top + margin)
